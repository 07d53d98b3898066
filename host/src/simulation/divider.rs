//! One string of the divider: true ratio, temperature and voltage coefficients, filter, and its faults.

use super::supply::STEP_NS;

const STEP_S: f64 = STEP_NS as f64 * 1e-9;
/// Where the clamp holds a tap that is no longer loaded, volts.
const CLAMP_VOLTS: f64 = 4.2;

/// What is wrong with a string.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub enum StringFault {
    /// Nothing.
    #[default]
    None,
    /// It reads this factor of the truth: 0 is an open high side, 2 half an open low side, n/(n - 1) one of n elements
    /// shorted.
    Factor(f64),
    /// The whole low side is open: the clamp holds the tap.
    Clamped,
}

/// What a string is like.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct StringTraits {
    /// Volts at the input per volt at the tap, cold and near zero.
    pub ratio: f64,
    /// Relative change of the ratio per volt at the input.
    pub per_volt: f64,
    /// Change of the ratio, ppm per kelvin.
    pub ppm_per_kelvin: f64,
    /// Time constant of the filter at the tap, seconds.
    pub filter_seconds: f64,
}

/// One string, with its filter's state as volts at the input.
#[derive(Clone, Debug)]
pub struct DividerString {
    traits: StringTraits,
    fault: StringFault,
    /// exp(-step/tau).
    decay: f64,
    /// The filtered voltage at the beginning and end of the present step.
    before: f64,
    now: f64,
}

impl DividerString {
    /// At rest, at zero volts.
    pub fn new(traits: StringTraits) -> Self {
        Self {
            traits,
            fault: StringFault::None,
            decay: libm::exp(-STEP_S / traits.filter_seconds.max(1e-9)),
            before: 0.0,
            now: 0.0,
        }
    }

    /// Breaks or mends it.
    pub(super) fn set_fault(&mut self, fault: StringFault) {
        self.fault = fault;
    }

    /// One grid step, in which the voltage goes straight from `from` to `to`: exact for a first-order filter.
    pub(super) fn step(&mut self, from: f64, to: f64) {
        self.before = self.now;
        self.now = self.response(from, to, self.decay, 1.0);
    }

    /// Filtered voltage within the present step at a share of it, where the input went from `from` to `to`.
    pub(super) fn within_step(&self, from: f64, to: f64, share: f64) -> f64 {
        self.response_from(
            self.before,
            from,
            to,
            libm::exp(-STEP_S * share / self.traits.filter_seconds.max(1e-9)),
            share,
        )
    }

    fn response(&self, from: f64, to: f64, decay: f64, share: f64) -> f64 {
        self.response_from(self.before, from, to, decay, share)
    }

    fn response_from(&self, start: f64, from: f64, to: f64, decay: f64, share: f64) -> f64 {
        let lag = (to - from) * (self.traits.filter_seconds / STEP_S);
        from + (to - from) * share - lag + (start - from + lag) * decay
    }

    /// Time constant, seconds: the integral of the filtered voltage is that of the input less tau times its change.
    pub(super) const fn filter_seconds(&self) -> f64 {
        self.traits.filter_seconds
    }

    /// Volts at the tap for a (filtered) voltage at the input, at so many kelvin above the reference temperature.
    pub(super) fn tap_volts(&self, volts: f64, kelvin: f64) -> f64 {
        // volts = x (1 + per_volt x) (1 + temperature), with x the tap times the ratio.
        let cold = volts / (1.0 + 1e-6 * self.traits.ppm_per_kelvin * kelvin);
        let linear = 2.0 * cold / (1.0 + libm::sqrt(1.0 + 4.0 * self.traits.per_volt * cold));
        let tap = linear / self.traits.ratio;
        match self.fault {
            StringFault::None => tap,
            StringFault::Factor(factor) => (factor * tap).clamp(-CLAMP_VOLTS, CLAMP_VOLTS),
            StringFault::Clamped => CLAMP_VOLTS,
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    const TRAITS: StringTraits =
        StringTraits { ratio: 5_001.0, per_volt: 0.0, ppm_per_kelvin: 5.0, filter_seconds: 0.4e-3 };

    /// 10 x 20 megohm over 40 kilohm with 10 nF: tau 0.4 ms, within 100 ppm after 3.68 ms (tau ln 10^4).
    #[test]
    fn a_step_settles_with_the_time_constant() {
        let mut string = DividerString::new(TRAITS);
        string.step(0.0, 1_000.0);
        let first = string.now;
        let mut steps = 1;
        while string.now < 999.9 {
            string.step(1_000.0, 1_000.0);
            steps += 1;
        }
        // The first step is a ramp of 0.1 ms, which comes half its length later than a jump.
        let expected = 0.4 * (1e4f64).ln() + 0.05;
        assert!((f64::from(steps) * 0.1 - expected).abs() < 0.11, "{steps} {expected}");
        // Ramp response over one step, by hand: x - s tau (1 - exp(-h / tau)).
        let by_hand = 1_000.0 - 1e7 * 0.4e-3 * (1.0 - (-0.25f64).exp());
        assert!((first - by_hand).abs() < 1e-9);
    }

    #[test]
    fn within_a_step_it_agrees_with_finer_steps() {
        let mut string = DividerString::new(TRAITS);
        string.step(0.0, 500.0);
        string.step(500.0, 300.0);
        // Euler's method with a thousand times finer steps.
        let (mut y, h) = (0.0, 1e-7);
        for index in 0..1_500 {
            let t = f64::from(index) * h;
            let x = if t < 1e-4 { 500.0 * t / 1e-4 } else { 500.0 - 200.0 * (t - 1e-4) / 1e-4 };
            y += h * (x - y) / 0.4e-3;
        }
        assert!((string.within_step(500.0, 300.0, 0.5) - y).abs() < 0.05);
    }

    #[test]
    fn ratio_coefficients_and_faults_show_at_the_tap() {
        let mut string = DividerString::new(StringTraits { per_volt: 1e-8, ..TRAITS });
        assert!((string.tap_volts(10_000.0, 0.0) - 10_000.0 / 5_001.0 * (1.0 - 1e-4)).abs() < 1e-6);
        let warm = string.tap_volts(5_000.0, 10.0) / string.tap_volts(5_000.0, 0.0);
        assert!((warm - (1.0 - 50e-6)).abs() < 1e-8);
        let sound = string.tap_volts(2_500.0, 0.0);
        for (fault, expected) in [
            (StringFault::Factor(0.0), 0.0),
            (StringFault::Factor(10.0 / 9.0), sound * 10.0 / 9.0),
            (StringFault::Factor(20.0), CLAMP_VOLTS),
            (StringFault::Clamped, CLAMP_VOLTS),
            (StringFault::None, sound),
        ] {
            string.set_fault(fault);
            assert!((string.tap_volts(2_500.0, 0.0) - expected).abs() < 1e-12, "{fault:?}");
        }
    }
}
