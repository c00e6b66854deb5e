//! One point of the plan: a line voltage from its first settling to its finished values.

use super::{
    RunError,
    bench::Bench,
    combine::{Captured, combine, leakage_frequencies},
    descent::{Descent, Stepped},
    event::{Event, Point},
    survey::Survey,
};
use ringstep_analysis::{
    findings::{DoubtName, Findings},
    quantity::Measured,
};

/// A point that was measured, with what its event does not tell.
pub(super) struct MeasuredPoint {
    pub(super) point: Point,
    /// At the measuring load and at the load start.
    pub(super) leakage_frequencies_hz: [Option<Measured>; 2],
}

/// Relative movement of the line that counts as a change of it.
const SAME_LINE: f64 = 1e-9;

impl Bench<'_> {
    /// Measures one point; `None` where it had to be refused.
    pub(super) async fn measure_point(&mut self, index: usize, line_v: f64) -> Result<Option<MeasuredPoint>, RunError> {
        self.point = index;
        self.set_line(line_v).await?;
        self.draw(self.job.plan.load_start_a).await?;
        let load = self.settle_output().await?;
        let first = self.settle_levels().await?;
        self.learn_switching_period(&first);
        let leakage = self.leakage_rings(&first).await?;
        match self.step_down(first, load).await? {
            Stepped::Visible(descent) => self.finish_point(*descent, leakage).await,
            Stepped::Refused(reason) => {
                self.keeper.event(&Event::PointRefused { index, line_v, reason })?;
                Ok(None)
            }
        }
    }

    async fn finish_point(
        &mut self,
        descent: Descent,
        leakage: Vec<(usize, Findings)>,
    ) -> Result<Option<MeasuredPoint>, RunError> {
        let (index, line_v) = (self.point, self.line_v);
        let relaxation = self.relaxation_rings(&descent.survey).await?;
        let captured = Captured { survey: &descent.survey, relaxation: &relaxation, leakage: &leakage };
        let (values, leakage_frequencies_hz) = (combine(&captured, &self.facts), leakage_frequencies(&captured));
        let measured = values.relaxation_frequency_hz.is_some();
        if !measured {
            let reason = doubts_of(&relaxation);
            let reason = format!("none of {} captures held a relaxation ring that fits. {reason}", relaxation.len());
            self.keeper.event(&Event::PointRefused { index, line_v, reason })?;
            return Ok(None);
        }
        let leakage = leakage.into_iter().map(|(number, findings)| (number, about_leakage(findings)));
        let findings = leakage.chain(relaxation).chain([(descent.survey.number, descent.survey.findings)]);
        let point = Point {
            index,
            line_v,
            load_a: self.load_a,
            load_w: descent.load.power_w(),
            boundary_load_a: descent.boundary_load_a,
            values,
            findings: findings.collect(),
        };
        self.keeper.event(&Event::PointFinished(point.clone()))?;
        Ok(Some(MeasuredPoint { point, leakage_frequencies_hz }))
    }

    /// Brings the line to a voltage with the load off while nothing is energised yet, or as it stands afterwards.
    pub(super) async fn set_line(&mut self, line_v: f64) -> Result<(), RunError> {
        let frequency_hz = self.job.plan.line_frequency_hz;
        let energised = self.line_v > 0.0;
        if energised && (line_v - self.line_v).abs() <= SAME_LINE * line_v {
            return Ok(());
        }
        self.source.set_line(line_v, frequency_hz).await?;
        self.line_v = line_v;
        // The range must show the harsher waveform before it comes.
        self.vertical = None;
        if !energised {
            self.draw(0.0).await?;
            self.source.on().await?;
        }
        self.keeper.event(&Event::LineSet { line_v, frequency_hz })?;
        self.output_up().await.map(|_| ())
    }

    /// Where the board file states no switching frequency, the cycles at the load start tell it.
    fn learn_switching_period(&mut self, survey: &Survey) {
        if self.facts.switching_period_s.is_some() {
            return;
        }
        let mut periods: Vec<f64> = survey.whole_cycles().map(|cycle| cycle.end_s - cycle.start_s).collect();
        periods.sort_by(f64::total_cmp);
        self.facts.switching_period_s = periods.get(periods.len() / 2).copied();
    }
}

/// A capture of the leakage ring need hold neither several cycles nor a relaxation ring: what it says of them is no doubt.
fn about_leakage(mut findings: Findings) -> Findings {
    let beside = [
        DoubtName::NoRelaxationRing,
        DoubtName::NoRing,
        DoubtName::TooFewPeriods,
        DoubtName::ContinuousConduction,
        DoubtName::BoardFactMissing,
    ];
    findings.doubts.retain(|doubt| !beside.contains(&doubt.name));
    findings
}

fn doubts_of(findings: &[(usize, Findings)]) -> String {
    let mut sentences: Vec<&str> = Vec::new();
    for doubt in findings.iter().flat_map(|(_, findings)| &findings.doubts) {
        if !sentences.contains(&doubt.sentence.as_str()) {
            sentences.push(&doubt.sentence);
        }
    }
    sentences.join(" ")
}
