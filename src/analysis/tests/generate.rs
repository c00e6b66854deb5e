//! Records made to measure: rings, and everything that is no valid single ring. All sizes are in units of the ring's amplitude.

use rand::{RngExt, SeedableRng};
use rand_chacha::ChaCha8Rng;
use rand_distr::{Distribution, StandardNormal};
use ringstep_analysis::fit::{RingRecord, Times};
use std::f64::consts::{PI, TAU};

/// A made record with what it was made from.
#[derive(Debug, Clone)]
pub(crate) struct Made {
    pub(crate) interval_s: f64,
    pub(crate) volts: Vec<f64>,
    pub(crate) step_v: Option<f64>,
    pub(crate) frequency_hz: f64,
    pub(crate) decay_per_s: f64,
    pub(crate) what: String,
}

impl Made {
    pub(crate) fn record(&self) -> RingRecord<'_> {
        let times_s = Times::Even { start_s: 0.0, interval_s: self.interval_s };
        RingRecord { times_s, volts: &self.volts, step_v: self.step_v, clip_v: None }
    }
}

pub(crate) struct Maker {
    pub(crate) random: ChaCha8Rng,
}

/// How a ring is sampled.
pub(crate) struct Shape {
    pub(crate) periods: f64,
    pub(crate) points: f64,
    pub(crate) quality: f64,
    pub(crate) noise: f64,
}

impl Maker {
    pub(crate) fn new(seed: u64) -> Self {
        Self { random: ChaCha8Rng::seed_from_u64(seed) }
    }

    pub(crate) fn between(&mut self, low: f64, high: f64) -> f64 {
        low + (high - low) * self.random.random::<f64>()
    }

    pub(crate) fn log_between(&mut self, low: f64, high: f64) -> f64 {
        (self.between(low.ln(), high.ln())).exp()
    }

    pub(crate) fn chance(&mut self, share: f64) -> bool {
        self.random.random::<f64>() < share
    }

    pub(crate) fn normal(&mut self) -> f64 {
        StandardNormal.sample(&mut self.random)
    }

    /// The rings that must be accepted: at least 6 periods, amplitude/noise at least 20, quality 8 to 40.
    pub(crate) fn shape(&mut self) -> Shape {
        Shape {
            periods: self.between(6.0, 25.0),
            points: self.log_between(10.0, 1000.0),
            quality: self.between(8.0, 40.0),
            noise: 1.0 / self.log_between(20.0, 300.0),
        }
    }

    /// Noise of unit variance, white or limited to a share of the sampling rate by two first-order low passes.
    pub(crate) fn noise(&mut self, count: usize, band: Option<f64>) -> Vec<f64> {
        let Some(band) = band else { return (0..count).map(|_| self.normal()).collect() };
        let keep = (-TAU * band).exp();
        let run_in = (10.0 / band) as usize;
        let (mut first, mut second) = (0.0, 0.0);
        let mut noise = Vec::with_capacity(count);
        for n in 0..count + run_in {
            first = keep * first + (1.0 - keep) * self.normal();
            second = keep * second + (1.0 - keep) * first;
            if n >= run_in {
                noise.push(second);
            }
        }
        let (a, q) = (1.0 - keep, keep * keep);
        let gain = a * a * ((1.0 + q) / (1.0 - q).powi(3)).sqrt();
        noise.iter().map(|x| x / gain).collect()
    }

    /// A valid ring without noise, with its time axis.
    pub(crate) fn clean(&mut self, shape: &Shape) -> Made {
        let frequency_hz = self.log_between(1e5, 1e7);
        let decay_per_s = PI * frequency_hz / shape.quality;
        let interval_s = 1.0 / (frequency_hz * shape.points);
        let count = (shape.periods * shape.points).ceil() as usize;
        let (phase, offset) = (self.between(0.0, TAU), self.between(-5.0, 5.0));
        let slope = self.between(-0.3, 0.3) / (count as f64 * interval_s);
        let volts = (0..count).map(|n| {
            let t = n as f64 * interval_s;
            offset + slope * t + (-decay_per_s * t).exp() * (TAU * frequency_hz * t + phase).cos()
        });
        let volts = volts.collect();
        Made { interval_s, volts, step_v: None, frequency_hz, decay_per_s, what: String::new() }
    }

    pub(crate) fn add_noise(&mut self, made: &mut Made, size: f64, band: Option<f64>) {
        let noise = self.noise(made.volts.len(), band);
        made.volts.iter_mut().zip(noise).for_each(|(v, n)| *v += size * n);
    }

    /// Eight bits over a range that holds the record.
    pub(crate) fn quantise(&mut self, made: &mut Made) {
        let high = made.volts.iter().fold(f64::NEG_INFINITY, |a, &b| a.max(b));
        let low = made.volts.iter().fold(f64::INFINITY, |a, &b| a.min(b));
        let step = (high - low) * self.between(1.05, 2.0) / 256.0;
        let shift = self.random.random::<f64>();
        made.volts.iter_mut().for_each(|v| *v = ((*v / step + shift).round() - shift) * step);
        made.step_v = Some(step);
    }

    /// A valid ring as a scope would show it.
    pub(crate) fn ring(&mut self) -> Made {
        let shape = self.shape();
        let mut made = self.clean(&shape);
        self.add_noise(&mut made, shape.noise, None);
        if self.chance(0.5) {
            self.quantise(&mut made);
        }
        made.what = format!(
            "{:.1} periods, {:.0} points, Q {:.1}, A/s {:.0}, {:?}",
            shape.periods,
            shape.points,
            shape.quality,
            1.0 / shape.noise,
            made.step_v
        );
        made
    }

    fn blank(&mut self) -> Made {
        let count = self.log_between(60.0, 20_000.0) as usize;
        Made {
            interval_s: 1e-8,
            volts: vec![0.0; count],
            step_v: None,
            frequency_hz: 0.0,
            decay_per_s: 0.0,
            what: String::new(),
        }
    }

    fn any_noise(&mut self, made: &mut Made, size: f64) {
        let band = if self.chance(0.5) { Some(self.log_between(0.02, 0.2)) } else { None };
        made.what = format!("{} noise {size:.3} band {band:?}", made.what);
        self.add_noise(made, size, band);
        if self.chance(0.5) {
            self.quantise(made);
        }
    }

    /// Noise, of one step or many, white or limited in bandwidth.
    pub(crate) fn only_noise(&mut self) -> Made {
        let mut made = self.blank();
        made.what = format!("noise, {} samples,", made.volts.len());
        self.any_noise(&mut made, 1.0);
        if self.chance(0.3) {
            let step = self.between(0.3, 4.0);
            made.volts.iter_mut().for_each(|v| *v = (*v / step).round() * step);
            made.step_v = Some(step);
        }
        made
    }

    /// Drifts, exponentials, steps in the mean.
    pub(crate) fn drift(&mut self) -> Made {
        let mut made = self.blank();
        let count = made.volts.len() as f64;
        let kind = (self.random.random::<f64>() * 4.0) as usize;
        let (rate, bend) = (self.log_between(0.5, 50.0), self.between(-2.0, 2.0));
        let place = self.between(0.1, 0.9);
        for (n, v) in made.volts.iter_mut().enumerate() {
            let t = n as f64 / count;
            *v = match kind {
                0 => (-rate * t).exp(),
                1 => t + bend * t * t,
                2 => (-rate * t).exp() + bend * (-0.3 * rate * t).exp(),
                _ => f64::from(u8::from(t > place)),
            };
        }
        made.what = format!("drift {kind} rate {rate:.2} bend {bend:.2}");
        let size = self.log_between(0.002, 0.2);
        self.any_noise(&mut made, size);
        made
    }

    /// A second-order response at or beyond the aperiodic limit, or so near it that nothing swings.
    pub(crate) fn aperiodic(&mut self) -> Made {
        let mut made = self.blank();
        let quality = self.log_between(0.1, 0.7);
        let count = made.volts.len() as f64;
        let natural = self.log_between(5.0, 80.0);
        let (lead, start) = (self.chance(0.5), self.between(0.0, 0.3));
        let decay = natural / (2.0 * quality);
        for (n, v) in made.volts.iter_mut().enumerate() {
            let t = n as f64 / count - if lead { start } else { 0.0 };
            if t < 0.0 {
                *v = 1.0;
                continue;
            }
            let square = natural * natural - decay * decay;
            *v = if square > 0.0 {
                let w = square.sqrt();
                (-decay * t).exp() * ((w * t).cos() + decay / w * (w * t).sin())
            } else {
                let w = (-square).sqrt();
                let (slow, fast) = (decay - w, decay + w);
                (fast * (-slow * t).exp() - slow * (-fast * t).exp()) / (fast - slow).max(1e-9)
            };
        }
        made.what = format!("aperiodic Q {quality:.2} natural {natural:.1} lead {lead}");
        let size = self.log_between(0.002, 0.1);
        self.any_noise(&mut made, size);
        made
    }

    /// Two rings. A second one counts as such where it can be told from noise and from the distortion of the first: at least 5 %
    /// of the first; its energy (half the square of its amplitude, over the samples it lives) at least 100 noise variances; its
    /// frequency at least 12 % and one resolution width (the window's or its own decay's) from the first and its harmonics.
    pub(crate) fn two_modes(&mut self) -> Made {
        loop {
            let shape = self.shape();
            let mut made = self.clean(&shape);
            let ratio = self.log_between(0.25, 6.0);
            let share = self.log_between(0.05, 1.0);
            let quality = self.between(6.0, 40.0);
            let frequency = made.frequency_hz * ratio;
            let decay = PI * frequency / quality;
            let span = made.volts.len() as f64 * made.interval_s;
            let width = 1.0 / span + (decay + made.decay_per_s) / TAU;
            let apart = (1..=3).all(|n| {
                let distance = (frequency - f64::from(n) * made.frequency_hz).abs();
                distance > 1.5 * width && distance > 0.12 * made.frequency_hz
            });
            let alive = (1.0 - (-2.0 * decay * span).exp()) / (2.0 * decay * made.interval_s);
            let energy = 0.5 * share * share / shape.noise.powi(2) * alive;
            if !apart || energy < 100.0 || shape.points / ratio < 5.0 || frequency * span < 3.0 {
                continue;
            }
            let phase = self.between(0.0, TAU);
            for (n, v) in made.volts.iter_mut().enumerate() {
                let t = n as f64 * made.interval_s;
                *v += share * (-decay * t).exp() * (TAU * frequency * t + phase).cos();
            }
            self.add_noise(&mut made, shape.noise, None);
            if self.chance(0.5) {
                self.quantise(&mut made);
            }
            made.what = format!(
                "two modes: ratio {ratio:.3}, share {share:.3}, energy {energy:.0}, Q {quality:.1} beside {:.1} periods, {:.0} points, Q {:.1}, A/s {:.0}, {:?}",
                shape.periods,
                shape.points,
                shape.quality,
                1.0 / shape.noise,
                made.step_v
            );
            return made;
        }
    }

    /// A ring that runs into the end of the vertical range: at least 4 samples in one crest, by at least 3 % of the amplitude and
    /// three times the noise, with the converter's steps or without.
    pub(crate) fn clipped(&mut self) -> Made {
        loop {
            let shape = self.shape();
            let mut made = self.clean(&shape);
            self.add_noise(&mut made, shape.noise, None);
            let high = made.volts.iter().fold(f64::NEG_INFINITY, |a, &b| a.max(b));
            let low = made.volts.iter().fold(f64::INFINITY, |a, &b| a.min(b));
            let middle = 0.5 * (high + low);
            let depth = self.between(0.03, 0.7);
            let (top, bottom) = match (self.random.random::<f64>() * 3.0) as usize {
                0 => (high - depth * (high - middle), f64::NEG_INFINITY),
                1 => (f64::INFINITY, low + depth * (middle - low)),
                _ => (high - depth * (high - middle), low + depth * (middle - low)),
            };
            let cut = made.volts.split(|v| *v < top && *v > bottom).map(<[f64]>::len).max().unwrap_or(0);
            if cut < 4 || depth < 3.0 * shape.noise {
                continue;
            }
            made.volts.iter_mut().for_each(|v| *v = v.clamp(bottom, top));
            if self.chance(0.5) {
                self.quantise(&mut made);
            }
            made.what = format!(
                "clipped by {depth:.3} to {bottom:.3}..{top:.3}, {cut} in a row, {:.1} periods, {:.0} points, Q {:.1}, A/s {:.0}, {:?}",
                shape.periods,
                shape.points,
                shape.quality,
                1.0 / shape.noise,
                made.step_v
            );
            return made;
        }
    }
}
