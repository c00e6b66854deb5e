//! Circuit values of one record or one point of a plan, each with its uncertainty budget: node capacitance, the same without the
//! probe, leakage inductance, voltages.

use super::{
    parts::{CapacitancePart, parts, reflected_secondaries},
    resonance::{Known, other_element},
};
use crate::{
    budget::{Budget, Input, Model},
    findings::{BoardFacts, Ring},
    fit::weighted_mean,
    quantity::{Measured, Unit},
};

/// Half-width of what is not known of the capacitance on the plateau over that of the relaxation ring: usually 2 to 3 % less, and as
/// much as 27 % where the secondary side carries much capacitance, which one drain waveform cannot tell.
const TEXTBOOK_HALF_WIDTH: f64 = 0.27;
/// The same for the clamp diode's part of it, where the clamp is there and its diode is not stated (common practice: a fast diode
/// of a few picofarad).
const CLAMP_HALF_WIDTH: f64 = 0.015;
/// Usual leakage over primary inductance where no leakage ring was seen (common practice, 1 to 3 %).
const USUAL_LEAKAGE: f64 = 0.03;
/// Relative half-widths of what one resonance leaves out of the node and of the plateau: the losses' place in the circuit, what the
/// rectifier and the output do while they conduct. Judged from circuits solved in full by a general-purpose simulator.
const NODE_AS_RESONANCE: f64 = 0.002;
const PLATEAU_AS_RESONANCE: f64 = 0.005;
/// Rings from which many may tell what one cannot, and the standard uncertainties by which it must stand out.
const FEWEST_FOR_LAW: usize = 3;
const LAW_STANDS_OUT: f64 = 2.0;
/// What a clamp's level is known to in volts from the peak of the drain: its diode's drop, and what noise adds to a peak.
const RELEASE_V: f64 = 5.0;
/// Monte Carlo trials that confirm a first-order budget, and their seed.
const TRIALS: usize = 20_000;
const SEED: u64 = 1;

/// Frequency and decay of one kind of ring, from all rings of a record or of the captures of a point.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct RingObservation {
    /// Undamped frequency in hertz, with the uncertainty that noise leaves it.
    pub frequency_hz: Measured,
    /// Standard uncertainty of the mean by the scatter of the rings beyond noise.
    pub repeatability_hz: f64,
    /// What the choice of the model leaves open.
    pub model_hz: f64,
    /// Number of rings.
    pub rings: usize,
    /// Envelope decay in 1/s.
    pub decay_per_s: f64,
}

impl RingObservation {
    /// Of several rings: the weighted mean, the noise of it, and what they scatter beyond their noise. `None` for none.
    ///
    /// One ring may not tell a weak dependence of its frequency on amplitude, and many would then agree on a wrong mean: where the
    /// means with and without a free capacitance law differ by more than chance, the one with it is taken.
    pub fn of(rings: &[Ring]) -> Option<Self> {
        let plain = Mean::of(rings.iter().map(|ring| ring.frequency_hz))?;
        let free = Mean::of(rings.iter().map(|ring| ring.alternative_hz.unwrap_or(ring.frequency_hz)))?;
        let apart = free.value - plain.value;
        // Nested models differ by the variance that the larger one has more. Rings of many amplitudes scatter where the smaller one is
        // wrong, which makes it look less sure than the larger.
        let chance = (free.noise.powi(2) - plain.noise.powi(2)).max(0.25 * free.noise.powi(2)).sqrt();
        let many = rings.len() >= FEWEST_FOR_LAW && rings.iter().any(|ring| ring.alternative_hz.is_some());
        let (mean, model_hz) = match many && apart.abs() > LAW_STANDS_OUT * chance {
            true => (free, 0.0),
            false => (plain, if many { apart.abs().min(chance) } else { 0.0 }),
        };
        let decay = weighted_mean(rings.iter().map(|ring| ring.decay_per_s))?;
        Some(Self {
            frequency_hz: Measured { value: mean.value, standard_uncertainty: mean.noise },
            repeatability_hz: mean.scatter,
            model_hz,
            rings: rings.len(),
            decay_per_s: decay.value,
        })
    }

    /// The frequency with all that is not known of it.
    pub fn measured(&self) -> Measured {
        let noise = self.frequency_hz.standard_uncertainty;
        let standard_uncertainty = (noise.powi(2) + self.repeatability_hz.powi(2) + self.model_hz.powi(2)).sqrt();
        Measured { value: self.frequency_hz.value, standard_uncertainty }
    }

    /// Noise, repeatability and choice of the model as inputs; the frequency is their sum.
    fn inputs(&self, which: &str) -> [Input; RING] {
        let scatter = Measured { value: 0.0, standard_uncertainty: self.repeatability_hz };
        let model = Measured { value: 0.0, standard_uncertainty: self.model_hz };
        let freedom = (self.rings as f64 - 1.0).max(1.0);
        [
            Input::normal(&format!("noise, {which} ring"), Unit::Hertz, self.frequency_hz),
            Input::observed(&format!("repeatability, {which} ring"), Unit::Hertz, scatter, freedom),
            Input::normal(&format!("choice of the model, {which} ring"), Unit::Hertz, model),
        ]
    }
}

/// Weighted mean of several frequencies, its noise, and the scatter beyond it.
struct Mean {
    value: f64,
    noise: f64,
    scatter: f64,
}

impl Mean {
    fn of(values: impl Iterator<Item = Measured> + Clone) -> Option<Self> {
        let mean = weighted_mean(values.clone())?;
        let noise = values.map(|m| m.standard_uncertainty.powi(-2)).sum::<f64>().powf(-0.5);
        let noise = if noise.is_finite() { noise.min(mean.standard_uncertainty) } else { mean.standard_uncertainty };
        let scatter = (mean.standard_uncertainty.powi(2) - noise * noise).max(0.0).sqrt();
        Some(Self { value: mean.value, noise, scatter })
    }
}

/// What was observed.
#[derive(Debug, Clone, Copy, Default, PartialEq)]
pub struct Observed {
    /// Relaxation ring.
    pub relaxation: Option<RingObservation>,
    /// Leakage ring.
    pub leakage: Option<RingObservation>,
    /// Bulk voltage.
    pub bulk_voltage_v: Option<Measured>,
    /// Reflected voltage.
    pub reflected_voltage_v: Option<Measured>,
    /// Highest drain voltage above the bulk where the leakage ring was seen: the level at which the clamp released it.
    pub release_v: Option<f64>,
}

/// What follows.
#[derive(Debug, Clone, Default, PartialEq)]
pub struct CircuitValues {
    /// Capacitance of the drain node at the bulk voltage, probe included, in farad.
    pub node_capacitance: Option<Budget>,
    /// The same without the probe.
    pub node_capacitance_without_probe: Option<Budget>,
    /// Leakage inductance in henry.
    pub leakage_inductance: Option<Budget>,
    /// Whether the leakage inductance is the textbook value, because the pieces on the node are not stated.
    pub textbook: bool,
    /// Reflected voltage in volts.
    pub reflected_voltage: Option<Budget>,
    /// Bulk voltage in volts.
    pub bulk_voltage: Option<Budget>,
    /// The measured node capacitance taken apart; empty where no part is stated.
    pub capacitance_parts: Vec<CapacitancePart>,
}

impl CircuitValues {
    /// Everything that the observations and the facts tell. Absent is what lacks an input, or what the stated parts contradict.
    pub fn of(observed: &Observed, facts: &BoardFacts) -> Self {
        let voltages = Self {
            reflected_voltage: observed.reflected_voltage_v.and_then(|v| voltage("reflected voltage", v, facts)),
            bulk_voltage: observed.bulk_voltage_v.and_then(|v| voltage("bulk voltage", v, facts)),
            ..Self::default()
        };
        let (Some(relaxation), Some(_)) = (observed.relaxation, facts.primary_inductance_h) else {
            return voltages;
        };
        let node = NodeModel::new(&relaxation, observed, facts);
        let plateau = observed.leakage.and_then(|leakage| node.leakage(&leakage, observed, facts));
        let node_capacitance = node.capacitance("node capacitance", false);
        let bulk_v = observed.bulk_voltage_v.map(|bulk| bulk.value);
        Self {
            capacitance_parts: node_capacitance.as_ref().map_or_else(Vec::new, |c| parts(c.measured(), bulk_v, facts)),
            node_capacitance,
            node_capacitance_without_probe: facts
                .probe_capacitance_f
                .and_then(|_| node.capacitance("node capacitance without the probe", true)),
            textbook: plateau.as_ref().is_some_and(|(_, textbook)| *textbook),
            leakage_inductance: plateau.map(|(budget, _)| budget),
            ..voltages
        }
    }
}

impl CircuitValues {
    /// Every budget there is.
    pub fn budgets(&self) -> Vec<Budget> {
        [
            &self.node_capacitance,
            &self.node_capacitance_without_probe,
            &self.leakage_inductance,
            &self.reflected_voltage,
            &self.bulk_voltage,
        ]
        .into_iter()
        .flatten()
        .cloned()
        .collect()
    }
}

/// The model of the relaxation ring: inputs in the order noise, repeatability, choice of the model, time base, inductance, capacitance behind
/// the leakage, node as one resonance.
struct NodeModel<'a> {
    facts: &'a BoardFacts,
    decay_per_s: f64,
    inputs: Vec<Input>,
    /// Leakage over primary inductance.
    leakage_share: f64,
}

/// Inputs of one ring, and of [`NodeModel`].
const RING: usize = 3;
const NODE: usize = RING + 4;

impl<'a> NodeModel<'a> {
    fn new(relaxation: &RingObservation, observed: &Observed, facts: &'a BoardFacts) -> Self {
        let inductance = facts.primary_inductance_h.unwrap_or(Measured::exact(f64::NAN));
        let ratio = observed.leakage.map(|leakage| relaxation.frequency_hz.value / leakage.frequency_hz.value);
        let leakage_share = ratio.map_or(USUAL_LEAKAGE, |ratio| ratio * ratio).min(0.3);
        let mut inputs = relaxation.inputs("relaxation").to_vec();
        inputs.push(time_base(facts));
        inputs.push(Input {
            distribution: crate::budget::Distribution::Rectangular,
            ..Input::normal("primary inductance", Unit::Henry, inductance).in_common()
        });
        let angular = std::f64::consts::TAU * relaxation.frequency_hz.value;
        let about_f = 1.0 / (angular * angular * inductance.value);
        inputs.push(behind_the_leakage(leakage_share, about_f, facts));
        inputs.push(Input::rectangular("node as one resonance", Unit::One, 0.0, NODE_AS_RESONANCE));
        Self { facts, decay_per_s: relaxation.decay_per_s, inputs, leakage_share }
    }

    /// Capacitance that rings with the whole primary inductance, in farad.
    fn ringing(&self, x: &[f64]) -> f64 {
        let frequency = x[..RING].iter().sum::<f64>() * (1.0 + x[RING]);
        let snubber = self.facts.pieces.snubber.as_ref();
        other_element(frequency, self.decay_per_s, Known::Inductance(x[RING + 1]), snubber).unwrap_or(f64::NAN)
    }

    fn capacitance(&self, name: &str, without_probe: bool) -> Option<Budget> {
        let mut inputs = self.inputs.clone();
        if without_probe {
            let probe = self.facts.probe_capacitance_f?;
            inputs.push(Input::normal("probe capacitance", Unit::Farad, probe).in_common());
        }
        let model =
            |x: &[f64]| (self.ringing(x) + x[NODE - 2]) * (1.0 + x[NODE - 1]) - x.get(NODE).copied().unwrap_or(0.0);
        Model::new(name, Unit::Farad, inputs, model).first_order().ok()
    }

    /// Leakage inductance, and whether it is the textbook value.
    fn leakage(&self, leakage: &RingObservation, observed: &Observed, facts: &BoardFacts) -> Option<(Budget, bool)> {
        let mut inputs = self.inputs[..RING + 2].to_vec();
        inputs.extend(leakage.inputs("leakage"));
        inputs.push(Input::rectangular("plateau as one resonance", Unit::One, 0.0, PLATEAU_AS_RESONANCE));
        let pieces = self.piece_inputs(observed, facts);
        let textbook = pieces.is_none();
        inputs.extend(pieces.unwrap_or_else(|| {
            vec![Input::rectangular("capacitance on the plateau", Unit::One, 1.0, TEXTBOOK_HALF_WIDTH)]
        }));
        let share = 1.0 - self.leakage_share;
        let snubber = facts.pieces.snubber.as_ref();
        let model = |x: &[f64]| {
            let ringing = self.ringing(x);
            let (leakage_inputs, rest) = x[RING + 2..].split_at(RING);
            let plateau = match rest[1..] {
                [factor] => ringing * factor,
                [secondary, fall, rise] => ringing - secondary * share * share - fall + rise,
                _ => f64::NAN,
            };
            let frequency = leakage_inputs.iter().sum::<f64>() * (1.0 + x[RING]);
            let element = other_element(frequency, leakage.decay_per_s, Known::Capacitance(plateau), snubber);
            element.map_or(f64::NAN, |inductance| inductance * (1.0 + rest[0]))
        };
        let model = Model::new("leakage inductance", Unit::Henry, inputs, model);
        let budget = if textbook { model.first_order() } else { model.budget(TRIALS, SEED) };
        budget.ok().map(|budget| (budget, textbook))
    }

    /// What the plateau lacks of the relaxation ring's capacitance, and what it has beyond; `None` where the parts are not stated.
    fn piece_inputs(&self, observed: &Observed, facts: &BoardFacts) -> Option<Vec<Input>> {
        let pieces = &facts.pieces;
        let (transistor, secondaries) = (pieces.transistor.as_ref()?, pieces.secondaries.as_ref()?);
        let (bulk, reflected) = (observed.bulk_voltage_v?.value, observed.reflected_voltage_v?.value);
        let fall = transistor.at(bulk) - transistor.at(bulk + reflected);
        let fall = Measured { value: fall, standard_uncertainty: fall.abs() * transistor.relative_uncertainty };
        let level = observed.release_v.filter(|&v| v > reflected).or(pieces.clamp_v);
        let rise = match (&pieces.clamp_diode, level) {
            (Some(diode), Some(level)) => {
                let rise = |level: f64| diode.at(level - reflected) - diode.at(level);
                let by_level = rise(level) - rise(level + RELEASE_V);
                let value = rise(level);
                Measured { value, standard_uncertainty: by_level.hypot(value * diode.relative_uncertainty) }
            }
            (_, None) => Measured::exact(0.0),
            (None, Some(_)) => Measured::within(0.0, CLAMP_HALF_WIDTH * self.ringing(&self.values())),
        };
        let secondary = reflected_secondaries(secondaries);
        Some(vec![
            Input::normal("secondary capacitance", Unit::Farad, secondary).in_common(),
            Input::normal("fall of the transistor's capacitance", Unit::Farad, fall).in_common(),
            Input::normal("rise of the clamp diode's capacitance", Unit::Farad, rise).in_common(),
        ])
    }

    fn values(&self) -> Vec<f64> {
        self.inputs.iter().map(|input| input.value).collect()
    }
}

/// A voltage between two levels of the waveform, or against the on-state: gain and probe enter, an offset cancels.
fn voltage(name: &str, measured: Measured, facts: &BoardFacts) -> Option<Budget> {
    let inputs = vec![
        Input::normal("noise and repeatability", Unit::Volt, measured),
        Input::rectangular("vertical gain", Unit::One, 0.0, facts.accuracy.vertical_gain).in_common(),
        Input::rectangular("probe factor", Unit::One, 0.0, facts.accuracy.probe_factor).in_common(),
    ];
    Model::new(name, Unit::Volt, inputs, |x| x[0] * (1.0 + x[1]) * (1.0 + x[2])).first_order().ok()
}

fn time_base(facts: &BoardFacts) -> Input {
    Input::rectangular("time base", Unit::One, 0.0, facts.accuracy.time_base).in_common()
}

/// Secondary capacitance hangs behind the leakage inductance, so that the relaxation ring feels it by the square of what is left of
/// the primary inductance there: what is missing of it. Where it is not stated it may be as much as the textbook's reserve.
fn behind_the_leakage(leakage_share: f64, about_f: f64, facts: &BoardFacts) -> Input {
    let missing = 1.0 - (1.0 - leakage_share).powi(2);
    let name = "capacitance behind the leakage";
    match &facts.pieces.secondaries {
        Some(secondaries) => {
            let all = reflected_secondaries(secondaries);
            let part =
                Measured { value: missing * all.value, standard_uncertainty: missing * all.standard_uncertainty };
            Input::normal(name, Unit::Farad, part)
        }
        None => Input::rectangular(name, Unit::Farad, 0.0, missing * TEXTBOOK_HALF_WIDTH * about_f),
    }
}
