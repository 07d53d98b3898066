//! Messages and framing.
#![no_std]
