//! The true values that a simulated bench left behind, beside the measured ones. Only the demonstration's last lines and
//! tests read them.

use super::{error::CliError, output};
use ringstep::{
    record::{Results, Run, results::PointResult},
    sequence::event::{Capture, Purpose},
};
use ringstep_analysis::quantity::{Measured, Unit};
use serde::Deserialize;
use serde_json::{Value, json};
use std::path::Path;

/// What is true of one acquisition.
#[derive(Debug, Clone, Deserialize)]
struct Acquisition {
    number: u64,
    #[serde(default)]
    relaxation_rings: Vec<RingTruth>,
    #[serde(default)]
    leakage_rings: Vec<RingTruth>,
    leakage_inductance_h: f64,
}

#[derive(Debug, Clone, Copy, Deserialize)]
struct RingTruth {
    capacitance_f: f64,
    frequency_hz: f64,
}

/// True values, one entry an acquisition.
#[derive(Debug, Default)]
pub(super) struct Truths(Vec<Acquisition>);

/// True values of one point.
#[derive(Debug, Clone, Copy)]
struct PointTruth {
    capacitance_f: Option<f64>,
    relaxation_hz: Option<f64>,
    leakage_h: Option<f64>,
    leakage_hz: Option<f64>,
}

impl Truths {
    /// Reads the file that `simulate --truth` wrote.
    pub(super) fn read(path: &Path) -> Result<Self, CliError> {
        let text = super::inputs::read_text(path)?;
        let lines = text.lines().filter(|line| line.contains("\"relaxation_rings\""));
        let read: Result<Vec<Acquisition>, _> = lines.map(serde_json::from_str).collect();
        read.map(Self).map_err(|error| CliError::Failed(format!("failed to read {}: {error}", path.display())))
    }

    fn of_point(&self, run: &Run, point: &PointResult) -> PointTruth {
        let of = |wanted: &dyn Fn(&Capture) -> bool| -> Vec<&Acquisition> {
            let captures = run.captures().filter(|capture| wanted(capture));
            let numbers: Vec<u64> = captures.map(|capture| capture.waveform.acquisition).collect();
            self.0.iter().filter(|acquisition| numbers.contains(&acquisition.number)).collect()
        };
        let relaxation = of(&|capture| capture.point == point.index && capture.purpose == Purpose::RelaxationRing);
        let leakage = of(&|capture| point.values.leakage_captures.contains(&capture.number));
        let rings = relaxation.iter().flat_map(|acquisition| &acquisition.relaxation_rings);
        let leaks = leakage.iter().flat_map(|acquisition| &acquisition.leakage_rings);
        PointTruth {
            capacitance_f: mean(rings.clone().map(|ring| ring.capacitance_f)),
            relaxation_hz: mean(rings.map(|ring| ring.frequency_hz)),
            leakage_h: leakage.first().map(|acquisition| acquisition.leakage_inductance_h),
            leakage_hz: mean(leaks.map(|ring| ring.frequency_hz)),
        }
    }

    /// Measured, true and difference, a row a quantity and point.
    pub(super) fn table(&self, run: &Run, results: &Results) -> String {
        let rows = results.points.iter().flat_map(|point| {
            self.pairs(run, point).into_iter().map(|(name, unit, measured, truth)| {
                let difference = 100.0 * (measured.value / truth - 1.0);
                vec![
                    format!("{} V", point.line_v),
                    name.to_owned(),
                    measured.text_with_95_percent_interval(unit),
                    Measured::exact(truth).text_with_standard_uncertainty(unit),
                    format!("{difference:+.2} %"),
                ]
            })
        });
        output::table(&["line", "quantity", "measured (95 %)", "true", "difference"], rows)
    }

    /// The same for machines.
    pub(super) fn to_json(&self, run: &Run, results: &Results) -> Value {
        let points = results.points.iter().map(|point| {
            let pairs = self.pairs(run, point).into_iter().map(|(name, _, measured, truth)| {
                json!({ "quantity": name, "measured": measured, "true": truth, "ratio": measured.value / truth })
            });
            json!({ "line_v": point.line_v, "values": pairs.collect::<Vec<_>>() })
        });
        Value::Array(points.collect())
    }

    fn pairs(&self, run: &Run, point: &PointResult) -> Vec<(&'static str, Unit, Measured, f64)> {
        let truth = self.of_point(run, point);
        let values = &point.values;
        let rows = [
            ("node capacitance", Unit::Farad, values.node_capacitance_f, truth.capacitance_f),
            ("relaxation ring", Unit::Hertz, values.relaxation_frequency_hz, truth.relaxation_hz),
            ("leakage inductance", Unit::Henry, values.leakage_inductance_h, truth.leakage_h),
            ("leakage ring", Unit::Hertz, values.leakage_frequency_hz, truth.leakage_hz),
        ];
        rows.into_iter().filter_map(|(name, unit, measured, truth)| Some((name, unit, measured?, truth?))).collect()
    }
}

fn mean(values: impl Iterator<Item = f64>) -> Option<f64> {
    let (sum, count) = values.fold((0.0, 0.0), |(sum, count), value| (sum + value, count + 1.0));
    (count > 0.0).then(|| sum / count)
}
