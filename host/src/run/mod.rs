//! The run file: one recorded session in a single SQLite file, which can be reduced again at any time.
//!
//! This module owns the row types. It knows neither stamps nor rings nor the link.

pub mod rows;
