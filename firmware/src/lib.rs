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
//! | [`contacts`] | input lines after the glitch filter |
//! | [`interlock`] | loops, contactors, reset button, permit, latched trips |
//! | [`acquisition`] | conversions to readings |
//! | [`channel`] | over-range, silent and frozen converters |
//! | [`agreement`] | whether the two senses tell the same voltage |
//! | [`calibration`] | codes to volts in integers |
//! | [`journal`] | readings and events the host has not acknowledged |
//! | [`link`] | framed messages in and out |
//! | [`converter`] | converter drivers on embedded-hal traits |
//!
//! The controller is not a safety function. The hard-wired chain of `hardware-notes/interlock.md` is; this code can
//! only withdraw its permit from that chain.
#![no_std]

pub mod acquisition;
pub mod agreement;
pub mod calibration;
pub mod channel;
pub mod contacts;
pub mod controller;
pub mod converter;
pub mod interlock;
pub mod io;
pub mod journal;
pub mod link;
pub mod store;

pub use controller::Controller;
pub use journal::Journal;
