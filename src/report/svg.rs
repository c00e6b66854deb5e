//! Drawings as SVG text: a few shapes whose looks come from the page's style sheet, with a title and a description for
//! those who cannot see them (SVG 2, 5.8).

use std::fmt::Write;

/// Where a text hangs on its point.
#[derive(Debug, Clone, Copy)]
pub(super) enum Anchor {
    Start,
    Middle,
    End,
}

/// A drawing under way.
#[derive(Debug)]
pub(super) struct Svg {
    width: f64,
    height: f64,
    body: String,
}

impl Svg {
    pub(super) fn new(width: f64, height: f64) -> Svg {
        Svg { width, height, body: String::new() }
    }

    pub(super) fn line(&mut self, class: &str, [x1, y1]: [f64; 2], [x2, y2]: [f64; 2]) {
        let _ = write!(self.body, r#"<path class="{class}" d="M{x1:.1} {y1:.1}L{x2:.1} {y2:.1}"/>"#);
    }

    pub(super) fn polyline(&mut self, class: &str, points: &[[f64; 2]]) {
        let mut d = String::with_capacity(points.len() * 12);
        for (index, [x, y]) in points.iter().enumerate() {
            let _ = write!(d, "{}{x:.1} {y:.1}", if index == 0 { "M" } else { "L" });
        }
        let _ = write!(self.body, r#"<path class="{class}" d="{d}"/>"#);
    }

    pub(super) fn rect(&mut self, class: &str, [x, y]: [f64; 2], [width, height]: [f64; 2]) {
        let (width, height) = (width.max(0.0), height.max(0.0));
        let _ = write!(
            self.body,
            r#"<rect class="{class}" x="{x:.1}" y="{y:.1}" width="{width:.1}" height="{height:.1}"/>"#
        );
    }

    pub(super) fn circle(&mut self, class: &str, [x, y]: [f64; 2], radius: f64) {
        let _ = write!(self.body, r#"<circle class="{class}" cx="{x:.1}" cy="{y:.1}" r="{radius:.1}"/>"#);
    }

    pub(super) fn text(&mut self, class: &str, anchor: Anchor, [x, y]: [f64; 2], text: &str) {
        let anchor = match anchor {
            Anchor::Start => "start",
            Anchor::Middle => "middle",
            Anchor::End => "end",
        };
        let text = escape(text);
        let _ =
            write!(self.body, r#"<text class="{class}" x="{x:.1}" y="{y:.1}" text-anchor="{anchor}">{text}</text>"#);
    }

    /// A text that reads upwards, for the label of a vertical axis.
    pub(super) fn upright_text(&mut self, class: &str, [x, y]: [f64; 2], text: &str) {
        let text = escape(text);
        let _ = write!(
            self.body,
            r#"<text class="{class}" transform="translate({x:.1} {y:.1}) rotate(-90)" text-anchor="middle">{text}</text>"#
        );
    }

    /// The finished drawing; `id` must be unique on the page.
    pub(super) fn finish(self, id: &str, title: &str, description: &str) -> String {
        let Svg { width, height, body } = self;
        let (title, description) = (escape(title), escape(description));
        format!(
            r#"<svg viewBox="0 0 {width} {height}" style="min-width:{:.0}px" role="img" aria-labelledby="{id}-t {id}-d"><title id="{id}-t">{title}</title><desc id="{id}-d">{description}</desc>{body}</svg>"#,
            width * 0.72
        )
    }
}

fn escape(text: &str) -> String {
    text.replace('&', "&amp;").replace('<', "&lt;").replace('>', "&gt;")
}
