//! A pair of axes: from values to places on the drawing, round tick marks, SI prefixes.

use super::svg::{Anchor, Svg};

/// One axis: its range in SI units, its name and unit.
#[derive(Debug, Clone, Copy)]
pub(super) struct Axis {
    pub(super) low: f64,
    pub(super) high: f64,
    pub(super) name: &'static str,
    pub(super) unit: &'static str,
}

impl Axis {
    /// An axis around the values with a margin on both sides; never of zero length.
    pub(super) fn around(
        values: impl IntoIterator<Item = f64>,
        margin: f64,
        name: &'static str,
        unit: &'static str,
    ) -> Axis {
        let (low, high) = values
            .into_iter()
            .filter(|value| value.is_finite())
            .fold((f64::INFINITY, f64::NEG_INFINITY), |(low, high), value| (low.min(value), high.max(value)));
        let (low, high) = if low <= high { (low, high) } else { (0.0, 1.0) };
        let least = if low == 0.0 && high == 0.0 { 1.0 } else { 1e-6 * low.abs().max(high.abs()) };
        let extra = ((high - low) * margin).max(least);
        Axis { low: low - extra, high: high + extra, name, unit }
    }

    fn ticks(&self, wanted: usize) -> Vec<f64> {
        let rough = (self.high - self.low) / wanted as f64;
        let decade = 10_f64.powf(rough.log10().floor());
        let step = [1.0, 2.0, 5.0, 10.0].map(|step| step * decade).into_iter().find(|step| *step >= rough * 0.999);
        let step = step.unwrap_or(decade * 10.0);
        let first = (self.low / step).ceil() as i64;
        (first..)
            .map(|index| index as f64 * step)
            .take_while(|tick| *tick <= self.high + step * 1e-9)
            .take(50)
            .collect()
    }

    fn prefix(&self) -> (f64, &'static str) {
        let largest = self.low.abs().max(self.high.abs());
        let prefixes = [(1e6, "M"), (1e3, "k"), (1.0, ""), (1e-3, "m"), (1e-6, "µ"), (1e-9, "n"), (1e-12, "p")];
        if self.unit.is_empty() {
            return (1.0, "");
        }
        prefixes.into_iter().find(|(worth, _)| largest >= *worth * 1.5).unwrap_or((1e-12, "p"))
    }

    fn label(&self) -> String {
        match self.unit {
            "" => self.name.to_owned(),
            unit => format!("{} / {}{unit}", self.name, self.prefix().1),
        }
    }
}

/// The area of a drawing that two axes span.
#[derive(Debug, Clone, Copy)]
pub(super) struct Axes {
    pub(super) left: f64,
    pub(super) top: f64,
    pub(super) width: f64,
    pub(super) height: f64,
    pub(super) x: Axis,
    pub(super) y: Axis,
}

impl Axes {
    pub(super) fn right(&self) -> f64 {
        self.left + self.width
    }

    pub(super) fn bottom(&self) -> f64 {
        self.top + self.height
    }

    /// Place of a value pair, kept inside the area.
    pub(super) fn place(&self, x: f64, y: f64) -> [f64; 2] {
        let across = ((x - self.x.low) / (self.x.high - self.x.low)).clamp(0.0, 1.0);
        let up = ((y - self.y.low) / (self.y.high - self.y.low)).clamp(0.0, 1.0);
        [self.left + across * self.width, self.bottom() - up * self.height]
    }

    /// Grid, tick labels and names; the horizontal axis is labelled only where `with_x`.
    pub(super) fn draw(&self, svg: &mut Svg, with_x: bool) {
        let (worth, _) = self.y.prefix();
        for tick in self.y.ticks((self.height / 48.0).max(2.0) as usize) {
            let [_, y] = self.place(self.x.low, tick);
            svg.line("grid", [self.left, y], [self.right(), y]);
            svg.text("tick", Anchor::End, [self.left - 7.0, y + 4.0], &number(tick / worth));
        }
        let (worth, _) = self.x.prefix();
        for tick in self.x.ticks((self.width / 90.0).max(2.0) as usize) {
            let [x, _] = self.place(tick, self.y.low);
            svg.line("grid", [x, self.top], [x, self.bottom()]);
            if with_x {
                svg.text("tick", Anchor::Middle, [x, self.bottom() + 17.0], &number(tick / worth));
            }
        }
        svg.line("axis", [self.left, self.bottom()], [self.right(), self.bottom()]);
        svg.upright_text("label", [self.left - 48.0, self.top + self.height / 2.0], &self.y.label());
        if with_x {
            let middle = [self.left + self.width / 2.0, self.bottom() + 37.0];
            svg.text("label", Anchor::Middle, middle, &self.x.label());
        }
    }
}

/// A tick's number: no more digits than it needs, a true minus sign.
fn number(value: f64) -> String {
    let rounded = (value * 1e6).round() / 1e6;
    let rounded = if rounded == 0.0 { 0.0 } else { rounded };
    rounded.to_string().replace('-', "\u{2212}")
}
