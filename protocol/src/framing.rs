//! Messages in a byte stream: postcard, CRC-32, COBS, and zero as the only delimiter.
//!
//! postcard's own accumulator is not used: it checks no CRC, and after an over-long frame it hands the tail back as a
//! message. Here an over-long frame is thrown away up to the next zero, and bytes left over behind a message make
//! the frame invalid.

use crc::{CRC_32_ISO_HDLC, Crc, Table};
use postcard::experimental::max_size::MaxSize;
use serde::{Serialize, de::DeserializeOwned};

use crate::message::{ToDevice, ToHost};

// Sixteen entries of table instead of 256: the controller has the time, and the kilobyte is better spent elsewhere.
static CRC: Crc<u32, Table<1>> = Crc::<u32, Table<1>>::new(&CRC_32_ISO_HDLC);

const CRC_BYTES: usize = 4;

/// The longest frame on the wire, delimiter and all, bytes.
pub const MAX_FRAME: usize = 256;

/// The longest content of a frame, message and CRC, before COBS, bytes: COBS adds one byte per 254 begun, and the zero.
const MAX_CONTENT: usize = MAX_FRAME - 3;

// The largest message of either side must fit, whatever its values are.
const _: () = assert!(ToHost::POSTCARD_MAX_SIZE + CRC_BYTES <= MAX_CONTENT);
const _: () = assert!(ToDevice::POSTCARD_MAX_SIZE + CRC_BYTES <= MAX_CONTENT);

/// A message could not be framed.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum EncodeError {
    /// The buffer is shorter than the frame.
    BufferTooSmall,
}

impl core::fmt::Display for EncodeError {
    fn fmt(&self, f: &mut core::fmt::Formatter<'_>) -> core::fmt::Result {
        write!(f, "the buffer is too small for the message: give it {MAX_FRAME} bytes")
    }
}

impl core::error::Error for EncodeError {}

/// Writes `message` as one frame, with its closing zero, and returns the frame's length in bytes.
///
/// # Errors
/// [`EncodeError::BufferTooSmall`]; never with a buffer of [`MAX_FRAME`] bytes.
pub fn encode<M: Serialize>(message: &M, frame: &mut [u8]) -> Result<usize, EncodeError> {
    let mut content = [0u8; MAX_CONTENT];
    let used =
        postcard::to_slice_crc32(message, &mut content, CRC.digest()).map_err(|_| EncodeError::BufferTooSmall)?.len();
    let worst = cobs::max_encoding_length(used) + 1;
    if frame.len() < worst {
        return Err(EncodeError::BufferTooSmall);
    }
    let length = cobs::encode(&content[..used], frame);
    frame[length] = 0;
    Ok(length + 1)
}

/// What a decoder threw away, and what it passed on.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub struct DecoderCounts {
    /// Messages passed on.
    pub messages: u32,
    /// Frames thrown away: over-long, not COBS, CRC wrong, not a message of this version, or bytes left over.
    pub damaged: u32,
    /// Bytes of those frames.
    pub damaged_bytes: u32,
}

/// Takes a byte stream apart, whatever pieces it comes in.
///
/// Never looks further back than one frame, so a damaged frame cannot swallow the good one behind its zero.
#[derive(Clone, Debug)]
pub struct Decoder {
    frame: [u8; MAX_FRAME],
    used: usize,
    discarding: bool,
    counts: DecoderCounts,
}

impl Default for Decoder {
    fn default() -> Self {
        Self::new()
    }
}

impl Decoder {
    /// An empty decoder.
    pub const fn new() -> Self {
        Self {
            frame: [0; MAX_FRAME],
            used: 0,
            discarding: false,
            counts: DecoderCounts { messages: 0, damaged: 0, damaged_bytes: 0 },
        }
    }

    /// What has gone through so far.
    pub const fn counts(&self) -> DecoderCounts {
        self.counts
    }

    /// Forgets the beginning of an unfinished frame: for a link that was opened anew.
    pub fn restart(&mut self) {
        self.used = 0;
        self.discarding = false;
    }

    /// Takes the next byte of the stream; gives a message when the byte closes one.
    pub fn push<M: DeserializeOwned>(&mut self, byte: u8) -> Option<M> {
        if byte != 0 {
            self.keep(byte);
            return None;
        }
        let frame_is_whole = !core::mem::take(&mut self.discarding);
        let used = core::mem::take(&mut self.used);
        // Two zeros in a row are the sign of a peer that flushes its line, not of damage.
        if used == 0 && frame_is_whole {
            return None;
        }
        let message = frame_is_whole.then(|| decode_frame(&mut self.frame[..used])).flatten();
        match message {
            Some(_) => self.counts.messages = self.counts.messages.wrapping_add(1),
            None => self.count_damage(used),
        }
        message
    }

    fn keep(&mut self, byte: u8) {
        if self.discarding {
            self.counts.damaged_bytes = self.counts.damaged_bytes.saturating_add(1);
        } else if self.used == self.frame.len() {
            self.discarding = true;
            self.counts.damaged_bytes = self.counts.damaged_bytes.saturating_add(1);
        } else {
            self.frame[self.used] = byte;
            self.used += 1;
        }
    }

    fn count_damage(&mut self, bytes: usize) {
        self.counts.damaged = self.counts.damaged.saturating_add(1);
        self.counts.damaged_bytes = self.counts.damaged_bytes.saturating_add(bytes as u32);
    }
}

/// The message in one frame without its zero, or `None` for any damage.
fn decode_frame<M: DeserializeOwned>(frame: &mut [u8]) -> Option<M> {
    let used = cobs::decode_in_place(frame).ok()?;
    let content = frame.get(..used)?;
    let (body, crc) = content.split_at_checked(used.checked_sub(CRC_BYTES)?)?;
    if CRC.checksum(body).to_le_bytes() != crc {
        return None;
    }
    match postcard::take_from_bytes(body) {
        Ok((message, [])) => Some(message),
        _ => None,
    }
}
