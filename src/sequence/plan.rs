//! A plan as its file states it: what to measure. SI units.

use super::AddedCapacitors;
use crate::files::{Document, FileErrors, Table, Value};
use ringstep_analysis::quantity::Unit;

/// A plan. Its file looks like this:
#[doc = concat!("```toml\n", include_str!("../guide/examples/plan.toml"), "```")]
#[derive(Debug, Clone, PartialEq)]
pub struct Plan {
    /// Name.
    pub name: String,
    /// Line voltages (rms), in the order they are measured.
    pub line_v: Vec<f64>,
    /// Line frequency.
    pub line_frequency_hz: f64,
    /// Load current at the first step.
    pub load_start_a: f64,
    /// Load current below which the load is not stepped down further.
    pub load_floor_a: f64,
    /// Relaxation-ring captures a point.
    pub relaxation_captures: usize,
    /// Leakage-ring captures a point.
    pub leakage_captures: usize,
    /// Ring periods that must be visible before the load is low enough.
    pub ring_periods: f64,
    /// Longest time to wait for the board to settle.
    pub settle_timeout_s: f64,
    /// What the peak drain voltage is reckoned with before anything is switched on.
    pub stress: StressEstimate,
    /// Capacitors to be added to the drain node after the bare points.
    pub added_capacitors: Option<AddedCapacitors>,
}

/// Assumptions of the peak drain voltage estimate.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct StressEstimate {
    /// Leakage spike above bulk plus reflected voltage to allow for where the board states no clamp level.
    pub leakage_spike_v: Option<f64>,
    /// Leakage-ring frequency to reckon with before it is measured.
    pub leakage_ring_hz: f64,
    /// Relaxation-ring frequency to reckon with before it is measured.
    pub relaxation_ring_hz: f64,
    /// Share of the drain rating that may be used.
    pub drain_derating: f64,
}

impl Default for StressEstimate {
    /// A tenth of the rating kept back, and rings on the fast side of what boards show (common practice).
    fn default() -> Self {
        Self { leakage_spike_v: None, leakage_ring_hz: 10e6, relaxation_ring_hz: 1e6, drain_derating: 0.9 }
    }
}

impl Plan {
    /// Version of the file format.
    pub const FORMAT: u32 = 1;

    /// Reads a plan file; `path` only names it in messages.
    ///
    /// # Errors
    /// Every mistake in the file, each with its place.
    pub fn read(path: &str, text: &str) -> Result<Self, FileErrors> {
        let document = Document::parse(path, text);
        let plan = Self::from_table(&document);
        document.finish(plan)
    }

    /// Highest line voltage (rms) of the plan.
    pub fn highest_line_v(&self) -> f64 {
        self.line_v.iter().copied().fold(0.0, f64::max)
    }

    fn from_table(document: &Document<'_>) -> Option<Self> {
        let root = document.root();
        document.format(&root, "plan", Self::FORMAT);
        let name = root.required("name", Value::text);
        let line_v = root.required("line", |value| value.list(|value| value.quantity(Unit::Volt, 1.0..=1e3)));
        let line_frequency_hz = root.required("line_frequency", |value| value.quantity(Unit::Hertz, 40.0..=500.0));
        let settle_timeout_s = root.required("settle_timeout", |value| value.quantity(Unit::Second, 0.1..=3600.0));
        let load = root.required("load", |value| value.table().and_then(|table| load_from_table(&table)));
        let captures = root.required("captures", |value| value.table().and_then(|table| captures_from_table(&table)));
        let stress =
            root.optional("stress", |value| value.table().and_then(|table| StressEstimate::from_table(&table)));
        let added_capacitors = root.optional("added_capacitors", |value| {
            value.table().and_then(|table| AddedCapacitors::from_table(&table, line_v.as_deref()))
        });
        root.finish();
        let ([load_start_a, load_floor_a], (relaxation_captures, leakage_captures, ring_periods)) = (load?, captures?);
        Some(Self {
            name: name?,
            line_v: line_v?,
            line_frequency_hz: line_frequency_hz?,
            load_start_a,
            load_floor_a,
            relaxation_captures,
            leakage_captures,
            ring_periods,
            settle_timeout_s: settle_timeout_s?,
            stress: stress?.unwrap_or_default(),
            added_capacitors: added_capacitors?,
        })
    }
}

fn load_from_table(table: &Table<'_, '_>) -> Option<[f64; 2]> {
    let start = table.required("start", |value| value.quantity(Unit::Ampere, 1e-3..=1e3));
    let floor = table.required("floor", |value| value.quantity(Unit::Ampere, 0.0..=1e3));
    table.finish();
    let (start, floor) = (start?, floor?);
    if floor >= start {
        table.refuse("floor", format!("{floor} A"), format!("expected less than the start, {start} A"));
    }
    Some([start, floor])
}

fn captures_from_table(table: &Table<'_, '_>) -> Option<(usize, usize, f64)> {
    let relaxation = table.required("relaxation_ring", |value| value.count(1..=1000));
    let leakage = table.required("leakage_ring", |value| value.count(1..=1000));
    let periods = table.required("ring_periods", |value| value.number(2.0..=100.0));
    table.finish();
    Some((usize::try_from(relaxation?).ok()?, usize::try_from(leakage?).ok()?, periods?))
}

impl StressEstimate {
    fn from_table(table: &Table<'_, '_>) -> Option<Self> {
        let usual = Self::default();
        let leakage_spike_v = table.optional("leakage_spike", |value| value.quantity(Unit::Volt, 0.0..=5e3));
        let leakage_ring = table.optional("leakage_ring", |value| value.quantity(Unit::Hertz, 1e5..=1e9));
        let relaxation_ring = table.optional("relaxation_ring", |value| value.quantity(Unit::Hertz, 1e4..=1e8));
        let derating = table.optional("drain_derating", |value| value.quantity(Unit::Percent, 0.1..=1.0));
        table.finish();
        Some(Self {
            leakage_spike_v: leakage_spike_v?,
            leakage_ring_hz: leakage_ring?.unwrap_or(usual.leakage_ring_hz),
            relaxation_ring_hz: relaxation_ring?.unwrap_or(usual.relaxation_ring_hz),
            drain_derating: derating?.unwrap_or(usual.drain_derating),
        })
    }
}
