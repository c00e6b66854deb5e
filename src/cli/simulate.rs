//! `simulate`: the simulated bench as a process of its own. The one place that joins it.

use super::{
    error::{CliError, Exit},
    output,
};
use clap::Args;
use ringstep_analysis::quantity::{Measured, Unit};
use ringstep_simulated_bench::{
    boards,
    faults::Fault,
    process::{self, BenchError, Options},
};
use std::path::PathBuf;

/// Start a simulated bench: scope, load and line source around a simulated board.
///
/// It prints one JSON line with the addresses of its instruments and runs until its standard input ends. All of it is
/// simulated, and every instrument says so when asked who it is.
#[derive(Debug, Args)]
pub(crate) struct Simulate {
    /// Board on the bench; --list shows them.
    #[arg(long, value_name = "NAME", default_value = "beacon")]
    board: String,
    /// Seed of tolerances, instrument errors and noise.
    #[arg(long, value_name = "N", default_value_t = 1)]
    seed: u64,
    /// Simulated seconds in a real one while nothing is captured.
    #[arg(long, value_name = "X", default_value_t = 1.0)]
    speed: f64,
    /// File to which the true values of every capture are appended.
    #[arg(long, value_name = "FILE")]
    truth: Option<PathBuf>,
    /// Bits of the scope's converter: 8 or 12.
    #[arg(long, value_name = "N", default_value_t = 8)]
    bits: u8,
    /// Make an instrument fail at a message, as source:drop@12 (scope, load, source; drop, garbage, silent, truncate, gone).
    #[arg(long = "fault", value_name = "FAULT")]
    faults: Vec<Fault>,
    /// List the boards with what their documents state, and end.
    #[arg(long)]
    list: bool,
}

impl Simulate {
    /// Runs the command.
    pub(crate) fn run(&self) -> Result<Exit, CliError> {
        if self.list {
            output::line(&boards_table());
            return Ok(Exit::Done);
        }
        let options = Options {
            board: self.board.clone(),
            seed: self.seed,
            speed: self.speed,
            truth: self.truth.clone(),
            scope_bits: self.bits,
            faults: self.faults.clone(),
            ..Options::default()
        };
        let runtime = tokio::runtime::Runtime::new();
        let runtime = runtime.map_err(|error| CliError::Failed(format!("failed to start threads: {error}")))?;
        runtime.block_on(process::serve(&options)).map_err(|error| match error {
            BenchError::System { .. } => CliError::Failed(error.to_string()),
            other => CliError::Usage(other.to_string()),
        })?;
        Ok(Exit::Done)
    }
}

fn boards_table() -> String {
    let text = |value, unit| Measured::exact(value).text_with_standard_uncertainty(unit);
    let rows = boards::all().iter().map(|board| {
        let nominal = &board.nominal;
        vec![
            board.name.to_owned(),
            text(nominal.primary_inductance_h, Unit::Henry),
            format!("{} x {}", text(nominal.output_v, Unit::Volt), text(nominal.maximum_load_a, Unit::Ampere)),
            format!("{}:1", nominal.turns_ratio),
            text(nominal.switching_frequency_hz, Unit::Hertz),
            format!("{:.0} V to {:.0} V", nominal.line_range_v[0], nominal.line_range_v[1]),
        ]
    });
    output::table(&["board", "primary inductance", "output", "turns", "switching", "line"], rows)
}
