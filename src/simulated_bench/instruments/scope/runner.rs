//! When acquisitions happen: armed, waiting, running, stopped. The clock decides when one is taken, never what it holds;
//! that follows from the settings and from how often they were captured before.

use super::{
    acquisition::{Record, Request},
    settings::{Model, Probe, Settings, Sweep},
};
use crate::instruments::{
    bench::{SharedBench, key},
    error::ScpiError,
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

/// The acquisition side of a scope.
pub struct Runner {
    bench: SharedBench,
    seed: u64,
    model: Model,
    probe: Probe,
    mode: Mode,
    due: Instant,
    tries: u64,
    record: Option<Record>,
    number: u64,
    repeats: HashMap<u64, u64>,
}

impl Runner {
    /// A stopped scope without an acquisition.
    pub fn new(bench: SharedBench, seed: u64, model: Model, probe: Probe) -> Self {
        let (mode, due) = (Mode::Stopped, Instant::now());
        Self { bench, seed, model, probe, mode, due, tries: 0, record: None, number: 0, repeats: HashMap::new() }
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
        match self.mode {
            Mode::Stopped => "STOP",
            _ if self.tries > 0 => "WAIT",
            _ if self.record.is_none() => "ARMED",
            _ if sweep == Sweep::Auto => "AUTO",
            _ => "TRIGGERED",
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
        self.tries = 0;
        self.due = Instant::now() + ARMING;
    }

    /// Takes an acquisition if its time has come.
    pub fn service(&mut self, settings: &Settings) {
        if self.mode == Mode::Stopped || Instant::now() < self.due {
            return;
        }
        let acquired = self.acquire(settings);
        self.tries = if acquired { 0 } else { self.tries + 1 };
        self.due = Instant::now() + PAUSE;
        if acquired && self.mode == Mode::Single {
            self.mode = Mode::Stopped;
        }
    }

    fn acquire(&mut self, settings: &Settings) -> bool {
        // Running counts apart: how often it came round is a matter of the clock.
        let running = u64::from(self.mode == Mode::Running);
        let bench = self.bench.now();
        let setting = key(&[settings.key(), bench.setting_key(), self.model.bits.into(), running]);
        let repeat = self.repeats.get(&setting).copied().unwrap_or(0);
        let capture = key(&[setting, repeat, self.tries]);
        let stepper = bench.stepper(capture);
        drop(bench);
        let request = Request { model: &self.model, probe: self.probe, settings, seed: self.seed, key: capture };
        let Some(mut record) = request.acquire(stepper) else { return false };
        self.repeats.insert(setting, repeat + 1);
        self.number += 1;
        record.number = self.number;
        self.note(&record, repeat);
        self.record = Some(record);
        true
    }

    fn note(&self, record: &Record, repeat: u64) {
        let settings = &record.settings;
        let window = json!({
            "start_s": settings.start_s(), "interval_s": record.interval_s(), "points": settings.points(),
            "repeat": repeat,
        });
        let settings = serde_json::to_value(settings).unwrap_or_default();
        let truth = record.truth.clone();
        self.bench.now().truth().acquisition(&self.serial_number(), record.number, settings, window, truth);
    }
}
