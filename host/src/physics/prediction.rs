//! The rings a tube shows at one voltage.

use serde::Serialize;

use super::{Material, Model, Screen, wavelength_metres, wavelength_sensitivity};

/// One ring under one model.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct Ring {
    /// Its Miller indices.
    pub ring: &'static str,
    /// Spacing, picometres.
    pub spacing_pm: f64,
    /// How the film diffracts.
    pub model: Model,
    /// Total deflection, radians.
    pub deflection_rad: f64,
    /// Distance from the axis, perpendicular to it, millimetres.
    pub radius_mm: f64,
    /// Distance from the apex along the screen, millimetres.
    pub arc_mm: f64,
}

/// Wavelength and rings at one voltage.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct Prediction {
    /// Accelerating voltage, volts.
    pub volts: f64,
    /// Wavelength, picometres.
    pub wavelength_pm: f64,
    /// Its standard uncertainty from that of the voltage, picometres.
    pub wavelength_u_pm: f64,
    /// The rings, both models of each beside each other; those that miss the screen are left out.
    pub rings: Vec<Ring>,
}

/// What a tube shows at `volts` with standard uncertainty `volts_u`. `None` unless `volts` is positive and finite.
pub fn predict(volts: f64, volts_u: f64, screen: Screen, material: Material) -> Option<Prediction> {
    let wavelength = wavelength_metres(volts)?;
    let wavelength_u = wavelength * wavelength_sensitivity(volts)?.abs() * volts_u / volts;
    let mut rings = Vec::new();
    for spacing in material.spacings() {
        for model in Model::ALL {
            let Some(deflection) = model.deflection(wavelength, spacing.metres) else { continue };
            let (Some(radius), Some(arc)) = (screen.radius(deflection), screen.arc(deflection)) else { continue };
            rings.push(Ring {
                ring: spacing.ring,
                spacing_pm: spacing.metres * 1e12,
                model,
                deflection_rad: deflection,
                radius_mm: radius * 1e3,
                arc_mm: arc * 1e3,
            });
        }
    }
    Some(Prediction { volts, wavelength_pm: wavelength * 1e12, wavelength_u_pm: wavelength_u * 1e12, rings })
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Worked out once by hand for a = 0.2461 nm, a flat screen at 140 mm and a bulb of 66 mm at 130 mm:
    /// volts, wavelength nm, ring, model, deflection, flat radius, bulb radius, bulb arc (mm).
    #[rustfmt::skip]
    #[allow(clippy::type_complexity)] // A table, read as one.
    const TABLE: [(f64, f64, &str, Model, f64, f64, f64, f64); 16] = [
        (2500.0, 0.0244986, "10", Model::Powder,  0.115011,  16.1729, 14.8229, 14.9504),
        (2500.0, 0.0244986, "10", Model::Grating, 0.115202,  16.2000, 14.8471, 14.9753),
        (2500.0, 0.0244986, "11", Model::Powder,  0.199425,  28.2956, 25.2589, 25.9201),
        (2500.0, 0.0244986, "11", Model::Grating, 0.200434,  28.4426, 25.3800, 26.0512),
        (3500.0, 0.0206950, "10", Model::Powder,  0.0971390, 13.6424, 12.5506, 12.6275),
        (3500.0, 0.0206950, "10", Model::Grating, 0.0972540, 13.6587, 12.5653, 12.6424),
        (3500.0, 0.0206950, "11", Model::Powder,  0.168382,  23.7989, 21.4877, 21.8866),
        (3500.0, 0.0206950, "11", Model::Grating, 0.168987,  23.8859, 21.5619, 21.9652),
        (4500.0, 0.0182424, "10", Model::Powder,  0.0856193, 12.0161, 11.0774, 11.1301),
        (4500.0, 0.0182424, "10", Model::Grating, 0.0856980, 12.0272, 11.0875, 11.1403),
        (4500.0, 0.0182424, "11", Model::Powder,  0.148388,  20.9281, 19.0149, 19.2883),
        (4500.0, 0.0182424, "11", Model::Grating, 0.148800,  20.9871, 19.0662, 19.3419),
        (5000.0, 0.0173020, "10", Model::Powder,  0.0812033, 11.3935, 10.5111, 10.5561),
        (5000.0, 0.0173020, "10", Model::Grating, 0.0812704, 11.4030, 10.5198, 10.5648),
        (5000.0, 0.0173020, "11", Model::Powder,  0.140726,  19.8327, 18.0593, 18.2926),
        (5000.0, 0.0173020, "11", Model::Grating, 0.141077,  19.8829, 18.1032, 18.3382),
    ];

    #[test]
    fn every_row_of_the_hand_check_table_comes_out() {
        for (volts, nm, ring, model, deflection, flat, bulb, arc) in TABLE {
            let find = |screen: Screen| {
                let prediction = predict(volts, 0.0, screen, Material::Graphite).unwrap();
                let found = prediction.rings.iter().find(|r| r.ring == ring && r.model == model).unwrap().clone();
                (prediction.wavelength_pm, found)
            };
            let (pm, on_flat) = find(Screen::Flat { to_screen: 0.140 });
            let (_, on_bulb) = find(Screen::Bulb { radius: 0.066, to_screen: 0.130 });
            let six_digits = |ours: f64, table: f64| (ours / table - 1.0).abs() < 5.1e-6;
            assert!(six_digits(pm * 1e-3, nm), "{volts} V: {pm} pm");
            assert!(six_digits(on_flat.deflection_rad, deflection), "{volts} {ring} {model:?}: {on_flat:?}");
            assert!(six_digits(on_flat.radius_mm, flat), "{volts} {ring} {model:?}: {on_flat:?}");
            assert!(six_digits(on_bulb.radius_mm, bulb), "{volts} {ring} {model:?}: {on_bulb:?}");
            assert!(six_digits(on_bulb.arc_mm, arc), "{volts} {ring} {model:?}: {on_bulb:?}");
        }
    }

    #[test]
    fn the_uncertainty_of_the_wavelength_is_about_half_that_of_the_voltage() {
        let prediction = predict(2_500.0, 2.5, Screen::Flat { to_screen: 0.140 }, Material::Graphite).unwrap();
        let relative = prediction.wavelength_u_pm / prediction.wavelength_pm;
        assert!((relative / 1e-3 - 0.501_220).abs() < 1e-6, "{relative}");
    }
}
