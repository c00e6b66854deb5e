//! `check`: the three files and the preflight, without energising anything.

use super::{
    error::{CliError, Exit},
    inputs::{InputPaths, Inputs},
    output,
};
use clap::Args;
use ringstep::{
    sequence::{Attendance, PreflightCheck, preflight},
    station::CAUTIONS,
};
use serde_json::json;

/// Check plan, station and board files without energising anything.
///
/// Every mistake in the files is shown at once. Then plan and board are held against the ratings, limits and earthing of the
/// station: what refuses here would refuse `measure` before power.
#[derive(Debug, Args)]
#[command(after_long_help = output::cautions())]
pub(crate) struct Check {
    #[command(flatten)]
    paths: InputPaths,
    /// Nobody is at the bench: what is set by hand is refused.
    #[arg(long)]
    unattended: bool,
    /// Print one JSON object.
    #[arg(long)]
    pub(crate) json: bool,
}

impl Check {
    /// Runs the command.
    pub(crate) fn run(&self) -> Result<Exit, CliError> {
        let Inputs { plan, station, board, .. } = self.paths.read()?;
        let attendance = if self.unattended { Attendance::Unattended } else { Attendance::Attended };
        let checks = preflight(&station, &board, &plan, attendance);
        let passed = checks.iter().all(|check| check.passed);
        if self.json {
            let checks: Vec<_> = checks.iter().map(as_json).collect();
            output::json(&json!({
                "plan": plan.name, "station": station.name, "board": board.name,
                "passed": passed, "checks": checks, "cautions": CAUTIONS,
            }));
        } else {
            output::line(&format!("plan \"{}\", board \"{}\", station \"{}\"", plan.name, board.name, station.name));
            output::line(&format!("\n{}\n", preflight_table(&checks)));
            output::line(&format!("{}\n", output::cautions()));
            let refused = checks.iter().filter(|check| !check.passed).count();
            output::line(&if passed {
                "Nothing here forbids the measurement. Nothing was energised.".to_owned()
            } else {
                format!("Refused: {refused} of {} checks did not pass. Nothing was energised.", checks.len())
            });
        }
        Ok(if passed { Exit::Done } else { Exit::Refused })
    }
}

/// The preflight as a table.
pub(crate) fn preflight_table(checks: &[PreflightCheck]) -> String {
    let rows = checks.iter().map(|check| {
        let outcome = match (check.passed, check.noted) {
            (false, _) => "REFUSED",
            (true, true) => "note",
            (true, false) => "passed",
        };
        vec![outcome.to_owned(), check.check.to_owned(), check.detail.clone()]
    });
    output::table(&["", "check", "detail"], rows)
}

fn as_json(check: &PreflightCheck) -> serde_json::Value {
    json!({ "check": check.check, "passed": check.passed, "noted": check.noted, "detail": check.detail })
}
