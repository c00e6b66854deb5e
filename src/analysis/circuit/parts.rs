//! The measured node capacitance taken apart, and the part that depends on voltage told from the part that does not.

use crate::{findings::BoardFacts, pieces::SecondaryPiece, quantity::Measured};
use serde::{Deserialize, Serialize};

/// One part of the node capacitance.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct CapacitancePart {
    /// Name in plain words.
    pub name: String,
    /// Capacitance in farad at the bulk voltage.
    pub capacitance_f: Measured,
}

/// The parts that are stated, and what remains for the winding and the wiring; empty where nothing is stated but the probe.
pub(super) fn parts(node_f: Measured, bulk_v: Option<f64>, facts: &BoardFacts) -> Vec<CapacitancePart> {
    let pieces = &facts.pieces;
    let law = |law: &crate::pieces::CapacitanceLaw, volts: f64| {
        let value = law.at(volts);
        Measured { value, standard_uncertainty: value * law.relative_uncertainty }
    };
    let transistor = pieces.transistor.as_ref().zip(bulk_v).map(|(transistor, bulk)| law(transistor, bulk));
    let clamp = pieces.clamp_diode.as_ref().zip(pieces.clamp_v).map(|(diode, clamp)| law(diode, clamp));
    let stated = [
        ("probe", facts.probe_capacitance_f),
        ("transistor at the bulk voltage", transistor),
        ("secondary side, reflected", pieces.secondaries.as_deref().map(reflected_secondaries)),
        ("clamp diode", clamp),
    ];
    let mut parts: Vec<CapacitancePart> = stated
        .into_iter()
        .filter_map(|(name, part)| Some(CapacitancePart { name: name.to_owned(), capacitance_f: part? }))
        .collect();
    if parts.len() < 2 {
        return Vec::new();
    }
    let value = node_f.value - parts.iter().map(|part| part.capacitance_f.value).sum::<f64>();
    let squares: f64 = parts.iter().map(|part| part.capacitance_f.standard_uncertainty.powi(2)).sum();
    let standard_uncertainty = (node_f.standard_uncertainty.powi(2) + squares).sqrt();
    let missing = [transistor, clamp].iter().any(Option::is_none) || pieces.secondaries.is_none();
    let name = if missing { "winding, wiring and what is not stated" } else { "winding and wiring" };
    parts.push(CapacitancePart { name: name.to_owned(), capacitance_f: Measured { value, standard_uncertainty } });
    parts
}

/// All secondary capacitance as the drain feels it.
pub(super) fn reflected_secondaries(secondaries: &[SecondaryPiece]) -> Measured {
    let sum = |a: Measured, b: Measured| Measured {
        value: a.value + b.value,
        standard_uncertainty: a.standard_uncertainty.hypot(b.standard_uncertainty),
    };
    secondaries.iter().map(SecondaryPiece::reflected_f).fold(Measured::exact(0.0), sum)
}

/// The constant part of the node capacitance, as far as a sweep of the bulk voltage tells it.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct ConstantPart {
    /// Lowest and highest constant part in farad that the points allow at 95 %, over all exponents of the law.
    pub between_f: [f64; 2],
    /// The best one.
    pub best_f: f64,
    /// Exponent that goes with it.
    pub exponent: f64,
}

/// Exponents of a junction's law that are tried, and their number.
const EXPONENTS: std::ops::RangeInclusive<f64> = 0.3..=1.5;
const TRIED: usize = 49;
/// What 95 % of a chi-square distribution of one degree of freedom lie below.
const CHI_SQUARE_95: f64 = 3.841;

/// Separates `C(v) = constant + a v^-m` over points of bulk voltage and node capacitance, whose uncertainties are those that differ
/// from point to point (what is common to all, like the nominal inductance, scales all parts alike). `None` for fewer than three
/// points, or where the voltage does not change the capacitance beyond its uncertainty.
pub fn constant_part(points: &[(f64, Measured)]) -> Option<ConstantPart> {
    if points.len() < 3 {
        return None;
    }
    let fitted = |exponent: f64| {
        let (mut w, mut wx, mut wxx, mut wy, mut wxy) = (0.0, 0.0, 0.0, 0.0, 0.0);
        for (volts, c) in points {
            let weight = c.standard_uncertainty.max(1e-6 * c.value).powi(-2);
            let x = (volts / points[0].0).powf(-exponent);
            (w, wx, wxx) = (w + weight, wx + weight * x, wxx + weight * x * x);
            (wy, wxy) = (wy + weight * c.value, wxy + weight * x * c.value);
        }
        let determinant = w * wxx - wx * wx;
        let constant = (wxx * wy - wx * wxy) / determinant;
        let slope = (w * wxy - wx * wy) / determinant;
        let misfit: f64 = points
            .iter()
            .map(|(volts, c)| {
                let x = (volts / points[0].0).powf(-exponent);
                ((c.value - constant - slope * x) / c.standard_uncertainty.max(1e-6 * c.value)).powi(2)
            })
            .sum();
        (exponent, constant, slope, wxx / determinant, misfit, (w / determinant).sqrt())
    };
    let step = (EXPONENTS.end() - EXPONENTS.start()) / (TRIED - 1) as f64;
    let all: Vec<_> = (0..TRIED).map(|n| fitted(EXPONENTS.start() + step * n as f64)).collect();
    let best = all.iter().min_by(|a, b| a.4.total_cmp(&b.4))?;
    let told = best.2.abs() > 2.0 * best.5 && best.2 > 0.0;
    let ends = all.iter().filter_map(|(_, constant, _, variance, misfit, _)| {
        let room = CHI_SQUARE_95 - (misfit - best.4);
        (room > 0.0).then(|| [constant - (room * variance).sqrt(), constant + (room * variance).sqrt()])
    });
    let between = ends.reduce(|a, b| [a[0].min(b[0]), a[1].max(b[1])])?;
    let between_f = [between[0].max(0.0), between[1].max(0.0)];
    told.then_some(ConstantPart { between_f, best_f: best.1, exponent: best.0 })
}
