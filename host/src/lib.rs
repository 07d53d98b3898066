//! Ringvolt's host library: everything the `ringvolt` command does, apart from parsing its command line.
//!
//! Lower modules know nothing of higher ones; `DEVELOPERS.md` has the table and a test checks it.

pub mod calibration;
pub mod cli;
pub mod clock;
pub mod divider;
pub mod export;
pub mod frames;
pub mod instrument;
pub mod link;
pub mod metrology;
pub mod physics;
pub mod profile;
pub mod reduction;
pub mod report;
pub mod run;
pub mod session;
pub mod simulation;
pub mod stamp;
pub mod text;
pub mod words;
