//! What one row of each table holds.
//!
//! Times are integers: `utc_ns` is nanoseconds since 1970-01-01T00:00:00Z, `mono_ns` nanoseconds of the host's
//! monotonic clock, `time_us` microseconds of the controller's clock within one epoch.

use ringvolt_protocol::{Event, Gap, Hello, Reading, Slow, Status, Strobe};

/// One conversation with a controller, from hello to the end of the link or a restart.
///
/// A controller that restarts has a new epoch; a controller that merely comes back has the same.
#[derive(Clone, Debug, PartialEq)]
pub struct EpochRow {
    /// Key of this epoch within the run.
    pub epoch_key: i64,
    /// The controller's hello.
    pub hello: Hello,
    /// When it was heard.
    pub utc_ns: i64,
    /// Where it was heard: the link as the person named it.
    pub link: String,
}

/// What a controller journals, as it goes into the file.
#[derive(Clone, Debug, PartialEq)]
pub enum Record {
    /// A reading.
    Reading(Reading),
    /// An event.
    Event(Event),
    /// Slow inputs.
    Slow(Slow),
    /// A strobe edge.
    Strobe(Strobe),
    /// A counted gap.
    Gap(Gap),
    /// The state ten times a second; one a second is kept.
    Status(Status),
}

/// One clock exchange.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct EchoRow {
    /// When the question was handed to the link.
    pub asked_mono_ns: i64,
    /// When the answer had been read.
    pub answered_mono_ns: i64,
    /// UTC less monotonic clock at `answered_mono_ns`, nanoseconds: a step of the host's clock shows here.
    pub utc_minus_mono_ns: i64,
    /// When the controller took the question from the wire.
    pub received_us: u64,
    /// When the controller made the answer.
    pub sent_us: u64,
}

/// One camera image and what is known of its exposure.
#[derive(Clone, Debug, PartialEq)]
pub struct FrameRow {
    /// The file's stem: how the frame is named everywhere.
    pub frame: String,
    /// The file, relative to the frames folder.
    pub file: String,
    /// When the host noticed it.
    pub noticed_utc_ns: i64,
    /// SHA-256 of the file, lower-case hexadecimal; empty where it could not be read.
    pub sha256: String,
    /// What is known of the exposure; `Err` is the sentence why nothing is.
    pub exposure: Result<Exposure, String>,
}

/// The interval over which the sensor collected light.
#[derive(Clone, Debug, PartialEq)]
pub struct Exposure {
    /// Start.
    pub start_utc_ns: i64,
    /// End.
    pub end_utc_ns: i64,
    /// Standard uncertainty of the start, nanoseconds.
    pub start_u_ns: i64,
    /// Standard uncertainty of the length, nanoseconds.
    pub length_u_ns: i64,
    /// Which source told it: a stable word, e.g. `exif`, `file-time`.
    pub source: String,
}

/// A line a person or the program wrote into the run.
#[derive(Clone, Debug, PartialEq)]
pub struct NoteRow {
    /// When.
    pub utc_ns: i64,
    /// `person` or `program`.
    pub author: String,
    /// The line.
    pub text: String,
}

/// One stamp under one reduction.
#[derive(Clone, Debug, PartialEq)]
pub struct StampRow {
    /// Which frame.
    pub frame: String,
    /// `good`, `marked` or `refused`.
    pub verdict: String,
    /// Stable codes joined by `;`.
    pub reasons: String,
    /// The value; `None` where refused.
    pub value: Option<StampValue>,
}

/// The numbers of a stamp.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct StampValue {
    /// Mean accelerating voltage over the exposure, volts.
    pub volts: f64,
    /// Combined standard uncertainty, volts.
    pub volts_u: f64,
    /// Its part that differs from frame to frame, volts.
    pub volts_u_frame: f64,
    /// Its part common to the run, volts.
    pub volts_u_common: f64,
    /// Electron wavelength, picometres.
    pub wavelength_pm: f64,
    /// Its standard uncertainty, picometres.
    pub wavelength_u_pm: f64,
    /// Slope, volts per second.
    pub slope_volts_per_second: f64,
    /// Change of mains-cycle means within the exposure, volts.
    pub span_volts: f64,
    /// Spread of conversions, peak to peak, volts.
    pub ripple_volts: f64,
    /// Share of the exposure that readings cover, 0 to 1.
    pub coverage: f64,
    /// Enclosure temperature used, degrees Celsius.
    pub enclosure_celsius: Option<f64>,
}
