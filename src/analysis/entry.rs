//! The one entry: from samples to findings. What can't be observed is `None`, with a doubt that says why.

use crate::{
    budget::Budget,
    circuit::{CircuitValues, Observed, RingObservation},
    cycles::{RingWindow, Segment, Segmentation, segment},
    findings::{BoardFacts, CycleMode, Doubt, DoubtName, Findings, Ring, RingFit, RingKind, Subject},
    fit::{self, Accepted, Refusal, RingRecord, Times},
    quantity::Measured,
    waveform::{Samples, TimeAxis},
};

/// Rings fitted of one record at most; the longest are taken.
const RINGS: usize = 12;
/// A ring shorter than this share of the longest adds less than it may spoil.
const WORTH: f64 = 0.5;
/// Periods at the start of a long ring that may be left out, where large swings bend it out of shape.
const BENT: usize = 4;
/// Periods that must remain of it.
const REMAIN: f64 = 4.0;

/// Analyses a record as the drain voltage of a switching converter or as a bare ring-down.
pub fn analyse(samples: &Samples, subject: Subject, facts: &BoardFacts) -> Findings {
    match subject {
        Subject::Drain => drain(samples, facts),
        Subject::RingDown => ring_down(samples, facts),
    }
}

fn record(samples: &Samples) -> RingRecord<'_> {
    let times_s = match samples.time() {
        TimeAxis::Even { start_s, interval_s } => Times::Even { start_s: *start_s, interval_s: *interval_s },
        TimeAxis::Uneven(times) => Times::Uneven(times),
    };
    RingRecord { times_s, volts: samples.volts(), step_v: samples.step_v(), clip_v: samples.clip_v() }
}

fn ring_down(samples: &Samples, facts: &BoardFacts) -> Findings {
    let mut findings = Findings::default();
    let record = record(samples);
    match fit::find_ring_down(&record) {
        None => findings.doubt(DoubtName::NoRing, "Nothing in the record rings: it is noise or an aperiodic decay."),
        Some(window) => {
            let rings = fit_rings([fit::fit_ring(&record.part(window), RingKind::Relaxation)], &mut findings);
            findings.relaxation_ring = fit::combine(&rings);
            circuit_values(&rings, &[], facts, &mut findings);
        }
    }
    findings
        .doubt(DoubtName::NoSwitchingCycles, "A bare ring-down has no switching cycles: the ring is reported alone.");
    findings
}

fn drain(samples: &Samples, facts: &BoardFacts) -> Findings {
    let mut findings = Findings::default();
    let highest = samples.volts().iter().copied().fold(f64::NEG_INFINITY, f64::max);
    findings.peak_drain_voltage_v = Some(Measured::within(highest, samples.step_v().unwrap_or(0.0)));
    let Some(segmentation) = segment(samples, facts) else {
        findings.peak_drain_voltage_v = None;
        findings.doubt(
            DoubtName::NoSwitchingCycles,
            "No switching cycles can be told in the record; check probe, trigger and sample rate, or read it as a bare ring-down.",
        );
        return findings;
    };
    rates(&segmentation, &mut findings);
    voltages(&segmentation, &mut findings);
    let relaxation = longest(&segmentation, |segment| segment.relaxation.as_ref());
    let relaxation = relaxation.map(|window| settled(samples, &window, RingKind::Relaxation));
    let relaxation = fit_rings(relaxation, &mut findings);
    findings.relaxation_ring = fit::combine(&relaxation);
    let leakage = longest(&segmentation, |segment| segment.leakage.as_ref());
    let leakage = leakage.map(|window| settled(samples, &window, RingKind::Leakage));
    let leakage = fit_rings(leakage, &mut findings);
    findings.leakage_ring = fit::combine(&leakage);
    absences(&segmentation, &mut findings);
    circuit_values(&relaxation, &leakage, facts, &mut findings);
    findings.cycles = segmentation.segments.iter().map(|segment| segment.cycle).collect();
    findings
}

/// The windows worth fitting: the longest, in the order of the record.
fn longest(segmentation: &Segmentation, pick: fn(&Segment) -> Option<&RingWindow>) -> impl Iterator<Item = RingWindow> {
    let mut windows: Vec<&RingWindow> = segmentation.segments.iter().filter_map(pick).collect();
    windows.sort_by(|a, b| b.periods.total_cmp(&a.periods));
    let enough = windows.first().map_or(0.0, |window| WORTH * window.periods);
    windows.retain(|window| window.periods >= enough);
    windows.truncate(RINGS);
    windows.sort_by_key(|window| window.samples.start);
    windows.into_iter().cloned().collect::<Vec<_>>().into_iter()
}

/// Fits a ring, or as much of it as one model describes. At large swings a steep capacitance bends the first periods so far that
/// none does; once they are left out, the small swings tell the capacitance at the bulk voltage.
fn settled(samples: &Samples, window: &RingWindow, kind: RingKind) -> Result<Accepted, Refusal> {
    let (record, whole) = (record(samples), window.samples.clone());
    let bent = |fitted: &Result<Accepted, Refusal>| {
        fitted.as_ref().is_err_and(|refusal| refusal.doubt.name == DoubtName::NotOneRing)
    };
    let fitted = fit::fit_ring(&record.part(whole.clone()), kind);
    if !bent(&fitted) {
        return fitted;
    }
    let period = window.period_s / samples.mean_interval_s();
    let later = (1..=BENT).filter(|&periods| window.periods - periods as f64 >= REMAIN);
    later
        .map(|periods| fit::fit_ring(&record.part(whole.start + (periods as f64 * period) as usize..whole.end), kind))
        .find(|part| !bent(part))
        .unwrap_or(fitted)
}

fn fit_rings(fitted: impl IntoIterator<Item = Result<Accepted, Refusal>>, findings: &mut Findings) -> Vec<Ring> {
    let mut rings: Vec<(Ring, f64)> = Vec::new();
    let mut refused: Vec<Doubt> = Vec::new();
    for ring in fitted {
        match ring {
            Ok(Accepted { fit, ring, doubts }) => {
                rings.push((ring, fit.level_v()));
                findings.ring_fits.push(fit);
                doubts.into_iter().for_each(|doubt| findings.add(doubt));
            }
            Err(Refusal { doubt, rejected }) => {
                findings.ring_fits.extend(rejected.map(|fit| RingFit { accepted: false, ..*fit }));
                refused.push(doubt);
            }
        }
    }
    if rings.is_empty() {
        refused.into_iter().for_each(|doubt| findings.add(doubt));
    }
    let joined = fit::join(&rings);
    if !joined.left_out.is_empty() {
        let sentence = format!(
            "{} of {} rings do not lie with the others and were left out: look for a second operating state, or capture fewer cycles.",
            joined.left_out.len(),
            rings.len()
        );
        findings.doubt(DoubtName::RingsDisagree, &sentence);
    }
    joined.rings
}

fn rates(segmentation: &Segmentation, findings: &mut Findings) {
    let turn_ons = &segmentation.turn_ons_s;
    if let (Some(first), Some(last), true) = (turn_ons.first(), turn_ons.last(), turn_ons.len() >= 2) {
        let count = (turn_ons.len() - 1) as f64;
        let mean_s = (last - first) / count;
        let squares: f64 = turn_ons.windows(2).map(|pair| (pair[1] - pair[0] - mean_s).powi(2)).sum();
        let relative = (squares / count).sqrt() / mean_s / count.sqrt();
        findings.turn_on_rate_hz = Some(Measured { value: 1.0 / mean_s, standard_uncertainty: relative / mean_s });
    } else {
        findings.doubt(DoubtName::TooFewPeriods, "Fewer than two turn-ons stand in the record: no turn-on rate.");
    }
}

fn voltages(segmentation: &Segmentation, findings: &mut Findings) {
    let ringing = || segmentation.segments.iter().filter(|segment| segment.relaxation.is_some());
    let all = || segmentation.segments.iter();
    let bulk = spread(ringing().map(|segment| segment.bulk_v)).or_else(|| spread(all().map(|segment| segment.bulk_v)));
    findings.bulk_voltage_v = bulk;
    findings.reflected_voltage_v = spread(all().filter_map(|segment| segment.reflected_v));
    if findings.reflected_voltage_v.is_none() {
        findings.doubt(
            DoubtName::ContinuousConduction,
            "No end of demagnetisation stands in the record, so the reflected voltage at the knee can't be read.",
        );
    }
}

/// Mean and its standard uncertainty from the scatter; of one value the scatter is not known and taken as 1 %.
fn spread(values: impl Iterator<Item = f64>) -> Option<Measured> {
    let values: Vec<f64> = values.collect();
    let count = values.len() as f64;
    let mean = values.iter().sum::<f64>() / count;
    let squares: f64 = values.iter().map(|value| (value - mean).powi(2)).sum();
    match values.len() {
        0 => None,
        1 => Some(Measured { value: mean, standard_uncertainty: 0.01 * mean.abs() }),
        _ => Some(Measured { value: mean, standard_uncertainty: (squares / (count - 1.0) / count).sqrt() }),
    }
}

fn absences(segmentation: &Segmentation, findings: &mut Findings) {
    if let Some(collapse) = &segmentation.collapse {
        findings.doubt(DoubtName::ProtectionOrRestart, collapse);
    }
    if !segmentation.turn_ons_resolved {
        findings.doubt(
            DoubtName::CoarseSampling,
            "The shortest on-states last under four samples, so that cycles may be missing: shorten the window.",
        );
    }
    let whole = || segmentation.segments.iter().filter(|segment| segment.cycle.mode != CycleMode::Incomplete);
    if findings.relaxation_ring.is_none() {
        if whole().count() > 0 && whole().all(|segment| segment.cycle.mode == CycleMode::Continuous) {
            findings.doubt(
                DoubtName::ContinuousConduction,
                "Every cycle is in continuous conduction: there is no relaxation ring. Lower the load.",
            );
        }
        findings.doubt(
            DoubtName::NoRelaxationRing,
            "No relaxation ring could be fitted. Lower the load until cycles are skipped, and capture the longest gap.",
        );
    }
    if findings.leakage_ring.is_none() {
        findings.doubt(
            DoubtName::NoLeakageRing,
            "No leakage ring could be told from the plateau. Capture the turn-off at a higher load and sample rate.",
        );
    }
}

fn circuit_values(relaxation: &[Ring], leakage: &[Ring], facts: &BoardFacts, findings: &mut Findings) {
    if relaxation.is_empty() {
        return;
    }
    let observed = Observed {
        relaxation: RingObservation::of(relaxation),
        leakage: RingObservation::of(leakage),
        bulk_voltage_v: findings.bulk_voltage_v,
        reflected_voltage_v: findings.reflected_voltage_v,
        release_v: findings.release_v(),
    };
    let values = CircuitValues::of(&observed, facts);
    findings.node_capacitance_f = values.node_capacitance.as_ref().map(Budget::measured);
    findings.leakage_inductance_h = values.leakage_inductance.as_ref().map(Budget::measured);
    if facts.primary_inductance_h.is_none() {
        findings.doubt(
            DoubtName::BoardFactMissing,
            "The primary inductance is not known, so the ring gives no capacitance: state it in the board file.",
        );
    } else if values.node_capacitance.is_none() {
        findings.doubt(
            DoubtName::BoardFactMissing,
            "No capacitance rings so with the snubber and the inductance stated: check both in the board file.",
        );
    }
    if values.textbook {
        findings.doubt(
            DoubtName::TextbookValue,
            "The leakage inductance rests on the relaxation ring's capacitance; on the plateau the node has another: state the \
             transistor's output capacitance and each secondary's rectifier and snubber capacitance in the board file, or measure with \
             an added capacitor.",
        );
    }
    findings.budgets = values.budgets();
}

impl Findings {
    fn doubt(&mut self, name: DoubtName, sentence: &str) {
        self.add(Doubt { name, sentence: sentence.to_owned() });
    }

    /// Of one kind of doubt the first is told: rings of one record differ in figures, not in what is to be done.
    fn add(&mut self, mut doubt: Doubt) {
        as_sentence(&mut doubt.sentence);
        if self.doubts.iter().all(|known| known.name != doubt.name) {
            self.doubts.push(doubt);
        }
    }
}

/// A capital at the beginning and a full stop at the end.
fn as_sentence(text: &mut String) {
    if let Some(first) = text.chars().next() {
        text.replace_range(..first.len_utf8(), &first.to_uppercase().to_string());
    }
    if !text.ends_with('.') {
        text.push('.');
    }
}
