//! The simulated bench as a child process: started from this very program, announced by one JSON line, ended by closing its
//! standard input.

use super::error::CliError;
use serde::Deserialize;
use std::{
    io::{BufRead, BufReader},
    process::{Child, Command, Stdio},
};

/// What a started bench announces.
#[derive(Debug, Clone, Deserialize)]
pub(super) struct Announcement {
    pub(super) board: String,
    pub(super) scope: String,
    pub(super) load: String,
    pub(super) source: String,
    pub(super) probe_factor: f64,
    pub(super) probe_capacitance_f: f64,
    pub(super) documents: Documents,
    pub(super) data_sheets: DataSheets,
    pub(super) primary_inductance_reading_h: f64,
}

/// What the documents of the simulated board state.
#[derive(Debug, Clone, Deserialize)]
pub(super) struct Documents {
    pub(super) turns_ratio: f64,
    pub(super) output_v: f64,
    pub(super) maximum_load_a: f64,
    pub(super) minimum_load_a: f64,
    pub(super) bulk_capacitance_f: f64,
    pub(super) drain_rating_v: f64,
    pub(super) line_range_v: [f64; 2],
    pub(super) switching_frequency_hz: f64,
    pub(super) clamp: String,
    pub(super) clamp_v: f64,
    pub(super) controller: String,
}

/// What the data sheets of its parts state: points of volts and farad, relative tolerance.
#[derive(Debug, Clone, Deserialize)]
pub(super) struct DataSheets {
    pub(super) output_capacitance: Vec<[f64; 2]>,
    pub(super) clamp_diode: Vec<[f64; 2]>,
    pub(super) rectifier_f: f64,
    pub(super) secondary_f: f64,
    pub(super) tolerance: f64,
}

/// A running bench; it ends when this is dropped.
pub(super) struct BenchProcess {
    pub(super) announcement: Announcement,
    child: Child,
}

impl BenchProcess {
    /// Starts `simulate` with these options and waits for its announcement.
    pub(super) fn start(options: &[String]) -> Result<Self, CliError> {
        let failed = |what: String| CliError::Failed(format!("failed to start the simulated bench: {what}"));
        let program = std::env::current_exe().map_err(|error| failed(error.to_string()))?;
        let mut command = Command::new(program);
        command.arg("simulate").args(options).stdin(Stdio::piped()).stdout(Stdio::piped());
        // Ctrl-C goes to the whole foreground group: the bench must outlive it until the source is off.
        std::os::unix::process::CommandExt::process_group(&mut command, 0);
        let mut child = command.spawn().map_err(|error| failed(error.to_string()))?;
        let mut line = String::new();
        let output = child.stdout.take().ok_or_else(|| failed("it has no standard output".into()))?;
        let read = BufReader::new(output).read_line(&mut line);
        match read
            .map_err(|error| error.to_string())
            .and_then(|_| serde_json::from_str(&line).map_err(|e| e.to_string()))
        {
            Ok(announcement) => Ok(Self { announcement, child }),
            Err(error) => {
                drop(child.stdin.take());
                let status = child.wait().map_err(|error| failed(error.to_string()))?;
                if status.code() == Some(2) {
                    return Err(CliError::Usage(
                        "the simulated bench does not take these options, as it says above".into(),
                    ));
                }
                Err(failed(format!("it announced nothing usable ({error}; {status})")))
            }
        }
    }
}

impl Drop for BenchProcess {
    fn drop(&mut self) {
        drop(self.child.stdin.take());
        let _ = self.child.wait();
    }
}
