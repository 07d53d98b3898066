//! A live run: joins link, clock, run file and stamps.

mod lockstep;
mod pace;

pub use lockstep::LockstepPace;
pub use pace::{Pace, RealPace};
