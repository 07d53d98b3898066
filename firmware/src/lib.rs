//! Controller.
#![no_std]
