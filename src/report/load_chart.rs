//! The load steps of one point: how much relaxation ring each step left visible, and the modes of its cycles.

use super::{
    svg::{Anchor, Svg},
    text,
};
use crate::sequence::event::LoadStep;

const WIDTH: f64 = 486.0;
const LEFT: f64 = 66.0;

/// Draws the steps in the order they were taken; `id` must be unique on the page.
pub(super) fn draw(id: &str, steps: &[&LoadStep]) -> String {
    let mut svg = Svg::new(WIDTH, 330.0);
    let column = (WIDTH - LEFT - 10.0) / steps.len().max(1) as f64;
    let bar = (column * 0.62).min(46.0);
    let most = steps.iter().filter_map(|step| step.visible_ring_periods).fold(1.0, f64::max);
    let every = (34.0 / column).ceil().max(1.0) as usize;
    for (index, step) in steps.iter().enumerate() {
        let middle = LEFT + column * (index as f64 + 0.5);
        let left = middle - bar / 2.0;
        let periods = step.visible_ring_periods.unwrap_or(0.0);
        let height = 112.0 * periods / most;
        svg.rect("bar", [left, 144.0 - height], [bar, height]);
        if index % every == 0 {
            let value = step.visible_ring_periods.map_or("none".to_owned(), |periods| format!("{periods:.1}"));
            svg.text("tick", Anchor::Middle, [middle, 138.0 - height], &value);
            svg.text("tick", Anchor::Middle, [middle, 288.0], &text::short(step.load.power_w(), "W"));
        }
        stack(&mut svg, step, left, bar);
    }
    svg.line("axis", [LEFT, 144.0], [WIDTH - 10.0, 144.0]);
    svg.line("axis", [LEFT, 272.0], [WIDTH - 10.0, 272.0]);
    svg.upright_text("label", [18.0, 90.0], "ring periods");
    svg.upright_text("label", [34.0, 90.0], "visible");
    svg.upright_text("label", [18.0, 220.0], "share of");
    svg.upright_text("label", [34.0, 220.0], "cycles");
    svg.text("label", Anchor::Middle, [(LEFT + WIDTH) / 2.0, 306.0], "load power measured at each step, in order");
    for (index, name) in ["continuous", "discontinuous", "skipped"].into_iter().enumerate() {
        let x = LEFT + 20.0 + 130.0 * index as f64;
        svg.rect(&format!("mode {name}"), [x, 314.0], [12.0, 12.0]);
        svg.text("tick", Anchor::Start, [x + 18.0, 324.0], name);
    }
    svg.finish(id, "Load steps: visible relaxation ring and cycle modes against load power", &describe(steps))
}

fn stack(svg: &mut Svg, step: &LoadStep, left: f64, bar: f64) {
    let all = step.cycles.iter().sum::<usize>().max(1) as f64;
    let mut base = 272.0;
    for (count, name) in step.cycles.iter().zip(["continuous", "discontinuous", "skipped"]) {
        let height = 104.0 * *count as f64 / all;
        base -= height;
        svg.rect(&format!("mode {name}"), [left, base], [bar, height]);
    }
}

/// The steps in words.
fn describe(steps: &[&LoadStep]) -> String {
    let sentences = steps.iter().map(|step| {
        let [continuous, discontinuous, skipped] = step.cycles;
        let ring =
            step.visible_ring_periods.map_or("no ring".to_owned(), |periods| format!("{periods:.1} ring periods"));
        let power = text::short(step.load.power_w(), "W");
        format!("{power}: {ring}, {continuous} continuous, {discontinuous} discontinuous, {skipped} skipped")
    });
    sentences.collect::<Vec<_>>().join("; ")
}
