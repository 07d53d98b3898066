//! A run as one self-contained HTML file that also prints well.
//!
//! The report is a pure function of the run file: sections are functions that give HTML, plots are SVG, and the same run
//! gives the same bytes.

mod facts;
mod html;
mod pictures;
mod plots;
mod sections;

pub use pictures::{ExtraSection, Picture};
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
    html_with(reader, reduction, &[])
}

/// The report with further sections behind the wavelengths: rings, line fits, sample frames with overlays.
///
/// # Errors
/// [`ReportError`].
pub fn html_with(reader: &RunReader, reduction: &Reduction, extra: &[ExtraSection]) -> Result<String, ReportError> {
    let recording = Recording::open(reader)?;
    let facts = facts::Facts::gather(reader, &recording, reduction)?;
    let extra: String = extra.iter().map(pictures::section).collect();
    let sections = [
        sections::summary(&facts),
        sections::voltage(&facts)?,
        sections::wavelength(&facts)?,
        extra,
        sections::frames(&facts),
        sections::uncertainty(&facts),
        sections::interlock(&facts),
        sections::notes(&facts),
        sections::calibration(&facts),
        sections::completeness(&facts),
        sections::provenance(&facts),
        sections::cautions(),
    ];
    let body = sections.concat();
    Ok(html::page(&facts.title, facts.simulated, &html::contents(&body), &body))
}

#[cfg(test)]
mod tests;
