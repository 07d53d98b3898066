//! The bench profile: the TOML file that describes one bench.
//!
//! `field.rs` holds the one table of all fields: path, unit, permitted range, default and the sentence that explains
//! it. Checks, error messages, the commented example and the documentation are made from that table.

use std::path::PathBuf;

mod field;
mod parse;
mod parts;
mod settings;
#[cfg(test)]
mod tests;
mod write;

use crate::divider::{Network, Supply};

pub use field::{Field, Kind, Presence, TABLES, fields};
pub(crate) use parse::check_answer;
pub use parse::{Fault, MAX_PROFILE_BYTES, ProfileError};
pub use settings::SettingsError;
pub use write::{commented, example, explain};

/// One bench, as its profile describes it. Every value has passed its range check.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Profile {
    /// What people call the bench.
    pub bench: Bench,
    /// The tube.
    pub tube: Tube,
    /// The voltage divider, as far as stamps need it.
    pub divider: Divider,
    /// What the controller is told.
    pub controller: ControllerSettings,
    /// The camera and how its frames are timed.
    pub camera: Camera,
    /// The calibration that belongs to this bench.
    pub calibration: CalibrationFiles,
    /// Limits of the verdict rules.
    pub limits: Limits,
}

/// `[bench]`
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Bench {
    /// Name on reports.
    pub name: String,
    /// One line about it.
    pub description: String,
}

/// `[tube]`
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Tube {
    /// `graphite`, `gold`, `aluminium`: a lattice the physics module knows.
    pub material: String,
    /// Flat or bulb.
    pub screen: ScreenShape,
    /// Inner radius of the bulb, millimetres; unused for a flat screen.
    pub bulb_radius_mm: f64,
    /// Its standard uncertainty, millimetres.
    pub bulb_radius_u_mm: f64,
    /// Target to screen along the axis (to the inner apex of a bulb), millimetres.
    pub target_to_screen_mm: f64,
    /// Its standard uncertainty, millimetres.
    pub target_to_screen_u_mm: f64,
    /// Thickness of the glass, millimetres.
    pub glass_mm: f64,
    /// Refractive index of the glass.
    pub glass_index: f64,
    /// Work function of the screen side less that of the cathode, volts, added to the accelerating voltage where
    /// `apply_contact_potential`.
    pub contact_potential_volts: f64,
    /// Its standard uncertainty, volts.
    pub contact_potential_u_volts: f64,
    /// Whether wavelengths include the contact potential. Off by default, and never silent.
    pub apply_contact_potential: bool,
}

/// The shape of the luminescent screen.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub enum ScreenShape {
    /// Flat, perpendicular to the axis.
    #[default]
    Flat,
    /// The inside of a spherical bulb.
    Bulb,
}

/// `[divider]`
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Divider {
    /// What one code of the main sense should be worth by design, volts: for checks before there is a certificate.
    pub nominal_volts_per_code: f64,
    /// The same of the cross-sense, volts.
    pub nominal_cross_volts_per_code: f64,
    /// Time constant of the filter at the tap, seconds: readings lag the tube by this.
    pub filter_seconds: f64,
    /// Its standard uncertainty, seconds.
    pub filter_u_seconds: f64,
    /// The parts of the main string, where described.
    pub sense: Option<Network>,
    /// The parts of the cross-sense string, where described.
    pub cross: Option<Network>,
    /// What the divider hangs on, where described.
    pub supply: Option<Supply>,
}

/// `[controller]`
#[derive(Clone, Debug, Default, PartialEq)]
pub struct ControllerSettings {
    /// The board's identity, sixteen hexadecimal digits, or empty where any board is accepted.
    pub device: String,
    /// Mains frequency, hertz: 50 or 60.
    pub mains_hz: u8,
    /// `positive` or `negative`: the sign at the divider that accelerates.
    pub polarity_negative: bool,
    /// Highest approved voltage, volts.
    pub limit_volts: f64,
    /// How long the two loops may differ, seconds.
    pub discrepancy_seconds: f64,
    /// How long the contactors may take to follow, seconds.
    pub contactor_seconds: f64,
    /// How long the host may be silent, seconds.
    pub grace_seconds: f64,
    /// Bleed time constant after switching off, seconds; 0 is not evaluated.
    pub bleed_seconds: f64,
    /// Highest beam current, microamperes; 0 is not evaluated.
    pub beam_limit_microamperes: f64,
    /// Smallest noise of a healthy converter, codes (standard deviation over a second).
    pub noise_floor_codes: f64,
    /// Nominal conversions per second of each converter.
    pub conversions_per_second: f64,
}

/// `[camera]`
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Camera {
    /// Where the exposure interval comes from.
    pub time_source: TimeSource,
    /// Endings of the frame files, lower case, without the dot.
    pub extensions: Vec<String>,
    /// Exposure, seconds, where the file does not tell it.
    pub exposure_seconds: f64,
    /// Standard uncertainty of the exposure's length, seconds.
    pub exposure_u_seconds: f64,
    /// Added to the stated start, seconds: for a camera whose clock is known to be off.
    pub start_offset_seconds: f64,
    /// Standard uncertainty of the start, seconds.
    pub start_u_seconds: f64,
    /// Whether marked shutter times are rounded from powers of two (1/30 is 1/32).
    pub power_of_two_shutter: bool,
    /// After a change of voltage or beam, frames show the old picture for this long, seconds.
    pub afterglow_seconds: f64,
    /// Pixels per millimetre on the screen near its centre; 0 where unknown.
    pub pixels_per_mm: f64,
    /// Its relative standard uncertainty.
    pub pixels_per_mm_u_relative: f64,
    /// Length of one chip of the sync lamp's sequence, seconds.
    pub lamp_chip_seconds: f64,
    /// Distance from the camera's pupil to the screen's apex, millimetres; 0 where unknown.
    pub distance_mm: f64,
}

/// Where the exposure interval comes from.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub enum TimeSource {
    /// EXIF tags in the file.
    #[default]
    Exif,
    /// The file's time of modification is the end of the exposure.
    FileTime,
    /// Edges of the strobe line, recorded by the controller.
    Strobe,
    /// The sync lamp in the picture.
    Lamp,
    /// A table of frames and times.
    Table,
}

/// `[calibration]`
#[derive(Clone, Debug, Default, PartialEq)]
pub struct CalibrationFiles {
    /// The certificate, resolved against the profile's folder.
    pub certificate: PathBuf,
}

/// `[limits]`: FIELD rules of refusing and marking.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Limits {
    /// Refuse when mains-cycle means move by more than this fraction within an exposure.
    pub span_refuse_fraction: f64,
    /// Mark above this fraction.
    pub span_mark_fraction: f64,
    /// Mark when conversions spread (peak to peak) by more than this fraction.
    pub ripple_mark_fraction: f64,
    /// Mark when the beam current changes by more than this fraction.
    pub beam_mark_fraction: f64,
    /// Refuse below this fraction of the expected conversions.
    pub coverage_refuse_fraction: f64,
    /// Refuse when the senses differ by more than this many standard uncertainties of their difference.
    pub disagreement_refuse_sigmas: f64,
    /// Mark when the exposure's timing is less certain than this, seconds (standard uncertainty).
    pub timing_mark_seconds: f64,
    /// Refuse below this voltage: nothing accelerates.
    pub least_volts: f64,
}
