//! A simulated bench that fits a profile and its certificate.

use super::{camera::CameraSetup, render::Optics, scenario::Scenario, supply::SupplySetup, world::Setup};
use crate::{
    calibration::Certificate,
    physics::{Material, MaterialError, Model, Screen},
    profile::{Profile, ScreenShape, SettingsError},
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
    Record(#[from] crate::calibration::RecordError),
    /// Its film is unknown.
    #[error(transparent)]
    Material(#[from] MaterialError),
}

/// A world like the profile's bench.
///
/// # Errors
/// When profile and certificate do not make a controller.
pub fn setup(profile: &Profile, certificate: &Certificate, scenario: Scenario, seed: u64) -> Result<Setup, SetupError> {
    Ok(Setup {
        seed,
        certificate: certificate.clone(),
        stored: Some(certificate.record()?),
        settings: profile.settings_record(Some(certificate))?,
        filter_seconds: profile.divider.filter_seconds,
        supply: SupplySetup { mains_hz: f64::from(profile.controller.mains_hz), ..SupplySetup::default() },
        camera: CameraSetup { settle_seconds: profile.camera.afterglow_seconds, ..CameraSetup::default() },
        noise_codes: 0.9,
        scenario,
        epoch: 1,
    })
}

/// The view of the profile's tube by its camera.
///
/// # Errors
/// When the film is unknown.
pub fn optics(profile: &Profile) -> Result<Optics, SetupError> {
    let tube = &profile.tube;
    let to_screen = tube.target_to_screen_mm * 1e-3;
    let screen = match tube.screen {
        ScreenShape::Flat => Screen::Flat { to_screen },
        ScreenShape::Bulb => Screen::Bulb { radius: tube.bulb_radius_mm * 1e-3, to_screen },
    };
    let scale = if profile.camera.pixels_per_mm > 0.0 { profile.camera.pixels_per_mm } else { 8.0 };
    Ok(Optics {
        screen,
        material: Material::from_name(&tube.material)?,
        model: Model::Powder,
        pixels_per_metre: scale * 1e3,
        width: 640,
        height: 480,
        centre: (316.0, 238.0),
        shift: (6.0, -9.0),
        blur: 0.32e-3,
        height_grey: 70.0,
        background_grey: 18.0,
        noise_grey: 4.0,
    })
}
