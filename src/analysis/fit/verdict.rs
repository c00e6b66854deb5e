//! What counts as a valid single ring, and in which words anything else is refused.

use super::{
    Accepted, Refusal, RingRecord, Times,
    attempt::{Tried, plain_attempt},
    clipping,
    noise::{Remainder, remainder},
};
use crate::findings::{Doubt, DoubtName, RingFit, RingKind};
use std::f64::consts::PI;

/// Fewest samples that are looked at: fewer than two a parameter say nothing.
pub(super) const FEWEST_SAMPLES: usize = 16;
/// Fewest ring periods in the window: three, as far as a window can be cut to them.
const FEWEST_PERIODS: f64 = 2.9;
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
/// Residual of the first quarter, over the ring's amplitude and over the residual of the last, from which it is no noise.
const MISFIT_SHARE: f64 = 0.01;
const MISFIT_RATIO: f64 = 3.0;
/// What the circuit equation may leave, over the ring's amplitude and over the noise, and samples a period that tell the noise.
const LAW_SHARE: f64 = 0.003;
const LAW_RATIO: f64 = 5.0;
const LAW_POINTS: f64 = 25.0;
/// Rings that are taken out of the residuals one after another.
const MOST_REMAINDERS: usize = 3;
/// Distance from a harmonic, over the ring's frequency, within which a remainder may be the ring's own distortion.
const NEAR_HARMONIC: f64 = 0.1;
/// The same for a leakage ring, which begins at full swing, where the body diode may conduct on the first troughs.
const NEAR_HARMONIC_LEAKAGE: f64 = 0.2;
/// Relative distance of a plain fit from the small-signal frequency that is worth telling.
const SHIFT: f64 = 1e-3;

pub(super) fn judge(record: &RingRecord<'_>, kind: RingKind) -> Result<Accepted, Refusal> {
    check_samples(record)?;
    let tried = plain_attempt(record, kind).ok_or_else(|| refuse(DoubtName::NoRing, NO_RING.to_owned()))?;
    let rejected = |tried: Tried<'_>, doubt| Refusal { doubt, rejected: Some(Box::new(tried.fit)) };
    let tried = if tried.may_ring() { tried.described() } else { tried };
    match plausible(&tried).and_then(|()| single(&tried)) {
        Ok(doubts) => Ok(Accepted { fit: RingFit { accepted: true, ..tried.fit }, ring: tried.ring, doubts }),
        Err(doubt) => Err(rejected(tried, doubt)),
    }
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

/// Whether what was fitted can be a ring at all.
pub(super) fn plausible(tried: &Tried<'_>) -> Result<(), Doubt> {
    let [amplitude, decay, frequency, ..] = tried.fit.parameters;
    let periods = frequency * tried.series.span_s;
    let quality = PI * frequency / decay;
    // Beyond the point where it has sunk in the noise a ring cannot be seen.
    let seen = periods.min((amplitude / tried.variance.sqrt()).ln().max(0.0) / decay.max(1e-300) * frequency);
    let noise = tried.fit.residual_v;
    if tried.strength < LEAST_STRENGTH || amplitude < 3.0 * tried.variance.sqrt() {
        // A second ring as strong as the first hides it: say so rather than that there is nothing.
        single(tried)?;
        return Err(doubt(DoubtName::NoRing, NO_RING.to_owned()));
    }
    if decay <= 0.0 {
        let sentence = "what swings in the window does not decay: no free ring, but something that is driven";
        return Err(doubt(DoubtName::NoRing, sentence.to_owned()));
    }
    if quality >= LOWEST_QUALITY && seen < 1.0 {
        let sentence =
            "less than one period of a ring stands out of the noise: choose a smaller vertical range, or average"
                .to_owned();
        return Err(doubt(DoubtName::NoRing, sentence));
    }
    if quality < LOWEST_QUALITY {
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

/// Whether one ring describes the record: what is left after the fit may hold no other. What is left near the ring's own
/// frequency or its harmonics and dies sooner is the ring's own distortion; what swings less than twice is a drift.
fn single(tried: &Tried<'_>) -> Result<Vec<Doubt>, Doubt> {
    let mut doubts: Vec<Doubt> =
        tried.shift.iter().filter(|shift| shift.abs() > SHIFT).map(|&shift| shift_doubt(shift)).collect();
    let own = tried.ring.damped_frequency_hz.value * tried.series.span_s;
    let own_decay = tried.ring.decay_per_s.value * tried.series.span_s;
    let mut residual = tried.residual.clone();
    for _ in 0..MOST_REMAINDERS {
        let Some((rest, left)) = remainder(&tried.series, &residual) else { break };
        let share = rest.amplitude_v / tried.fit.parameters[0];
        if rest.strength < REMAINDER_STRENGTH {
            break;
        }
        residual = left;
        let (near, sooner) = match tried.fit.kind {
            RingKind::Relaxation => (NEAR_HARMONIC, 1.4),
            RingKind::Leakage => (NEAR_HARMONIC_LEAKAGE, 1.25),
        };
        let harmonic = (1..=3).any(|n| (rest.frequency - f64::from(n) * own).abs() < near * own);
        let distortion = harmonic && rest.decay > sooner * own_decay;
        if share < REMAINDER_SHARE {
            continue;
        }
        if rest.frequency < 2.0 {
            let sentence = format!(
                "the level under the ring bends by {:.0} % of the ring: start the window later, or let the board settle",
                100.0 * share
            );
            doubts.push(doubt(DoubtName::Drifting, sentence));
        } else if !distortion {
            return Err(second_ring(tried, &rest, share));
        } else if doubts.iter().all(|doubt| doubt.name != DoubtName::AmplitudeDependent) {
            let sentence = "the first swings are not those of the later ones: the node capacitance depends on voltage, or a diode \
                            conducts; start the window later for the small-signal value";
            doubts.push(doubt(DoubtName::AmplitudeDependent, sentence.to_owned()));
        }
    }
    // Distortion excuses what a damped sinusoid leaves, not what the circuit equation leaves.
    let distorted = tried.shift.is_none() && doubts.iter().any(|doubt| doubt.name == DoubtName::AmplitudeDependent);
    match misfit(tried).filter(|_| !distorted && tried.fit.kind == RingKind::Relaxation) {
        Some(doubt) => Err(doubt),
        None => Ok(doubts),
    }
}

/// What a fit leaves is noise, as strong at the end as at the beginning, unless more than one ring was there: that dies away.
fn misfit(tried: &Tried<'_>) -> Option<Doubt> {
    if tried.shift.is_some()
        && let Some(doubt) = unlike_any_law(tried)
    {
        return Some(doubt);
    }
    let quarter = tried.residual.len() / 4;
    let rms = |part: &[f64]| (part.iter().map(|r| r * r).sum::<f64>() / part.len() as f64).sqrt();
    let (first, last) = (rms(&tried.residual[..quarter]), rms(&tried.residual[3 * quarter..]));
    let share = (first - 0.4 * tried.record.step_v.unwrap_or(0.0)) / tried.fit.parameters[0];
    (share > MISFIT_SHARE && first > MISFIT_RATIO * last).then(|| {
        let sentence = format!(
            "one damped sinusoid leaves {:.1} % of the ring in its first quarter and little later: something else rings or conducts there; \
             start the window later, or look for a second resonance on the node",
            100.0 * share
        );
        doubt(DoubtName::NotOneRing, sentence)
    })
}

/// A free law follows much that is no capacitance. What it leaves must then be noise, as quick changes between samples show it.
fn unlike_any_law(tried: &Tried<'_>) -> Option<Doubt> {
    let points = tried.record.volts.len() as f64 / (tried.fit.parameters[2] * tried.series.span_s);
    let thirds = tried.record.volts.windows(4).map(|v| (v[3] - 3.0 * v[2] + 3.0 * v[1] - v[0]).powi(2)).sum::<f64>();
    // Third differences of white noise have 20 times its variance.
    let noise = (thirds / 20.0 / tried.record.volts.len() as f64 / tried.series.block as f64).sqrt();
    let left = (tried.residual.iter().map(|r| r * r).sum::<f64>() / tried.residual.len() as f64).sqrt();
    let share = left / tried.fit.parameters[0];
    (points > LAW_POINTS && share > LAW_SHARE && left > LAW_RATIO * noise).then(|| {
        let sentence = format!(
            "no capacitance law describes the record: {:.1} % of the ring remain, {:.0} times the noise; start the window later, or look \
             for a second resonance on the node",
            100.0 * share,
            left / noise
        );
        doubt(DoubtName::NotOneRing, sentence)
    })
}

fn shift_doubt(shift: f64) -> Doubt {
    let sentence = format!(
        "the ring follows a voltage-dependent capacitance: a plain damped sinusoid would lie {:.2} % off the frequency of small \
         swings, which is the one given",
        100.0 * shift
    );
    doubt(DoubtName::AmplitudeDependent, sentence)
}

fn second_ring(tried: &Tried<'_>, rest: &Remainder, share: f64) -> Doubt {
    let sentence = format!(
        "one damped sinusoid leaves another of {:.0} % at {:.5} MHz beside the one at {:.5} MHz: shorten the ground lead, and look for a \
         snubber or a second resonance on the node",
        100.0 * share,
        rest.frequency / tried.series.span_s * 1e-6,
        tried.fit.parameters[2] * 1e-6
    );
    doubt(DoubtName::NotOneRing, sentence)
}
