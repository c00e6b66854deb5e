//! What the steps of a run share: the instruments, the keeper, and where the run stands.

use super::{Job, Keeper, RunError, event::Event};
use crate::instrument::{Load, LoadReading, Scope, Source, SourceReading, Vertical};
use ringstep_analysis::{
    analyse,
    findings::{BoardFacts, Findings, Subject},
    quantity::Measured,
    waveform::Samples,
};

/// The instruments of a station in the hands of one run, and where that run stands.
pub(super) struct Bench<'a> {
    pub(super) job: &'a Job,
    pub(super) scope: &'a mut dyn Scope,
    pub(super) load: &'a mut dyn Load,
    pub(super) source: &'a mut dyn Source,
    pub(super) keeper: &'a mut dyn Keeper,
    /// What the analysis may know; the switching period is learnt on the way where the board file does not state it.
    pub(super) facts: BoardFacts,
    /// Capacitor that was last confirmed to be fitted to the drain node; outlives the run's own end, so that it can be told.
    pub(super) fitted: &'a mut Option<Measured>,
    /// Index of the point being measured.
    pub(super) point: usize,
    /// Line voltage set.
    pub(super) line_v: f64,
    /// Load current set.
    pub(super) load_a: f64,
    /// Number of the next capture.
    pub(super) captures: usize,
    /// Range that showed the whole waveform last.
    pub(super) vertical: Option<Vertical>,
    /// Window of the last survey that held enough cycles.
    pub(super) survey_window_s: Option<f64>,
}

impl Bench<'_> {
    /// Sets the load current.
    pub(super) async fn draw(&mut self, current_a: f64) -> Result<(), RunError> {
        self.load.draw(current_a).await?;
        self.load_a = current_a;
        Ok(())
    }

    /// Reads load and source and holds both against the station's limits.
    pub(super) async fn read(&mut self) -> Result<(LoadReading, Option<SourceReading>), RunError> {
        let load = self.load.read().await?;
        let source = self.source.read().await?;
        let limit = self.job.station.limits.load_power_w;
        if load.power_w() > limit {
            return Err(RunError::LimitPassed { what: "load power", value: load.power_w(), limit, unit: "W" });
        }
        Ok((load, source))
    }

    /// Analyses samples off the async threads.
    pub(super) async fn analyse(&self, number: usize, samples: Samples) -> Result<Findings, RunError> {
        let facts = self.facts.clone();
        tokio::task::spawn_blocking(move || analyse(&samples, Subject::Drain, &facts))
            .await
            .map_err(|error| RunError::Unreadable { number, reason: format!("the analysis ended abnormally: {error}") })
    }

    /// Notes something worth telling that stops nothing.
    pub(super) fn note(&mut self, note: String) -> Result<(), RunError> {
        Ok(self.keeper.event(&Event::Noted { note })?)
    }
}
