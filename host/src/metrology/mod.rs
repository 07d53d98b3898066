//! Fits, stability and uncertainty budgets. Pure functions of numbers; no I/O.

mod allan;
mod budget;
mod least_squares;
mod york;

pub use allan::{Averaging, deviation};
pub use budget::{Budget, Shared, Term};
pub use least_squares::{Solution, solve, student_two_sided};
pub use york::{Line, Point, errors_in_both};
