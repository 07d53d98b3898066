//! The Ringvolt controller as a pure function of time and inputs.
//!
//! [`Controller::poll`] takes the time and everything the board's pins, converters and link have brought since the last
//! call, and returns what its pins shall be. It never blocks, never allocates and never panics; it owns no hardware.
//! The RP2040 image in `pico/` and the simulated bench of the host crate drive the same `poll`.
//!
//! | module | subject |
//! | --- | --- |
//! | [`io`] | what goes in and what comes out |
//! | [`store`] | records in flash that survive a power cut at any instant |
//! | [`controller`] | `poll`: owns the parts below and passes values between them |
//!
//! The controller is not a safety function. The hard-wired chain of `hardware-notes/interlock.md` is; this code can
//! only withdraw its permit from that chain.
#![no_std]

pub mod controller;
pub mod io;
pub mod store;

pub use controller::Controller;
