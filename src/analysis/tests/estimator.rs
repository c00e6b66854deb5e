//! Whether the fit of a ring knows as much as can be known: held record by record against a linearised maximum-likelihood oracle, the
//! Cramér-Rao bound and exact least squares; and whether its intervals hold. The long tables are printed by `scripts/estimator.sh`.

use crate::{
    generate::Maker,
    oracle::{Floor, Oracle, Truth, exact_least_squares},
};
use ringstep_analysis::{
    findings::{FittedFloor, RingFit, RingKind},
    fit::{Base, Refusal, RingRecord, Times, fit_damped_sinusoid, fit_ring},
};
use std::{
    f64::consts::TAU,
    sync::{
        Mutex,
        atomic::{AtomicUsize, Ordering},
    },
};

/// One result a cell, both cores at work.
pub(crate) fn each_cell<C: Sync, R: Send>(cells: &[C], work: impl Fn(usize, &C) -> R + Sync) -> Vec<R> {
    let (next, results) = (AtomicUsize::new(0), Mutex::new(Vec::new()));
    std::thread::scope(|scope| {
        for _ in 0..2 {
            scope.spawn(|| {
                while let Some((n, cell)) =
                    Some(next.fetch_add(1, Ordering::Relaxed)).and_then(|n| Some((n, cells.get(n)?)))
                {
                    let result = work(n, cell);
                    results.lock().unwrap().push((n, result));
                }
            });
        }
    });
    let mut results = results.into_inner().unwrap();
    results.sort_by_key(|(n, _)| *n);
    results.into_iter().map(|(_, result)| result).collect()
}

/// Records a cell: those asked for, or fewer where the environment says so.
pub(crate) fn records(usual: usize) -> usize {
    let share = std::env::var("RINGSTEP_ESTIMATOR_SHARE").ok().and_then(|s| s.parse::<f64>().ok()).unwrap_or(1.0);
    ((usual as f64 * share) as usize).max(20)
}

#[derive(Debug, Clone, Copy)]
struct Cell {
    periods: f64,
    points: f64,
    quality: f64,
    /// Amplitude over noise.
    ratio: f64,
    /// Vertical steps an amplitude.
    steps: Option<f64>,
}

fn grid(windows: &[f64], ratios: &[f64], qualities: &[f64], steps: &[Option<f64>]) -> Vec<Cell> {
    let mut cells = Vec::new();
    for &periods in windows {
        for &ratio in ratios {
            for &quality in qualities {
                cells.extend(steps.iter().map(|&steps| Cell { periods, points: 100.0, quality, ratio, steps }));
            }
        }
    }
    cells
}

/// A record with its truth: samples, white noise, and the converter's rounding error.
struct Sample {
    truth: Truth,
    volts: Vec<f64>,
    noise: Vec<f64>,
    rounding: Vec<f64>,
}

impl Cell {
    fn sample(&self, maker: &mut Maker) -> Sample {
        let base = [maker.between(-1.0, 1.0), maker.between(-0.3, 0.3)];
        let phase = maker.between(0.0, TAU);
        let truth = Truth::new(Floor::Straight, self.periods, self.points, self.quality, phase, &base);
        let noise: Vec<f64> = (0..truth.count).map(|_| maker.normal() / self.ratio).collect();
        let mut volts: Vec<f64> = truth.volts().iter().zip(&noise).map(|(v, n)| v + n).collect();
        let mut rounding = vec![0.0; volts.len()];
        if let Some(steps) = self.steps {
            let shift = maker.between(0.0, 1.0);
            for (volt, error) in volts.iter_mut().zip(&mut rounding) {
                let rounded = ((*volt * steps + shift).round() - shift) / steps;
                (*error, *volt) = (rounded - *volt, rounded);
            }
        }
        Sample { truth, volts, noise, rounding }
    }

    /// Standard deviation of noise and rounding together.
    fn deviation(&self) -> f64 {
        (self.ratio.powi(-2) + self.steps.map_or(0.0, |steps| 1.0 / (12.0 * steps * steps))).sqrt()
    }

    fn record<'a>(&self, volts: &'a [f64]) -> RingRecord<'a> {
        let times_s = Times::Even { start_s: 0.0, interval_s: 1e-8 };
        RingRecord { times_s, volts, step_v: self.steps.map(f64::recip), clip_v: None }
    }
}

/// Angle, decay and amplitude of the whole path, also where it was refused, and whether it was.
pub(crate) fn whole_path(record: &RingRecord<'_>, kind: RingKind) -> Option<(RingFit, bool)> {
    match fit_ring(record, kind) {
        Ok(accepted) => Some((accepted.fit, false)),
        Err(Refusal { rejected, .. }) => Some((*rejected?, true)),
    }
}

pub(crate) fn values(fit: &RingFit) -> [f64; 3] {
    let span = fit.curve.span_s;
    [TAU * fit.parameters[2] * span, fit.parameters[1] * span, fit.parameters[0]]
}

fn more_than_plain(fit: &RingFit) -> bool {
    fit.curve.floor != FittedFloor::Straight || fit.curve.law_degree.is_some()
}

/// The estimator from a start that is off as the start search never is.
fn estimate(sample: &Sample, maker: &mut Maker) -> Option<[f64; 3]> {
    let at = &sample.truth.parameters;
    let start = [at[1] * maker.between(0.6, 1.5), at[0] + maker.between(-0.8, 0.8)];
    let fit = fit_damped_sinusoid(&sample.volts, start, Base::Straight)?;
    Some([fit.angle, fit.decay, fit.cosine.hypot(fit.sine)])
}

/// Sums over records of errors in units of the bound.
#[derive(Debug, Clone, Default)]
struct Tally {
    count: f64,
    fit: [f64; 3],
    oracle: [f64; 3],
    /// Squared error of the oracle beyond that of the white noise, whose expectation is known.
    rounding: [f64; 3],
    apart: [f64; 3],
}

impl Tally {
    /// `fit`, and the oracle's from white noise and from rounding.
    fn add(&mut self, fit: [f64; 3], white: [f64; 3], rounding: [f64; 3]) {
        self.count += 1.0;
        for k in 0..3 {
            self.fit[k] += fit[k] * fit[k];
            self.oracle[k] += (white[k] + rounding[k]).powi(2);
            self.rounding[k] += 2.0 * white[k] * rounding[k] + rounding[k] * rounding[k];
            self.apart[k] += fit[k] - white[k];
        }
    }

    fn paired(&self) -> [f64; 3] {
        std::array::from_fn(|k| (self.fit[k] / self.oracle[k]).sqrt())
    }

    /// Over the bound: the paired ratio times what the oracle is expected to reach, of whose variance only the rounding's part is
    /// sampled. `white` is the white noise's share of the variance.
    fn over_bound(&self, white: f64) -> [f64; 3] {
        let paired = self.paired();
        std::array::from_fn(|k| paired[k] * (white + self.rounding[k] / self.count).max(0.0).sqrt())
    }

    fn direct(&self) -> [f64; 3] {
        self.fit.map(|squares| (squares / self.count).sqrt())
    }

    /// Mean error, the white noise's own chance taken out.
    fn bias(&self) -> [f64; 3] {
        self.apart.map(|sum| sum / self.count)
    }
}

#[derive(Debug, Default)]
struct Row {
    estimator: Tally,
    path: Tally,
    /// The whole path where it took more than a damped sinusoid.
    more: Tally,
    failed: usize,
    path_failed: usize,
    refused: usize,
    /// Largest distance between the whole path and the estimator, in bounds, where both took the plain model.
    distance: f64,
}

fn row(seed: u64, cell: &Cell, count: usize, every: usize) -> Row {
    let (mut maker, mut row) = (Maker::new(seed), Row::default());
    for n in 0..count {
        let sample = cell.sample(&mut maker);
        let oracle = Oracle::of(&sample.truth);
        let unit = oracle.bound.map(|b| b * cell.deviation());
        let over = |x: [f64; 3]| std::array::from_fn::<f64, 3, _>(|k| x[k] / unit[k]);
        let off = |x: [f64; 3]| over(std::array::from_fn(|k| x[k] - sample.truth.parameters[k]));
        let (white, rounding) = (over(oracle.errors(&sample.noise)), over(oracle.errors(&sample.rounding)));
        let found = estimate(&sample, &mut maker).map(off).filter(|z| z[0].abs() < 10.0);
        match found {
            Some(z) => row.estimator.add(z, white, rounding),
            None => row.failed += 1,
        }
        if n % every != 0 {
            continue;
        }
        let Some((fit, refused)) = whole_path(&cell.record(&sample.volts), RingKind::Relaxation) else {
            row.path_failed += 1;
            continue;
        };
        let z = off(values(&fit));
        row.refused += usize::from(refused);
        row.path_failed += usize::from(z[0].abs() >= 10.0);
        row.path.add(z, white, rounding);
        if more_than_plain(&fit) {
            row.more.add(z, white, rounding);
        } else if let Some(found) = found {
            row.distance = (0..3).fold(row.distance, |most, k| most.max((z[k] - found[k]).abs()));
        }
    }
    row
}

pub(crate) fn triple(x: [f64; 3], places: usize) -> String {
    x.map(|x| format!("{x:.places$}")).join(" ")
}

pub(crate) fn most(x: [f64; 3]) -> f64 {
    x.iter().fold(0.0, |most, x| f64::max(most, x.abs()))
}

/// Everything that the estimator must hold, in each of the cells.
fn hold_at_the_bound(cells: &[Cell], count: usize, every: usize) -> Vec<Row> {
    let rows = each_cell(cells, |n, cell| row(1000 + n as u64, cell, count, every));
    println!("Frequency, decay, amplitude: {count} records a cell, the whole path on one in {every}.");
    println!(
        "periods A/s  Q steps | RMS/oracle           RMS/bound         (counted)         bias                 failed | whole path/oracle    more   (RMS/oracle there)  refused failed distance"
    );
    for (cell, row) in cells.iter().zip(&rows) {
        let white = (cell.ratio * cell.deviation()).powi(-2);
        println!(
            "{:7} {:3} {:2} {:5} | {} {} ({}) {:>21} {:6} | {} {:4.1} % ({}) {:7} {:6} {:.0e}",
            cell.periods,
            cell.ratio,
            cell.quality,
            cell.steps.map_or("-".to_owned(), |s| s.to_string()),
            triple(row.estimator.paired(), 4),
            triple(row.estimator.over_bound(white), 3),
            triple(row.estimator.direct(), 3),
            triple(row.estimator.bias(), 3),
            row.failed,
            triple(row.path.paired(), 4),
            100.0 * row.more.count / row.path.count,
            triple(row.more.paired(), 2),
            row.refused,
            row.path_failed,
            row.distance
        );
    }
    let worst = |of: &dyn Fn(&Row) -> f64| rows.iter().map(of).fold(0.0, f64::max);
    let total = |of: &dyn Fn(&Row) -> f64| rows.iter().map(of).sum::<f64>();
    let bound = cells.iter().zip(&rows).map(|(c, r)| most(r.estimator.over_bound((c.ratio * c.deviation()).powi(-2))));
    println!(
        "worst: RMS/oracle {:.4}, RMS/bound {:.4}, bias {:.3}; whole path RMS/oracle {:.4}; {:.0} records by the estimator ({} failed), {:.0} by the whole path ({} failed), more than plain in {:.2} %",
        worst(&|r| most(r.estimator.paired())),
        bound.clone().fold(0.0, f64::max),
        worst(&|r| most(r.estimator.bias())),
        worst(&|r| most(r.path.paired())),
        total(&|r| r.estimator.count),
        total(&|r| r.failed as f64),
        total(&|r| r.path.count),
        total(&|r| r.path_failed as f64),
        100.0 * total(&|r| r.more.count) / total(&|r| r.path.count)
    );
    for ((cell, row), bound) in cells.iter().zip(&rows).zip(bound) {
        // Bias and rounding are sampled: three standard deviations of what the pairing leaves are allowed.
        let sampling = if cell.steps.is_some() { 3.0 / (2.0 * count as f64).sqrt() } else { 0.0 };
        assert_eq!((row.failed, row.path_failed), (0, 0), "{cell:?}");
        assert!(most(row.estimator.paired()) <= 1.005, "{cell:?}");
        assert!(bound <= 1.03 + sampling, "{cell:?}");
        assert!(most(row.estimator.bias()) < 0.1, "{cell:?}");
        assert!(row.distance < 0.01, "{cell:?}");
    }
    rows
}

#[test]
fn estimator_is_at_the_bound() {
    let cells = grid(&[6.0, 12.0], &[20.0, 100.0], &[8.0, 40.0], &[None, Some(30.0)]);
    hold_at_the_bound(&cells, 1000, 100);
}

#[test]
#[ignore = "long: scripts/estimator.sh"]
fn estimator_table_bound() {
    let steps = [None, Some(30.0), Some(80.0)];
    let cells = grid(&[3.0, 6.0, 12.0, 25.0], &[20.0, 50.0, 100.0], &[8.0, 15.0, 40.0], &steps);
    let rows = hold_at_the_bound(&cells, records(5000), 5);
    // The choice of the model may lose nothing on linear records.
    for (cell, row) in cells.iter().zip(&rows) {
        assert!(most(row.path.paired()) <= 1.05, "{cell:?}: the whole path loses {:?}", row.path.paired());
    }
}

/// RMS errors in bounds of exact least squares, and ours over those of exact least squares, estimator and whole path.
fn hold_to_least_squares(cells: &[Cell], count: usize) {
    let rows = each_cell(cells, |n, cell| {
        let mut maker = Maker::new(5000 + n as u64);
        let (mut exact, mut ours, mut path, mut kept, mut none) = ([0.0; 3], [0.0; 3], [0.0; 3], [0.0; 3], 0);
        for index in 0..count {
            let sample = cell.sample(&mut maker);
            let unit = Oracle::of(&sample.truth).bound.map(|b| b * cell.deviation());
            let square = |x: [f64; 3], k: usize| ((x[k] - sample.truth.parameters[k]) / unit[k]).powi(2);
            let best = exact_least_squares(&sample.truth, &sample.volts);
            let found = estimate(&sample, &mut maker);
            let whole = (index % 10 == 0).then(|| whole_path(&cell.record(&sample.volts), RingKind::Relaxation));
            none += usize::from(found.is_none());
            for k in 0..3 {
                exact[k] += square(best, k) / count as f64;
                ours[k] += found.map_or(0.0, |x| square(x, k)) / count as f64;
                if let Some(Some((fit, _))) = &whole {
                    path[k] += square(values(fit), k);
                    kept[k] += square(best, k);
                }
            }
        }
        let ratio = |a: [f64; 3], b: [f64; 3]| std::array::from_fn::<f64, 3, _>(|k| (a[k] / b[k]).sqrt());
        (exact.map(f64::sqrt), ratio(ours, exact), ratio(path, kept), none)
    });
    println!("Frequency, decay, amplitude: {count} records a cell.");
    println!("periods points A/s  Q | exact least squares/bound | ours/exact           | whole path/exact     none");
    for (cell, (exact, ours, path, none)) in cells.iter().zip(&rows) {
        println!(
            "{:7} {:6} {:3} {:2} | {}         | {} | {} {none}",
            cell.periods,
            cell.points,
            cell.ratio,
            cell.quality,
            triple(*exact, 3),
            triple(*ours, 4),
            triple(*path, 4)
        );
    }
    for (cell, (_, ours, _, none)) in cells.iter().zip(&rows) {
        assert!(most(*ours) <= 1.01 && *none == 0, "{cell:?}");
    }
}

#[test]
fn estimator_is_exact_least_squares_where_that_leaves_the_bound() {
    hold_to_least_squares(&grid(&[3.0, 12.0], &[5.0], &[8.0, 40.0], &[None]), 400);
}

#[test]
#[ignore = "long: scripts/estimator.sh"]
fn estimator_table_least_squares() {
    let mut cells = grid(&[2.0, 3.0, 6.0, 12.0, 25.0], &[5.0], &[8.0, 15.0, 40.0], &[None]);
    cells.extend(grid(&[2.0], &[20.0, 50.0], &[8.0, 40.0], &[None]));
    let sparse = grid(&[1.5, 2.0, 3.0, 6.0, 12.0], &[5.0], &[8.0, 40.0], &[None]);
    cells.extend(sparse.into_iter().map(|cell| Cell { points: 10.0, ..cell }));
    hold_to_least_squares(&cells, records(4000));
}
