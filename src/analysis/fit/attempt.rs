//! The best fit of one ring in a record, before anybody judges it: start, plain fit, and whatever more the samples ask for.

use super::{
    RingRecord, Times,
    curves::Line,
    damped_sinusoid::{Base, fit_damped_sinusoid},
    evidence::{Described, Model, alternative, described, first_floor},
    least_squares::project,
    report,
    series::Series,
    start::start_values,
};
use crate::findings::{FittedFloor, Ring, RingFit, RingKind};
use std::f64::consts::TAU;

/// Points a period that the choice of the model keeps: block means of a sixty-fourth of a period lose 0.04 % of what could be known.
const POINTS: f64 = 64.0;

/// A fit on the way to its verdict.
pub(super) struct Tried<'a> {
    pub(super) record: RingRecord<'a>,
    pub(super) series: Series,
    plain: Described,
    /// For drawing, and the parameters of the plain fit.
    pub(super) fit: RingFit,
    /// The ring at small signal.
    pub(super) ring: Ring,
    /// Relative distance of the plain fit's frequency from that of small swings, where the circuit equation was needed.
    pub(super) shift: Option<f64>,
    /// Variance of the (averaged) noise as the ring feels it.
    pub(super) variance: f64,
    pub(super) residual: Vec<f64>,
    /// What the ring explains, in variances of the noise.
    pub(super) strength: f64,
}

/// One damped sinusoid and no more: what a search over many windows can afford. `None` where none can be had.
pub(super) fn plain_attempt<'a>(record: &RingRecord<'a>, kind: RingKind) -> Option<Tried<'a>> {
    let whole = Series::of(record);
    let start = start_values(&whole)?;
    let periods = start[1] / TAU;
    let series = whole.thinned(periods, POINTS);
    let floor = first_floor(kind, periods);
    let plain = Described::by(Model::Ringing(floor), &series, &start)?;
    finish(record, kind, series, plain.clone(), plain)
}

/// Explained variances below which nothing can be there, and samples a period that a model of more than a sinusoid needs.
const LEAST_STRENGTH: f64 = 60.0;
const FEWEST_POINTS: f64 = 5.0;

impl<'a> Tried<'a> {
    /// Whether it is worth asking what else the samples hold.
    pub(super) fn may_ring(&self) -> bool {
        let [_, decay, frequency, ..] = self.fit.parameters;
        let periods = frequency * self.series.span_s;
        let points = self.record.volts.len() as f64 / periods;
        self.strength > LEAST_STRENGTH && decay > 0.0 && periods > 2.0 && points > FEWEST_POINTS
    }

    /// The same with everything the samples ask for beyond a damped sinusoid.
    pub(super) fn described(self) -> Self {
        let best = described(self.plain.clone(), &self.series);
        let alternative = alternative(&best, &self.series);
        let alternative_hz = alternative.map(|model| report::ring(&self.series, &model).frequency_hz);
        let mut tried = match best.model == self.plain.model {
            true => self,
            false => finish(&self.record, self.fit.kind, self.series.clone(), self.plain.clone(), best).unwrap_or(self),
        };
        tried.ring.alternative_hz = alternative_hz;
        tried
    }
}

fn finish<'a>(
    record: &RingRecord<'a>,
    kind: RingKind,
    series: Series,
    plain: Described,
    best: Described,
) -> Option<Tried<'a>> {
    let flat: f64 = project(&Line, &series.times, &series.volts, &[])?.1.iter().map(|r| r * r).sum();
    let variance = best.noise.variance;
    let strength = (flat - best.solution.squares) / variance.max(f64::MIN_POSITIVE);
    let residual = best.solution.residual.clone();
    let (block, best, squares) = at_full_rate(record, &series, best);
    let whole = Series { block, ..series.clone() };
    let mut fit = report::ring_fit(record, kind, &whole, &best);
    let ring = report::ring(&whole, &best);
    let mut shift = None;
    if let Model::Circuit(_) = best.model {
        shift = Some(report::ring(&series, &plain).frequency_hz.value / ring.frequency_hz.value - 1.0);
    }
    fit.residual_v = report::residual_v(record, &fit, squares);
    Some(Tried { record: *record, series, plain, fit, ring, shift, variance, residual, strength })
}

/// Block means lose a little, and the samples left over at the end: where the model allows, the last steps are made at the full
/// rate. The samples averaged into one in what is returned, the fit, and its sum of squares over all samples.
fn at_full_rate(record: &RingRecord<'_>, series: &Series, best: Described) -> (usize, Described, Option<f64>) {
    let base = match best.model {
        Model::Ringing(FittedFloor::Straight) => Base::Straight,
        Model::Ringing(FittedFloor::Bent) => Base::Bent,
        _ => return (series.block, best, None),
    };
    let start = [best.solution.nonlinear[0], best.solution.nonlinear[1]];
    let even = matches!(record.times_s, Times::Even { .. });
    match even.then(|| fit_damped_sinusoid(record.volts, start, base)).flatten() {
        Some(exact) => {
            let solution = exact.solution(series.block as f64, best.solution);
            (1, Described { solution, ..best }, Some(exact.squares))
        }
        None => (series.block, best, None),
    }
}
