//! The high-voltage supply: set-point, ripple, slow wander, sag, and the bleed after the contactors release.

use std::f64::consts::TAU;

use rand::RngExt;

use super::draw::stream;

/// How the supply behaves.
#[derive(Clone, Debug, PartialEq)]
pub struct SupplySetup {
    /// Mains frequency, hertz.
    pub mains_hz: f64,
    /// Ripple at twice the mains frequency, peak to peak, as a fraction of the voltage.
    pub ripple_fraction: f64,
    /// Hum at the mains frequency, peak to peak, as a fraction of the voltage.
    pub hum_fraction: f64,
    /// Slow wander, as a fraction of the voltage.
    pub wander_fraction: f64,
    /// Time constant with which it follows its knob, seconds.
    pub follow_seconds: f64,
    /// Time constant of the bleed, seconds.
    pub bleed_seconds: f64,
}

impl Default for SupplySetup {
    fn default() -> Self {
        Self {
            mains_hz: 50.0,
            ripple_fraction: 8e-4,
            hum_fraction: 1e-4,
            wander_fraction: 1e-4,
            follow_seconds: 0.18,
            bleed_seconds: 0.15,
        }
    }
}

/// The supply.
#[derive(Clone, Debug)]
pub(super) struct Supply {
    setup: SupplySetup,
    /// Where the knob stands, volts.
    knob: f64,
    /// What the knob's ramp moves to, and how fast, volts per second.
    ramp: Option<(f64, f64)>,
    /// Voltage without ripple, volts.
    slow: f64,
    sag: Option<Sag>,
    phases: [f64; 4],
}

#[derive(Clone, Copy, Debug)]
struct Sag {
    fraction: f64,
    left_seconds: f64,
}

impl Supply {
    pub(super) fn new(setup: SupplySetup, seed: u64) -> Self {
        let mut rng = stream(seed, 1);
        let phases = std::array::from_fn(|_| rng.random_range(0.0..TAU));
        Self { setup, knob: 0.0, ramp: None, slow: 0.0, sag: None, phases }
    }

    pub(super) fn set(&mut self, volts: f64) {
        self.knob = volts;
        self.ramp = None;
    }

    pub(super) fn ramp(&mut self, volts: f64, volts_per_second: f64) {
        self.ramp = Some((volts, volts_per_second.abs()));
    }

    pub(super) fn sag(&mut self, fraction: f64, seconds: f64) {
        self.sag = Some(Sag { fraction, left_seconds: seconds });
    }

    /// An arc: the tube's charge is gone at once.
    pub(super) fn arc(&mut self) {
        self.slow *= 0.3;
    }

    /// The voltage drops or rises by a fraction at once.
    pub(super) fn jump(&mut self, fraction: f64) {
        self.slow *= 1.0 + fraction;
        self.knob *= 1.0 + fraction;
    }

    fn target(&self, on: bool) -> f64 {
        match (on, self.sag) {
            (false, _) => 0.0,
            (true, Some(sag)) => self.knob * (1.0 - sag.fraction),
            (true, None) => self.knob,
        }
    }

    /// Lets `seconds` pass with the primary contactors closed (`on`) or not.
    pub(super) fn pass(&mut self, seconds: f64, on: bool) {
        if let Some((to, rate)) = self.ramp {
            let step = rate * seconds;
            self.knob += (to - self.knob).clamp(-step, step);
            if self.knob == to {
                self.ramp = None;
            }
        }
        if let Some(sag) = &mut self.sag {
            sag.left_seconds -= seconds;
            if sag.left_seconds <= 0.0 {
                self.sag = None;
            }
        }
        let constant = if on { self.setup.follow_seconds } else { self.setup.bleed_seconds };
        let target = self.target(on);
        self.slow = target + (self.slow - target) * libm::exp(-seconds / constant);
    }

    /// The true voltage at this time, volts.
    pub(super) fn volts(&self, time_seconds: f64, on: bool) -> f64 {
        let sine = |index: usize, hertz: f64| libm::sin(TAU * hertz * time_seconds + self.phases[index]);
        let wander = 0.6 * sine(0, 1.0 / 47.0) + 0.4 * sine(1, 1.0 / 19.0);
        let mains = if on {
            0.5 * self.setup.ripple_fraction * sine(2, 2.0 * self.setup.mains_hz)
                + 0.5 * self.setup.hum_fraction * sine(3, self.setup.mains_hz)
        } else {
            0.0
        };
        self.slow * (1.0 + self.setup.wander_fraction * wander + mains)
    }

    /// Whether the voltage is where the knob wants it, to an eighth of a per cent, and nothing is done to it: what is
    /// left of a change is then below what marks a frame.
    pub(super) fn is_settled(&self, on: bool) -> bool {
        let off = (self.slow - self.knob).abs();
        on && self.ramp.is_none() && self.sag.is_none() && self.knob > 0.0 && off < 1.25e-3 * self.knob
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn it_follows_its_knob_and_bleeds_when_off() {
        let quiet =
            SupplySetup { ripple_fraction: 0.0, hum_fraction: 0.0, wander_fraction: 0.0, ..SupplySetup::default() };
        let mut supply = Supply::new(quiet, 1);
        supply.set(2_500.0);
        supply.pass(0.18, true);
        assert!((supply.volts(0.0, true) / 2_500.0 - (1.0 - (-1f64).exp())).abs() < 1e-12);
        assert!(!supply.is_settled(true));
        supply.pass(3.0, true);
        assert!(supply.is_settled(true));
        supply.pass(0.30, false);
        assert!((supply.volts(0.0, false) / 2_500.0 - (-2f64).exp()).abs() < 1e-4);
    }

    #[test]
    fn ripple_has_the_stated_size() {
        let setup = SupplySetup { hum_fraction: 0.0, wander_fraction: 0.0, ..SupplySetup::default() };
        let mut supply = Supply::new(setup, 2);
        supply.set(3_000.0);
        supply.pass(10.0, true);
        let volts: Vec<f64> = (0..2_000).map(|index| supply.volts(f64::from(index) * 1e-5, true)).collect();
        let spread = volts.iter().fold(f64::MIN, |a, b| a.max(*b)) - volts.iter().fold(f64::MAX, |a, b| a.min(*b));
        assert!((spread / (3_000.0 * 8e-4) - 1.0).abs() < 1e-3, "{spread}");
    }
}
