//! A live run: joins link, clock, run file and stamps, so that an acknowledgement is sent only after the commit.

mod figures;
mod lockstep;
mod memory;
mod pace;
mod recorder;
mod store;
mod update;

pub use lockstep::LockstepPace;
pub use pace::{Pace, RealPace};
pub use recorder::{Recorded, SessionError, SessionParts, record};
pub use store::Store;
pub use update::{Now, Observer, Update};
