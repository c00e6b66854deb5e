//! A board as its file states it: nominal values, outputs, ratings. SI units.

use super::{Station, parts};
use crate::files::{Document, FileErrors, Table, Value};
use ringstep_analysis::{
    findings::BoardFacts,
    pieces::{CapacitanceLaw, NodePieces, NodeSnubber, SecondaryPiece},
    quantity::{Measured, Unit},
};

/// The board under test. Its file looks like this:
#[doc = concat!("```toml\n", include_str!("../guide/examples/board.toml"), "```")]
#[derive(Debug, Clone, PartialEq)]
pub struct Board {
    /// Name.
    pub name: String,
    /// Nominal primary self-inductance, where known.
    pub primary_inductance_h: Option<Measured>,
    /// Outputs; the first is the one on the load.
    pub outputs: Vec<Output>,
    /// Kind of controller.
    pub controller: Controller,
    /// Kind of clamp.
    pub clamp: Clamp,
    /// Voltage above the bulk at which the clamp limits the drain, where known.
    pub clamp_v: Option<f64>,
    /// Bulk capacitance.
    pub bulk_capacitance_f: Measured,
    /// Rated drain voltage.
    pub drain_rating_v: f64,
    /// Lowest and highest rated line voltage (rms).
    pub line_range_v: [f64; 2],
    /// Nominal switching frequency, where known.
    pub switching_frequency_hz: Option<f64>,
    /// Output capacitance of the transistor, where known.
    pub transistor_capacitance: Option<CapacitanceLaw>,
    /// Junction capacitance of the clamp's diode, where known.
    pub clamp_diode_capacitance: Option<CapacitanceLaw>,
    /// Resistor and capacitor in series across the drain node, where there is one.
    pub drain_snubber: Option<NodeSnubber>,
}

/// One output.
#[derive(Debug, Clone, PartialEq)]
pub struct Output {
    /// Name.
    pub name: String,
    /// Nominal voltage.
    pub voltage_v: f64,
    /// Regulation window: lowest and highest voltage in regulation.
    pub regulation_v: [f64; 2],
    /// Highest load current.
    pub maximum_load_a: f64,
    /// Lowest load current it needs to stay in regulation.
    pub minimum_load_a: f64,
    /// Primary turns over secondary turns.
    pub turns_ratio: f64,
    /// Rectifier.
    pub rectifier: Rectifier,
    /// Junction capacitance of the rectifier at the output voltage, where known.
    pub rectifier_capacitance_f: Option<Measured>,
    /// Snubber capacitance across the rectifier; exactly zero for none.
    pub snubber_capacitance_f: Measured,
}

impl Output {
    /// Voltage reflected to the primary while this output conducts: `(V + drop) * turns ratio`.
    pub fn reflected_voltage_v(&self) -> f64 {
        (self.voltage_v + self.rectifier.drop_v()) * self.turns_ratio
    }
}

/// Kind of rectifier; sets the forward drop that enters the expected reflected voltage.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Rectifier {
    /// Silicon junction diode.
    Silicon,
    /// Schottky diode.
    Schottky,
    /// Synchronous rectifier.
    Synchronous,
}

impl Rectifier {
    const WORDS: [(&str, Self); 3] =
        [("silicon", Self::Silicon), ("schottky", Self::Schottky), ("synchronous", Self::Synchronous)];

    /// Forward drop to reckon with at full current, on the high side (common practice).
    pub fn drop_v(self) -> f64 {
        match self {
            Self::Silicon => 1.0,
            Self::Schottky => 0.6,
            Self::Synchronous => 0.1,
        }
    }
}

/// Kind of controller.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Controller {
    /// Fixed frequency that skips cycles at light load.
    CycleSkipping,
    /// Lowers its frequency at light load.
    FrequencyFoldback,
    /// Quasi-resonant, turning on in a valley.
    QuasiResonant,
    /// Not known.
    Unknown,
}

impl Controller {
    const WORDS: [(&str, Self); 4] = [
        ("cycle-skipping", Self::CycleSkipping),
        ("frequency-foldback", Self::FrequencyFoldback),
        ("quasi-resonant", Self::QuasiResonant),
        ("unknown", Self::Unknown),
    ];
}

/// Kind of clamp on the drain.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Clamp {
    /// Resistor, capacitor and diode.
    ResistorCapacitorDiode,
    /// Zener or suppressor diode with a blocking diode.
    Zener,
    /// None.
    None,
}

impl Clamp {
    const WORDS: [(&str, Self); 3] =
        [("resistor-capacitor-diode", Self::ResistorCapacitorDiode), ("zener", Self::Zener), ("none", Self::None)];
}

/// Topologies a board may state, and why all but the first are refused.
const TOPOLOGIES: [(&str, Option<[&str; 2]>); 4] = [
    ("flyback", None),
    (
        "two-switch-flyback",
        Some(["a two-switch flyback", "clamped to the bulk voltage, its two switching nodes share the ring"]),
    ),
    (
        "half-bridge-flyback",
        Some(["a half-bridge flyback", "its switching node is held by two transistors and never rings freely"]),
    ),
    (
        "active-clamp-flyback",
        Some(["an active-clamp flyback", "its clamp conducts through the off time, so that no ring is left to itself"]),
    ),
];

impl Board {
    /// Version of the file format.
    pub const FORMAT: u32 = 1;

    /// Reads a board file; `path` only names it in messages.
    ///
    /// # Errors
    /// Every mistake in the file, each with its place; a topology that cannot be measured is one.
    pub fn read(path: &str, text: &str) -> Result<Self, FileErrors> {
        let document = Document::parse(path, text);
        let board = Self::from_table(&document);
        document.finish(board)
    }

    /// What the analysis may know of this board on that station.
    pub fn facts(&self, station: &Station) -> BoardFacts {
        BoardFacts {
            probe_capacitance_f: Some(station.probe.capacitance_f),
            accuracy: station.accuracy,
            ..self.own_facts()
        }
    }

    /// What the analysis may know of this board where no station is at hand.
    pub fn own_facts(&self) -> BoardFacts {
        BoardFacts {
            primary_inductance_h: self.primary_inductance_h,
            switching_period_s: self.switching_frequency_hz.map(f64::recip),
            skips_cycles: match self.controller {
                Controller::CycleSkipping => Some(true),
                Controller::FrequencyFoldback => Some(false),
                Controller::QuasiResonant | Controller::Unknown => None,
            },
            pieces: self.pieces(),
            ..BoardFacts::default()
        }
    }

    fn pieces(&self) -> NodePieces {
        let secondary = |output: &Output| {
            Some(SecondaryPiece {
                turns_ratio: output.turns_ratio,
                rectifier_f: output.rectifier_capacitance_f?,
                snubber_f: output.snubber_capacitance_f,
            })
        };
        NodePieces {
            transistor: self.transistor_capacitance.clone(),
            secondaries: self.outputs.iter().map(secondary).collect(),
            clamp_diode: self.clamp_diode_capacitance.clone(),
            clamp_v: self.clamp_v,
            snubber: self.drain_snubber,
        }
    }

    /// Highest voltage any output reflects to the primary.
    pub fn reflected_voltage_v(&self) -> f64 {
        self.outputs.iter().map(Output::reflected_voltage_v).fold(0.0, f64::max)
    }

    fn from_table(document: &Document<'_>) -> Option<Self> {
        let root = document.root();
        document.format(&root, "board", Self::FORMAT);
        let name = root.required("name", Value::text);
        if let Some(Some(Some([what, why]))) = root.optional("topology", |value| value.choice(&TOPOLOGIES)) {
            let expected = format!("expected a single-switch flyback: {why}");
            root.refuse("topology", format!("{what} cannot be measured"), expected);
        }
        let primary_inductance_h = root.optional("primary_inductance", |value| value.measured(Unit::Henry, 1e-7..=1.0));
        let controller = root.required("controller", |value| value.choice(&Controller::WORDS));
        let switching_frequency_hz =
            root.optional("switching_frequency", |value| value.quantity(Unit::Hertz, 1e3..=1e7));
        let bulk_capacitance_f = root.required("bulk_capacitance", |value| value.measured(Unit::Farad, 1e-9..=1.0));
        let drain_rating_v = root.required("drain_rating", |value| value.quantity(Unit::Volt, 1.0..=5e3));
        let line_range_v =
            root.required("line_range", |value| value.span(|value| value.quantity(Unit::Volt, 1.0..=1e3)));
        let clamp = root.required("clamp", |value| value.table().and_then(|table| clamp_from_table(&table)));
        let outputs = root
            .required("output", |value| value.list(|value| value.table().and_then(|table| Output::from_table(&table))));
        let transistor = root.optional("transistor", |value| {
            let table = value.table()?;
            let law = table.required("output_capacitance", |value| parts::law(&value.table()?));
            table.finish();
            law
        });
        let drain_snubber = root.optional("drain_snubber", parts::snubber);
        root.finish();
        let (clamp, clamp_v, clamp_diode_capacitance) = clamp?;
        Some(Self {
            name: name?,
            primary_inductance_h: primary_inductance_h?,
            outputs: outputs?,
            controller: controller?,
            clamp,
            clamp_v,
            bulk_capacitance_f: bulk_capacitance_f?,
            drain_rating_v: drain_rating_v?,
            line_range_v: line_range_v?,
            switching_frequency_hz: switching_frequency_hz?,
            transistor_capacitance: transistor?,
            clamp_diode_capacitance,
            drain_snubber: drain_snubber?,
        })
    }
}

fn clamp_from_table(table: &Table<'_, '_>) -> Option<(Clamp, Option<f64>, Option<CapacitanceLaw>)> {
    let kind = table.required("kind", |value| value.choice(&Clamp::WORDS));
    let voltage_v = table.optional("voltage", |value| value.quantity(Unit::Volt, 1.0..=5e3));
    let diode = table.optional("diode_capacitance", |value| parts::law(&value.table()?));
    if kind == Some(Clamp::None) && table.has("voltage") {
        table.refuse("voltage", "a level without a clamp", "leave it out, or state the kind of clamp");
    }
    table.finish();
    Some((kind?, voltage_v?, diode?))
}

impl Output {
    fn from_table(table: &Table<'_, '_>) -> Option<Self> {
        let name = table.required("name", Value::text);
        let voltage_v = table.required("voltage", |value| value.quantity(Unit::Volt, 0.1..=1e3));
        let regulation_v =
            table.required("regulation", |value| value.span(|value| value.quantity(Unit::Volt, 0.1..=1e3)));
        let maximum_load_a = table.required("maximum_load", |value| value.quantity(Unit::Ampere, 1e-3..=1e3));
        let minimum_load_a = table.required("minimum_load", |value| value.quantity(Unit::Ampere, 0.0..=1e3));
        let turns_ratio = table.required("turns_ratio", |value| value.number(0.01..=1e3));
        let rectifier = table.required("rectifier", |value| value.choice(&Rectifier::WORDS));
        let rectifier_capacitance_f =
            table.optional("rectifier_capacitance", |value| value.measured(Unit::Farad, 0.0..=1e-6));
        let snubber_capacitance_f =
            table.optional("snubber_capacitance", |value| value.measured(Unit::Farad, 0.0..=1e-6));
        if let (Some(voltage), Some([low, high])) = (voltage_v, regulation_v)
            && !(low..=high).contains(&voltage)
        {
            let found = format!("{low} V to {high} V");
            table.refuse("regulation", found, format!("expected a window around the nominal {voltage} V"));
        }
        if let (Some(least), Some(most)) = (minimum_load_a, maximum_load_a)
            && least >= most
        {
            let expected = format!("expected less than maximum_load, {most} A");
            table.refuse("minimum_load", format!("{least} A"), expected);
        }
        table.finish();
        Some(Self {
            name: name?,
            voltage_v: voltage_v?,
            regulation_v: regulation_v?,
            maximum_load_a: maximum_load_a?,
            minimum_load_a: minimum_load_a?,
            turns_ratio: turns_ratio?,
            rectifier: rectifier?,
            rectifier_capacitance_f: rectifier_capacitance_f?,
            snubber_capacitance_f: snubber_capacitance_f?.unwrap_or(Measured::exact(0.0)),
        })
    }
}
