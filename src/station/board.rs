//! A board as its file states it: nominal values, outputs, ratings. SI units.

use ringstep_analysis::quantity::Measured;

/// The board under test.
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
    /// Kind of clamp and the level it clamps at above the bulk voltage, where known.
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
