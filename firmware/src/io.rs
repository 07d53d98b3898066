//! What goes into [`Controller::poll`](crate::Controller::poll) and what comes out.

use ringvolt_protocol::{CertificateRecord, Contacts, DeviceId, DeviceKind, Line, ResetCause, SettingsRecord};

/// What a shell knows when it starts the controller.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Boot {
    /// Which board.
    pub device: DeviceId,
    /// Board or simulated bench.
    pub kind: DeviceKind,
    /// Power-up counter, one higher than at the last start.
    pub epoch: u32,
    /// Why the previous epoch ended.
    pub reset_cause: ResetCause,
    /// The certificate record, if the store holds a readable one.
    pub certificate: Option<CertificateRecord>,
    /// The settings record; `Err` where the store holds an unreadable one, `Ok(None)` where it never held one.
    pub settings: Result<Option<SettingsRecord>, Unreadable>,
}

/// A record in the store failed its CRC or its ranges.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Unreadable;

/// Which converter.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash)]
pub enum Channel {
    /// The main divider's.
    Sense,
    /// The independent second one's.
    Cross,
}

/// One result of a converter.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Conversion {
    /// Whose.
    pub channel: Channel,
    /// When it was complete (the ready pin's edge), microseconds since power-up. Never later than `poll`'s `now_us`.
    pub time_us: u64,
    /// Its code.
    pub code: i16,
}

/// Something a converter driver noticed.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum ConverterNotice {
    /// The configuration read back wrong and was written again; the conversion in flight is not to be trusted.
    ConfigurationRepaired(Channel),
    /// The bus was held, and was clocked; `freed` tells whether that helped.
    BusRecovered {
        /// Whose bus.
        channel: Channel,
        /// Whether both lines were high afterwards.
        freed: bool,
    },
}

/// One edge of an input pin, caught by interrupt.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Edge {
    /// Which pin.
    pub line: Line,
    /// The level after the edge, in the sense of [`Line`].
    pub active: bool,
    /// When, microseconds since power-up.
    pub time_us: u64,
}

/// Inputs that need not be fitted: `None` is *not evaluated*, never *passed*.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub struct OptionalInputs {
    /// Beam current, nanoamperes.
    pub beam_na: Option<i32>,
    /// Temperature in the divider's enclosure, hundredths of a degree Celsius.
    pub enclosure_centicelsius: Option<i16>,
    /// The hardware over-voltage comparator: `Some(true)` is tripped.
    pub comparator: Option<bool>,
}

/// How a store request ended.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum StoreOutcome {
    /// The record is in the store and was read back.
    Stored,
    /// It is not; the old record still is.
    Failed,
}

/// Everything that has come in since the last poll.
#[derive(Clone, Copy, Debug)]
pub struct Inputs<'a> {
    /// The pins' levels, sampled for this poll before any bus was touched.
    pub contacts: Contacts,
    /// Edges caught since the last poll, oldest first.
    pub edges: &'a [Edge],
    /// Conversions completed since the last poll, oldest first within each channel.
    pub conversions: &'a [Conversion],
    /// What the drivers noticed.
    pub notices: &'a [ConverterNotice],
    /// Inputs that need not be fitted.
    pub optional: OptionalInputs,
    /// Bytes from the host, in order.
    pub received: &'a [u8],
    /// The end of the store request that the last outputs asked for.
    pub stored: Option<StoreOutcome>,
    /// Share of time asleep, per mille, where the shell measures it.
    pub idle_per_mille: Option<u16>,
}

impl Inputs<'_> {
    /// Nothing but these contact levels.
    pub const fn quiet(contacts: Contacts) -> Self {
        Self {
            contacts,
            edges: &[],
            conversions: &[],
            notices: &[],
            optional: OptionalInputs { beam_na: None, enclosure_centicelsius: None, comparator: None },
            received: &[],
            stored: None,
            idle_per_mille: None,
        }
    }
}

/// A record to be written to the store. Asked for only while the permit is withdrawn.
// The larger variant sets the size; there is no heap to box it on, and one request exists at a time.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum StoreRequest {
    /// The certificate record.
    Certificate(CertificateRecord),
    /// The settings record.
    Settings(SettingsRecord),
}

/// What the pins shall be until the next poll.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Outputs {
    /// Level of the permit pin. Only its *changing* means permit: the charge pump behind it needs about 1 kHz.
    pub permit: bool,
    /// Level that keeps the HV PRESENT lamp dark. Low, floating or dead lights it.
    pub hv_lamp_dark: bool,
    /// The sync lamp.
    pub lamp: bool,
    /// The status LED.
    pub led: bool,
    /// A record to write before the next poll; the outcome goes into the next inputs.
    pub store: Option<StoreRequest>,
}
