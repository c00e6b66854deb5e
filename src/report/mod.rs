//! A run as one self-contained HTML file, from its record alone: verdict, annotated waveform, fits, load steps, values
//! across line voltage, instruments, preflight, timeline, doubts and cautions.

mod anatomy;
mod axes;
mod budgets;
mod fit_chart;
mod line_chart;
mod load_chart;
mod page;
mod svg;
mod text;
mod timeline;
mod trace;
mod verdict;

use crate::record::{RecordError, Run};
use std::{io, path::Path};

/// Name of the report in a run folder.
pub const REPORT: &str = "report.html";

/// A report could not be made.
#[derive(Debug, thiserror::Error)]
#[non_exhaustive]
pub enum ReportError {
    /// The record could not be read or added to.
    #[error(transparent)]
    Record(#[from] RecordError),
    /// The page could not be put together.
    #[error("failed to fill in the report: {0}")]
    Page(#[from] askama::Error),
    /// The file could not be written.
    #[error("failed to write the report {}: {source}", path.display())]
    Write {
        /// The file.
        path: std::path::PathBuf,
        /// The system's reason.
        source: io::Error,
    },
}

/// The report of a run as HTML text.
///
/// # Errors
/// When a capture of the run cannot be read.
pub fn render(run: &Run) -> Result<String, ReportError> {
    page::render(run)
}

/// Writes the report of a run to any file.
///
/// # Errors
/// When a capture cannot be read or the file cannot be written.
pub fn write_report(run: &Run, out: &Path) -> Result<(), ReportError> {
    let page = render(run)?;
    std::fs::write(out, page).map_err(|source| ReportError::Write { path: out.to_owned(), source })
}

/// Writes the report into the run's own folder and notes its checksum in the manifest.
///
/// # Errors
/// When a capture cannot be read or the folder cannot be written.
pub fn write(run: &mut Run) -> Result<(), ReportError> {
    let page = render(run)?;
    Ok(run.keep(REPORT, page.as_bytes())?)
}
