//! The boards that ship with the bench, invented for the Norrsund Harbour Works: nominal data as a board file would state
//! it. Fixed; a board is never softened to suit a measurement.

/// Kind of clamp on the drain.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum ClampKind {
    /// Resistor, capacitor and diode to the bulk.
    ResistorCapacitorDiode,
    /// Zener diode and blocking diode to the bulk.
    Zener,
}

/// Kind of controller.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum ControllerKind {
    /// Fixed clock, leaves out cycles at light load.
    CycleSkipping,
    /// Lowers its frequency at light load.
    FrequencyFoldback,
}

/// What the documents of a board state; nominal values, before tolerances.
#[derive(Debug, Clone, Copy, PartialEq)]
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
    /// Voltage above the bulk at which the clamp holds the drain.
    pub clamp_v: f64,
    /// Kind of controller.
    pub controller: ControllerKind,
}

/// A board: its name and everything about it.
#[derive(Debug, Clone, PartialEq)]
pub struct BoardModel {
    /// Name.
    pub name: &'static str,
    /// What its documents state.
    pub nominal: Nominal,
}

static BOARDS: [BoardModel; 1] = [BoardModel {
    name: "beacon",
    nominal: Nominal {
        primary_inductance_h: 700e-6,
        primary_inductance_tolerance: 0.07,
        leakage_inductance_h: 12e-6,
        turns_ratio: 8.0,
        output_v: 12.0,
        maximum_load_a: 2.0,
        minimum_load_a: 0.0,
        bulk_capacitance_f: 68e-6,
        drain_rating_v: 650.0,
        line_range_v: [85.0, 265.0],
        switching_frequency_hz: 66e3,
        clamp: ClampKind::ResistorCapacitorDiode,
        clamp_v: 170.0,
        controller: ControllerKind::CycleSkipping,
    },
}];

/// Every board.
pub fn all() -> &'static [BoardModel] {
    &BOARDS
}

/// The board of that name.
pub fn by_name(name: &str) -> Option<&'static BoardModel> {
    BOARDS.iter().find(|board| board.name == name)
}
