//! Known capacitors across the drain node, one after another: power off with what is known of the charge that stays, a person
//! fits the part and says so, the same line voltage and load again, and in the end the bare node once more.

use super::{
    AddedCapacitors, AddedPart, RunError,
    bench::Bench,
    combine::{Captured, combine, leakage_frequencies},
    event::{AddedOutcome, AddedPointValues, AddedStress, Discharge, Event, Handwork, Point, PointValues},
    point::MeasuredPoint,
};
use crate::station::{CAUTIONS, Operator};
use ringstep_analysis::{
    circuit::added::{AddedDoubt, AddedDoubtName, AddedOptions, AddedPoint, AddedResult, added_capacitors},
    quantity::{Measured, Unit},
};

/// Voltage below which a person may touch the bulk capacitor: 60 V direct voltage (IEC 60204-1, 6.2.4; hazardous-live threshold of
/// IEC 61010-1).
const TOUCHABLE_V: f64 = 60.0;
/// Answers that are not understood, or voltages that are still too high, before the work is called off.
const ATTEMPTS: usize = 10;
/// Standard deviations between the two measurements of the bare node that are doubted: one in a hundred by chance.
const BARE_DISAGREES: f64 = 2.58;

/// The node with one capacitor, or none: what the lines are drawn through.
struct Node {
    capacitance_f: Measured,
    relaxation_hz: Option<Measured>,
    /// At the measuring load and at the load start.
    leakage_hz: [Option<Measured>; 2],
    bulk_v: Option<Measured>,
    reflected_v: Option<Measured>,
}

impl Node {
    fn new(capacitance_f: Measured, values: &PointValues, leakage_hz: [Option<Measured>; 2]) -> Self {
        let (bulk_v, reflected_v) = (values.bulk_voltage_v, values.reflected_voltage_v);
        Self { capacitance_f, relaxation_hz: values.relaxation_frequency_hz, leakage_hz, bulk_v, reflected_v }
    }
}

/// Why the work with capacitors ends early: the person called it off.
struct CalledOff(String);

impl Bench<'_> {
    /// Measures the node with each capacitor of the plan and bare again; `false` where that came to nothing or to part of it.
    pub(super) async fn add_capacitors(
        &mut self,
        added: &AddedCapacitors,
        measured: &[MeasuredPoint],
        operator: &dyn Operator,
    ) -> Result<bool, RunError> {
        let Some(before) = measured.iter().find(|measured| measured.point.line_v == added.line_v) else {
            return self.refuse(0.0, format!("the bare node was not measured at {} V line", added.line_v));
        };
        let bare = &before.point;
        self.point = bare.index;
        let mut points = vec![Node::new(Measured::exact(0.0), &bare.values, before.leakage_frequencies_hz)];
        let mut whole = true;
        for part in &added.parts {
            let stress = self.stress(added, part, bare);
            if stress.rating_v < stress.needed_rating_v {
                whole = self.refuse(part.capacitance_f.value, too_weak(&stress))?;
                continue;
            }
            let work = Handwork { fit: Some(part.capacitance_f), predicted: Some(stress) };
            if let Err(CalledOff(reason)) = self.handwork(work, points.len() > 1, operator).await? {
                self.refuse(part.capacitance_f.value, reason)?;
                whole = false;
                break;
            }
            points.push(self.rings_again(part.capacitance_f, bare).await?);
        }
        if points.len() == 1 {
            return Ok(false);
        }
        let again = self.bare_again(bare, operator).await?;
        whole &= again.is_some();
        let outcome = outcome(&self.options(added), [bare.load_a, self.job.plan.load_start_a], bare, points, again);
        let told = outcome.relaxation.is_some();
        self.keeper.event(&Event::AddedCapacitorsFinished(outcome))?;
        Ok(whole && told)
    }

    fn refuse(&mut self, capacitance_f: f64, reason: String) -> Result<bool, RunError> {
        self.keeper.event(&Event::AddedCapacitorRefused { capacitance_f, reason })?;
        Ok(false)
    }

    /// What the capacitor must stand, and what it costs the switch. It slows the node down, so that the peak without it is the
    /// highest to expect.
    fn stress(&self, added: &AddedCapacitors, part: &AddedPart, bare: &Point) -> AddedStress {
        let values = &bare.values;
        let peak_v = values.peak_drain_voltage_v.map_or(self.job.expected_peak_v, |peak| peak.value);
        let bulk_v = values.bulk_voltage_v.map_or(bare.line_v * std::f64::consts::SQRT_2, |bulk| bulk.value);
        let reflected_v = values.reflected_voltage_v.map_or(self.job.board.reflected_voltage_v(), |v| v.value);
        let turn_on_v = bulk_v + reflected_v;
        let nominal_hz = self.facts.switching_period_s.map_or(0.0, f64::recip);
        let turn_on_rate_hz = values.turn_on_rate_hz.map_or(nominal_hz, |rate| rate.value.max(nominal_hz));
        let turn_on_energy_j = 0.5 * part.capacitance_f.value * turn_on_v * turn_on_v;
        AddedStress {
            peak_v,
            needed_rating_v: added.needed_rating_v(peak_v),
            rating_v: part.rating_v,
            turn_on_v,
            turn_on_energy_j,
            turn_on_rate_hz,
            power_w: turn_on_energy_j * turn_on_rate_hz,
        }
    }

    /// What the points have in common.
    fn options(&self, added: &AddedCapacitors) -> AddedOptions {
        AddedOptions {
            lead_stray_f: added.lead_stray_f,
            common_meter: added.common_meter,
            time_base: Measured::within(1.0, self.facts.accuracy.time_base).standard_uncertainty,
            ..AddedOptions::default()
        }
    }

    /// Power off, then a person does the work and says so.
    async fn handwork(
        &mut self,
        work: Handwork,
        another_is_fitted: bool,
        operator: &dyn Operator,
    ) -> Result<Result<(), CalledOff>, RunError> {
        let discharge = self.power_off().await?;
        self.keeper.event(&Event::HandworkAsked(work))?;
        let prompt = format!("{}\n\n{}\n\n{}", cautions(), evidence(&discharge), request(&work, another_is_fitted));
        let bulk_v = match bulk_voltage(&prompt, operator).await {
            Ok(bulk_v) => bulk_v,
            Err(called_off) => return Ok(Err(called_off)),
        };
        if let Err(called_off) = done(&work, operator).await {
            return Ok(Err(called_off));
        }
        *self.fitted = work.fit;
        let capacitance_f = work.fit.map_or(0.0, |capacitance| capacitance.value);
        self.keeper.event(&Event::HandworkDone { capacitance_f, bulk_v })?;
        Ok(Ok(()))
    }

    /// Source off, load off, both read back, and what the instruments see then.
    async fn power_off(&mut self) -> Result<Discharge, RunError> {
        self.source.off().await?;
        self.load.off().await?;
        (self.line_v, self.load_a) = (0.0, 0.0);
        let (load, source) = self.read().await?;
        let by_hand = |driver: &str| driver == "by_hand";
        let discharge = Discharge {
            source_read_back: !by_hand(&self.source.identity().driver),
            source,
            load_read_back: !by_hand(&self.load.identity().driver),
            output_v: load.voltage_v,
            // The scope triggers on edges, and a board that is off has none; nothing else is connected to the primary.
            bulk_v: None,
        };
        self.keeper.event(&Event::Discharge(discharge.clone()))?;
        Ok(discharge)
    }

    /// The rings at the line voltage and the load of the bare point.
    async fn rings_again(&mut self, capacitance_f: Measured, bare: &Point) -> Result<Node, RunError> {
        self.set_line(bare.line_v).await?;
        self.draw(self.job.plan.load_start_a).await?;
        self.settle_output().await?;
        let first = self.settle_levels().await?;
        let leakage = self.leakage_rings(&first).await?;
        let (survey, _) = self.survey_at(bare.load_a).await?;
        let relaxation = self.relaxation_rings(&survey).await?;
        let captured = Captured { survey: &survey, relaxation: &relaxation, leakage: &leakage };
        let (values, leakage_frequencies_hz) = (combine(&captured, &self.facts), leakage_frequencies(&captured));
        let node = Node::new(capacitance_f, &values, leakage_frequencies_hz);
        let findings = leakage.into_iter().chain(relaxation).chain([(survey.number, survey.findings)]).collect();
        let (line_v, load_a) = (self.line_v, self.load_a);
        let point = AddedPointValues { capacitance_f, line_v, load_a, leakage_frequencies_hz, values, findings };
        self.keeper.event(&Event::AddedPointFinished(point))?;
        Ok(node)
    }

    /// The bare node once more; `None` where the capacitor was not taken off.
    async fn bare_again(&mut self, bare: &Point, operator: &dyn Operator) -> Result<Option<Node>, RunError> {
        match self.handwork(Handwork { fit: None, predicted: None }, true, operator).await? {
            Ok(()) => self.rings_again(Measured::exact(0.0), bare).await.map(Some),
            Err(CalledOff(reason)) => {
                self.refuse(
                    0.0,
                    format!("{reason}; the bare node was not measured again, and a capacitor may still be fitted"),
                )?;
                Ok(None)
            }
        }
    }
}

fn too_weak(stress: &AddedStress) -> String {
    format!(
        "it is rated {:.0} V, and the drain's peak of {:.0} V with the plan's margin takes {:.0} V: use one of a higher rating",
        stress.rating_v, stress.peak_v, stress.needed_rating_v
    )
}

fn cautions() -> String {
    let list: Vec<String> = CAUTIONS.iter().map(|caution| format!("  - {caution}")).collect();
    format!("Cautions:\n{}", list.join("\n"))
}

/// What is known of the charge that stays, and plainly what is not.
fn evidence(discharge: &Discharge) -> String {
    let told = |read_back: bool| if read_back { "read back as off" } else { "off as the operator says" };
    let source =
        discharge.source.map_or("it measures nothing".to_owned(), |read| format!("it reads {:.1} V", read.voltage_v));
    let bulk = match discharge.bulk_v {
        Some(bulk_v) => format!("Bulk voltage: {bulk_v:.0} V."),
        None => {
            "Bulk voltage: NOT KNOWN. No instrument of this station sees the bulk capacitor once the board has stopped \
                 switching; it may hold the full voltage of the rectified line."
                .to_owned()
        }
    };
    format!(
        "Source {}; {source}. Load input {}; the output stands at {:.2} V, which tells nothing of the bulk capacitor.\n{bulk}",
        told(discharge.source_read_back),
        told(discharge.load_read_back),
        discharge.output_v,
    )
}

/// What is to be done, and what it will do to the board.
fn request(work: &Handwork, another_is_fitted: bool) -> String {
    let farad = |value: Measured| value.text_with_standard_uncertainty(Unit::Farad);
    let Some(capacitance) = work.fit else {
        return "Next: the capacitor is taken off again, by qualified hands, so that the bare node can be measured once more."
            .to_owned();
    };
    let before = if another_is_fitted { "take the one that is fitted off, and then " } else { "" };
    let stress = work.predicted.map_or(String::new(), |stress| {
        format!(
            " It must stand {:.0} V (the drain's peak of {:.0} V and the plan's margin); it is rated {:.0} V. At each turn-on from \
             {:.0} V the switch turns up to {:.2} uJ more into heat, {:.2} W at {:.1} kHz.",
            stress.needed_rating_v,
            stress.peak_v,
            stress.rating_v,
            stress.turn_on_v,
            1e6 * stress.turn_on_energy_j,
            stress.power_w,
            1e-3 * stress.turn_on_rate_hz,
        )
    });
    format!(
        "Next: {before}{} (C0G/NP0) from drain to source, at the switch, with leads as short as can be, by qualified hands.{stress}",
        farad(capacitance)
    )
}

/// The bulk voltage as a person measures it, once it can be touched.
async fn bulk_voltage(prompt: &str, operator: &dyn Operator) -> Result<f64, CalledOff> {
    let ask = "Measure the voltage across the bulk capacitor with a meter that you have just seen working. What does it show, in V?";
    let mut prompt = format!("{prompt}\n\n{ask}");
    for _ in 0..ATTEMPTS {
        let answer = answer(&prompt, operator).await?;
        let text = answer.strip_suffix('V').unwrap_or(&answer).trim();
        prompt = match text.parse::<f64>() {
            Ok(bulk_v) if bulk_v.abs() < TOUCHABLE_V => return Ok(bulk_v),
            Ok(bulk_v) if bulk_v.is_finite() => format!(
                "{bulk_v} V is not below {TOUCHABLE_V} V. Do not touch the board: let it discharge, or have it discharged through a \
                 resistor by trained hands. {ask}"
            ),
            _ => format!("`{answer}` is not a number of V. {ask}"),
        };
    }
    Err(CalledOff(format!("the bulk voltage was not told to be below {TOUCHABLE_V} V in {ATTEMPTS} answers")))
}

/// The person's word that the work is done.
async fn done(work: &Handwork, operator: &dyn Operator) -> Result<(), CalledOff> {
    let (word, what) = match work.fit {
        Some(_) => ("fitted", "it is fitted"),
        None => ("removed", "it is taken off"),
    };
    let prompt = format!("Once {what} and everyone stands clear: the board is energised as soon as you type `{word}`.");
    for _ in 0..ATTEMPTS {
        if answer(&prompt, operator).await?.eq_ignore_ascii_case(word) {
            return Ok(());
        }
    }
    Err(CalledOff(format!("`{word}` was not confirmed in {ATTEMPTS} answers")))
}

async fn answer(prompt: &str, operator: &dyn Operator) -> Result<String, CalledOff> {
    let answer = operator.ask(prompt).await.map(|answer| answer.trim().to_owned());
    answer.ok_or_else(|| CalledOff("the operator called it off".to_owned()))
}

/// The lines through all points, and whether the bare node stayed what it was; `loads_a` are the measuring load and the load
/// start.
fn outcome(
    options: &AddedOptions,
    loads_a: [f64; 2],
    bare: &Point,
    mut nodes: Vec<Node>,
    again: Option<Node>,
) -> AddedOutcome {
    let mut outcome = AddedOutcome { point: bare.index, line_v: bare.line_v, ..AddedOutcome::default() };
    if again.is_none() {
        outcome.doubts.push(AddedDoubt {
            name: AddedDoubtName::BareNodeMoved,
            sentence: "The bare node was not measured again, so that nothing tells whether it stayed what it was."
                .to_owned(),
        });
    }
    nodes.extend(again);
    let relaxation_hz = |node: &Node| node.relaxation_hz;
    match line(options, &nodes, relaxation_hz) {
        Ok(result) => outcome.relaxation = Some(result),
        Err(refusal) => outcome.refusals.push(format!("relaxation ring: {refusal}")),
    }
    outcome.doubts.extend(bare_moved("relaxation", &nodes, outcome.relaxation.as_ref(), relaxation_hz));
    let lines = [0, 1].map(|load| line(options, &nodes, |node| node.leakage_hz[load]));
    let uncertainty =
        |load: &usize| lines[*load].as_ref().map_or(f64::INFINITY, |r| r.inductance_h.relative_uncertainty());
    let load = usize::from(uncertainty(&1) < uncertainty(&0));
    match &lines[load] {
        Ok(result) => {
            outcome.leakage = Some(result.clone());
            outcome.leakage_load_a = Some(loads_a[load]);
            outcome.doubts.extend(bare_moved("leakage", &nodes, Some(result), |node| node.leakage_hz[load]));
        }
        Err(refusal) => outcome.refusals.push(format!("leakage ring: {refusal}")),
    }
    outcome
}

fn line(
    options: &AddedOptions,
    nodes: &[Node],
    frequency_hz: impl Fn(&Node) -> Option<Measured>,
) -> Result<AddedResult, String> {
    let points = nodes.iter().filter_map(|node| {
        Some(AddedPoint {
            capacitance_f: node.capacitance_f,
            frequency_hz: frequency_hz(node)?,
            bulk_voltage_v: node.bulk_v,
            reflected_voltage_v: node.reflected_v,
        })
    });
    added_capacitors(&points.collect::<Vec<_>>(), options).map_err(|refusal| refusal.to_string())
}

/// A doubt where the bare node, first and last of all, rings at another frequency than before, by more than chance and by enough to
/// move the capacitance by its standard uncertainty.
fn bare_moved(
    name: &str,
    nodes: &[Node],
    result: Option<&AddedResult>,
    frequency_hz: impl Fn(&Node) -> Option<Measured>,
) -> Option<AddedDoubt> {
    let bare = |node: &&Node| node.capacitance_f.value == 0.0;
    let before = frequency_hz(nodes.first().filter(bare)?)?;
    let after = frequency_hz(nodes.last().filter(bare)?)?;
    let both = before.standard_uncertainty.hypot(after.standard_uncertainty);
    let moved_hz = (after.value - before.value).abs();
    let matters = result.is_none_or(|result| {
        // The capacitance of a pair moves by 2k/(k - 1) of a relative change of frequency, k the squared period ratio.
        let squared = result.period_ratio * result.period_ratio;
        let moved = 2.0 * squared / (squared - 1.0) * moved_hz / before.value;
        moved > result.node_capacitance_f.relative_uncertainty()
    });
    if moved_hz <= BARE_DISAGREES * both || !matters {
        return None;
    }
    let hertz = |value: Measured| value.text_with_standard_uncertainty(Unit::Hertz);
    Some(AddedDoubt {
        name: AddedDoubtName::BareNodeMoved,
        sentence: format!(
            "The bare node's {name} ring was {} before the capacitors and {} after them: look for a changed probe position, for \
             what the soldering left behind, or let the board come to the same temperature.",
            hertz(before),
            hertz(after)
        ),
    })
}
