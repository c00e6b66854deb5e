//! The few figures a reader wants first: what was measured, and how far the drain stayed from its rating.

use super::text::{self, QUANTITIES};
use crate::{
    record::{Results, Run, results::PointResult},
    sequence::event::Outcome,
};
use ringstep_analysis::quantity::{COVERAGE_95, Measured, Unit, parse_quantity};

/// One key figure.
#[derive(Debug)]
pub(super) struct Key {
    pub(super) name: String,
    pub(super) value: String,
    pub(super) interval: String,
    pub(super) remark: String,
}

/// What the board file says that the report needs; absent where the file cannot be read.
#[derive(Debug, Default)]
pub(super) struct BoardWords {
    pub(super) name: Option<String>,
    pub(super) drain_rating_v: Option<f64>,
}

impl BoardWords {
    pub(super) fn read(board: &str) -> BoardWords {
        let table: toml::Table = board.parse().unwrap_or_default();
        let text = |key: &str| table.get(key).and_then(toml::Value::as_str);
        let rating = text("drain_rating").and_then(|rating| parse_quantity(rating, Unit::Volt).ok());
        BoardWords { name: text("name").map(str::to_owned), drain_rating_v: rating.map(|rating| rating.value) }
    }
}

/// The verdict in sentences, the first the most important.
pub(super) fn sentences(run: &Run, results: &Results, board: &BoardWords) -> Vec<String> {
    let (measured, refused) = (results.points.len(), results.refused.len());
    let ended = match results.outcome {
        Some(Outcome::Complete) => "Every point of the plan was measured",
        Some(Outcome::Partial) => "Some points of the plan could not be measured",
        Some(Outcome::Refused) => "Nothing could be measured",
        Some(Outcome::Stopped) => "The run was stopped by the operator",
        Some(Outcome::Failed) => "The run ended with an error",
        None => "The run was cut short: its record has no end",
    };
    let mut sentences = vec![format!("{ended}: {measured} measured, {refused} refused.")];
    if results.outcome != Some(Outcome::Partial) {
        sentences.extend(results.message.clone());
    }
    match (highest_peak(results), board.drain_rating_v) {
        (Some((point, peak)), Some(rating_v)) => sentences.push(margin(point, peak, rating_v)),
        (Some(_), None) => sentences.push("The board file states no drain rating that could be read.".to_owned()),
        _ => {}
    }
    sentences.extend(run.torn.iter().map(|torn| {
        format!(
            "The last line of the journal ({}, {} bytes) is torn; everything before it is whole.",
            torn.line, torn.bytes
        )
    }));
    sentences
}

fn margin(point: &PointResult, peak: Measured, rating_v: f64) -> String {
    let upper = peak.value + COVERAGE_95 * peak.standard_uncertainty;
    let share = 100.0 * peak.value / rating_v;
    let found = match rating_v {
        rating_v if upper < rating_v => format!("{} below", text::short(rating_v - peak.value, "V")),
        rating_v if peak.value < rating_v => "not proven to stay below".to_owned(),
        _ => "above".to_owned(),
    };
    format!(
        "The highest drain voltage, {} at {} line, is {share:.0} % of the {} rating: {found} it{}.",
        text::with_interval(peak, Unit::Volt),
        text::short(point.line_v, "V"),
        text::short(rating_v, "V"),
        if upper < rating_v { "" } else { "; look at the clamp before going on" }
    )
}

fn highest_peak(results: &Results) -> Option<(&PointResult, Measured)> {
    let peaks = results.points.iter().filter_map(|point| Some((point, point.values.peak_drain_voltage_v?)));
    peaks.max_by(|a, b| a.1.value.total_cmp(&b.1.value))
}

/// The key figures: each from the highest line voltage that has it, with its range over the others.
pub(super) fn keys(results: &Results, board: &BoardWords) -> Vec<Key> {
    let chosen = [0, 2, 4, 7, 8, 9];
    let mut keys: Vec<Key> = chosen.into_iter().filter_map(|index| key(results, index)).collect();
    if let (Some((point, peak)), Some(rating_v)) = (highest_peak(results), board.drain_rating_v) {
        let margin = Measured { value: rating_v - peak.value, ..peak };
        keys.push(Key {
            name: "Margin to the drain rating".to_owned(),
            remark: format!("{} rated, at {} line", text::short(rating_v, "V"), text::short(point.line_v, "V")),
            ..split(margin, Unit::Volt)
        });
    }
    keys
}

fn key(results: &Results, index: usize) -> Option<Key> {
    let (name, unit, pick) = QUANTITIES[index];
    let mut had: Vec<(f64, Measured)> =
        results.points.iter().filter_map(|point| Some((point.line_v, pick(&point.values)?))).collect();
    had.sort_by(|a, b| a.0.total_cmp(&b.0));
    let (line_v, value) = *had.last()?;
    let mut remark = format!("at {} line", text::short(line_v, "V"));
    if let Some((lowest_v, lowest)) = had.first().filter(|_| had.len() > 1) {
        let lowest = text::with_interval(*lowest, unit);
        let lowest = lowest.split(" ±").next().unwrap_or(&lowest).to_owned();
        remark.push_str(&format!("; {lowest} at {}", text::short(*lowest_v, "V")));
    }
    Some(Key { name: name.to_owned(), remark, ..split(value, unit) })
}

fn split(value: Measured, unit: Unit) -> Key {
    let text = text::with_interval(value, unit);
    let (value, interval) = text.split_once(" ±").map_or((text.as_str(), ""), |(value, interval)| (value, interval));
    let interval = if interval.is_empty() { String::new() } else { format!("±{interval}") };
    Key { name: String::new(), value: value.to_owned(), interval, remark: String::new() }
}
