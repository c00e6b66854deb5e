//! Why a run ended before its plan did.

use super::KeepError;
use crate::instrument::InstrumentError;

/// Why a run ended before its plan did; safe-off has been reached by the time anyone sees it.
#[derive(Debug, thiserror::Error)]
pub enum RunError {
    /// An instrument failed.
    #[error(transparent)]
    Instrument(#[from] InstrumentError),
    /// The record could not be written.
    #[error(transparent)]
    Keep(#[from] KeepError),
    /// The end of the run could not be written; safe-off was reached before.
    #[error("{error}; {outputs}")]
    Unrecorded {
        /// What failed.
        error: KeepError,
        /// What is known of source and load.
        outputs: String,
    },
    /// The output never came into regulation.
    #[error(
        "output {output} stood at {voltage_v:.3} V after {waited_s:.1} s at {line_v} V line and {load_a:.3} A load, outside \
         its regulation window {low_v:.3} V to {high_v:.3} V; check the load start, the minimum load and the line voltage"
    )]
    NotInRegulation {
        /// Name of the output.
        output: String,
        /// Voltage read last.
        voltage_v: f64,
        /// Time waited.
        waited_s: f64,
        /// Line voltage.
        line_v: f64,
        /// Load current set.
        load_a: f64,
        /// Regulation window.
        low_v: f64,
        /// Regulation window.
        high_v: f64,
    },
    /// The output collapses and comes back: protection or restart, not regulation.
    #[error(
        "output {output} collapsed {times} times in {waited_s:.1} s at {line_v} V line and {load_a:.3} A load (lowest \
         {lowest_v:.3} V, highest {highest_v:.3} V): the board is in protection or restart; lower the load or find the fault"
    )]
    ProtectionOrRestart {
        /// Name of the output.
        output: String,
        /// How often.
        times: usize,
        /// Time waited.
        waited_s: f64,
        /// Line voltage.
        line_v: f64,
        /// Load current set.
        load_a: f64,
        /// Lowest voltage seen.
        lowest_v: f64,
        /// Highest voltage seen.
        highest_v: f64,
    },
    /// The output voltage, the bulk voltage or the clamp level keeps moving.
    #[error(
        "{what} still moved by {change_percent:.2} % from one look to the next after {waited_s:.1} s at {line_v} V line; \
         allow a longer settle time in the plan"
    )]
    NotSettled {
        /// Which level.
        what: &'static str,
        /// Relative change between the last two looks, in per cent.
        change_percent: f64,
        /// Time waited.
        waited_s: f64,
        /// Line voltage.
        line_v: f64,
    },
    /// The scope did not trigger.
    #[error(
        "the scope did not trigger on {level_v:.0} V within {waited_s:.1} s; check that the probe is on the drain, its \
         factor, and that the board switches"
    )]
    NoTrigger {
        /// Trigger level.
        level_v: f64,
        /// Time waited.
        waited_s: f64,
    },
    /// A reading passed a limit.
    #[error("{what} reached {value:.1} {unit}, beyond its limit of {limit:.1} {unit}: switched off")]
    LimitPassed {
        /// Which reading.
        what: &'static str,
        /// The reading.
        value: f64,
        /// The limit.
        limit: f64,
        /// Unit of both.
        unit: &'static str,
    },
    /// The capture holds nothing usable.
    #[error("capture {number} could not be read as a waveform: {reason}")]
    Unreadable {
        /// Number of the capture.
        number: usize,
        /// Why.
        reason: String,
    },
    /// The program itself is at fault; safe-off is reached all the same.
    #[error("a defect of the program ended the run ({0}); please report it with the run folder")]
    Defect(String),
    /// The plan has something done by hand, and nobody can be asked.
    #[error(
        "the plan adds capacitors by hand, and nobody attends the run: nothing was energised; take added_capacitors out of the \
         plan, or attend the run at a terminal"
    )]
    Unattended,
    /// The operator stopped the run.
    #[error("stopped by the operator")]
    Stopped,
}
