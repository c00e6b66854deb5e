//! Status reporting of IEEE 488.2 (clause 11) and the error queue of SCPI-99 (volume 2, 21.8): registers, enable masks,
//! status byte, and a queue that tells when it has overflowed.

use super::error::ScpiError;
use std::collections::VecDeque;

/// Entries the error queue holds.
pub const QUEUE_DEPTH: usize = 16;

const OPERATION_COMPLETE: u8 = 0x01;
const POWER_ON: u8 = 0x80;

/// Registers and error queue of one instrument.
#[derive(Debug)]
pub struct Status {
    errors: VecDeque<ScpiError>,
    events: u8,
    /// Event status enable register.
    pub event_enable: u8,
    /// Service request enable register.
    pub service_enable: u8,
}

impl Default for Status {
    fn default() -> Self {
        Self { errors: VecDeque::new(), events: POWER_ON, event_enable: 0, service_enable: 0 }
    }
}

impl Status {
    /// Queues an error and raises its event bit; a full queue ends in "Queue overflow".
    pub fn report(&mut self, error: ScpiError) {
        self.events |= error.event_bit();
        if self.errors.len() < QUEUE_DEPTH {
            self.errors.push_back(error);
        } else if let Some(last) = self.errors.back_mut() {
            *last = ScpiError::queue_overflow("");
            self.events |= last.event_bit();
        }
    }

    /// Takes the oldest error, as `SYSTem:ERRor?` answers.
    pub fn next_error(&mut self) -> String {
        self.errors.pop_front().map_or_else(|| String::from("0,\"No error\""), |error| error.to_string())
    }

    /// `*CLS`.
    pub fn clear(&mut self) {
        self.errors.clear();
        self.events = 0;
    }

    /// `*ESR?`: reads and clears.
    pub fn take_events(&mut self) -> u8 {
        std::mem::take(&mut self.events)
    }

    /// `*OPC`, when nothing is pending.
    pub fn operation_complete(&mut self) {
        self.events |= OPERATION_COMPLETE;
    }

    /// The status byte.
    pub fn byte(&self, message_available: bool, questionable: bool) -> u8 {
        let bits = [
            (0x04, !self.errors.is_empty()),
            (0x08, questionable),
            (0x10, message_available),
            (0x20, self.events & self.event_enable != 0),
        ];
        let byte = bits.iter().filter(|(_, set)| *set).fold(0, |byte, (bit, _)| byte | bit);
        if byte & self.service_enable != 0 { byte | 0x40 } else { byte }
    }
}
