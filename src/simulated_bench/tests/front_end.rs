//! What the oscilloscope sees through, piece by piece: bandwidth, compensation, overdrive, coupling, edge detector.

use ringstep_simulated_bench::instruments::scope::{
    front_end::FrontEnd,
    settings::{Channel, Coupling, Model, Probe, Settings, Slope},
    trigger::EdgeDetector,
};

const TRUE_PROBE: Probe = Probe { factor: 100.0, capacitance_f: 5e-12, offset_v: 0.0, miscompensation: 0.0 };

fn channel() -> Channel {
    Channel { scale_v: 100.0, probe_factor: 100.0, ..Settings::default().channels[0] }
}

/// A first-order lag passes `1/sqrt(1 + (f/fc)^2)` of a sine (textbook), whatever the steps it is given in.
#[test]
fn the_bandwidth_is_that_of_a_first_order_lag() {
    let model = Model::of_bits(8).unwrap();
    for (frequency_hz, limited) in [(1e6, false), (100e6, false), (20e6, true), (200e6, true)] {
        let front_end = FrontEnd::new(&model, TRUE_PROBE, &Channel { bandwidth_limit: limited, ..channel() });
        let corner_hz = if limited { 20e6 } else { 100e6 };
        let mut signal = front_end.rest(0.0, 0.0, 0.0);
        let (period_s, mut time_s, mut highest) = (1.0 / frequency_hz, 0.0, 0.0_f64);
        let mut step = 0;
        while time_s < 40.0 * period_s {
            time_s += period_s * [1.0 / 400.0, 1.0 / 150.0, 1.0 / 900.0][step % 3];
            step += 1;
            signal = front_end.next(&signal, time_s, (std::f64::consts::TAU * frequency_hz * time_s).sin());
            if time_s > 30.0 * period_s {
                highest = highest.max(front_end.at(&signal));
            }
        }
        let wanted = 1.0 / (1.0 + (frequency_hz / corner_hz).powi(2)).sqrt();
        assert!((highest / wanted - 1.0).abs() < 2e-3, "{frequency_hz} Hz: {highest} for {wanted}");
    }
}

#[test]
fn miscompensation_overshoots_and_settles() {
    let probe = Probe { miscompensation: 0.01, ..TRUE_PROBE };
    let front_end = FrontEnd::new(&Model::of_bits(8).unwrap(), probe, &channel());
    let mut signal = front_end.rest(0.0, 0.0, 0.0);
    let mut shown = |until_s: f64| {
        while signal.time_s < until_s {
            signal = front_end.next(&signal, signal.time_s + 20e-9, 100.0);
        }
        front_end.at(&signal)
    };
    assert!((shown(1e-6) - 101.0).abs() < 0.05);
    assert!((shown(2e-3) - 100.0).abs() < 0.01);
}

#[test]
fn an_overdriven_input_takes_a_while_to_recover() {
    let front_end = FrontEnd::new(&Model::of_bits(8).unwrap(), TRUE_PROBE, &Channel { scale_v: 5.0, ..channel() });
    let mut signal = front_end.rest(0.0, 0.0, 0.0);
    let mut shown = |until_s: f64, volts: f64| {
        while signal.time_s < until_s {
            signal = front_end.next(&signal, signal.time_s + 1e-9, volts);
        }
        front_end.at(&signal)
    };
    shown(1e-6, 300.0);
    let soon_v = shown(1.05e-6, 0.0);
    assert!(soon_v > 0.5, "{soon_v} V at 5 V a division");
    assert!(shown(2e-6, 0.0).abs() < 0.01);
}

#[test]
fn alternating_coupling_takes_the_bulk_voltage_away() {
    let model = Model::of_bits(8).unwrap();
    let front_end = FrontEnd::new(&model, TRUE_PROBE, &Channel { coupling: Coupling::Ac, ..channel() });
    let signal = front_end.rest(0.0, 325.0, 325.0);
    assert!(front_end.at(&front_end.next(&signal, 1e-6, 325.0)).abs() < 1e-9);
    assert!((front_end.at(&front_end.next(&signal, 1e-6, 425.0)) - 100.0).abs() < 3.0);
}

#[test]
fn every_edge_starts_the_holdoff_anew() {
    let mut edges = EdgeDetector::new(0.5, Slope::Positive, 0.1, 2.5, 0.0);
    // A square wave of period one, with a gap of three.
    let high = |t: f64| (t % 1.0 < 0.5 && !(5.0..8.0).contains(&t)) as u8;
    let found: Vec<(f64, bool)> = (1..1000)
        .filter_map(|step| {
            let t = f64::from(step) * 0.01;
            edges.next(t, f64::from(high(t)))
        })
        .map(|edge| (edge.time_s.round(), edge.accepted))
        .collect();
    let accepted: Vec<f64> = found.iter().filter(|(_, accepted)| *accepted).map(|(t, _)| *t).collect();
    assert_eq!(accepted, [8.0], "{found:?}");
}
