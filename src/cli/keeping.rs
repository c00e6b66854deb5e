//! The keeper of a run started from the command line: the run folder, and a line for each event to whoever watches.

use super::output;
use indicatif::{ProgressBar, ProgressStyle};
use ringstep::{
    record::RunWriter,
    sequence::{
        KeepError, Keeper,
        event::{Capture, Event, Purpose},
        outputs,
    },
    transport::{ExchangeEntry, ExchangeSink},
};
use ringstep_analysis::quantity::{Measured, Unit};
use std::{
    io::IsTerminal,
    sync::atomic::{AtomicBool, Ordering},
    time::Duration,
};

/// Keeps a run in its folder and shows where it is.
pub(super) struct FolderKeeper {
    pub(super) writer: RunWriter,
    progress: Progress,
}

impl FolderKeeper {
    pub(super) fn new(writer: RunWriter, quiet: bool) -> Self {
        Self { writer, progress: Progress::new(quiet) }
    }
}

impl Keeper for FolderKeeper {
    fn event(&mut self, event: &Event) -> Result<(), KeepError> {
        self.writer.event(event).map_err(|error| KeepError(Box::new(error)))?;
        self.progress.show(event);
        Ok(())
    }

    fn capture(&mut self, mut capture: Capture) -> Result<Capture, KeepError> {
        self.writer.capture(&mut capture).map_err(|error| KeepError(Box::new(error)))?;
        Ok(capture)
    }
}

/// Writes the exchange log; a failure is told once and stops the log, not the run's way to safe-off.
pub(super) struct ExchangeFile {
    log: ringstep::record::ExchangeLog,
    failed: AtomicBool,
}

impl ExchangeFile {
    pub(super) fn new(log: ringstep::record::ExchangeLog) -> Self {
        Self { log, failed: AtomicBool::new(false) }
    }
}

impl ExchangeSink for ExchangeFile {
    fn exchanged(&self, entry: ExchangeEntry) {
        let written = serde_json::to_value(&entry).map_err(|e| e.to_string());
        let written = written.and_then(|value| self.log.append(&value).map_err(|e| e.to_string()));
        if let Err(error) = written
            && !self.failed.swap(true, Ordering::Relaxed)
        {
            tracing::error!("the exchange log is no longer written: {error}");
        }
    }
}

/// A moving line on a terminal, plain lines elsewhere, nothing when quiet.
enum Progress {
    Quiet,
    Lines,
    Bar(ProgressBar),
}

impl Progress {
    fn new(quiet: bool) -> Self {
        if quiet {
            return Self::Quiet;
        }
        if !std::io::stderr().is_terminal() {
            return Self::Lines;
        }
        let bar = ProgressBar::new_spinner();
        bar.set_style(ProgressStyle::default_spinner());
        bar.enable_steady_tick(Duration::from_millis(120));
        Self::Bar(bar)
    }

    fn show(&self, event: &Event) {
        match (self, sentence(event)) {
            // However quiet: someone must know that it may be live.
            (Self::Quiet, Some((text, _))) if matches!(event, Event::SafeOff { source_off: false, .. }) => {
                output::note(&text);
            }
            (Self::Quiet, _) | (_, None) => {}
            (Self::Lines, Some((text, true))) => output::note(&text),
            (Self::Lines, Some((_, false))) => {}
            (Self::Bar(bar), Some((text, lasting))) => {
                bar.set_message(text.clone());
                if lasting {
                    bar.println(text);
                }
            }
        }
        if let (Self::Bar(bar), Event::RunEnded { .. }) = (self, event) {
            bar.finish_and_clear();
        }
    }
}

/// What an event says to someone who watches, and whether the line is worth keeping on the screen.
fn sentence(event: &Event) -> Option<(String, bool)> {
    let kept = |text: String| Some((text, true));
    match event {
        Event::InstrumentIdentified { role, identity } => {
            let simulated = if identity.simulated { " (simulated)" } else { "" };
            kept(format!(
                "{role}: {} {} serial {} at {}{simulated}",
                identity.maker, identity.model, identity.serial_number, identity.address
            ))
        }
        Event::LineSet { line_v, frequency_hz } => kept(format!("line at {line_v} V, {frequency_hz} Hz")),
        Event::LoadStepped(step) => {
            let [continuous, discontinuous, skipped] = step.cycles;
            let ring = match step.visible_ring_periods {
                Some(periods) => format!("{periods:.1} periods of relaxation ring visible"),
                None => "no relaxation ring".into(),
            };
            kept(format!(
                "  load {:.3} A, {:.2} W: {continuous} continuous, {discontinuous} discontinuous, {skipped} skipped; {ring}",
                step.set_a,
                step.load.power_w()
            ))
        }
        Event::PointFinished(point) => {
            let text = point.values.node_capacitance_f.map_or_else(
                || "not given".to_owned(),
                |capacitance| capacitance.text_with_95_percent_interval(Unit::Farad),
            );
            kept(format!("  {} V: node capacitance {text}", point.line_v))
        }
        Event::PointRefused { line_v, reason, .. } => kept(format!("  {line_v} V: not measured: {reason}")),
        Event::Noted { note } => kept(format!("  note: {note}")),
        Event::SafeOff { source_off, load_off, .. } => kept(outputs(*source_off, *load_off)),
        Event::Settled { line_v, load, .. } => {
            Some((format!("  settled at {line_v} V, {:.2} W", load.power_w()), false))
        }
        Event::Captured(capture) => {
            let purpose = match capture.purpose {
                Purpose::Survey => "survey",
                Purpose::RelaxationRing => "relaxation ring",
                Purpose::LeakageRing => "leakage ring",
            };
            Some((format!("  capture {}: {purpose}", capture.number), false))
        }
        Event::AddedPointFinished(point) => {
            let text = |value: Option<Measured>| {
                value.map_or_else(|| "not given".to_owned(), |value| value.text_with_standard_uncertainty(Unit::Hertz))
            };
            let (relaxation, leakage) = (point.values.relaxation_frequency_hz, point.values.leakage_frequency_hz);
            kept(format!(
                "  with {}: relaxation ring {}, leakage ring {}",
                point.capacitance_f.text_with_standard_uncertainty(Unit::Farad),
                text(relaxation),
                text(leakage)
            ))
        }
        Event::AddedCapacitorRefused { capacitance_f, reason } => {
            let farad = Measured::exact(*capacitance_f).text_with_standard_uncertainty(Unit::Farad);
            kept(format!("  added capacitor of {farad}: not measured: {reason}"))
        }
        Event::AddedCapacitorsFinished(outcome) => kept(super::added::outcome(outcome)),
        // What is asked of the operator is told by the prompt.
        Event::Discharge(_) | Event::HandworkAsked(_) | Event::HandworkDone { .. } => None,
        Event::RunStarted { .. } | Event::PreflightChecked { .. } | Event::RunEnded { .. } => None,
    }
}
