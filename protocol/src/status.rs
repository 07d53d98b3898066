//! The controller's state as it is now: for screens. Nothing is computed from it later, so it is not journaled.

use postcard::experimental::max_size::MaxSize;
use serde::{Deserialize, Serialize};

use crate::event::TripSet;

/// Levels of the input lines after the glitch filter.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Hash, Serialize, Deserialize, MaxSize)]
pub struct Contacts {
    /// Interlock channel A is closed.
    pub loop_a_closed: bool,
    /// Interlock channel B is closed.
    pub loop_b_closed: bool,
    /// Both contactors are released (their mirror contacts are closed).
    pub contactors_released: bool,
    /// The reset button is pressed.
    pub button_pressed: bool,
}

/// Where the permit stands, and what it waits for. Append only.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Hash, Serialize, Deserialize, MaxSize)]
#[non_exhaustive]
pub enum PermitState {
    /// Withdrawn; a cause is still there, or a loop is open.
    #[default]
    Withdrawn,
    /// Withdrawn; no cause is left, but the loops must each be seen open and then closed.
    AwaitingLoopTest,
    /// Withdrawn; all is well, waiting for a press of the reset button.
    AwaitingPress,
    /// Withdrawn; the button is down, waiting for its release.
    AwaitingRelease,
    /// Given: the square wave runs.
    Given,
}

/// The controller now. Sent ten times a second.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
pub struct Status {
    /// When, microseconds since power-up.
    pub time_us: u64,
    /// The contacts.
    pub contacts: Contacts,
    /// The permit.
    pub permit: PermitState,
    /// Latched trips.
    pub latched: TripSet,
    /// Those of them whose cause is still there.
    pub present: TripSet,
    /// Whether a person started the controller uncalibrated.
    pub uncalibrated: bool,
    /// Whether the HV PRESENT lamp is lit.
    pub hv_present: bool,
    /// Accelerating voltage of the main sense over the last mains cycles, millivolts; `None` where no number can be
    /// trusted: treat as live.
    pub sense_mv: Option<i32>,
    /// The same of the cross-sense.
    pub cross_mv: Option<i32>,
    /// Whether the hardware comparator is fitted: `None` is *not evaluated*.
    pub comparator: Option<bool>,
    /// Share of time asleep since the last status, per mille; `None` where the shell does not measure it.
    pub idle_per_mille: Option<u16>,
    /// Frames from the host that were damaged, since power-up.
    pub damaged_frames: u32,
}
