//! The converter between captures: start from zero, ripple, regulation, overload, switching off.

use crate::trace::{board, settled};
use ringstep_simulated_bench::converter::{LoadDemand, Plant};

fn started(name: &str, line_v: f64, limit_a: f64, load: LoadDemand) -> Plant {
    let mut plant = Plant::new(board(name), 1);
    plant.set_load(load);
    plant.set_line(true, line_v, 50.0, limit_a);
    plant
}

#[test]
fn it_starts_from_zero_with_an_inrush_that_the_source_limits_and_a_soft_output() {
    let mut plant = started("beacon", 230.0, 1.0, LoadDemand::Current(0.1));
    assert_eq!((plant.bulk_voltage(), plant.output_voltage()), (0.0, 0.0));
    plant.advance(3e-3);
    assert!(plant.line_limiting(), "inrush");
    let mut last_v = 0.0;
    for _ in 0..60 {
        plant.advance(0.5e-3);
        assert!(plant.output_voltage() >= last_v - 0.05 && plant.output_voltage() - last_v < 3.0, "soft start");
        last_v = plant.output_voltage();
    }
    plant.advance(0.2);
    assert!((plant.output_voltage() - 12.0).abs() < 0.1, "{} V", plant.output_voltage());
    assert!(!plant.line_limiting(), "inrush is over");
}

/// The peak of 265 V is 375 V, less the bridge.
#[test]
fn the_bulk_capacitor_reaches_the_peak_of_the_line_at_light_load() {
    let plant = settled("foghorn", 1, 265.0, 0.0);
    assert!((plant.bulk_voltage() - 375.0).abs() < 3.0, "{} V", plant.bulk_voltage());
}

#[test]
fn bulk_ripple_has_twice_the_line_frequency_and_grows_with_load() {
    let ripple = |load_a: f64| {
        let mut plant = settled("beacon", 1, 120.0, load_a);
        let half: Vec<f64> = (0..100)
            .map(|_| {
                plant.advance(100e-6);
                plant.bulk_voltage()
            })
            .collect();
        plant.advance(1e-9);
        let (low, high) = half.iter().fold((f64::MAX, 0.0_f64), |(low, high), v| (low.min(*v), high.max(*v)));
        plant.advance(100e-6);
        assert!((plant.bulk_voltage() - half[0]).abs() < 0.05 * (high - low) + 0.01, "period of 10 ms");
        high - low
    };
    let (light_v, heavy_v) = (ripple(0.1), ripple(2.0));
    // The capacitor alone feeds the load for most of half a period: dV = P t / (C V), with t between 5 ms and 10 ms.
    let held_v = |t_s: f64| 28.0 * t_s / (68e-6 * 155.0);
    assert!((held_v(5e-3)..held_v(10e-3)).contains(&heavy_v), "{heavy_v} V");
    assert!(light_v < 0.15 * heavy_v);
}

#[test]
fn power_from_the_line_exceeds_the_output_by_plausible_losses() {
    for (name, load_a) in [("beacon", 1.5), ("foghorn", 1.2), ("tidegauge", 1.5), ("winch", 2.0), ("pumphouse", 2.0)] {
        let plant = settled(name, 1, 230.0, load_a);
        let efficiency = plant.output_voltage() * plant.output_current() / plant.line_power();
        assert!((0.75..0.95).contains(&efficiency), "{name}: {efficiency}");
        assert!(plant.line_current_rms() * 230.0 > plant.line_power(), "{name}: power factor below one");
    }
}

#[test]
fn averaged_and_stepped_output_agree() {
    for (name, load_a) in [("beacon", 1.0), ("foghorn", 0.05), ("tidegauge", 0.1), ("winch", 0.3), ("pumphouse", 1.5)] {
        let plant = settled(name, 1, 230.0, load_a);
        let stepper = plant.stepper(1);
        let off = stepper.state().output_v / plant.output_voltage() - 1.0;
        assert!(off.abs() < 0.005, "{name}: {off}");
    }
}

#[test]
fn an_overload_shuts_down_and_is_retried() {
    let mut plant = started("beacon", 230.0, 4.0, LoadDemand::Current(1.0));
    plant.advance(0.3);
    plant.set_load(LoadDemand::Current(5.0));
    let voltages: Vec<f64> = (0..1500)
        .map(|_| {
            plant.advance(1e-3);
            plant.output_voltage()
        })
        .collect();
    let collapses = voltages.windows(2).filter(|pair| pair[0] > 1.0 && pair[1] <= 1.0).count();
    assert!((2..=5).contains(&collapses), "{collapses} collapses in 1.5 s");
    plant.set_load(LoadDemand::Resistance(12.0));
    plant.advance(1.0);
    assert!((plant.output_voltage() - 12.0).abs() < 0.1, "recovers");
    assert!((plant.output_current() - 1.0).abs() < 0.02);
}

#[test]
fn without_line_the_output_falls_and_the_bulk_bleeds_down() {
    let mut plant = settled("tidegauge", 1, 265.0, 0.5);
    plant.set_line(false, 265.0, 50.0, 4.0);
    plant.advance(5.0);
    assert!(plant.output_voltage() < 0.1, "{} V", plant.output_voltage());
    assert!(plant.bulk_voltage() < 60.0, "{} V", plant.bulk_voltage());
    assert!(plant.line_power() < 1e-6 && plant.line_current_rms() < 1e-3);
}
