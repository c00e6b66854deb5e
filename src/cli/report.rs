//! `report`: the report of a run written again, from its folder alone.

use super::{
    error::{CliError, Exit},
    output,
    table::values_table,
};
use clap::Args;
use ringstep::{record::Run, report};
use serde_json::json;
use std::path::PathBuf;

/// Write the report of a run again.
///
/// Verifies the run folder first: format, checksums, journal. Without --out the report in the folder is replaced.
#[derive(Debug, Args)]
pub(crate) struct Report {
    /// Run folder.
    #[arg(value_name = "RUN")]
    run: PathBuf,
    /// HTML file to write instead of the one in the run folder.
    #[arg(long, value_name = "FILE")]
    out: Option<PathBuf>,
    /// Print one JSON object, nothing else.
    #[arg(long)]
    pub(crate) json: bool,
}

impl Report {
    /// Runs the command.
    pub(crate) fn run(&self) -> Result<Exit, CliError> {
        let mut run = Run::open(&self.run)?;
        let results = run.results();
        let written = match &self.out {
            Some(out) => report::write_report(&run, out).map(|()| out.clone())?,
            None => report::write(&mut run).map(|()| self.run.join(report::REPORT))?,
        };
        let torn = run
            .torn
            .as_ref()
            .map(|torn| format!("the last line of the journal ({}) is torn and left out: {}", torn.line, torn.reason));
        if self.json {
            output::json(
                &json!({ "run": self.run, "report": written, "finished": run.finished(), "results": results }),
            );
            return Ok(Exit::Done);
        }
        if let Some(torn) = torn {
            eprintln!("{torn}");
        }
        if !run.finished() {
            eprintln!("the run has no end: it was interrupted, and whether source and load went off is not recorded");
        }
        if !results.points.is_empty() {
            output::line(&values_table(&results));
        }
        output::line(&format!("report: {}", written.display()));
        Ok(Exit::Done)
    }
}
