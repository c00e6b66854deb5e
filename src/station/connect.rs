//! Connects a station: opens every instrument, recognises it, and gives the roles with their identities and the handle
//! that switches everything off.

use super::{ByHandLoad, ByHandSource, Operator, Role, SafeOff, Station};
use crate::{
    instrument::{
        Definition, Dialect, DialectLoad, DialectScope, DialectSource, Drivers, Identity, InstrumentError,
        InstrumentErrorKind as Kind, Load, OffSwitch, RoleKind, Scope, Source, identity,
    },
    scpi::{Session, SessionOptions},
    transport::{ExchangeLog, Port},
};
use std::sync::Arc;

/// The instruments of a station, connected and recognised; nothing is set yet.
pub struct Connected {
    /// The scope.
    pub scope: Box<dyn Scope>,
    /// The load.
    pub load: Box<dyn Load>,
    /// The source.
    pub source: Box<dyn Source>,
    /// Switches source and load off, whatever happened; stays of use after the roles are gone.
    pub safe_off: SafeOff,
    /// Whoever attends the bench, to be asked for what is done by hand.
    pub operator: Option<Arc<dyn Operator>>,
}

impl Connected {
    /// Every role with who fills it, in the order of a record.
    pub fn identities(&self) -> [(RoleKind, &Identity); 3] {
        [
            (RoleKind::Scope, self.scope.identity()),
            (RoleKind::Load, self.load.identity()),
            (RoleKind::Source, self.source.identity()),
        ]
    }
}

/// Connects every instrument of the station. Roles filled by hand need the operator.
pub async fn connect(
    station: &Station,
    drivers: &Drivers,
    log: &ExchangeLog,
    operator: Option<Arc<dyn Operator>>,
) -> Result<Connected, InstrumentError> {
    let (scope, load, source) = tokio::join!(
        dialect(RoleKind::Scope, &station.scope.role, drivers, log),
        dialect(RoleKind::Load, &station.load, drivers, log),
        dialect(RoleKind::Source, &station.source, drivers, log),
    );
    let scope = match scope? {
        Filled::Instrument(dialect) => Box::new(DialectScope::new(*dialect)?),
        Filled::ByHand(what) => {
            let detail = format!("a scope can't be read by hand (`{what}`)");
            return Err(by_hand_error(RoleKind::Scope, Kind::NoDriver, detail));
        }
    };
    let attending = |role, what: &str| {
        let operator = operator.clone();
        operator.ok_or_else(|| by_hand_error(role, Kind::Unattended, format!("its operator sets `{what}`")))
    };
    let (load, load_off): (Box<dyn Load>, Option<OffSwitch>) = match load? {
        Filled::Instrument(dialect) => {
            let load = DialectLoad::new(*dialect)?;
            let switch = load.off_switch();
            (Box::new(load), Some(switch))
        }
        Filled::ByHand(what) => (Box::new(ByHandLoad::new(attending(RoleKind::Load, &what)?, what)), None),
    };
    let (source, source_off): (Box<dyn Source>, Option<OffSwitch>) = match source? {
        Filled::Instrument(dialect) => {
            let source = DialectSource::new(*dialect)?;
            let switch = source.off_switch();
            (Box::new(source), Some(switch))
        }
        Filled::ByHand(what) => (Box::new(ByHandSource::new(attending(RoleKind::Source, &what)?, what)), None),
    };
    Ok(Connected { scope, load, source, safe_off: SafeOff::new(source_off, load_off), operator })
}

enum Filled {
    Instrument(Box<Dialect>),
    ByHand(String),
}

async fn dialect(
    role: RoleKind,
    filled: &Role,
    drivers: &Drivers,
    log: &ExchangeLog,
) -> Result<Filled, InstrumentError> {
    match filled {
        Role::ByHand { description } => Ok(Filled::ByHand(description.clone())),
        Role::Instrument { address, driver } => open_dialect(role, address, driver.as_deref(), drivers, log)
            .await
            .map(|dialect| Filled::Instrument(Box::new(dialect))),
    }
}

/// Opens one instrument and finds the driver of the role that suits it, or takes the one that is named.
pub async fn open_dialect(
    role: RoleKind,
    address: &str,
    driver: Option<&str>,
    drivers: &Drivers,
    log: &ExchangeLog,
) -> Result<Dialect, InstrumentError> {
    let refused = |kind, detail: String| InstrumentError {
        kind,
        instrument: role.to_string(),
        address: address.to_owned(),
        detail,
        source: None,
    };
    let named = match driver {
        None => None,
        Some(name) => {
            let known = drivers.named(name).filter(|definition| definition.facts.role() == role);
            Some(known.ok_or_else(|| refused(Kind::NoDriver, format!("no driver `{name}` for a {role} is known")))?)
        }
    };
    let candidates: Vec<&Arc<Definition>> = match named {
        Some(definition) => vec![definition],
        None => drivers.iter().filter(|definition| definition.facts.role() == role).collect(),
    };
    let mut last = None;
    // A serial line tells nothing about its speed: each setting that a candidate states is tried.
    for (index, candidate) in candidates.iter().enumerate() {
        let alike =
            |tried: &&Arc<Definition>| (tried.serial, &tried.terminator) == (candidate.serial, &candidate.terminator);
        if candidates[..index].iter().any(alike) {
            continue;
        }
        match identify(role, address, candidate, log).await {
            Ok((session, answer)) => {
                let who = identity(&answer, address)
                    .ok_or_else(|| refused(Kind::Unexpected, format!("`*IDN?` was answered by `{answer}`")))?;
                let found = named.or_else(|| drivers.recognise(role, &who));
                let found =
                    found.ok_or_else(|| refused(Kind::NoDriver, format!("no driver for a {role} suits `{answer}`")))?;
                let session = session.with_timeouts(found.reply_timeout, found.stall_timeout);
                return Ok(Dialect::new(session, found.clone(), who));
            }
            Err(error) => last = Some(error),
        }
    }
    Err(last.unwrap_or_else(|| refused(Kind::NoDriver, format!("no driver for a {role} is known"))))
}

/// Opens a session by the settings of a candidate and asks who is there.
async fn identify(
    role: RoleKind,
    address: &str,
    candidate: &Definition,
    log: &ExchangeLog,
) -> Result<(Session, String), InstrumentError> {
    let port = Port::new(address, candidate.serial).map_err(|error| InstrumentError {
        kind: Kind::NoDriver,
        instrument: role.to_string(),
        address: address.to_owned(),
        detail: error.to_string(),
        source: None,
    })?;
    let options = SessionOptions {
        name: role.to_string(),
        terminator: candidate.terminator.clone(),
        reply_timeout: candidate.reply_timeout,
        stall_timeout: candidate.stall_timeout,
    };
    let session = Session::open(Arc::new(port), options, log.clone()).await?;
    match session.query("*IDN?").await {
        Ok(answer) => Ok((session, answer)),
        Err(error) => {
            // The line must be free for the next candidate's settings.
            session.close().await;
            Err(error.into())
        }
    }
}

fn by_hand_error(role: RoleKind, kind: Kind, detail: String) -> InstrumentError {
    InstrumentError { kind, instrument: role.to_string(), address: String::new(), detail, source: None }
}
