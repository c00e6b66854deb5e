//! Which curve the samples ask for: one damped sinusoid where that does, a floor that bends or droops, the circuit equation where the
//! capacitance or the loss depends on amplitude. More is taken only on evidence.

use super::{
    circuit_equation::{CircuitEquation, MOST_DEGREES},
    curves::Ringing,
    least_squares::{Curve, Solution, promised_gain, solve},
    noise::{Noise, noise_at},
    series::Series,
};
use crate::findings::{FittedFloor, RingKind};
use nalgebra::DMatrix;
use std::f64::consts::TAU;

/// Any of the curves.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) enum Model {
    /// One damped sinusoid.
    Ringing(FittedFloor),
    /// The circuit equation.
    Circuit(CircuitEquation),
}

impl Model {
    /// What the ring stands on.
    pub(super) fn floor(self) -> FittedFloor {
        match self {
            Self::Ringing(floor) => floor,
            Self::Circuit(equation) => equation.floor,
        }
    }
}

impl Curve for Model {
    fn columns(&self, nonlinear: &[f64], times: &[f64]) -> DMatrix<f64> {
        match self {
            Self::Ringing(floor) => Ringing(*floor).columns(nonlinear, times),
            Self::Circuit(equation) => equation.columns(nonlinear, times),
        }
    }

    fn derivatives(&self, nonlinear: &[f64], linear: &[f64], times: &[f64]) -> DMatrix<f64> {
        match self {
            Self::Ringing(floor) => Ringing(*floor).derivatives(nonlinear, linear, times),
            Self::Circuit(equation) => equation.derivatives(nonlinear, linear, times),
        }
    }

    fn allows(&self, nonlinear: &[f64]) -> bool {
        match self {
            Self::Ringing(floor) => Ringing(*floor).allows(nonlinear),
            Self::Circuit(equation) => equation.allows(nonlinear),
        }
    }
}

/// A model with its solution and the noise beside it.
#[derive(Debug, Clone)]
pub(super) struct Described {
    pub(super) model: Model,
    pub(super) solution: Solution,
    pub(super) noise: Noise,
}

/// What a floor's bend must explain, in variances of the noise, to be believed: once in a thousand rings without it, noise does, and a
/// bend that is not there costs little.
const MORE: f64 = 11.0;
/// The same for core loss and the first degree of a law: one that is not there moves decay or frequency by as many of its own standard
/// uncertainties as the root of this.
const CURVED: f64 = 25.0;
/// The same for two degrees of a law at once where there was none.
const CIRCUIT: f64 = 30.0;
/// The same for one more degree of the law, once there is one.
const DEGREE: f64 = 6.0;
/// Share of its threshold that a step must promise by its slope alone to be worth a fit.
const SCREEN: f64 = 0.5;
/// Share of its range by which a law may go the wrong way: a polynomial follows a knee only so far.
const WRONG: f64 = 0.1;
/// Range of a law, over its lowest value, below which rising is no rectifier's doing.
const FAINT: f64 = 0.02;
/// Ring periods from which a leakage ring's floor is bent always: the plateau droops, and a bend costs under 4 % there.
const BENT_PERIODS: f64 = 6.0;
/// Points a period that the alternative keeps: it is only compared, not reported.
const ALTERNATIVE_POINTS: f64 = 32.0;
/// Iterations of one fit.
const ITERATIONS: usize = 60;

/// The floor that a ring of that kind is given before anything is known.
pub(super) fn first_floor(kind: RingKind, periods: f64) -> FittedFloor {
    if kind == RingKind::Leakage && periods >= BENT_PERIODS { FittedFloor::Bent } else { FittedFloor::Straight }
}

impl Described {
    /// Fits that model.
    pub(super) fn by(model: Model, series: &Series, start: &[f64]) -> Option<Self> {
        let solution = solve(&model, &series.times, &series.volts, start, ITERATIONS)?;
        let frequency = solution.nonlinear[1] / TAU;
        let parameters = solution.inverse.nrows();
        let noise = noise_at(series, &solution.residual, frequency, parameters);
        Some(Self { model, solution, noise })
    }

    /// What this explains beyond another, in variances of the noise.
    fn beyond(&self, other: &Self) -> f64 {
        (other.solution.squares - self.solution.squares) / self.noise.variance.max(f64::MIN_POSITIVE)
    }

    /// Whether the law is that of a drain node: the transistor's capacitance falls with voltage, and that of rectifier and clamp rises
    /// towards the crest, where they come near to conducting. So it falls, or falls and then rises, but for a small share of its range;
    /// one that rises at all must do more than the faint curvature of a core.
    fn sane(&self) -> bool {
        let Model::Circuit(equation) = self.model else { return true };
        let laws: Vec<f64> =
            (-9..=9).map(|n| equation.relative_capacitance(&self.solution.nonlinear, 0.1 * f64::from(n))).collect();
        let lowest = laws.iter().copied().fold(f64::INFINITY, f64::min);
        let highest = laws.iter().copied().fold(0.0, f64::max);
        let valley = laws.iter().position(|&law| law == lowest).unwrap_or(0);
        let against = |part: &[f64], sign: f64| part.windows(2).map(|p| (sign * (p[1] - p[0])).max(0.0)).sum::<f64>();
        let rising = against(&laws[valley..], 1.0);
        let wrong = against(&laws[..=valley], 1.0) + against(&laws[valley..], -1.0);
        let faint = rising > WRONG * (highest - lowest) && highest < (1.0 + FAINT) * lowest;
        self.solution.nonlinear[0] > 0.0 && wrong <= WRONG * (highest - lowest) && !faint
    }

    /// The nonlinear parameters of a model that has more, to begin with.
    fn towards(&self, model: Model) -> Vec<f64> {
        let own = &self.solution.nonlinear;
        let own_rate = own.last().copied().filter(|_| self.model.floor().rates() > 0);
        let mut start = match (self.model, model) {
            (_, Model::Ringing(_)) => own[..2].to_vec(),
            (Model::Ringing(_), Model::Circuit(to)) => {
                let phase = (-self.solution.linear[1]).atan2(self.solution.linear[0]);
                let mut start = vec![own[0], own[1].hypot(own[0]), phase];
                start.resize(to.law() + to.degree, 0.0);
                start
            }
            (Model::Circuit(from), Model::Circuit(to)) => {
                let mut start = own[..3].to_vec();
                if to.core_loss {
                    start.push(if from.core_loss { own[3] } else { 0.0 });
                }
                start.extend_from_slice(&own[from.law()..from.law() + from.degree]);
                start.resize(to.law() + to.degree, 0.0);
                start
            }
        };
        start.extend((0..model.floor().rates()).map(|_| own_rate.unwrap_or(1.0)));
        start
    }
}

/// What the samples ask for, beginning at a damped sinusoid that has been fitted: of all models that have a little more, the one that
/// promises to explain most, until none explains enough. A law is then given one degree more than that, so that what is left out of
/// it shows in the uncertainty and not as an error.
pub(super) fn described(plain: Described, series: &Series) -> Described {
    let mut best = plain;
    while let Some(found) = better(&best, series) {
        best = found;
    }
    match best.model {
        Model::Circuit(equation) if (1..MOST_DEGREES).contains(&equation.degree) => {
            let model = Model::Circuit(CircuitEquation { degree: equation.degree + 1, ..equation });
            Described::by(model, series, &best.towards(model)).filter(Described::sane).unwrap_or(best)
        }
        _ => best,
    }
}

fn better(best: &Described, series: &Series) -> Option<Described> {
    let variance = best.noise.variance.max(f64::MIN_POSITIVE);
    let mut candidates = larger(best);
    if !promises(&everything(best), best, series, SCREEN * MORE.min(DEGREE)) {
        // A drooping floor is no part of everything.
        candidates
            .retain(|(model, _)| model.floor() == FittedFloor::Drooping && best.model.floor() == FittedFloor::Bent);
    }
    let mut promising: Vec<(f64, f64, Model)> = candidates
        .into_iter()
        .filter_map(|(model, threshold)| {
            let (squares, gain) = promised_gain(&model, &series.times, &series.volts, &best.towards(model))?;
            let gain = gain - (squares - best.solution.squares);
            (gain > SCREEN * threshold * variance).then_some((gain, threshold, model))
        })
        .collect();
    promising.sort_by(|a, b| b.0.total_cmp(&a.0));
    promising.into_iter().find_map(|(_, threshold, model)| {
        let found = Described::by(model, series, &best.towards(model))?;
        (found.beyond(best) > threshold && found.sane()).then_some(found)
    })
}

/// Whether a larger model promises to explain so many variances more.
fn promises(model: &Model, best: &Described, series: &Series, threshold: f64) -> bool {
    let promised = promised_gain(model, &series.times, &series.volts, &best.towards(*model));
    promised.is_some_and(|(squares, gain)| {
        gain - (squares - best.solution.squares) > threshold * best.noise.variance.max(f64::MIN_POSITIVE)
    })
}

/// All that a next step may add, at once: what this does not promise to explain, no part of it does.
fn everything(best: &Described) -> Model {
    let (floor, about) = (best.model.floor(), best.solution.nonlinear[1]);
    let degree = match best.model {
        Model::Ringing(_) => 2,
        Model::Circuit(equation) => (equation.degree + 2).min(MOST_DEGREES),
    };
    let floor = if floor == FittedFloor::Straight { FittedFloor::Bent } else { floor };
    Model::Circuit(CircuitEquation { degree, core_loss: true, floor, about })
}

/// The same with a free capacitance law of two degrees, where the model has none: what many rings together may ask for. `None` where it
/// has one, or none can be fitted.
pub(super) fn alternative(best: &Described, series: &Series) -> Option<Described> {
    let Model::Ringing(floor) = best.model else { return None };
    let about = best.solution.nonlinear[1];
    let model = Model::Circuit(CircuitEquation { degree: 2, core_loss: false, floor, about });
    let thin = series.thinned(about / TAU, ALTERNATIVE_POINTS);
    Described::by(model, &thin, &best.towards(model))
}

/// The models that have a little more, each with what it must explain.
fn larger(best: &Described) -> Vec<(Model, f64)> {
    let (model, about) = (best.model, best.solution.nonlinear[1]);
    let mut larger = Vec::new();
    let equation = match model {
        Model::Ringing(floor) => CircuitEquation { degree: 0, core_loss: false, floor, about },
        Model::Circuit(equation) => equation,
    };
    let with_floor = |floor| match model {
        Model::Ringing(_) => Model::Ringing(floor),
        Model::Circuit(equation) => Model::Circuit(CircuitEquation { floor, ..equation }),
    };
    match equation.floor {
        FittedFloor::Straight => larger.push((with_floor(FittedFloor::Bent), MORE)),
        FittedFloor::Bent => larger.push((with_floor(FittedFloor::Drooping), MORE)),
        FittedFloor::Drooping => {}
    }
    if !equation.core_loss {
        larger.push((Model::Circuit(CircuitEquation { core_loss: true, ..equation }), CURVED));
    }
    // Where one degree more tells nothing, the one after it may.
    let steps = if equation.degree == 0 { [(1, CURVED), (2, CIRCUIT)] } else { [(1, DEGREE), (2, 2.0 * DEGREE)] };
    for (more, threshold) in steps.into_iter().filter(|(more, _)| equation.degree + more <= MOST_DEGREES) {
        let degree = equation.degree + more;
        larger.push((Model::Circuit(CircuitEquation { degree, ..equation }), threshold));
    }
    larger
}
