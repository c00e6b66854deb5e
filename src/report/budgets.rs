//! The uncertainty budgets and the node capacitance taken apart, as tables.

use super::text;
use crate::sequence::event::Point;
use ringstep_analysis::{
    budget::Budget,
    circuit::{ConstantPart, constant_part},
    quantity::{COVERAGE_95, Measured, Unit},
};

/// One budget as a table.
pub(super) struct BudgetTable {
    /// What it is of, with its value and interval.
    pub(super) caption: String,
    pub(super) rows: Vec<[String; 8]>,
}

/// The tables of one point.
pub(super) struct PointBudgets {
    pub(super) heading: String,
    pub(super) budgets: Vec<BudgetTable>,
    /// Name, capacitance and share of each part of the node.
    pub(super) parts: Vec<[String; 3]>,
}

/// Of every point that has any.
pub(super) fn of(points: &[&Point]) -> Vec<PointBudgets> {
    let tables = points.iter().map(|point| PointBudgets {
        heading: text::short(point.line_v, "V"),
        budgets: point.values.budgets.iter().map(table).collect(),
        parts: parts(point),
    });
    tables.filter(|point| !point.budgets.is_empty()).collect()
}

fn table(budget: &Budget) -> BudgetTable {
    // As wide as the budget's own factor makes the interval.
    let unit = Unit::of_symbol(&budget.unit).unwrap_or(Unit::One);
    let widened = budget.standard_uncertainty * budget.coverage_factor / COVERAGE_95;
    let value = Measured { value: budget.value, standard_uncertainty: widened };
    let freedom = match budget.effective_degrees_of_freedom {
        many if many > 1000.0 => String::new(),
        few => format!(", {few:.0} effective degrees of freedom"),
    };
    let value = text::with_interval(value, unit);
    let caption = format!("{}: {value} (95 %, coverage factor {:.2}{freedom})", budget.result, budget.coverage_factor);
    BudgetTable { caption, rows: budget.rows() }
}

fn parts(point: &Point) -> Vec<[String; 3]> {
    let Some(node) = point.values.node_capacitance_f else { return Vec::new() };
    let row = |part: &ringstep_analysis::circuit::CapacitancePart| {
        let share = 100.0 * part.capacitance_f.value / node.value;
        [part.name.clone(), text::with_interval(part.capacitance_f, Unit::Farad), format!("{share:.0} %")]
    };
    point.values.capacitance_parts.iter().map(row).collect()
}

/// What the sweep tells of the part of the capacitance that does not depend on voltage, in a sentence; `None` below three points.
pub(super) fn constant(points: &[&Point]) -> Option<String> {
    let own = |point: &&Point| {
        let values = &point.values;
        let budget = values.budgets.iter().find(|budget| budget.result == "node capacitance")?;
        let differing: f64 = budget
            .components
            .iter()
            .filter(|component| !component.input.common)
            .map(|component| component.contribution.powi(2))
            .sum();
        let node = Measured { value: budget.value, standard_uncertainty: differing.sqrt() };
        Some((values.bulk_voltage_v?.value, node))
    };
    let swept: Vec<(f64, Measured)> = points.iter().filter_map(own).collect();
    if swept.len() < 3 {
        return None;
    }
    let picofarad = |farad: f64| format!("{:.0} pF", farad * 1e12);
    Some(match constant_part(&swept) {
        Some(ConstantPart { between_f: [low, high], exponent, .. }) => format!(
            "Of the node capacitance between {} and {} do not depend on the bulk voltage: that is how far a law C = constant + a v^-m \
             with any exponent m from 0.3 to 1.5 lets these {} points tell (best at m = {exponent:.2}). More and farther line voltages \
             narrow it.",
            picofarad(low),
            picofarad(high),
            swept.len()
        ),
        None => "These line voltages do not tell how much of the node capacitance depends on voltage: it changes too little, or \
                 not as a junction does."
            .to_owned(),
    })
}
