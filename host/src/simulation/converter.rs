//! One divider string and its converter: from the tube's voltage to codes.

use rand::RngExt;
use rand_chacha::ChaCha8Rng;

use super::draw::{normal, stream};
use crate::calibration::ChannelFit;

/// Nominal conversions per second.
const RATE: f64 = 860.0;

/// What may be wrong with a string or its converter.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct StringFault {
    /// The string reads this factor of the truth (1 + 1/(n - 1) for one of n elements shorted, 2 for half an open low
    /// side, 0 for an open string).
    pub factor: Option<f64>,
    /// The converter stands at the end of its scale (low side open, clamp conducts).
    pub over_range: bool,
    /// The converter gives nothing.
    pub silent: bool,
    /// The converter repeats its last code.
    pub frozen: bool,
}

/// One string with its converter.
#[derive(Clone, Debug)]
pub(super) struct StringAndConverter {
    /// The true line from codes to volts at the calibration's temperature.
    fit: ChannelFit,
    ambient_celsius: f64,
    temperature_per_kelvin: f64,
    polarity: f64,
    filter_seconds: f64,
    /// Voltage behind the filter, volts at the tube.
    filtered: f64,
    period_ns: f64,
    next_end_ns: f64,
    integral: f64,
    integrated_ns: f64,
    noise_codes: f64,
    last_code: i16,
    rng: ChaCha8Rng,
    pub(super) fault: StringFault,
}

/// What a string needs to be drawn.
#[derive(Clone, Debug)]
pub(super) struct StringSetup {
    pub fit: ChannelFit,
    pub ambient_celsius: f64,
    pub temperature_per_kelvin: f64,
    pub polarity: f64,
    pub filter_seconds: f64,
    pub noise_codes: f64,
}

impl StringAndConverter {
    pub(super) fn new(setup: StringSetup, seed: u64, subject: u64) -> Self {
        let mut rng = stream(seed, subject);
        let period_ns = 1e9 / RATE * (1.0 + rng.random_range(-0.04..0.04));
        let next_end_ns = period_ns * rng.random_range(0.1..1.0);
        Self {
            fit: setup.fit,
            ambient_celsius: setup.ambient_celsius,
            temperature_per_kelvin: setup.temperature_per_kelvin,
            polarity: setup.polarity,
            filter_seconds: setup.filter_seconds,
            filtered: 0.0,
            period_ns,
            next_end_ns,
            integral: 0.0,
            integrated_ns: 0.0,
            noise_codes: setup.noise_codes,
            last_code: 0,
            rng,
            fault: StringFault::default(),
        }
    }

    /// Lets a step pass in which the tube had this mean voltage; gives the conversion that ended within it, as its end
    /// (nanoseconds of true time) and code.
    pub(super) fn pass(&mut self, from_ns: i64, to_ns: i64, volts: f64, celsius: f64) -> Option<(i64, i16)> {
        let seconds = (to_ns - from_ns) as f64 * 1e-9;
        if self.filter_seconds > 0.0 {
            self.filtered = volts + (self.filtered - volts) * libm::exp(-seconds / self.filter_seconds);
        } else {
            self.filtered = volts;
        }
        let end = self.next_end_ns;
        if end > to_ns as f64 {
            self.integrate((to_ns - from_ns) as f64);
            return None;
        }
        self.integrate(end - from_ns as f64);
        let mean = self.integral / self.integrated_ns.max(1.0);
        (self.integral, self.integrated_ns) = (0.0, 0.0);
        self.integrate(to_ns as f64 - end);
        self.next_end_ns += self.period_ns;
        let code = self.code(mean, celsius);
        (!self.fault.silent).then_some((end as i64, code))
    }

    fn integrate(&mut self, ns: f64) {
        self.integral += self.filtered * ns;
        self.integrated_ns += ns;
    }

    fn code(&mut self, volts: f64, celsius: f64) -> i16 {
        let noise = normal(&mut self.rng, self.noise_codes);
        if self.fault.frozen {
            return self.last_code;
        }
        let drifted = 1.0 + self.temperature_per_kelvin * (celsius - self.ambient_celsius);
        let signed = self.polarity * volts * self.fault.factor.unwrap_or(1.0) / drifted;
        let code = libm::round(self.fit.code(signed) + noise);
        self.last_code = if self.fault.over_range { i16::MAX } else { code.clamp(-32_768.0, 32_767.0) as i16 };
        self.last_code
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn string(filter_seconds: f64, noise_codes: f64) -> StringAndConverter {
        let fit = ChannelFit {
            coefficients: [0.2, 0.3125625, 0.0],
            covariance: [[0.0; 3]; 3],
            residual_volts: 0.0,
            hysteresis_fraction: 0.0,
            code_min: 0,
            code_max: 32_000,
        };
        let setup = StringSetup {
            fit,
            ambient_celsius: 23.0,
            temperature_per_kelvin: 5e-6,
            polarity: 1.0,
            filter_seconds,
            noise_codes,
        };
        StringAndConverter::new(setup, 3, 4)
    }

    fn run(string: &mut StringAndConverter, seconds: f64, volts: impl Fn(f64) -> f64) -> Vec<(i64, i16)> {
        let step = 250_000;
        let count = (seconds * 1e9) as i64 / step;
        (0..count)
            .filter_map(|i| string.pass(i * step, (i + 1) * step, volts((i as f64 + 0.5) * 250e-6), 23.0))
            .collect()
    }

    #[test]
    fn codes_follow_the_line_and_the_rate_is_near_nominal() {
        let conversions = run(&mut string(0.0, 0.0), 2.0, |_| 2_500.7);
        assert!(conversions.iter().skip(1).all(|(_, code)| *code == 8_000));
        assert!((1_640..=1_800).contains(&conversions.len()), "{}", conversions.len());
    }

    #[test]
    fn the_filter_settles_with_its_time_constant() {
        let conversions = run(&mut string(0.05, 0.0), 0.5, |_| 2_500.7);
        for (end_ns, code) in conversions.iter().skip(3) {
            let middle = *end_ns as f64 * 1e-9 - 0.58e-3;
            let expected = 8_000.0 * (1.0 - (-middle / 0.05f64).exp());
            assert!((f64::from(*code) - expected).abs() < 40.0, "{code} {expected}");
        }
    }

    #[test]
    fn faults_look_as_they_should() {
        let mut faulty = string(0.0, 0.5);
        faulty.fault.factor = Some(0.0);
        assert!(run(&mut faulty, 0.1, |_| 2_500.0).iter().all(|(_, code)| code.abs() < 5));
        faulty.fault = StringFault { over_range: true, ..StringFault::default() };
        assert!(run(&mut faulty, 0.1, |_| 2_500.0).iter().all(|(_, code)| *code == i16::MAX));
        faulty.fault = StringFault { silent: true, ..StringFault::default() };
        faulty.next_end_ns = 0.0;
        assert!(run(&mut faulty, 0.1, |_| 2_500.0).is_empty());
    }
}
