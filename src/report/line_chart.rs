//! A value across line voltage with its 95 % intervals, one mark a point, at most two series.

use super::{
    axes::{Axes, Axis},
    svg::{Anchor, Svg},
    text,
};
use ringstep_analysis::quantity::{COVERAGE_95, Measured, Unit};

/// One series: its name and its values against line voltage.
pub(super) type Series = (&'static str, Vec<(f64, Measured)>);

/// Draws the series over the line voltages of the run; `None` where there is nothing to draw. The second is drawn with open marks.
pub(super) fn draw(
    id: &str,
    name: &'static str,
    unit: Unit,
    symbol: &'static str,
    lines: &[f64],
    series: &[Series],
) -> Option<String> {
    let values = || series.iter().flat_map(|(_, values)| values.iter().copied());
    values().next()?;
    let ends = values().flat_map(|(_, value)| [-1.0, 1.0].map(|side| value.value + side * half(value)));
    let x = Axis::around(lines.iter().copied(), 0.12, "line voltage, rms", "V");
    let x = if x.high - x.low < 1.0 { Axis { low: x.low - 10.0, high: x.high + 10.0, ..x } } else { x };
    let y = Axis::around(ends, 0.12, name, symbol);
    let axes = Axes { left: 66.0, top: 30.0, width: 400.0, height: 230.0, x, y };
    let mut svg = Svg::new(486.0, 308.0);
    axes.draw(&mut svg, true);
    for (index, (name, values)) in series.iter().enumerate() {
        let class = if index == 0 { "point" } else { "point open" };
        let legend = [74.0 + 170.0 * index as f64, 14.0];
        svg.circle(class, legend, 4.5);
        svg.text("tick", Anchor::Start, [legend[0] + 10.0, 18.0], name);
        for (line_v, value) in values {
            let [low, high] = [-1.0, 1.0].map(|side| axes.place(*line_v, value.value + side * half(*value)));
            svg.line("whisker", low, high);
            for [x, y] in [low, high] {
                svg.line("whisker", [x - 5.0, y], [x + 5.0, y]);
            }
            svg.circle(class, axes.place(*line_v, value.value), 4.5);
        }
    }
    let sentences = series.iter().flat_map(|(name, values)| {
        values.iter().map(move |(line_v, value)| {
            format!("{name} at {}: {}", text::short(*line_v, "V"), text::with_interval(*value, unit))
        })
    });
    let description = sentences.collect::<Vec<_>>().join("; ");
    Some(svg.finish(id, &format!("{name} across line voltage"), &description))
}

fn half(value: Measured) -> f64 {
    COVERAGE_95 * value.standard_uncertainty
}
