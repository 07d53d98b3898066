//! What the host has not acknowledged yet: readings, events, slow inputs and strobe edges, each in its own ring.
//!
//! An entry stays until the host says that it is on its disk. A ring that is full gives up its oldest entry, and what
//! was given up is announced as a counted gap. Readings take 24 bytes each; their times are kept as the low 32 bits of
//! the clock, which is enough for entries younger than 71 minutes.

use ringvolt_protocol::{
    Ack, CertificateHash, Event, EventKind, Gap, Reading, ReadingFlags, Slow, Stream, Strobe, Trip, WindowCodes,
};

/// Readings kept: 76.8 s at 100 a second.
pub const READINGS: usize = 7_680;
/// Events kept.
pub const EVENTS: usize = 256;
/// Slow inputs kept, five a second: 102 s.
pub const SLOWS: usize = 512;
/// Strobe edges kept: 17 s at 30 frames a second.
pub const STROBES: usize = 1_024;

/// Bits of a packed reading's flags that tell the certificate; the others are [`ReadingFlags`].
const GENERATION_SHIFT: u16 = 14;
const FLAG_BITS: u16 = (1 << GENERATION_SHIFT) - 1;

/// Low 24 bits of a packed word hold the sum, the upper eight the count.
const SUM_BITS: u32 = 24;

/// The kind of event whose bytes are all zero: the compiler keeps the tag of the others within this one's fields.
const BLANK: EventKind = EventKind::Tripped { trip: Trip::LoopOpened, sense_mv: None, cross_mv: None };

/// One converter's part of a packed reading.
#[derive(Clone, Copy)]
struct PackedCodes {
    sum_count: u32,
    min: i16,
    max: i16,
}

/// One reading in 24 bytes.
#[derive(Clone, Copy)]
pub struct PackedReading {
    time_low: u32,
    duration_us: u16,
    flags_generation: u16,
    sense: PackedCodes,
    cross: PackedCodes,
}

const _: () = assert!(core::mem::size_of::<PackedReading>() == 24);

impl PackedCodes {
    const EMPTY: Self = Self { sum_count: 0, min: 0, max: 0 };

    const fn pack(codes: &WindowCodes) -> Self {
        let sum = (codes.sum as u32) & ((1 << SUM_BITS) - 1);
        Self { sum_count: sum | (codes.count as u32) << SUM_BITS, min: codes.min, max: codes.max }
    }

    const fn unpack(&self) -> WindowCodes {
        // Shifted up and down again as a signed number, so that the sign is carried on. 255 codes fit 24 bits.
        let sum = ((self.sum_count << (32 - SUM_BITS)) as i32) >> (32 - SUM_BITS);
        WindowCodes { sum, min: self.min, max: self.max, count: (self.sum_count >> SUM_BITS) as u8 }
    }
}

impl PackedReading {
    const EMPTY: Self =
        Self { time_low: 0, duration_us: 0, flags_generation: 0, sense: PackedCodes::EMPTY, cross: PackedCodes::EMPTY };
}

/// A slow input as it is kept.
#[derive(Clone, Copy)]
struct PackedSlow {
    time_us: u64,
    beam_na: Option<i32>,
    enclosure_centicelsius: Option<i16>,
}

/// A strobe edge as it is kept: the time's lower 63 bits above the level. Edges may be rare, and then wait for a host for
/// hours, so that the low 32 bits would not do.
#[derive(Clone, Copy)]
struct PackedStrobe(u64);

/// A ring of entries with running numbers.
struct Ring<T, const N: usize> {
    entries: [T; N],
    /// Everything before this number was acknowledged.
    acked: u32,
    /// Oldest number that is held; above `acked` after an overrun.
    first: u32,
    /// Next number to be given out.
    next: u32,
    /// Next number to be sent.
    cursor: u32,
}

impl<T: Copy, const N: usize> Ring<T, N> {
    const fn new(empty: T) -> Self {
        Self { entries: [empty; N], acked: 0, first: 0, next: 0, cursor: 0 }
    }

    fn push(&mut self, entry: T) {
        // Numbers run out after 497 days of readings; a number dealt twice would be worse than an entry not kept.
        if self.next == u32::MAX {
            return;
        }
        if self.next - self.first >= N as u32 {
            self.first += 1;
        }
        self.entries[self.next as usize % N] = entry;
        self.next += 1;
    }

    /// The host has everything before `upto` on its disk. Numbers that were never given out, or were acknowledged
    /// before, change nothing.
    fn acknowledge(&mut self, upto: u32) {
        if upto > self.acked && upto <= self.next {
            self.acked = upto;
            self.first = self.first.max(upto);
            self.cursor = self.cursor.max(upto);
        }
    }

    fn rewind(&mut self) {
        self.cursor = self.acked;
    }

    /// The gap to be announced before the next entry, if entries were given up that the host may not have.
    fn gap(&self, stream: Stream) -> Option<Gap> {
        (self.cursor < self.first).then(|| Gap { stream, first: self.cursor, count: self.first - self.cursor })
    }

    /// The next entry to send; only when no gap is to be announced before it.
    fn waiting(&self) -> Option<(u32, T)> {
        (self.cursor >= self.first && self.cursor < self.next)
            .then(|| (self.cursor, self.entries[self.cursor as usize % N]))
    }
}

/// All four rings.
pub struct Journal {
    readings: Ring<PackedReading, READINGS>,
    events: Ring<Event, EVENTS>,
    slow: Ring<PackedSlow, SLOWS>,
    strobes: Ring<PackedStrobe, STROBES>,
    /// Certificates by the two bits that readings carry.
    certificates: [CertificateHash; 4],
    generation: u8,
}

impl Default for Journal {
    fn default() -> Self {
        Self::new()
    }
}

impl Journal {
    /// An empty journal. Every byte of it is zero but for padding, so that a static one costs no flash.
    pub const fn new() -> Self {
        Self {
            readings: Ring::new(PackedReading::EMPTY),
            events: Ring::new(Event { seq: 0, time_us: 0, kind: BLANK }),
            slow: Ring::new(PackedSlow { time_us: 0, beam_na: None, enclosure_centicelsius: None }),
            strobes: Ring::new(PackedStrobe(0)),
            certificates: [CertificateHash::NONE; 4],
            generation: 0,
        }
    }

    /// Readings from now on were measured under this certificate.
    pub fn hold_certificate(&mut self, hash: CertificateHash) {
        if self.certificates[usize::from(self.generation)] != hash {
            self.generation = (self.generation + 1) % 4;
            self.certificates[usize::from(self.generation)] = hash;
        }
    }

    /// The number the next reading will have.
    pub const fn next_reading(&self) -> u32 {
        self.readings.next
    }

    /// Keeps a reading; its own number and certificate are not used.
    pub fn reading(&mut self, reading: &Reading) {
        self.readings.push(PackedReading {
            time_low: reading.time_us as u32,
            duration_us: reading.duration_us,
            flags_generation: (reading.flags.0 & FLAG_BITS) | u16::from(self.generation) << GENERATION_SHIFT,
            sense: PackedCodes::pack(&reading.sense),
            cross: PackedCodes::pack(&reading.cross),
        });
    }

    /// Keeps an event.
    pub fn event(&mut self, time_us: u64, kind: EventKind) {
        let seq = self.events.next;
        self.events.push(Event { seq, time_us, kind });
    }

    /// Keeps slow inputs; their own number is not used.
    pub fn slow(&mut self, slow: &Slow) {
        self.slow.push(PackedSlow {
            time_us: slow.time_us,
            beam_na: slow.beam_na,
            enclosure_centicelsius: slow.enclosure_centicelsius,
        });
    }

    /// Keeps a strobe edge.
    pub fn strobe(&mut self, time_us: u64, rising: bool) {
        self.strobes.push(PackedStrobe(time_us << 1 | u64::from(rising)));
    }

    /// Lets go of what the host has on its disk.
    pub fn acknowledge(&mut self, ack: &Ack) {
        self.readings.acknowledge(ack.readings);
        self.events.acknowledge(ack.events);
        self.slow.acknowledge(ack.slow);
        self.strobes.acknowledge(ack.strobes);
    }

    /// Everything unacknowledged is to be sent again.
    pub fn rewind(&mut self) {
        self.readings.rewind();
        self.events.rewind();
        self.slow.rewind();
        self.strobes.rewind();
    }

    /// Oldest number held of each stream.
    pub const fn first(&self) -> Ack {
        Ack {
            readings: self.readings.first,
            events: self.events.first,
            slow: self.slow.first,
            strobes: self.strobes.first,
        }
    }

    /// Next number of each stream.
    pub const fn next(&self) -> Ack {
        Ack { readings: self.readings.next, events: self.events.next, slow: self.slow.next, strobes: self.strobes.next }
    }

    /// A gap that is to be announced now; it counts as announced.
    pub fn take_gap(&mut self) -> Option<Gap> {
        let gap = (self.events.gap(Stream::Events))
            .or(self.strobes.gap(Stream::Strobes))
            .or(self.slow.gap(Stream::Slow))
            .or(self.readings.gap(Stream::Readings))?;
        match gap.stream {
            Stream::Events => self.events.cursor = self.events.first,
            Stream::Strobes => self.strobes.cursor = self.strobes.first,
            Stream::Slow => self.slow.cursor = self.slow.first,
            _ => self.readings.cursor = self.readings.first,
        }
        Some(gap)
    }

    /// The next event to send; it counts as sent.
    pub fn take_event(&mut self) -> Option<Event> {
        let (_, event) = self.events.waiting()?;
        self.events.cursor += 1;
        Some(event)
    }

    /// The next strobe edge to send; it counts as sent.
    pub fn take_strobe(&mut self) -> Option<Strobe> {
        let (seq, strobe) = self.strobes.waiting()?;
        self.strobes.cursor += 1;
        Some(Strobe { seq, time_us: strobe.0 >> 1, rising: strobe.0 & 1 == 1 })
    }

    /// The next slow inputs to send; they count as sent.
    pub fn take_slow(&mut self) -> Option<Slow> {
        let (seq, slow) = self.slow.waiting()?;
        self.slow.cursor += 1;
        let PackedSlow { time_us, beam_na, enclosure_centicelsius } = slow;
        Some(Slow { seq, time_us, beam_na, enclosure_centicelsius })
    }

    /// The next reading to send; it counts as sent.
    pub fn take_reading(&mut self, now_us: u64) -> Option<Reading> {
        let (seq, packed) = self.readings.waiting()?;
        self.readings.cursor += 1;
        Some(Reading {
            seq,
            time_us: widen(packed.time_low, now_us),
            duration_us: packed.duration_us,
            sense: packed.sense.unpack(),
            cross: packed.cross.unpack(),
            flags: ReadingFlags(packed.flags_generation & FLAG_BITS),
            certificate: self.certificates[usize::from(packed.flags_generation >> GENERATION_SHIFT)],
        })
    }
}

/// The time not after `now_us` whose low 32 bits these are.
const fn widen(time_low: u32, now_us: u64) -> u64 {
    now_us.wrapping_sub((now_us as u32).wrapping_sub(time_low) as u64)
}

#[cfg(test)]
mod tests {
    extern crate std;
    use std::{boxed::Box, vec::Vec};

    use proptest::prelude::*;

    use super::*;

    fn reading(seq: u32, time_us: u64) -> Reading {
        Reading { seq, time_us, duration_us: 10_000, ..Reading::default() }
    }

    fn drain(journal: &mut Journal, now_us: u64) -> (Vec<Gap>, Vec<Reading>) {
        let gaps = core::iter::from_fn(|| journal.take_gap()).collect();
        let readings = core::iter::from_fn(|| journal.take_reading(now_us)).collect();
        (gaps, readings)
    }

    #[test]
    fn entries_stay_until_they_are_acknowledged() {
        let mut journal = Box::new(Journal::new());
        for seq in 0..10 {
            journal.reading(&reading(seq, u64::from(seq) * 10_000));
        }
        assert_eq!(drain(&mut journal, 200_000).1.len(), 10);
        assert_eq!(drain(&mut journal, 200_000).1.len(), 0);
        journal.acknowledge(&Ack { readings: 4, ..Ack::default() });
        journal.rewind();
        let again = drain(&mut journal, 200_000).1;
        assert_eq!(again.iter().map(|r| r.seq).collect::<Vec<_>>(), [4, 5, 6, 7, 8, 9]);
    }

    #[test]
    fn what_is_overrun_is_announced_with_its_count() {
        let mut journal = Box::new(Journal::new());
        for seq in 0..READINGS as u32 + 25 {
            journal.reading(&reading(seq, u64::from(seq) * 10_000));
        }
        let (gaps, readings) = drain(&mut journal, 100_000_000);
        assert_eq!(gaps, [Gap { stream: Stream::Readings, first: 0, count: 25 }]);
        assert_eq!((readings.len(), readings[0].seq), (READINGS, 25));
        // Sent but not acknowledged: announced again when it is asked for again.
        journal.rewind();
        assert_eq!(drain(&mut journal, 100_000_000).0.len(), 1);
    }

    #[test]
    fn foolish_acknowledgements_change_nothing() {
        let mut journal = Box::new(Journal::new());
        for seq in 0..10 {
            journal.reading(&reading(seq, 0));
        }
        for readings in [11, u32::MAX, 0] {
            journal.acknowledge(&Ack { readings, ..Ack::default() });
        }
        assert_eq!(journal.first().readings, 0);
        assert_eq!(drain(&mut journal, 0).1.len(), 10);
    }

    #[test]
    fn readings_keep_the_certificate_they_were_measured_under() {
        let mut journal = Box::new(Journal::new());
        for generation in 1..=3u8 {
            journal.hold_certificate(CertificateHash([generation; 8]));
            journal.reading(&reading(0, 0));
        }
        let held: Vec<u8> = drain(&mut journal, 0).1.iter().map(|r| r.certificate.0[0]).collect();
        assert_eq!(held, [1, 2, 3]);
    }

    proptest! {
        #[test]
        fn a_reading_survives_packing(
            time_us in 0u64..1 << 50,
            age_us in 0u64..4_000_000_000,
            count in 1u8..=255,
            mean in i16::MIN..=i16::MAX,
            min: i16,
            max: i16,
            flags in 0u16..1 << 13,
        ) {
            let codes = WindowCodes { sum: i32::from(mean) * i32::from(count), min, max, count };
            let whole = Reading {
                seq: 0,
                time_us,
                duration_us: 8_333,
                sense: codes,
                cross: WindowCodes { sum: -codes.sum.min(8_000_000), ..codes },
                flags: ReadingFlags(flags),
                certificate: CertificateHash([9; 8]),
            };
            let mut journal = Box::new(Journal::new());
            journal.hold_certificate(whole.certificate);
            journal.reading(&whole);
            prop_assert_eq!(journal.take_reading(time_us + age_us), Some(whole));
        }
    }
}
