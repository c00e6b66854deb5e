//! What every instrument has in common: it takes a program message, executes its units in order, keeps status and errors,
//! and gives the response message. The commands of its own come from its `Dialect`.

use super::{
    error::ScpiError,
    parameter::{Call, Unit as Suffix},
    pattern::Pattern,
    status::Status,
    syntax::{self, Unit},
};

/// A response to one query.
pub type Reply = Result<Option<Vec<u8>>, ScpiError>;

/// Which forms a command has.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Form {
    /// Setting only.
    Set,
    /// Query only.
    Query,
    /// Both.
    Both,
}

/// The commands of one kind of instrument.
pub trait Dialect: Send + 'static {
    /// Names of the commands.
    type Command: Copy + Send + 'static;

    /// Header patterns.
    const COMMANDS: &'static [(&'static str, Form, Self::Command)];

    /// What `*IDN?` answers.
    fn identity(&self) -> String;

    /// Executes one command or query.
    fn execute(&mut self, command: Self::Command, call: &Call<'_>) -> Reply;

    /// `*RST`.
    fn reset(&mut self);

    /// Whether the questionable status register summarises to true.
    fn is_questionable(&self) -> bool {
        false
    }

    /// Lets the instrument do what its time has come for.
    fn service(&mut self) {}
}

/// An instrument as a wire sees it.
pub trait Instrument: Send {
    /// Executes a program message (without its terminator); the response message, empty if there is none.
    fn message(&mut self, message: &[u8]) -> Vec<u8>;

    /// Queues an error that the wire found.
    fn report(&mut self, error: ScpiError);

    /// Lets the instrument do what its time has come for.
    fn service(&mut self);
}

/// A dialect with status reporting and the common commands.
pub struct Device<D: Dialect> {
    dialect: D,
    status: Status,
    patterns: Vec<(Pattern, Form, D::Command)>,
}

impl<D: Dialect> Device<D> {
    /// The instrument, just switched on.
    pub fn new(dialect: D) -> Self {
        let patterns = D::COMMANDS.iter().map(|(text, form, command)| (Pattern::new(text), *form, *command)).collect();
        Self { dialect, status: Status::default(), patterns }
    }

    fn execute(&mut self, unit: &Unit, pending: bool) -> Reply {
        let call = Call { suffix: 1, query: unit.query, parameters: &unit.parameters };
        if let [name] = unit.header.as_slice()
            && name.starts_with('*')
        {
            return self.common(name, &call, pending).map_err(|error| name_header(error, unit));
        }
        if error_query(unit) {
            call.nothing()?;
            return Ok(Some(self.status.next_error().into_bytes()));
        }
        let found = self.patterns.iter().find_map(|(pattern, form, command)| {
            let suffix = pattern.matches(&unit.header)?;
            let allowed = matches!((form, unit.query), (Form::Both, _) | (Form::Set, false) | (Form::Query, true));
            allowed.then_some((*command, suffix))
        });
        let (command, suffix) = found.ok_or_else(|| ScpiError::undefined_header(unit.text()))?;
        if unit.query {
            call.nothing()?;
        }
        self.dialect.execute(command, &Call { suffix, ..call })
    }

    fn common(&mut self, name: &str, call: &Call<'_>, pending: bool) -> Reply {
        if name == "*ESE" && !call.query {
            self.status.event_enable = call.number(Suffix::None, 0.0..=255.0)?.round() as u8;
            return Ok(None);
        }
        if name == "*SRE" && !call.query {
            // Bit 6 is the summary itself and cannot be enabled (IEEE 488.2, 11.3.2.2).
            self.status.service_enable = call.number(Suffix::None, 0.0..=255.0)?.round() as u8 & !0x40;
            return Ok(None);
        }
        call.nothing()?;
        let answer = match (name, call.query) {
            ("*IDN", true) => self.dialect.identity(),
            ("*ESR", true) => self.status.take_events().to_string(),
            ("*ESE", true) => self.status.event_enable.to_string(),
            ("*SRE", true) => self.status.service_enable.to_string(),
            ("*STB", true) => self.status.byte(pending, self.dialect.is_questionable()).to_string(),
            // Every command is sequential: nothing is pending when the next one starts.
            ("*OPC", true) => String::from("1"),
            ("*TST", true) => String::from("0"),
            (name, false) => return self.common_command(name).map(|()| None),
            _ => return Err(ScpiError::undefined_header("")),
        };
        Ok(Some(answer.into_bytes()))
    }

    fn common_command(&mut self, name: &str) -> Result<(), ScpiError> {
        match name {
            "*CLS" => self.status.clear(),
            "*RST" => self.dialect.reset(),
            "*OPC" => self.status.operation_complete(),
            "*WAI" => {}
            _ => return Err(ScpiError::undefined_header("")),
        }
        Ok(())
    }
}

fn name_header(error: ScpiError, unit: &Unit) -> ScpiError {
    if error.code() == -113 { ScpiError::undefined_header(unit.text()) } else { error }
}

fn error_query(unit: &Unit) -> bool {
    unit.query && Pattern::new("SYSTem:ERRor[:NEXT]").matches(&unit.header).is_some()
}

impl<D: Dialect> Instrument for Device<D> {
    fn message(&mut self, message: &[u8]) -> Vec<u8> {
        self.dialect.service();
        let mut response: Vec<u8> = vec![];
        let mut indefinite = false;
        for unit in syntax::units(message) {
            let result = match &unit {
                // Nothing may follow the arbitrary text of *IDN? in a response (IEEE 488.2, 6.5.7.5).
                Ok(unit) if unit.query && indefinite => Err(ScpiError::unterminated_after_indefinite(unit.text())),
                Ok(unit) => self.execute(unit, !response.is_empty()),
                Err(error) => Err(error.clone()),
            };
            match result {
                Ok(Some(reply)) => {
                    if !response.is_empty() {
                        response.push(b';');
                    }
                    response.extend(reply);
                    indefinite |= unit.is_ok_and(|unit| unit.header == ["*IDN"]);
                }
                Ok(None) => {}
                Err(error) => {
                    let stop = error.is_command_error();
                    self.status.report(error);
                    if stop {
                        break;
                    }
                }
            }
        }
        if !response.is_empty() {
            response.push(b'\n');
        }
        response
    }

    fn report(&mut self, error: ScpiError) {
        self.status.report(error);
    }

    fn service(&mut self) {
        self.dialect.service();
    }
}
