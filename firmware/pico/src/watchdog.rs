//! The hardware watchdog: for a dead main loop only.
//!
//! It is no part of switching off: a dead loop makes no edges on the permit pin, and the charge pump behind it has run
//! empty long before. The watchdog brings the controller back, to say what happened.

use rp2040_hal::{fugit::MicrosDurationU32, watchdog::Watchdog};

/// A loop that has not come round for this long is dead. The longest stop of a live one, two held buses, is under 1 ms.
const ALIVE: MicrosDurationU32 = MicrosDurationU32::millis(50);

/// A record is written by one erase and one program: 400 ms and 3 ms at most (W25Q16JV data sheet), twice that allowed.
const WRITING: MicrosDurationU32 = MicrosDurationU32::millis(1_000);

/// The watchdog, once it runs.
pub struct Dog(Watchdog);

impl Dog {
    /// Starts it with the long limit, for the time of starting up.
    pub fn start(mut watchdog: Watchdog) -> Self {
        watchdog.pause_on_debug(true);
        watchdog.start(WRITING);
        Self(watchdog)
    }

    /// The loop has come round.
    pub fn feed(&self) {
        self.0.feed();
    }

    /// Runs `writing`, which may stop the processor for as long as the flash takes.
    pub fn patience<R>(&mut self, writing: impl FnOnce() -> R) -> R {
        self.0.start(WRITING);
        let result = writing();
        self.0.start(ALIVE);
        result
    }

    /// From here on the loop runs.
    pub fn alert(&mut self) {
        self.0.start(ALIVE);
    }
}
