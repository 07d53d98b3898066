//! Readings that can be told apart, for tests of run files.

use ringvolt_protocol::{Ack, CertificateHash, DeviceKind, Hello, Reading, ReadingFlags, ResetCause, WindowCodes};

/// A simulated controller's first words.
pub fn hello() -> Hello {
    Hello {
        protocol: ringvolt_protocol::PROTOCOL_VERSION,
        device: [7; 8],
        kind: DeviceKind::Simulated,
        firmware: [0, 0, 0],
        epoch: 1,
        reset_cause: ResetCause::PowerOn,
        time_us: 0,
        certificate: CertificateHash([3; 8]),
        first: Ack::default(),
        next: Ack::default(),
    }
}

/// A reading whose codes follow from its number, as large as those of a bench at some kilovolts.
pub fn reading(seq: u32) -> Reading {
    let base = 9_000 + (seq % 911) as i16;
    let codes = |base: i16| WindowCodes { sum: i32::from(base) * 9, min: base - 4, max: base + 4, count: 9 };
    Reading {
        seq,
        time_us: u64::from(seq) * 10_000,
        duration_us: 10_000,
        sense: codes(base),
        cross: codes(base - 700),
        flags: ReadingFlags::PERMIT,
        certificate: CertificateHash([3; 8]),
    }
}
