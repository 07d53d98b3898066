//! The one way out for what was really true: a table that only tests and judges read.

use std::{
    fs::File,
    io::{self, Write},
    path::Path,
};

use super::camera::Shot;
use crate::text::utc;

/// Writes `truth.csv`: `frame,start_utc,end_utc,true_volts,disturbed`.
#[derive(Debug)]
pub struct Truth {
    file: File,
}

impl Truth {
    /// A new table.
    ///
    /// # Errors
    /// What the system says.
    pub fn create(path: &Path) -> io::Result<Self> {
        let mut file = File::create(path)?;
        writeln!(file, "frame,start_utc,end_utc,true_volts,disturbed")?;
        Ok(Self { file })
    }

    /// Adds a frame; `zero_utc_ns` is UTC at the world's zero.
    ///
    /// # Errors
    /// What the system says.
    pub fn add(&mut self, shot: &Shot, zero_utc_ns: i64) -> io::Result<()> {
        let truth = &shot.truth;
        writeln!(
            self.file,
            "{},{},{},{:.6},{}",
            shot.name,
            utc(zero_utc_ns + truth.start_ns),
            utc(zero_utc_ns + truth.end_ns),
            truth.volts,
            u8::from(truth.disturbed)
        )
    }
}
