//! The drain waveform with the anatomy of a cycle named on it, and the whole survey with each cycle's mode.

use super::{
    axes::{Axes, Axis},
    svg::{Anchor, Svg},
    text,
    trace::{Trace, thinned},
};
use ringstep_analysis::findings::{Cycle, CycleMode, Findings, RingKind};

const WIDTH: f64 = 960.0;

/// A feature of the cycle: its name, and where on the curve it is.
type Feature = (&'static str, f64, f64);

/// The cycle that shows most: one with a knee, the longest of them.
pub(super) fn most_telling(findings: &Findings, trace: &Trace) -> Option<Cycle> {
    let inside = |cycle: &&Cycle| cycle.start_s >= trace.start_s && cycle.turn_off_s < trace.end_s();
    let length = |cycle: &Cycle| cycle.end_s - cycle.start_s;
    let known = findings.cycles.iter().filter(inside).filter(|cycle| cycle.end_of_demagnetisation_s.is_some());
    known.max_by(|a, b| length(a).total_cmp(&length(b))).copied()
}

/// The cycle drawn from its turn-on to some periods of its relaxation ring, every part named.
pub(super) fn cycle(id: &str, trace: &Trace, findings: &Findings, cycle: Cycle, ring_period_s: Option<f64>) -> String {
    let knee_s = cycle.end_of_demagnetisation_s.unwrap_or(cycle.end_s);
    let shown = ring_period_s.map_or(knee_s - cycle.start_s, |period| period * 7.0);
    let until = (knee_s + shown).min(cycle.end_s + 0.04 * (cycle.end_s - cycle.start_s)).min(trace.end_s());
    let from = (cycle.start_s - 0.06 * (until - cycle.start_s)).max(trace.start_s);
    let y = Axis::around(trace.between(from, until).map(|(_, v)| v).chain([0.0]), 0.05, "drain voltage", "V");
    let x = Axis { low: from, high: until, name: "time from the trigger", unit: "s" };
    let axes = Axes { left: 66.0, top: 64.0, width: WIDTH - 66.0 - 122.0, height: 330.0, x, y };
    let mut svg = Svg::new(WIDTH, 446.0);
    axes.draw(&mut svg, true);
    levels(&mut svg, &axes, trace, findings, [cycle.turn_off_s, until]);
    svg.polyline("data", &thinned(&axes, trace.between(from, until)));
    let features = features(trace, findings, cycle, until, ring_period_s);
    name_features(&mut svg, &axes, &features);
    let names: Vec<String> = features
        .iter()
        .map(|(name, time, volts)| format!("{name} at {}, {}", text::short(*time, "s"), text::short(*volts, "V")))
        .collect();
    svg.finish(id, "Drain voltage over one switching cycle", &format!("In order: {}.", names.join("; ")))
}

/// Dashed levels with their names at the right: bulk, reflected, peak; names never on top of each other.
fn levels(svg: &mut Svg, axes: &Axes, trace: &Trace, findings: &Findings, [from, until]: [f64; 2]) {
    let bulk = findings.bulk_voltage_v.map(|bulk| bulk.value);
    let reflected = findings.reflected_voltage_v.map(|reflected| reflected.value);
    let peak = trace.highest(from, until).map(|(_, volts)| volts);
    let plateau = bulk.zip(reflected).map(|(bulk, reflected)| bulk + reflected);
    let levels = [("peak", peak), ("bulk + reflected", plateau), ("bulk", bulk)];
    let mut above = f64::NEG_INFINITY;
    for (name, level) in levels.into_iter().filter_map(|(name, level)| Some((name, level?))) {
        let [_, y] = axes.place(axes.x.low, level);
        svg.line("level", [axes.left, y], [axes.right(), y]);
        let text_y = (y - 2.0).max(above + 36.0);
        svg.text("name", Anchor::Start, [axes.right() + 8.0, text_y], name);
        svg.text("tick", Anchor::Start, [axes.right() + 8.0, text_y + 15.0], &text::short(level, "V"));
        above = text_y;
    }
}

fn features(trace: &Trace, findings: &Findings, cycle: Cycle, until: f64, ring_period_s: Option<f64>) -> Vec<Feature> {
    let at = |time: f64| trace.between(time, until).next().map_or(0.0, |(_, volts)| volts);
    let knee = cycle.end_of_demagnetisation_s.unwrap_or(until);
    let leakage = findings
        .ring_fits
        .iter()
        .find(|fit| fit.kind == RingKind::Leakage && fit.start_s > cycle.turn_off_s && fit.start_s < knee);
    let clamp = trace.highest(cycle.turn_off_s, knee).unwrap_or((cycle.turn_off_s, at(cycle.turn_off_s)));
    let ring_s = leakage.map_or(clamp.0 + 0.1 * (knee - clamp.0), |fit| fit.start_s + 0.15 * (fit.end_s - fit.start_s));
    let plateau_s = clamp.0 + 0.7 * (knee - clamp.0);
    let mut features = vec![
        ("turn-on", cycle.start_s, at(cycle.start_s)),
        ("on", 0.5 * (cycle.start_s + cycle.turn_off_s), at(0.5 * (cycle.start_s + cycle.turn_off_s))),
        ("turn-off", cycle.turn_off_s, at(cycle.turn_off_s)),
        ("clamp", clamp.0, clamp.1),
        ("leakage ring", ring_s, at(ring_s)),
        ("reflected plateau", plateau_s, at(plateau_s)),
        ("demagnetisation knee", knee, at(knee)),
    ];
    let crest = ring_period_s.map_or(0.5 * (knee + until), |period| knee + 2.0 * period);
    if crest < until {
        features.push(("relaxation ring", crest, at(crest)));
    }
    features
}

/// Names in one row above the curve, pushed apart, each with a thin line to its place.
fn name_features(svg: &mut Svg, axes: &Axes, features: &[Feature]) {
    const CHARACTER: f64 = 6.9;
    let width = |name: &str| name.chars().count() as f64 * CHARACTER + 16.0;
    let places: Vec<[f64; 2]> = features.iter().map(|(_, time, volts)| axes.place(*time, *volts)).collect();
    let mut centres = Vec::new();
    let mut edge = 4.0_f64;
    for ((name, _, _), [x, _]) in features.iter().zip(&places) {
        let centre = x.max(edge + width(name) / 2.0);
        edge = centre + width(name) / 2.0;
        centres.push(centre);
    }
    let mut edge = WIDTH - 4.0;
    for ((name, _, _), centre) in features.iter().zip(&mut centres).rev() {
        *centre = centre.min(edge - width(name) / 2.0);
        edge = *centre - width(name) / 2.0;
    }
    for (((name, _, _), place), centre) in features.iter().zip(places).zip(centres) {
        svg.text("name", Anchor::Middle, [centre, 24.0], name);
        svg.polyline("leader", &[[centre, 31.0], [place[0], axes.top - 6.0], place]);
        svg.circle("mark", place, 3.2);
    }
}

/// The whole capture with the mode of every cycle in a strip above it.
pub(super) fn survey(id: &str, trace: &Trace, cycles: &[Cycle]) -> String {
    let (from, until) = (trace.start_s, trace.end_s());
    let y = Axis::around(trace.volts.iter().copied().chain([0.0]), 0.05, "drain voltage", "V");
    let x = Axis { low: from, high: until, name: "time from the trigger", unit: "s" };
    let axes = Axes { left: 66.0, top: 34.0, width: WIDTH - 66.0 - 20.0, height: 210.0, x, y };
    let mut svg = Svg::new(WIDTH, 296.0);
    axes.draw(&mut svg, true);
    for cycle in cycles {
        let ([left, _], [right, _]) = (axes.place(cycle.start_s, 0.0), axes.place(cycle.end_s, 0.0));
        svg.rect(&format!("mode {}", text::mode(cycle.mode)), [left + 0.5, 8.0], [right - left - 1.0, 20.0]);
        let name = text::mode(cycle.mode);
        if right - left > name.len() as f64 * 6.6 + 6.0 {
            svg.text("mode-name", Anchor::Middle, [(left + right) / 2.0, 22.0], name);
        } else if right - left > 12.0 {
            svg.text("mode-name", Anchor::Middle, [(left + right) / 2.0, 22.0], &name[..1].to_uppercase());
        }
    }
    svg.polyline("data fine", &thinned(&axes, trace.between(from, until)));
    let count = |mode| cycles.iter().filter(|cycle| cycle.mode == mode).count();
    let counts = [CycleMode::Continuous, CycleMode::Discontinuous, CycleMode::Skipped, CycleMode::Incomplete]
        .map(|mode| format!("{} {}", count(mode), text::mode(mode)));
    svg.finish(id, "Drain voltage over the whole survey", &format!("Cycles seen: {}.", counts.join(", ")))
}
