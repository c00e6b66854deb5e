//! `drivers`: which instrument dialects there are, and whether a driver file is right.

use super::{
    error::{CliError, Exit},
    inputs::read_text,
    output,
};
use clap::{Args, Subcommand};
use ringstep::instrument::{Drivers, DriversError, check_driver};
use std::path::{Path, PathBuf};

/// List drivers, or check a driver file.
#[derive(Debug, Args)]
pub(crate) struct DriversCommand {
    #[command(subcommand)]
    action: Action,
}

#[derive(Debug, Subcommand)]
enum Action {
    /// List the drivers, those of a folder going before the built-in ones of the same name.
    List {
        /// Folder with more driver files.
        #[arg(long, value_name = "FOLDER")]
        folder: Option<PathBuf>,
    },
    /// Check a driver file: every mistake in it is shown.
    Check {
        /// The driver file.
        file: PathBuf,
    },
}

impl DriversCommand {
    /// Runs the command.
    pub(crate) fn run(&self) -> Result<Exit, CliError> {
        match &self.action {
            Action::List { folder } => {
                output::line(&listed(&known(folder.as_deref())?));
            }
            Action::Check { file } => {
                let path = file.to_string_lossy();
                let driver = check_driver(&path, &read_text(file)?);
                let driver = driver.map_err(|errors| CliError::Mistakes(vec![errors]))?;
                output::line(&format!("{path} is a right driver of a {}: \"{}\"", driver.facts.role(), driver.name));
            }
        }
        Ok(Exit::Done)
    }
}

/// The drivers that are built in, and those of a folder before them.
pub(super) fn known(folder: Option<&Path>) -> Result<Drivers, CliError> {
    let drivers = match folder {
        Some(folder) => Drivers::with_folder(folder),
        None => Drivers::embedded(),
    };
    drivers.map_err(as_cli_error)
}

fn listed(drivers: &Drivers) -> String {
    let rows =
        drivers.iter().map(|driver| vec![driver.facts.role().to_string(), driver.name.clone(), driver.about.clone()]);
    output::table(&["role", "driver", "what for"], rows)
}

fn as_cli_error(error: DriversError) -> CliError {
    match error {
        DriversError::Unreadable { path, source } => CliError::Unreadable { path, source },
        DriversError::Mistaken(files) => CliError::Mistakes(files),
    }
}
