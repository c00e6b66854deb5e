//! Inductance and capacitance from added capacitors: closed forms, a straight line of published data, a general-purpose
//! library, and intervals that hold the truth as often as they say.

use crate::{generate::Maker, need::need_python};
use nalgebra::{DMatrix, DVector};
use proptest::prelude::*;
use ringstep_analysis::{
    circuit::{
        added::{AddedDoubtName, AddedOptions, AddedPoint, AddedRefusal, AddedResult, added_capacitors},
        straight_line::StraightLine,
    },
    quantity::Measured,
};
use std::{f64::consts::TAU, process::Command};

const INDUCTANCE_H: f64 = 8e-6;
const CAPACITANCE_F: f64 = 120e-12;

fn measured(value: f64, relative: f64) -> Measured {
    Measured { value, standard_uncertainty: relative * value }
}

fn point(capacitance_f: Measured, frequency_hz: Measured) -> AddedPoint {
    AddedPoint { capacitance_f, frequency_hz, bulk_voltage_v: None, reflected_voltage_v: None }
}

fn frequency_hz(inductance_h: f64, capacitance_f: f64) -> f64 {
    1.0 / (TAU * (inductance_h * capacitance_f).sqrt())
}

/// Points of a node without any error, with the relative uncertainties that are stated for them.
fn exact_points(inductance_h: f64, capacitance_f: f64, added_f: &[f64], relative: [f64; 2]) -> Vec<AddedPoint> {
    let point = |&added: &f64| {
        let ring = frequency_hz(inductance_h, capacitance_f + added);
        point(measured(added, relative[0]), measured(ring, relative[1]))
    };
    added_f.iter().map(point).collect()
}

fn plain(points: &[AddedPoint]) -> Result<AddedResult, AddedRefusal> {
    added_capacitors(points, &AddedOptions::default())
}

fn near(got: f64, expected: f64, relative: f64) {
    assert!((got / expected - 1.0).abs() <= relative, "{got} where {expected} is expected");
}

/// Computed from the formulas: 8 uH and 120 pF ring at 5.136704 MHz; with 100/220/360 pF more at 3.793707, 3.051657 and
/// 2.568352 MHz.
#[test]
fn the_vector_of_8_uh_and_120_pf_is_given_back() {
    let rings = [(0.0, 5.136704e6), (100e-12, 3.793707e6), (220e-12, 3.051657e6), (360e-12, 2.568352e6)];
    let points = rings.map(|(added, ring)| point(measured(added, 0.01), measured(ring, 1e-4)));
    for points in [&points[..], &points[..2], &[points[3], points[0]], &points[1..]] {
        let result = plain(points).unwrap();
        near(result.inductance_h.value, INDUCTANCE_H, 3e-6);
        near(result.node_capacitance_f.value, CAPACITANCE_F, 3e-6);
    }
}

/// Data sheets of flyback controllers: `C = C_added / ((T'/T)^2 - 1)` and `L = T^2 / (4 pi^2 C)`; a doubled period means a third
/// of what was added.
#[test]
fn a_pair_is_the_closed_form() {
    for (bare, loaded, added) in [(520e3, 260e3, 300e-12), (3.1e6, 2.2e6, 100e-12)] {
        let points =
            [point(Measured::exact(0.0), measured(bare, 1e-4)), point(measured(added, 0.01), measured(loaded, 1e-4))];
        let result = plain(&points).unwrap();
        let capacitance = added / ((bare / loaded).powi(2) - 1.0);
        near(result.node_capacitance_f.value, capacitance, 1e-12);
        near(result.inductance_h.value, 1.0 / ((TAU * bare).powi(2) * capacitance), 1e-12);
        assert_eq!((result.degrees_of_freedom, result.probability), (0, None));
        if bare == 2.0 * loaded {
            near(result.node_capacitance_f.value, added / 3.0, 1e-12);
        }
    }
}

/// Derivative of the closed form: the capacitance moves by `2k/(k-1)` of a relative change of either frequency, `k` the squared
/// period ratio: 4.40, 3.09 and 2.67 for 100, 220 and 360 pF on 120 pF. Of the capacitor's own it moves by as much.
#[test]
fn the_uncertainty_of_a_pair_is_the_law_of_propagation() {
    for (added, sensitivity) in [(100e-12, 4.40), (220e-12, 3.09), (360e-12, 2.67)] {
        let u = 1e-4;
        let result = plain(&exact_points(INDUCTANCE_H, CAPACITANCE_F, &[0.0, added], [0.0, u])).unwrap();
        near(result.node_capacitance_f.relative_uncertainty(), u * sensitivity * 2f64.sqrt(), 2e-3);
        // The slope's: (y1 - y0) / C, with 2 y u for each square.
        let (less, more) = (CAPACITANCE_F, CAPACITANCE_F + added);
        near(result.inductance_h.relative_uncertainty(), 2.0 * u * less.hypot(more) / added, 1e-6);
        let result = plain(&exact_points(INDUCTANCE_H, CAPACITANCE_F, &[0.0, added], [0.02, 1e-9])).unwrap();
        near(result.node_capacitance_f.relative_uncertainty(), 0.02, 1e-6);
        near(result.inductance_h.relative_uncertainty(), 0.02, 1e-6);
        // L C0 is known as well as the bare frequency: the two are moved by the capacitor in opposite directions.
        let (l, c) = (result.inductance_h, result.node_capacitance_f);
        near(result.covariance_h_f, -l.standard_uncertainty * c.standard_uncertainty, 1e-6);
    }
}

/// What all capacitors share does not average out, and the time base cancels from the capacitance.
#[test]
fn what_is_common_does_not_shrink_with_the_number_of_points() {
    let many: Vec<f64> = (0..12).map(|index| 40e-12 * f64::from(index)).collect();
    let points = exact_points(INDUCTANCE_H, CAPACITANCE_F, &many, [0.0, 1e-8]);
    let common = AddedOptions { common_meter: 0.005, ..AddedOptions::default() };
    let result = added_capacitors(&points, &common).unwrap();
    near(result.inductance_h.relative_uncertainty(), 0.005, 1e-3);
    near(result.node_capacitance_f.relative_uncertainty(), 0.005, 1e-3);
    let clock = AddedOptions { time_base: 0.001, ..AddedOptions::default() };
    let result = added_capacitors(&points, &clock).unwrap();
    near(result.inductance_h.relative_uncertainty(), 0.002, 1e-3);
    assert!(result.node_capacitance_f.relative_uncertainty() < 1e-6, "{result:?}");
    // Leads shift every capacitor but not the bare node: a pair feels all of it, relative to its capacitor.
    let lead_stray_f = Measured { value: 0.0, standard_uncertainty: 1e-12 };
    let leads = AddedOptions { lead_stray_f, ..AddedOptions::default() };
    let pair = added_capacitors(&points[..4][..].iter().step_by(3).copied().collect::<Vec<_>>(), &leads).unwrap();
    near(pair.node_capacitance_f.relative_uncertainty(), 1.0 / 120.0, 1e-5);
    // A stated stray itself is part of what was added.
    let lead_stray_f = Measured::exact(2e-12);
    let with_leads: Vec<AddedPoint> = many
        .iter()
        .map(|&added| {
            let leads = if added > 0.0 { 2e-12 } else { 0.0 };
            let ring = frequency_hz(INDUCTANCE_H, CAPACITANCE_F + added + leads);
            point(measured(added, 0.01), measured(ring, 1e-5))
        })
        .collect();
    let result = added_capacitors(&with_leads, &AddedOptions { lead_stray_f, ..AddedOptions::default() }).unwrap();
    near(result.node_capacitance_f.value, CAPACITANCE_F, 1e-9);
}

/// Pearson's data with York's weights (Canadian Journal of Physics 44, 1079, 1966), the usual benchmark of a line with errors in
/// both coordinates: intercept 5.47991, slope -0.480533, sum of squares 11.8664 [M]; standard errors of York et al. 2004 0.2949
/// and 0.0580 [M].
#[test]
fn yorks_benchmark_is_reproduced() {
    let x = [0.0, 0.9, 1.8, 2.6, 3.3, 4.4, 5.2, 6.1, 6.5, 7.4];
    let y = [5.9, 5.4, 4.4, 4.6, 3.5, 3.7, 2.8, 2.8, 2.4, 1.5];
    let weights_x = [1e3, 1e3, 5e2, 8e2, 2e2, 8e1, 6e1, 2e1, 1.8, 1.0];
    let weights_y = [1.0, 1.8, 4.0, 8.0, 20.0, 20.0, 70.0, 70.0, 100.0, 500.0];
    let variances = |weights: [f64; 10]| DMatrix::from_diagonal(&DVector::from(weights.map(f64::recip).to_vec()));
    let line = StraightLine::through(&x, &y, &variances(weights_x), &variances(weights_y)).unwrap();
    near(line.intercept, 5.47991, 1e-6);
    near(line.slope, -0.480533, 2e-6);
    near(line.chi_square, 11.8664, 1e-5);
    near(line.covariance[0][0].sqrt(), 0.2949, 2e-2);
    near(line.covariance[1][1].sqrt(), 0.0580, 2e-2);
}

/// SciPy's orthogonal distance regression minimises the same sum of squares.
#[test]
fn scipy_draws_the_same_line() {
    if !need_python("scipy") {
        return;
    }
    let mut maker = Maker::new(11);
    for count in [3, 6, 15] {
        let [mut x, mut y, mut sx, mut sy] = [(); 4].map(|()| Vec::new());
        for index in 0..count {
            let (u, v) = (maker.between(0.05, 0.4), maker.between(0.05, 0.4));
            x.push(f64::from(index) + u * maker.normal());
            y.push(2.0 + 1.3 * f64::from(index) + v * maker.normal());
            sx.push(u);
            sy.push(v);
        }
        let script = format!(
            "import warnings; warnings.simplefilter('ignore')\nfrom scipy import odr\n\
             data = odr.RealData({x:?}, {y:?}, sx={sx:?}, sy={sy:?})\n\
             out = odr.ODR(data, odr.Model(lambda b, x: b[0] + b[1] * x), beta0=[2, 1.3], sstol=1e-15, partol=1e-15).run()\n\
             c = out.cov_beta\nprint(out.beta[0], out.beta[1], c[0][0], c[0][1], c[1][1], out.sum_square)"
        );
        let output = Command::new("python3").args(["-c", &script]).output().unwrap();
        let text = String::from_utf8(output.stdout).unwrap();
        let theirs: Vec<f64> = text.split_whitespace().map(|number| number.parse().unwrap()).collect();
        assert_eq!(theirs.len(), 6, "{}", String::from_utf8_lossy(&output.stderr));
        let variances = |s: &[f64]| DMatrix::from_diagonal(&DVector::from_iterator(s.len(), s.iter().map(|s| s * s)));
        let line = StraightLine::through(&x, &y, &variances(&sx), &variances(&sy)).unwrap();
        near(line.intercept, theirs[0], 1e-6);
        near(line.slope, theirs[1], 1e-6);
        near(line.chi_square, theirs[5], 1e-6);
        // Theirs linearises at the fitted points too, but keeps a curvature term that is small where the line fits.
        near(line.covariance[0][0], theirs[2], 0.1);
        near(line.covariance[0][1], theirs[3], 0.1);
        near(line.covariance[1][1], theirs[4], 0.1);
    }
}

/// A way to measure a node, again and again.
struct Trials {
    what: &'static str,
    added_f: &'static [f64],
    capacitor: f64,
    frequency: f64,
    rectangular: bool,
    common: AddedOptions,
}

impl Trials {
    /// One measurement with errors as large as stated.
    fn once(&self, maker: &mut Maker) -> Vec<AddedPoint> {
        let (gain, clock) =
            (1.0 + self.common.common_meter * maker.normal(), 1.0 + self.common.time_base * maker.normal());
        let leads = self.common.lead_stray_f.value + self.common.lead_stray_f.standard_uncertainty * maker.normal();
        let mut one = |&stated: &f64| {
            let own = if self.rectangular { 3f64.sqrt() * maker.between(-1.0, 1.0) } else { maker.normal() };
            let leads = if stated > 0.0 { leads } else { 0.0 };
            let real = stated * (1.0 + self.capacitor * own) * gain + leads;
            let ring = frequency_hz(INDUCTANCE_H, CAPACITANCE_F + real) * clock;
            let u = self.frequency * ring;
            let frequency = Measured { value: ring + u * maker.normal(), standard_uncertainty: u };
            point(measured(stated, self.capacitor), frequency)
        };
        self.added_f.iter().map(&mut one).collect()
    }

    /// Share of trials whose 95 % intervals hold inductance, capacitance, and whose ellipse holds both.
    fn coverage(&self, trials: usize) -> [f64; 3] {
        let mut maker = Maker::new(20);
        let mut held = [0; 3];
        for _ in 0..trials {
            let result =
                added_capacitors(&self.once(&mut maker), &self.common).unwrap_or_else(|e| panic!("{}: {e}", self.what));
            let both = [(result.inductance_h, INDUCTANCE_H), (result.node_capacitance_f, CAPACITANCE_F)];
            let [l, c] = both.map(|(measured, truth)| (measured.value - truth) / measured.standard_uncertainty);
            // The product is often known far better than either: the ellipse stands in the logarithms, where that is a line.
            let [ln_l, ln_c] =
                both.map(|(measured, truth)| (measured.value / truth).ln() / measured.relative_uncertainty());
            let r =
                result.covariance_h_f / both.iter().map(|(measured, _)| measured.standard_uncertainty).product::<f64>();
            let distance = (ln_l * ln_l - 2.0 * r * ln_l * ln_c + ln_c * ln_c) / (1.0 - r * r);
            // Chi-square of two degrees of freedom: -2 ln 0.05.
            for (held, inside) in held.iter_mut().zip([l.abs() < 1.959964, c.abs() < 1.959964, distance < 5.991465]) {
                *held += usize::from(inside);
            }
        }
        held.map(|held| held as f64 / trials as f64)
    }
}

#[test]
fn intervals_hold_the_truth_as_often_as_they_say() {
    let shared = AddedOptions {
        lead_stray_f: Measured { value: 1e-12, standard_uncertainty: 1e-12 },
        common_meter: 0.01,
        time_base: 0.002,
        ..AddedOptions::default()
    };
    let none = AddedOptions::default();
    let cells = [
        ("a pair", &[0.0, 220e-12][..], 0.01, 1e-3, false, none),
        ("a pair of little shift", &[0.0, 47e-12], 0.005, 4e-3, false, none),
        ("three points, the frequency to blame", &[0.0, 100e-12, 220e-12], 1e-4, 5e-3, false, none),
        ("five points, the capacitors to blame", &[0.0, 47e-12, 100e-12, 150e-12, 220e-12], 0.03, 2e-4, false, none),
        ("five points that share everything", &[0.0, 47e-12, 100e-12, 150e-12, 220e-12], 0.005, 1e-3, false, shared),
        ("no bare node", &[47e-12, 150e-12, 360e-12], 0.005, 1e-3, false, shared),
        ("capacitors within a tolerance", &[0.0, 100e-12, 150e-12, 220e-12], 0.02, 2e-3, true, none),
    ];
    for (what, added_f, capacitor, frequency, rectangular, common) in cells {
        let trials = Trials { what, added_f, capacitor, frequency, rectangular, common };
        let shares = trials.coverage(4000);
        println!("{what}: inductance {:.4}, capacitance {:.4}, both {:.4}", shares[0], shares[1], shares[2]);
        assert!(shares.iter().all(|share| (share - 0.95).abs() <= 0.015), "{what}: {shares:?}");
    }
}

/// Of four points chi-square has two degrees of freedom, for which the probability of a worse line is uniform.
#[test]
fn the_goodness_of_the_line_is_uniform_where_everything_is_right() {
    let added_f = &[0.0, 100e-12, 150e-12, 220e-12];
    let common = AddedOptions::default();
    let trials = Trials { what: "four points", added_f, capacitor: 0.01, frequency: 2e-3, rectangular: false, common };
    let mut maker = Maker::new(21);
    let mut probabilities: Vec<f64> =
        (0..2000).map(|_| plain(&trials.once(&mut maker)).unwrap().probability.unwrap()).collect();
    probabilities.sort_by(f64::total_cmp);
    let furthest = probabilities.iter().enumerate().map(|(index, p)| (p - index as f64 / 2000.0).abs());
    // Kolmogorov's limit at 1 %: 1.63 / sqrt(n).
    assert!(furthest.fold(0.0, f64::max) < 1.63 / 2000f64.sqrt());
}

#[test]
fn points_off_the_line_are_doubted_and_less_sure() {
    let mut points = exact_points(INDUCTANCE_H, CAPACITANCE_F, &[0.0, 100e-12, 220e-12, 360e-12], [1e-3, 1e-4]);
    let before = plain(&points).unwrap();
    assert!(before.doubts.len() == 1 && before.probability.unwrap() > 0.999, "{before:?}");
    // Somebody took 110 pF for 100 pF.
    points[1].frequency_hz.value = frequency_hz(INDUCTANCE_H, CAPACITANCE_F + 110e-12);
    let after = plain(&points).unwrap();
    assert!(after.doubts.iter().any(|doubt| doubt.name == AddedDoubtName::NotALine), "{after:?}");
    assert!(after.node_capacitance_f.standard_uncertainty > 5.0 * before.node_capacitance_f.standard_uncertainty);
    let off = (after.node_capacitance_f.value - CAPACITANCE_F).abs();
    assert!(off < 2.0 * after.node_capacitance_f.standard_uncertainty, "{after:?}");
}

#[test]
fn what_says_nothing_is_refused_with_what_to_change() {
    let refused = |points: &[AddedPoint]| plain(points).unwrap_err();
    let good = exact_points(INDUCTANCE_H, CAPACITANCE_F, &[0.0, 220e-12], [0.01, 1e-3]);
    assert_eq!(refused(&[]), AddedRefusal::TooFewCapacitors(0));
    assert_eq!(refused(&good[..1]), AddedRefusal::TooFewCapacitors(1));
    assert_eq!(refused(&[good[1], good[1]]), AddedRefusal::TooFewCapacitors(1));
    let mut swapped = good.clone();
    (swapped[0].frequency_hz, swapped[1].frequency_hz) = (good[1].frequency_hz, good[0].frequency_hz);
    let refusal = refused(&swapped);
    assert!(matches!(refusal, AddedRefusal::NotFalling { .. }), "{refusal}");
    assert!(refusal.to_string().contains("between drain and source"), "{refusal}");
    let refusal = refused(&exact_points(INDUCTANCE_H, CAPACITANCE_F, &[0.0, 2e-12], [0.01, 1e-3]));
    assert!(matches!(refusal, AddedRefusal::ShiftTooSmall { .. }), "{refusal}");
    // 1.25 and 3 times the node's 120 pF stretch the period 1.5 and 2 times.
    assert!(refusal.to_string().contains("1.5 to 2 times, with a capacitor of about 150 pF to 360 pF"), "{refusal}");
    let small = plain(&exact_points(INDUCTANCE_H, CAPACITANCE_F, &[0.0, 47e-12], [0.01, 1e-4])).unwrap();
    assert_eq!(
        small.doubts.iter().map(|d| d.name).collect::<Vec<_>>(),
        [AddedDoubtName::VoltagesUnknown, AddedDoubtName::SmallShift]
    );
    for (value, uncertainty) in [(0.0, 1.0), (f64::NAN, 1.0), (1e6, 0.0), (1e6, f64::INFINITY), (-1e6, 1.0)] {
        let mut points = good.clone();
        points[1].frequency_hz = Measured { value, standard_uncertainty: uncertainty };
        assert!(matches!(refused(&points), AddedRefusal::Unusable { record: 2, .. }), "{value} {uncertainty}");
    }
    let mut points = good.clone();
    points[1].capacitance_f.value = -1e-12;
    assert!(matches!(refused(&points), AddedRefusal::Unusable { record: 2, .. }));
    points[1].capacitance_f = Measured::exact(220e-12);
    assert!(plain(&points).unwrap().doubts.iter().any(|doubt| doubt.name == AddedDoubtName::CapacitorExact));
}

/// A node of which a third is an abrupt junction: `C = C_constant + C_junction (V / 300 V)^-1/2`.
fn junction_node(bulk_v: f64) -> f64 {
    CAPACITANCE_F * (2.0 / 3.0 + (bulk_v / 300.0).powf(-0.5) / 3.0)
}

fn at_voltages(voltages_v: [f64; 3], reflected_v: [f64; 3]) -> Vec<AddedPoint> {
    let added_f = [0.0, 120e-12, 300e-12];
    (0..3)
        .map(|index| {
            let ring = frequency_hz(INDUCTANCE_H, junction_node(voltages_v[index]) + added_f[index]);
            AddedPoint {
                bulk_voltage_v: Some(Measured { value: voltages_v[index], standard_uncertainty: 0.1 }),
                reflected_voltage_v: Some(Measured::exact(reflected_v[index])),
                ..point(measured(added_f[index], 2e-3), measured(ring, 2e-4))
            }
        })
        .collect()
}

#[test]
fn records_of_other_voltages_are_refused_or_corrected() {
    let matching = plain(&at_voltages([300.0; 3], [95.0; 3])).unwrap();
    assert_eq!((matching.doubts.len(), matching.bulk_voltage_v), (0, Some(300.0)));
    let refusal = plain(&at_voltages([300.0, 300.0, 270.0], [95.0; 3])).unwrap_err();
    assert!(refusal.to_string().starts_with("the bulk voltage is 270.0 V"), "{refusal}");
    assert!(refusal.to_string().contains("same line voltage and load"), "{refusal}");
    let refusal = plain(&at_voltages([300.0; 3], [95.0, 95.0, 80.0])).unwrap_err();
    assert!(refusal.to_string().starts_with("the reflected voltage is 80.0 V"), "{refusal}");
    // Within the tolerance the intervals allow for what the voltage may have done.
    for voltages in [[300.0, 303.0, 297.5], [300.0, 295.0, 294.2]] {
        let close = plain(&at_voltages(voltages, [95.0; 3]));
        let close = close.unwrap_or_else(|refusal| panic!("{refusal}"));
        let off =
            (close.node_capacitance_f.value - CAPACITANCE_F).abs() / close.node_capacitance_f.standard_uncertainty;
        assert!(off < 1.96, "{off}: {close:?}");
        assert!(close.node_capacitance_f.standard_uncertainty > matching.node_capacitance_f.standard_uncertainty);
    }
    let slope = {
        let ring = |bulk_v: f64| frequency_hz(INDUCTANCE_H, junction_node(bulk_v));
        (ring(301.0) - ring(299.0)) / 2.0
    };
    let frequency_slope_hz_per_v = Some(measured(slope, 0.05));
    let options = AddedOptions { frequency_slope_hz_per_v, ..AddedOptions::default() };
    let points = at_voltages([300.0, 290.0, 280.0], [95.0; 3]);
    let corrected = added_capacitors(&points, &options).unwrap();
    near(corrected.node_capacitance_f.value, CAPACITANCE_F, 1e-3);
    near(corrected.inductance_h.value, INDUCTANCE_H, 1e-3);
    // Without the correction the same points would be five times as far off.
    let blind: Vec<AddedPoint> = points.iter().map(|point| AddedPoint { bulk_voltage_v: None, ..*point }).collect();
    assert!((plain(&blind).unwrap().node_capacitance_f.value / CAPACITANCE_F - 1.0).abs() > 5e-3);
    let far = added_capacitors(&at_voltages([300.0, 290.0, 240.0], [95.0; 3]), &options).unwrap_err();
    assert!(far.to_string().contains("further than a slope can correct"), "{far}");
}

proptest! {
    #[test]
    fn exact_points_give_back_what_they_were_made_of(
        inductance in -6.0..-2.0_f64,
        capacitance in -11.5..-8.5_f64,
        shares in prop::collection::vec(0.5..4.0_f64, 1..6),
        capacitor in 1e-4..0.02_f64,
        frequency in 1e-6..1e-3_f64,
    ) {
        let (inductance, capacitance) = (10f64.powf(inductance), 10f64.powf(capacitance));
        let added: Vec<f64> = [0.0].into_iter().chain(shares.iter().map(|share| share * capacitance)).collect();
        let points = exact_points(inductance, capacitance, &added, [capacitor, frequency]);
        let result = plain(&points).unwrap();
        prop_assert!((result.inductance_h.value / inductance - 1.0).abs() < 1e-9);
        prop_assert!((result.node_capacitance_f.value / capacitance - 1.0).abs() < 1e-9);
        let mut reversed = points.clone();
        reversed.reverse();
        let again = plain(&reversed).unwrap();
        prop_assert!((again.node_capacitance_f.value / result.node_capacitance_f.value - 1.0).abs() < 1e-9);
        // One more point never makes it less sure.
        if points.len() > 2 {
            let fewer = plain(&points[..points.len() - 1]).unwrap();
            let grown = result.inductance_h.standard_uncertainty / fewer.inductance_h.standard_uncertainty;
            prop_assert!(grown < 1.0 + 1e-9, "{grown}");
        }
        // Correlation is one.
        let (l, c) = (result.inductance_h.standard_uncertainty, result.node_capacitance_f.standard_uncertainty);
        prop_assert!(result.covariance_h_f.abs() <= l * c * (1.0 + 1e-9));
    }

    #[test]
    fn whatever_comes_in_no_number_goes_out_that_is_none(
        points in prop::collection::vec(
            (-1e-10..1e-9_f64, 0.0..1e-11_f64, -1e5..1e7_f64, 0.0..1e5_f64, 0.0..500.0_f64), 0..6),
    ) {
        let points: Vec<AddedPoint> = points
            .into_iter()
            .map(|(c, uc, f, uf, v)| AddedPoint {
                bulk_voltage_v: Some(Measured::exact(v)),
                ..point(Measured { value: c, standard_uncertainty: uc }, Measured { value: f, standard_uncertainty: uf })
            })
            .collect();
        match plain(&points) {
            Ok(result) => {
                for value in [result.inductance_h, result.node_capacitance_f] {
                    prop_assert!(value.value > 0.0 && value.value.is_finite());
                    prop_assert!(value.standard_uncertainty > 0.0 && value.standard_uncertainty.is_finite());
                }
            }
            Err(refusal) => prop_assert!(refusal.to_string().len() > 40),
        }
    }
}
