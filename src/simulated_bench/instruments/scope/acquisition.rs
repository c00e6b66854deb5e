//! One acquisition: the stepped waveform goes through the front end, the trigger is looked for, and the window around it is
//! sampled, made noisy and quantised. A pure function of its request: the clock has no part in it.

use super::{
    front_end::{FrontEnd, Signal},
    settings::{AcquisitionType, Channel, Model, Probe, Settings, Sweep},
    trigger::EdgeDetector,
};
use crate::{
    converter::Stepper,
    instruments::bench::{quirk, random},
    truth,
};
use rand::RngExt;
use rand_chacha::ChaCha8Rng;
use rand_distr::{Distribution, StandardNormal};
use serde_json::Value;
use std::{
    collections::VecDeque,
    sync::atomic::{AtomicBool, Ordering},
};

/// Simulated time that is searched for a trigger in one go, holdoff apart; an automatic sweep gives up much sooner.
const SEARCH_S: f64 = 10e-3;
const AUTOMATIC_S: f64 = 2e-3;

/// Kept before the start of a window: longer than any jitter.
const MARGIN_S: f64 = 1e-6;

/// Steadiness of the trigger on a steep edge.
const JITTER_S: f64 = 0.15e-9;

/// Acquisitions in an average.
pub const AVERAGES: u8 = 8;

/// Hysteresis of the trigger in divisions.
const HYSTERESIS_DIVISIONS: f64 = 0.3;

/// What an acquisition depends on.
pub struct Request<'a> {
    /// Model of the scope.
    pub model: &'a Model,
    /// Probe on the first channel.
    pub probe: Probe,
    /// Settings.
    pub settings: &'a Settings,
    /// Seed of the scope's fixed errors.
    pub seed: u64,
    /// Key of its noise.
    pub key: u64,
    /// Set when nobody waits for it any more.
    pub cancelled: &'a AtomicBool,
}

/// A completed acquisition.
#[derive(Debug, Clone)]
pub struct Record {
    /// Settings it was taken with.
    pub settings: Settings,
    /// Bits of the codes.
    pub bits: u32,
    /// Codes of each channel; `None` where it was not shown.
    pub codes: [Option<Vec<u16>>; 2],
    /// Its number since power on.
    pub number: u64,
    /// What is true of it.
    pub truth: Value,
}

impl Record {
    /// Sample interval.
    pub fn interval_s(&self) -> f64 {
        1.0 / self.settings.rate_hz()
    }
}

impl Request<'_> {
    /// Acquires once; `None` if no trigger came within the time that is searched.
    pub fn acquire(&self, mut stepper: Stepper) -> Option<Record> {
        let mut noise = random(&[self.key, 1]);
        let mut captured = self.capture(&mut stepper, &mut noise)?;
        if self.settings.kind == AcquisitionType::Average {
            self.average(&mut captured, &mut stepper, &mut noise);
        }
        let nothing = vec![0.0; captured.volts.len()];
        let mut codes = [None, None];
        for (index, volts) in [&captured.volts, &nothing].into_iter().enumerate() {
            let channel = &self.settings.channels[index];
            codes[index] = channel.display.then(|| self.quantise(channel, index, volts, &mut noise));
        }
        let from_s = self.settings.start_s();
        let to_s = from_s + self.settings.window_s();
        let truth = truth::of_window(&stepper.truth(), captured.trigger_s, from_s, to_s);
        Some(Record { settings: self.settings.clone(), bits: self.model.bits, codes, number: 0, truth })
    }

    /// Averages some more triggers into a capture.
    fn average(&self, captured: &mut Captured, stepper: &mut Stepper, noise: &mut ChaCha8Rng) {
        let mut count = 1.0;
        for _ in 1..AVERAGES {
            let Some(next) = self.capture(stepper, noise) else { break };
            count += 1.0;
            for (mean, sample) in captured.volts.iter_mut().zip(&next.volts) {
                *mean += (sample - *mean) / count;
            }
        }
    }

    fn capture(&self, stepper: &mut Stepper, noise: &mut ChaCha8Rng) -> Option<Captured> {
        let mut trace = Trace::new(self, stepper);
        let trigger_s = trace.find_trigger(stepper, noise)?;
        let from_s = trigger_s + self.settings.start_s();
        let interval_s = 1.0 / self.settings.rate_hz();
        let points = self.settings.points();
        let volts = match self.settings.kind {
            AcquisitionType::Peak => trace.extremes(stepper, from_s, interval_s, points),
            _ => trace.samples(stepper, from_s, interval_s, points),
        };
        Some(Captured { trigger_s, volts })
    }

    /// Codes of a channel: gain within 1 % and offset within 0.1 division by range, noise within the bandwidth.
    fn quantise(&self, channel: &Channel, index: usize, volts: &[f64], noise: &mut ChaCha8Rng) -> Vec<u16> {
        let place = ["scope channel 1", "scope channel 2"][index];
        let gain = 1.0 + 0.008 * quirk(self.seed, place, 2 * channel.range());
        let offset_divisions = 0.09 * quirk(self.seed, place, 2 * channel.range() + 1);
        let input_v = self.model.noise_v * channel.probe_factor / channel.scale_v;
        let averages: f64 = if self.settings.kind == AcquisitionType::Average { AVERAGES.into() } else { 1.0 };
        let sigma = self.model.noise_divisions.hypot(input_v) / averages.sqrt();
        let bandwidth_hz = if channel.bandwidth_limit { 20e6 } else { self.model.bandwidth_hz };
        let kept = (-std::f64::consts::TAU * bandwidth_hz / self.settings.rate_hz()).exp();
        let fresh = sigma * (1.0 - kept * kept).sqrt();
        let codes_per_division = self.model.codes_per_division();
        let centre = f64::from(1_u32 << (self.model.bits - 1));
        let top = f64::from((1_u32 << self.model.bits) - 1);
        let mut wander: f64 = sigma * normal(noise);
        volts
            .iter()
            .map(|volts| {
                wander = kept * wander + fresh * normal(noise);
                let divisions = gain * (volts - channel.offset_v) / channel.scale_v + offset_divisions + wander;
                (centre + codes_per_division * divisions).round().clamp(0.0, top) as u16
            })
            .collect()
    }
}

fn normal(noise: &mut ChaCha8Rng) -> f64 {
    StandardNormal.sample(noise)
}

/// The volts of a window, before the converter.
struct Captured {
    trigger_s: f64,
    volts: Vec<f64>,
}

/// The signal of the first channel as far as it is needed.
struct Trace<'a> {
    request: &'a Request<'a>,
    front_end: FrontEnd,
    start_s: f64,
    signals: VecDeque<Signal>,
}

impl<'a> Trace<'a> {
    fn new(request: &'a Request<'a>, stepper: &mut Stepper) -> Self {
        let front_end = FrontEnd::new(request.model, request.probe, &request.settings.channels[0]);
        let first = stepper.next_point();
        let signal = front_end.rest(first.time_s, first.drain_v, first.bulk_v);
        Self { request, front_end, start_s: first.time_s, signals: VecDeque::from([signal]) }
    }

    fn latest(&self) -> Signal {
        // Never empty: it starts with one signal, and `forget` keeps the last.
        self.signals[self.signals.len() - 1]
    }

    fn advance(&mut self, stepper: &mut Stepper) -> Signal {
        let point = stepper.next_point();
        let signal = self.front_end.next(&self.latest(), point.time_s, point.drain_v);
        self.signals.push_back(signal);
        signal
    }

    /// Drops what lies before a time, but for the point that starts the stretch it is in.
    fn forget(&mut self, before_s: f64) {
        while self.signals.len() > 2 && self.signals[1].time_s <= before_s {
            self.signals.pop_front();
        }
    }

    /// When the trigger comes, steps ahead until then; the stretch before it that the window shows must have passed.
    fn find_trigger(&mut self, stepper: &mut Stepper, noise: &mut ChaCha8Rng) -> Option<f64> {
        let settings = self.request.settings;
        let trigger = settings.trigger;
        let scale_v = settings.channels[trigger.channel].scale_v;
        let hysteresis_v = HYSTERESIS_DIVISIONS * scale_v;
        let before_s = (-settings.start_s()).max(0.0);
        let mut edges =
            EdgeDetector::new(trigger.level_v, trigger.slope, hysteresis_v, trigger.holdoff_s, self.start_s);
        // Automatic sweeps free-run at a moment that nothing ties to the waveform.
        let search_s = if trigger.sweep == Sweep::Auto { AUTOMATIC_S } else { SEARCH_S };
        let patience_s = before_s + search_s * noise.random_range(0.9..1.0) + 2.0 * trigger.holdoff_s.min(SEARCH_S);
        loop {
            if self.request.cancelled.load(Ordering::Relaxed) {
                return None;
            }
            let signal = self.advance(stepper);
            let volts = if trigger.channel == 0 { self.front_end.at(&signal) } else { 0.0 };
            let edge = edges.next(signal.time_s, volts).filter(|edge| edge.accepted);
            if let Some(edge) = edge.filter(|edge| edge.time_s - self.start_s >= before_s) {
                let noise_v = self.request.model.noise_divisions * scale_v;
                return Some(edge.time_s + JITTER_S.hypot(noise_v / edge.slope_v_per_s) * normal(noise));
            }
            if signal.time_s - self.start_s > patience_s {
                return (trigger.sweep == Sweep::Auto).then_some(signal.time_s);
            }
            self.forget(signal.time_s - before_s - MARGIN_S);
        }
    }

    /// Samples as the waveform is stepped on; only the stretch around a sample is kept.
    fn samples(&mut self, stepper: &mut Stepper, from_s: f64, interval_s: f64, points: usize) -> Vec<f64> {
        let sample = |index: usize| {
            let time_s = from_s + index as f64 * interval_s;
            while self.latest().time_s < time_s {
                self.advance(stepper);
                self.forget(time_s);
            }
            self.forget(time_s);
            self.front_end.between(&self.signals[0], &self.signals[1], time_s)
        };
        (0..points).map(sample).collect()
    }

    /// Lowest and highest value in turn, each of the two intervals it stands for.
    fn extremes(&mut self, stepper: &mut Stepper, from_s: f64, interval_s: f64, points: usize) -> Vec<f64> {
        let fine = self.samples(stepper, from_s, interval_s / 8.0, points * 8);
        let pairs = fine.chunks(16).flat_map(|chunk| {
            let lowest = chunk.iter().copied().fold(f64::INFINITY, f64::min);
            let highest = chunk.iter().copied().fold(f64::NEG_INFINITY, f64::max);
            [lowest, highest]
        });
        pairs.take(points).collect()
    }
}
