//! `fit`: the analysis of a run, on a recording from a file.

use super::{
    added::{Added, AddedAnswer, AddedArgs, AddedRecord},
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
    findings::{BoardFacts, Findings, Subject},
    quantity::{Measured, Unit, parse_quantity},
};
use std::path::{Path, PathBuf};

/// Analyse a recording: rings, capacitance, leakage, stress, each with its uncertainty.
///
/// FILE is delimited text (a time column, or start and interval in the header or by options) or a NumPy array file
/// (.npy, with --interval). With --added, the same node recorded with known capacitors gives inductance and capacitance
/// without any nominal value. Nothing is measured and nothing energised.
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
    #[command(flatten)]
    added: AddedArgs,
    /// Print one JSON object with SI values.
    #[arg(long)]
    pub(crate) json: bool,
}

impl Fit {
    /// Runs the command.
    pub(crate) fn run(&self) -> Result<Exit, CliError> {
        let facts = self.facts()?;
        let subject = if self.ring_down { Subject::RingDown } else { Subject::Drain };
        let recording = self.recording(&self.file)?;
        let findings = analyse(&recording.samples, subject, &facts);
        let added = self.with_added(&findings, subject, &facts)?;
        if self.json {
            let mut json = findings::to_json(&findings);
            if let Some(added) = &added {
                json["added_capacitors"] = added.to_json();
            }
            output::json(&json);
        } else {
            output::line(&recording.describe());
            output::line(&findings::describe(&findings, subject));
            if let Some(added) = &added {
                output::line(&added.describe(&findings, &facts, subject));
            }
        }
        let measured = findings.relaxation_ring.is_some() || findings.leakage_ring.is_some();
        Ok(if measured { Exit::Done } else { Exit::NothingMeasurable })
    }

    fn recording(&self, file: &Path) -> Result<Recording, CliError> {
        Recording::decode(file, &read_bytes(file)?, &self.recording)
    }

    /// The recordings with added capacitors, read alike, together with the bare one.
    fn with_added(
        &self,
        bare: &Findings,
        subject: Subject,
        facts: &BoardFacts,
    ) -> Result<Option<AddedAnswer>, CliError> {
        if self.added.added.is_empty() {
            return Ok(None);
        }
        let nothing = Added { capacitance_f: Measured::exact(0.0), file: self.file.clone() };
        let mut records = vec![AddedRecord { added: nothing, findings: bare.clone() }];
        for added in &self.added.added {
            let findings = analyse(&self.recording(&added.file)?.samples, subject, facts);
            records.push(AddedRecord { added: added.clone(), findings });
        }
        Ok(Some(self.added.answer(records, subject, facts)))
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
