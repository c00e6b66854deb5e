//! One acquisition: set the scales, arm, wait, read, keep, and hand the samples on. Every acquisition goes through here.

use super::{
    RunError,
    bench::Bench,
    event::{Capture, Event, Purpose},
    samples::samples_of,
};
use crate::instrument::{Horizontal, Trigger, Vertical};
use ringstep_analysis::waveform::Samples;
use std::time::{Duration, Instant};

/// How often a waiting acquisition is asked whether it is complete.
const POLL: Duration = Duration::from_millis(10);

/// Scales and trigger of one acquisition.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct Setup {
    pub(super) purpose: Purpose,
    pub(super) vertical: Vertical,
    pub(super) horizontal: Horizontal,
    pub(super) trigger: Trigger,
}

/// One acquisition that is on disk.
#[derive(Debug, Clone)]
pub(super) struct Acquired {
    pub(super) number: usize,
    pub(super) samples: Samples,
    /// The range the scope really set.
    pub(super) vertical: Vertical,
}

impl Bench<'_> {
    /// Takes one acquisition and keeps it before anything is concluded from it.
    pub(super) async fn acquire(&mut self, setup: Setup, repeat: usize) -> Result<Acquired, RunError> {
        let vertical = self.scope.set_vertical(setup.vertical).await?;
        self.scope.set_horizontal(setup.horizontal).await?;
        self.scope.set_trigger(setup.trigger).await?;
        self.scope.arm().await?;
        self.wait_for_acquisition(setup).await?;
        let waveform = self.scope.read().await?;
        let number = self.captures;
        let capture = self.keeper.capture(Capture {
            number,
            point: self.point,
            purpose: setup.purpose,
            line_v: self.line_v,
            load_a: self.load_a,
            repeat,
            waveform,
            sha256: String::new(),
        })?;
        self.captures += 1;
        let samples = samples_of(&capture.waveform)
            .map_err(|error| RunError::Unreadable { number, reason: error.to_string() })?;
        self.keeper.event(&Event::Captured(capture))?;
        self.check_drain_limit(&samples)?;
        Ok(Acquired { number, samples, vertical })
    }

    async fn wait_for_acquisition(&mut self, setup: Setup) -> Result<(), RunError> {
        let started = Instant::now();
        let patience = self.job.plan.settle_timeout_s + 2.0 * setup.horizontal.window_s;
        while !self.scope.is_complete().await? {
            let waited_s = started.elapsed().as_secs_f64();
            if waited_s > patience {
                self.scope.stop().await?;
                return Err(RunError::NoTrigger { level_v: setup.trigger.level_v, waited_s });
            }
            tokio::time::sleep(POLL).await;
        }
        Ok(())
    }

    fn check_drain_limit(&self, samples: &Samples) -> Result<(), RunError> {
        let value = samples.volts().iter().copied().fold(f64::NEG_INFINITY, f64::max);
        let limit = self.job.drain_limit_v();
        if value > limit {
            return Err(RunError::LimitPassed { what: "drain voltage", value, limit, unit: "V" });
        }
        Ok(())
    }
}
