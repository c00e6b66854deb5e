//! Capturing the two rings at full rate, with scales and trigger set from what a survey showed.

use super::{
    RunError,
    acquire::Setup,
    bench::Bench,
    event::Purpose,
    survey::{Survey, ring_time_s},
};
use crate::instrument::{Horizontal, Slope, Trigger, Vertical};
use ringstep_analysis::findings::Findings;

/// Periods of relaxation ring that are worth their memory: later ones have decayed.
const WORTHWHILE_PERIODS: f64 = 30.0;
/// A cycle whose ring lasts this share of the longest serves as well as the longest.
const LONG_ENOUGH: f64 = 0.8;
/// Share of the time before the trigger.
const BEFORE_TRIGGER: f64 = 0.05;
/// Of a relaxation ring that has not been fitted yet.
const USUAL_QUALITY_FACTOR: f64 = 15.0;

impl Bench<'_> {
    /// Captures the relaxation ring as often as the plan says.
    pub(super) async fn relaxation_rings(&mut self, survey: &Survey) -> Result<Vec<(usize, Findings)>, RunError> {
        let window_s = relaxation_window_s(survey).unwrap_or_else(|| self.survey_window_s.unwrap_or(1e-3));
        let horizontal = Horizontal { window_s, start_s: -BEFORE_TRIGGER * window_s, interval_s: None };
        let count = self.job.plan.relaxation_captures;
        self.rings(Purpose::RelaxationRing, horizontal, survey, count).await
    }

    /// Captures the leakage ring as often as the plan says.
    pub(super) async fn leakage_rings(&mut self, survey: &Survey) -> Result<Vec<(usize, Findings)>, RunError> {
        let Some((before_s, after_s)) = leakage_window_s(survey) else {
            self.note(format!("survey {} shows no whole plateau: no leakage ring was captured", survey.number))?;
            return Ok(Vec::new());
        };
        let horizontal = Horizontal { window_s: before_s + after_s, start_s: -before_s, interval_s: None };
        let count = self.job.plan.leakage_captures;
        self.rings(Purpose::LeakageRing, horizontal, survey, count).await
    }

    async fn rings(
        &mut self,
        purpose: Purpose,
        horizontal: Horizontal,
        survey: &Survey,
        count: usize,
    ) -> Result<Vec<(usize, Findings)>, RunError> {
        let setup =
            Setup { purpose, vertical: self.whole_range(survey), horizontal, trigger: turn_off_trigger(survey) };
        let mut found = Vec::with_capacity(count);
        for repeat in 0..count {
            let acquired = self.acquire(setup, repeat).await?;
            found.push((acquired.number, self.analyse(acquired.number, acquired.samples).await?));
        }
        Ok(found)
    }

    /// The whole waveform stays inside the range: a front end that is overdriven by the turn-off spike recovers too late.
    fn whole_range(&self, survey: &Survey) -> Vertical {
        let margin_v = 0.1 * (survey.highest_v - survey.lowest_v);
        let seen = Vertical { bottom_v: survey.lowest_v - margin_v, top_v: survey.highest_v + margin_v };
        self.vertical.unwrap_or(seen)
    }
}

/// Rising through the middle between the first crest of the relaxation ring and the reflected plateau: every turn-off crosses
/// it, however little it overshoots, and no ring reaches it.
fn turn_off_trigger(survey: &Survey) -> Trigger {
    let findings = &survey.findings;
    let level_v = match (findings.bulk_voltage_v, findings.reflected_voltage_v) {
        (Some(bulk), Some(reflected)) => {
            let quality_factor =
                findings.relaxation_ring.map_or(USUAL_QUALITY_FACTOR, |ring| ring.quality_factor.value);
            let crest = (-std::f64::consts::PI / quality_factor).exp();
            bulk.value + reflected.value * 0.5 * (1.0 + crest)
        }
        (Some(bulk), None) => 0.5 * (bulk.value + survey.highest_v),
        _ => 0.75 * survey.highest_v,
    };
    Trigger { level_v, slope: Slope::Rising, holdoff_s: 0.0 }
}

/// A window that holds one whole long ring, whichever turn-off it begins at: the longest way from one cycle with a long ring
/// to the next, then that cycle and as much of its ring as is worth its memory.
fn relaxation_window_s(survey: &Survey) -> Option<f64> {
    let longest_s = survey.longest_ring_s()?;
    let long: Vec<_> = survey
        .whole_cycles()
        .filter(|cycle| ring_time_s(cycle).is_some_and(|ring_s| ring_s >= LONG_ENOUGH * longest_s))
        .collect();
    let conduction_s = long.iter().filter_map(|c| c.end_of_demagnetisation_s.map(|end| end - c.start_s));
    let conduction_s = conduction_s.fold(0.0, f64::max);
    let apart_s = long.windows(2).map(|pair| pair[1].start_s - pair[0].start_s).fold(0.0, f64::max);
    let ring_s = match survey.findings.relaxation_ring {
        Some(ring) => longest_s.min(WORTHWHILE_PERIODS / ring.frequency_hz.value),
        None => longest_s,
    };
    Some(1.1 * (apart_s + conduction_s + ring_s) / (1.0 - BEFORE_TRIGGER))
}

/// Time before and after the turn-off that shows the plateau and its end.
fn leakage_window_s(survey: &Survey) -> Option<(f64, f64)> {
    let plateau_s = survey.whole_cycles().map(|c| c.end_of_demagnetisation_s.unwrap_or(c.end_s) - c.turn_off_s);
    let plateau_s = plateau_s.reduce(f64::max)?;
    let on_s = survey.whole_cycles().map(|c| c.turn_off_s - c.start_s).reduce(f64::max)?;
    let ring_s = survey.findings.relaxation_ring.map_or(0.0, |ring| 3.0 / ring.frequency_hz.value);
    Some((1.2 * on_s + 0.05 * plateau_s, 1.2 * plateau_s + ring_s))
}
