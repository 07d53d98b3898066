//! Certificates, the procedure that makes them, and the chart that watches over them.

mod apply;
mod certificate;
mod check;
mod example;
mod seal;
#[cfg(test)]
mod tests;

pub use apply::{Channel, Outside, RecordError, UncertaintyPart, Validity, combined_volts, day_of_utc_ns};
pub use certificate::{Certificate, ChannelFit, Conditions, Point, Reference, Stability};
pub use example::example;
pub use seal::{CertificateError, MAX_CERTIFICATE_BYTES};
