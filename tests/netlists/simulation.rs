//! Runs a netlist through ngspice in batch mode: the switching waveform as it stands, and the resonance of the same circuit
//! at an operating point by a small-signal analysis.

use super::truth::netlist;
use std::{fs, path::Path, process::Command};

/// Time (s), drain voltage (V) and secondary current (A) at every step of the simulator.
pub(super) struct Simulated {
    pub(super) time_s: Vec<f64>,
    pub(super) drain_v: Vec<f64>,
    secondary_a: Vec<f64>,
}

impl Simulated {
    /// When the secondary current dies between two times: where it first reaches zero after it was last above a twentieth
    /// of its peak, which no current into the rectifier's capacitance reaches later.
    pub(super) fn end_of_demagnetisation_s(&self, from_s: f64, to_s: f64) -> Option<f64> {
        let [from, to] = [from_s, to_s].map(|t| self.time_s.partition_point(|&at| at < t));
        let current = &self.secondary_a[from..to];
        let peak = current.iter().copied().fold(0.0, f64::max);
        let last = current.iter().rposition(|&a| a > peak / 20.0)?;
        let dead = current[last..].iter().position(|&a| a <= 0.0)?;
        Some(self.time_s[from + last + dead])
    }
}

/// The switching waveform of a board.
pub(super) fn simulate(board: &str) -> Simulated {
    let rows = run(&fs::read_to_string(netlist(board)).unwrap(), "waveform.txt");
    let column = |k: usize| rows.iter().map(|row| row[k]).collect();
    // The ammeter counts from the winding into the return: against the rectifier's direction.
    let secondary_a = rows.iter().map(|row| -row[3]).collect();
    Simulated { time_s: column(0), drain_v: column(1), secondary_a }
}

/// Frequency at which the drain node's impedance is real, near the expected one.
pub(super) fn resonance_hz(board: &str, plateau: bool, expected_hz: f64) -> f64 {
    let text = fs::read_to_string(netlist(board)).unwrap();
    let mut deck = text.split(".options").next().unwrap().to_owned();
    if plateau {
        deck = deck.replace("plateau=0", "plateau=1");
    }
    // At rest nothing charges the clamp: hold it where switching does, through an inductor that no ring sees.
    for node in ["clamp", "suppressor"] {
        if text.contains(&format!(".ic v({node})")) {
            deck += &format!("Vhold hold bulk {{clamp_v}}\nLhold hold {node} 10\n");
        }
    }
    let (low, high) = (0.97 * expected_hz, 1.03 * expected_hz);
    deck += &format!(".ac lin 601 {low} {high}\n.control\nrun\nwrdata small.txt v(drain)\nquit\n.endc\n.end\n");
    let rows = run(&deck, "small.txt");
    let crossing = rows.windows(2).find(|pair| pair[0][2] > 0.0 && pair[1][2] <= 0.0);
    let pair = crossing.unwrap_or_else(|| panic!("{board}: no resonance within 3 % of {expected_hz} Hz"));
    let share = pair[0][2] / (pair[0][2] - pair[1][2]);
    pair[0][0] + share * (pair[1][0] - pair[0][0])
}

fn run(deck: &str, output: &str) -> Vec<Vec<f64>> {
    let folder = tempfile::tempdir().unwrap();
    fs::write(folder.path().join("deck.cir"), deck).unwrap();
    let ran = Command::new("ngspice").args(["-b", "deck.cir"]).current_dir(folder.path()).output().unwrap();
    let said = String::from_utf8_lossy(&ran.stdout) + String::from_utf8_lossy(&ran.stderr);
    assert!(!said.contains("aborted"), "{said}");
    table(&folder.path().join(output)).unwrap_or_else(|error| panic!("{error}: {said}"))
}

fn table(path: &Path) -> std::io::Result<Vec<Vec<f64>>> {
    let text = fs::read_to_string(path)?;
    Ok(text.lines().map(|line| line.split_whitespace().map(|word| word.parse().unwrap()).collect()).collect())
}
