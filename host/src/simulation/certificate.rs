//! What a certificate leaves open, drawn: the true coefficients of one simulated bench.
//!
//! The certificate states what was found and how well it is known. A bench drawn here is one of those the certificate
//! allows, so that its stated uncertainties are honest: over many seeds the truth scatters about it as it says.

use super::world::Setup;
use super::{
    converter::{ConverterTraits, STEP_VOLTS},
    divider::StringTraits,
    draws::{Part, normal, stream, within},
};
use crate::calibration::{Channel, ChannelFit};

const DAYS_PER_YEAR: f64 = 365.25;

/// One sense of the bench as it truly is.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct TrueSense {
    /// The divider's string.
    pub string: StringTraits,
    /// Its converter.
    pub converter: ConverterTraits,
}

/// Draws both senses, the main one first.
pub(super) fn draw(setup: &Setup) -> [TrueSense; 2] {
    let (seed, certificate) = (setup.seed, &setup.certificate);
    let mut common = stream(seed, Part::Calibration);
    // The reference's errors are shared by both senses.
    let scale = 1.0 + 1e-6 * certificate.reference.u_ppm * normal(&mut common);
    let shift = certificate.reference.u_volts * normal(&mut common);
    let years = setup.days_since_issue / DAYS_PER_YEAR;
    let senses = [
        (Channel::Sense, Part::MainString, Part::MainConverter),
        (Channel::Cross, Part::CrossString, Part::CrossConverter),
    ];
    senses.map(|(channel, string, converter)| {
        let mut rng = stream(seed, string);
        let fit = certificate.fit(channel);
        let [a0, a1, a2] = scattered(fit, [normal(&mut rng), normal(&mut rng), normal(&mut rng)]);
        let hysteresis = 1.0 + within(&mut rng, 0.5 * fit.hysteresis_fraction);
        let drift = 1.0 + 1e-6 * certificate.stability.drift_u_ppm_per_year * years * normal(&mut rng);
        let factor = scale * hysteresis * drift;
        let [a0, a1, a2] = [a0 * factor + shift, a1 * factor, a2 * factor];
        let stability = &certificate.stability;
        let ppm_per_kelvin =
            stability.temperature_ppm_per_kelvin + stability.temperature_u_ppm_per_kelvin * normal(&mut rng);
        let filter_seconds = (setup.filter_seconds + setup.filter_u_seconds * normal(&mut rng))
            .max(0.1 * setup.filter_seconds)
            .max(1e-6);
        let zero_code = root_near_zero(a0, a1, a2);
        let slope = a1 + 2.0 * a2 * zero_code;
        TrueSense {
            string: StringTraits {
                ratio: slope / STEP_VOLTS,
                per_volt: a2 / (slope * slope),
                ppm_per_kelvin,
                filter_seconds,
            },
            converter: ConverterTraits::draw(&mut stream(seed, converter), zero_code, setup.noise_codes),
        }
    })
}

/// The code at which `a0 + a1 N + a2 N^2` is zero.
fn root_near_zero(a0: f64, a1: f64, a2: f64) -> f64 {
    (0..6).fold(-a0 / a1, |code, _| code - (a0 + code * (a1 + code * a2)) / (a1 + 2.0 * a2 * code))
}

/// Coefficients that scatter about the fit as its covariance says: the fit plus L z, with L L' the covariance.
fn scattered(fit: &ChannelFit, z: [f64; 3]) -> [f64; 3] {
    let c = &fit.covariance;
    let mut lower = [[0.0; 3]; 3];
    for row in 0..3 {
        for column in 0..=row {
            let sum: f64 = (0..column).map(|k| lower[row][k] * lower[column][k]).sum();
            lower[row][column] = if row == column {
                libm::sqrt((c[row][row] - sum).max(0.0))
            } else if lower[column][column] > 0.0 {
                (c[row][column] - sum) / lower[column][column]
            } else {
                0.0
            };
        }
    }
    let mut drawn = fit.coefficients;
    for (row, value) in drawn.iter_mut().enumerate() {
        *value += (0..3).map(|column| lower[row][column] * z[column]).sum::<f64>();
    }
    drawn
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::simulation::divider::DividerString;

    /// Mean code that a drawn sense shows at a voltage.
    fn code(sense: &TrueSense, volts: f64, kelvin: f64) -> f64 {
        DividerString::new(sense.string).tap_volts(volts, kelvin) / STEP_VOLTS + sense.converter.offset_codes
    }

    fn setup(seed: u64) -> Setup {
        crate::simulation::example_setup(crate::simulation::Scenario::default(), seed)
    }

    #[test]
    fn without_uncertainties_the_certificate_is_the_truth() {
        let mut setup = setup(1);
        let certificate = &mut setup.certificate;
        (certificate.reference.u_ppm, certificate.reference.u_volts) = (0.0, 0.0);
        certificate.stability.drift_u_ppm_per_year = 0.0;
        certificate.stability.temperature_u_ppm_per_kelvin = 0.0;
        certificate.sense.covariance = [[0.0; 3]; 3];
        certificate.sense.hysteresis_fraction = 0.0;
        certificate.sense.coefficients[2] = 2e-9;
        let [main, _] = draw(&setup);
        let certificate = &setup.certificate;
        for volts in [0.0, 300.0, 2_500.0, 5_000.0, -800.0] {
            for kelvin in [0.0, 4.0] {
                let code = code(&main, volts, kelvin);
                let celsius = certificate.conditions.ambient_celsius + kelvin;
                let back = certificate.volts(Channel::Sense, code, Some(celsius));
                assert!((back - volts).abs() < 1e-6, "{volts} {kelvin}: {back}");
            }
        }
    }

    /// The certificate's standard uncertainty is the scatter of the truth over benches.
    #[test]
    fn over_many_benches_the_truth_scatters_as_the_certificate_says() {
        let certificate = setup(0).certificate;
        let day = certificate.issued_day() + 183;
        let (volts, kelvin) = (2_500.0, 2.0);
        let mut errors = Vec::new();
        let mut differences = Vec::new();
        for seed in 0..4_000 {
            let [main, cross] = draw(&setup(seed));
            let celsius = Some(certificate.conditions.ambient_celsius + kelvin);
            let error = certificate.volts(Channel::Sense, code(&main, volts, kelvin), celsius) - volts;
            let other = certificate.volts(Channel::Cross, code(&cross, volts, kelvin), celsius) - volts;
            errors.push(error);
            differences.push(error - other);
        }
        let sd = |values: &[f64]| (values.iter().map(|v| v * v).sum::<f64>() / values.len() as f64).sqrt();
        let parts = certificate.common_u(volts, certificate.sense.code(volts), Some(25.0), day);
        let stated = crate::calibration::combined_volts(&parts);
        // Standard error of a standard deviation from 4000 values: 1.1 %; three of them are allowed.
        assert!((sd(&errors) / stated - 1.0).abs() < 0.035, "{} {stated}", sd(&errors));
        let difference = certificate.difference_u_volts(volts, Some(25.0), day);
        assert!((sd(&differences) / difference - 1.0).abs() < 0.035, "{} {difference}", sd(&differences));
    }
}
