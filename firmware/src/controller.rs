//! `poll`: owns the parts and passes values between them.

use crate::io::{Boot, Inputs, Outputs};

/// The controller.
pub struct Controller {
    boot: Boot,
}

impl Controller {
    /// Polls must come at least this often, microseconds: the permit square wave (about 1 kHz) is made of them.
    pub const POLL_INTERVAL_US: u64 = 500;

    /// A controller that has just been powered up: the permit is withdrawn.
    pub fn new(boot: Boot) -> Self {
        Self { boot }
    }

    /// Takes everything that came in since the last call and says what the pins shall be.
    ///
    /// `now_us` is microseconds since power-up and never goes back.
    pub fn poll(&mut self, _now_us: u64, _inputs: &Inputs<'_>) -> Outputs {
        let _ = self.boot;
        Outputs { permit: false, hv_lamp_dark: false, lamp: false, led: false, store: None }
    }

    /// When `poll` wants to be called next if nothing comes in, microseconds since power-up.
    pub fn poll_at(&self) -> u64 {
        0
    }

    /// Framed bytes that wait to be sent, oldest first; call [`Self::sent`] with how many of them were taken.
    pub fn outgoing(&self) -> &[u8] {
        &[]
    }

    /// Tells that the first `count` of [`Self::outgoing`] are on their way.
    pub fn sent(&mut self, _count: usize) {}
}
