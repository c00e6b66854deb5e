//! `measure`: a board as planned, from preflight to report; the demonstration runs through here too.

use super::{
    check::preflight_table,
    error::{CliError, Exit},
    inputs::{InputPaths, Inputs},
    keeping::{ExchangeFile, FolderKeeper},
    operator::Terminal,
    output,
    table::values_table,
};
use clap::Args;
use ringstep::{
    instrument::Drivers,
    record::{Results, Run, RunWriter},
    report,
    sequence::{
        self, Attendance, Job, KeepError, Keeper, PreflightCheck, RunError, Stop, Stopper,
        event::{Event, Outcome},
        expected_stress, preflight,
    },
    station::{self, Connected, Operator},
    transport::ExchangeLog,
};
use serde_json::json;
use std::{
    io::IsTerminal,
    path::{Path, PathBuf},
    sync::Arc,
    time::Duration,
};
use tokio::signal::unix::{SignalKind, signal};

/// Longest wait for the links to close.
const CLOSING: Duration = Duration::from_secs(2);

/// Measure a board as planned: one line voltage or a sweep of many.
///
/// Energises the board. The source is switched off at the end, on any error and on Ctrl-C.
#[derive(Debug, Args)]
#[command(after_long_help = output::cautions())]
pub(crate) struct Measure {
    #[command(flatten)]
    paths: InputPaths,
    /// Run folder to write; it must be new or empty. [default: runs/DATE-TIME-BOARD]
    #[arg(long, value_name = "FOLDER")]
    out: Option<PathBuf>,
    /// Folder of further drivers; they go before those built in.
    #[arg(long, value_name = "FOLDER")]
    drivers: Option<PathBuf>,
    /// Nobody is at the bench: what is set by hand is refused.
    #[arg(long)]
    unattended: bool,
    /// Print one JSON object at the end, nothing else.
    #[arg(long)]
    pub(crate) json: bool,
}

impl Measure {
    /// Runs the command.
    pub(crate) fn run(&self) -> Result<Exit, CliError> {
        let inputs = self.paths.read()?;
        let folder = self.out.clone().unwrap_or_else(|| default_folder(&inputs.board.name));
        // Nobody solders at the other end of a pipe.
        let by_hand = inputs.plan.added_capacitors.is_some() && !std::io::stdin().is_terminal();
        let attendance = if self.unattended || by_hand { Attendance::Unattended } else { Attendance::Attended };
        let request = Request { folder, drivers: self.drivers.as_deref(), attendance, quiet: self.json };
        let finished = execute(&inputs, &request)?;
        finished.print(self.json);
        Ok(finished.exit())
    }
}

/// Where a run is kept unless something else is asked for.
pub(super) fn default_folder(board: &str) -> PathBuf {
    let name: String = board.chars().map(|c| if c.is_alphanumeric() { c } else { '-' }).collect();
    let now = jiff::Timestamp::now();
    PathBuf::from("runs").join(format!("{}-{name}", now.strftime("%Y%m%d-%H%M%SZ")))
}

/// How a run is to be carried out.
pub(super) struct Request<'a> {
    pub(super) folder: PathBuf,
    pub(super) drivers: Option<&'a Path>,
    pub(super) attendance: Attendance,
    pub(super) quiet: bool,
}

/// A run that has ended, whichever way.
pub(super) struct Finished {
    pub(super) folder: PathBuf,
    pub(super) outcome: Outcome,
    pub(super) results: Results,
    pub(super) run: Run,
}

impl Finished {
    pub(super) fn exit(&self) -> Exit {
        match self.outcome {
            Outcome::Complete | Outcome::Partial => Exit::Done,
            Outcome::Refused => Exit::NothingMeasurable,
            Outcome::Stopped => Exit::Stopped,
            Outcome::Failed => Exit::Instrument,
        }
    }

    /// The values and where everything is.
    pub(super) fn print(&self, json: bool) {
        if json {
            output::json(&self.to_json());
            return;
        }
        if !self.results.points.is_empty() {
            output::line(&format!("\n{}", values_table(&self.results)));
        }
        if let Some(message) = &self.results.message {
            output::line(&format!("\n{message}"));
        }
        output::line(&format!("\nrun folder: {}\nreport:     {}", self.folder.display(), self.report().display()));
    }

    pub(super) fn to_json(&self) -> serde_json::Value {
        json!({ "run": self.folder, "report": self.report(), "outcome": self.outcome, "results": self.results })
    }

    fn report(&self) -> PathBuf {
        self.folder.join("report.html")
    }
}

/// Preflight, record, connection, sequence, safe-off, report. Nothing is energised before the record is open.
pub(super) fn execute(inputs: &Inputs, request: &Request<'_>) -> Result<Finished, CliError> {
    let checks = preflight(&inputs.station, &inputs.board, &inputs.plan, request.attendance);
    if !request.quiet {
        output::note(&format!("{}\n\n{}\n", output::cautions(), preflight_table(&checks)));
    }
    let refused: Vec<&PreflightCheck> = checks.iter().filter(|check| !check.passed).collect();
    if !refused.is_empty() {
        return Err(CliError::Preflight(refused.iter().map(|c| format!("{}: {}", c.check, c.detail)).collect()));
    }
    let expected = expected_stress(&inputs.board, &inputs.plan).map_err(|reason| CliError::Preflight(vec![reason]))?;
    let drivers = super::drivers::known(request.drivers)?;
    let id = uuid::Uuid::now_v7();
    let writer = RunWriter::create(&request.folder, &inputs.texts, id)?;
    let job = Job {
        plan: inputs.plan.clone(),
        station: inputs.station.clone(),
        board: inputs.board.clone(),
        expected_peak_v: expected.peak_v(),
    };
    let mut keeper = FolderKeeper::new(writer, request.quiet);
    let runtime = tokio::runtime::Runtime::new()
        .map_err(|error| CliError::Failed(format!("failed to start threads: {error}")))?;
    let operator: Option<Arc<dyn Operator>> = match request.attendance {
        Attendance::Attended => Some(Arc::new(Terminal)),
        Attendance::Unattended => None,
    };
    let (outcome, message) =
        runtime.block_on(energised(&job, &id.to_string(), &checks, &drivers, operator, &mut keeper))?;
    if let (Outcome::Failed, Some(message)) = (outcome, &message) {
        tracing::info!("{message}");
    }
    // The links close with their tasks; what they log on the way belongs to the record.
    runtime.shutdown_timeout(CLOSING);
    let results = keeper.writer.finish()?;
    let mut run = Run::open(&request.folder)?;
    report::write(&mut run)?;
    Ok(Finished { folder: request.folder.clone(), outcome, results, run })
}

/// Everything that needs the instruments.
async fn energised(
    job: &Job,
    id: &str,
    checks: &[PreflightCheck],
    drivers: &Drivers,
    operator: Option<Arc<dyn Operator>>,
    keeper: &mut FolderKeeper,
) -> Result<(Outcome, Option<String>), CliError> {
    let sink = Arc::new(ExchangeFile::new(keeper.writer.exchange_log()));
    let log = ExchangeLog::new(tokio::time::Instant::now(), sink);
    let (stopper, stop) = Stop::new();
    tokio::spawn(raise_on_signals(stopper));
    let connecting = station::connect(&job.station, drivers, &log, operator);
    let connected = tokio::select! {
        () = stop.raised() => return ended(keeper, Outcome::Stopped, RunError::Stopped.to_string()),
        connected = connecting => connected,
    };
    let mut connected = match connected {
        Ok(connected) => connected,
        Err(error) => return ended(keeper, Outcome::Failed, format!("{error}; nothing was energised")),
    };
    opening(id, checks, &connected, keeper).map_err(RunError::from)?;
    Ok(sequence::run(job, &mut connected, keeper, &stop).await?)
}

/// The first events of a run.
fn opening(
    id: &str,
    checks: &[PreflightCheck],
    connected: &Connected,
    keeper: &mut FolderKeeper,
) -> Result<(), KeepError> {
    let identities = connected.identities();
    keeper.event(&Event::RunStarted {
        run: id.to_owned(),
        software_version: env!("CARGO_PKG_VERSION").to_owned(),
        simulated: identities.iter().any(|(_, identity)| identity.simulated),
    })?;
    for check in checks {
        let (check, passed, detail) = (check.check.to_owned(), check.passed, check.detail.clone());
        keeper.event(&Event::PreflightChecked { check, passed, detail })?;
    }
    for (role, identity) in identities {
        keeper.event(&Event::InstrumentIdentified { role: role.to_string(), identity: identity.clone() })?;
    }
    Ok(())
}

fn ended(keeper: &mut FolderKeeper, outcome: Outcome, message: String) -> Result<(Outcome, Option<String>), CliError> {
    let message = Some(message);
    keeper.event(&Event::RunEnded { outcome, message: message.clone() }).map_err(RunError::from)?;
    Ok((outcome, message))
}

/// Raises the stop on Ctrl-C, on a termination signal and when the terminal goes away.
async fn raise_on_signals(stopper: Stopper) {
    let came = |kind: SignalKind| async move {
        match signal(kind) {
            Ok(mut signal) => signal.recv().await,
            Err(_) => std::future::pending().await,
        }
    };
    tokio::select! {
        _ = came(SignalKind::interrupt()) => {}
        _ = came(SignalKind::terminate()) => {}
        _ = came(SignalKind::hangup()) => {}
        _ = came(SignalKind::quit()) => {}
    }
    stopper.raise();
}
