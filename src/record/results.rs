//! The results of a run, from its events alone: points with values and doubts, instruments, how it ended; as JSON and as
//! a table.

use crate::{
    instrument::Identity,
    sequence::event::{AddedOutcome, Event, Outcome, Point, PointValues},
};
use ringstep_analysis::{findings::Doubt, quantity::Measured};
use serde::{Deserialize, Serialize};
use std::fmt::Write;

/// Version of `results.json`.
pub const RESULTS_VERSION: u32 = 1;

/// The results of one run; all SI.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Results {
    /// Version of this format.
    pub version: u32,
    /// Identifier of the run.
    pub run: Option<String>,
    /// Version of the program that measured.
    pub software_version: Option<String>,
    /// Whether any instrument declared itself simulated or played back.
    pub simulated: bool,
    /// How the run ended; `None` where it was cut short.
    pub outcome: Option<Outcome>,
    /// The error or refusal, where there was one.
    pub message: Option<String>,
    /// Instruments by role.
    pub instruments: Vec<(String, Identity)>,
    /// Measured points, in order.
    pub points: Vec<PointResult>,
    /// Points that could not be measured.
    pub refused: Vec<Refusal>,
    /// What added capacitors say, where the plan had some.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub added_capacitors: Option<AddedOutcome>,
}

/// One measured point.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct PointResult {
    /// Index of the point in the plan, from zero.
    pub index: usize,
    /// Line voltage set.
    pub line_v: f64,
    /// Load current at which the rings were captured.
    pub load_a: f64,
    /// Load power measured there.
    pub load_w: f64,
    /// Highest load current at which cycles were skipped, and lowest at which none were.
    pub boundary_load_a: Option<[f64; 2]>,
    /// Values.
    pub values: PointValues,
    /// Doubts, each once, with the captures it came from.
    pub doubts: Vec<PointDoubt>,
}

/// One doubt of a point.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct PointDoubt {
    /// The doubt.
    #[serde(flatten)]
    pub doubt: Doubt,
    /// Numbers of the captures it came from.
    pub captures: Vec<usize>,
}

/// One point that could not be measured.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Refusal {
    /// Index of the point in the plan, from zero.
    pub index: usize,
    /// Line voltage set.
    pub line_v: f64,
    /// Why, and what to change.
    pub reason: String,
}

/// Derives the results from the events of a run.
pub fn from_events<'a>(events: impl IntoIterator<Item = &'a Event>) -> Results {
    let mut results = Results {
        version: RESULTS_VERSION,
        run: None,
        software_version: None,
        simulated: false,
        outcome: None,
        message: None,
        instruments: Vec::new(),
        points: Vec::new(),
        refused: Vec::new(),
        added_capacitors: None,
    };
    for event in events {
        match event {
            Event::RunStarted { run, software_version, simulated } => {
                results.run = Some(run.clone());
                results.software_version = Some(software_version.clone());
                results.simulated |= simulated;
            }
            Event::InstrumentIdentified { role, identity } => {
                results.simulated |= identity.simulated;
                results.instruments.push((role.clone(), identity.clone()));
            }
            Event::PointFinished(point) => results.points.push(PointResult::from(point)),
            Event::PointRefused { index, line_v, reason } => {
                results.refused.push(Refusal { index: *index, line_v: *line_v, reason: reason.clone() });
            }
            Event::AddedCapacitorsFinished(outcome) => results.added_capacitors = Some(outcome.clone()),
            Event::RunEnded { outcome, message } => {
                results.outcome = Some(*outcome);
                results.message.clone_from(message);
            }
            _ => {}
        }
    }
    results
}

impl From<&Point> for PointResult {
    fn from(point: &Point) -> PointResult {
        let mut doubts: Vec<PointDoubt> = Vec::new();
        for (capture, findings) in &point.findings {
            for doubt in &findings.doubts {
                match doubts.iter_mut().find(|known| known.doubt == *doubt) {
                    Some(known) => known.captures.push(*capture),
                    None => doubts.push(PointDoubt { doubt: doubt.clone(), captures: vec![*capture] }),
                }
            }
        }
        PointResult {
            index: point.index,
            line_v: point.line_v,
            load_a: point.load_a,
            load_w: point.load_w,
            boundary_load_a: point.boundary_load_a,
            values: point.values.clone(),
            doubts,
        }
    }
}

impl PointValues {
    /// Every value with its SI name, in the order of the table.
    pub fn named(&self) -> [(&'static str, Option<Measured>); 11] {
        [
            ("node_capacitance_f", self.node_capacitance_f),
            ("node_capacitance_without_probe_f", self.node_capacitance_without_probe_f),
            ("leakage_inductance_h", self.leakage_inductance_h),
            ("relaxation_frequency_hz", self.relaxation_frequency_hz),
            ("relaxation_quality_factor", self.relaxation_quality_factor),
            ("leakage_frequency_hz", self.leakage_frequency_hz),
            ("leakage_quality_factor", self.leakage_quality_factor),
            ("reflected_voltage_v", self.reflected_voltage_v),
            ("bulk_voltage_v", self.bulk_voltage_v),
            ("peak_drain_voltage_v", self.peak_drain_voltage_v),
            ("turn_on_rate_hz", self.turn_on_rate_hz),
        ]
    }
}

impl Results {
    /// The table of points (RFC 4180): SI names as header, an empty field where there is no value.
    pub fn to_csv(&self) -> String {
        let mut csv = String::from("index,line_v,load_a,load_w,boundary_skipping_load_a,boundary_regular_load_a");
        for (name, _) in PointValues::default().named() {
            let _ = write!(csv, ",{name},{name}_standard_uncertainty");
        }
        csv.push_str(",doubts,simulated\r\n");
        for point in &self.points {
            let _ = write!(csv, "{},{},{},{}", point.index, point.line_v, point.load_a, point.load_w);
            match point.boundary_load_a {
                Some([skipping, regular]) => _ = write!(csv, ",{skipping},{regular}"),
                None => csv.push_str(",,"),
            }
            for (_, value) in point.values.named() {
                match value {
                    Some(value) => _ = write!(csv, ",{},{}", value.value, value.standard_uncertainty),
                    None => csv.push_str(",,"),
                }
            }
            let mut doubts: Vec<String> = point.doubts.iter().map(|doubt| word(doubt.doubt.name)).collect();
            doubts.dedup();
            let _ = write!(csv, ",{},{}\r\n", doubts.join(" "), self.simulated);
        }
        csv
    }
}

/// A typed name as the files spell it.
pub fn word(name: impl Serialize) -> String {
    serde_json::to_value(name).ok().and_then(|name| name.as_str().map(str::to_owned)).unwrap_or_default()
}
