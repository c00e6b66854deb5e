//! Bits of the status byte and the standard event register (IEEE 488.2 11.2, 11.5).

/// The status byte, as `*STB?` answers it.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct StatusByte(pub u8);

impl StatusByte {
    /// The error queue holds an entry.
    pub const ERROR_QUEUE: u8 = 0x04;
    /// A questionable condition is summarised.
    pub const QUESTIONABLE: u8 = 0x08;
    /// An answer is waiting.
    pub const MESSAGE_AVAILABLE: u8 = 0x10;
    /// The standard event register is summarised.
    pub const EVENT_SUMMARY: u8 = 0x20;
    /// Any enabled bit is set.
    pub const MASTER_SUMMARY: u8 = 0x40;
    /// An operation condition is summarised.
    pub const OPERATION: u8 = 0x80;

    /// Whether every bit of the mask is set.
    pub fn has(self, mask: u8) -> bool {
        self.0 & mask == mask
    }
}

/// The standard event register, as `*ESR?` answers it; reading clears it.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct EventStatus(pub u8);

impl EventStatus {
    /// Operations are complete.
    pub const OPERATION_COMPLETE: u8 = 0x01;
    /// A question went wrong.
    pub const QUERY_ERROR: u8 = 0x04;
    /// The device reports a failure.
    pub const DEVICE_ERROR: u8 = 0x08;
    /// A command could not be carried out.
    pub const EXECUTION_ERROR: u8 = 0x10;
    /// A command was not understood.
    pub const COMMAND_ERROR: u8 = 0x20;
    /// The device was switched on since the last reading.
    pub const POWER_ON: u8 = 0x80;

    /// Whether every bit of the mask is set.
    pub fn has(self, mask: u8) -> bool {
        self.0 & mask == mask
    }
}
