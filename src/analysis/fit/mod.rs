//! A ring found in samples: a damped sinusoid or the circuit equation, on a floor that may bend, with its covariance, and the refusal
//! of anything else.

mod attempt;
mod circuit_equation;
mod clipping;
mod curves;
mod damped_sinusoid;
mod drawing;
mod evidence;
mod joint;
pub mod least_squares;
mod moments;
mod noise;
mod report;
mod ring;
mod series;
mod start;
mod verdict;
mod window;

pub use damped_sinusoid::{Base, DampedSinusoid, fit_damped_sinusoid, fit_damped_sinusoid_with};
pub use drawing::curve_v;
pub use joint::{Joined, join};
pub use moments::Instructions;
pub use ring::{combine, ring_of, weighted_mean};
pub use window::find_ring_down;

use crate::findings::{Doubt, Ring, RingFit, RingKind};

/// When the samples were taken.
#[derive(Debug, Clone, Copy)]
pub enum Times<'a> {
    /// Evenly.
    Even {
        /// Time of the first sample in seconds.
        start_s: f64,
        /// Sample interval in seconds.
        interval_s: f64,
    },
    /// Time of each sample in seconds, ascending, as many as there are samples.
    Uneven(&'a [f64]),
}

/// The samples of one ring: from where it rings freely to where it is cut.
#[derive(Debug, Clone, Copy)]
pub struct RingRecord<'a> {
    /// When the samples were taken.
    pub times_s: Times<'a>,
    /// Samples in volts.
    pub volts: &'a [f64],
    /// Vertical step of the converter in volts, where known.
    pub step_v: Option<f64>,
    /// Lowest and highest voltage that the vertical range could show, where known.
    pub clip_v: Option<(f64, f64)>,
}

impl<'a> RingRecord<'a> {
    /// The same record from one sample to another, the second not included.
    pub fn part(&self, range: std::ops::Range<usize>) -> RingRecord<'a> {
        let times_s = match self.times_s {
            Times::Even { start_s, interval_s } => {
                Times::Even { start_s: start_s + range.start as f64 * interval_s, interval_s }
            }
            Times::Uneven(times) => Times::Uneven(&times[range.clone()]),
        };
        RingRecord { times_s, volts: &self.volts[range], ..*self }
    }
}

/// Why no ring was accepted.
#[derive(Debug, Clone, PartialEq)]
pub struct Refusal {
    /// What was seen, and what to change on the bench.
    pub doubt: Doubt,
    /// The fit that was tried and found wanting, where there is one.
    pub rejected: Option<Box<RingFit>>,
}

/// A ring that was accepted.
#[derive(Debug, Clone, PartialEq)]
pub struct Accepted {
    /// The fit: one damped sinusoid, for drawing and for residuals.
    pub fit: RingFit,
    /// The ring at small signal. Where the frequency depends on amplitude this is not [`ring_of`] the fit.
    pub ring: Ring,
    /// Reasons to trust it less, such as an amplitude-dependent frequency.
    pub doubts: Vec<Doubt>,
}

/// Fits the ring in the record.
///
/// # Errors
/// A typed refusal where the record holds no valid single ring.
pub fn fit_ring(record: &RingRecord<'_>, kind: RingKind) -> Result<Accepted, Refusal> {
    verdict::judge(record, kind)
}
