//! The run file: one recorded session in a single SQLite file, which can be reduced again at any time.
//!
//! This module owns the row types. It knows neither stamps nor rings nor the link. `schema` is the file's layout,
//! `writer` adds to it, `reader` reads it while or after it is written, `verify` judges what may be trusted,
//! `error` says in words what went wrong.

mod code;
mod error;
mod reader;
pub mod rows;
mod schema;
mod verify;
mod writer;

pub use code::event_code;
pub use error::RunError;
pub use reader::{Header, ReductionRow, RunReader};
pub use schema::SCHEMA_VERSION;
pub use verify::{Finding, Severity, verify};
pub use writer::{RunHeader, RunWriter};

#[cfg(test)]
mod tests;
