//! `fit`: the analysis of a run, on a recording from a file.

use super::{
    error::{CliError, Exit},
    findings,
    inputs::{read_bytes, read_text},
    output,
    recording::{Recording, RecordingOptions},
};
use clap::Args;
use ringstep::station::Board;
use ringstep_analysis::{
    analyse,
    findings::{BoardFacts, Subject},
    quantity::{Measured, Unit, parse_quantity},
};
use std::path::PathBuf;

/// Analyse a recording: rings, capacitance, leakage, stress, each with its uncertainty.
///
/// FILE is delimited text (a time column, or start and interval in the header or by options) or a NumPy array file
/// (.npy, with --interval). Nothing is measured and nothing energised.
#[derive(Debug, Args)]
pub(crate) struct Fit {
    /// The recording.
    file: PathBuf,
    /// Board file: with it, circuit values are given.
    #[arg(long, value_name = "FILE")]
    board: Option<PathBuf>,
    /// Primary self-inductance, as "1.1 mH +- 5 %"; goes before the board file's.
    #[arg(long, value_name = "QUANTITY", value_parser = inductance)]
    primary_inductance: Option<Measured>,
    /// The recording is a bare ring-down without switching cycles.
    #[arg(long)]
    ring_down: bool,
    #[command(flatten)]
    recording: RecordingOptions,
    /// Print one JSON object with SI values.
    #[arg(long)]
    pub(crate) json: bool,
}

impl Fit {
    /// Runs the command.
    pub(crate) fn run(&self) -> Result<Exit, CliError> {
        let facts = self.facts()?;
        let recording = Recording::decode(&self.file, &read_bytes(&self.file)?, &self.recording)?;
        let subject = if self.ring_down { Subject::RingDown } else { Subject::Drain };
        let findings = analyse(&recording.samples, subject, &facts);
        if self.json {
            output::json(&findings::to_json(&findings));
        } else {
            output::line(&recording.describe());
            output::line(&findings::describe(&findings, subject));
        }
        let measured = findings.relaxation_ring.is_some() || findings.leakage_ring.is_some();
        Ok(if measured { Exit::Done } else { Exit::NothingMeasurable })
    }

    fn facts(&self) -> Result<BoardFacts, CliError> {
        let mut facts = BoardFacts::default();
        if let Some(path) = &self.board {
            let board = Board::read(&path.to_string_lossy(), &read_text(path)?);
            facts = board.map_err(|errors| CliError::Mistakes(vec![errors]))?.own_facts();
        }
        if self.primary_inductance.is_some() {
            facts.primary_inductance_h = self.primary_inductance;
        }
        Ok(facts)
    }
}

fn inductance(text: &str) -> Result<Measured, String> {
    let measured = parse_quantity(text, Unit::Henry).map_err(|error| error.to_string())?;
    if measured.value > 0.0 { Ok(measured) } else { Err("an inductance is positive".to_owned()) }
}
