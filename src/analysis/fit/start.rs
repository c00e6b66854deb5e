//! Start values that do not land in a wrong minimum: peaks of the spectrum, each tried with a fan of decays, the best one refined on
//! block means.

use super::{
    curves::{Line, Ringing, swings},
    least_squares::{project, solve},
    series::Series,
};
use crate::findings::FittedFloor;
use realfft::{RealFftPlanner, num_complex::Complex64};
use std::f64::consts::{PI, TAU};

/// Spectral peaks that are tried.
const CANDIDATES: usize = 5;
/// Quality factors that each is tried with.
const QUALITIES: [f64; 6] = [1.5, 4.0, 9.0, 20.0, 50.0, 200.0];
/// Points a period that the search keeps.
const POINTS: f64 = 10.0;

/// The damped sinusoid that explains most of the samples: decay and angular frequency a span.
pub(super) fn start_values(series: &Series) -> Option<[f64; 2]> {
    let even = series.even();
    if flat(&even)? <= 0.0 {
        return None;
    }
    let mut tried: Vec<(f64, f64, [f64; 2])> = Vec::new();
    for frequency in spectral_peaks(&even) {
        let thin = even.thinned(frequency, POINTS);
        let flat = flat(&thin)?;
        let best = QUALITIES
            .iter()
            .map(|quality| [PI * frequency / quality, TAU * frequency])
            .filter(|start| swings(start[0], start[1]))
            .filter_map(|start| {
                let (_, residual) = project(&Ringing(FittedFloor::Straight), &thin.times, &thin.volts, &start)?;
                Some((squares(&residual), start))
            })
            .min_by(|a, b| a.0.total_cmp(&b.0));
        if let Some((squares, start)) = best {
            tried.push(((flat - squares) * thin.block as f64, frequency, start));
        }
    }
    tried.sort_by(|a, b| b.0.total_cmp(&a.0));
    let refined = tried.iter().take(2).filter_map(|&(_, frequency, start)| {
        let thin = even.thinned(frequency, POINTS);
        let found = solve(&Ringing(FittedFloor::Straight), &thin.times, &thin.volts, &start, 30)?;
        Some(((flat(&thin)? - found.squares) * thin.block as f64, [found.nonlinear[0], found.nonlinear[1]]))
    });
    refined.max_by(|a, b| a.0.total_cmp(&b.0)).map(|(_, start)| start)
}

/// What a straight line leaves.
fn flat(series: &Series) -> Option<f64> {
    project(&Line, &series.times, &series.volts, &[]).map(|(_, residual)| squares(&residual))
}

fn squares(residual: &[f64]) -> f64 {
    residual.iter().map(|r| r * r).sum()
}

/// Frequencies of the highest peaks of the spectrum, in cycles a span, highest first. No taper: a ring has its strength at the
/// start, where a taper would take it away.
fn spectral_peaks(series: &Series) -> Vec<f64> {
    let Some((_, residual)) = project(&Line, &series.times, &series.volts, &[]) else { return Vec::new() };
    let power = spectrum(&residual, 2);
    let bins_a_cycle = 2.0 * (power.len() - 1) as f64 / series.rate();
    let lowest = (0.8 * bins_a_cycle) as usize;
    let mut peaks: Vec<usize> =
        (lowest.max(1)..power.len() - 1).filter(|&k| power[k] >= power[k - 1] && power[k] > power[k + 1]).collect();
    peaks.sort_by(|&a, &b| power[b].total_cmp(&power[a]));
    let mut chosen: Vec<f64> = Vec::new();
    for k in peaks {
        let (left, centre, right) = (power[k - 1].sqrt(), power[k].sqrt(), power[k + 1].sqrt());
        let curvature = left - 2.0 * centre + right;
        let shift = if curvature < 0.0 { (0.5 * (left - right) / curvature).clamp(-0.5, 0.5) } else { 0.0 };
        let frequency = (k as f64 + shift) / bins_a_cycle;
        if chosen.iter().all(|other| (other - frequency).abs() > 1.6) {
            chosen.push(frequency);
        }
        if chosen.len() == CANDIDATES {
            break;
        }
    }
    chosen
}

/// Power of each bin of the transform of samples padded with zeros to at least `padding` times their number; white noise of
/// variance one gives one in each bin.
pub(super) fn spectrum(samples: &[f64], padding: usize) -> Vec<f64> {
    let length = (samples.len() * padding).next_power_of_two().max(4);
    let mut padded = samples.to_vec();
    padded.resize(length, 0.0);
    let mut planner = RealFftPlanner::<f64>::new();
    let forward = planner.plan_fft_forward(length);
    let mut bins = vec![Complex64::default(); length / 2 + 1];
    // The lengths are those that the plan asks for, so that it cannot fail; an empty spectrum holds no peak.
    if forward.process(&mut padded, &mut bins).is_err() {
        return vec![0.0; 3];
    }
    bins.iter().map(|bin| bin.norm_sqr() / samples.len() as f64).collect()
}
