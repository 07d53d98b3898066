//! The one table of all fields of a bench profile.

use std::path::PathBuf;

use super::{Profile, ScreenShape, TimeSource, parts};

/// One field: what it is called, what it may hold, and where it goes.
pub struct Field {
    /// Dotted path, e.g. `tube.bulb_radius_mm`.
    pub path: &'static str,
    /// Unit of a number, empty where it has none.
    pub unit: &'static str,
    /// Whether it may be left out.
    pub presence: Presence,
    /// Its value in the example, as TOML.
    pub example: &'static str,
    /// What it may hold, and where it goes.
    pub kind: Kind,
    /// One sentence that explains it.
    pub about: &'static str,
}

/// Whether a field may be left out.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Presence {
    /// It must be there.
    Required,
    /// It may be left out; then this TOML value holds.
    Default(&'static str),
}

/// What a field may hold, and where it goes.
pub enum Kind {
    /// A number within a range, ends included.
    Number {
        /// Smallest permitted.
        least: f64,
        /// Largest permitted.
        most: f64,
        /// Where it goes.
        at: fn(&mut Profile) -> &mut f64,
    },
    /// A list of numbers, each within a range.
    Numbers {
        /// Fewest and most entries.
        count: (usize, usize),
        /// Smallest permitted.
        least: f64,
        /// Largest permitted.
        most: f64,
        /// Where it goes.
        at: fn(&mut Profile) -> &mut Vec<f64>,
    },
    /// A whole number within a range.
    Count {
        /// Smallest permitted.
        least: u32,
        /// Largest permitted.
        most: u32,
        /// Where it goes.
        at: fn(&mut Profile) -> &mut u32,
    },
    /// One of a few whole numbers.
    Whole {
        /// The permitted ones.
        allowed: &'static [u8],
        /// Where it goes.
        at: fn(&mut Profile) -> &mut u8,
    },
    /// One of a few words.
    Word {
        /// The permitted ones.
        allowed: &'static [&'static str],
        /// Where the one at this index goes.
        set: fn(&mut Profile, usize),
    },
    /// `true` or `false`.
    Switch {
        /// Where it goes.
        at: fn(&mut Profile) -> &mut bool,
    },
    /// One line of text.
    Line {
        /// Whether it may be empty.
        may_be_empty: bool,
        /// Where it goes.
        at: fn(&mut Profile) -> &mut String,
    },
    /// A board's identity, or empty.
    Board {
        /// Where it goes.
        at: fn(&mut Profile) -> &mut String,
    },
    /// A list of file endings.
    Endings {
        /// Where it goes.
        at: fn(&mut Profile) -> &mut Vec<String>,
    },
    /// A file, relative to the profile's folder.
    File {
        /// Where it goes.
        at: fn(&mut Profile) -> &mut PathBuf,
    },
}

/// The tables of a profile in the order they are written, each with what it is about.
pub const TABLES: &[(&str, &str)] = &[
    ("bench", "What the bench is called."),
    ("tube", "The tube. Measure the distance from target to screen with care: rings scale with it."),
    ("divider", "The voltage divider, as far as stamps need it."),
    (
        parts::SENSE,
        "The parts of the main string, for `ringvolt divider`; leave the whole table out if you do not know them.",
    ),
    (parts::CROSS, "The parts of the cross-sense string; leave the whole table out if you do not know them."),
    (parts::SUPPLY, "What the divider hangs on; leave the whole table out if you do not know it."),
    ("controller", "What the controller is told. It can only withdraw the permit; the wired chain protects people."),
    ("camera", "The camera, and how the exposure of each frame is known."),
    ("calibration", "The calibration that belongs to this bench."),
    ("limits", "When a frame is refused or marked."),
];

/// Tables that may be left out as a whole; where one is there, its required fields are.
pub const OPTIONAL_TABLES: &[&str] = &[parts::SENSE, parts::CROSS, parts::SUPPLY];

const SCREENS: &[&str] = &["flat", "bulb"];
const SCREEN_VALUES: &[ScreenShape] = &[ScreenShape::Flat, ScreenShape::Bulb];
const MATERIALS: &[&str] = &["graphite", "gold", "aluminium"];
const POLARITIES: &[&str] = &["positive", "negative"];
const SOURCES: &[&str] = &["exif", "file-time", "strobe", "lamp", "table"];
const SOURCE_VALUES: &[TimeSource] =
    &[TimeSource::Exif, TimeSource::FileTime, TimeSource::Strobe, TimeSource::Lamp, TimeSource::Table];

use Presence::{Default as Or, Required};

pub(super) const fn number(least: f64, most: f64, at: fn(&mut Profile) -> &mut f64) -> Kind {
    Kind::Number { least, most, at }
}

/// A field of the table; the order of arguments is the order people read it in.
pub(super) const fn field(
    path: &'static str,
    unit: &'static str,
    presence: Presence,
    example: &'static str,
    kind: Kind,
    about: &'static str,
) -> Field {
    Field { path, unit, presence, example, kind, about }
}

/// All fields.
pub fn fields() -> impl Iterator<Item = &'static Field> + Clone {
    FIELDS.iter().chain(parts::FIELDS.iter().copied().flatten())
}

/// The fields of all tables but the optional ones, in the order they are written.
#[rustfmt::skip]
const FIELDS: &[Field] = &[
    field("bench.name", "", Required, "\"Simulated bench\"",
        Kind::Line { may_be_empty: false, at: |p| &mut p.bench.name },
        "Name of the bench on reports; certificates carry the same name."),
    field("bench.description", "", Or("\"\""), "\"An invented bench, SIMULATED: no such tube exists\"",
        Kind::Line { may_be_empty: true, at: |p| &mut p.bench.description },
        "One line about the bench."),

    field("tube.material", "", Required, "\"graphite\"",
        Kind::Word { allowed: MATERIALS, set: |p, i| p.tube.material = MATERIALS[i].to_owned() },
        "What the target is made of."),
    field("tube.screen", "", Required, "\"bulb\"",
        Kind::Word { allowed: SCREENS, set: |p, i| p.tube.screen = SCREEN_VALUES[i] },
        "Shape of the luminescent screen: flat, or the inside of a spherical bulb."),
    field("tube.bulb_radius_mm", "mm", Or("0.0"), "66.0",
        number(0.0, 500.0, |p| &mut p.tube.bulb_radius_mm),
        "Inner radius of the bulb (10 mm or more); 0 for a flat screen."),
    field("tube.bulb_radius_u_mm", "mm", Or("0.5"), "0.5",
        number(0.0, 50.0, |p| &mut p.tube.bulb_radius_u_mm),
        "Standard uncertainty of the bulb's radius."),
    field("tube.target_to_screen_mm", "mm", Required, "130.0",
        number(10.0, 1000.0, |p| &mut p.tube.target_to_screen_mm),
        "Distance along the axis from the target to the screen (to the inner apex of a bulb)."),
    field("tube.target_to_screen_u_mm", "mm", Required, "1.0",
        number(0.0, 100.0, |p| &mut p.tube.target_to_screen_u_mm),
        "Standard uncertainty of that distance; 1 mm in 130 mm is 0.8 % of every ring."),
    field("tube.glass_mm", "mm", Or("1.5"), "1.5",
        number(0.0, 20.0, |p| &mut p.tube.glass_mm),
        "Thickness of the glass in front of the screen."),
    field("tube.glass_index", "", Or("1.52"), "1.52",
        number(1.0, 2.5, |p| &mut p.tube.glass_index),
        "Refractive index of that glass."),
    field("tube.contact_potential_volts", "V", Or("0.0"), "-3.0",
        number(-10.0, 10.0, |p| &mut p.tube.contact_potential_volts),
        "What the difference of work functions adds to the accelerating voltage, where it is applied."),
    field("tube.contact_potential_u_volts", "V", Or("1.0"), "1.0",
        number(0.0, 10.0, |p| &mut p.tube.contact_potential_u_volts),
        "Standard uncertainty of the contact potential."),
    field("tube.apply_contact_potential", "", Or("false"), "false",
        Kind::Switch { at: |p| &mut p.tube.apply_contact_potential },
        "Whether wavelengths include the contact potential; every report says which."),

    field("divider.nominal_volts_per_code", "V", Required, "0.3125625",
        number(0.001, 10.0, |p| &mut p.divider.nominal_volts_per_code),
        "What one code of the main sense is worth by design: divider ratio times one step of its converter."),
    field("divider.nominal_cross_volts_per_code", "V", Required, "0.33",
        number(0.001, 10.0, |p| &mut p.divider.nominal_cross_volts_per_code),
        "The same for the cross-sense."),
    field("divider.filter_seconds", "s", Required, "0.0004",
        number(0.0, 1.0, |p| &mut p.divider.filter_seconds),
        "Time constant of the filter at the tap: readings lag the tube by this."),
    field("divider.filter_u_seconds", "s", Or("0.0"), "0.00004",
        number(0.0, 1.0, |p| &mut p.divider.filter_u_seconds),
        "Standard uncertainty of that time constant."),

    field("controller.device", "", Or("\"\""), "\"5eed000000000001\"",
        Kind::Board { at: |p| &mut p.controller.device },
        "Identity of the board that belongs here; empty accepts any."),
    field("controller.mains_hz", "Hz", Required, "50",
        Kind::Whole { allowed: &[50, 60], at: |p| &mut p.controller.mains_hz },
        "Mains frequency: readings are averaged over whole cycles of it."),
    field("controller.polarity", "", Required, "\"positive\"",
        Kind::Word { allowed: POLARITIES, set: |p, i| p.controller.polarity_negative = i == 1 },
        "Sign at the divider that accelerates: positive with the cathode near earth, negative with the anode earthed."),
    field("controller.limit_volts", "V", Required, "5300.0",
        number(100.0, 30_000.0, |p| &mut p.controller.limit_volts),
        "Highest approved accelerating voltage; above it the permit is withdrawn. Above 5000 V ask about X-rays first."),
    field("controller.discrepancy_seconds", "s", Or("0.5"), "0.5",
        number(0.05, 2.0, |p| &mut p.controller.discrepancy_seconds),
        "How long the two interlock loops may differ."),
    field("controller.contactor_seconds", "s", Or("0.1"), "0.1",
        number(0.02, 2.0, |p| &mut p.controller.contactor_seconds),
        "How long the contactors may take to follow the permit."),
    field("controller.grace_seconds", "s", Or("5.0"), "5.0",
        number(1.0, 60.0, |p| &mut p.controller.grace_seconds),
        "How long this program may be silent before the permit is withdrawn."),
    field("controller.bleed_seconds", "s", Or("0.0"), "1.0",
        number(0.0, 60.0, |p| &mut p.controller.bleed_seconds),
        "Time constant of the voltage after switching off, as you recorded it; 0 leaves the decay unwatched."),
    field("controller.beam_limit_microamperes", "uA", Or("0.0"), "0.0",
        number(0.0, 4000.0, |p| &mut p.controller.beam_limit_microamperes),
        "Highest beam current; 0 where it is not measured."),
    field("controller.noise_floor_codes", "codes", Or("0.05"), "0.05",
        number(0.0, 60.0, |p| &mut p.controller.noise_floor_codes),
        "Smallest noise of a working converter (standard deviation over a second); less counts as frozen."),
    field("controller.conversions_per_second", "/s", Or("860.0"), "860.0",
        number(100.0, 10_000.0, |p| &mut p.controller.conversions_per_second),
        "Conversions a second of each converter, by its data sheet."),

    field("camera.time_source", "", Required, "\"exif\"",
        Kind::Word { allowed: SOURCES, set: |p, i| p.camera.time_source = SOURCE_VALUES[i] },
        "Where the exposure of a frame is known from."),
    field("camera.extensions", "", Or("[\"jpg\", \"jpeg\", \"png\"]"), "[\"png\"]",
        Kind::Endings { at: |p| &mut p.camera.extensions },
        "Endings of the frame files, without the dot."),
    field("camera.exposure_seconds", "s", Or("0.0"), "0.2",
        number(0.0, 3600.0, |p| &mut p.camera.exposure_seconds),
        "Length of the exposure where a frame's file does not tell it; 0 where every file tells it."),
    field("camera.exposure_u_seconds", "s", Or("0.005"), "0.0005",
        number(0.0, 60.0, |p| &mut p.camera.exposure_u_seconds),
        "Standard uncertainty of the exposure's length."),
    field("camera.start_offset_seconds", "s", Or("0.0"), "0.0",
        number(-1.0e6, 1.0e6, |p| &mut p.camera.start_offset_seconds),
        "Added to the stated start, for a camera whose clock is known to be off."),
    field("camera.start_u_seconds", "s", Required, "0.002",
        number(0.0, 3600.0, |p| &mut p.camera.start_u_seconds),
        "Standard uncertainty of the start: 0.3 s for whole seconds of EXIF, a few ms where it has fractions."),
    field("camera.power_of_two_shutter", "", Or("false"), "false",
        Kind::Switch { at: |p| &mut p.camera.power_of_two_shutter },
        "Whether marked shutter times are rounded powers of two, so that 1/30 means 1/32."),
    field("camera.afterglow_seconds", "s", Or("0.5"), "0.3",
        number(0.0, 60.0, |p| &mut p.camera.afterglow_seconds),
        "For how long the screen still shows the picture from before a change."),
    field("camera.pixels_per_mm", "/mm", Or("0.0"), "8.0",
        number(0.0, 1000.0, |p| &mut p.camera.pixels_per_mm),
        "Pixels per millimetre on the screen near its centre; 0 where unknown."),
    field("camera.pixels_per_mm_u_relative", "", Or("0.005"), "0.002",
        number(0.0, 1.0, |p| &mut p.camera.pixels_per_mm_u_relative),
        "Relative standard uncertainty of that scale."),
    field("camera.lamp_chip_seconds", "s", Or("0.073"), "0.073",
        number(0.001, 10.0, |p| &mut p.camera.lamp_chip_seconds),
        "Length of one chip of the sync lamp's sequence: about 2.2 frame periods, and no simple multiple of one."),
    field("camera.distance_mm", "mm", Or("0.0"), "400.0",
        number(0.0, 100_000.0, |p| &mut p.camera.distance_mm),
        "Distance from the lens to the screen's apex; 0 where unknown."),

    field("calibration.certificate", "", Required, "\"certificate.toml\"",
        Kind::File { at: |p| &mut p.calibration.certificate },
        "The certificate, relative to this file's folder; `ringvolt calibrate` writes it."),

    field("limits.span_refuse_fraction", "", Or("0.005"), "0.005",
        number(1e-6, 1.0, |p| &mut p.limits.span_refuse_fraction),
        "Refuse when means over mains cycles move by more than this fraction within an exposure."),
    field("limits.span_mark_fraction", "", Or("0.001"), "0.001",
        number(1e-6, 1.0, |p| &mut p.limits.span_mark_fraction),
        "Mark above this fraction."),
    field("limits.ripple_mark_fraction", "", Or("0.01"), "0.01",
        number(1e-6, 1.0, |p| &mut p.limits.ripple_mark_fraction),
        "Mark when single conversions spread by more than this fraction, peak to peak."),
    field("limits.beam_mark_fraction", "", Or("0.1"), "0.1",
        number(1e-3, 1.0, |p| &mut p.limits.beam_mark_fraction),
        "Mark when the beam current changes by more than this fraction."),
    field("limits.coverage_refuse_fraction", "", Or("0.9"), "0.9",
        number(0.5, 1.0, |p| &mut p.limits.coverage_refuse_fraction),
        "Refuse below this fraction of the conversions the exposure should have."),
    field("limits.disagreement_refuse_sigmas", "", Or("4.0"), "4.0",
        number(2.0, 20.0, |p| &mut p.limits.disagreement_refuse_sigmas),
        "Refuse when the senses differ by more than this many standard uncertainties of their difference."),
    field("limits.timing_mark_seconds", "s", Or("0.02"), "0.02",
        number(1e-5, 3600.0, |p| &mut p.limits.timing_mark_seconds),
        "Mark when the time of the exposure is less certain than this (standard uncertainty)."),
    field("limits.least_volts", "V", Or("200.0"), "200.0",
        number(1.0, 10_000.0, |p| &mut p.limits.least_volts),
        "Refuse below this voltage: nothing accelerates."),
];

impl Field {
    /// The part of the path before the last dot.
    pub fn table(&self) -> &'static str {
        self.path.rsplit_once('.').map_or("", |(table, _)| table)
    }

    /// The part of the path after the last dot.
    pub fn key(&self) -> &'static str {
        self.path.rsplit_once('.').map_or(self.path, |(_, key)| key)
    }

    /// What the field may hold, in words.
    pub fn permitted(&self) -> String {
        let unit = if self.unit.is_empty() { String::new() } else { format!(" {}", self.unit) };
        match &self.kind {
            Kind::Number { least, most, .. } => format!("{} to {}{unit}", plain(*least), plain(*most)),
            Kind::Numbers { count: (fewest, longest), least, most, .. } => {
                format!("a list of {fewest} to {longest} numbers, each {} to {}{unit}", plain(*least), plain(*most))
            }
            Kind::Count { least, most, .. } => format!("whole numbers from {least} to {most}"),
            Kind::Whole { allowed, .. } => {
                let words: Vec<_> = allowed.iter().map(u8::to_string).collect();
                format!("{}{unit}", words.join(" or "))
            }
            Kind::Word { allowed, .. } => {
                allowed.iter().map(|word| format!("\"{word}\"")).collect::<Vec<_>>().join(" or ")
            }
            Kind::Switch { .. } => "true or false".to_owned(),
            Kind::Line { may_be_empty: true, .. } => "one line of at most 200 characters".to_owned(),
            Kind::Line { may_be_empty: false, .. } => "one line of 1 to 200 characters".to_owned(),
            Kind::Board { .. } => "sixteen hexadecimal digits, or empty".to_owned(),
            Kind::Endings { .. } => "a list of 1 to 16 lower-case endings such as [\"jpg\", \"png\"]".to_owned(),
            Kind::File { .. } => "the name of a file".to_owned(),
        }
    }
}

/// A number as a person would write it.
pub(super) fn plain(value: f64) -> String {
    let size = value.abs();
    if value != 0.0 && value.is_finite() && !(1e-4..1e7).contains(&size) {
        format!("{value:e}")
    } else {
        value.to_string()
    }
}
