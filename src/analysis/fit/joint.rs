//! Many rings of one node taken together: brought to one bulk voltage, and the test that they belong together.

use super::ring::weighted_mean;
use crate::{findings::Ring, quantity::Measured};
use statrs::distribution::{ChiSquared, ContinuousCDF};

/// Standard uncertainties that a slope of frequency over voltage must stand out by to be taken out.
const SLOPE: f64 = 3.0;
/// Relative slope beyond which it is no node capacitance: `df/f` over `dV/V`; half the exponent of the steepest law.
const STEEPEST: f64 = 1.0;
/// Chance by which rings of one node scatter as much as those that are told apart.
const CHANCE: f64 = 1e-4;

/// Rings that belong together, all brought to the mean of their bulk voltages.
#[derive(Debug, Clone, PartialEq)]
pub struct Joined {
    /// The rings, their frequencies moved to the mean voltage where the scatter of the voltages explains theirs.
    pub rings: Vec<Ring>,
    /// Change of the frequency with the bulk voltage in hertz per volt; 0 where none stands out.
    pub slope_hz_per_v: f64,
    /// Places in the list of the rings that were left out, because the others agree without them.
    pub left_out: Vec<usize>,
}

/// Joins rings with the bulk voltage of each: line ripple moves the node capacitance from ring to ring, so that the frequency is
/// regressed on the voltage (weighted least squares), and rings that do not lie with the others are left out, as long as most stay.
pub fn join(rings: &[(Ring, f64)]) -> Joined {
    let mut kept: Vec<usize> = (0..rings.len()).collect();
    let mut left_out = Vec::new();
    loop {
        let (slope, mean_v) = slope(rings, &kept);
        let moved: Vec<Ring> = kept.iter().map(|&n| moved(&rings[n], slope, mean_v)).collect();
        let worst = outlier(&moved, usize::from(slope != 0.0)).filter(|_| 3 * (left_out.len() + 1) <= rings.len());
        match worst {
            Some(worst) => left_out.push(kept.remove(worst)),
            None => return Joined { rings: moved, slope_hz_per_v: slope, left_out },
        }
    }
}

fn moved((ring, level_v): &(Ring, f64), slope: f64, mean_v: f64) -> Ring {
    let by = slope * (mean_v - level_v);
    let mut moved = *ring;
    moved.frequency_hz.value += by;
    moved.damped_frequency_hz.value += by;
    moved.alternative_hz = moved.alternative_hz.map(|hz| Measured { value: hz.value + by, ..hz });
    moved
}

/// Slope of the frequency over the bulk voltage, 0 where none stands out, and the mean voltage.
fn slope(rings: &[(Ring, f64)], kept: &[usize]) -> (f64, f64) {
    let mean_v = kept.iter().map(|&n| rings[n].1).sum::<f64>() / kept.len().max(1) as f64;
    if kept.len() < 4 {
        return (0.0, mean_v);
    }
    let Some(mean) = weighted_mean(kept.iter().map(|&n| rings[n].0.frequency_hz)) else { return (0.0, mean_v) };
    let (mut weights, mut first, mut second, mut product) = (0.0, 0.0, 0.0, 0.0);
    for &n in kept {
        let (ring, level_v) = &rings[n];
        let weight = ring.frequency_hz.standard_uncertainty.powi(-2);
        let (x, y) = (level_v - mean_v, ring.frequency_hz.value - mean.value);
        weights += weight;
        first += weight * x;
        second += weight * x * x;
        product += weight * x * y;
    }
    let spread = second - first * first / weights;
    let slope = product / spread;
    // What the slope leaves widens its uncertainty.
    let left: f64 = kept
        .iter()
        .map(|&n| {
            let (ring, level_v) = &rings[n];
            let left = ring.frequency_hz.value - mean.value - slope * (level_v - mean_v);
            (left / ring.frequency_hz.standard_uncertainty).powi(2)
        })
        .sum();
    let birge = (left / (kept.len() - 2) as f64).sqrt().max(1.0);
    let stands_out = slope.abs() > SLOPE * birge / spread.sqrt() && slope.is_finite();
    let steep = (slope * mean_v / mean.value).abs() > STEEPEST;
    if stands_out && !steep { (slope, mean_v) } else { (0.0, mean_v) }
}

/// The ring that lies farthest from the others, where they agree only without it.
fn outlier(rings: &[Ring], taken: usize) -> Option<usize> {
    if rings.len() < 3 + taken {
        return None;
    }
    let worst = (0..rings.len()).max_by(|&a, &b| distance(rings, a).total_cmp(&distance(rings, b)))?;
    let without: Vec<Ring> = (0..rings.len()).filter(|&n| n != worst).map(|n| rings[n]).collect();
    let freedom = (without.len() - taken).saturating_sub(1).max(1) as f64;
    // What is left of the scatter without it is the measure: rings of real boards scatter more than their noise.
    let scale = (misfit(&without) / freedom).max(1.0);
    let chance = 1.0 - ChiSquared::new(1.0).ok()?.cdf(distance(rings, worst).powi(2) / scale);
    (chance * (rings.len() as f64) < CHANCE).then_some(worst)
}

/// Distance of one ring from the mean of the others, in standard uncertainties.
fn distance(rings: &[Ring], n: usize) -> f64 {
    let others = rings.iter().enumerate().filter(|(k, _)| *k != n).map(|(_, ring)| ring.frequency_hz);
    let own = rings[n].frequency_hz;
    weighted_mean(others)
        .map_or(0.0, |mean| (own.value - mean.value).abs() / own.standard_uncertainty.hypot(mean.standard_uncertainty))
}

fn misfit(rings: &[Ring]) -> f64 {
    weighted_mean(rings.iter().map(|ring| ring.frequency_hz)).map_or(0.0, |mean| {
        rings.iter().map(|r| ((r.frequency_hz.value - mean.value) / r.frequency_hz.standard_uncertainty).powi(2)).sum()
    })
}
