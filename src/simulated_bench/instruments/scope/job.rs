//! One acquisition in the background: the scope answers while it waits for its trigger, and the board goes on.

use super::{
    acquisition::{Record, Request},
    settings::{Model, Probe, Settings},
};
use crate::converter::Plant;
use std::{
    sync::{
        Arc,
        atomic::{AtomicBool, Ordering},
        mpsc::{self, Receiver, TryRecvError},
    },
    thread,
};

/// What a job needs to know.
pub struct Task {
    /// Model of the scope.
    pub model: Model,
    /// Probe on the first channel.
    pub probe: Probe,
    /// Settings.
    pub settings: Settings,
    /// Seed of the scope's fixed errors.
    pub seed: u64,
    /// Key of the waveform and the noise.
    pub key: u64,
    /// The board as it stood when the job began.
    pub plant: Plant,
}

/// What came of a job.
pub struct Outcome {
    /// The acquisition, if a trigger came.
    pub record: Option<Record>,
    /// The board as the job began with it, if it had settled: good for every later job with the same line and load.
    pub settled: Option<Plant>,
}

/// A job that is under way; it is given up when this is dropped.
pub struct Job {
    cancelled: Arc<AtomicBool>,
    outcome: Receiver<Outcome>,
}

impl Job {
    /// Starts a job.
    pub fn start(task: Task) -> Self {
        let cancelled = Arc::new(AtomicBool::new(false));
        let (sender, outcome) = mpsc::channel();
        let flag = Arc::clone(&cancelled);
        thread::spawn(move || {
            // Nobody listens any more where the job was given up.
            let _ = sender.send(run(task, &flag));
        });
        Self { cancelled, outcome }
    }

    /// What came of it; `None` while it is under way.
    pub fn outcome(&self) -> Option<Outcome> {
        match self.outcome.try_recv() {
            Ok(outcome) => Some(outcome),
            Err(TryRecvError::Empty) => None,
            Err(TryRecvError::Disconnected) => Some(Outcome { record: None, settled: None }),
        }
    }
}

impl Drop for Job {
    fn drop(&mut self) {
        self.cancelled.store(true, Ordering::Relaxed);
    }
}

fn run(task: Task, cancelled: &AtomicBool) -> Outcome {
    let Task { model, probe, settings, seed, key, plant } = &task;
    let request = Request { model, probe: *probe, settings, seed: *seed, key: *key, cancelled };
    let record = request.acquire(plant.stepper(*key));
    Outcome { record, settled: plant.is_settled().then_some(task.plant) }
}
