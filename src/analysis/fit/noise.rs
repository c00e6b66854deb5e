//! What is left after a fit: how strong the noise is where the ring is, and whether another ring stands in it.

use super::{
    curves::{Line, Ringing},
    least_squares::{Solution, project, solve},
    series::Series,
    start::{spectrum, start_values},
};
use crate::findings::FittedFloor;
use std::f64::consts::TAU;

/// Noise as the fit of a ring feels it.
#[derive(Debug, Clone, Copy)]
pub(super) struct Noise {
    /// Variance of white noise that would be as strong where the ring is.
    pub(super) variance: f64,
    /// Degrees of freedom that it is known with.
    pub(super) freedom: f64,
}

/// Lowest and highest frequency of the narrowest band, over the ring's.
const BAND: [f64; 2] = [0.3, 3.0];
/// Growth of the band while it stays level, and the standard deviations that count as level.
const GROWTH: f64 = 1.7;
const LEVEL: f64 = 2.0;

/// Noise in the residuals as the fit of a ring at `frequency` (cycles a span) feels it: the mean of their spectrum about the
/// ring's frequency, over the widest band in which it is level. Noise limited in bandwidth is stronger there than its total says,
/// and white noise is known best from all of it.
pub(super) fn noise_at(series: &Series, residual: &[f64], frequency: f64, parameters: usize) -> Noise {
    let freedom = residual.len().saturating_sub(parameters).max(1) as f64;
    let whole = Noise { variance: residual.iter().map(|r| r * r).sum::<f64>() / freedom, freedom };
    if series.interval.is_none() {
        return whole;
    }
    let power = spectrum(residual, 1);
    let bins_a_cycle = 2.0 * (power.len() - 1) as f64 / series.rate();
    let bin = |over: f64| ((over * frequency * bins_a_cycle) as usize).clamp(1, power.len() - 1);
    // Zero padding correlates the bins: as many are independent as there are cycles in the band.
    let independent = |bins: usize| bins as f64 / bins_a_cycle * series.len() as f64 / series.rate();
    let [low, mut high] = BAND.map(bin);
    let mut count = independent(high.saturating_sub(low));
    if count < 5.0 {
        return whole;
    }
    // What the fit has taken out of the residuals, two parameters a bin, lies in the band.
    let mut sum = power[low..high].iter().sum::<f64>() * count / (high - low) as f64;
    let taken = (0.5 * parameters as f64).min(0.5 * count);
    let mut over = BAND[1];
    while high < power.len() - 1 {
        over *= GROWTH;
        let next = bin(over);
        let more = independent(next - high);
        if more < 1.0 {
            if next == power.len() - 1 { break } else { continue }
        }
        let mean = power[high..next].iter().sum::<f64>() / (next - high) as f64;
        let level = sum / (count - taken);
        if (mean / level - 1.0).abs() > LEVEL * (1.0 / more + 1.0 / (count - taken)).sqrt() {
            return Noise { variance: level, freedom: 2.0 * (count - taken) };
        }
        (sum, count, high) = (sum + mean * more, count + more, next);
    }
    whole
}

/// Another ring in the residuals of a fit.
#[derive(Debug, Clone, Copy)]
pub(super) struct Remainder {
    /// Amplitude at the start of the window.
    pub(super) amplitude_v: f64,
    /// Cycles a span.
    pub(super) frequency: f64,
    /// Decay over the span.
    pub(super) decay: f64,
    /// What it explains, in variances of the noise beside it: some 10 to 30 where there is only noise.
    pub(super) strength: f64,
}

/// The strongest damped sinusoid in the residuals, and what is left without it.
pub(super) fn remainder(series: &Series, residual: &[f64]) -> Option<(Remainder, Vec<f64>)> {
    let left = series.with_volts(residual.to_vec());
    let start = start_values(&left)?;
    let (_, flat) = project(&Line, &left.times, &left.volts, &[])?;
    let flat: f64 = flat.iter().map(|r| r * r).sum();
    let found = solve(&Ringing(FittedFloor::Straight), &left.times, &left.volts, &start, 30)?;
    let Solution { nonlinear, linear, squares, residual: rest, .. } = found;
    let frequency = nonlinear[1] / TAU;
    let noise = noise_at(&left, &rest, frequency, 6).variance;
    let found = Remainder {
        amplitude_v: linear[0].hypot(linear[1]),
        frequency,
        decay: nonlinear[0],
        strength: (flat - squares) / noise.max(f64::MIN_POSITIVE),
    };
    Some((found, rest))
}
