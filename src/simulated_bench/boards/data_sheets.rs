//! What the data sheets of a board's parts state: typical capacitances; a specimen lies within their tolerance.

use super::{BoardModel, parts::PART_TOLERANCE};
use crate::converter::junction::CapacitanceLaw;
use serde::Serialize;

/// Points of a typical curve: volts and farad.
type Curve = Vec<[f64; 2]>;

/// Typical capacitances of the parts on the drain node.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct DataSheets {
    /// Output capacitance of the transistor over its voltage.
    pub output_capacitance: Curve,
    /// Junction capacitance of the clamp's diode over its reverse voltage.
    pub clamp_diode: Curve,
    /// Junction capacitance of the rectifier at the output voltage.
    pub rectifier_f: f64,
    /// Fixed capacitance across the secondary: snubber and winding.
    pub secondary_f: f64,
    /// Relative tolerance of all of them.
    pub tolerance: f64,
}

impl DataSheets {
    /// Of the parts of a board.
    pub fn of(board: &BoardModel) -> Self {
        let parts = &board.parts;
        Self {
            output_capacitance: curve(&parts.transistor, 800.0),
            clamp_diode: curve(&parts.clamp.diode.junction, 400.0),
            rectifier_f: parts.rectifier.junction.capacitance_f(board.nominal.output_v),
            secondary_f: parts.secondary_f,
            tolerance: PART_TOLERANCE,
        }
    }
}

/// Every eighth of an octave from one volt on, as dense as a curve is read off a sheet.
fn curve(law: &CapacitanceLaw, highest_v: f64) -> Curve {
    let mut points = vec![[0.0, law.capacitance_f(0.0)]];
    let mut volts: f64 = 1.0;
    while volts < highest_v {
        points.push([volts, law.capacitance_f(volts)]);
        volts *= 2f64.powf(0.125);
    }
    points
}
