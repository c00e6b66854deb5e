//! The way out of every run: source off first, then the load, each confirmed by reading back, within a second each.

use crate::instrument::OffSwitch;

/// How one role came out of it.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum OffState {
    /// The instrument confirmed that it is off.
    Confirmed,
    /// It could not be confirmed; why.
    Unconfirmed(String),
    /// The role is filled by hand: the operator must see to it.
    ByHand,
}

impl OffState {
    /// Whether the instrument itself confirmed it.
    pub fn is_confirmed(&self) -> bool {
        *self == Self::Confirmed
    }
}

/// What was switched off.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct SafeOffReport {
    /// The line source.
    pub source: OffState,
    /// The load.
    pub load: OffState,
}

/// Switches a station off; made when it is connected, of use after any error and from any task.
#[derive(Clone)]
pub struct SafeOff {
    source: Option<OffSwitch>,
    load: Option<OffSwitch>,
}

impl SafeOff {
    /// From the switches of the roles that have an interface.
    pub fn new(source: Option<OffSwitch>, load: Option<OffSwitch>) -> Self {
        Self { source, load }
    }

    /// Source off, then load off; never fails, but says what was confirmed. A load that hangs delays nothing that
    /// matters: the source comes first.
    pub async fn off(&self) -> SafeOffReport {
        let source = switched(self.source.as_ref()).await;
        let load = switched(self.load.as_ref()).await;
        SafeOffReport { source, load }
    }
}

async fn switched(switch: Option<&OffSwitch>) -> OffState {
    match switch {
        None => OffState::ByHand,
        Some(switch) => match switch.off().await {
            Ok(()) => OffState::Confirmed,
            Err(error) => OffState::Unconfirmed(error.to_string()),
        },
    }
}
