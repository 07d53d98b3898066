//! The high-voltage supply: set-point, slew, ripple, sag, wander, start-up, and decay when it is switched off.
//!
//! It is stepped on a fixed grid; between two grid points its voltage *is* the straight line between them, so that every
//! mean over time has an exact value.

use rand_chacha::ChaCha8Rng;

use super::draws::{Part, between, normal, stream};

/// The grid, nanoseconds.
pub const STEP_NS: i64 = 100_000;
const STEP_S: f64 = STEP_NS as f64 * 1e-9;
/// Grid steps between two draws of the wander: 10 ms.
const WANDER_STEPS: u32 = 100;
/// Time constant of the regulator, seconds.
const REGULATOR_S: f64 = 0.002;
/// From mains to the first rise of the voltage, seconds.
const START_UP_S: f64 = 0.2;
/// The regulator holds down to this share of the nominal mains.
const HOLDS_DOWN_TO: f64 = 0.85;
/// Change of the output with the mains while the regulator holds.
const LINE_REGULATION: f64 = 0.002;
/// Edges of a sag, seconds.
const SAG_EDGE_S: f64 = 0.005;
/// Away from its set-point by more than this fraction, the voltage counts as disturbed.
const SETTLED: f64 = 0.0005;

/// How the supply behaves.
#[derive(Clone, Debug, PartialEq)]
pub struct SupplySetup {
    /// Mains frequency, hertz.
    pub mains_hz: f64,
    /// Ripple at twice the mains frequency, peak to peak, as a fraction of the voltage.
    pub ripple_fraction: f64,
    /// Hum at the mains frequency, peak to peak, as a fraction of the voltage.
    pub hum_fraction: f64,
    /// Slow wander, as a fraction of the voltage (standard deviation).
    pub wander_fraction: f64,
    /// Its correlation time, seconds.
    pub wander_seconds: f64,
    /// Change while warming up, as a fraction of the voltage, over some ten minutes.
    pub warm_up_fraction: f64,
    /// Fastest rise, volts per second.
    pub slew_volts_per_second: f64,
    /// Time constant of the decay through bleeder and strings, seconds.
    pub bleed_seconds: f64,
}

impl Default for SupplySetup {
    fn default() -> Self {
        Self {
            mains_hz: 50.0,
            ripple_fraction: 6e-4,
            hum_fraction: 1.5e-4,
            wander_fraction: 1e-4,
            wander_seconds: 30.0,
            warm_up_fraction: 2e-4,
            slew_volts_per_second: 2_000.0,
            bleed_seconds: 1.0,
        }
    }
}

/// A planted drop of the output.
#[derive(Clone, Copy, Debug)]
struct Sag {
    fraction: f64,
    from_ns: i64,
    until_ns: i64,
}

/// A set-point on its way.
#[derive(Clone, Copy, Debug)]
struct Ramp {
    from_volts: f64,
    to_volts: f64,
    from_ns: i64,
    until_ns: i64,
}

/// The supply.
#[derive(Clone, Debug)]
pub struct Supply {
    setup: SupplySetup,
    rng: ChaCha8Rng,
    set_volts: f64,
    ramp: Option<Ramp>,
    sag: Option<Sag>,
    mains_level: f64,
    energised_since_ns: Option<i64>,
    /// Regulated output before sag, wander and ripple, volts.
    output: f64,
    /// Wander now, and its change in each step until the next draw.
    wander: f64,
    wander_step: f64,
    steps: u32,
    mains: Phasor,
    mains_hz: f64,
    ripple_phases: [(f64, f64); 2],
    disturbed: bool,
}

/// A rotating pointer: the mains' phase without a sine in every step.
#[derive(Clone, Copy, Debug)]
struct Phasor {
    re: f64,
    im: f64,
    turn_re: f64,
    turn_im: f64,
}

impl Phasor {
    fn at(phase: f64) -> Self {
        Self { re: libm::cos(phase), im: libm::sin(phase), turn_re: 1.0, turn_im: 0.0 }
    }

    fn tune(&mut self, hertz: f64) {
        let angle = std::f64::consts::TAU * hertz * STEP_S;
        (self.turn_re, self.turn_im) = (libm::cos(angle), libm::sin(angle));
        // Thousands of turns leave a rounding error of the length; here it is taken out.
        let length = libm::hypot(self.re, self.im);
        (self.re, self.im) = (self.re / length, self.im / length);
    }

    fn turn(&mut self) {
        (self.re, self.im) =
            (self.re * self.turn_re - self.im * self.turn_im, self.re * self.turn_im + self.im * self.turn_re);
    }
}

impl Supply {
    /// Switched off, with the set-point at zero.
    pub(super) fn new(setup: SupplySetup, seed: u64) -> Self {
        let mut rng = stream(seed, Part::Supply);
        let phase = |rng: &mut ChaCha8Rng| between(rng, 0.0, std::f64::consts::TAU);
        let point = |angle: f64| (libm::cos(angle), libm::sin(angle));
        let mut mains = Phasor::at(phase(&mut rng));
        mains.tune(setup.mains_hz);
        let wander = setup.wander_fraction * normal(&mut rng);
        let ripple_phases = [point(phase(&mut rng)), point(phase(&mut rng))];
        Self {
            mains_hz: setup.mains_hz,
            setup,
            rng,
            set_volts: 0.0,
            ramp: None,
            sag: None,
            mains_level: 1.0,
            energised_since_ns: None,
            output: 0.0,
            wander,
            wander_step: 0.0,
            steps: 0,
            mains,
            ripple_phases,
            disturbed: true,
        }
    }

    /// Moves the set-point at once; the output follows at the supply's own slew.
    pub(super) fn set(&mut self, volts: f64) {
        self.ramp = None;
        self.set_volts = volts;
    }

    /// Output and set-point jump by a fraction.
    pub(super) fn jump(&mut self, fraction: f64, now_ns: i64) {
        self.output *= 1.0 + fraction;
        self.set(self.set_point(now_ns) * (1.0 + fraction));
    }

    /// Moves the set-point evenly.
    pub(super) fn ramp(&mut self, to_volts: f64, now_ns: i64, volts_per_second: f64) {
        let from_volts = self.set_point(now_ns);
        let seconds = (to_volts - from_volts).abs() / volts_per_second;
        // A ramp of no length would divide by it.
        let until_ns = now_ns + 1 + (seconds * 1e9) as i64;
        self.ramp = Some(Ramp { from_volts, to_volts, from_ns: now_ns, until_ns });
        self.set_volts = to_volts;
    }

    /// Drops the output by a fraction for a time.
    pub(super) fn sag(&mut self, fraction: f64, now_ns: i64, seconds: f64) {
        self.sag = Some(Sag { fraction, from_ns: now_ns, until_ns: now_ns + (seconds * 1e9) as i64 });
    }

    /// A breakdown in the tube: the charge is gone at once, but for a rest.
    pub(super) fn arc(&mut self) {
        self.output *= 0.3;
    }

    /// New mains: frequency in hertz and level as a share of the nominal.
    pub(super) fn set_mains(&mut self, hertz: f64, level: f64) {
        self.mains_hz = hertz;
        self.mains.tune(hertz);
        self.mains_level = level;
    }

    /// Whether the voltage is anything but settled at a set-point above zero.
    pub(super) const fn is_disturbed(&self) -> bool {
        self.disturbed
    }

    fn set_point(&self, now_ns: i64) -> f64 {
        match self.ramp {
            Some(ramp) if now_ns < ramp.until_ns => {
                let share = (now_ns - ramp.from_ns) as f64 / (ramp.until_ns - ramp.from_ns) as f64;
                ramp.from_volts + (ramp.to_volts - ramp.from_volts) * share
            }
            _ => self.set_volts,
        }
    }

    /// One grid step, which ends at `end_ns`; `energised` tells whether mains reaches the supply. Gives the voltage at
    /// the terminals at the end of the step.
    pub(super) fn step(&mut self, end_ns: i64, energised: bool) -> f64 {
        if self.steps == 0 {
            self.draw_wander();
        }
        self.steps = (self.steps + 1) % WANDER_STEPS;
        self.wander += self.wander_step;
        self.mains.turn();
        let target = self.target(end_ns, energised);
        self.regulate(target);
        let sag = self.sag_now(end_ns);
        let moving = self.ramp.is_some_and(|ramp| end_ns <= ramp.until_ns + STEP_NS);
        let off = (self.output - target).abs() > SETTLED * target;
        self.disturbed = target <= 0.0 || moving || off || sag > SETTLED;
        self.output * (1.0 - sag) * self.line() * (1.0 + self.drift(end_ns)) * (1.0 + self.ripple())
    }

    fn target(&mut self, now_ns: i64, energised: bool) -> f64 {
        if !energised {
            self.energised_since_ns = None;
            return 0.0;
        }
        let since_ns = *self.energised_since_ns.get_or_insert(now_ns);
        if now_ns - since_ns < (START_UP_S * 1e9) as i64 { 0.0 } else { self.set_point(now_ns) }
    }

    /// Upwards as fast as the slew allows; downwards only as fast as bleeder and strings take the charge.
    fn regulate(&mut self, target: f64) {
        let rise = self.setup.slew_volts_per_second * STEP_S;
        let fall = self.output * (STEP_S / self.setup.bleed_seconds);
        self.output += ((target - self.output) * (STEP_S / REGULATOR_S)).clamp(-fall, rise);
    }

    fn sag_now(&mut self, now_ns: i64) -> f64 {
        let Some(sag) = self.sag else { return 0.0 };
        let edge_ns = SAG_EDGE_S * 1e9;
        let into = (now_ns - sag.from_ns) as f64 / edge_ns;
        let out = (sag.until_ns - now_ns) as f64 / edge_ns;
        if out <= 0.0 {
            self.sag = None;
            return 0.0;
        }
        sag.fraction * into.min(out).clamp(0.0, 1.0)
    }

    /// What the mains' level does to the output.
    fn line(&self) -> f64 {
        let regulated = 1.0 + LINE_REGULATION * (self.mains_level - 1.0);
        if self.mains_level >= HOLDS_DOWN_TO { regulated } else { regulated * self.mains_level / HOLDS_DOWN_TO }
    }

    /// Wander, and the warming-up of ten minutes.
    fn drift(&self, now_ns: i64) -> f64 {
        // A rational curve warms up as an exponential does, and costs no exponential in every step.
        let share = now_ns as f64 / (now_ns as f64 + 3e11);
        self.wander + self.setup.warm_up_fraction * share
    }

    fn ripple(&self) -> f64 {
        let Phasor { re, im, .. } = self.mains;
        let [(cos1, sin1), (cos2, sin2)] = self.ripple_phases;
        let (double_re, double_im) = (re * re - im * im, 2.0 * re * im);
        0.5 * (self.setup.hum_fraction * (im * cos1 + re * sin1)
            + self.setup.ripple_fraction * (double_im * cos2 + double_re * sin2))
    }

    /// An Ornstein-Uhlenbeck wander, drawn every 10 ms and reached in equal steps; the mains' frequency wanders too.
    fn draw_wander(&mut self) {
        let step_s = f64::from(WANDER_STEPS) * STEP_S;
        let pull = step_s / self.setup.wander_seconds;
        let kick = self.setup.wander_fraction * libm::sqrt(2.0 * pull) * normal(&mut self.rng);
        self.wander_step = (kick - pull * self.wander) / f64::from(WANDER_STEPS);
        // Mains stays within some 20 mHz for seconds at a time (common practice, no source).
        let hertz = self.mains_hz + 0.02 * normal(&mut self.rng);
        self.mains.tune(hertz);
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn settled(volts: f64) -> (Supply, i64) {
        let mut supply = Supply::new(SupplySetup::default(), 3);
        supply.set(volts);
        let mut now_ns = 0;
        for _ in 0..40_000 {
            now_ns += STEP_NS;
            supply.step(now_ns, true);
        }
        assert!(!supply.is_disturbed());
        (supply, now_ns)
    }

    #[test]
    fn ripple_has_the_amplitudes_it_was_given() {
        let (mut supply, mut now_ns) = settled(2_500.0);
        (supply.setup.hum_fraction, supply.setup.ripple_fraction, supply.setup.wander_fraction) = (0.0, 8e-4, 0.0);
        let volts: Vec<f64> = (0..10_000)
            .map(|_| {
                now_ns += STEP_NS;
                supply.step(now_ns, true)
            })
            .collect();
        let (low, high) = volts.iter().fold((f64::MAX, f64::MIN), |(l, h), v| (l.min(*v), h.max(*v)));
        assert!(((high - low) / 2_500.0 / 8e-4 - 1.0).abs() < 0.05, "{}", high - low);
        // 100 Hz for one second: 200 crossings of the mean.
        let mean = volts.iter().sum::<f64>() / 1e4;
        let crossings = volts.windows(2).filter(|two| (two[0] > mean) != (two[1] > mean)).count();
        assert!((190..=210).contains(&crossings), "{crossings}");
    }

    #[test]
    fn switched_off_it_bleeds_down_with_its_time_constant() {
        let (mut supply, mut now_ns) = settled(4_000.0);
        let tau = supply.setup.bleed_seconds;
        let start = supply.step(now_ns + STEP_NS, false);
        let mut end = start;
        now_ns += STEP_NS;
        for _ in 0..10_000 {
            now_ns += STEP_NS;
            end = supply.step(now_ns, false);
        }
        assert!((end / start / (-1.0 / tau).exp() - 1.0).abs() < 0.005, "{start} {end}");
        assert!(supply.is_disturbed());
    }

    #[test]
    fn a_lower_set_point_is_reached_only_by_bleeding() {
        let (mut supply, mut now_ns) = settled(4_000.0);
        supply.set(3_000.0);
        for _ in 0..1_000 {
            now_ns += STEP_NS;
            supply.step(now_ns, true);
        }
        let expected = 4_000.0 * (-0.1 / supply.setup.bleed_seconds).exp();
        assert!((supply.output / expected - 1.0).abs() < 0.002, "{}", supply.output);
    }

    #[test]
    fn it_starts_late_and_rises_at_its_slew() {
        let mut supply = Supply::new(SupplySetup::default(), 3);
        supply.set(2_500.0);
        let mut now_ns = 0;
        let mut at = |until_s: f64| {
            let mut volts = 0.0;
            while (now_ns as f64) < until_s * 1e9 {
                now_ns += STEP_NS;
                volts = supply.step(now_ns, true);
            }
            volts
        };
        assert_eq!(at(0.19), 0.0);
        assert!((at(0.7) - 1_000.0).abs() < 6.0);
        assert!((at(2.0) / 2_500.0 - 1.0).abs() < 1e-3);
    }

    #[test]
    fn a_sag_takes_its_share_for_its_time() {
        let (mut supply, start_ns) = settled(3_000.0);
        supply.sag(0.03, start_ns, 0.5);
        let mut now_ns = start_ns;
        let mut low_steps = 0;
        for _ in 0..10_000 {
            now_ns += STEP_NS;
            low_steps += usize::from(supply.step(now_ns, true) < 3_000.0 * 0.985);
        }
        assert!((4_900..=5_000).contains(&low_steps), "{low_steps}");
        assert!(!supply.is_disturbed());
    }

    #[test]
    fn low_mains_is_regulated_until_it_is_too_low() {
        let (mut supply, now_ns) = settled(3_000.0);
        supply.set_mains(50.0, 0.9);
        assert!((supply.step(now_ns + STEP_NS, true) / 3_000.0 - 1.0).abs() < 2e-3);
        supply.set_mains(50.0, 0.6);
        assert!((supply.step(now_ns + 2 * STEP_NS, true) / 3_000.0 - 0.6 / 0.85).abs() < 3e-3);
    }
}
