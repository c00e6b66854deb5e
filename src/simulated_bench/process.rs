//! The bench as a process: instruments around one board on sockets and a pseudo-terminal, announced by one JSON line on the
//! standard output; it ends with its standard input, on which a hand with a soldering iron may be asked for meanwhile.

use crate::{
    boards::{self, ClampKind, ControllerKind, DataSheets, Nominal},
    faults::{Fault, FaultPlan, InstrumentName},
    instruments::{
        Device, Instrument, SharedBench,
        bench::quirk,
        load::Load,
        scope::{
            Scope,
            settings::{Model, Probe},
        },
        source::Source,
    },
    truth::TruthFile,
    wires::{Port, SerialWire, TcpWire},
};
use serde::Serialize;
use std::{
    io::{self, Write},
    path::PathBuf,
    sync::{Arc, Mutex},
    time::Duration,
};
use tokio::{sync::oneshot, task::JoinSet};

/// How often instruments that have something to do by themselves are looked after.
const SERVICE_PERIOD: Duration = Duration::from_millis(10);

/// What the bench is made of.
#[derive(Debug, Clone, PartialEq)]
pub struct Options {
    /// Name of the board.
    pub board: String,
    /// Seed of tolerances, instrument errors, noise.
    pub seed: u64,
    /// Simulated seconds in a real one while nothing is captured.
    pub speed: f64,
    /// File that truths are appended to.
    pub truth: Option<PathBuf>,
    /// Bits of the scope's converter: 8 or 12.
    pub scope_bits: u8,
    /// Attenuation of the drain probe.
    pub probe_factor: f64,
    /// Nominal capacitance of the drain probe.
    pub probe_capacitance_f: f64,
    /// Faults on purpose.
    pub faults: Vec<Fault>,
}

impl Default for Options {
    fn default() -> Self {
        Self {
            board: String::from("beacon"),
            seed: 1,
            speed: 1.0,
            truth: None,
            scope_bits: 8,
            probe_factor: 100.0,
            probe_capacitance_f: 5e-12,
            faults: vec![],
        }
    }
}

/// Why the bench cannot start.
#[derive(Debug, thiserror::Error)]
pub enum BenchError {
    /// There is no such board.
    #[error("there is no simulated board `{name}`; there are {known}")]
    UnknownBoard {
        /// What was asked for.
        name: String,
        /// What there is.
        known: String,
    },
    /// There is no such scope.
    #[error("there is no simulated scope of {0} bits; there are 8 and 12")]
    UnknownScope(u8),
    /// A value that makes no sense.
    #[error("{what} of the simulated bench is {value}; it must be a positive number")]
    NotPositive {
        /// Which option.
        what: &'static str,
        /// Its value.
        value: f64,
    },
    /// The system refused something.
    #[error("failed to {what} for the simulated bench: {source}")]
    System {
        /// What was tried.
        what: String,
        /// Why it failed.
        source: io::Error,
    },
}

/// What a started bench announces.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Announcement {
    /// Always true.
    pub simulated: bool,
    /// Name of the board.
    pub board: String,
    /// Seed.
    pub seed: u64,
    /// Address of the scope.
    pub scope: String,
    /// Address of the load.
    pub load: String,
    /// Address of the source.
    pub source: String,
    /// Attenuation of the drain probe.
    pub probe_factor: f64,
    /// Nominal capacitance of the drain probe; the real one is within 3 %.
    pub probe_capacitance_f: f64,
    /// What the documents of the board state.
    pub documents: Nominal,
    /// What the data sheets of its parts state.
    pub data_sheets: DataSheets,
    /// Primary self-inductance of this very sample as an inductance meter shows it, within 0.5 %.
    pub primary_inductance_reading_h: f64,
}

/// A started bench; it ends when this is dropped.
pub struct RunningBench {
    /// What it announces.
    pub announcement: Announcement,
    bench: SharedBench,
    _tasks: JoinSet<()>,
}

impl Drop for RunningBench {
    fn drop(&mut self) {
        self.bench.now().truth().final_state();
    }
}

/// Every board by name, with a sentence about it.
pub fn boards() -> Vec<(&'static str, String)> {
    boards::all().iter().map(|board| (board.name, sentence(&board.nominal))).collect()
}

fn sentence(nominal: &Nominal) -> String {
    let [lowest_v, highest_v] = nominal.line_range_v;
    let clamp = match nominal.clamp {
        ClampKind::ResistorCapacitorDiode => "a resistor-capacitor-diode clamp",
        ClampKind::Zener => "a zener clamp",
    };
    let controller = match nominal.controller {
        ControllerKind::CycleSkipping => "leaves out cycles at light load",
        ControllerKind::FrequencyFoldback => "lowers its frequency at light load",
    };
    format!(
        "{} V, {} A from {lowest_v} V to {highest_v} V; has {clamp} and {controller}.",
        nominal.output_v, nominal.maximum_load_a
    )
}

fn positive(what: &'static str, value: f64) -> Result<f64, BenchError> {
    if value.is_finite() && value > 0.0 { Ok(value) } else { Err(BenchError::NotPositive { what, value }) }
}

fn failed(what: impl Into<String>) -> impl FnOnce(io::Error) -> BenchError {
    let what = what.into();
    move |source| BenchError::System { what, source }
}

/// The probe as it really is: its capacitance, offset and compensation are a little off.
fn probe(options: &Options) -> Result<Probe, BenchError> {
    let off = |index| quirk(options.seed, "drain probe", index);
    let capacitance_f = positive("the probe capacitance", options.probe_capacitance_f)?;
    Ok(Probe {
        factor: positive("the probe factor", options.probe_factor)?,
        capacitance_f: capacitance_f * (1.0 + 0.03 * off(0)),
        offset_v: 0.005 * options.probe_factor * off(1),
        miscompensation: 0.01 * off(2),
    })
}

/// Primary self-inductance of the sample through a meter that is off by up to 0.5 %.
fn inductance_reading(bench: &SharedBench, seed: u64) -> f64 {
    let bench = bench.now();
    let circuit = bench.plant().circuit();
    let primary_h = circuit.parts.magnetising_h + circuit.parts.leakage_h;
    primary_h * (1.0 + 0.005 * quirk(seed, "inductance meter", 0))
}

/// Starts a bench within this process.
///
/// # Errors
/// If an option makes no sense or the system has no socket, pseudo-terminal or file to give.
pub async fn start(options: &Options) -> Result<RunningBench, BenchError> {
    let board = boards::by_name(&options.board).ok_or_else(|| BenchError::UnknownBoard {
        name: options.board.clone(),
        known: boards::all().iter().map(|board| board.name).collect::<Vec<_>>().join(", "),
    })?;
    let model = Model::of_bits(options.scope_bits).ok_or(BenchError::UnknownScope(options.scope_bits))?;
    let probe = probe(options)?;
    let seed = options.seed;
    let truth = TruthFile::open(options.truth.as_deref()).map_err(failed("open the truth file"))?;
    let bench = SharedBench::new(board, seed, positive("the speed", options.speed)?, probe.capacitance_f, truth);
    let port =
        |instrument: Arc<Mutex<dyn Instrument>>, name| Port::new(instrument, FaultPlan::new(&options.faults, name));
    let scope = Device::new(Scope::new(bench.clone(), seed, model, probe));
    let scope_port = port(Arc::new(Mutex::new(scope)), InstrumentName::Scope);
    let load = Device::new(Load::new(bench.clone(), seed));
    let source = Device::new(Source::new(bench.clone(), seed));
    let scope = TcpWire::bind(scope_port.clone()).await.map_err(failed("listen on a socket"))?;
    let source_port = port(Arc::new(Mutex::new(source)), InstrumentName::Source);
    let source = TcpWire::bind(source_port).await.map_err(failed("listen on a socket"))?;
    let load = SerialWire::open(port(Arc::new(Mutex::new(load)), InstrumentName::Load))
        .map_err(failed("open a pseudo-terminal"))?;
    let announcement = Announcement {
        simulated: true,
        board: options.board.clone(),
        seed,
        scope: scope.address().map_err(failed("name the scope's socket"))?,
        load: load.address().map_err(failed("name the load's line"))?,
        source: source.address().map_err(failed("name the source's socket"))?,
        probe_factor: options.probe_factor,
        probe_capacitance_f: options.probe_capacitance_f,
        documents: board.nominal,
        data_sheets: DataSheets::of(board),
        primary_inductance_reading_h: inductance_reading(&bench, seed),
    };
    bench.now().note_state();
    let mut tasks = JoinSet::new();
    tasks.spawn(scope.serve());
    tasks.spawn(source.serve());
    tasks.spawn(load.serve());
    tasks.spawn(async move {
        loop {
            tokio::time::sleep(SERVICE_PERIOD).await;
            scope_port.service().await;
        }
    });
    Ok(RunningBench { announcement, bench, _tasks: tasks })
}

/// Starts a bench, announces it in one JSON line on the standard output, and keeps it until the standard input ends. A line
/// `solder 47e-12` there adds that capacitance from drain to source, `solder 0` takes it away; each is answered by a JSON line
/// that tells whether it was done, which it is not while the line is on.
///
/// # Errors
/// As `start`, or if the standard output is closed.
pub async fn serve(options: &Options) -> Result<(), BenchError> {
    let running = start(options).await?;
    let line = serde_json::to_string(&running.announcement).map_err(io::Error::other);
    let mut out = io::stdout();
    line.and_then(|line| writeln!(out, "{line}")).and_then(|()| out.flush()).map_err(failed("announce itself"))?;
    let hand = running.bench.clone();
    // The end of the standard input tells that the parent is gone, however it went.
    let (ended, end) = oneshot::channel();
    std::thread::spawn(move || {
        for line in io::stdin().lines() {
            let Ok(line) = line else { break };
            let done = solder(&hand, &line);
            // Whoever does not read the answer does without.
            let _ = writeln!(io::stdout(), "{}", serde_json::json!({"asked": line, "done": done}));
        }
        let _ = ended.send(());
    });
    let _ = end.await;
    Ok(())
}

fn solder(bench: &SharedBench, line: &str) -> bool {
    let farad = line.trim().strip_prefix("solder ").and_then(|farad| farad.trim().parse().ok());
    farad.is_some_and(|farad| bench.now().solder(farad))
}
