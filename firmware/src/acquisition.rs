//! Conversions to readings: windows of time, one after another without a hole.
//!
//! Converters run up to 10 % off their nominal rate, so a window is laid out by time and holds 8 or 9 conversions. A
//! conversion belongs to the window in which it ended. A window is closed a little after its end, when no conversion of it
//! can still be on its way from the converter; a window without conversions becomes a reading all the same.

use ringvolt_protocol::{Reading, ReadingFlags, WindowCodes};

use crate::io::{Channel, Conversion};

/// A conversion reaches the controller at most so long after it ended, microseconds.
pub const ARRIVAL_US: u64 = 3_000;

/// Collects the conversions of one channel within one window.
#[derive(Clone, Copy, Debug, Default)]
struct Collected {
    codes: WindowCodes,
}

impl Collected {
    fn add(&mut self, code: i16) {
        let codes = &mut self.codes;
        if codes.count == 0 {
            (codes.min, codes.max) = (code, code);
        }
        // A window of 50 ms holds some 50 conversions; a converter gone wild must not wrap the count.
        if codes.count < u8::MAX {
            codes.sum += i32::from(code);
            codes.count += 1;
        }
        codes.min = codes.min.min(code);
        codes.max = codes.max.max(code);
    }
}

/// One window that is not closed yet.
#[derive(Clone, Copy, Debug, Default)]
struct Window {
    start_us: u64,
    end_us: u64,
    sense: Collected,
    cross: Collected,
    flags: ReadingFlags,
}

/// Lays out windows and fills them.
#[derive(Clone, Debug)]
pub struct Acquisition {
    window_ns: u32,
    /// The window being filled, and the one after it.
    windows: [Window; 2],
    /// Nanoseconds by which the last edge lies behind its microsecond.
    remainder_ns: u32,
    started: bool,
    /// The last pause of the main loop, from and to.
    pause_us: (u64, u64),
}

impl Acquisition {
    /// With windows of this length, nanoseconds.
    pub fn new(window_ns: u32) -> Self {
        Self { window_ns, windows: [Window::default(); 2], remainder_ns: 0, started: false, pause_us: (0, 0) }
    }

    /// New windows have this length; the present ones keep theirs.
    pub fn set_window(&mut self, window_ns: u32) {
        self.window_ns = window_ns;
    }

    fn start(&mut self, now_us: u64) {
        self.started = true;
        self.windows[0] = self.window_from(now_us);
        self.windows[1] = self.window_from(self.windows[0].end_us);
    }

    /// The window that begins at this edge. Edges are sums of whole nanoseconds, rounded down once each, so that
    /// rounding never adds up.
    fn window_from(&mut self, start_us: u64) -> Window {
        let length_ns = self.window_ns + self.remainder_ns;
        self.remainder_ns = length_ns % 1_000;
        Window { start_us, end_us: start_us + u64::from(length_ns / 1_000), ..Window::default() }
    }

    /// Takes a conversion; `false` where it belongs to no open window: too late, or from the future.
    pub fn take(&mut self, conversion: &Conversion) -> bool {
        let inside = |window: &&mut Window| (window.start_us..window.end_us).contains(&conversion.time_us);
        let Some(window) = self.windows.iter_mut().find(inside) else { return false };
        match conversion.channel {
            Channel::Sense => window.sense.add(conversion.code),
            Channel::Cross => window.cross.add(conversion.code),
        }
        true
    }

    /// Says that something was true at `now_us`.
    pub fn mark(&mut self, now_us: u64, flags: ReadingFlags) {
        if let Some(window) = self.windows.iter_mut().find(|w| (w.start_us..w.end_us).contains(&now_us)) {
            window.flags = window.flags.with(flags);
        }
    }

    /// Nothing was polled between these times: every window that overlaps them is [`ReadingFlags::LATE`].
    pub fn paused(&mut self, from_us: u64, to_us: u64) {
        self.pause_us = (from_us, to_us);
    }

    /// The next window whose time has come, as a reading; its number and certificate are still to be filled in. Call
    /// again until there is none.
    pub fn close(&mut self, now_us: u64) -> Option<Reading> {
        if !self.started {
            self.start(now_us);
        }
        if now_us < self.windows[0].end_us + ARRIVAL_US {
            return None;
        }
        let mut closed = self.windows[0];
        if closed.start_us < self.pause_us.1 && closed.end_us > self.pause_us.0 {
            closed.flags = closed.flags.with(ReadingFlags::LATE);
        }
        self.windows[0] = self.windows[1];
        self.windows[1] = self.window_from(self.windows[0].end_us);
        Some(Reading {
            seq: 0,
            time_us: closed.start_us,
            duration_us: (closed.end_us - closed.start_us) as u16,
            sense: closed.sense.codes,
            cross: closed.cross.codes,
            flags: closed.flags,
            certificate: ringvolt_protocol::CertificateHash::NONE,
        })
    }

    /// When the next window closes, microseconds; 0 before the first.
    pub const fn due_us(&self) -> u64 {
        if self.started { self.windows[0].end_us + ARRIVAL_US } else { 0 }
    }
}

#[cfg(test)]
mod tests {
    extern crate std;
    use std::vec::Vec;

    use super::*;

    fn close_all(acquisition: &mut Acquisition, now_us: u64) -> Vec<Reading> {
        core::iter::from_fn(|| acquisition.close(now_us)).collect()
    }

    #[test]
    fn windows_follow_each_other_and_never_drift() {
        // A third of a cycle of 60 Hz does not divide into microseconds.
        let mut acquisition = Acquisition::new(8_333_333);
        close_all(&mut acquisition, 100);
        let mut readings = Vec::new();
        for now_us in (100..30_000_000).step_by(500) {
            readings.extend(close_all(&mut acquisition, now_us));
        }
        for pair in readings.windows(2) {
            assert_eq!(pair[0].time_us + u64::from(pair[0].duration_us), pair[1].time_us);
        }
        let last = readings.len() as u64 - 1;
        assert_eq!(readings.last().unwrap().time_us, 100 + last * 8_333_333 / 1_000);
    }

    #[test]
    fn a_conversion_belongs_to_the_window_in_which_it_ended() {
        let mut acquisition = Acquisition::new(10_000_000);
        close_all(&mut acquisition, 0);
        let at = |time_us, code| Conversion { channel: Channel::Sense, time_us, code };
        assert!(acquisition.take(&at(9_999, 5)));
        assert!(acquisition.take(&at(10_000, -7)));
        assert!(acquisition.take(&at(10_500, -9)));
        assert!(close_all(&mut acquisition, 12_999).is_empty());
        let first = close_all(&mut acquisition, 13_000)[0];
        assert_eq!(first.sense, WindowCodes { sum: 5, min: 5, max: 5, count: 1 });
        let second = close_all(&mut acquisition, 23_000)[0];
        assert_eq!(second.sense, WindowCodes { sum: -16, min: -9, max: -7, count: 2 });
        assert_eq!(second.cross, WindowCodes::default());
    }

    #[test]
    fn what_comes_too_late_or_from_the_future_is_not_taken() {
        let mut acquisition = Acquisition::new(10_000_000);
        close_all(&mut acquisition, 0);
        close_all(&mut acquisition, 13_000);
        let at = |time_us| Conversion { channel: Channel::Cross, time_us, code: 1 };
        assert!(!acquisition.take(&at(9_000)));
        assert!(!acquisition.take(&at(40_000)));
    }

    #[test]
    fn a_pause_leaves_empty_readings_and_no_hole() {
        let mut acquisition = Acquisition::new(10_000_000);
        close_all(&mut acquisition, 0);
        let readings = close_all(&mut acquisition, 403_000);
        assert_eq!(readings.len(), 40);
        assert!(readings.iter().all(|reading| reading.sense.count == 0));
    }

    #[test]
    fn every_window_that_a_pause_touches_says_so() {
        let mut acquisition = Acquisition::new(10_000_000);
        close_all(&mut acquisition, 0);
        close_all(&mut acquisition, 15_000);
        acquisition.paused(15_000, 61_000);
        let late: Vec<bool> =
            close_all(&mut acquisition, 93_000).iter().map(|r| r.flags.contains(ReadingFlags::LATE)).collect();
        assert_eq!(late, [true, true, true, true, true, true, false, false]);
    }
}
