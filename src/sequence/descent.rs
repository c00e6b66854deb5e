//! Stepping the load down until enough of the relaxation ring is visible, and finding the load at which the first cycle is
//! left out.

use super::{
    RunError,
    bench::Bench,
    event::{Event, LoadStep},
    survey::Survey,
};
use crate::instrument::LoadReading;

/// Each step draws this share of the one before.
const STEP: f64 = 0.6;
/// Below this share of the load start the next step goes straight to the floor.
const LAST_SHARE: f64 = 0.02;
/// Long rings that a survey must show above the load floor: a single one is too rare to be met again in a shorter window.
const LONG_RINGS: usize = 3;
/// Halvings of the interval in which the boundary load lies.
const REFINEMENTS: usize = 2;

/// Where the descent ended.
#[derive(Debug)]
pub(super) struct Descent {
    pub(super) survey: Survey,
    pub(super) load: LoadReading,
    /// Highest load current with skipped cycles and lowest without.
    pub(super) boundary_load_a: Option<[f64; 2]>,
}

/// What the load steps came to.
pub(super) enum Stepped {
    /// Enough of the relaxation ring is visible.
    Visible(Box<Descent>),
    /// It is not, down to the floor: why.
    Refused(String),
}

impl Bench<'_> {
    /// Steps the load down from where it stands; `first` is the survey at the load start.
    pub(super) async fn step_down(&mut self, first: Survey, load: LoadReading) -> Result<Stepped, RunError> {
        let mut survey = first;
        let mut load = load;
        let mut without_skips_a = None;
        loop {
            self.stepped(&survey, load)?;
            let long = survey.rings_of(self.job.plan.ring_periods);
            let floor = self.load_a <= self.job.plan.load_floor_a;
            if long >= LONG_RINGS || (floor && long > 0) {
                let boundary_load_a = self.refine_boundary(&survey, without_skips_a).await?;
                return Ok(Stepped::Visible(Box::new(Descent { survey, load, boundary_load_a })));
            }
            if survey.modes()[2] == 0 {
                without_skips_a = Some(self.load_a);
            }
            if floor {
                return Ok(Stepped::Refused(self.why_not_visible(&survey)));
            }
            (survey, load) = self.survey_at(self.next_load_a()).await?;
        }
    }

    /// Draws a current, waits for the output and takes a survey there.
    pub(super) async fn survey_at(&mut self, current_a: f64) -> Result<(Survey, LoadReading), RunError> {
        self.draw(current_a).await?;
        let load = self.settle_output().await?;
        let survey = self.survey().await?;
        self.still_in_regulation().await?;
        Ok((survey, load))
    }

    fn next_load_a(&self) -> f64 {
        let plan = &self.job.plan;
        let next_a = STEP * self.load_a;
        if next_a < LAST_SHARE * plan.load_start_a { plan.load_floor_a } else { next_a.max(plan.load_floor_a) }
    }

    /// A gap counts as skipped cycles only while the output is in regulation.
    async fn still_in_regulation(&mut self) -> Result<(), RunError> {
        let (load, _) = self.read().await?;
        let output = &self.job.board.outputs[0];
        if (output.regulation_v[0]..=output.regulation_v[1]).contains(&load.voltage_v) {
            return Ok(());
        }
        self.settle_output().await.map(|_| ())
    }

    fn stepped(&mut self, survey: &Survey, load: LoadReading) -> Result<(), RunError> {
        let step = LoadStep {
            point: self.point,
            set_a: self.load_a,
            load,
            cycles: survey.modes(),
            visible_ring_periods: survey.visible_ring_periods(),
            survey: survey.number,
        };
        Ok(self.keeper.event(&Event::LoadStepped(step))?)
    }

    /// Narrows down the load at which the first cycle is left out, then returns to the measuring load.
    async fn refine_boundary(&mut self, survey: &Survey, without_a: Option<f64>) -> Result<Option<[f64; 2]>, RunError> {
        let Some(mut without_a) = without_a.filter(|_| survey.modes()[2] > 0) else { return Ok(None) };
        let measuring_a = self.load_a;
        let mut with_a = measuring_a;
        for _ in 0..REFINEMENTS {
            let middle_a = (with_a * without_a).sqrt();
            if !middle_a.is_normal() {
                break;
            }
            let (survey, load) = self.survey_at(middle_a).await?;
            self.stepped(&survey, load)?;
            *(if survey.modes()[2] > 0 { &mut with_a } else { &mut without_a }) = middle_a;
        }
        self.draw(measuring_a).await?;
        self.settle_output().await?;
        Ok(Some([with_a, without_a]))
    }

    fn why_not_visible(&self, survey: &Survey) -> String {
        let [continuous, discontinuous, skipped] = survey.modes();
        let at = format!("at the load floor of {:.4} A and {} V line", self.load_a, self.line_v);
        if continuous > 0 && discontinuous + skipped == 0 {
            return format!(
                "the board stays in continuous conduction {at} ({continuous} cycles): no relaxation ring appears; lower \
                 the load floor if the board allows it"
            );
        }
        let wanted = self.job.plan.ring_periods;
        match survey.visible_ring_periods() {
            Some(periods) => format!(
                "only {periods:.1} periods of relaxation ring are visible {at}, {wanted:.0} are wanted: lower the load \
                 floor or the number of ring periods in the plan"
            ),
            None => {
                let doubts: Vec<&str> = survey.findings.doubts.iter().map(|doubt| doubt.sentence.as_str()).collect();
                format!("no relaxation ring could be fitted {at}. {}", doubts.join(" "))
            }
        }
    }
}
