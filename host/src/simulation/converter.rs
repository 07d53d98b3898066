//! One converter: integrates over its conversion, adds noise and offset, quantises and saturates.

use rand::RngExt;
use rand_chacha::ChaCha8Rng;
use ringvolt_firmware::io::Channel;

use super::draws::{normal, within};

/// One step of the converter, volts: 16 bits over +-2.048 V.
pub const STEP_VOLTS: f64 = 62.5e-6;
/// Conversions a second by the data sheet.
const NOMINAL_RATE: f64 = 860.0;
/// How far the rate may be off (data sheets of such converters say 10 %; a little is left for temperature).
const RATE_OFF: f64 = 0.095;

/// What is wrong with a converter.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub enum ConverterFault {
    /// Nothing.
    #[default]
    None,
    /// It converts nothing.
    Silent,
    /// It gives its last code again and again.
    Frozen,
}

/// What a converter is like.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct ConverterTraits {
    /// Conversions a second.
    pub rate: f64,
    /// Noise of one conversion, codes (standard deviation).
    pub noise_codes: f64,
    /// Code at zero volts, before rounding.
    pub offset_codes: f64,
}

impl ConverterTraits {
    /// What this generator gives; the offset belongs to the certificate.
    pub(super) fn draw(rng: &mut ChaCha8Rng, offset_codes: f64, noise_codes: f64) -> Self {
        Self { rate: NOMINAL_RATE * (1.0 + within(rng, RATE_OFF)), noise_codes, offset_codes }
    }
}

/// One converter.
#[derive(Clone, Debug)]
pub struct Converter {
    channel: Channel,
    traits: ConverterTraits,
    rng: ChaCha8Rng,
    fault: ConverterFault,
    period_ns: f64,
    /// End of the conversion under way, and the integral of the filtered voltage at its beginning.
    end_ns: f64,
    begun: Option<Begun>,
    last_code: i16,
}

#[derive(Clone, Copy, Debug)]
struct Begun {
    at_ns: i64,
    integral: f64,
}

impl Converter {
    /// Begins with a conversion of unknown phase.
    pub(super) fn new(channel: Channel, traits: ConverterTraits, mut rng: ChaCha8Rng) -> Self {
        let period_ns = 1e9 / traits.rate;
        let end_ns = period_ns * rng.random_range(0.0..1.0);
        Self { channel, traits, rng, fault: ConverterFault::None, period_ns, end_ns, begun: None, last_code: 0 }
    }

    /// Whose converter.
    pub const fn channel(&self) -> Channel {
        self.channel
    }

    /// Breaks or mends it.
    pub(super) fn set_fault(&mut self, fault: ConverterFault) {
        self.fault = fault;
    }

    /// When the conversion under way ends, true nanoseconds.
    pub(super) fn end_ns(&self) -> i64 {
        self.end_ns as i64
    }

    /// Ends the conversion under way, given the integral of the filtered voltage (volt seconds) at its end and the
    /// string's law from mean volts to tap volts. `None` for the very first, whose beginning nobody saw, and while
    /// silent.
    pub(super) fn finish(&mut self, integral: f64, tap_volts: impl FnOnce(f64) -> f64) -> Option<i16> {
        let at_ns = self.end_ns();
        self.end_ns += self.period_ns;
        let begun = self.begun.replace(Begun { at_ns, integral })?;
        // Drawn whatever the fault, so that a fault shifts nothing that comes after it.
        let noise = self.traits.noise_codes * normal(&mut self.rng);
        let mean = (integral - begun.integral) / ((at_ns - begun.at_ns) as f64 * 1e-9);
        let exact = tap_volts(mean) / STEP_VOLTS + self.traits.offset_codes + noise;
        let code = libm::rint(exact).clamp(f64::from(i16::MIN), f64::from(i16::MAX)) as i16;
        match self.fault {
            ConverterFault::None => {
                self.last_code = code;
                Some(code)
            }
            ConverterFault::Frozen => Some(self.last_code),
            ConverterFault::Silent => None,
        }
    }
}

#[cfg(test)]
mod tests {
    use rand::SeedableRng;

    use super::*;

    fn converter(noise_codes: f64) -> Converter {
        let traits = ConverterTraits { rate: 900.0, noise_codes, offset_codes: 2.25 };
        Converter::new(Channel::Sense, traits, ChaCha8Rng::seed_from_u64(5))
    }

    /// Codes for a constant voltage at the tap over some conversions.
    fn codes(converter: &mut Converter, tap: f64, count: usize) -> Vec<i16> {
        (0..count)
            .filter_map(|_| {
                let integral = tap * converter.end_ns() as f64 * 1e-9;
                converter.finish(integral, |mean| mean)
            })
            .collect()
    }

    #[test]
    fn conversions_come_at_its_own_rate() {
        let mut converter = converter(0.5);
        let first = converter.end_ns();
        codes(&mut converter, 1.0, 9_000);
        assert!(((converter.end_ns() - first) as f64 * 1e-9 - 10.0).abs() < 1e-6);
        let mut rng = ChaCha8Rng::seed_from_u64(1);
        for _ in 0..100 {
            let rate = ConverterTraits::draw(&mut rng, 0.0, 0.6).rate;
            assert!((rate / 860.0 - 1.0).abs() < 0.1);
        }
    }

    #[test]
    fn noise_dithers_the_mean_below_a_code() {
        let mut converter = converter(0.6);
        let got = codes(&mut converter, 1000.3 * STEP_VOLTS, 40_000);
        let mean = got.iter().map(|code| f64::from(*code)).sum::<f64>() / got.len() as f64;
        assert!((mean - 1_002.55).abs() < 0.015, "{mean}");
        let variance = got.iter().map(|code| (f64::from(*code) - mean).powi(2)).sum::<f64>() / got.len() as f64;
        // Quantisation adds a twelfth.
        assert!((variance - 0.36 - 1.0 / 12.0).abs() < 0.02, "{variance}");
    }

    #[test]
    fn it_integrates_over_its_conversion() {
        let mut converter = converter(0.0);
        // A ramp of one volt a second: the mean is the value at the middle.
        let integral = |ns: i64| 0.5 * (ns as f64 * 1e-9).powi(2);
        converter.finish(integral(converter.end_ns()), |mean| mean);
        let (begin, end) = (converter.end_ns() - (1e9 / 900.0) as i64, converter.end_ns());
        let code = converter.finish(integral(end), |mean| mean).unwrap();
        let expected = (begin + end) as f64 * 0.5e-9 / STEP_VOLTS + 2.25;
        assert!((f64::from(code) - expected).abs() <= 0.51);
    }

    #[test]
    fn it_saturates_freezes_and_falls_silent() {
        let mut converter = converter(0.5);
        assert_eq!(codes(&mut converter, 5.0, 3), [i16::MAX; 2]);
        codes(&mut converter, 1.0, 3);
        converter.set_fault(ConverterFault::Frozen);
        let frozen = codes(&mut converter, 0.5, 20);
        assert!(frozen.windows(2).all(|two| two[0] == two[1]));
        assert!(frozen[0] > 15_000);
        converter.set_fault(ConverterFault::Silent);
        assert!(codes(&mut converter, 0.5, 20).is_empty());
    }
}
