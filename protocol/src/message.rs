//! The two enums that travel. Append only.

use postcard::experimental::max_size::MaxSize;
use serde::{Deserialize, Serialize};

use crate::{
    DeviceId,
    event::{Event, ResetCause},
    reading::Reading,
    record::{CertificateHash, CertificateRecord, LampSettings, SettingsRecord},
    status::Status,
};

/// What a controller sends.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
#[non_exhaustive]
pub enum ToHost {
    /// Answer to [`ToDevice::Hello`]. Frozen for every protocol version, so that a mismatch can be told in words.
    Hello(Hello),
    /// A reading.
    Reading(Reading),
    /// An event.
    Event(Event),
    /// Slow inputs, five times a second.
    Slow(Slow),
    /// One edge of the camera's strobe.
    Strobe(Strobe),
    /// Entries that the journal lost before the host took them.
    Gap(Gap),
    /// The state now.
    Status(Status),
    /// Answer to [`ToDevice::Echo`].
    EchoReply(EchoReply),
    /// Answer to [`Request::ReadCertificate`]; `None` where none is readable.
    Certificate(Option<CertificateRecord>),
    /// Answer to [`Request::ReadSettings`].
    Settings(SettingsRecord),
    /// A request was carried out.
    Done(Request),
    /// A request was refused.
    Refused {
        /// Which.
        request: Request,
        /// Why.
        why: Refusal,
    },
    /// This controller serves a host on its other port.
    Busy,
}

/// What a host sends.
///
/// Nothing here can close, bypass, reset or start anything.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
#[non_exhaustive]
pub enum ToDevice {
    /// Opens (or opens again) the conversation: the controller answers with its own hello and then sends every journal
    /// entry from the first unacknowledged one. Frozen for every protocol version.
    Hello(HostHello),
    /// The host is there. At least once a second.
    Heartbeat,
    /// A clock exchange.
    Echo {
        /// Comes back unchanged.
        token: u32,
    },
    /// The host has everything before these numbers on its disk.
    Ack(Ack),
    /// Something was damaged on the way: send again everything that is not acknowledged.
    Rewind,
    /// Asks for something.
    Ask(Request),
    /// Writes the certificate record; refused while the permit is given.
    WriteCertificate(CertificateRecord),
    /// Writes the settings record; refused while the permit is given.
    WriteSettings(SettingsRecord),
    /// Starts or stops the sync lamp until the next restart.
    Lamp(LampSettings),
    /// The host ends the conversation: its silence from now on is no failure, but the permit is withdrawn all the same.
    Goodbye,
}

/// What a host may ask. Append only.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
#[non_exhaustive]
pub enum Request {
    /// The certificate record.
    ReadCertificate,
    /// The settings record.
    ReadSettings,
    /// Stands for [`ToDevice::WriteCertificate`] in an answer.
    WriteCertificate,
    /// Stands for [`ToDevice::WriteSettings`] in an answer.
    WriteSettings,
    /// Stands for [`ToDevice::Lamp`] in an answer.
    Lamp,
}

/// Why a request was refused. Append only.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
#[non_exhaustive]
pub enum Refusal {
    /// The permit is given; writing the store would stop the processor.
    PermitGiven,
    /// A field is out of its range.
    OutOfRange,
    /// The record names another board.
    OtherDevice,
    /// A write is under way.
    Busy,
    /// The store did not take it; the old record is still in force.
    StoreFailed,
    /// This controller has no such thing.
    Unsupported,
}

/// What kind of controller speaks.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
#[non_exhaustive]
pub enum DeviceKind {
    /// A board.
    Board,
    /// The simulated bench: everything it says is marked SIMULATED.
    Simulated,
}

/// A controller's first words.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
pub struct Hello {
    /// The protocol version it speaks.
    pub protocol: u16,
    /// Which board.
    pub device: DeviceId,
    /// What kind.
    pub kind: DeviceKind,
    /// Firmware version: major, minor, patch.
    pub firmware: [u8; 3],
    /// Power-up counter: one number, one clock.
    pub epoch: u32,
    /// Why the previous epoch ended.
    pub reset_cause: ResetCause,
    /// Microseconds since power-up.
    pub time_us: u64,
    /// The certificate in its store, or [`CertificateHash::NONE`].
    pub certificate: CertificateHash,
    /// First entry it still holds of each stream; what lies before is acknowledged, or lost and announced as a gap.
    pub first: Ack,
    /// The entry it will number next in each stream.
    pub next: Ack,
}

/// A host's first words.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
pub struct HostHello {
    /// The protocol version it speaks.
    pub protocol: u16,
    /// A number that names this host process, so that two hosts on two ports can be told apart.
    pub host: u32,
}

/// The first number *not* yet dealt with, for each journaled stream.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
pub struct Ack {
    /// Readings.
    pub readings: u32,
    /// Events.
    pub events: u32,
    /// Slow inputs.
    pub slow: u32,
    /// Strobe edges.
    pub strobes: u32,
}

/// A journaled stream. Append only.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, Serialize, Deserialize, MaxSize)]
#[non_exhaustive]
pub enum Stream {
    /// Readings.
    Readings,
    /// Events.
    Events,
    /// Slow inputs.
    Slow,
    /// Strobe edges.
    Strobes,
}

/// Entries that were overrun in the journal before the host acknowledged them.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
pub struct Gap {
    /// Which stream.
    pub stream: Stream,
    /// The first lost number.
    pub first: u32,
    /// How many.
    pub count: u32,
}

/// Slow inputs. What is not fitted is `None`: *not evaluated*, never *passed*.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
pub struct Slow {
    /// Counts within one epoch, from 0, without a hole.
    pub seq: u32,
    /// When, microseconds since power-up.
    pub time_us: u64,
    /// Beam current, nanoamperes, mean since the one before.
    pub beam_na: Option<i32>,
    /// Temperature inside the divider's enclosure, hundredths of a degree Celsius.
    pub enclosure_centicelsius: Option<i16>,
}

/// One edge of the camera's strobe.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
pub struct Strobe {
    /// Counts edges within one epoch, from 0, without a hole.
    pub seq: u32,
    /// When, microseconds since power-up.
    pub time_us: u64,
    /// `true`: exposure begins.
    pub rising: bool,
}

/// A clock exchange's answer.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
pub struct EchoReply {
    /// As it came.
    pub token: u32,
    /// When the question was taken from the wire, microseconds since power-up.
    pub received_us: u64,
    /// When the answer was made, microseconds since power-up.
    pub sent_us: u64,
}
