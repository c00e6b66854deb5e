//! Waiting until the output is up or stands still: by readings of it, never by a fixed time. A board that collapses and comes
//! back is told apart from one that never comes up.

use super::{RunError, bench::Bench, event::Event};
use crate::instrument::{LoadReading, SourceReading};
use std::time::{Duration, Instant};

/// Time between two readings.
const POLL: Duration = Duration::from_millis(40);
/// Readings in a row that must agree.
const STEADY_READINGS: usize = 4;
/// Readings in a row inside the regulation window that show that the output has come up.
const UP_READINGS: usize = 2;
/// Relative change between readings that counts as standing still.
const STEADY_CHANGE: f64 = 2e-3;
/// Below this share of the regulation window's lower end the output counts as collapsed.
const COLLAPSED: f64 = 0.8;
/// Collapses after which the board is in protection or restart.
const COLLAPSES: usize = 2;

/// What the readings of the output said so far.
#[derive(Debug, Default)]
struct Watch {
    inside: usize,
    steady: usize,
    last_change: f64,
    last_v: Option<f64>,
    collapses: usize,
    fallen: bool,
    risen: bool,
    lowest_v: Option<f64>,
    highest_v: Option<f64>,
}

impl Watch {
    /// Takes one reading.
    fn takes(&mut self, voltage_v: f64, window_v: [f64; 2]) {
        let inside = (window_v[0]..=window_v[1]).contains(&voltage_v);
        self.inside = if inside { self.inside + 1 } else { 0 };
        self.last_change = self.last_v.map_or(f64::INFINITY, |last| (voltage_v - last).abs() / window_v[1]);
        self.steady = if inside && self.last_change <= STEADY_CHANGE { self.steady + 1 } else { 0 };
        let floor_v = COLLAPSED * window_v[0];
        let falling = self.last_v.is_some_and(|last| voltage_v < last);
        if voltage_v >= floor_v || self.last_v.is_some_and(|last| voltage_v > last + STEADY_CHANGE * window_v[1]) {
            self.risen = true;
            self.fallen = false;
        } else if falling && self.risen && !self.fallen {
            self.fallen = true;
            self.risen = false;
            self.collapses += 1;
        }
        self.last_v = Some(voltage_v);
        self.lowest_v = Some(self.lowest_v.map_or(voltage_v, |v| v.min(voltage_v)));
        self.highest_v = Some(self.highest_v.map_or(voltage_v, |v| v.max(voltage_v)));
    }

    /// The output is inside its window, moving or not: without a load it may sag between two bursts.
    fn is_up(&self) -> bool {
        self.inside >= UP_READINGS
    }

    /// The output stands still inside its window.
    fn is_still(&self) -> bool {
        self.steady >= STEADY_READINGS
    }
}

impl Bench<'_> {
    /// Waits until the main output has come up.
    pub(super) async fn output_up(&mut self) -> Result<LoadReading, RunError> {
        self.wait_for_output(Watch::is_up).await
    }

    /// Waits until the main output stands still inside its regulation window.
    pub(super) async fn settle_output(&mut self) -> Result<LoadReading, RunError> {
        self.wait_for_output(Watch::is_still).await
    }

    async fn wait_for_output(&mut self, reached: fn(&Watch) -> bool) -> Result<LoadReading, RunError> {
        let window_v = self.job.board.outputs[0].regulation_v;
        let started = Instant::now();
        let mut watch = Watch::default();
        loop {
            let (load, source) = self.read().await?;
            let waited_s = started.elapsed().as_secs_f64();
            watch.takes(load.voltage_v, window_v);
            if reached(&watch) {
                self.settled(waited_s, load, source)?;
                return Ok(load);
            }
            if watch.collapses >= COLLAPSES || waited_s > self.job.plan.settle_timeout_s {
                return Err(self.why_not_settled(&watch, load.voltage_v, waited_s));
            }
            tokio::time::sleep(POLL).await;
        }
    }

    fn why_not_settled(&self, watch: &Watch, voltage_v: f64, waited_s: f64) -> RunError {
        let output = &self.job.board.outputs[0];
        let (line_v, load_a) = (self.line_v, self.load_a);
        if watch.collapses >= COLLAPSES {
            return RunError::ProtectionOrRestart {
                output: output.name.clone(),
                times: watch.collapses,
                waited_s,
                line_v,
                load_a,
                lowest_v: watch.lowest_v.unwrap_or(voltage_v),
                highest_v: watch.highest_v.unwrap_or(voltage_v),
            };
        }
        if watch.is_up() {
            let change_percent = 100.0 * watch.last_change;
            return RunError::NotSettled { what: "the output voltage", change_percent, waited_s, line_v };
        }
        let [low_v, high_v] = output.regulation_v;
        let output = output.name.clone();
        RunError::NotInRegulation { output, voltage_v, waited_s, line_v, load_a, low_v, high_v }
    }

    fn settled(&mut self, waited_s: f64, load: LoadReading, source: Option<SourceReading>) -> Result<(), RunError> {
        Ok(self.keeper.event(&Event::Settled { line_v: self.line_v, waited_s, load, source })?)
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    const WINDOW_V: [f64; 2] = [11.4, 12.6];

    #[test]
    fn an_output_that_stands_still_inside_its_window_is_settled() {
        let mut watch = Watch::default();
        let seen = [0.0, 6.0, 11.0, 12.0, 12.01, 12.0, 12.0, 12.01].map(|v| {
            watch.takes(v, WINDOW_V);
            (watch.is_up(), watch.is_still())
        });
        assert_eq!(seen.iter().position(|(up, _)| *up), Some(4));
        assert_eq!(seen.iter().position(|(_, still)| *still), Some(7));
        assert_eq!(watch.collapses, 0);
    }

    #[test]
    fn an_output_that_rises_slowly_has_not_collapsed() {
        let mut watch = Watch::default();
        for step in 0..120 {
            watch.takes(f64::from(step) * 0.1, WINDOW_V);
        }
        assert_eq!(watch.collapses, 0);
    }

    #[test]
    fn an_output_that_comes_and_goes_has_collapsed_each_time() {
        let mut watch = Watch::default();
        for v in [0.0, 5.0, 9.0, 4.0, 1.0, 0.2, 6.0, 8.0, 2.0, 0.0, 7.0, 3.0] {
            watch.takes(v, WINDOW_V);
        }
        assert_eq!(watch.collapses, 3);
    }
}
