//! Recordings with known capacitors across the drain node, offline: which file belongs to which capacitor, and what they say
//! together without any nominal value.

use super::output;
use clap::Args;
use ringstep::sequence::event::AddedOutcome;
use ringstep_analysis::{
    circuit::added::{AddedOptions, AddedPoint, AddedResult, added_capacitors},
    findings::{BoardFacts, Findings, RingKind, Subject},
    quantity::{COVERAGE_95, Measured, Unit, parse_quantity},
};
use serde_json::{Value, json};
use std::path::PathBuf;

/// Recordings with added capacitors.
#[derive(Debug, Clone, Args)]
pub(crate) struct AddedArgs {
    /// Recording of the same node with a capacitor added from drain to source, as "47 pF +- 1 %:FILE"; once for each.
    #[arg(long, value_name = "VALUE:FILE", value_parser = added)]
    pub(crate) added: Vec<Added>,
    /// What the leads add to each capacitor, as "0.5 pF +- 0.5 pF": an uncertainty they share.
    #[arg(long, value_name = "QUANTITY", value_parser = stray, requires = "added")]
    lead_stray: Option<Measured>,
    /// By how much one meter may have measured all capacitors wrong together, as "0.5 %".
    #[arg(long, value_name = "PERCENT", value_parser = percent, requires = "added")]
    meter_tolerance: Option<Measured>,
    /// How much the bare relaxation ring's frequency rises per volt of bulk voltage, as "120 Hz +- 20 Hz": recordings of
    /// other bulk voltages are corrected.
    #[arg(long, value_name = "HERTZ", value_parser = slope, requires = "added", allow_hyphen_values = true)]
    relaxation_slope: Option<Measured>,
}

/// One recording and the capacitor it was made with.
#[derive(Debug, Clone, PartialEq)]
pub(crate) struct Added {
    pub(crate) capacitance_f: Measured,
    pub(crate) file: PathBuf,
}

/// A recording that was analysed.
pub(crate) struct AddedRecord {
    pub(crate) added: Added,
    pub(crate) findings: Findings,
}

/// Everything the recordings say together, the bare one first.
pub(crate) struct AddedAnswer {
    records: Vec<AddedRecord>,
    rings: Vec<(RingKind, Result<AddedResult, String>)>,
    /// Recordings without a ring, a sentence each.
    missing: Vec<String>,
}

impl AddedArgs {
    /// Puts the recordings together; `records` begins with the bare one.
    pub(crate) fn answer(&self, records: Vec<AddedRecord>, subject: Subject, facts: &BoardFacts) -> AddedAnswer {
        let kinds: &[RingKind] = match subject {
            Subject::Drain => &[RingKind::Relaxation, RingKind::Leakage],
            Subject::RingDown => &[RingKind::Relaxation],
        };
        let mut missing = Vec::new();
        let rings = kinds.iter().map(|&kind| {
            let mut points = Vec::new();
            for AddedRecord { added, findings } in &records {
                match AddedPoint::of(added.capacitance_f, findings, kind) {
                    Some(point) => points.push(point),
                    None => missing.push(format!(
                        "{} shows no {}: see `ringstep fit` of that file alone.",
                        added.file.display(),
                        name(kind)
                    )),
                }
            }
            (kind, added_capacitors(&points, &self.options(kind, facts)).map_err(|refusal| refusal.to_string()))
        });
        let rings = rings.collect();
        AddedAnswer { records, rings, missing }
    }

    fn options(&self, kind: RingKind, facts: &BoardFacts) -> AddedOptions {
        let usual = AddedOptions::default();
        AddedOptions {
            lead_stray_f: self.lead_stray.unwrap_or(usual.lead_stray_f),
            common_meter: self.meter_tolerance.map_or(usual.common_meter, |meter| meter.standard_uncertainty),
            time_base: Measured::within(1.0, facts.accuracy.time_base).standard_uncertainty,
            frequency_slope_hz_per_v: self.relaxation_slope.filter(|_| kind == RingKind::Relaxation),
            ..usual
        }
    }
}

impl AddedAnswer {
    /// One object in SI values.
    pub(crate) fn to_json(&self) -> Value {
        let records = self.records.iter().map(|AddedRecord { added, findings }| {
            json!({
                "file": added.file,
                "capacitance_f": added.capacitance_f,
                "relaxation_frequency_hz": findings.relaxation_ring.map(|ring| ring.frequency_hz),
                "leakage_frequency_hz": findings.leakage_ring.map(|ring| ring.frequency_hz),
                "bulk_voltage_v": findings.bulk_voltage_v,
                "reflected_voltage_v": findings.reflected_voltage_v,
                "doubts": findings.doubts,
            })
        });
        let ring = |wanted: RingKind| {
            let found = self.rings.iter().find(|(kind, _)| *kind == wanted);
            found.map(|(_, result)| match result {
                Ok(result) => {
                    let mut json = json!(result);
                    json["inductance_95_h"] = json!(interval(result.inductance_h));
                    json["node_capacitance_95_f"] = json!(interval(result.node_capacitance_f));
                    json
                }
                Err(refused) => json!({ "refused": refused }),
            })
        };
        json!({
            "records": records.collect::<Vec<_>>(),
            "relaxation_ring": ring(RingKind::Relaxation),
            "leakage_ring": ring(RingKind::Leakage),
            "missing": self.missing,
        })
    }

    /// The recordings, the values beside those from nominal values, and every doubt.
    pub(crate) fn describe(&self, bare: &Findings, facts: &BoardFacts, subject: Subject) -> String {
        let mut parts = vec![output::table(&["added", "relaxation ring", "leakage ring", "bulk", "file"], self.rows())];
        let values = self
            .rings
            .iter()
            .filter_map(|(kind, result)| Some(values(*kind, result.as_ref().ok()?, bare, facts, subject)));
        let values: Vec<Vec<String>> = values.flatten().collect();
        if !values.is_empty() {
            parts.push(output::table(&["95 % interval", "from added capacitors", "from nominal values"], values));
        }
        let mut sentences: Vec<String> = self.missing.clone();
        for (kind, result) in &self.rings {
            match result {
                Ok(result) => {
                    let line = result.probability.map(|p| {
                        format!(
                            "Line of the {}: chi-square {:.2} on {} degrees of freedom, probability {p:.2}.",
                            name(*kind),
                            result.chi_square,
                            result.degrees_of_freedom
                        )
                    });
                    sentences.extend(line);
                    sentences.extend(result.doubts.iter().map(|doubt| format!("{}: {}", name(*kind), doubt.sentence)));
                }
                Err(refused) => sentences.push(format!("{}: {refused}.", name(*kind))),
            }
        }
        if !sentences.is_empty() {
            let list: Vec<String> = sentences.iter().map(|sentence| format!("  - {sentence}")).collect();
            parts.push(format!("About the added capacitors:\n{}", list.join("\n")));
        }
        format!("\nWith added capacitors:\n\n{}", parts.join("\n\n"))
    }

    fn rows(&self) -> Vec<Vec<String>> {
        let text = |value: Option<Measured>, unit| {
            value.map_or_else(|| "-".to_owned(), |value| value.text_with_standard_uncertainty(unit))
        };
        let row = |AddedRecord { added, findings }: &AddedRecord| {
            vec![
                added.capacitance_f.text_with_standard_uncertainty(Unit::Farad),
                text(findings.relaxation_ring.map(|ring| ring.frequency_hz), Unit::Hertz),
                text(findings.leakage_ring.map(|ring| ring.frequency_hz), Unit::Hertz),
                text(findings.bulk_voltage_v, Unit::Volt),
                added.file.display().to_string(),
            ]
        };
        self.records.iter().map(row).collect()
    }
}

/// What one ring gives, beside what rests on nominal values.
fn values(
    kind: RingKind,
    result: &AddedResult,
    bare: &Findings,
    facts: &BoardFacts,
    subject: Subject,
) -> Vec<Vec<String>> {
    let (names, nominal) = match (kind, subject) {
        (RingKind::Relaxation, Subject::RingDown) => {
            (["inductance", "capacitance"], [facts.primary_inductance_h, bare.node_capacitance_f])
        }
        (RingKind::Relaxation, Subject::Drain) => (
            ["primary inductance", "node capacitance, probe included"],
            [facts.primary_inductance_h, bare.node_capacitance_f],
        ),
        (RingKind::Leakage, _) => {
            (["leakage inductance", "node capacitance on the plateau"], [bare.leakage_inductance_h, None])
        }
    };
    let found = [(result.inductance_h, Unit::Henry), (result.node_capacitance_f, Unit::Farad)];
    let row = |((name, (found, unit)), nominal): ((&str, (Measured, Unit)), Option<Measured>)| {
        let nominal = nominal.map_or_else(|| "-".to_owned(), |value| value.text_with_95_percent_interval(unit));
        vec![name.to_owned(), found.text_with_95_percent_interval(unit), nominal]
    };
    names.into_iter().zip(found).zip(nominal).map(row).collect()
}

/// What the added capacitors of a run say, as lines.
pub(crate) fn outcome(outcome: &AddedOutcome) -> String {
    let mut lines = vec![format!("With added capacitors at {} V line, without a nominal value:", outcome.line_v)];
    let names = [
        ("primary inductance", "node capacitance, probe included", &outcome.relaxation),
        ("leakage inductance", "node capacitance on the plateau", &outcome.leakage),
    ];
    for (inductance, capacitance, result) in names {
        let Some(result) = result else { continue };
        lines.push(format!("  {inductance} {}", result.inductance_h.text_with_95_percent_interval(Unit::Henry)));
        lines.push(format!("  {capacitance} {}", result.node_capacitance_f.text_with_95_percent_interval(Unit::Farad)));
        lines.extend(result.doubts.iter().map(|doubt| format!("  - {}", doubt.sentence)));
    }
    lines.extend(outcome.refusals.iter().map(|refusal| format!("  - {refusal}")));
    lines.extend(outcome.doubts.iter().map(|doubt| format!("  - {}", doubt.sentence)));
    lines.join("\n")
}

fn interval(measured: Measured) -> [f64; 2] {
    let half_width = COVERAGE_95 * measured.standard_uncertainty;
    [measured.value - half_width, measured.value + half_width]
}

fn name(kind: RingKind) -> &'static str {
    match kind {
        RingKind::Relaxation => "relaxation ring",
        RingKind::Leakage => "leakage ring",
    }
}

/// A capacitor and its file: a path may hold colons, so the last one with a capacitance before it parts them.
fn added(text: &str) -> Result<Added, String> {
    let parted = text.rmatch_indices(':').find_map(|(at, _)| Some((capacitance(&text[..at]).ok()?, &text[at + 1..])));
    match parted {
        Some((_, file)) if file.trim().is_empty() => Err("a file belongs behind the colon".to_owned()),
        Some((capacitance_f, _)) if capacitance_f.value < 0.0 => Err("an added capacitance is not negative".to_owned()),
        Some((capacitance_f, file)) => Ok(Added { capacitance_f, file: PathBuf::from(file) }),
        None => {
            let Some((value, _)) = text.split_once(':') else {
                return Err("expected a capacitance, a colon and a file, as \"47 pF +- 1 %:with-47pF.csv\"".to_owned());
            };
            Err(capacitance(value).err().unwrap_or_default())
        }
    }
}

fn capacitance(text: &str) -> Result<Measured, String> {
    parse_quantity(text.trim(), Unit::Farad).map_err(|error| format!("the capacitance before the colon: {error}"))
}

fn stray(text: &str) -> Result<Measured, String> {
    parse_quantity(text, Unit::Farad).map_err(|error| error.to_string())
}

fn slope(text: &str) -> Result<Measured, String> {
    parse_quantity(text, Unit::Hertz).map_err(|error| error.to_string())
}

/// A half-width in per cent, as the standard uncertainty of a rectangular distribution.
fn percent(text: &str) -> Result<Measured, String> {
    let half_width = parse_quantity(text, Unit::Percent).map_err(|error| error.to_string())?.value;
    if (0.0..1.0).contains(&half_width) {
        Ok(Measured::within(1.0, half_width))
    } else {
        Err("expected 0 % to 100 %".to_owned())
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_path_may_hold_colons_and_a_value_a_tolerance() {
        for (text, value, uncertainty, file) in [
            ("47pF:bare.csv", 47e-12, 0.0, "bare.csv"),
            ("47 pF +- 1 %:a:b/47pF:x.csv", 47e-12, 0.47e-12 / 3f64.sqrt(), "a:b/47pF:x.csv"),
            ("0.1 nF \u{b1} 2 pF:C:\\x.csv", 100e-12, 2e-12 / 3f64.sqrt(), "C:\\x.csv"),
            ("0 F:again.csv", 0.0, 0.0, "again.csv"),
        ] {
            let added = added(text).unwrap_or_else(|error| panic!("{text}: {error}"));
            assert!((added.capacitance_f.value - value).abs() < 1e-21, "{text}");
            assert!((added.capacitance_f.standard_uncertainty - uncertainty).abs() < 1e-21, "{text}");
            assert_eq!(added.file, PathBuf::from(file));
        }
    }

    #[test]
    fn what_is_no_capacitor_and_file_says_what_was_expected() {
        for (text, said) in [
            ("47pF", "a colon and a file"),
            ("47pF:", "a file belongs behind the colon"),
            ("47 ohm:x.csv", "the unit F"),
            ("x.csv:47pF", "expected a number, found `x.csv`"),
            ("-47pF:x.csv", "not negative"),
        ] {
            let error = added(text).err().unwrap_or_else(|| panic!("{text} is taken"));
            assert!(error.contains(said), "{text}: {error}");
        }
    }
}
