//! What stands between the drain node and the converter of the scope: the probe with its offset and miscompensation, the
//! bandwidth, the recovery of an overdriven amplifier. First-order systems, solved exactly for input that is linear
//! between the points of the waveform, so that the steps may vary.

use super::settings::{Channel, Coupling, Model, Probe};

/// Time constant of the probe's compensation: 9 megohm with 11 pF.
const COMPENSATION_S: f64 = 100e-6;

/// Time constant of the input capacitor with AC coupling: 10 Hz.
const COUPLING_S: f64 = 16e-3;

/// Divisions from the centre at which the input amplifier saturates, and how much further it is driven at most.
const SATURATION_DIVISIONS: f64 = 6.0;
const DEEPEST_DIVISIONS: f64 = 30.0;

/// Recovery from saturation: time constant, and the part of the excess that lingers.
const RECOVERY_S: f64 = 60e-9;
const LINGERING: f64 = 0.02;

/// The chain of one channel.
#[derive(Debug, Clone, Copy)]
pub struct FrontEnd {
    channel: Channel,
    /// What the display multiplies the tip voltage with: 1 when the factor set is that of the probe.
    display_ratio: f64,
    probe: Probe,
    bandwidth_s: f64,
}

/// The signal within the chain at one point of the waveform, in volts as displayed.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Signal {
    /// Time of the point.
    pub time_s: f64,
    /// After the probe.
    input_v: f64,
    /// After the bandwidth.
    output_v: f64,
    /// Slow part that miscompensation acts on.
    compensation_v: f64,
    /// Mean that AC coupling takes away.
    mean_v: f64,
    /// What is left of an overdrive.
    excess_v: f64,
}

impl FrontEnd {
    /// The chain of the channel with the drain probe.
    pub fn new(model: &Model, probe: Probe, channel: &Channel) -> Self {
        let pole_s = |hz: f64| 1.0 / (std::f64::consts::TAU * hz);
        let bandwidth_s = pole_s(if channel.bandwidth_limit { 20e6 } else { model.bandwidth_hz });
        Self { channel: *channel, display_ratio: channel.probe_factor / probe.factor, probe, bandwidth_s }
    }

    /// The signal at rest, at the first point of a waveform around `mean_v`.
    pub fn rest(&self, time_s: f64, drain_v: f64, mean_v: f64) -> Signal {
        let mean_v = mean_v * self.display_ratio;
        let shown_v = self.displayed(drain_v, mean_v);
        let compensation_v = self.displayed(mean_v / self.display_ratio, mean_v);
        Signal { time_s, input_v: shown_v, output_v: shown_v, compensation_v, mean_v, excess_v: 0.0 }
    }

    fn displayed(&self, drain_v: f64, mean_v: f64) -> f64 {
        let shown_v = (drain_v + self.probe.offset_v) * self.display_ratio;
        if self.channel.coupling == Coupling::Ac { shown_v - mean_v } else { shown_v }
    }

    /// The signal at the next point.
    pub fn next(&self, from: &Signal, time_s: f64, drain_v: f64) -> Signal {
        let step_s = time_s - from.time_s;
        let tip_v = drain_v * self.display_ratio;
        let mean_v = from.mean_v + (tip_v - from.mean_v) * (step_s / COUPLING_S).min(1.0);
        let shown_v = self.displayed(drain_v, mean_v);
        let compensation_v = from.compensation_v + (shown_v - from.compensation_v) * (step_s / COMPENSATION_S).min(1.0);
        let input_v = shown_v + self.probe.miscompensation * (shown_v - compensation_v);
        let output_v = lag(self.bandwidth_s, step_s, from.input_v, input_v, from.output_v);
        let (before_v, after_v) = (self.overdrive(from.output_v), self.overdrive(output_v));
        let excess_v = lag(RECOVERY_S, step_s, before_v, after_v, from.excess_v);
        Signal { time_s, input_v, output_v, compensation_v, mean_v, excess_v }
    }

    /// What the converter and the trigger see between two neighbouring points.
    pub fn between(&self, from: &Signal, to: &Signal, time_s: f64) -> f64 {
        let step_s = to.time_s - from.time_s;
        if step_s <= 0.0 {
            return self.at(to);
        }
        let part = ((time_s - from.time_s) / step_s).clamp(0.0, 1.0);
        let input_v = from.input_v + part * (to.input_v - from.input_v);
        let output_v = lag(self.bandwidth_s, part * step_s, from.input_v, input_v, from.output_v);
        output_v + LINGERING * (from.excess_v + part * (to.excess_v - from.excess_v))
    }

    /// What the converter and the trigger see at a point.
    pub fn at(&self, signal: &Signal) -> f64 {
        signal.output_v + LINGERING * signal.excess_v
    }

    fn overdrive(&self, output_v: f64) -> f64 {
        let beyond_v = output_v - self.channel.offset_v;
        let limit_v = SATURATION_DIVISIONS * self.channel.scale_v;
        let deepest_v = DEEPEST_DIVISIONS * self.channel.scale_v;
        (beyond_v.abs() - limit_v).clamp(0.0, deepest_v).copysign(beyond_v)
    }
}

/// First-order lag after `step_s`, the input going straight from `before` to `after`, the output starting from `output`.
fn lag(constant_s: f64, step_s: f64, before: f64, after: f64, output: f64) -> f64 {
    if step_s <= 0.0 {
        return output;
    }
    let lagging = (after - before) * constant_s / step_s;
    after - lagging + (output - before + lagging) * (-step_s / constant_s).exp()
}
