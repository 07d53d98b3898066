//! What happened, when: contacts, permit, trips, restarts.

use postcard::experimental::max_size::MaxSize;
use serde::{Deserialize, Serialize};

use crate::record::CertificateHash;

/// One thing that happened at one time.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
pub struct Event {
    /// Counts events within one epoch, from 0, without a hole.
    pub seq: u32,
    /// When, microseconds since power-up.
    pub time_us: u64,
    /// What.
    pub kind: EventKind,
}

/// What an event tells. Append only.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
#[non_exhaustive]
pub enum EventKind {
    /// The controller started. Always event 0 of an epoch.
    Started {
        /// Why it had stopped.
        cause: ResetCause,
    },
    /// An input line changed (after the glitch filter) to `active`: closed, released, pressed or tripped.
    Line {
        /// Which line.
        line: Line,
        /// The new state; see [`Line`] for what it means.
        active: bool,
    },
    /// The permit square wave began.
    PermitGiven,
    /// The permit was withdrawn: the square wave made its last edge.
    PermitWithdrawn,
    /// A trip latched.
    Tripped {
        /// Which.
        trip: Trip,
        /// Main sense at that time, millivolts at the tube, by the controller's certificate; `None` where unknown.
        sense_mv: Option<i32>,
        /// Cross-sense at that time, millivolts at the tube; `None` where unknown.
        cross_mv: Option<i32>,
    },
    /// The reset button cleared this trip.
    Cleared {
        /// Which.
        trip: Trip,
    },
    /// A person started the controller uncalibrated by the long press.
    UncalibratedStart,
    /// No heartbeat from the host for the grace time.
    HostLost,
    /// The host is heard again.
    HostBack,
    /// A certificate was written to the store; readings from `reading_seq` on carry it.
    CertificateStored {
        /// Its hash.
        hash: CertificateHash,
        /// First reading under it.
        reading_seq: u32,
    },
    /// Settings were written to the store.
    SettingsStored,
    /// A converter's configuration read back wrong and was written again.
    ConfigurationRepaired {
        /// `true` for the cross-sense.
        cross: bool,
    },
    /// A held bus was freed by clocking it (or the attempt failed).
    BusRecovered {
        /// `true` for the cross-sense's bus.
        cross: bool,
        /// Whether both lines were high afterwards.
        freed: bool,
    },
    /// The sync lamp began its sequence: chip 0 lit at this event's time.
    LampStarted {
        /// Length of one chip, microseconds.
        chip_us: u32,
    },
    /// The sync lamp stopped.
    LampStopped,
    /// The main loop did not poll for longer than it promises.
    LateLoop {
        /// The longest pause, microseconds.
        pause_us: u32,
    },
}

/// An input line and the meaning of its active state.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, Serialize, Deserialize, MaxSize)]
#[non_exhaustive]
pub enum Line {
    /// Interlock channel A; active is closed.
    LoopA,
    /// Interlock channel B; active is closed.
    LoopB,
    /// Mirror contacts of both contactors in series; active is *both released*.
    Contactors,
    /// The reset button; active is pressed.
    Button,
    /// The camera's strobe or exposure-active signal; active is exposing.
    Strobe,
    /// The hardware over-voltage comparator; active is tripped.
    Comparator,
}

/// Why the controller had stopped before this epoch. Append only.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
#[non_exhaustive]
pub enum ResetCause {
    /// Power was applied, or dipped below the brown-out level.
    PowerOn,
    /// The run pin or a debug probe.
    External,
    /// The watchdog found the main loop dead.
    Watchdog,
    /// The program found an impossible state and stopped itself.
    Panic,
    /// Not known.
    #[default]
    Unknown,
}

/// A latched cause that withdraws the permit. Append only: the number is stored and exported.
///
/// [`TRIPS`](crate::TRIPS) holds each one's detection, sentence and way to clear.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, Serialize, Deserialize, MaxSize)]
#[non_exhaustive]
pub enum Trip {
    /// Both loops opened: a door, cover or stop.
    LoopOpened,
    /// One loop is open while the other is closed for longer than the discrepancy time.
    LoopsDisagree,
    /// The mirror contacts say that a contactor is still closed though the permit is withdrawn.
    ContactorWelded,
    /// The mirror contacts say that the contactors are released though the permit is given.
    ContactorDropped,
    /// The button is pressed for longer than any person presses.
    ButtonStuck,
    /// The main converter gives nothing.
    SenseSilent,
    /// The cross converter gives nothing.
    CrossSilent,
    /// The main converter repeats itself.
    SenseFrozen,
    /// The cross converter repeats itself.
    CrossFrozen,
    /// The senses disagree, by a ratio that fits no single named fault.
    SensesDisagree,
    /// The main sense fell to nothing while the cross-sense did not: an open string.
    SenseLost,
    /// The cross-sense fell to nothing while the main sense did not: an open string.
    CrossLost,
    /// The ratio of the senses stepped: an element of a string or its low side changed.
    RatioChanged,
    /// A converter stands at the end of its scale: the low side is open or the clamp conducts.
    TapOverRange,
    /// The voltage passed the approved limit (two conversions in a row).
    OverVoltage,
    /// The hardware over-voltage comparator tripped.
    Comparator,
    /// The beam current passed its limit.
    OverCurrent,
    /// The voltage fell faster than the supply can: an arc.
    Arc,
    /// Voltage is still there after the contactors released and the bleed time passed.
    VoltageAfterOff,
    /// The host was not heard for the grace time.
    HostLost,
    /// The controller restarted.
    Restarted,
    /// There is no readable certificate.
    NoCertificate,
    /// The settings record is unreadable; defaults are in force.
    SettingsUnreadable,
}

impl Trip {
    /// Every trip, in the order of its number.
    pub const ALL: [Self; 23] = [
        Self::LoopOpened,
        Self::LoopsDisagree,
        Self::ContactorWelded,
        Self::ContactorDropped,
        Self::ButtonStuck,
        Self::SenseSilent,
        Self::CrossSilent,
        Self::SenseFrozen,
        Self::CrossFrozen,
        Self::SensesDisagree,
        Self::SenseLost,
        Self::CrossLost,
        Self::RatioChanged,
        Self::TapOverRange,
        Self::OverVoltage,
        Self::Comparator,
        Self::OverCurrent,
        Self::Arc,
        Self::VoltageAfterOff,
        Self::HostLost,
        Self::Restarted,
        Self::NoCertificate,
        Self::SettingsUnreadable,
    ];
}

/// A set of trips.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Hash, Serialize, Deserialize, MaxSize)]
pub struct TripSet(pub u32);

impl TripSet {
    /// The set with nothing in it.
    pub const EMPTY: Self = Self(0);

    /// Whether `trip` is in the set.
    pub const fn contains(self, trip: Trip) -> bool {
        self.0 & (1 << trip as u32) != 0
    }

    /// Adds `trip`; tells whether it is new.
    pub fn insert(&mut self, trip: Trip) -> bool {
        let new = !self.contains(trip);
        self.0 |= 1 << trip as u32;
        new
    }

    /// Takes `trip` out.
    pub fn remove(&mut self, trip: Trip) {
        self.0 &= !(1 << trip as u32);
    }

    /// Whether nothing is in the set.
    pub const fn is_empty(self) -> bool {
        self.0 == 0
    }

    /// The trips in the set, in the order of their numbers. Bits a newer peer may have set are passed over.
    pub fn iter(self) -> impl Iterator<Item = Trip> {
        Trip::ALL.into_iter().filter(move |trip| self.contains(*trip))
    }
}
