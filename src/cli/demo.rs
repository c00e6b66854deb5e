//! `demo`: a simulated board measured over real sockets by the same code as a real one, then compared with its true values.

use super::{
    bench_process::{Announcement, BenchProcess},
    demo_files,
    error::{CliError, Exit},
    inputs::Inputs,
    measure::{Finished, Request, default_folder, execute},
    output,
    truth::Truths,
};
use clap::Args;
use ringstep::sequence::Attendance;
use std::{
    fs,
    path::{Path, PathBuf},
};

/// Measure a simulated board and compare with its true values.
///
/// Starts the simulated bench as a process of its own, measures over sockets and a serial line as on a real bench, writes
/// run folder and report, and prints the measured values beside the true ones. Nothing real is energised.
#[derive(Debug, Args)]
pub(crate) struct Demo {
    /// Simulated board; `ringstep simulate --list` shows them.
    #[arg(long, value_name = "NAME", default_value = "beacon")]
    board: String,
    /// Seed of tolerances, instrument errors and noise.
    #[arg(long, value_name = "N", default_value_t = 1)]
    seed: u64,
    /// Bits of the simulated scope: 8 or 12.
    #[arg(long, value_name = "N", default_value_t = 8)]
    bits: u8,
    /// Line voltages (rms), in this order.
    #[arg(long, value_name = "V", value_delimiter = ',', default_values_t = [115.0, 180.0, 230.0])]
    line: Vec<f64>,
    /// Make a simulated instrument fail at a message, as source:drop@40.
    #[arg(long = "fault", value_name = "FAULT")]
    faults: Vec<String>,
    /// Run folder to write; it must be new or empty. [default: runs/DATE-TIME-BOARD]
    #[arg(long, value_name = "FOLDER")]
    out: Option<PathBuf>,
    /// Keep the true values of every capture in this file, one JSON line each.
    #[arg(long, value_name = "FILE")]
    truth: Option<PathBuf>,
    /// Print one JSON object at the end, nothing else.
    #[arg(long)]
    pub(crate) json: bool,
}

impl Demo {
    /// Runs the command.
    pub(crate) fn run(&self) -> Result<Exit, CliError> {
        let scratch = tempfile::tempdir().map_err(|source| unwritable("the system's temporary folder", source))?;
        let truth = self.truth.clone().unwrap_or_else(|| scratch.path().join("truth.jsonl"));
        let bench = BenchProcess::start(&self.bench_options(&truth))?;
        let inputs = self.inputs(&bench.announcement, scratch.path())?;
        let request = Request {
            folder: self.out.clone().unwrap_or_else(|| default_folder(&self.board)),
            drivers: None,
            attendance: Attendance::Unattended,
            quiet: self.json,
        };
        let finished = execute(&inputs, &request)?;
        drop(bench);
        let truths = Truths::read(&truth)?;
        self.print(&finished, &truths);
        Ok(finished.exit())
    }

    fn bench_options(&self, truth: &Path) -> Vec<String> {
        let mut options = vec![
            format!("--board={}", self.board),
            format!("--seed={}", self.seed),
            format!("--bits={}", self.bits),
            format!("--truth={}", truth.display()),
        ];
        options.extend(self.faults.iter().map(|fault| format!("--fault={fault}")));
        options
    }

    /// The three files, written as a user would write them and read through the same door.
    fn inputs(&self, bench: &Announcement, folder: &Path) -> Result<Inputs, CliError> {
        let write = |name: &str, text: String| {
            let path = folder.join(name);
            fs::write(&path, text).map_err(|source| unwritable(&path.display().to_string(), source)).map(|()| path)
        };
        let paths = super::inputs::InputPaths {
            plan: write("plan.toml", demo_files::plan(bench, &self.line))?,
            station: write("station.toml", demo_files::station(bench))?,
            board: write("board.toml", demo_files::board(bench))?,
        };
        paths.read()
    }

    fn print(&self, finished: &Finished, truths: &Truths) {
        if self.json {
            let mut value = finished.to_json();
            value["truth"] = truths.to_json(&finished.run, &finished.results);
            output::json(&value);
            return;
        }
        finished.print(false);
        if !finished.results.points.is_empty() {
            output::line(&format!("\nMeasured against true values (simulated board, seed {}):\n", self.seed));
            output::line(&truths.table(&finished.run, &finished.results));
        }
    }
}

fn unwritable(path: &str, source: std::io::Error) -> CliError {
    CliError::Failed(format!("failed to write {path}: {source}"))
}
