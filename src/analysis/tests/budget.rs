//! Budgets against the worked examples of JCGM 100:2008 and JCGM 101:2008 and against two libraries of general purpose.
//! Data and figures marked [M] are from memory of those documents; the libraries find the same from the same data.

use crate::need::need_python;
use ringstep_analysis::{
    budget::{Budget, Input, Method, Model, numerical_tolerance},
    quantity::{Measured, Unit},
};
use serde_json::Value;
use std::{f64::consts::TAU, process::Command};

type Law = fn(&[f64]) -> f64;

fn known(value: f64, standard_uncertainty: f64) -> Measured {
    Measured { value, standard_uncertainty }
}

fn near(got: f64, stated: f64, within: f64) {
    assert!((got - stated).abs() <= within, "{got} is not within {within} of {stated}");
}

/// JCGM 100, H.1, table H.1 and H.1.3 [M]: length of an end gauge in nm.
fn end_gauge() -> Model<Law> {
    let inputs = vec![
        Input::observed("standard", "nm", known(50_000_623.0, 25.0), 18.0),
        Input::observed("repeated observations", "nm", known(215.0, 5.8), 24.0),
        Input::observed("comparator, random", "nm", known(0.0, 3.9), 5.0),
        Input::observed("comparator, systematic", "nm", known(0.0, 6.7), 8.0),
        Input::rectangular("expansion coefficient", "1/K", 11.5e-6, 2e-6),
        Input::normal("temperature of the bed", "K", known(-0.1, 0.41)),
        Input::rectangular("difference of expansion coefficients", "1/K", 0.0, 1e-6).with_degrees_of_freedom(50.0),
        Input::rectangular("difference of temperatures", "K", 0.0, 0.05).with_degrees_of_freedom(2.0),
    ];
    Model::new("length", "nm", inputs, |x| x[..4].iter().sum::<f64>() - x[0] * (x[6] * x[5] + x[4] * x[7]))
}

#[test]
fn end_gauge_of_jcgm_100_h1() {
    let budget = end_gauge().first_order().unwrap();
    near(budget.value, 50_000_838.0, 1e-6);
    near(budget.standard_uncertainty, 31.66, 0.005);
    near(budget.effective_degrees_of_freedom, 16.75, 0.005);
    let stated = [25.0, 5.8, 3.9, 6.7, 0.0, 0.0, 2.887, 16.599];
    for (component, stated) in budget.components.iter().zip(stated) {
        near(component.contribution, stated, 5e-4);
    }
    let second = end_gauge().second_order().unwrap();
    near(second.standard_uncertainty, 34.0, 0.5);
    // H.1.7: the two products that make the difference, stated as 11.7 nm and 1.7 nm from rounded figures [M].
    let added = second.standard_uncertainty.powi(2) - budget.standard_uncertainty.powi(2);
    let products = 50_000_623.0 / 3f64.sqrt() * (1e-6 * 0.41f64).hypot(2e-6 * 0.05 / 3f64.sqrt());
    near(added.sqrt(), products, 0.001);
    println!("first order {:.3} nm, second order {:.3} nm", budget.standard_uncertainty, second.standard_uncertainty);
}

/// JCGM 100, table H.2, as the documentation of GTC 1.5.1 prints it: volts, amperes, radians.
const OBSERVED: [[f64; 5]; 3] = [
    [5.007, 4.994, 5.005, 4.990, 4.999],
    [19.663e-3, 19.639e-3, 19.640e-3, 19.685e-3, 19.678e-3],
    [1.0456, 1.0438, 1.0468, 1.0428, 1.0433],
];

fn mean(x: &[f64]) -> f64 {
    x.iter().sum::<f64>() / x.len() as f64
}

fn correlation(x: &[f64], y: &[f64]) -> f64 {
    let product = |a: &[f64], b: &[f64]| -> f64 {
        let means = (mean(a), mean(b));
        a.iter().zip(b).map(|(a, b)| (a - means.0) * (b - means.1)).sum()
    };
    product(x, y) / (product(x, x) * product(y, y)).sqrt()
}

fn impedance(name: &str, law: Law) -> Budget {
    let inputs = ["voltage", "current", "phase"].iter().zip(["V", "A", "rad"]).zip(&OBSERVED);
    let inputs = inputs.map(|((name, unit), x)| Input::mean_of(name, unit, x)).collect();
    let r = |a: usize, b: usize| correlation(&OBSERVED[a], &OBSERVED[b]);
    let model = Model::new(name, Unit::Ohm, inputs, law);
    model.correlated(0, 1, r(0, 1)).correlated(0, 2, r(0, 2)).correlated(1, 2, r(1, 2)).first_order().unwrap()
}

fn impedances() -> [Budget; 3] {
    [
        impedance("resistance", |x| x[0] / x[1] * x[2].cos()),
        impedance("reactance", |x| x[0] / x[1] * x[2].sin()),
        impedance("impedance", |x| x[0] / x[1]),
    ]
}

#[test]
fn correlated_means_of_jcgm_100_h2() {
    let budgets = impedances();
    for (budget, (value, uncertainty)) in budgets.iter().zip([(127.732, 0.071), (219.847, 0.295), (254.260, 0.236)]) {
        near(budget.value, value, 6e-4);
        near(budget.standard_uncertainty, uncertainty, 6e-4);
        near(budget.effective_degrees_of_freedom, 4.0, 1e-9);
    }
    // H.2.4: correlations of the results, from their sensitivities to the same observations.
    let covariance = |a: &Budget, b: &Budget| -> f64 {
        let terms = (0..9).map(|n| (n / 3, n % 3)).map(|(i, j)| {
            let [x, y] = [&a.components[i], &b.components[j]];
            let uncertainties = x.input.standard_uncertainty * y.input.standard_uncertainty;
            x.sensitivity * y.sensitivity * uncertainties * correlation(&OBSERVED[i], &OBSERVED[j])
        });
        terms.sum::<f64>() / (a.standard_uncertainty * b.standard_uncertainty)
    };
    let [r, x, z] = &budgets;
    near(covariance(r, x), -0.588, 6e-4);
    near(covariance(r, z), -0.485, 6e-4);
    near(covariance(x, z), 0.993, 6e-4);
}

/// JCGM 100, table H.6, as the documentation of GTC 1.5.1 prints it: thermometer readings and corrections in degrees Celsius.
const READINGS: [[f64; 2]; 11] = [
    [21.521, -0.171],
    [22.012, -0.169],
    [22.512, -0.166],
    [23.003, -0.159],
    [23.507, -0.164],
    [23.999, -0.165],
    [24.513, -0.156],
    [25.002, -0.157],
    [25.503, -0.159],
    [26.010, -0.161],
    [26.511, -0.160],
];

/// Line through corrections at those readings, about 20 degrees: offset and slope.
fn line(corrections: &[f64]) -> [f64; 2] {
    let away: Vec<f64> = READINGS.iter().map(|[t, _]| t - 20.0).collect();
    let centre = mean(&away);
    let squares: f64 = away.iter().map(|t| (t - centre).powi(2)).sum();
    let slope = away.iter().zip(corrections).map(|(t, b)| (t - centre) * b).sum::<f64>() / squares;
    [mean(corrections) - slope * centre, slope]
}

fn correction_at_30_degrees() -> (Budget, Budget, Budget) {
    let corrections: Vec<f64> = READINGS.iter().map(|[_, b]| *b).collect();
    let [offset, slope] = line(&corrections);
    let residual = |[t, b]: &[f64; 2]| (b - offset - slope * (t - 20.0)).powi(2);
    let spread = (READINGS.iter().map(residual).sum::<f64>() / 9.0).sqrt();
    near(spread, 0.0035, 5e-5);
    let observations = |result: &str, law: Law| {
        let input = |(n, b): (usize, &f64)| Input::observed(&format!("b{n}"), "degC", known(*b, spread), 9.0);
        Model::new(result, "degC", corrections.iter().enumerate().map(input).collect(), law).first_order().unwrap()
    };
    let (at_20, slope) = (observations("offset", |b| line(b)[0]), observations("slope", |b| line(b)[1]));
    let pairs = at_20.components.iter().zip(&slope.components);
    let covariance: f64 = pairs.map(|(a, b)| a.sensitivity * b.sensitivity * spread * spread).sum();
    let correlation = covariance / (at_20.standard_uncertainty * slope.standard_uncertainty);
    near(correlation, -0.930, 5e-4);
    let inputs = vec![
        Input::observed("offset", "degC", at_20.measured(), 9.0),
        Input::observed("slope", "degC/K", slope.measured(), 9.0),
    ];
    let model = Model::new("correction", "degC", inputs, |y| y[0] + 10.0 * y[1]).correlated(0, 1, correlation);
    (at_20, slope, model.first_order().unwrap())
}

#[test]
fn calibration_line_of_jcgm_100_h3() {
    let (offset, slope, at_30) = correction_at_30_degrees();
    near(offset.value, -0.1712, 5e-5);
    near(offset.standard_uncertainty, 0.0029, 5e-5);
    near(slope.value, 0.00218, 5e-6);
    near(slope.standard_uncertainty, 0.00067, 5e-6);
    // H.3.4 [M]: -0.1494 with 0.0041 on 9 degrees of freedom.
    near(at_30.value, -0.1494, 5e-5);
    near(at_30.standard_uncertainty, 0.0041, 5e-5);
    near(at_30.effective_degrees_of_freedom, 9.0, 1e-9);
}

fn sum_of(inputs: Vec<Input>) -> Model<Law> {
    Model::new("sum", "", inputs, |x| x.iter().sum())
}

fn rectangles(standard_uncertainties: [f64; 4]) -> Model<Law> {
    let input = |(n, u): (usize, f64)| Input::rectangular(&format!("x{n}"), "", 0.0, u * 3f64.sqrt());
    sum_of(standard_uncertainties.into_iter().enumerate().map(input).collect())
}

/// JCGM 101, 9.2.2 and 9.2.3 [M]; the exact end of the second is 2 sqrt(3) (2 - 0.6^(1/4)).
#[test]
fn four_alike_of_jcgm_101_9_2() {
    let normal = sum_of((0..4).map(|n| Input::normal(&format!("x{n}"), "", known(0.0, 1.0))).collect());
    let (first, trials) = (normal.first_order().unwrap(), normal.monte_carlo(1_000_000, 1).unwrap());
    near(first.high, 3.92, 0.005);
    near(trials.symmetric[1], 3.92, 0.02);
    assert!(!trials.nonlinear(&first));

    let model = rectangles([1.0; 4]);
    let (first, trials) = (model.first_order().unwrap(), model.monte_carlo(1_000_000, 2).unwrap());
    near(first.high, 3.92, 0.005);
    near(trials.standard_uncertainty, 2.0, 0.005);
    let exact = 2.0 * 3f64.sqrt() * (2.0 - 0.6f64.powf(0.25));
    for (end, spread) in [-trials.symmetric[0], trials.symmetric[1]].into_iter().zip(trials.end_uncertainty) {
        near(end, exact, 4.0 * spread);
    }
    near(exact, 3.88, 0.005);
    // The difference of 0.04 is within the tolerance of two digits, 0.05.
    assert!(!trials.nonlinear(&first));
}

/// JCGM 101, 9.2.4 [M].
#[test]
fn one_dominant_rectangle_of_jcgm_101_9_2_4() {
    let model = rectangles([1.0, 1.0, 1.0, 10.0]);
    let (first, trials) = (model.first_order().unwrap(), model.monte_carlo(500_000, 3).unwrap());
    near(first.standard_uncertainty, 10.15, 0.005);
    near(first.high, 19.9, 0.05);
    near(trials.standard_uncertainty, 10.15, 0.02);
    near(trials.symmetric[0], -17.0, 0.05);
    near(trials.symmetric[1], 17.0, 0.05);
    assert!(trials.nonlinear(&first));
    let chosen = model.budget(500_000, 3).unwrap();
    assert_eq!((chosen.method, chosen.high), (Method::MonteCarlo, trials.symmetric[1]));
}

/// JCGM 101, 9.3 [M]: deviation from the nominal mass in mg, weighed against a reference in air.
#[test]
fn mass_calibration_of_jcgm_101_9_3() {
    let inputs = vec![
        Input::normal("reference", "mg", known(100_000.0, 0.050)),
        Input::normal("balancing mass", "mg", known(1.234, 0.020)),
        Input::rectangular("air density", "kg/m3", 1.2, 0.1),
        Input::rectangular("density of the weight", "kg/m3", 8000.0, 1000.0),
        Input::rectangular("density of the reference", "kg/m3", 8000.0, 50.0),
    ];
    let deviation: Law = |x| (x[0] + x[1]) * (1.0 + (x[2] - 1.2) * (1.0 / x[3] - 1.0 / x[4])) - 100_000.0;
    let model = Model::new("deviation", "mg", inputs, deviation);
    let (first, second) = (model.first_order().unwrap(), model.second_order().unwrap());
    let trials = model.monte_carlo(1_000_000, 4).unwrap();
    println!("{trials:?}\nsecond order {:.4} mg", second.standard_uncertainty);
    near(first.standard_uncertainty, 0.0539, 5e-5);
    near(second.standard_uncertainty, 0.0750, 1e-4);
    near(trials.mean, 1.234, 5e-4);
    near(trials.standard_uncertainty, 0.0754, 3e-4);
    near(trials.shortest[0], 1.083, 0.002);
    near(trials.shortest[1], 1.383, 0.002);
    near(trials.symmetric[0], 1.084, 0.002);
    near(trials.symmetric[1], 1.383, 0.002);
    // One significant digit confirms the second order but not the first.
    near(numerical_tolerance(trials.standard_uncertainty, 1), 0.005, 1e-12);
    assert!(trials.confirms(&second, 1) && !trials.confirms(&first, 1));
    assert!(trials.nonlinear(&first));
}

/// JCGM 101, 9.5 [M]: the end gauge with an arcsine temperature swing and rectangles of uncertain limits, both made of
/// rectangles (6.4.6.4 and 6.4.3.4).
#[test]
fn gauge_block_of_jcgm_101_9_5() {
    let rectangle = |name: &str, value: f64, half_width: f64| Input::rectangular(name, "", value, half_width);
    let inputs = vec![
        Input::observed("standard", "nm", known(50_000_623.0, 25.0), 18.0),
        Input::observed("repeated observations", "nm", known(215.0, 6.0), 24.0),
        Input::observed("comparator, random", "nm", known(0.0, 4.0), 5.0),
        Input::observed("comparator, systematic", "nm", known(0.0, 7.0), 8.0),
        rectangle("expansion coefficient", 11.5e-6, 2e-6),
        Input::normal("mean temperature", "K", known(-0.1, 0.2)),
        rectangle("phase of the swing", 0.0, TAU / 2.0),
        rectangle("limit of the expansion coefficients", 0.5, 0.5),
        rectangle("place between them", 0.5, 0.5),
        rectangle("limit of the temperatures", 0.5, 0.5),
        rectangle("place between those", 0.5, 0.5),
    ];
    let length: Law = |x| {
        let trapezoid = |half_width: f64, blur: f64, r: [f64; 2]| {
            let limit = -half_width - blur + 2.0 * blur * r[0];
            limit - 2.0 * limit * r[1]
        };
        let (alpha, theta) = (trapezoid(1e-6, 0.1e-6, [x[7], x[8]]), trapezoid(0.05, 0.025, [x[9], x[10]]));
        x[..4].iter().sum::<f64>() - x[0] * (alpha * (x[5] + 0.5 * x[6].sin()) + x[4] * theta)
    };
    let trials = Model::new("length", "nm", inputs, length).monte_carlo(1_000_000, 5).unwrap();
    println!("{trials:?}");
    near(trials.mean, 50_000_838.0, 0.5);
    near(trials.standard_uncertainty, 36.0, 0.5);
    assert!(trials.nonlinear(&end_gauge().first_order().unwrap()));
}

/// The ring of scripts/check_uncertainty.py.
fn node_capacitance() -> Budget {
    let inputs = vec![
        Input::observed("ring frequency", Unit::Hertz, known(531.2e3, 41.0), 7.0),
        Input::rectangular("time base", Unit::One, 1.0, 25e-6),
        Input::rectangular("nominal inductance", Unit::Henry, 1.1e-3, 0.055e-3).with_degrees_of_freedom(12.0),
        Input::normal("probe capacitance", Unit::Farad, known(10e-12, 0.6e-12)),
    ];
    let law: Law = |x| 1.0 / ((TAU * x[0] * x[1]).powi(2) * x[2]) - x[3];
    Model::new("node capacitance", Unit::Farad, inputs, law).first_order().unwrap()
}

/// What `scripts/check_uncertainty.py` printed with uncertainties 3.2.3 and GTC 1.5.1.
const STORED: &str = include_str!("uncertainty_libraries.json");

fn relative(got: f64, stated: f64) -> f64 {
    (got / stated - 1.0).abs()
}

#[test]
fn libraries_of_general_purpose_find_the_same_budget() {
    let stored: Value = serde_json::from_str(STORED).unwrap();
    let mut ours = vec![end_gauge().first_order().unwrap(), correction_at_30_degrees().2, node_capacitance()];
    ours.extend(impedances());
    let names = ["end gauge", "correction at 30 degrees", "node capacitance", "resistance", "reactance", "impedance"];
    for (budget, name) in ours.iter().zip(names) {
        let figure = |library: &str, n: usize| stored[name][library][n].as_f64().unwrap();
        for library in ["uncertainties", "GTC"] {
            let value = relative(budget.value, figure(library, 0));
            let uncertainty = relative(budget.standard_uncertainty, figure(library, 1));
            println!("{name}, {library}: value {value:.1e}, uncertainty {uncertainty:.1e} apart");
            assert!(value < 1e-12 && uncertainty < 1e-7, "{name}: {value} {uncertainty} from {library}");
        }
        let freedom = relative(budget.effective_degrees_of_freedom, figure("GTC", 2));
        assert!(freedom < 1e-6, "{name}: degrees of freedom {freedom} from GTC");
    }
}

#[test]
fn the_stored_results_are_what_the_libraries_print() {
    if !need_python("uncertainties") || !need_python("GTC") {
        return;
    }
    let script = concat!(env!("CARGO_MANIFEST_DIR"), "/../../scripts/check_uncertainty.py");
    let output = Command::new("python3").arg(script).output().unwrap();
    let printed: Value = serde_json::from_slice(&output.stdout)
        .unwrap_or_else(|error| panic!("{error}: {}", String::from_utf8_lossy(&output.stderr)));
    let stored: Value = serde_json::from_str(STORED).unwrap();
    let names = |value: &Value| value.as_object().unwrap().keys().cloned().collect::<Vec<_>>();
    assert_eq!(names(&printed), names(&stored));
    for name in names(&stored) {
        for library in ["uncertainties", "GTC"] {
            let figures = |value: &Value| value[&name][library].as_array().unwrap().clone();
            assert_eq!(figures(&printed).len(), figures(&stored).len());
            for (now, then) in figures(&printed).iter().zip(&figures(&stored)) {
                let apart = relative(now.as_f64().unwrap(), then.as_f64().unwrap());
                assert!(apart < 1e-9, "{name}, {library}: {now} now, {then} stored");
            }
        }
    }
}
