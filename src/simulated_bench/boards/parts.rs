//! The component values of a board, and how a seed spreads them within their tolerances.

use crate::converter::junction::CapacitanceLaw;
use rand::{RngExt, SeedableRng};
use rand_chacha::ChaCha8Rng;

/// Every component of the power stage. Values on the secondary side are not reflected.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Parts {
    /// Magnetising inductance, on the primary.
    pub magnetising_h: f64,
    /// Leakage inductance, on the primary.
    pub leakage_h: f64,
    /// Primary turns over secondary turns.
    pub turns_ratio: f64,
    /// Resistance of the primary winding.
    pub winding_ohm: f64,
    /// Loss resistance across the leakage inductance (eddy currents at the leakage ring).
    pub leakage_loss_ohm: f64,
    /// Loss resistance across the magnetising inductance at small amplitude.
    pub core_ohm: f64,
    /// Relative growth of the core's loss conductance at large amplitude.
    pub core_growth: f64,
    /// Winding voltage at which half of that growth is reached.
    pub core_growth_v: f64,
    /// Capacitance of winding and layout on the drain node.
    pub winding_f: f64,
    /// Output capacitance of the transistor.
    pub transistor: CapacitanceLaw,
    /// On-resistance of the transistor.
    pub on_ohm: f64,
    /// Rate at which the channel takes over current at turn-on.
    pub turn_on_a_per_s: f64,
    /// Time in which the channel current falls at turn-off.
    pub turn_off_s: f64,
    /// Forward drop of the body diode.
    pub body_v: f64,
    /// Clamp on the drain.
    pub clamp: Clamp,
    /// Secondary rectifier.
    pub rectifier: Diode,
    /// Fixed capacitance across the secondary (winding and snubber).
    pub secondary_f: f64,
    /// Output capacitance.
    pub output_f: f64,
    /// Load that is always on the output (divider, feedback).
    pub preload_ohm: f64,
    /// Bulk capacitance.
    pub bulk_f: f64,
    /// Resistance between the line and the bulk capacitor.
    pub line_ohm: f64,
}

/// Clamp from the drain to the bulk.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Clamp {
    /// What sets its level.
    pub level: ClampLevel,
    /// Its diode, with all resistance in series.
    pub diode: Diode,
}

/// What sets the level of a clamp.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum ClampLevel {
    /// A capacitor that a resistor bleeds.
    Capacitor {
        /// Capacitor.
        farad: f64,
        /// Resistor across it.
        bleed_ohm: f64,
    },
    /// A zener diode.
    Zener {
        /// Breakdown voltage.
        volt: f64,
    },
}

/// A diode: fixed drop and series resistance, a junction capacitance, and a stored charge that must be removed before it
/// blocks.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Diode {
    /// Forward drop.
    pub drop_v: f64,
    /// Series resistance.
    pub series_ohm: f64,
    /// Lifetime of the stored charge: `dq/dt = i - q / lifetime`.
    pub storage_s: f64,
    /// Junction capacitance.
    pub junction: CapacitanceLaw,
}

/// The controller: clock, current command, feedback and protection.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct ControllerParts {
    /// What happens at light load.
    pub light_load: LightLoad,
    /// Clock frequency.
    pub clock_hz: f64,
    /// Relative half-width of the triangular frequency dither.
    pub dither: f64,
    /// Rate of the dither.
    pub dither_hz: f64,
    /// Highest peak current.
    pub peak_a: f64,
    /// Smallest current command as a share of `peak_a`.
    pub smallest_share: f64,
    /// Slope compensation.
    pub slope_a_per_s: f64,
    /// Leading-edge blanking.
    pub blanking_s: f64,
    /// Longest share of the period the gate may be on.
    pub longest_duty: f64,
    /// Output voltage at zero command.
    pub reference_v: f64,
    /// Fall of the output that takes the command from zero to full.
    pub droop_v: f64,
    /// Time constant of the error amplifier.
    pub amplifier_s: f64,
    /// Bulk voltage above which it starts.
    pub start_v: f64,
    /// Bulk voltage below which it stops.
    pub stop_v: f64,
    /// Soft-start time.
    pub soft_start_s: f64,
    /// Full command for longer than this is an overload.
    pub overload_s: f64,
    /// Pause after an overload before it starts again.
    pub restart_s: f64,
    /// How long the controller runs from its start-up capacitor, where its auxiliary winding does not take over.
    pub supply_lasts_s: Option<f64>,
}

/// What a controller does at light load.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum LightLoad {
    /// Leaves out cycles while the command is below its smallest share; `hysteresis` in the command.
    Skip {
        /// Width of the hysteresis.
        hysteresis: f64,
    },
    /// Lowers its frequency in proportion to the command below the smallest share, down to `lowest_hz`.
    Fold {
        /// Lowest frequency.
        lowest_hz: f64,
    },
}

/// Tolerance of the capacitances on the drain node, relative.
pub(super) const PART_TOLERANCE: f64 = 0.08;

impl Parts {
    /// These parts as one specimen holds them: each value drawn uniformly within its tolerance.
    pub fn specimen(&self, inductance_tolerance: f64, seed: u64) -> Self {
        let mut rng = ChaCha8Rng::seed_from_u64(seed);
        let mut spread = |tolerance: f64| 1.0 + tolerance * rng.random_range(-1.0..=1.0);
        let mut parts = *self;
        parts.magnetising_h *= spread(inductance_tolerance);
        parts.leakage_h *= spread(0.1);
        parts.winding_ohm *= spread(0.05);
        parts.leakage_loss_ohm *= spread(0.1);
        parts.core_ohm *= spread(0.1);
        parts.winding_f *= spread(PART_TOLERANCE);
        parts.transistor = parts.transistor.scaled(spread(PART_TOLERANCE));
        parts.on_ohm *= spread(0.1);
        parts.clamp.diode.junction = parts.clamp.diode.junction.scaled(spread(PART_TOLERANCE));
        parts.rectifier.junction = parts.rectifier.junction.scaled(spread(PART_TOLERANCE));
        parts.rectifier.drop_v *= spread(0.04);
        parts.secondary_f *= spread(PART_TOLERANCE);
        parts.output_f *= spread(0.1);
        parts.bulk_f *= spread(0.1);
        parts.clamp.level = match parts.clamp.level {
            ClampLevel::Capacitor { farad, bleed_ohm } => {
                ClampLevel::Capacitor { farad: farad * spread(0.05), bleed_ohm: bleed_ohm * spread(0.02) }
            }
            ClampLevel::Zener { volt } => ClampLevel::Zener { volt: volt * spread(0.03) },
        };
        parts
    }
}
