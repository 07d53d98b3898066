//! What a Ringvolt controller and its host say to each other, and how it is framed.
//!
//! The layers, from the outside in:
//!
//! 1. [`framing`]: a byte stream cut at zero bytes (COBS), each piece closed by a CRC-32 over its content. Whatever
//!    happens to the stream, what comes out is a message that was sent, or a counted error.
//! 2. [`message`]: the two enums [`ToHost`] and [`ToDevice`], serialised with postcard.
//! 3. The values inside: [`reading`], [`event`], [`record`], [`status`].
//!
//! # Changing the wire
//!
//! Variants are appended, fields never: postcard neither names nor counts fields, so an old peer would misread a
//! changed message. A changed message is a new variant at the end of its enum. `tests/golden.rs` holds the bytes of
//! every message as they were first released, and fails when one moves.
#![no_std]

pub mod event;
pub mod framing;
pub mod lamp;
pub mod message;
pub mod reading;
pub mod record;
pub mod status;
pub mod trips;

pub use event::{Event, EventKind, Line, ResetCause, Trip, TripSet};
pub use framing::{Decoder, DecoderCounts, EncodeError, MAX_FRAME, encode};
pub use message::{
    Ack, DeviceKind, EchoReply, Gap, Hello, HostHello, Refusal, Request, Slow, Stream, Strobe, ToDevice, ToHost,
};
pub use reading::{Reading, ReadingFlags, WindowCodes};
pub use record::{CertificateHash, CertificateRecord, CodeToVolts, LampSettings, Polarity, SettingsRecord};
pub use status::{Contacts, PermitState, Status};
pub use trips::{TRIPS, TripRow};

/// The version of the wire this crate speaks. A peer of another version is refused, in words, at the hello.
pub const PROTOCOL_VERSION: u16 = 1;

/// Eight bytes that name one controller board (the flash chip's unique number on the RP2040).
pub type DeviceId = [u8; 8];
