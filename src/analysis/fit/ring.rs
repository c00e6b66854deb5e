//! From the parameters of a fit to those of the ring: undamped frequency and quality factor, and the mean of several rings.

use crate::{
    findings::{Ring, RingFit},
    quantity::Measured,
};
use std::f64::consts::TAU;

const DECAY: usize = 1;
const FREQUENCY: usize = 2;

/// The ring that a fit describes, its uncertainty propagated from the fit's covariance (JCGM 100, 5.2.2).
pub fn ring_of(fit: &RingFit) -> Ring {
    let (decay, frequency) = (fit.parameters[DECAY], fit.parameters[FREQUENCY]);
    let covariance = |row: usize, column: usize| fit.covariance.get(row * 6 + column).copied().unwrap_or(f64::INFINITY);
    let (v_decay, v_frequency) = (covariance(DECAY, DECAY), covariance(FREQUENCY, FREQUENCY));
    let both = covariance(DECAY, FREQUENCY);
    let propagated = |value: f64, by_decay: f64, by_frequency: f64| {
        let variance = by_decay * by_decay * v_decay
            + by_frequency * by_frequency * v_frequency
            + 2.0 * by_decay * by_frequency * both;
        Measured { value, standard_uncertainty: variance.max(0.0).sqrt() }
    };
    let damped = TAU * frequency;
    let undamped = damped.hypot(decay);
    let quality = undamped / (2.0 * decay);
    Ring {
        frequency_hz: propagated(undamped / TAU, decay / undamped / TAU, damped / undamped),
        damped_frequency_hz: propagated(frequency, 0.0, 1.0),
        decay_per_s: propagated(decay, 1.0, 0.0),
        quality_factor: propagated(
            quality,
            -damped * damped / (undamped * 2.0 * decay * decay),
            TAU * damped / (undamped * 2.0 * decay),
        ),
        amplitude_v: fit.parameters[0],
        alternative_hz: None,
    }
}

/// The mean of several rings of one record or point, weighted by inverse variance. Where they scatter by more than their
/// uncertainties say, the uncertainty is widened to what the scatter says (the Birge ratio). `None` for no rings.
pub fn combine(rings: &[Ring]) -> Option<Ring> {
    let of = |pick: fn(&Ring) -> Measured| weighted_mean(rings.iter().map(pick));
    let any = rings.iter().any(|ring| ring.alternative_hz.is_some());
    Some(Ring {
        frequency_hz: of(|ring| ring.frequency_hz)?,
        damped_frequency_hz: of(|ring| ring.damped_frequency_hz)?,
        decay_per_s: of(|ring| ring.decay_per_s)?,
        quality_factor: of(|ring| ring.quality_factor)?,
        alternative_hz: any.then(|| of(|ring| ring.alternative_hz.unwrap_or(ring.frequency_hz))).flatten(),
        amplitude_v: rings.iter().map(|ring| ring.amplitude_v).sum::<f64>() / rings.len() as f64,
    })
}

/// The mean of several measurements of one quantity, weighted by inverse variance and widened by the Birge ratio where they
/// scatter by more than their uncertainties say. `None` for none.
pub fn weighted_mean(values: impl Iterator<Item = Measured> + Clone) -> Option<Measured> {
    let count = values.clone().count();
    // A floor under the variances keeps a value that claims no uncertainty at all from taking all the weight.
    let floor = values.clone().map(|m| m.value.abs() * 1e-9).fold(f64::MIN_POSITIVE, f64::max);
    let weight = |m: Measured| 1.0 / (m.standard_uncertainty.powi(2) + floor * floor);
    let total: f64 = values.clone().map(weight).sum();
    if count == 0 || total <= 0.0 || total.is_nan() {
        return None;
    }
    let mean = values.clone().map(|m| weight(m) * m.value).sum::<f64>() / total;
    let scatter: f64 = values.map(|m| weight(m) * (m.value - mean).powi(2)).sum();
    let birge = if count > 1 { (scatter / (count - 1) as f64).sqrt().max(1.0) } else { 1.0 };
    Some(Measured { value: mean, standard_uncertainty: birge / total.sqrt() })
}
