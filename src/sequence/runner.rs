//! A run from its first event to its last: prepares the instruments, measures point after point, and reaches safe-off
//! whatever happens.

use super::{
    Keeper, Plan, RunError, Stop,
    bench::Bench,
    event::{Event, Outcome},
};
use crate::station::{Board, Connected, Station};
use futures_util::FutureExt;
use ringstep_analysis::quantity::{Measured, Unit};
use std::{any::Any, panic::AssertUnwindSafe};

/// What a run is to do, on which station, with which board.
#[derive(Debug, Clone)]
pub struct Job {
    /// The plan.
    pub plan: Plan,
    /// The station.
    pub station: Station,
    /// The board.
    pub board: Board,
    /// Highest drain voltage that the preflight expects, in volts: sets the first vertical range.
    pub expected_peak_v: f64,
}

impl Job {
    /// Drain voltage at which the run is ended, in volts: the lowest of what station, probe and MOSFET stand.
    pub fn drain_limit_v(&self) -> f64 {
        self.station.limits.drain_v.min(self.station.probe.rating_v).min(self.board.drain_rating_v)
    }
}

/// Carries out the plan. The outcome and its message are the last event too.
///
/// The stop ends a run between or inside exchanges at once; an exchange that is under way ends by itself.
///
/// # Errors
/// Only what the record could not keep after safe-off; everything else is an outcome.
pub async fn run(
    job: &Job,
    connected: &mut Connected,
    keeper: &mut dyn Keeper,
    stop: &Stop,
) -> Result<(Outcome, Option<String>), RunError> {
    let mut fitted = None;
    let ended = tokio::select! {
        biased;
        () = stop.raised() => Err(RunError::Stopped),
        ended = AssertUnwindSafe(points(job, connected, keeper, &mut fitted)).catch_unwind() => {
            ended.unwrap_or_else(|panic| Err(RunError::Defect(panicked(panic.as_ref()))))
        }
    };
    let off = connected.safe_off.off().await;
    let (outcome, message) = match ended {
        Ok((measured, 0)) if measured > 0 => (Outcome::Complete, None),
        Ok((0, refused)) => (Outcome::Refused, Some(format!("none of {refused} points could be measured"))),
        Ok((measured, refused)) => {
            (Outcome::Partial, Some(format!("{refused} of {} points refused", measured + refused)))
        }
        Err(RunError::Stopped) => (Outcome::Stopped, Some(RunError::Stopped.to_string())),
        Err(error @ RunError::ProtectionOrRestart { .. }) => (Outcome::Refused, Some(error.to_string())),
        Err(error) => (Outcome::Failed, Some(error.to_string())),
    };
    let reason = message.clone().unwrap_or_else(|| "finished".into());
    let (source_off, load_off) = (off.source.is_confirmed(), off.load.is_confirmed());
    let reminder = fitted.map(|capacitance: Measured| Event::Noted {
        note: format!(
            "{} is still fitted to the drain node; take it off, power off and the bulk capacitor measured below 60 V",
            capacitance.text_with_standard_uncertainty(Unit::Farad)
        ),
    });
    let kept = reminder
        .map_or(Ok(()), |reminder| keeper.event(&reminder))
        .and_then(|()| keeper.event(&Event::SafeOff { reason, source_off, load_off }))
        .and_then(|()| keeper.event(&Event::RunEnded { outcome, message: message.clone() }));
    // The record can't tell any more, so the error must.
    kept.map_err(|error| RunError::Unrecorded { error, outputs: outputs(source_off, load_off) })?;
    Ok((outcome, message))
}

/// What is known of the outputs after safe-off, and what to do about it.
pub fn outputs(source_off: bool, load_off: bool) -> String {
    let source = match source_off {
        true => "source confirmed off",
        false => "source NOT CONFIRMED OFF: cut it with the emergency switch and treat the board as live",
    };
    let load = if load_off { "load confirmed off" } else { "load NOT CONFIRMED OFF" };
    format!("{source}, {load}")
}

fn panicked(panic: &(dyn Any + Send)) -> String {
    let text = panic.downcast_ref::<&str>().map(|text| (*text).to_owned());
    text.or_else(|| panic.downcast_ref::<String>().cloned()).unwrap_or_else(|| "no reason given".to_owned())
}

/// Measures every point; returns how many were measured and how many refused.
///
/// The added capacitors of the plan count as one more.
async fn points(
    job: &Job,
    connected: &mut Connected,
    keeper: &mut dyn Keeper,
    fitted: &mut Option<Measured>,
) -> Result<(usize, usize), RunError> {
    let operator = connected.operator.clone();
    if job.plan.added_capacitors.is_some() && operator.is_none() {
        return Err(RunError::Unattended);
    }
    let mut bench = Bench {
        job,
        scope: &mut *connected.scope,
        load: &mut *connected.load,
        source: &mut *connected.source,
        keeper,
        fitted,
        facts: job.board.facts(&job.station),
        point: 0,
        line_v: 0.0,
        load_a: 0.0,
        captures: 0,
        vertical: None,
        survey_window_s: None,
    };
    bench.prepare().await?;
    let mut measured = Vec::new();
    for (index, line_v) in job.plan.line_v.iter().enumerate() {
        measured.extend(bench.measure_point(index, *line_v).await?);
    }
    let (mut done, mut wanted) = (measured.len(), job.plan.line_v.len());
    if let (Some(added), Some(operator)) = (&job.plan.added_capacitors, operator) {
        wanted += 1;
        done += usize::from(bench.add_capacitors(added, &measured, &*operator).await?);
    }
    Ok((done, wanted - done))
}

impl Bench<'_> {
    /// Everything off and known before anything is energised.
    async fn prepare(&mut self) -> Result<(), RunError> {
        let station = &self.job.station;
        self.source.prepare(station.limits.line_current_a).await?;
        self.load.prepare().await?;
        self.scope.prepare(station.scope.channel, station.probe.factor).await?;
        Ok(())
    }
}
