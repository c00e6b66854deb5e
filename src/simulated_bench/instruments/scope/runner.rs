//! When acquisitions happen: armed, waiting, running, stopped. The clock decides when one is taken, never what it holds;
//! that follows from the settings and from how often they were captured before.

use super::{
    acquisition::Record,
    job::{Job, Outcome, Task},
    settings::{Model, Probe, Settings, Sweep},
};
use crate::{
    converter::Plant,
    instruments::{
        bench::{SharedBench, key},
        error::ScpiError,
    },
};
use serde_json::json;
use std::{
    collections::HashMap,
    time::{Duration, Instant},
};

/// From arming until the memory before the trigger is full.
const ARMING: Duration = Duration::from_millis(5);

/// Between two looks for a trigger that did not come, and between two acquisitions of a running scope.
const PAUSE: Duration = Duration::from_millis(100);

#[derive(Debug, Clone, Copy, PartialEq, Eq)]
enum Mode {
    Stopped,
    Single,
    Running,
}

/// An acquisition under way: what it is counted under, what line and load were, and where it runs.
struct UnderWay {
    setting: u64,
    repeat: u64,
    bench_setting: u64,
    job: Job,
}

/// The acquisition side of a scope.
pub struct Runner {
    bench: SharedBench,
    seed: u64,
    model: Model,
    probe: Probe,
    mode: Mode,
    due: Instant,
    tries: u64,
    under_way: Option<UnderWay>,
    settled: Option<(u64, Plant)>,
    record: Option<Record>,
    number: u64,
    repeats: HashMap<u64, u64>,
}

impl Runner {
    /// A stopped scope without an acquisition.
    pub fn new(bench: SharedBench, seed: u64, model: Model, probe: Probe) -> Self {
        Self {
            bench,
            seed,
            model,
            probe,
            mode: Mode::Stopped,
            due: Instant::now(),
            tries: 0,
            under_way: None,
            settled: None,
            record: None,
            number: 0,
            repeats: HashMap::new(),
        }
    }

    /// The model.
    pub fn model(&self) -> &Model {
        &self.model
    }

    /// The serial number.
    pub fn serial_number(&self) -> String {
        format!("S{:06}", self.seed)
    }

    /// Acquisitions completed since power on.
    pub fn number(&self) -> u64 {
        self.number
    }

    /// Whether what was last asked for is there.
    pub fn is_complete(&self) -> bool {
        self.record.is_some() && self.mode != Mode::Single
    }

    /// The acquisition in memory.
    ///
    /// # Errors
    /// -230 if nothing has been acquired since it was armed.
    pub fn record(&self) -> Result<&Record, ScpiError> {
        self.record.as_ref().ok_or_else(|| ScpiError::stale_data("nothing has been acquired"))
    }

    /// What the trigger is doing.
    pub fn status(&self, sweep: Sweep) -> &'static str {
        match (self.mode, &self.record) {
            (Mode::Stopped, _) => "STOP",
            (_, None) if self.under_way.is_none() && self.tries == 0 => "ARMED",
            (_, Some(_)) if sweep == Sweep::Auto => "AUTO",
            (_, Some(_)) if self.tries == 0 => "TRIGGERED",
            _ => "WAIT",
        }
    }

    /// Arms one acquisition; what was in memory is gone.
    pub fn single(&mut self) {
        self.start(Mode::Single);
    }

    /// Acquires again and again.
    pub fn run(&mut self) {
        self.start(Mode::Running);
    }

    /// Stops; what is in memory stays.
    pub fn stop(&mut self) {
        self.mode = Mode::Stopped;
        self.under_way = None;
    }

    /// `*RST`: stopped and empty. The count of acquisitions runs on.
    pub fn reset(&mut self) {
        self.stop();
        self.record = None;
    }

    /// Starts an armed acquisition over.
    pub fn settings_changed(&mut self) {
        if self.mode != Mode::Stopped {
            self.start(self.mode);
        }
    }

    fn start(&mut self, mode: Mode) {
        self.mode = mode;
        self.record = None;
        self.under_way = None;
        self.tries = 0;
        self.due = Instant::now() + ARMING;
    }

    /// Begins an acquisition if its time has come, or takes the one that is done.
    pub fn service(&mut self, settings: &Settings) {
        if self.mode == Mode::Stopped {
            return;
        }
        let Some(under_way) = self.under_way.take() else {
            if Instant::now() >= self.due {
                self.under_way = Some(self.begin(settings));
            }
            return;
        };
        if under_way.bench_setting != self.bench.now().setting_key() {
            // The waveform it looks at is no longer there.
            self.start(self.mode);
            return;
        }
        match under_way.job.outcome() {
            Some(outcome) => self.finish(&under_way, outcome),
            None => self.under_way = Some(under_way),
        }
    }

    fn begin(&mut self, settings: &Settings) -> UnderWay {
        // Running counts apart: how often it came round is a matter of the clock.
        let running = u64::from(self.mode == Mode::Running);
        let bench = self.bench.now();
        let bench_setting = bench.setting_key();
        let setting = key(&[settings.key(), bench_setting, self.model.bits.into(), running]);
        let repeat = self.repeats.get(&setting).copied().unwrap_or(0);
        // A board that has settled holds its steady state ready, which took long to find.
        let settled =
            self.settled.take().filter(|(setting, _)| *setting == bench_setting && bench.plant().is_settled());
        let plant = settled.map_or_else(|| bench.plant().clone(), |(_, plant)| plant);
        let job = Job::start(Task {
            model: self.model,
            probe: self.probe,
            settings: settings.clone(),
            seed: self.seed,
            key: key(&[setting, repeat, self.tries]),
            plant,
        });
        UnderWay { setting, repeat, bench_setting, job }
    }

    fn finish(&mut self, under_way: &UnderWay, outcome: Outcome) {
        self.settled = outcome.settled.map(|plant| (under_way.bench_setting, plant));
        self.due = Instant::now() + PAUSE;
        let Some(mut record) = outcome.record else {
            self.tries += 1;
            return;
        };
        self.tries = 0;
        self.repeats.insert(under_way.setting, under_way.repeat + 1);
        self.number += 1;
        record.number = self.number;
        self.note(&record, under_way.repeat);
        self.record = Some(record);
        if self.mode == Mode::Single {
            self.mode = Mode::Stopped;
        }
    }

    fn note(&self, record: &Record, repeat: u64) {
        let settings = &record.settings;
        let window = json!({
            "start_s": settings.start_s(), "interval_s": record.interval_s(), "points": settings.points(),
            "repeat": repeat,
        });
        let mut bench = self.bench.now();
        let line = json!({
            "simulated": true, "serial": self.serial_number(), "number": record.number, "window": window,
            "settings": settings, "line": bench.line(), "load": bench.draw(),
        });
        bench.truth().acquisition(line, record.truth.clone());
    }
}
