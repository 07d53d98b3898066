//! Permit relay and contactors: what the permit's square wave and the loops do to the supply's mains.
//!
//! The permit line feeds a charge pump that holds a relay; relay and loops together hold two contactors. Times follow
//! `hardware-notes/interlock.md`.

use rand_chacha::ChaCha8Rng;

use super::draws::between;

/// Decay of the charge pump's output, nanoseconds.
const PUMP_NS: f64 = 2.2e6;
/// What one edge adds, as a share of what is missing to the pump's open output.
const PUMP_SHARE: f64 = 0.45;
const PUMP_VOLTS: f64 = 16.0;
/// The relay picks up above, and lets go below, volts.
const PICK_UP_VOLTS: f64 = 8.4;
const RELEASE_VOLTS: f64 = 0.6;
/// Edges closer than this do not pass the low-pass before the pump.
const SHORTEST_NS: i64 = 150_000;
/// The relay's contacts follow its coil after this, nanoseconds.
const RELAY_NS: i64 = 4_000_000;

/// The relay that the permit's square wave holds.
#[derive(Clone, Debug, Default)]
pub struct PermitRelay {
    level: bool,
    edge_ns: i64,
    volts: f64,
    at_ns: i64,
    coil: bool,
    coil_ns: i64,
    closed: bool,
}

impl PermitRelay {
    /// The permit pin's level from `now_ns` on.
    pub(super) fn drive(&mut self, now_ns: i64, level: bool) {
        self.pass(now_ns);
        if level == self.level {
            return;
        }
        let apart_ns = now_ns - self.edge_ns;
        self.level = level;
        self.edge_ns = now_ns;
        if apart_ns >= SHORTEST_NS {
            self.volts += (PUMP_VOLTS - self.volts) * PUMP_SHARE;
        }
        self.settle(now_ns);
    }

    /// Lets time pass; tells whether the contacts are closed.
    pub(super) fn pass(&mut self, now_ns: i64) -> bool {
        if self.volts > 0.0 {
            self.volts *= libm::exp(-((now_ns - self.at_ns) as f64) / PUMP_NS);
            if self.volts < 1e-6 {
                self.volts = 0.0;
            }
        }
        self.at_ns = now_ns;
        self.settle(now_ns);
        if now_ns - self.coil_ns >= RELAY_NS {
            self.closed = self.coil;
        }
        self.closed
    }

    fn settle(&mut self, now_ns: i64) {
        let coil = if self.coil { self.volts > RELEASE_VOLTS } else { self.volts > PICK_UP_VOLTS };
        if coil != self.coil {
            self.coil = coil;
            self.coil_ns = now_ns;
        }
    }
}

/// Which contactors are welded.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub enum Weld {
    /// None.
    #[default]
    None,
    /// One: the other still takes the mains away.
    One,
    /// Both: the mains stays on.
    Both,
}

/// Two contactors in series.
#[derive(Clone, Debug)]
pub struct Contactors {
    pull_ns: i64,
    drop_ns: i64,
    driven: bool,
    since_ns: i64,
    closed: bool,
    weld: Weld,
}

impl Contactors {
    /// Released; how fast they are is drawn.
    pub(super) fn new(rng: &mut ChaCha8Rng) -> Self {
        Self {
            pull_ns: between(rng, 12e6, 22e6) as i64,
            drop_ns: between(rng, 12e6, 25e6) as i64,
            driven: false,
            since_ns: 0,
            closed: false,
            weld: Weld::None,
        }
    }

    /// Welds those that are closed now, or frees them.
    pub(super) fn set_weld(&mut self, weld: Weld) {
        self.weld = if self.closed { weld } else { Weld::None };
    }

    /// Lets time pass with the coils driven or not; tells whether the mirror contacts moved.
    pub(super) fn pass(&mut self, now_ns: i64, driven: bool) -> bool {
        let released = self.released();
        if driven != self.driven {
            self.driven = driven;
            self.since_ns = now_ns;
        }
        let wait_ns = if driven { self.pull_ns } else { self.drop_ns };
        if now_ns - self.since_ns >= wait_ns {
            self.closed = driven || self.weld == Weld::Both;
        }
        released != self.released()
    }

    /// Whether mains reaches the supply.
    pub const fn mains_on(&self) -> bool {
        self.closed
    }

    /// Whether both mirror contacts are closed.
    pub const fn released(&self) -> bool {
        !self.closed && matches!(self.weld, Weld::None)
    }
}

#[cfg(test)]
mod tests {
    use rand::SeedableRng;

    use super::*;

    /// Drives edges every `apart_us` for 0.2 s; whether the relay ends closed.
    fn closed_after(relay: &mut PermitRelay, from_ns: i64, apart_us: i64) -> bool {
        let mut level = false;
        let mut now_ns = from_ns;
        while now_ns < from_ns + 200_000_000 {
            now_ns += apart_us * 1_000;
            level = !level;
            relay.drive(now_ns, level);
        }
        relay.closed
    }

    /// `hardware-notes/interlock.md`: 1 kHz picks up, slow and very fast waves and steady levels do not.
    #[test]
    fn only_the_permits_own_frequency_picks_up() {
        for (apart_us, expected) in [(500, true), (333, true), (5_000, false), (10_000, false), (100, false)] {
            assert_eq!(closed_after(&mut PermitRelay::default(), 0, apart_us), expected, "{apart_us}");
        }
        let mut relay = PermitRelay::default();
        relay.drive(1, true);
        assert!(!(0..1_000).any(|ms| relay.pass(ms * 1_000_000)));
    }

    #[test]
    fn it_lets_go_within_16_milliseconds_of_the_last_edge() {
        let mut relay = PermitRelay::default();
        assert!(closed_after(&mut relay, 0, 500));
        let last_ns = relay.edge_ns;
        let released_ns = (0..100).map(|step| last_ns + step * 500_000).find(|now| !relay.pass(*now)).unwrap();
        assert!((5_000_000..=16_000_000).contains(&(released_ns - last_ns)), "{}", released_ns - last_ns);
    }

    #[test]
    fn contactors_follow_late_and_welded_ones_do_not() {
        let mut contactors = Contactors::new(&mut ChaCha8Rng::seed_from_u64(1));
        contactors.pass(0, true);
        contactors.pass(5_000_000, true);
        assert!(contactors.released() && !contactors.mains_on());
        contactors.pass(30_000_000, true);
        assert!(!contactors.released() && contactors.mains_on());
        contactors.set_weld(Weld::One);
        contactors.pass(40_000_000, false);
        contactors.pass(70_000_000, false);
        assert!(!contactors.released() && !contactors.mains_on());
        contactors.set_weld(Weld::None);
        assert!(contactors.released());
        // What is open cannot weld.
        contactors.set_weld(Weld::Both);
        assert!(contactors.released());
        contactors.pass(80_000_000, true);
        contactors.pass(120_000_000, true);
        contactors.set_weld(Weld::Both);
        contactors.pass(130_000_000, false);
        contactors.pass(230_000_000, false);
        assert!(!contactors.released() && contactors.mains_on());
    }
}
