//! What a divider network does: ratio, stress, settling, bleeding, and what it costs in accuracy.
//!
//! Pure formulas over the network as it is described in a bench profile; no I/O. A network is a string of equal elements
//! from the high voltage to the tap, low-side resistors in parallel from the tap to the star point, and a filter
//! capacitor across them.

mod figures;
mod network;
mod review;

pub use figures::{Figures, bleed_seconds, figures};
pub use network::{Network, Supply};
pub use review::{Finding, Review, Surroundings, Term, Verdict, review};
