//! What happens in a run, as plain data. The journal is these events, one JSON line each.

use crate::instrument::{Identity, LoadReading, RawWaveform, SourceReading};
use ringstep_analysis::{
    budget::Budget,
    circuit::{
        CapacitancePart,
        added::{AddedDoubt, AddedResult},
    },
    findings::Findings,
    quantity::Measured,
};
use serde::{Deserialize, Serialize};

/// One event of a run. Newer versions add variants and optional fields; they never change the meaning of old ones.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
#[serde(tag = "event", rename_all = "snake_case")]
pub enum Event {
    /// The run began.
    RunStarted {
        /// Identifier of the run (UUID version 7).
        run: String,
        /// Version of this program.
        software_version: String,
        /// Whether any instrument declares itself simulated or played back.
        simulated: bool,
    },
    /// One line of the preflight: what was checked and how it came out.
    PreflightChecked {
        /// What was checked.
        check: String,
        /// Whether it holds.
        passed: bool,
        /// The figures and the reason.
        detail: String,
    },
    /// An instrument answered and its driver was found.
    InstrumentIdentified {
        /// Role at the station: `scope`, `load`, `source`.
        role: String,
        /// Who it is.
        identity: Identity,
    },
    /// A line voltage was switched on or changed.
    LineSet {
        /// Root-mean-square line voltage.
        line_v: f64,
        /// Line frequency.
        frequency_hz: f64,
    },
    /// Output, bulk and clamp level stopped moving.
    Settled {
        /// Line voltage.
        line_v: f64,
        /// Time waited.
        waited_s: f64,
        /// Load reading.
        load: LoadReading,
        /// Source reading, where the source measures.
        source: Option<SourceReading>,
    },
    /// One acquisition is on disk.
    Captured(Capture),
    /// One step of the load: what was set, what was measured, and which cycles were seen.
    LoadStepped(LoadStep),
    /// One point (line voltage) is finished and on disk.
    PointFinished(Point),
    /// One point could not be measured.
    PointRefused {
        /// Index of the point in the plan, from zero.
        index: usize,
        /// Line voltage.
        line_v: f64,
        /// Why, and what to change.
        reason: String,
    },
    /// Power was taken off for work by hand: what is known of the charge that stays.
    Discharge(Discharge),
    /// The operator was asked to fit a capacitor to the drain node, or to take it off.
    HandworkAsked(Handwork),
    /// The operator confirmed it.
    HandworkDone {
        /// Capacitance fitted now, without leads; zero for the bare node.
        capacitance_f: f64,
        /// Voltage the operator measured at the bulk capacitor before touching anything.
        bulk_v: f64,
    },
    /// The rings with one capacitor added, or with none again, are on disk.
    AddedPointFinished(AddedPointValues),
    /// A capacitor was not fitted, or the work with them ended early.
    AddedCapacitorRefused {
        /// Its capacitance.
        capacitance_f: f64,
        /// Why, and what to change.
        reason: String,
    },
    /// What all the added capacitors say together.
    AddedCapacitorsFinished(AddedOutcome),
    /// Something worth telling that stops nothing.
    Noted {
        /// One sentence.
        note: String,
    },
    /// Source off, load off: what was confirmed.
    SafeOff {
        /// Why: `finished`, `stopped`, or the error.
        reason: String,
        /// Whether the source confirmed that its output is off.
        source_off: bool,
        /// Whether the load confirmed that its input is off.
        load_off: bool,
    },
    /// The run ended.
    RunEnded {
        /// How.
        outcome: Outcome,
        /// The error or refusal, where there was one.
        message: Option<String>,
    },
}

/// How a run ended.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "snake_case")]
pub enum Outcome {
    /// Every point of the plan was measured.
    Complete,
    /// Some points were refused.
    Partial,
    /// Refused before or after power: nothing could be measured.
    Refused,
    /// Stopped by the operator.
    Stopped,
    /// An error ended it.
    Failed,
}

/// What a capture was taken for.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "snake_case")]
pub enum Purpose {
    /// Several switching cycles, to classify them.
    Survey,
    /// One relaxation ring at full rate.
    RelaxationRing,
    /// One leakage ring at full rate.
    LeakageRing,
}

/// One acquisition and where it lies in the run folder.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Capture {
    /// Number in the run, from zero; names its file `captures/0007.parquet`.
    pub number: usize,
    /// Index of the point, from zero.
    pub point: usize,
    /// What for.
    pub purpose: Purpose,
    /// Line voltage set.
    pub line_v: f64,
    /// Load current set.
    pub load_a: f64,
    /// Which repeat of the same setting, from zero.
    pub repeat: usize,
    /// Scale and format; the payload is in the file.
    pub waveform: RawWaveform,
    /// SHA-256 of the file, hexadecimal.
    pub sha256: String,
}

/// One step of the load.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct LoadStep {
    /// Index of the point, from zero.
    pub point: usize,
    /// Current set.
    pub set_a: f64,
    /// Load reading.
    pub load: LoadReading,
    /// Cycles seen, by mode: continuous, discontinuous, skipped.
    pub cycles: [usize; 3],
    /// Relaxation-ring time visible after the longest cycle, in ring periods where the ring was fitted.
    pub visible_ring_periods: Option<f64>,
    /// Number of the survey capture.
    pub survey: usize,
}

/// One point of the plan with its values.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Point {
    /// Index of the point, from zero.
    pub index: usize,
    /// Line voltage set.
    pub line_v: f64,
    /// Load current at which the rings were captured.
    pub load_a: f64,
    /// Load power measured there.
    pub load_w: f64,
    /// Highest load current at which cycles were skipped, and lowest at which none were: the boundary lies between.
    pub boundary_load_a: Option<[f64; 2]>,
    /// Combined values of the point: repeats of the relaxation ring and the leakage ring put together.
    pub values: PointValues,
    /// Findings of each capture, by capture number.
    pub findings: Vec<(usize, Findings)>,
}

/// Combined values of one point; `None` with a doubt in `findings` where a value can't be had.
#[derive(Debug, Clone, Default, PartialEq, Serialize, Deserialize)]
pub struct PointValues {
    /// Undamped relaxation-ring frequency.
    pub relaxation_frequency_hz: Option<Measured>,
    /// Quality factor of the relaxation ring.
    pub relaxation_quality_factor: Option<Measured>,
    /// Captures whose leakage rings were used: those at the load start or those at the measuring load, whichever tell it better.
    #[serde(default)]
    pub leakage_captures: Vec<usize>,
    /// Undamped leakage-ring frequency.
    pub leakage_frequency_hz: Option<Measured>,
    /// Quality factor of the leakage ring.
    pub leakage_quality_factor: Option<Measured>,
    /// Node capacitance, probe included.
    pub node_capacitance_f: Option<Measured>,
    /// Node capacitance with the probe's share taken out.
    pub node_capacitance_without_probe_f: Option<Measured>,
    /// Leakage inductance.
    pub leakage_inductance_h: Option<Measured>,
    /// Reflected voltage.
    pub reflected_voltage_v: Option<Measured>,
    /// Bulk voltage.
    pub bulk_voltage_v: Option<Measured>,
    /// Peak drain voltage seen in any capture of the point.
    pub peak_drain_voltage_v: Option<Measured>,
    /// Turn-on rate in the survey at the measuring load.
    pub turn_on_rate_hz: Option<Measured>,
    /// Amplitude in volts at which the quality factor of the relaxation ring holds: at the start of its window.
    #[serde(default)]
    pub relaxation_amplitude_v: Option<f64>,
    /// The same of the leakage ring.
    #[serde(default)]
    pub leakage_amplitude_v: Option<f64>,
    /// Uncertainty budget of every circuit value and voltage.
    #[serde(default)]
    pub budgets: Vec<Budget>,
    /// The node capacitance taken apart, as far as the board file states its parts.
    #[serde(default)]
    pub capacitance_parts: Vec<CapacitancePart>,
}

/// What is known of the charge on the board after power was taken off.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Discharge {
    /// Whether the source read back that its output is off; otherwise the operator said so.
    pub source_read_back: bool,
    /// What the source reads then.
    pub source: Option<SourceReading>,
    /// Whether the load read back that its input is off.
    pub load_read_back: bool,
    /// Output voltage that the load sees.
    pub output_v: f64,
    /// Bulk voltage; `None` where no instrument of the station sees it, so that it is not known.
    pub bulk_v: Option<f64>,
}

/// Work asked of the operator, with what it will do to the board.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct Handwork {
    /// Capacitance to be fitted; `None` where the last one is to be taken off.
    pub fit: Option<Measured>,
    /// What is predicted with it.
    pub predicted: Option<AddedStress>,
}

/// What an added capacitor must stand and what it costs.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct AddedStress {
    /// Highest drain voltage: that measured without it.
    pub peak_v: f64,
    /// Rating needed: the peak and the margin.
    pub needed_rating_v: f64,
    /// Rating it has.
    pub rating_v: f64,
    /// Highest drain voltage from which the switch may discharge it: bulk and reflected voltage.
    pub turn_on_v: f64,
    /// Energy the switch turns into heat at a turn-on from there, `C V^2 / 2`, in joule.
    pub turn_on_energy_j: f64,
    /// Highest rate of turn-ons to reckon with.
    pub turn_on_rate_hz: f64,
    /// Both together, in watt.
    pub power_w: f64,
}

/// Values of the node with one capacitor added.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct AddedPointValues {
    /// Capacitance added, without leads; zero for the bare node, measured again.
    pub capacitance_f: Measured,
    /// Line voltage set.
    pub line_v: f64,
    /// Load current at which the relaxation rings were captured.
    pub load_a: f64,
    /// Leakage-ring frequencies at the measuring load and at the load start.
    pub leakage_frequencies_hz: [Option<Measured>; 2],
    /// Values; the node capacitance from the nominal inductance has the capacitor in it.
    pub values: PointValues,
    /// Findings of each capture, by capture number.
    pub findings: Vec<(usize, Findings)>,
}

/// What the added capacitors say together; `None` with a refusal where they say nothing.
#[derive(Debug, Clone, Default, PartialEq, Serialize, Deserialize)]
pub struct AddedOutcome {
    /// Index of the point that was measured bare, from zero.
    pub point: usize,
    /// Line voltage set.
    pub line_v: f64,
    /// Primary inductance and node capacitance, probe included.
    pub relaxation: Option<AddedResult>,
    /// Leakage inductance and node capacitance on the plateau, probe included.
    pub leakage: Option<AddedResult>,
    /// Load current at which the leakage rings behind it were captured: the measuring load or the load start, for all points the
    /// same, whichever tells it better.
    pub leakage_load_a: Option<f64>,
    /// Why one of them is missing, a sentence each.
    pub refusals: Vec<String>,
    /// Doubts about the whole.
    pub doubts: Vec<AddedDoubt>,
}
