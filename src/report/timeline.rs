//! The journal as a list of sentences with their times.

use super::text;
use crate::{
    record::journal::Entry,
    sequence::event::{AddedOutcome, Event},
};
use ringstep_analysis::quantity::Unit;

/// One line of the timeline.
#[derive(Debug)]
pub(super) struct Moment {
    pub(super) elapsed: String,
    pub(super) kind: &'static str,
    pub(super) sentence: String,
}

pub(super) fn moments(journal: &[Entry]) -> Vec<Moment> {
    let moment = |entry: &Entry| {
        let (kind, sentence) = tell(&entry.event);
        Moment { elapsed: format!("{:.2} s", entry.elapsed_s), kind, sentence }
    };
    journal.iter().map(moment).collect()
}

fn tell(event: &Event) -> (&'static str, String) {
    match event {
        Event::RunStarted { software_version, .. } => ("start", format!("Run started by ringstep {software_version}.")),
        Event::PreflightChecked { check, passed, .. } => {
            ("preflight", format!("{check}: {}.", if *passed { "holds" } else { "does not hold" }))
        }
        Event::InstrumentIdentified { role, identity } => {
            ("instrument", format!("{role} is {} {} at {}.", identity.maker, identity.model, identity.address))
        }
        Event::LineSet { line_v, frequency_hz } => {
            ("line", format!("Line set to {}, {}.", text::short(*line_v, "V"), text::short(*frequency_hz, "Hz")))
        }
        Event::Settled { waited_s, load, source, .. } => {
            let source = source.map_or(String::new(), |source| {
                let limiting = if source.limiting { ", limiting its current" } else { "" };
                format!(
                    "; source at {}, {}{limiting}",
                    text::short(source.voltage_v, "V"),
                    text::short(source.current_a, "A")
                )
            });
            let (volts, amperes) = (text::short(load.voltage_v, "V"), text::short(load.current_a, "A"));
            ("settled", format!("Settled after {}: load at {volts}, {amperes}{source}.", text::short(*waited_s, "s")))
        }
        Event::Captured(capture) => {
            let (purpose, load) = (text::purpose(capture.purpose), text::short(capture.load_a, "A"));
            ("capture", format!("Capture {}: {purpose}, repeat {}, load {load}.", capture.number, capture.repeat))
        }
        Event::LoadStepped(step) => {
            let [continuous, discontinuous, skipped] = step.cycles;
            let power = text::short(step.load.power_w(), "W");
            let cycles = format!("{continuous} continuous, {discontinuous} discontinuous, {skipped} skipped cycles");
            ("load", format!("Load at {}, {power}: {cycles}.", text::short(step.set_a, "A")))
        }
        Event::PointFinished(point) => ("point", format!("Point at {} line finished.", text::short(point.line_v, "V"))),
        Event::PointRefused { line_v, reason, .. } => {
            ("refused", format!("Point at {} line refused: {reason}", text::short(*line_v, "V")))
        }
        Event::Discharge(discharge) => {
            let bulk = discharge.bulk_v.map_or("not known".to_owned(), |bulk_v| text::short(bulk_v, "V"));
            let output = text::short(discharge.output_v, "V");
            ("by hand", format!("Power taken off; bulk voltage {bulk}, output at {output}."))
        }
        Event::HandworkAsked(work) => {
            let what = work.fit.map_or("removal of the capacitor".to_owned(), |capacitance| {
                format!("fitting of {}", capacitance.text_with_standard_uncertainty(Unit::Farad))
            });
            ("by hand", format!("Asked for: {what}."))
        }
        Event::HandworkDone { capacitance_f, bulk_v } => {
            let (fitted, bulk) = (text::short(*capacitance_f, "F"), text::short(*bulk_v, "V"));
            ("by hand", format!("Confirmed: {fitted} fitted; bulk capacitor measured by hand at {bulk}."))
        }
        Event::AddedPointFinished(point) => {
            let farad = point.capacitance_f.text_with_standard_uncertainty(Unit::Farad);
            ("point", format!("Point at {} line with {farad} added finished.", text::short(point.line_v, "V")))
        }
        Event::AddedCapacitorRefused { capacitance_f, reason } => {
            ("refused", format!("Added capacitor of {} not measured: {reason}.", text::short(*capacitance_f, "F")))
        }
        Event::AddedCapacitorsFinished(outcome) => ("point", added(outcome)),
        Event::Noted { note } => ("note", note.clone()),
        Event::SafeOff { reason, source_off, load_off } => {
            let confirmed = |off: &bool| if *off { "confirmed off" } else { "NOT confirmed off" };
            ("off", format!("Safe-off ({reason}): source {}, load {}.", confirmed(source_off), confirmed(load_off)))
        }
        Event::RunEnded { message, .. } => ("end", message.clone().unwrap_or_else(|| "Run ended.".to_owned())),
    }
}

/// What the added capacitors say, in a sentence.
fn added(outcome: &AddedOutcome) -> String {
    let names = [("primary", &outcome.relaxation), ("leakage", &outcome.leakage)];
    let values = names.iter().filter_map(|(name, result)| {
        let result = result.as_ref()?;
        Some(format!(
            "{name} inductance {} with {}",
            result.inductance_h.text_with_95_percent_interval(Unit::Henry),
            result.node_capacitance_f.text_with_95_percent_interval(Unit::Farad)
        ))
    });
    let doubts = names.iter().filter_map(|(_, result)| result.as_ref()).flat_map(|result| &result.doubts);
    let sentences: Vec<String> = values
        .chain(outcome.refusals.iter().cloned())
        .chain(doubts.chain(&outcome.doubts).map(|doubt| doubt.sentence.trim_end_matches('.').to_owned()))
        .collect();
    format!("From added capacitors, without a nominal value: {}.", sentences.join("; "))
}
