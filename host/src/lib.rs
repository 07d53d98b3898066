//! Ringvolt's host library: everything the `ringvolt` command does, apart from parsing its command line.
//!
//! Lower modules know nothing of higher ones; `DEVELOPERS.md` has the table and a test checks it.

pub mod calibration;
pub mod cli;
pub mod divider;
pub mod instrument;
pub mod metrology;
pub mod physics;
pub mod profile;
pub mod rings;
pub mod run;
pub mod text;
