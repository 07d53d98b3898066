//! How far a film turns electrons of one wavelength.

use serde::Serialize;

/// Two ways in which a film diffracts.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize)]
#[serde(rename_all = "lowercase")]
pub enum Model {
    /// Crystals of every orientation: some stand at the Bragg angle, wavelength = 2 d sin(theta / 2).
    Powder,
    /// Thin crystals across the beam, seen as a row grating: wavelength = d sin(theta).
    Grating,
}

impl Model {
    /// Both.
    pub const ALL: [Self; 2] = [Self::Powder, Self::Grating];

    /// Its name in tables.
    pub const fn name(self) -> &'static str {
        match self {
            Self::Powder => "powder",
            Self::Grating => "grating",
        }
    }

    /// Total deflection, radians, of a wavelength by a spacing (both metres); `None` where it is not diffracted.
    pub fn deflection(self, wavelength: f64, spacing: f64) -> Option<f64> {
        let ratio = wavelength / spacing;
        let sine = match self {
            Self::Powder => 0.5 * ratio,
            Self::Grating => ratio,
        };
        if !(sine > 0.0 && sine < 1.0) {
            return None;
        }
        Some(match self {
            Self::Powder => 2.0 * libm::asin(sine),
            Self::Grating => libm::asin(sine),
        })
    }

    /// Wavelength, metres, from a spacing (metres) and a deflection (radians).
    pub fn wavelength(self, spacing: f64, deflection: f64) -> f64 {
        match self {
            Self::Powder => 2.0 * spacing * libm::sin(0.5 * deflection),
            Self::Grating => spacing * libm::sin(deflection),
        }
    }
}

#[cfg(test)]
mod tests {
    use proptest::prelude::*;

    use super::*;

    #[test]
    fn a_wavelength_beyond_the_spacing_is_not_diffracted() {
        assert_eq!(Model::Grating.deflection(2.0, 1.0), None);
        assert!(Model::Powder.deflection(1.9, 1.0).is_some());
        assert_eq!(Model::Powder.deflection(2.1, 1.0), None);
        assert_eq!(Model::Powder.deflection(f64::NAN, 1.0), None);
    }

    proptest! {
        #[test]
        fn deflection_and_wavelength_are_each_others_inverse(ratio in 1e-4f64..0.9) {
            for model in Model::ALL {
                let deflection = model.deflection(ratio, 1.0).unwrap();
                prop_assert!((model.wavelength(1.0, deflection) / ratio - 1.0).abs() < 1e-12);
            }
        }
    }
}
