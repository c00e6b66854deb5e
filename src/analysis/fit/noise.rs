//! What is left after a fit: how strong the noise is where the ring is, and whether another ring stands in it.

use super::{
    model::{DampedSinusoid, Line},
    series::Series,
    solve::{Solution, project, residuals, solve},
    start::{spectrum, start_values},
};
use std::f64::consts::TAU;

/// Variance of the residuals as the fit of a ring at `frequency` (cycles a span) feels it: the mean of their spectrum about the
/// ring's frequency, where it stands out of the whole. Noise limited in bandwidth is stronger there than its total says.
pub(super) fn variance_at(series: &Series, residual: &[f64], frequency: f64, parameters: usize) -> f64 {
    let freedom = residual.len().saturating_sub(parameters).max(1) as f64;
    let whole = residual.iter().map(|r| r * r).sum::<f64>() / freedom;
    if series.interval.is_none() {
        return whole;
    }
    let power = spectrum(residual, 1);
    let bins_a_cycle = 2.0 * (power.len() - 1) as f64 / series.rate();
    let low = ((0.3 * frequency * bins_a_cycle) as usize).max(1);
    let high = ((3.0 * frequency * bins_a_cycle) as usize).min(power.len() - 1);
    // Zero padding correlates the bins: as many are independent as there are cycles in the band.
    let independent = high.saturating_sub(low) as f64 / bins_a_cycle * series.len() as f64 / series.rate();
    if independent < 4.0 {
        return whole;
    }
    let mean = power[low..high].iter().sum::<f64>() / (high - low) as f64;
    // The four parameters of the ring have taken two bins' worth of noise out of the band.
    let band = mean * independent / (independent - 2.0);
    if band > whole * (1.0 + 1.5 / independent.sqrt()) { band } else { whole }
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
    let (_, flat) = project(&Line, &left, &[])?;
    let Solution { nonlinear, linear, squares, .. } = solve(&DampedSinusoid, &left, &start, 30)?;
    let frequency = nonlinear[1] / TAU;
    let rest = residuals(&DampedSinusoid, &left, &nonlinear, &linear);
    let noise = variance_at(&left, &rest, frequency, 6);
    let found = Remainder {
        amplitude_v: linear[0].hypot(linear[1]),
        frequency,
        decay: nonlinear[0],
        strength: (flat - squares) / noise.max(f64::MIN_POSITIVE),
    };
    Some((found, rest))
}
