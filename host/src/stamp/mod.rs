//! Exposure + readings + clock + certificate -> stamp.
//!
//! `series` turns readings into samples of volts on the UTC time line; `mean` integrates them over an exposure;
//! `steadiness` tells how far they moved, rippled and scattered; `reason` is the one table of rules; `stamper` joins
//! them. All of it is pure: the same inputs give the same stamp on every machine.

mod calibrated;
mod mean;
mod reason;
mod series;
mod stamper;
mod steadiness;

pub use calibrated::CertificateAt;
pub use mean::{ExposureMean, exposure_mean};
pub use reason::{Level, REASONS, Reason, Reasons, Rule};
pub use series::{Calibration, Sample, Series};
pub use stamper::{Evidence, Stamper};
pub use steadiness::{Steadiness, steadiness};
