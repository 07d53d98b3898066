//! The sync lamp's sequence: the same code drives the lamp and decodes it.
//!
//! A maximum-length sequence of 511 chips from a nine-bit register with feedback x^9 + x^5 + 1: every run of nine chips
//! occurs once, so a few seconds of it tell where in the sequence they are.

/// Length of the sequence, chips.
pub const CHIPS: usize = 511;

/// The register behind the sequence.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Sequence {
    register: u16,
}

impl Default for Sequence {
    fn default() -> Self {
        Self::new()
    }
}

impl Sequence {
    /// At chip 0.
    pub const fn new() -> Self {
        Self { register: 0x1ff }
    }

    /// Whether the lamp is lit in the present chip; moves on to the next.
    pub const fn advance(&mut self) -> bool {
        let bit = ((self.register >> 8) ^ (self.register >> 4)) & 1;
        self.register = ((self.register << 1) | bit) & 0x1ff;
        bit == 1
    }
}

/// The whole sequence.
pub fn sequence() -> [bool; CHIPS] {
    let mut register = Sequence::new();
    core::array::from_fn(|_| register.advance())
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn every_run_of_nine_chips_occurs_once() {
        let chips = sequence();
        let mut seen = [false; 512];
        for start in 0..CHIPS {
            let run = (0..9).fold(0usize, |run, chip| run << 1 | usize::from(chips[(start + chip) % CHIPS]));
            assert!(!core::mem::replace(&mut seen[run], true), "run {run:09b} twice");
        }
        assert!(!seen[0]);
        assert_eq!(chips.iter().filter(|lit| **lit).count(), 256);
    }
}
