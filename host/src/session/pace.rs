//! How time passes for a session: with the machine's clocks, or in lock-step with an emulated board.

use std::time::Duration;

use crate::{
    clock::{Clock, RealClock},
    link::{Endpoint, LinkError},
};

/// Passes time and, meanwhile, bytes.
pub trait Pace {
    /// Monotonic time, nanoseconds.
    fn mono_ns(&self) -> i64;

    /// UTC, nanoseconds since 1970.
    fn utc_ns(&self) -> i64;

    /// Waits until `until_ns` or until bytes come, whichever is first, and appends the bytes to `received`.
    ///
    /// # Errors
    /// [`LinkError::Lost`] when the link is gone.
    fn wait(&mut self, link: Option<&mut dyn Endpoint>, until_ns: i64, received: &mut Vec<u8>)
    -> Result<(), LinkError>;

    /// A link was opened.
    fn opened(&mut self) {}

    /// Bytes were written to it.
    fn wrote(&mut self, _count: usize) {}

    /// Whether whoever leads the time has ended the session, and the sentence to say about it where it was no plan.
    fn ended(&self) -> Option<Result<(), String>> {
        None
    }

    /// Whether the time, and all that came with it, is made up: such a run is marked SIMULATED.
    fn is_simulated(&self) -> bool {
        false
    }
}

/// The longest wait in one piece, so that a stop is noticed soon.
const LONGEST_NS: i64 = 50_000_000;

/// The machine's clocks.
#[derive(Debug, Default)]
pub struct RealPace {
    clock: RealClock,
}

impl RealPace {
    /// With this clock, so that others may share its monotonic zero.
    pub const fn new(clock: RealClock) -> Self {
        Self { clock }
    }
}

impl Pace for RealPace {
    fn mono_ns(&self) -> i64 {
        self.clock.mono_ns()
    }

    fn utc_ns(&self) -> i64 {
        self.clock.utc_ns()
    }

    fn wait(
        &mut self,
        link: Option<&mut dyn Endpoint>,
        until_ns: i64,
        received: &mut Vec<u8>,
    ) -> Result<(), LinkError> {
        // A serial port waits in whole milliseconds, and zero would turn the loop without a rest.
        let left_ns = (until_ns - self.mono_ns()).clamp(1_000_000, LONGEST_NS);
        let patience = Duration::from_nanos(left_ns.unsigned_abs());
        let Some(link) = link else {
            self.clock.sleep(patience);
            return Ok(());
        };
        let mut buffer = [0; 4096];
        let count = link.read(&mut buffer, patience)?;
        received.extend_from_slice(&buffer[..count]);
        Ok(())
    }
}
