//! The three files of a run, read together so that the mistakes of all of them are reported at once.

use super::error::CliError;
use clap::Args;
use ringstep::{
    files::FileErrors,
    record,
    sequence::Plan,
    station::{Board, Station},
};
use std::{
    io,
    path::{Path, PathBuf},
};

/// Where the three files are.
#[derive(Debug, Clone, Args)]
pub(crate) struct InputPaths {
    /// Plan: line voltages, load steps, captures.
    #[arg(long, value_name = "FILE")]
    pub(crate) plan: PathBuf,
    /// Station: instruments, probe, earthing, safety limits.
    #[arg(long, value_name = "FILE")]
    pub(crate) station: PathBuf,
    /// Board: outputs, controller, clamp, ratings.
    #[arg(long, value_name = "FILE")]
    pub(crate) board: PathBuf,
}

/// The three files as they were read.
#[derive(Debug)]
pub(crate) struct Inputs {
    /// Plan.
    pub(crate) plan: Plan,
    /// Station.
    pub(crate) station: Station,
    /// Board.
    pub(crate) board: Board,
    /// The three texts as they stand in the files.
    pub(crate) texts: record::Inputs,
}

impl InputPaths {
    /// Reads all three.
    pub(crate) fn read(&self) -> Result<Inputs, CliError> {
        let texts = record::Inputs {
            plan: read_text(&self.plan)?,
            station: read_text(&self.station)?,
            board: read_text(&self.board)?,
        };
        let mut mistakes = Vec::new();
        let plan = kept(Plan::read(&self.plan.to_string_lossy(), &texts.plan), &mut mistakes);
        let station = kept(Station::read(&self.station.to_string_lossy(), &texts.station), &mut mistakes);
        let board = kept(Board::read(&self.board.to_string_lossy(), &texts.board), &mut mistakes);
        match (plan, station, board) {
            (Some(plan), Some(station), Some(board)) => Ok(Inputs { plan, station, board, texts }),
            _ => Err(CliError::Mistakes(mistakes)),
        }
    }
}

fn kept<T>(read: Result<T, FileErrors>, mistakes: &mut Vec<FileErrors>) -> Option<T> {
    read.map_err(|errors| mistakes.push(errors)).ok()
}

/// A whole file.
pub(crate) fn read_bytes(path: &Path) -> Result<Vec<u8>, CliError> {
    std::fs::read(path).map_err(|source| CliError::Unreadable { path: path.display().to_string(), source })
}

/// A whole file of text.
pub(crate) fn read_text(path: &Path) -> Result<String, CliError> {
    String::from_utf8(read_bytes(path)?).map_err(|error| CliError::Unreadable {
        path: path.display().to_string(),
        source: io::Error::new(io::ErrorKind::InvalidData, error.utf8_error()),
    })
}
