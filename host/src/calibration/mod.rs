//! Certificates, the procedure that makes them, and the chart that watches over them.

mod certificate;

pub use certificate::{Certificate, ChannelFit, Conditions, Point, Reference, Stability};
