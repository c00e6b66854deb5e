//! The boards that ship with the bench, invented for the Norrsund Harbour Works. Fixed: a board is never softened to suit a
//! measurement.

mod data_sheets;
mod parts;
mod ringing;
mod short;
mod silent;

pub use data_sheets::DataSheets;
pub use parts::{Clamp, ClampLevel, ControllerParts, Diode, LightLoad, Parts};
use serde::Serialize;

/// Kind of clamp on the drain.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum ClampKind {
    /// Resistor, capacitor and diode to the bulk.
    ResistorCapacitorDiode,
    /// Zener diode and blocking diode to the bulk.
    Zener,
}

/// Kind of controller.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum ControllerKind {
    /// Fixed clock, leaves out cycles at light load.
    CycleSkipping,
    /// Lowers its frequency at light load.
    FrequencyFoldback,
}

/// What the documents of a board state; nominal values, before tolerances.
#[derive(Debug, Clone, Copy, PartialEq, Serialize)]
pub struct Nominal {
    /// Primary self-inductance.
    pub primary_inductance_h: f64,
    /// Its relative tolerance.
    pub primary_inductance_tolerance: f64,
    /// Leakage inductance referred to the primary.
    pub leakage_inductance_h: f64,
    /// Primary turns over secondary turns.
    pub turns_ratio: f64,
    /// Output voltage.
    pub output_v: f64,
    /// Highest load current.
    pub maximum_load_a: f64,
    /// Lowest load current.
    pub minimum_load_a: f64,
    /// Bulk capacitance.
    pub bulk_capacitance_f: f64,
    /// Rated drain voltage.
    pub drain_rating_v: f64,
    /// Lowest and highest line voltage, root mean square.
    pub line_range_v: [f64; 2],
    /// Switching frequency.
    pub switching_frequency_hz: f64,
    /// Kind of clamp.
    pub clamp: ClampKind,
    /// Voltage above the bulk at which the clamp holds the drain at full load.
    pub clamp_v: f64,
    /// Kind of controller.
    pub controller: ControllerKind,
}

/// A board: its name, what its documents state, and what is soldered to it.
#[derive(Debug, Clone, PartialEq)]
pub struct BoardModel {
    /// Name.
    pub name: &'static str,
    /// What its documents state.
    pub nominal: Nominal,
    /// Component values of the power stage, before tolerances.
    pub parts: Parts,
    /// Controller.
    pub controller: ControllerParts,
}

static BOARDS: [BoardModel; 6] =
    [ringing::BEACON, ringing::FOGHORN, ringing::TIDEGAUGE, ringing::WINCH, silent::PUMPHOUSE, silent::SEMAPHORE];

/// Every board.
pub fn all() -> &'static [BoardModel] {
    &BOARDS
}

/// The board of that name.
pub fn by_name(name: &str) -> Option<&'static BoardModel> {
    BOARDS.iter().find(|board| board.name == name)
}
