//! Inductance and node capacitance with no nominal value: the ring of one node, with known capacitors added to it, gives the
//! straight line `1/w^2 = L (C0 + C_added)`, whose slope is the inductance and whose intercept tells the capacitance. ("Determining
//! Coil Distributed Capacitance", 2004, draws the same line by hand.)

mod refusal;
mod voltages;

pub use refusal::{AddedDoubt, AddedDoubtName, AddedRefusal};

use super::straight_line::StraightLine;
use crate::{
    findings::{Findings, RingKind},
    quantity::{Measured, Unit},
};
use nalgebra::DMatrix;
use serde::{Deserialize, Serialize};
use statrs::distribution::{ChiSquared, ContinuousCDF};
use std::f64::consts::TAU;
use voltages::{Moved, matching};

/// Largest relative uncertainty of inductance and capacitance; beyond it the interval of a ratio is no longer symmetric.
const LARGEST_UNCERTAINTY: f64 = 0.1;
/// Period ratio from which on the shift is large enough that nothing needs to be said.
const AMPLE_RATIO: f64 = 1.25;
/// Period ratio worth aiming at: between this and 2 the capacitance is known best for the capacitor spent on it.
const WANTED_RATIO: f64 = 1.5;
/// Probability of a worse line, below which it is doubted and its uncertainty enlarged.
const UNLIKELY: f64 = 0.01;
/// Standard deviations by which a frequency may rise with capacitance before it counts as rising.
const CHANCE_RISE: f64 = 4.0;

/// One ring of the node.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct AddedPoint {
    /// Capacitance added to the node in farad, without leads; exactly zero for the bare node. Its uncertainty is its own: what
    /// all capacitors share is in [`AddedOptions`].
    pub capacitance_f: Measured,
    /// Undamped ring frequency.
    pub frequency_hz: Measured,
    /// Bulk voltage of that record.
    pub bulk_voltage_v: Option<Measured>,
    /// Reflected voltage of that record.
    pub reflected_voltage_v: Option<Measured>,
}

impl AddedPoint {
    /// The ring of one analysed record with that much added to the node; `None` where the record shows no such ring.
    pub fn of(capacitance_f: Measured, findings: &Findings, kind: RingKind) -> Option<Self> {
        let ring = match kind {
            RingKind::Relaxation => findings.relaxation_ring,
            RingKind::Leakage => findings.leakage_ring,
        };
        let Findings { bulk_voltage_v, reflected_voltage_v, .. } = *findings;
        Some(Self { capacitance_f, frequency_hz: ring?.frequency_hz, bulk_voltage_v, reflected_voltage_v })
    }
}

/// What is common to the points, and how far their voltages may lie apart.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct AddedOptions {
    /// What leads and fixture add to every capacitor, in farad; its uncertainty shifts all of them together.
    pub lead_stray_f: Measured,
    /// Relative standard uncertainty by which the values of all capacitors are wrong together: they were measured with one
    /// meter.
    pub common_meter: f64,
    /// Relative standard uncertainty of the time base. It moves the inductance, and leaves the capacitance alone.
    pub time_base: f64,
    /// Difference of bulk voltage, relative to it, and of reflected voltage, relative to that of the plateau, up to which the
    /// records match.
    pub voltage_tolerance: f64,
    /// Change of the bare node's ring frequency with bulk voltage, in hertz per volt: with it, records are corrected to the
    /// bulk voltage of the one with the least capacitance.
    pub frequency_slope_hz_per_v: Option<Measured>,
}

impl Default for AddedOptions {
    /// Nothing in common, and voltages within 2 %.
    fn default() -> Self {
        Self {
            lead_stray_f: Measured::exact(0.0),
            common_meter: 0.0,
            time_base: 0.0,
            voltage_tolerance: 0.02,
            frequency_slope_hz_per_v: None,
        }
    }
}

/// What the added capacitors say of the node.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct AddedResult {
    /// Inductance that rings: the primary's of a relaxation ring, the leakage of a leakage ring.
    pub inductance_h: Measured,
    /// Capacitance of the node without what was added: at the bulk voltage for a relaxation ring, on the plateau for a leakage
    /// ring.
    pub node_capacitance_f: Measured,
    /// Covariance of the two, in henry farad.
    pub covariance_h_f: f64,
    /// Weighted sum of squared residuals of the line.
    pub chi_square: f64,
    /// Points less two; with none left the line cannot be tested.
    pub degrees_of_freedom: usize,
    /// Probability of a worse line by chance; `None` without degrees of freedom.
    pub probability: Option<f64>,
    /// Longest period over shortest.
    pub period_ratio: f64,
    /// Bulk voltage at which the values hold, where the records tell it.
    pub bulk_voltage_v: Option<f64>,
    /// Reasons to trust the values less.
    pub doubts: Vec<AddedDoubt>,
}

/// Inductance and node capacitance from two or more rings of one node with different capacitors added.
///
/// Every uncertainty of the line is propagated, in both coordinates; of what the points have in common, so much cancels as does.
/// Where the line does not fit (probability under 1 %), its covariance is enlarged by chi-square over its degrees of freedom.
///
/// # Errors
/// A refusal with a sentence that says what to change on the bench.
pub fn added_capacitors(points: &[AddedPoint], options: &AddedOptions) -> Result<AddedResult, AddedRefusal> {
    let mut points = points.to_vec();
    for (index, point) in points.iter().enumerate() {
        usable(point).map_err(|what| AddedRefusal::Unusable { record: index + 1, what })?;
    }
    points.sort_by(|a, b| a.capacitance_f.value.total_cmp(&b.capacitance_f.value));
    let distinct =
        1 + points.windows(2).filter(|pair| pair[1].capacitance_f.value > pair[0].capacitance_f.value).count();
    if points.is_empty() || distinct < 2 {
        return Err(AddedRefusal::TooFewCapacitors(distinct.min(points.len())));
    }
    let mut doubts = exact_capacitors(&points);
    let moved = matching(&points, options, &mut doubts)?;
    falling(&points)?;
    let line = line(&points, options, &moved).ok_or(AddedRefusal::NoLine)?;
    evaluate(&points, options, &line, doubts)
}

fn usable(point: &AddedPoint) -> Result<(), String> {
    let (added, frequency) = (point.capacitance_f, point.frequency_hz);
    let finite = |value: Measured| value.value.is_finite() && value.standard_uncertainty.is_finite();
    if !finite(added) || added.value < 0.0 || added.standard_uncertainty < 0.0 {
        return Err(format!("an added capacitance of {}", added.text_with_standard_uncertainty(Unit::Farad)));
    }
    if !finite(frequency) || frequency.value <= 0.0 || frequency.standard_uncertainty <= 0.0 {
        return Err(format!("a frequency of {}", frequency.text_with_standard_uncertainty(Unit::Hertz)));
    }
    Ok(())
}

fn exact_capacitors(points: &[AddedPoint]) -> Vec<AddedDoubt> {
    let exact =
        points.iter().find(|point| point.capacitance_f.value > 0.0 && point.capacitance_f.standard_uncertainty == 0.0);
    let doubt = exact.map(|point| AddedDoubt {
        name: AddedDoubtName::CapacitorExact,
        sentence: format!(
            "No tolerance is stated for the added {}: it was taken as exact, so that the intervals are too narrow. Measure the \
             capacitor and state its value as \"47 pF +- 1 %\".",
            point.capacitance_f.text_with_standard_uncertainty(Unit::Farad)
        ),
    });
    doubt.into_iter().collect()
}

/// Refuses a ring that does not slow down, beyond what chance explains.
fn falling(points: &[AddedPoint]) -> Result<(), AddedRefusal> {
    let rises = |less: &AddedPoint, more: &AddedPoint, chance: f64| {
        let both = less.frequency_hz.standard_uncertainty.hypot(more.frequency_hz.standard_uncertainty);
        let different = more.capacitance_f.value > less.capacitance_f.value;
        different && more.frequency_hz.value - less.frequency_hz.value >= chance * both
    };
    let pairs = points.windows(2).map(|pair| (&pair[0], &pair[1], CHANCE_RISE));
    let ends = (&points[0], &points[points.len() - 1], 0.0);
    let rising = pairs.chain([ends]).find(|(less, more, chance)| rises(less, more, *chance));
    let Some((less, more, _)) = rising else { return Ok(()) };
    let hertz = |point: &AddedPoint| point.frequency_hz.text_with_standard_uncertainty(Unit::Hertz);
    let farad =
        |point: &AddedPoint| Measured::exact(point.capacitance_f.value).text_with_standard_uncertainty(Unit::Farad);
    Err(AddedRefusal::NotFalling { from_hz: hertz(less), from_f: farad(less), to_hz: hertz(more), to_f: farad(more) })
}

/// The line of `1/w^2` against the capacitance added.
fn line(points: &[AddedPoint], options: &AddedOptions, moved: &[Moved]) -> Option<StraightLine> {
    let count = points.len();
    let added: Vec<f64> = points.iter().map(|point| with_leads(point, options)).collect();
    let (mut squares, mut covariance_y) = (Vec::with_capacity(count), DMatrix::zeros(count, count));
    let mut by_slope = Vec::with_capacity(count);
    for (index, (point, moved)) in points.iter().zip(moved).enumerate() {
        let frequency_hz = point.frequency_hz.value + moved.correction_hz;
        let square = (TAU * frequency_hz).powi(-2);
        let per_hertz = -2.0 * square / frequency_hz;
        squares.push(square);
        covariance_y[(index, index)] =
            (per_hertz * point.frequency_hz.standard_uncertainty.hypot(moved.own_hz)).powi(2);
        by_slope.push(per_hertz * moved.by_slope_hz);
    }
    let mut covariance_x = DMatrix::zeros(count, count);
    for row in 0..count {
        covariance_x[(row, row)] = points[row].capacitance_f.standard_uncertainty.powi(2);
        for column in 0..count {
            covariance_y[(row, column)] += by_slope[row] * by_slope[column];
            let [one, other] = [row, column].map(|index| points[index].capacitance_f.value);
            let leads = if one > 0.0 && other > 0.0 { options.lead_stray_f.standard_uncertainty.powi(2) } else { 0.0 };
            covariance_x[(row, column)] += leads + options.common_meter.powi(2) * one * other;
        }
    }
    StraightLine::through(&added, &squares, &covariance_x, &covariance_y)
}

/// The capacitance that a capacitor adds with its leads; none for the bare node.
fn with_leads(point: &AddedPoint, options: &AddedOptions) -> f64 {
    let value = point.capacitance_f.value;
    if value > 0.0 { value + options.lead_stray_f.value } else { value }
}

/// From the line to inductance and capacitance: `L` is its slope, `C0` intercept over slope.
fn evaluate(
    points: &[AddedPoint],
    options: &AddedOptions,
    line: &StraightLine,
    mut doubts: Vec<AddedDoubt>,
) -> Result<AddedResult, AddedRefusal> {
    let (inductance, capacitance) = (line.slope, line.intercept / line.slope);
    if !(inductance > 0.0 && capacitance > 0.0) {
        return Err(AddedRefusal::NoLine);
    }
    let probability = probability(line);
    let enlarged = match probability {
        Some(probability) if probability < UNLIKELY => {
            doubts.push(not_a_line(line, probability));
            line.chi_square / line.degrees_of_freedom as f64
        }
        _ => 1.0,
    };
    let [[aa, ab], [_, bb]] = line.covariance.map(|row| row.map(|entry| entry * enlarged));
    let variance_c = (aa - 2.0 * capacitance * ab + capacitance * capacitance * bb) / (inductance * inductance);
    let covariance_h_f = (ab - capacitance * bb) / inductance;
    let time_base_h = 2.0 * inductance * options.time_base;
    let inductance_h = Measured { value: inductance, standard_uncertainty: bb.sqrt().hypot(time_base_h) };
    let node_capacitance_f = Measured { value: capacitance, standard_uncertainty: variance_c.max(0.0).sqrt() };
    let period_ratio = period_ratio(points);
    let advice = advice(points, options, period_ratio);
    let worst = inductance_h.relative_uncertainty().max(node_capacitance_f.relative_uncertainty());
    if worst > LARGEST_UNCERTAINTY {
        return Err(AddedRefusal::ShiftTooSmall {
            period_ratio,
            inductance_percent: 100.0 * inductance_h.relative_uncertainty(),
            capacitance_percent: 100.0 * node_capacitance_f.relative_uncertainty(),
            advice,
        });
    }
    if period_ratio < AMPLE_RATIO {
        doubts.push(AddedDoubt {
            name: AddedDoubtName::SmallShift,
            sentence: format!("The period grew only {period_ratio:.2} times. Aim for 1.5 to 2 times{advice}."),
        });
    }
    let bulk_voltage_v = points[0].bulk_voltage_v.map(|voltage| voltage.value);
    let (chi_square, degrees_of_freedom) = (line.chi_square, line.degrees_of_freedom);
    Ok(AddedResult {
        inductance_h,
        node_capacitance_f,
        covariance_h_f,
        chi_square,
        degrees_of_freedom,
        probability,
        period_ratio,
        bulk_voltage_v,
        doubts,
    })
}

fn probability(line: &StraightLine) -> Option<f64> {
    let distribution = ChiSquared::new(line.degrees_of_freedom as f64).ok()?;
    Some(distribution.sf(line.chi_square))
}

fn not_a_line(line: &StraightLine, probability: f64) -> AddedDoubt {
    AddedDoubt {
        name: AddedDoubtName::NotALine,
        sentence: format!(
            "The points lie on no straight line (chi-square {:.1} on {} degrees of freedom, by chance {probability:.1e}), and the \
             uncertainties were enlarged to cover it: check the value of each capacitor, keep the leads alike and short, and the \
             line voltage and load the same.",
            line.chi_square, line.degrees_of_freedom
        ),
    }
}

/// Period with the most capacitance over that with the least.
fn period_ratio(points: &[AddedPoint]) -> f64 {
    points[0].frequency_hz.value / points[points.len() - 1].frequency_hz.value
}

/// The capacitor that would stretch the period as wanted, reckoned from the one there is.
fn advice(points: &[AddedPoint], options: &AddedOptions, period_ratio: f64) -> String {
    let added = with_leads(&points[points.len() - 1], options) - with_leads(&points[0], options);
    let wanted = added * (WANTED_RATIO * WANTED_RATIO - 1.0) / (period_ratio * period_ratio - 1.0);
    if period_ratio >= WANTED_RATIO || !(wanted.is_finite() && wanted > 0.0) {
        return String::new();
    }
    let (least, most) = (rounded(wanted), rounded(wanted * 3.0 / (WANTED_RATIO * WANTED_RATIO - 1.0)));
    format!(", with a capacitor of about {least} to {most} here")
}

/// Two digits are enough to choose a capacitor.
fn rounded(capacitance_f: f64) -> String {
    let step = 10f64.powf(capacitance_f.log10().floor() - 1.0);
    Measured::exact((capacitance_f / step).round() * step).text_with_standard_uncertainty(Unit::Farad)
}
