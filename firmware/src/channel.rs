//! Whether one converter can be believed: silent, over range, frozen.

use crate::io::Conversion;

/// Three conversions in a row are missed when none has come for four of the slowest (10 % below 860 a second, each
/// 1.29 ms), microseconds.
pub const SILENT_US: u64 = 5_200;
/// After power-up a converter may take so long to begin.
const START_US: u64 = 50_000;
/// Codes at or beyond this size stand at the end of the scale.
pub const SCALE_END: i16 = 32_760;
/// Equal codes in a row that are too many while the other sense moves. At a bench that is switched off the noise may be
/// as small as 0.3 codes about a whole code; then one conversion in ten differs, and 128 equal ones come once in hours.
const FROZEN_RUN: u16 = 128;
/// How far the other sense must move meanwhile, codes: beyond eight standard deviations of noise of 2 codes.
const FROZEN_MOVE: u16 = 24;
/// Noise is judged over this many conversions, about a second.
const NOISE_RUN: u32 = 860;

/// Watches one converter.
#[derive(Clone, Debug)]
pub struct ChannelWatch {
    last_us: Option<u64>,
    began_us: u64,
    code: i16,
    /// Equal codes in a row, and extremes of the *other* sense meanwhile.
    run: u16,
    other: Option<(i16, i16)>,
    over_range_run: u8,
    /// Sums over the present stretch of noise, about the code it began with.
    noise: Noise,
    /// Whether the last whole stretch had less noise than the floor.
    quiet: bool,
    silent: bool,
}

#[derive(Clone, Copy, Debug, Default)]
struct Noise {
    origin: i16,
    count: u32,
    sum: i64,
    squares: i64,
}

impl Noise {
    fn add(&mut self, code: i16) {
        if self.count == 0 {
            self.origin = code;
        }
        let off = i64::from(code) - i64::from(self.origin);
        self.count += 1;
        self.sum += off;
        self.squares += off * off;
    }

    /// Whether the standard deviation is below this many thousandths of a code: n sum(x^2) - (sum x)^2 against
    /// (n floor)^2, all in integers.
    fn is_below(&self, floor_millicodes: u16) -> bool {
        let count = i64::from(self.count);
        let spread = count * self.squares - self.sum * self.sum;
        let floor = count * i64::from(floor_millicodes);
        spread.saturating_mul(1_000_000) < floor.saturating_mul(floor)
    }
}

impl ChannelWatch {
    /// Begins to watch at this time.
    pub const fn new(now_us: u64) -> Self {
        Self {
            last_us: None,
            began_us: now_us,
            code: 0,
            run: 0,
            other: None,
            over_range_run: 0,
            noise: Noise { origin: 0, count: 0, sum: 0, squares: 0 },
            quiet: false,
            silent: false,
        }
    }

    /// Takes a conversion of this converter.
    pub fn take(&mut self, conversion: &Conversion, noise_floor_millicodes: u16) {
        self.last_us = Some(conversion.time_us);
        let code = conversion.code;
        if self.run > 0 && code == self.code {
            self.run = self.run.saturating_add(1);
        } else {
            self.run = 1;
            self.other = None;
        }
        self.code = code;
        self.over_range_run =
            if code.unsigned_abs() >= SCALE_END.unsigned_abs() { self.over_range_run.saturating_add(1) } else { 0 };
        self.noise.add(code);
        if self.noise.count >= NOISE_RUN {
            self.quiet = noise_floor_millicodes > 0 && self.noise.is_below(noise_floor_millicodes);
            self.noise = Noise::default();
        }
    }

    /// Takes a conversion of the other converter.
    pub fn take_other(&mut self, code: i16) {
        let (low, high) = self.other.unwrap_or((code, code));
        self.other = Some((low.min(code), high.max(code)));
    }

    /// Lets time pass.
    pub fn pass(&mut self, now_us: u64) {
        self.silent = match self.last_us {
            Some(last_us) => now_us.saturating_sub(last_us) > SILENT_US,
            None => now_us.saturating_sub(self.began_us) > START_US,
        };
    }

    /// The shell was away: what it missed is not the converter's silence.
    pub fn forgive(&mut self, now_us: u64) {
        if self.last_us.is_some() {
            self.last_us = Some(now_us);
        }
    }

    /// Conversions are missing.
    pub const fn is_silent(&self) -> bool {
        self.silent
    }

    /// Two conversions in a row stood at the end of the scale.
    pub const fn is_over_range(&self) -> bool {
        self.over_range_run >= 2
    }

    /// It repeats itself while the other moves, or shows less noise than such a converter ever does.
    pub fn is_frozen(&self) -> bool {
        let other_moved = self.other.is_some_and(|(low, high)| high.abs_diff(low) >= FROZEN_MOVE);
        self.quiet || (self.run >= FROZEN_RUN && other_moved)
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::io::Channel;

    fn feed(watch: &mut ChannelWatch, codes: impl Iterator<Item = (i16, i16)>) {
        for (index, (code, other)) in codes.enumerate() {
            let time_us = 1_000 + index as u64 * 1_163;
            watch.take(&Conversion { channel: Channel::Sense, time_us, code }, 50);
            watch.take_other(other);
            watch.pass(time_us);
        }
    }

    #[test]
    fn silence_is_three_missed_conversions() {
        let mut watch = ChannelWatch::new(0);
        watch.pass(50_001);
        assert!(watch.is_silent());
        feed(&mut watch, [(1, 1)].into_iter());
        assert!(!watch.is_silent());
        watch.pass(1_000 + SILENT_US);
        assert!(!watch.is_silent());
        watch.pass(1_001 + SILENT_US);
        assert!(watch.is_silent());
        watch.forgive(10_000);
        watch.pass(12_000);
        assert!(!watch.is_silent());
    }

    #[test]
    fn one_code_at_the_end_of_the_scale_is_a_spike_and_two_are_over_range() {
        let mut watch = ChannelWatch::new(0);
        feed(&mut watch, [(32_767, 0)].into_iter());
        assert!(!watch.is_over_range());
        feed(&mut watch, [(-32_768, 0), (32_767, 0)].into_iter());
        assert!(watch.is_over_range());
        feed(&mut watch, [(5, 0)].into_iter());
        assert!(!watch.is_over_range());
    }

    #[test]
    fn equal_codes_are_frozen_only_while_the_other_moves() {
        let mut watch = ChannelWatch::new(0);
        feed(&mut watch, (0..140).map(|index| (100, (index % 2) * 10)));
        assert!(!watch.is_frozen());
        feed(&mut watch, (0..140).map(|index| (100, index)));
        assert!(watch.is_frozen());
        feed(&mut watch, [(101, 0)].into_iter());
        assert!(!watch.is_frozen());
    }

    #[test]
    fn a_second_without_noise_is_frozen_and_a_quiet_converter_is_not() {
        let mut watch = ChannelWatch::new(0);
        feed(&mut watch, (0..860).map(|_| (8_000, 7_000)));
        assert!(watch.is_frozen());
        // One code in fifty differs: a standard deviation of 0.14 codes.
        feed(&mut watch, (0..860).map(|index| (if index % 50 == 0 { 8_001 } else { 8_000 }, 7_000)));
        assert!(!watch.is_frozen());
    }
}
