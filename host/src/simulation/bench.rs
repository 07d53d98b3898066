//! A simulated bench that fits a profile and its certificate.

use super::{
    camera::CameraSetup,
    draws::{Part, between, normal, stream, within},
    render::{Glass, Optics},
    scenario::Scenario,
    supply::SupplySetup,
    world::Setup,
};
use crate::{
    calibration::{self, Certificate},
    physics::{Material, MaterialError, Model, Screen},
    profile::{Profile, ScreenShape, SettingsError, TimeSource},
};
use thiserror::Error;

/// Why a profile cannot be simulated.
#[derive(Debug, Error)]
pub enum SetupError {
    /// Its settings do not fit the controller.
    #[error(transparent)]
    Settings(#[from] SettingsError),
    /// Its certificate cannot be stored.
    #[error(transparent)]
    Record(#[from] calibration::RecordError),
    /// Its film is unknown.
    #[error(transparent)]
    Material(#[from] MaterialError),
}

/// Half a year: the world does not know the date.
const DAYS_SINCE_ISSUE: f64 = 182.625;

/// A world like the profile's bench.
///
/// # Errors
/// When profile and certificate do not make a controller.
pub fn setup(profile: &Profile, certificate: &Certificate, scenario: Scenario, seed: u64) -> Result<Setup, SetupError> {
    let camera = &profile.camera;
    let exposure_seconds = if camera.exposure_seconds > 0.0 { camera.exposure_seconds } else { 0.2 };
    let usual = CameraSetup::default();
    Ok(Setup {
        seed,
        certificate: certificate.clone(),
        days_since_issue: DAYS_SINCE_ISSUE,
        stored: Some(certificate.record()?),
        settings: profile.settings_record(Some(certificate))?,
        filter_seconds: profile.divider.filter_seconds,
        filter_u_seconds: profile.divider.filter_u_seconds,
        supply: supply(profile, seed),
        camera: CameraSetup {
            exposure_seconds,
            period_seconds: usual.period_seconds.max(exposure_seconds + 0.02),
            exposure_off_seconds: 0.4 * camera.exposure_u_seconds,
            settle_seconds: camera.afterglow_seconds,
            ..usual
        },
        noise_codes: between(&mut stream(seed, Part::Bench), 0.5, 0.8),
        room_celsius: certificate.conditions.ambient_celsius,
        beam_fitted: true,
        thermometer_fitted: true,
        comparator_volts: Some(1.04 * profile.controller.limit_volts),
        scenario,
        epoch: 1,
    })
}

/// A supply that this seed gives.
fn supply(profile: &Profile, seed: u64) -> SupplySetup {
    let mut rng = stream(seed, Part::SupplyTraits);
    let recorded = profile.controller.bleed_seconds;
    SupplySetup {
        mains_hz: f64::from(profile.controller.mains_hz),
        ripple_fraction: between(&mut rng, 3e-4, 6e-4),
        hum_fraction: between(&mut rng, 1e-4, 2.5e-4),
        wander_fraction: between(&mut rng, 5e-5, 1.2e-4),
        warm_up_fraction: within(&mut rng, 3e-4),
        bleed_seconds: between(&mut rng, 0.95, 1.0) * if recorded > 0.0 { recorded } else { 1.0 },
        ..SupplySetup::default()
    }
}

/// The built-in bench, for tests.
#[cfg(test)]
pub(crate) fn example_setup(scenario: Scenario, seed: u64) -> Setup {
    let profile = Profile::parse(&crate::profile::example(), "the built-in bench").unwrap();
    setup(&profile, &calibration::example(), scenario, seed).unwrap()
}

/// The true tube and the true view of it: drawn around the profile's by the uncertainties that it states.
///
/// # Errors
/// When the film is unknown.
pub fn optics(profile: &Profile, seed: u64) -> Result<Optics, SetupError> {
    let mut rng = stream(seed, Part::Tube);
    let (tube, camera) = (&profile.tube, &profile.camera);
    // Beyond two standard uncertainties someone would have measured again.
    let mut about = |value: f64, u: f64| value + u * normal(&mut rng).clamp(-2.0, 2.0);
    let to_screen = about(tube.target_to_screen_mm, tube.target_to_screen_u_mm) * 1e-3;
    let radius = about(tube.bulb_radius_mm, tube.bulb_radius_u_mm) * 1e-3;
    let scale = if camera.pixels_per_mm > 0.0 { camera.pixels_per_mm } else { 8.0 };
    let pixels_per_metre = about(scale, scale * camera.pixels_per_mm_u_relative) * 1e3;
    let screen = match tube.screen {
        ScreenShape::Flat => Screen::Flat { to_screen },
        ScreenShape::Bulb => Screen::Bulb { radius, to_screen },
    };
    let glass = (tube.glass_mm > 0.0).then_some(Glass { thickness: tube.glass_mm * 1e-3, index: tube.glass_index });
    let field_angle = between(&mut rng, 0.0, std::f64::consts::TAU);
    let field_tesla = between(&mut rng, 15e-6, 45e-6);
    Ok(Optics {
        screen,
        material: Material::from_name(&tube.material)?,
        model: Model::Powder,
        glass,
        camera_distance: camera.distance_mm * 1e-3,
        pixels_per_metre,
        width: 640,
        height: 480,
        axis: (319.5 + within(&mut rng, 10.0), 239.5 + within(&mut rng, 8.0)),
        field_tesla: (field_tesla * libm::cos(field_angle), field_tesla * libm::sin(field_angle)),
        spot_metres: 0.34e-3,
        crystal_metres: 7e-9,
        six_fold: None,
        ring_grey: 66.0,
        stray_grey: 12.0,
        noise_grey: 1.3,
        dead_patches: Vec::new(),
        lamp: camera.time_source == TimeSource::Lamp,
    })
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_built_in_bench_can_be_made() {
        let setup = example_setup(Scenario::steady(2_500.0), 1);
        assert_eq!(setup.stored.unwrap().hash, calibration::example().hash8());
        let profile = Profile::parse(&crate::profile::example(), "the built-in bench").unwrap();
        let (one, other) = (optics(&profile, 1).unwrap(), optics(&profile, 2).unwrap());
        assert_ne!(one, other);
        assert!((one.screen.to_screen() - 0.130).abs() <= 0.002);
    }
}
