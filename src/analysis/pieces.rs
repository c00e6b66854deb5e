//! What may be known of the parts on the drain node from data sheets: capacitance laws, secondary sides, snubber. SI units.

use crate::quantity::Measured;
use serde::{Deserialize, Serialize};

/// A capacitance that falls with voltage, with the relative standard uncertainty that goes with all of it.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct CapacitanceLaw {
    /// Its shape.
    pub shape: LawShape,
    /// Relative standard uncertainty, common to all voltages.
    pub relative_uncertainty: f64,
}

/// Shape of a capacitance law.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
#[serde(rename_all = "snake_case")]
pub enum LawShape {
    /// `C0 / (1 + v/Vj)^m + fixed`, the depletion capacitance of a junction beside a constant one (the form of SPICE).
    Junction {
        /// `C0` in farad.
        zero_bias_f: f64,
        /// `Vj` in volts.
        potential_v: f64,
        /// `m`.
        exponent: f64,
        /// Constant part in farad.
        fixed_f: f64,
    },
    /// Points of a data-sheet curve, volts and farad, ascending in voltage; between them straight in the logarithm of capacitance,
    /// outside constant.
    Table(Vec<(f64, f64)>),
}

impl CapacitanceLaw {
    /// Capacitance in farad at a reverse voltage; a junction in forward bias counts as at zero.
    pub fn at(&self, volts: f64) -> f64 {
        match &self.shape {
            LawShape::Junction { zero_bias_f, potential_v, exponent, fixed_f } => {
                fixed_f + zero_bias_f * (1.0 + volts.max(0.0) / potential_v).powf(-exponent)
            }
            LawShape::Table(points) => in_table(points, volts),
        }
    }
}

fn in_table(points: &[(f64, f64)], volts: f64) -> f64 {
    let above = points.partition_point(|point| point.0 <= volts);
    match (above.checked_sub(1).and_then(|below| points.get(below)), points.get(above)) {
        (Some(&(v0, c0)), Some(&(v1, c1))) => c0 * (c1 / c0).powf((volts - v0) / (v1 - v0)),
        (Some(&(_, c)), None) | (None, Some(&(_, c))) => c,
        (None, None) => f64::NAN,
    }
}

/// One secondary winding with what hangs on it.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct SecondaryPiece {
    /// Primary turns over its turns.
    pub turns_ratio: f64,
    /// Junction capacitance of its rectifier at the output voltage, in farad.
    pub rectifier_f: Measured,
    /// Snubber capacitance across the rectifier, in farad; exactly zero where there is none.
    pub snubber_f: Measured,
}

impl SecondaryPiece {
    /// What it adds at the drain while the rectifier blocks, in farad: by the square of the turns ratio less.
    pub fn reflected_f(&self) -> Measured {
        let square = self.turns_ratio * self.turns_ratio;
        let value = (self.rectifier_f.value + self.snubber_f.value) / square;
        let uncertainty = self.rectifier_f.standard_uncertainty.hypot(self.snubber_f.standard_uncertainty) / square;
        Measured { value, standard_uncertainty: uncertainty }
    }
}

/// A resistor and a capacitor in series across the drain node, or across the primary.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct NodeSnubber {
    /// Resistance in ohm.
    pub resistance_ohm: Measured,
    /// Capacitance in farad.
    pub capacitance_f: Measured,
}

/// The parts on the drain node, as far as they are stated.
#[derive(Debug, Clone, Default, PartialEq, Serialize, Deserialize)]
pub struct NodePieces {
    /// Output capacitance of the transistor over its drain-source voltage.
    pub transistor: Option<CapacitanceLaw>,
    /// Every secondary winding; `None` where one is not known.
    pub secondaries: Option<Vec<SecondaryPiece>>,
    /// Junction capacitance of the clamp's diode over its reverse voltage.
    pub clamp_diode: Option<CapacitanceLaw>,
    /// Level of the clamp above the bulk voltage, in volts.
    pub clamp_v: Option<f64>,
    /// Snubber on the node; `None` for none.
    pub snubber: Option<NodeSnubber>,
}
