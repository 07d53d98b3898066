//! The host's own clocks, injected so that nothing reads the wall clock behind a caller's back.

use std::{
    sync::{
        Arc,
        atomic::{AtomicI64, Ordering},
    },
    time::{Duration, SystemTime, UNIX_EPOCH},
};

/// Monotonic time and UTC.
pub trait Clock: Send + Sync {
    /// Nanoseconds that only ever grow, from an arbitrary zero.
    fn mono_ns(&self) -> i64;
    /// Nanoseconds since 1970-01-01T00:00:00Z. May step.
    fn utc_ns(&self) -> i64;
    /// Lets `duration` pass.
    fn sleep(&self, duration: Duration);
}

/// The operating system's clocks.
#[derive(Clone, Debug)]
pub struct RealClock {
    zero: std::time::Instant,
}

impl RealClock {
    /// Monotonic zero is now.
    pub fn new() -> Self {
        Self { zero: std::time::Instant::now() }
    }
}

impl Default for RealClock {
    fn default() -> Self {
        Self::new()
    }
}

impl Clock for RealClock {
    fn mono_ns(&self) -> i64 {
        i64::try_from(self.zero.elapsed().as_nanos()).unwrap_or(i64::MAX)
    }

    fn utc_ns(&self) -> i64 {
        match SystemTime::now().duration_since(UNIX_EPOCH) {
            Ok(since) => i64::try_from(since.as_nanos()).unwrap_or(i64::MAX),
            Err(before) => -i64::try_from(before.duration().as_nanos()).unwrap_or(i64::MAX),
        }
    }

    fn sleep(&self, duration: Duration) {
        std::thread::sleep(duration);
    }
}

/// A clock that stands still until it is told otherwise. Clones share their time.
#[derive(Clone, Debug, Default)]
pub struct VirtualClock {
    mono_ns: Arc<AtomicI64>,
    utc_less_mono_ns: Arc<AtomicI64>,
}

impl VirtualClock {
    /// Stands at monotonic zero and this UTC.
    pub fn starting_at(utc_ns: i64) -> Self {
        let clock = Self::default();
        clock.utc_less_mono_ns.store(utc_ns, Ordering::Relaxed);
        clock
    }

    /// Moves both clocks to `mono_ns`; never back.
    pub fn advance_to(&self, mono_ns: i64) {
        self.mono_ns.fetch_max(mono_ns, Ordering::Relaxed);
    }

    /// Steps UTC alone, as a correction of the host's clock does.
    pub fn step_utc(&self, by_ns: i64) {
        self.utc_less_mono_ns.fetch_add(by_ns, Ordering::Relaxed);
    }
}

impl Clock for VirtualClock {
    fn mono_ns(&self) -> i64 {
        self.mono_ns.load(Ordering::Relaxed)
    }

    fn utc_ns(&self) -> i64 {
        self.mono_ns() + self.utc_less_mono_ns.load(Ordering::Relaxed)
    }

    fn sleep(&self, duration: Duration) {
        self.advance_to(self.mono_ns() + i64::try_from(duration.as_nanos()).unwrap_or(i64::MAX));
    }
}
