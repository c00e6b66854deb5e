//! What counts as a valid single ring, and in which words anything else is refused.

use super::{
    Accepted, Refusal, RingRecord, Times, clipping,
    model::{DampedSinusoid, Line},
    noise::{remainder, variance_at},
    report,
    series::Series,
    solve::{Solution, project, residuals, solve},
    start::start_values,
};
use crate::findings::{Doubt, DoubtName, RingFit, RingKind};
use std::f64::consts::{PI, TAU};

/// Fewest samples that are looked at: fewer than two a parameter say nothing.
const FEWEST_SAMPLES: usize = 16;
/// Fewest ring periods in the window.
const FEWEST_PERIODS: f64 = 3.0;
/// Fewest samples a period.
const FEWEST_POINTS: f64 = 5.0;
/// Fewest vertical steps an amplitude.
const FEWEST_STEPS: f64 = 5.0;
/// Lowest quality factor of what is called a ring: below it the first swing back is under a twentieth of the swing before.
const LOWEST_QUALITY: f64 = 1.2;
/// Energy of the ring in variances of the noise about it. Noise alone reaches some 40 in ten thousand records; the weakest ring that
/// must be accepted (amplitude/noise 20, quality 8, 10 samples a period) has 2500.
const LEAST_STRENGTH: f64 = 200.0;
/// Energy that another ring must have, in the same measure, to be told from noise.
const REMAINDER_STRENGTH: f64 = 45.0;
/// Amplitude of another ring, over the ring's, from which the record is refused.
const REMAINDER_SHARE: f64 = 0.03;
/// Points a period that the fit keeps: block means of a thirty-second of a period lose 0.2 % of what could be known.
const POINTS: f64 = 32.0;

/// A fit on the way to its verdict.
struct Tried<'a> {
    record: RingRecord<'a>,
    series: Series,
    solution: Solution,
    fit: RingFit,
    /// Variance of the (averaged) noise as the ring feels it.
    variance: f64,
    residual: Vec<f64>,
    strength: f64,
}

pub(super) fn judge(record: &RingRecord<'_>, kind: RingKind) -> Result<Accepted, Refusal> {
    check_samples(record)?;
    let tried = attempt(record, kind).ok_or_else(|| refuse(DoubtName::NoRing, NO_RING.to_owned()))?;
    verdict(&tried).map_err(|doubt| Refusal { doubt, rejected: Some(Box::new(tried.fit.clone())) })?;
    let doubts = single(&tried).map_err(|doubt| Refusal { doubt, rejected: Some(Box::new(tried.fit.clone())) })?;
    let mut fit = tried.fit;
    fit.accepted = true;
    let ring = report::small_signal(&fit);
    Ok(Accepted { fit, ring, doubts })
}

const NO_RING: &str = "nothing in the window swings like a ring: check that the probe is on the node and that the window holds \
                       the time after the event";

fn doubt(name: DoubtName, sentence: String) -> Doubt {
    Doubt { name, sentence }
}

fn refuse(name: DoubtName, sentence: String) -> Refusal {
    Refusal { doubt: doubt(name, sentence), rejected: None }
}

fn check_samples(record: &RingRecord<'_>) -> Result<(), Refusal> {
    let count = record.volts.len();
    if count < FEWEST_SAMPLES {
        let sentence = format!("the window holds {count} samples: raise the sample rate or lengthen the window");
        return Err(refuse(DoubtName::TooFewPoints, sentence));
    }
    let times_fit = match record.times_s {
        Times::Even { interval_s, start_s } => interval_s > 0.0 && interval_s.is_finite() && start_s.is_finite(),
        Times::Uneven(times) => times.len() == count && times.windows(2).all(|pair| pair[1] > pair[0]),
    };
    if !times_fit || record.volts.iter().any(|volt| !volt.is_finite()) {
        let sentence = "the samples or their times are not finite and ascending: read the capture again".to_owned();
        return Err(refuse(DoubtName::NoRing, sentence));
    }
    Ok(())
}

fn attempt<'a>(record: &RingRecord<'a>, kind: RingKind) -> Option<Tried<'a>> {
    let whole = Series::of(record);
    let start = start_values(&whole)?;
    let series = whole.thinned(start[1] / TAU, POINTS);
    let solution = solve(&DampedSinusoid, &series, &start, 60)?;
    let (_, flat) = project(&Line, &series, &[])?;
    let residual = residuals(&DampedSinusoid, &series, &solution.nonlinear, &solution.linear);
    let variance = variance_at(&series, &residual, solution.nonlinear[1] / TAU, 6);
    let mut fit = report::ring_fit(record, kind, &series, &solution, variance);
    fit.residual_v = report::residual_v(record, &fit);
    let strength = (flat - solution.squares) / variance.max(f64::MIN_POSITIVE);
    Some(Tried { record: *record, series, solution, fit, variance, residual, strength })
}

/// Whether what was fitted can be a ring at all.
fn verdict(tried: &Tried<'_>) -> Result<(), Doubt> {
    let [amplitude, decay, frequency, ..] = tried.fit.parameters;
    let periods = frequency * tried.series.span_s;
    let quality = PI * frequency / decay;
    // Beyond the point where it has sunk in the noise a ring cannot be seen.
    let seen = periods.min((amplitude / tried.variance.sqrt()).ln().max(0.0) / decay.max(1e-300) * frequency);
    let noise = tried.fit.residual_v;
    if tried.strength < LEAST_STRENGTH || amplitude < 3.0 * tried.variance.sqrt() {
        return Err(doubt(DoubtName::NoRing, NO_RING.to_owned()));
    }
    if decay <= 0.0 {
        let sentence = "what swings in the window does not decay: no free ring, but something that is driven";
        return Err(doubt(DoubtName::NoRing, sentence.to_owned()));
    }
    if quality < LOWEST_QUALITY || seen < 1.0 {
        let sentence = format!(
            "the record dies away without swinging (quality factor {quality:.1}): it is damped too much to ring"
        );
        return Err(doubt(DoubtName::NoRing, sentence));
    }
    let points = tried.record.volts.len() as f64 / periods;
    if points < FEWEST_POINTS {
        let sentence = format!("{points:.1} samples a ring period: raise the sample rate to at least 10 a period");
        return Err(doubt(DoubtName::TooFewPoints, sentence));
    }
    if periods < FEWEST_PERIODS || seen < 0.8 * FEWEST_PERIODS {
        let seen = periods.min(seen);
        let sentence = format!(
            "{seen:.1} ring periods can be seen: lower the load so that more of the ring shows, or widen the window"
        );
        return Err(doubt(DoubtName::TooFewPeriods, sentence));
    }
    if let Some(step) = tried.record.step_v.filter(|step| amplitude < FEWEST_STEPS * step) {
        let steps = amplitude / step;
        let sentence = format!("the ring is {steps:.1} vertical steps high: choose a smaller vertical range");
        return Err(doubt(DoubtName::CoarseSteps, sentence));
    }
    if let Some(found) = clipping::clipping(&tried.record, points, amplitude, noise) {
        let sentence = format!(
            "{} samples stand at the limit of {:.4} V: choose a larger vertical range or move the vertical position",
            found.samples, found.limit_v
        );
        return Err(doubt(DoubtName::Clipped, sentence));
    }
    let relative = |index: usize| tried.fit.covariance[index * 7].sqrt() / tried.fit.parameters[index].abs();
    if !(relative(2) < 0.02 && relative(1) < 0.6) {
        let sentence = "the uncertainty of the fit is too large to be of use: capture more periods or lower the noise";
        return Err(doubt(DoubtName::CovarianceUnusable, sentence.to_owned()));
    }
    Ok(())
}

/// Whether one ring describes the record: what is left after the fit may hold no other.
fn single(tried: &Tried<'_>) -> Result<Vec<Doubt>, Doubt> {
    let Some(rest) = remainder(&tried.series, &tried.residual) else { return Ok(Vec::new()) };
    let share = rest.amplitude_v / tried.fit.parameters[0];
    if rest.strength > REMAINDER_STRENGTH && share > REMAINDER_SHARE {
        let frequency = rest.frequency / tried.series.span_s;
        let sentence = format!(
            "a second ring of {:.0} % stands at {:.4} MHz beside the one at {:.4} MHz: shorten the ground lead, or look for a snubber or a \
             second resonance on the node",
            100.0 * share,
            frequency * 1e-6,
            tried.fit.parameters[2] * 1e-6
        );
        return Err(doubt(DoubtName::NotOneRing, sentence));
    }
    Ok(Vec::new())
}
