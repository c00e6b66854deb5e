//! A plan as its file states it: what to measure. SI units.

/// A plan.
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
}
