//! What is held against ratings and limits before anything is energised: a pure function of the three files.

use super::Plan;
use crate::station::{Board, Clamp, Role, Station};

/// One thing that was checked.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct PreflightCheck {
    /// What was checked.
    pub check: &'static str,
    /// Whether it holds; one that does not refuses the run.
    pub passed: bool,
    /// Whether it holds but is worth an operator's attention.
    pub noted: bool,
    /// The figures, and the reason where it does not hold.
    pub detail: String,
}

impl PreflightCheck {
    pub(super) fn hold(check: &'static str, holds: bool, detail: String) -> Self {
        Self { check, passed: holds, noted: false, detail }
    }

    fn note(check: &'static str, detail: String) -> Self {
        Self { check, passed: true, noted: true, detail }
    }
}

/// Whether somebody is at the bench to answer.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Attendance {
    /// An operator answers at the terminal.
    Attended,
    /// Nobody does: what must be set by hand is refused.
    Unattended,
}

/// Holds plan and board against the station. The run is refused where any check has not passed.
pub fn preflight(station: &Station, board: &Board, plan: &Plan, attendance: Attendance) -> Vec<PreflightCheck> {
    let mut checks = earthing(station);
    checks.extend(by_hand(station, attendance));
    checks.extend(line(station, board, plan));
    checks.extend(load(station, board, plan));
    match expected_stress(board, plan) {
        Ok(stress) => checks.extend(stress_checks(station, board, plan, &stress)),
        Err(reason) => checks.push(PreflightCheck::hold("peak drain voltage", false, reason)),
    }
    if let Some(added) = &plan.added_capacitors {
        let peak_v = expected_stress(board, plan).ok().map(|stress| stress.peak_v());
        checks.extend(added.checks(peak_v, attendance));
    }
    checks.push(probe_bandwidth(station, plan));
    checks.extend(probe_dates(station));
    checks.push(stored_energy(board, plan));
    checks
}

/// Voltages to expect at the drain at the highest line voltage of a plan.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct ExpectedStress {
    /// Peak of the rectified line.
    pub bulk_v: f64,
    /// Highest reflected output voltage.
    pub reflected_v: f64,
    /// What stands above bulk at the peak: the clamp's level, or reflected voltage plus leakage spike.
    pub above_bulk_v: f64,
}

impl ExpectedStress {
    /// Highest drain voltage.
    pub fn peak_v(&self) -> f64 {
        self.bulk_v + self.above_bulk_v
    }
}

/// The peak drain voltage to expect: `sqrt(2) * line`, plus the clamp's level above bulk (in which the reflected voltage is
/// contained), or the reflected voltage and the plan's allowance for the leakage spike; the higher where both are stated.
///
/// # Errors
/// A sentence saying what is missing, or that the clamp's level lies below the reflected voltage.
pub fn expected_stress(board: &Board, plan: &Plan) -> Result<ExpectedStress, String> {
    let bulk_v = plan.highest_line_v() * std::f64::consts::SQRT_2;
    let reflected_v = board.reflected_voltage_v();
    let spiked_v = plan.stress.leakage_spike_v.map(|spike_v| reflected_v + spike_v);
    if let Some(clamp_v) = board.clamp_v.filter(|clamp_v| *clamp_v <= reflected_v) {
        return Err(format!(
            "the clamp's level of {clamp_v:.0} V above bulk is not above the reflected voltage of {reflected_v:.0} V, so the \
             clamp would conduct through the off time: correct clamp.voltage or turns_ratio in the board file"
        ));
    }
    let above_bulk_v = match (board.clamp_v, spiked_v) {
        (Some(clamp_v), Some(spiked_v)) => clamp_v.max(spiked_v),
        (Some(above_v), None) | (None, Some(above_v)) => above_v,
        (None, None) => {
            let remedy = if board.clamp == Clamp::None { "" } else { "clamp.voltage in the board file or " };
            return Err(format!(
                "cannot be reckoned: state {remedy}stress.leakage_spike in the plan, and nothing is energised until then"
            ));
        }
    };
    Ok(ExpectedStress { bulk_v, reflected_v, above_bulk_v })
}

fn earthing(station: &Station) -> Vec<PreflightCheck> {
    let mut checks = Vec::new();
    let scope = if station.scope.earthed {
        "the scope's inputs are referenced to protective earth".to_owned()
    } else {
        "the scope is stated as floating: its case would stand at the voltage its probe's clip touches. Earth the scope, \
         isolate the unit under test, and use a differential probe"
            .to_owned()
    };
    checks.push(PreflightCheck::hold("scope earthing", station.scope.earthed, scope));
    let (holds, detail) = match (station.probe.differential, station.source_isolated) {
        (true, true) => (true, "differential probe, isolated source"),
        (true, false) => {
            (true, "differential probe; the source is not isolated, so every primary node is live to earth")
        }
        (false, true) => (
            true,
            "earth-referenced probe on an isolated source: its clip connects the primary to earth, after which one touch of \
             any other primary node closes the circuit; never connect a second earth to the primary",
        ),
        (false, false) => (
            false,
            "an earth-referenced probe on a source that is not isolated: the drain node is referenced to the rectified \
             mains, and the probe's clip would short the line to protective earth. Isolate the source, or use a \
             differential probe; never float the scope",
        ),
    };
    let noted = holds && !(station.probe.differential && station.source_isolated);
    checks.push(PreflightCheck {
        check: "probe and source isolation",
        passed: holds,
        noted,
        detail: detail.to_owned(),
    });
    if station.load_earthed {
        let detail = "the load earths the board's output: with an earth-referenced probe, primary and secondary are then \
                      joined through earth, and the board's insulation is bridged";
        let bridged = !station.probe.differential;
        checks.push(PreflightCheck { check: "load earthing", passed: true, noted: bridged, detail: detail.to_owned() });
    }
    checks
}

fn by_hand(station: &Station, attendance: Attendance) -> Vec<PreflightCheck> {
    let roles = [("source by hand", &station.source), ("load by hand", &station.load)];
    let by_hand = roles.into_iter().filter_map(|(check, role)| match role {
        Role::ByHand { description } => Some((check, description)),
        Role::Instrument { .. } => None,
    });
    let checks = by_hand.map(|(check, description)| match attendance {
        Attendance::Attended => PreflightCheck::note(check, format!("{description}: an operator sets it when asked")),
        Attendance::Unattended => {
            let detail = format!("{description} must be set by an operator, and the run is unattended");
            PreflightCheck::hold(check, false, detail)
        }
    });
    checks.collect()
}

fn line(station: &Station, board: &Board, plan: &Plan) -> Vec<PreflightCheck> {
    let [low, high] = board.line_range_v;
    let limit = station.limits.line_v;
    let outside: Vec<f64> = plan.line_v.iter().copied().filter(|line_v| !(low..=high).contains(line_v)).collect();
    let over: Vec<f64> = plan.line_v.iter().copied().filter(|line_v| *line_v > limit).collect();
    let verdict = |bad: &[f64], within: String| match bad {
        [] => format!("every line voltage of the plan is {within}"),
        bad => format!("{} not {within}", volts(bad)),
    };
    vec![
        PreflightCheck::hold(
            "line range of the board",
            outside.is_empty(),
            verdict(&outside, format!("within the board's {low} V to {high} V")),
        ),
        PreflightCheck::hold(
            "line limit of the station",
            over.is_empty(),
            verdict(&over, format!("within the station's limit of {limit} V")),
        ),
    ]
}

fn load(station: &Station, board: &Board, plan: &Plan) -> Vec<PreflightCheck> {
    let Some(output) = board.outputs.first() else {
        return vec![PreflightCheck::hold("load", false, "the board has no output to load".into())];
    };
    let power_w = plan.load_start_a * output.voltage_v;
    let limit_w = station.limits.load_power_w;
    vec![
        PreflightCheck::hold(
            "load power limit of the station",
            power_w <= limit_w,
            format!("{} A at {} V is {power_w:.1} W; the limit is {limit_w} W", plan.load_start_a, output.voltage_v),
        ),
        PreflightCheck::hold(
            "highest load of the output",
            plan.load_start_a <= output.maximum_load_a,
            format!("the plan starts at {} A; {} gives {} A", plan.load_start_a, output.name, output.maximum_load_a),
        ),
        PreflightCheck::hold(
            "lowest load of the output",
            plan.load_floor_a >= output.minimum_load_a,
            format!(
                "the plan steps down to {} A; {} needs {} A to stay in regulation, without which a gap is no skipped cycle",
                plan.load_floor_a, output.name, output.minimum_load_a
            ),
        ),
    ]
}

fn stress_checks(station: &Station, board: &Board, plan: &Plan, stress: &ExpectedStress) -> Vec<PreflightCheck> {
    let peak_v = stress.peak_v();
    let expected = format!(
        "{peak_v:.0} V expected at {} V line ({:.0} V bulk and {:.0} V above it)",
        plan.highest_line_v(),
        stress.bulk_v,
        stress.above_bulk_v
    );
    let allowed_v = plan.stress.drain_derating * board.drain_rating_v;
    let at_scope_v = peak_v / station.probe.factor;
    let scope_rating_v = station.scope.input_rating_v;
    vec![
        PreflightCheck::hold(
            "drain rating",
            peak_v <= allowed_v,
            format!(
                "{expected}; {:.0} % of the drain's {} V is {allowed_v:.0} V",
                100.0 * plan.stress.drain_derating,
                board.drain_rating_v
            ),
        ),
        PreflightCheck::hold(
            "drain limit of the station",
            peak_v <= station.limits.drain_v,
            format!("{expected}; the station's limit is {} V", station.limits.drain_v),
        ),
        probe_rating(station, plan, stress),
        PreflightCheck::hold(
            "scope input rating",
            at_scope_v <= scope_rating_v,
            format!(
                "{peak_v:.0} V through a {}x probe is {at_scope_v:.2} V at the input, rated {scope_rating_v} V",
                station.probe.factor
            ),
        ),
    ]
}

/// A probe's rating holds for the steady voltage; above the derating frequency the rating of an alternating one falls with
/// 1/f. The drain shows both, so their shares of the two ratings are added: the level a ring swings about against the full
/// rating, the ring's amplitude against the one derated to its frequency. Neither ring's sum may exceed one.
fn probe_rating(station: &Station, plan: &Plan, stress: &ExpectedStress) -> PreflightCheck {
    let probe = &station.probe;
    let share = |name, level_v: f64, ring_v: f64, ring_hz: f64| {
        let derated_v = probe.rating_v * (probe.derating_frequency_hz / ring_hz).min(1.0);
        let used = level_v / probe.rating_v + ring_v / derated_v;
        let ring_mhz = ring_hz / 1e6;
        let detail = format!(
            "{level_v:.0} V against {:.0} V and the {name} ring's {ring_v:.0} V against {derated_v:.0} V, the rating at \
             {ring_mhz:.2} MHz, use {:.0} % of the probe's rating",
            probe.rating_v,
            100.0 * used
        );
        (used, detail)
    };
    let plateau_v = stress.bulk_v + stress.reflected_v;
    let spike_v = stress.above_bulk_v - stress.reflected_v;
    let leakage = share("leakage", plateau_v, spike_v, plan.stress.leakage_ring_hz);
    let relaxation = share("relaxation", stress.bulk_v, stress.reflected_v, plan.stress.relaxation_ring_hz);
    let (used, detail) = if leakage.0 >= relaxation.0 { leakage } else { relaxation };
    PreflightCheck::hold("probe rating", used <= 1.0, detail)
}

/// Of a first-order response, a fifth of the bandwidth is shown 2 % too small, a third 5 %.
fn probe_bandwidth(station: &Station, plan: &Plan) -> PreflightCheck {
    let ratio = plan.stress.leakage_ring_hz / station.probe.bandwidth_hz;
    let error = 1.0 - (1.0 + ratio * ratio).sqrt().recip();
    let detail = format!(
        "a leakage ring of {:.2} MHz is shown {:.1} % too small by a probe of {:.0} MHz",
        plan.stress.leakage_ring_hz / 1e6,
        100.0 * error,
        station.probe.bandwidth_hz / 1e6
    );
    let noted = ratio > 0.2;
    PreflightCheck { check: "probe bandwidth", passed: true, noted, detail }
}

fn probe_dates(station: &Station) -> Vec<PreflightCheck> {
    let dates = [
        ("probe calibration", "calibrated", &station.probe.calibrated),
        ("probe compensation", "compensated", &station.probe.compensated),
    ];
    let checks = dates.into_iter().map(|(check, key, date)| match date {
        Some(date) => PreflightCheck::hold(check, true, format!("{key} on {date}")),
        None => PreflightCheck::note(check, format!("no date is stated: voltages rest on an unchecked probe ({key})")),
    });
    checks.collect()
}

/// What stays behind after switch-off; 45 uC is where a charge counts as hazardous live (IEC 61010-1, 6.3.1 c).
fn stored_energy(board: &Board, plan: &Plan) -> PreflightCheck {
    let bulk_v = plan.highest_line_v() * std::f64::consts::SQRT_2;
    let charge_c = board.bulk_capacitance_f.value * bulk_v;
    let energy_j = 0.5 * charge_c * bulk_v;
    let hazardous = if charge_c > 45e-6 { "a hazardous charge that stays after switch-off" } else { "not hazardous" };
    let detail =
        format!("the bulk capacitor holds {energy_j:.2} J and {:.2} mC at {bulk_v:.0} V: {hazardous}", 1e3 * charge_c);
    PreflightCheck { check: "stored energy", passed: true, noted: charge_c > 45e-6, detail }
}

fn volts(values: &[f64]) -> String {
    let values: Vec<String> = values.iter().map(|value| format!("{value} V")).collect();
    format!("{} {}", values.join(", "), if values.len() == 1 { "is" } else { "are" })
}
