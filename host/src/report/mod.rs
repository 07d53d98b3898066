//! A run as one self-contained HTML file that also prints well.
//!
//! The report is a pure function of the run file: sections are functions that give HTML, plots are SVG, and the same run
//! gives the same bytes.

mod html;
mod plots;
mod sections;

use thiserror::Error;

use crate::{
    reduction::{Recording, Reduction},
    run::{RunError, RunReader},
};

/// Why a report could not be made.
#[derive(Debug, Error)]
pub enum ReportError {
    /// The run cannot be read.
    #[error(transparent)]
    Run(#[from] RunError),
    /// A plot could not be drawn.
    #[error("a plot could not be drawn ({0})")]
    Plot(String),
}

/// The report.
///
/// # Errors
/// [`ReportError`].
pub fn html(reader: &RunReader, reduction: &Reduction) -> Result<String, ReportError> {
    let recording = Recording::open(reader)?;
    let facts = sections::Facts::gather(reader, &recording, reduction)?;
    let sections = [
        sections::summary(&facts),
        sections::voltage(&facts)?,
        sections::wavelength(&facts)?,
        sections::frames(&facts),
        sections::uncertainty(&facts),
        sections::interlock(&facts),
        sections::calibration(&facts),
        sections::provenance(&facts),
        sections::cautions(),
    ];
    Ok(html::page(&facts.title, facts.simulated, &sections.concat()))
}
