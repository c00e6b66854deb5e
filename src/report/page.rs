//! Gathers what the page shows and fills in its template.

use super::{
    ReportError, anatomy,
    budgets::{self, PointBudgets},
    fit_chart, line_chart, load_chart,
    text::{self, QUANTITIES},
    timeline::{self, Moment},
    trace::Trace,
    verdict::{self, BoardWords, Key},
};
use crate::{
    record::{
        Results, Run,
        results::{PointDoubt, PointResult, word},
    },
    sequence::event::{Capture, Event, LoadStep, Point, Purpose},
    station::CAUTIONS,
};
use askama::Template;
use ringstep_analysis::{
    budget::COLUMNS,
    findings::{Findings, RingFit, RingKind},
    quantity::{Measured, Unit},
};

/// Points whose fits and load steps are drawn; more would make the file too large to mail.
const POINTS_DRAWN: usize = 8;

#[derive(Template)]
#[template(path = "page.html", config = "src/report/askama.toml")]
struct Page<'a> {
    title: String,
    run: &'a Run,
    results: &'a Results,
    started: String,
    verdict: Vec<String>,
    keys: Vec<Key>,
    waveform: Vec<Figure>,
    points: Vec<PointFigures>,
    points_left_out: usize,
    across_line: Vec<Figure>,
    rows: Vec<Row>,
    loads: Vec<String>,
    doubts: Vec<(String, Vec<DoubtGroup<'a>>)>,
    budgets: Vec<PointBudgets>,
    budget_columns: &'static [&'static str],
    constant_part: Option<String>,
    settings: Vec<Setting>,
    preflight: Vec<(&'a str, bool, &'a str)>,
    moments: Vec<Moment>,
    cautions: &'static [&'static str],
}

/// A drawing with what stands under it.
struct Figure {
    svg: String,
    caption: String,
}

/// The drawings of one point.
struct PointFigures {
    heading: String,
    lead: String,
    figures: Vec<Figure>,
}

/// One row of the table of values: a cell a point.
struct Row {
    name: &'static str,
    cells: Vec<Cell>,
}

/// A value as it is printed, and in SI units for machines.
struct Cell {
    text: String,
    si: Option<Measured>,
}

/// Doubts of one kind at one point: the first, and those that say it with other figures.
struct DoubtGroup<'a> {
    name: String,
    first: &'a PointDoubt,
    others: Vec<&'a PointDoubt>,
}

/// The settings of one capture.
struct Setting {
    capture: &'static str,
    number: usize,
    line: String,
    load: String,
    window: String,
    interval: String,
    step: String,
    sha256: String,
}

pub(super) fn render(run: &Run) -> Result<String, ReportError> {
    let results = run.results();
    let board = BoardWords::read(&run.inputs.board);
    let finished: Vec<&Point> = run.events().filter_map(finished_point).collect();
    let drawn = spread(&finished);
    let points = drawn.iter().map(|point| point_figures(run, point)).collect::<Result<Vec<_>, _>>()?;
    let page = Page {
        title: board.name.clone().unwrap_or_else(|| "unnamed board".to_owned()),
        run,
        results: &results,
        started: run
            .journal
            .first()
            .map(|entry| entry.time.strftime("%Y-%m-%d %H:%M UTC").to_string())
            .unwrap_or_default(),
        verdict: verdict::sentences(run, &results, &board),
        keys: verdict::keys(&results, &board),
        waveform: waveform(run, &finished)?,
        points_left_out: finished.len() - points.len(),
        points,
        across_line: across_line(&finished),
        rows: rows(&results),
        loads: results
            .points
            .iter()
            .map(|point| format!("{}, {}", text::short(point.load_a, "A"), text::short(point.load_w, "W")))
            .collect(),
        doubts: results.points.iter().map(|point| (text::short(point.line_v, "V"), doubt_groups(point))).collect(),
        budgets: budgets::of(&finished),
        budget_columns: &COLUMNS,
        constant_part: budgets::constant(&finished),
        settings: run.captures().map(setting).collect(),
        preflight: run.events().filter_map(preflight).collect(),
        moments: timeline::moments(&run.journal),
        cautions: &CAUTIONS,
    };
    Ok(page.render()?)
}

fn finished_point(event: &Event) -> Option<&Point> {
    match event {
        Event::PointFinished(point) => Some(point),
        _ => None,
    }
}

fn preflight(event: &Event) -> Option<(&str, bool, &str)> {
    match event {
        Event::PreflightChecked { check, passed, detail } => Some((check, *passed, detail)),
        _ => None,
    }
}

/// At most [`POINTS_DRAWN`] points, first and last among them.
fn spread<'a>(points: &[&'a Point]) -> Vec<&'a Point> {
    let drawn = points.len().min(POINTS_DRAWN);
    (0..drawn).map(|index| points[index * (points.len() - 1) / (drawn - 1).max(1)]).collect()
}

/// The annotated waveform of the last point; of a run without points, its last survey as it was captured.
fn waveform(run: &Run, points: &[&Point]) -> Result<Vec<Figure>, ReportError> {
    let Some(point) = points.last() else {
        let Some(capture) = run.captures().filter(|capture| capture.purpose == Purpose::Survey).last() else {
            return Ok(Vec::new());
        };
        let svg = anatomy::survey("survey", &Trace::read(run, capture)?, &[]);
        let caption = format!("The last survey, capture {}, as captured: no point was finished.", capture.number);
        return Ok(vec![Figure { svg, caption }]);
    };
    let mut figures = Vec::new();
    if let Some((capture, findings)) = clearest(run, point) {
        let trace = Trace::read(run, capture)?;
        if let Some(cycle) = anatomy::most_telling(findings, &trace) {
            let period_s = point.values.relaxation_frequency_hz.map(|frequency| 1.0 / frequency.value);
            let levels = anatomy::Levels::of(&point.values, findings);
            let svg = anatomy::cycle("anatomy", &trace, findings, levels, cycle, period_s);
            let line = text::short(point.line_v, "V");
            let caption = format!(
                "One cycle at {line} line, capture {} ({}, {} a sample). Dashed: the levels found.",
                capture.number,
                text::purpose(capture.purpose),
                text::short(trace.interval_s, "s")
            );
            figures.push(Figure { svg, caption });
        }
    }
    let survey = captures_of(run, point).filter(|(capture, _)| capture.purpose == Purpose::Survey).last();
    if let Some((capture, findings)) = survey {
        let svg = anatomy::survey("survey", &Trace::read(run, capture)?, &findings.cycles);
        let caption = format!(
            "The survey at the measuring load ({}), capture {}, with the mode of every cycle above it \
             (C continuous, D discontinuous, S skipped, I incomplete).",
            text::short(capture.load_a, "A"),
            capture.number
        );
        figures.push(Figure { svg, caption });
    }
    Ok(figures)
}

/// Captures of a point with their findings.
fn captures_of<'a>(run: &'a Run, point: &'a Point) -> impl Iterator<Item = (&'a Capture, &'a Findings)> {
    point
        .findings
        .iter()
        .filter_map(|(number, findings)| Some((run.captures().find(|capture| capture.number == *number)?, findings)))
}

/// The capture that shows a cycle with some periods of its relaxation ring and was sampled fastest; of captures without,
/// the fastest that holds a whole demagnetisation.
fn clearest<'a>(run: &'a Run, point: &'a Point) -> Option<(&'a Capture, &'a Findings)> {
    let period_s = point.values.relaxation_frequency_hz.map_or(0.0, |frequency| 1.0 / frequency.value);
    let ringing_s = |findings: &Findings| {
        let cycles = findings.cycles.iter();
        cycles.filter_map(|cycle| Some(cycle.end_s - cycle.end_of_demagnetisation_s?)).fold(-1.0, f64::max)
    };
    captures_of(run, point).filter(|(_, findings)| ringing_s(findings) >= 0.0).min_by(
        |(a, a_findings), (b, b_findings)| {
            let short = |findings: &Findings| ringing_s(findings) < 5.0 * period_s;
            let order = short(a_findings).cmp(&short(b_findings));
            order.then(a.waveform.interval_s.total_cmp(&b.waveform.interval_s))
        },
    )
}

fn point_figures(run: &Run, point: &Point) -> Result<PointFigures, ReportError> {
    let mut figures = Vec::new();
    for kind in [RingKind::Relaxation, RingKind::Leakage] {
        if let Some((capture, fit)) = best_fit(run, point, kind) {
            let id = format!("fit-{}-{}", point.index, capture.number);
            let svg = fit_chart::draw(&id, &Trace::read(run, capture)?, fit);
            let caption =
                format!("{}, capture {}. {}", fit_chart::title(kind), capture.number, fit_chart::describe(fit));
            figures.push(Figure { svg, caption });
        }
    }
    let mut steps: Vec<&LoadStep> = run
        .events()
        .filter_map(|event| match event {
            Event::LoadStepped(step) if step.point == point.index => Some(step),
            _ => None,
        })
        .collect();
    steps.sort_by(|a, b| b.load.power_w().total_cmp(&a.load.power_w()));
    if !steps.is_empty() {
        let svg = load_chart::draw(&format!("load-{}", point.index), &steps);
        let caption = "Load steps: the relaxation ring each left visible, and the modes of its cycles.".to_owned();
        figures.push(Figure { svg, caption });
    }
    let measured = format!("Measured at {}, {}.", text::short(point.load_a, "A"), text::short(point.load_w, "W"));
    let boundary = point.boundary_load_a.map_or(String::new(), |[skipping, regular]| {
        let (skipping, regular) = (text::short(skipping, "A"), text::short(regular, "A"));
        format!(" Cycles are skipped at {skipping} and no longer at {regular}: the boundary lies between.")
    });
    Ok(PointFigures {
        heading: format!("{} line", text::short(point.line_v, "V")),
        lead: measured + &boundary,
        figures,
    })
}

/// The fit to draw: an accepted one of a capture taken for that ring, if there is one.
fn best_fit<'a>(run: &'a Run, point: &'a Point, kind: RingKind) -> Option<(&'a Capture, &'a RingFit)> {
    let wanted = match kind {
        RingKind::Relaxation => Purpose::RelaxationRing,
        RingKind::Leakage => Purpose::LeakageRing,
    };
    let fits = captures_of(run, point).flat_map(|(capture, findings)| {
        findings.ring_fits.iter().filter(|fit| fit.kind == kind).map(move |fit| (capture, fit))
    });
    let drawable = |fit: &RingFit| fit.end_s > fit.start_s && fit.parameters.iter().all(|value| value.is_finite());
    let length = |fit: &RingFit| fit.end_s - fit.start_s;
    fits.filter(|(_, fit)| drawable(fit)).max_by(|(a_capture, a), (b_capture, b)| {
        let rank = |capture: &Capture, fit: &RingFit| (fit.accepted, capture.purpose == wanted);
        rank(a_capture, a).cmp(&rank(b_capture, b)).then(length(a).total_cmp(&length(b)))
    })
}

fn across_line(points: &[&Point]) -> Vec<Figure> {
    let series = |pick: fn(&Point) -> Option<Measured>| -> Vec<(f64, Measured)> {
        points.iter().filter_map(|point| Some((point.line_v, pick(point)?))).collect()
    };
    let lines: Vec<f64> = points.iter().map(|point| point.line_v).collect();
    let capacitance = [
        ("probe included", series(|point| point.values.node_capacitance_f)),
        ("without the probe", series(|point| point.values.node_capacitance_without_probe_f)),
    ];
    let leakage = [("referred to the primary", series(|point| point.values.leakage_inductance_h))];
    let figures = [
        line_chart::draw("capacitance", "node capacitance", Unit::Farad, "F", &lines, &capacitance).map(|svg| {
            (svg, "Capacitance of the drain node at the bulk voltage of each line voltage, with 95 % intervals.")
        }),
        line_chart::draw("leakage", "leakage inductance", Unit::Henry, "H", &lines, &leakage)
            .map(|svg| (svg, "Leakage inductance at each line voltage, with 95 % intervals.")),
    ];
    figures.into_iter().flatten().map(|(svg, caption)| Figure { svg, caption: caption.to_owned() }).collect()
}

fn rows(results: &Results) -> Vec<Row> {
    let row = |(name, unit, pick): text::Quantity| {
        let cell = |value: Option<Measured>| Cell {
            text: value.map_or_else(|| "no value".to_owned(), |value| text::with_interval(value, unit)),
            si: value,
        };
        Row { name, cells: results.points.iter().map(|point| cell(pick(&point.values))).collect() }
    };
    QUANTITIES.into_iter().map(row).collect()
}

fn doubt_groups(point: &PointResult) -> Vec<DoubtGroup<'_>> {
    let mut groups: Vec<DoubtGroup<'_>> = Vec::new();
    for doubt in &point.doubts {
        match groups.iter_mut().find(|group| group.first.doubt.name == doubt.doubt.name) {
            Some(group) => group.others.push(doubt),
            None => groups.push(DoubtGroup { name: word(doubt.doubt.name), first: doubt, others: Vec::new() }),
        }
    }
    groups
}

fn setting(capture: &Capture) -> Setting {
    let waveform = &capture.waveform;
    let codes = (waveform.clip_codes[1] - waveform.clip_codes[0]).abs();
    Setting {
        capture: text::purpose(capture.purpose),
        number: capture.number,
        line: text::short(capture.line_v, "V"),
        load: text::short(capture.load_a, "A"),
        window: text::short(codes * waveform.volts_per_code.abs(), "V"),
        interval: text::short(waveform.interval_s, "s"),
        step: text::short(waveform.volts_per_code, "V"),
        sha256: capture.sha256.chars().take(12).collect(),
    }
}
