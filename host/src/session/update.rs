//! What a live session tells whoever watches: the terminal view, the JSON lines, a test.

use ringvolt_protocol::{Event, Gap, Hello, Status};

use crate::run::rows::{FrameRow, StampRow};

/// One thing worth telling.
#[derive(Clone, Debug)]
pub enum Update {
    /// The session waits for the controller's hello.
    Connecting {
        /// Where.
        link: String,
    },
    /// A controller answered.
    Connected {
        /// Its hello.
        hello: Hello,
        /// Whether its epoch goes on.
        resumed: bool,
    },
    /// The link was lost; the session goes on and looks for the controller again.
    LinkLost {
        /// Why, as a sentence.
        why: String,
    },
    /// An event of the controller.
    Event(Event),
    /// Entries the journal lost.
    Gap(Gap),
    /// The figures now. Ten times a second.
    Now(Box<Now>),
    /// A frame was found.
    Frame(FrameRow),
    /// A frame was stamped.
    Stamped {
        /// The frame.
        frame: FrameRow,
        /// Its stamp.
        stamp: StampRow,
    },
    /// Something a person should read.
    Notice(String),
}

/// The figures now.
#[derive(Clone, Debug, Default)]
pub struct Now {
    /// UTC of the figures, nanoseconds.
    pub utc_ns: i64,
    /// The controller's own state.
    pub status: Option<Status>,
    /// Mean over the last mains cycles, volts; `None` where no number can be trusted.
    pub volts: Option<f64>,
    /// Its combined standard uncertainty, volts.
    pub volts_u: Option<f64>,
    /// Why there is no number.
    pub why_none: Option<&'static str>,
    /// Electron wavelength, picometres.
    pub wavelength_pm: Option<f64>,
    /// Slope over the last half second, volts per second.
    pub slope_volts_per_second: Option<f64>,
    /// Peak-to-peak spread of conversions over the last cycle, volts.
    pub ripple_volts: Option<f64>,
    /// Sense less cross-sense, volts.
    pub difference_volts: Option<f64>,
    /// Age of the newest reading, seconds; `None` before the first, or while the clock is not tied.
    pub age_seconds: Option<f64>,
    /// Bound of the controller's clock against UTC, milliseconds.
    pub clock_bound_ms: Option<f64>,
    /// Readings recorded.
    pub readings: u64,
    /// Readings lost in counted gaps.
    pub lost: u64,
    /// Damaged frames received.
    pub damaged_frames: u32,
    /// Beam current, microamperes.
    pub beam_microamperes: Option<f64>,
    /// Enclosure temperature, degrees Celsius.
    pub enclosure_celsius: Option<f64>,
}

/// Whoever watches a session.
pub trait Observer {
    /// Called with each update, in order.
    fn update(&mut self, update: &Update);

    /// Notes a person typed since the last call.
    fn notes(&mut self) -> Vec<String> {
        Vec::new()
    }

    /// Whether the person wants to end.
    fn wants_to_stop(&mut self) -> bool {
        false
    }
}

impl Observer for Vec<Update> {
    fn update(&mut self, update: &Update) {
        self.push(update.clone());
    }
}
