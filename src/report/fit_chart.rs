//! One fitted ring over its data, with the residuals below on the same time axis.

use super::{
    axes::{Axes, Axis},
    svg::{Anchor, Svg},
    text,
    trace::{Trace, thinned},
};
use ringstep_analysis::{
    findings::{RingFit, RingKind},
    fit::curve_v,
};

const MODEL_POINTS: usize = 700;

/// Draws the fit; `id` must be unique on the page.
pub(super) fn draw(id: &str, trace: &Trace, fit: &RingFit) -> String {
    let from = fit.start_s;
    let captured: Vec<(f64, f64)> = trace.between(from, fit.end_s).map(|(time, volts)| (time - from, volts)).collect();
    let length_s = fit.end_s - from;
    let along = |times: Vec<f64>| -> Vec<(f64, f64)> {
        let volts = curve_v(fit, &times);
        times.into_iter().zip(volts).collect()
    };
    let curve = along((0..=MODEL_POINTS).map(|n| length_s * n as f64 / MODEL_POINTS as f64).collect());
    let at_samples = along(captured.iter().map(|(time, _)| *time).collect());
    let data = || captured.iter().copied();
    let model = || curve.iter().copied();
    let residuals = || data().zip(&at_samples).map(|((time, volts), (_, model))| (time, volts - model));
    let x = Axis { low: 0.0, high: length_s, name: "time in the fitted window", unit: "s" };
    let y = Axis::around(data().chain(model()).map(|(_, volts)| volts), 0.06, "drain voltage", "V");
    let axes = Axes { left: 66.0, top: 30.0, width: 400.0, height: 230.0, x, y };
    let mut svg = Svg::new(486.0, 446.0);
    svg.line("data", [66.0, 14.0], [90.0, 14.0]);
    svg.text("tick", Anchor::Start, [96.0, 18.0], "as captured");
    svg.line("model", [196.0, 14.0], [220.0, 14.0]);
    svg.text("tick", Anchor::Start, [226.0, 18.0], "fitted ring");
    axes.draw(&mut svg, false);
    svg.polyline("data", &thinned(&axes, data()));
    svg.polyline("model", &thinned(&axes, model()));

    let spread = [fit.residual_v, -fit.residual_v];
    let y = Axis::around(residuals().map(|(_, volts)| volts).chain(spread), 0.1, "residual", "V");
    let below = Axes { top: 286.0, height: 112.0, x, y, ..axes };
    below.draw(&mut svg, true);
    svg.polyline("residual", &thinned(&below, residuals()));
    for level in spread {
        let [_, y] = below.place(0.0, level);
        svg.line("level over", [below.left, y], [below.right(), y]);
    }
    svg.finish(id, &format!("{} and its fit", title(fit.kind)), &describe(fit))
}

/// Name of the ring, to begin a sentence with.
pub(super) fn title(kind: RingKind) -> &'static str {
    match kind {
        RingKind::Relaxation => "Relaxation ring",
        RingKind::Leakage => "Leakage ring",
    }
}

/// The fit in words: what was fitted, how well, why it stopped, whether it counts.
pub(super) fn describe(fit: &RingFit) -> String {
    let [amplitude, decay, frequency, _, offset, _] = fit.parameters;
    let verdict = if fit.accepted { "Accepted" } else { "Not accepted; no value is taken from it" };
    format!(
        "Rings at {} about {}, starting with {} and decaying with a time constant of {}, over {:.1} periods. Residuals have \
         a standard deviation of {} (dashed). {verdict}. Stopped: {}.",
        text::short(frequency, "Hz"),
        text::short(offset, "V"),
        text::short(amplitude.abs(), "V"),
        text::short(1.0 / decay, "s"),
        (fit.end_s - fit.start_s) * frequency,
        text::short(fit.residual_v, "V"),
        fit.stopped
    )
}
