//! The survey: one acquisition that shows several switching cycles, taken again with other scales until it does, and the
//! levels read from it.

use super::{
    RunError,
    acquire::{Acquired, Setup},
    bench::Bench,
    event::Purpose,
};
use crate::instrument::{Horizontal, Slope, Trigger, Vertical};
use ringstep_analysis::findings::{Cycle, CycleMode, Findings};
use std::time::Instant;

/// Whole cycles a survey must show.
const CYCLES: usize = 6;
/// Switching periods in the first window.
const FIRST_WINDOW_PERIODS: f64 = 40.0;
/// Samples that a switching period is worth in a survey: enough for its edges. More only cost their transfer at every load step.
const SAMPLES_A_PERIOD: f64 = 1000.0;
/// First window where no switching frequency is stated.
const FIRST_WINDOW_S: f64 = 1e-3;
/// Longest window: a longer burst period is not surveyed.
const LONGEST_WINDOW_S: f64 = 0.1;
/// Room above the highest and below the lowest voltage seen, as a share of the span.
const HEADROOM: f64 = 0.1;
/// Smallest relative movement between surveys that counts as movement.
const LEVEL_CHANGE: f64 = 0.01;

/// Several switching cycles and what was found in them.
#[derive(Debug, Clone)]
pub(super) struct Survey {
    pub(super) number: usize,
    pub(super) findings: Findings,
    pub(super) lowest_v: f64,
    pub(super) highest_v: f64,
}

impl Survey {
    /// Cycles by mode: continuous, discontinuous, skipped.
    pub(super) fn modes(&self) -> [usize; 3] {
        let count = |mode| self.findings.cycles.iter().filter(|cycle| cycle.mode == mode).count();
        [count(CycleMode::Continuous), count(CycleMode::Discontinuous), count(CycleMode::Skipped)]
    }

    /// Cycles whose beginning and end stand in the record.
    pub(super) fn whole_cycles(&self) -> impl Iterator<Item = &Cycle> {
        self.findings.cycles.iter().filter(|cycle| cycle.mode != CycleMode::Incomplete)
    }

    /// Longest time from the end of demagnetisation to the next turn-on, in seconds.
    pub(super) fn longest_ring_s(&self) -> Option<f64> {
        self.whole_cycles().filter_map(ring_time_s).reduce(f64::max)
    }

    /// Ring periods in the longest gap, where the ring was fitted.
    pub(super) fn visible_ring_periods(&self) -> Option<f64> {
        Some(self.longest_ring_s()? * self.findings.relaxation_ring?.frequency_hz.value)
    }
}

/// Time a cycle leaves to its relaxation ring, in seconds.
pub(super) fn ring_time_s(cycle: &Cycle) -> Option<f64> {
    cycle.end_of_demagnetisation_s.map(|end| cycle.end_s - end)
}

impl Bench<'_> {
    /// Takes a survey, widening window and range until whole cycles stand inside both.
    pub(super) async fn survey(&mut self) -> Result<Survey, RunError> {
        let mut window_s = self.survey_window_s.unwrap_or_else(|| self.first_window_s());
        loop {
            let acquired = self.acquire(self.survey_setup(window_s), 0).await?;
            let (lowest_v, highest_v) = span_v(acquired.samples.volts());
            if self.widen_range(&acquired, lowest_v, highest_v) {
                continue;
            }
            let number = acquired.number;
            let findings = self.analyse(number, acquired.samples).await?;
            let survey = Survey { number, findings, lowest_v, highest_v };
            if survey.whole_cycles().count() >= CYCLES || window_s >= LONGEST_WINDOW_S {
                self.survey_window_s = Some(window_s);
                return Ok(survey);
            }
            window_s = (window_s * 2.5).min(LONGEST_WINDOW_S);
        }
    }

    /// Takes surveys until bulk voltage and clamp level stand still, ripple allowed for.
    pub(super) async fn settle_levels(&mut self) -> Result<Survey, RunError> {
        let started = Instant::now();
        let mut last = self.survey().await?;
        loop {
            let next = self.survey().await?;
            let movement = self.movement(&last, &next);
            match movement {
                None => return Ok(next),
                Some((what, change)) => {
                    let waited_s = started.elapsed().as_secs_f64();
                    if waited_s > self.job.plan.settle_timeout_s {
                        let change_percent = 100.0 * change;
                        return Err(RunError::NotSettled { what, change_percent, waited_s, line_v: self.line_v });
                    }
                }
            }
            last = next;
        }
    }

    /// What moved between two surveys by more than the ripple of the bulk voltage explains, and by which share.
    fn movement(&self, last: &Survey, next: &Survey) -> Option<(&'static str, f64)> {
        let bulk = |survey: &Survey| survey.findings.bulk_voltage_v.map(|v| v.value);
        let ripple = self.ripple_share();
        let bulk_change = bulk(last).zip(bulk(next)).map_or(0.0, |(a, b)| (a - b).abs() / b.abs());
        let peak_change = (last.highest_v - next.highest_v).abs() / next.highest_v;
        if bulk_change > LEVEL_CHANGE.max(ripple) {
            return Some(("the bulk voltage", bulk_change));
        }
        (peak_change > (2.0 * LEVEL_CHANGE).max(ripple)).then_some(("the clamp level", peak_change))
    }

    /// Peak-to-peak ripple of the bulk voltage at twice the line frequency over its mean: charge drawn between two crests.
    fn ripple_share(&self) -> f64 {
        let bulk_v = self.line_v * std::f64::consts::SQRT_2;
        let output = &self.job.board.outputs[0];
        let power_w = self.load_a * output.voltage_v;
        let charge_time_s = 1.0 / (2.0 * self.job.plan.line_frequency_hz);
        1.3 * power_w * charge_time_s / (bulk_v * bulk_v * self.job.board.bulk_capacitance_f.value)
    }

    fn first_window_s(&self) -> f64 {
        self.facts.switching_period_s.map_or(FIRST_WINDOW_S, |period| FIRST_WINDOW_PERIODS * period)
    }

    fn survey_setup(&self, window_s: f64) -> Setup {
        let bulk_v = self.line_v * std::f64::consts::SQRT_2;
        let ceiling_v = self.job.expected_peak_v;
        let whole = Vertical { bottom_v: -HEADROOM * ceiling_v, top_v: (1.0 + HEADROOM) * ceiling_v };
        Setup {
            purpose: Purpose::Survey,
            vertical: self.vertical.unwrap_or(whole),
            horizontal: Horizontal {
                window_s,
                start_s: -0.1 * window_s,
                interval_s: self.facts.switching_period_s.map(|period_s| period_s / SAMPLES_A_PERIOD),
            },
            trigger: Trigger { level_v: 0.5 * bulk_v, slope: Slope::Rising, holdoff_s: 0.0 },
        }
    }

    /// Remembers the range that shows everything; `true` where the one used did not, so that another look is needed.
    fn widen_range(&mut self, acquired: &Acquired, lowest_v: f64, highest_v: f64) -> bool {
        let span_v = highest_v - lowest_v;
        let used = acquired.vertical;
        let edge_v = 0.01 * (used.top_v - used.bottom_v);
        let clipped = highest_v >= used.top_v - edge_v || lowest_v <= used.bottom_v + edge_v;
        let room_v = if clipped { 0.3 * span_v } else { HEADROOM * span_v };
        self.vertical = Some(Vertical { bottom_v: lowest_v - room_v, top_v: highest_v + room_v });
        clipped && span_v > 0.0 && highest_v < self.job.drain_limit_v()
    }
}

fn span_v(volts: &[f64]) -> (f64, f64) {
    volts.iter().fold((f64::INFINITY, f64::NEG_INFINITY), |(low, high), v| (low.min(*v), high.max(*v)))
}
