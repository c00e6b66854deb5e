//! The command line: one command a file, and the way from arguments to an exit code.

mod added;
mod bench_process;
mod check;
mod demo;
mod demo_files;
mod drivers;
mod error;
mod findings;
mod fit;
mod inputs;
mod keeping;
mod measure;
mod operator;
mod output;
mod recording;
mod report;
mod simulate;
mod table;
mod truth;

use clap::{ArgAction, Parser, Subcommand};
use error::{CliError, Exit};
use std::process::ExitCode;
use tracing_subscriber::EnvFilter;

/// Variable that says what is logged to the standard error, as `ringstep=debug`; it goes before `-v`.
const LOG_VARIABLE: &str = "RINGSTEP_LOG";

/// Measure the parasitics of offline flyback power supplies on a live bench.
///
/// From the ringing of the drain node: node capacitance, leakage inductance, damping and stress, each with its uncertainty.
#[derive(Debug, Parser)]
#[command(name = "ringstep", version, after_help = error::EXIT_CODES, max_term_width = 100)]
struct Arguments {
    /// Log to the standard error; more with each repeat. The variable RINGSTEP_LOG=FILTER goes before it.
    #[arg(short, long, action = ArgAction::Count, global = true, display_order = 1000)]
    verbose: u8,

    #[command(subcommand)]
    command: Command,
}

#[derive(Debug, Subcommand)]
enum Command {
    Demo(demo::Demo),
    Check(check::Check),
    Measure(measure::Measure),
    Fit(fit::Fit),
    Report(report::Report),
    Drivers(drivers::DriversCommand),
    Simulate(simulate::Simulate),
}

impl Command {
    fn run(&self) -> Result<Exit, CliError> {
        match self {
            Self::Demo(demo) => demo.run(),
            Self::Check(check) => check.run(),
            Self::Measure(measure) => measure.run(),
            Self::Fit(fit) => fit.run(),
            Self::Report(report) => report.run(),
            Self::Drivers(drivers) => drivers.run(),
            Self::Simulate(simulate) => simulate.run(),
        }
    }

    /// Whether the command answers in JSON, its errors included.
    fn json(&self) -> bool {
        match self {
            Self::Demo(demo) => demo.json,
            Self::Check(check) => check.json,
            Self::Measure(measure) => measure.json,
            Self::Fit(fit) => fit.json,
            Self::Report(report) => report.json,
            Self::Drivers(_) | Self::Simulate(_) => false,
        }
    }
}

/// Parses the arguments, runs the command and says how it ended.
pub(crate) fn main() -> ExitCode {
    let arguments = Arguments::parse();
    log(arguments.verbose);
    match arguments.command.run() {
        Ok(exit) => exit.into(),
        Err(error) => {
            if arguments.command.json() {
                output::json(&error.to_json());
            }
            output::note(&error.render(output::styled(&std::io::stderr())));
            error.exit().into()
        }
    }
}

fn log(verbose: u8) {
    let usual = match verbose {
        0 => "warn",
        1 => "info",
        2 => "debug",
        _ => "trace",
    };
    let filter = EnvFilter::builder().with_env_var(LOG_VARIABLE).try_from_env();
    let filter = filter.unwrap_or_else(|_| EnvFilter::new(format!("warn,ringstep={usual}")));
    let styled = output::styled(&std::io::stderr());
    tracing_subscriber::fmt()
        .with_env_filter(filter)
        .with_ansi(styled)
        .log_internal_errors(false)
        .with_writer(std::io::stderr)
        .init();
}
