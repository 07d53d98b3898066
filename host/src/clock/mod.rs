//! Time: the host's clocks, and the way from a controller's microseconds to UTC with its error.

mod envelope;
mod host;
mod map;

pub use host::{Clock, RealClock, VirtualClock};
pub use map::{ClockMap, Exchange, Instant, MapLimits};
