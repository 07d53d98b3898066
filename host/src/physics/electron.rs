//! The wavelength of an electron that was accelerated from rest: de Broglie's, with relativity.

use super::constants::{ELECTRON_MASS, ELEMENTARY_CHARGE, PLANCK, RELATIVITY_PER_VOLT};

fn is_accelerating(volts: f64) -> bool {
    volts > 0.0 && volts.is_finite()
}

/// V* = V (1 + alpha V), volts: the voltage a slow electron would need for the same momentum. `None` unless `volts` is
/// positive and finite.
pub fn relativistic_volts(volts: f64) -> Option<f64> {
    is_accelerating(volts).then_some(volts * (1.0 + RELATIVITY_PER_VOLT * volts))
}

/// Wavelength, metres, after an accelerating voltage: h / sqrt(2 m e V (1 + alpha V)). `None` unless `volts` is positive
/// and finite.
pub fn wavelength_metres(volts: f64) -> Option<f64> {
    relativistic_volts(volts).map(|volts| PLANCK / libm::sqrt(2.0 * ELECTRON_MASS * ELEMENTARY_CHARGE * volts))
}

/// d ln(wavelength) / d ln(volts): -1/2 (1 + 2 alpha V) / (1 + alpha V). `None` unless `volts` is positive and finite.
pub fn wavelength_sensitivity(volts: f64) -> Option<f64> {
    is_accelerating(volts)
        .then(|| -0.5 * (1.0 + 2.0 * RELATIVITY_PER_VOLT * volts) / (1.0 + RELATIVITY_PER_VOLT * volts))
}

/// The accelerating voltage, volts, that gives a wavelength. `None` unless `metres` is positive and finite.
pub fn volts_of_wavelength(metres: f64) -> Option<f64> {
    if !(metres > 0.0 && metres.is_finite()) {
        return None;
    }
    let starred = (PLANCK / metres) * (PLANCK / metres) / (2.0 * ELECTRON_MASS * ELEMENTARY_CHARGE);
    // V (1 + alpha V) = V*, in the form that keeps its digits at small voltages.
    Some(2.0 * starred / (1.0 + libm::sqrt(1.0 + 4.0 * RELATIVITY_PER_VOLT * starred)))
}

#[cfg(test)]
mod tests {
    use proptest::prelude::*;

    use super::*;
    use crate::physics::constants::SPEED_OF_LIGHT;

    /// Computed with 40 digits from CODATA 2022 (mpmath): volts, picometres.
    const COMPUTED: [(f64, f64); 18] = [
        (50.0, 173.438580757137),
        (100.0, 122.636596833278),
        (500.0, 54.8340247581805),
        (1000.0, 38.7640341262247),
        (1500.0, 31.6429693698509),
        (2000.0, 27.3969241590854),
        (2500.0, 24.4985735382745),
        (3000.0, 22.3585802699935),
        (3500.0, 20.6949760662732),
        (4000.0, 19.353659978816),
        (4500.0, 18.2423611282901),
        (5000.0, 17.3020099879614),
        (7500.0, 14.1098687544774),
        (10000.0, 12.2046950240317),
        (20000.0, 8.58851183903819),
        (100000.0, 3.70143661148708),
        (200000.0, 2.50793404362723),
        (300000.0, 1.96874889964899),
    ];

    #[test]
    fn wavelengths_agree_with_the_forty_digit_computation() {
        for (volts, pm) in COMPUTED {
            let ours = wavelength_metres(volts).unwrap() * 1e12;
            assert!((ours / pm - 1.0).abs() < 2e-14, "{volts} V: {ours} against {pm}");
        }
    }

    /// Standard electron-microscopy tables, from memory.
    #[test]
    fn wavelengths_agree_with_the_tabulated_ones() {
        for (volts, pm) in [(100e3, 3.7014), (200e3, 2.5079), (300e3, 1.9687)] {
            assert!((wavelength_metres(volts).unwrap() * 1e12 - pm).abs() < 0.5e-4 + 1e-9, "{volts}");
        }
    }

    /// Another way: momentum from total energy, p c = sqrt(E^2 - (m c^2)^2).
    #[test]
    fn wavelengths_agree_with_the_energy_momentum_relation() {
        let rest = ELECTRON_MASS * SPEED_OF_LIGHT * SPEED_OF_LIGHT;
        for volts in [200.0, 1_500.0, 2_500.0, 5_000.0, 80_000.0] {
            let kinetic = ELEMENTARY_CHARGE * volts;
            let momentum = (kinetic * (kinetic + 2.0 * rest)).sqrt() / SPEED_OF_LIGHT;
            assert!((wavelength_metres(volts).unwrap() * momentum / PLANCK - 1.0).abs() < 1e-13);
        }
    }

    #[test]
    fn the_sensitivity_is_the_derivative() {
        for volts in [1_500.0, 2_500.0, 5_000.0, 10_000.0] {
            let (low, high) = (wavelength_metres(volts * 0.999).unwrap(), wavelength_metres(volts * 1.001).unwrap());
            let numeric = (high / low).ln() / (1.001f64 / 0.999).ln();
            assert!((wavelength_sensitivity(volts).unwrap() / numeric - 1.0).abs() < 1e-7);
        }
    }

    #[test]
    fn nothing_is_computed_for_what_does_not_accelerate() {
        for volts in [0.0, -1.0, f64::NAN, f64::INFINITY] {
            assert_eq!(wavelength_metres(volts), None);
            assert_eq!(wavelength_sensitivity(volts), None);
            assert_eq!(volts_of_wavelength(volts), None);
        }
    }

    proptest! {
        #[test]
        fn voltage_and_wavelength_are_each_others_inverse(volts in 1.0f64..1e6) {
            let back = volts_of_wavelength(wavelength_metres(volts).unwrap()).unwrap();
            prop_assert!((back / volts - 1.0).abs() < 1e-12);
        }
    }
}
