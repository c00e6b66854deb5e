//! What rings say about the circuit: node capacitance from the relaxation ring, leakage inductance from the leakage ring.

pub mod added;
pub mod straight_line;

use crate::{findings::Ring, quantity::Measured};
use std::f64::consts::TAU;

/// Relative standard uncertainty of the textbook leakage relation itself. The capacitance on the plateau is usually 2 to 3 % away
/// from that of the relaxation ring, and as much as 27 % where the secondary side carries much capacitance, which one drain
/// waveform cannot tell: a rectangular half-width of 27 % covers both.
const TEXTBOOK_HALF_WIDTH: f64 = 0.27;

/// Capacitance of the drain node from the relaxation ring: `C = 1/(w0^2 L)` with the undamped frequency, in farad.
pub fn node_capacitance(ring: &Ring, primary_inductance_h: Measured) -> Measured {
    resonance_partner(ring, primary_inductance_h)
}

/// Leakage inductance by the textbook relation `L = 1/(w0^2 C)`, in henry, with the capacitance of the relaxation ring.
/// It holds only as far as that capacitance is the plateau's too; the uncertainty allows for the difference, and the
/// caller raises the doubt [`TextbookValue`](crate::findings::DoubtName::TextbookValue).
pub fn leakage_inductance_textbook(leakage_ring: &Ring, node_capacitance_f: Measured) -> Measured {
    let plain = resonance_partner(leakage_ring, node_capacitance_f);
    let relation = Measured::within(plain.value, TEXTBOOK_HALF_WIDTH * plain.value);
    let standard_uncertainty = plain.standard_uncertainty.hypot(relation.standard_uncertainty);
    Measured { value: plain.value, standard_uncertainty }
}

/// The other element of a resonant circuit, `1/(w0^2 X)`, uncertainties added in quadrature (JCGM 100, 5.1.6).
fn resonance_partner(ring: &Ring, element: Measured) -> Measured {
    let angular = TAU * ring.frequency_hz.value;
    let value = 1.0 / (angular * angular * element.value);
    let relative = (2.0 * ring.frequency_hz.relative_uncertainty()).hypot(element.relative_uncertainty());
    Measured { value, standard_uncertainty: value.abs() * relative }
}
