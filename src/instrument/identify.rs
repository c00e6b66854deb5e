//! The drivers there are, embedded and in a user's folder, and which of them suits what `*IDN?` answered.

use super::{Definition, Identity, RoleKind, check_driver};
use crate::files::FileErrors;
use std::{io, path::Path, sync::Arc};

/// The driver files that travel with the program: name and text.
pub const EMBEDDED: [(&str, &str); 3] = [
    ("drivers/scope-preamble-block.toml", include_str!("../../drivers/scope-preamble-block.toml")),
    ("drivers/load-serial-scpi.toml", include_str!("../../drivers/load-serial-scpi.toml")),
    ("drivers/source-ac-scpi.toml", include_str!("../../drivers/source-ac-scpi.toml")),
];

/// Why drivers could not be read.
#[derive(Debug, thiserror::Error)]
pub enum DriversError {
    /// The folder or a file in it could not be read.
    #[error("failed to read drivers from {path}: {source}; check the folder and its permissions")]
    Unreadable {
        /// Folder or file.
        path: String,
        /// What the system said.
        source: io::Error,
    },
    /// Mistakes in driver files, every one.
    #[error("{}", .0.iter().map(ToString::to_string).collect::<Vec<_>>().join("\n"))]
    Mistaken(Vec<FileErrors>),
}

/// Every driver by name; one of a user's folder takes the place of an embedded one of the same name.
#[derive(Debug, Clone, Default)]
pub struct Drivers {
    definitions: Vec<Arc<Definition>>,
}

impl Drivers {
    /// The embedded drivers.
    pub fn embedded() -> Result<Self, DriversError> {
        let mut drivers = Self::default();
        drivers.add(EMBEDDED.iter().map(|(path, text)| ((*path).to_owned(), (*text).to_owned())))?;
        Ok(drivers)
    }

    /// The embedded drivers and every `.toml` file of the folder.
    pub fn with_folder(folder: &Path) -> Result<Self, DriversError> {
        let mut drivers = Self::embedded()?;
        let failed = |path: &Path, source| DriversError::Unreadable { path: path.display().to_string(), source };
        let entries = std::fs::read_dir(folder).map_err(|error| failed(folder, error))?;
        let mut paths = entries
            .map(|entry| entry.map(|entry| entry.path()))
            .collect::<Result<Vec<_>, _>>()
            .map_err(|error| failed(folder, error))?;
        paths.retain(|path| path.extension().is_some_and(|extension| extension == "toml"));
        paths.sort();
        let texts = paths
            .iter()
            .map(|path| {
                let text = std::fs::read_to_string(path).map_err(|error| failed(path, error))?;
                Ok((path.display().to_string(), text))
            })
            .collect::<Result<Vec<_>, DriversError>>()?;
        drivers.add(texts)?;
        Ok(drivers)
    }

    fn add(&mut self, files: impl IntoIterator<Item = (String, String)>) -> Result<(), DriversError> {
        let mut mistaken = Vec::new();
        for (path, text) in files {
            match check_driver(&path, &text) {
                Ok(definition) => {
                    self.definitions.retain(|known| known.name != definition.name);
                    // The last one read is asked first: a user's driver goes before an embedded one.
                    self.definitions.insert(0, Arc::new(definition));
                }
                Err(errors) => mistaken.push(errors),
            }
        }
        if mistaken.is_empty() { Ok(()) } else { Err(DriversError::Mistaken(mistaken)) }
    }

    /// Every driver.
    pub fn iter(&self) -> impl Iterator<Item = &Arc<Definition>> {
        self.definitions.iter()
    }

    /// The driver of that name.
    pub fn named(&self, name: &str) -> Option<&Arc<Definition>> {
        self.iter().find(|definition| definition.name == name)
    }

    /// The driver for the role that suits the instrument.
    pub fn recognise(&self, role: RoleKind, identity: &Identity) -> Option<&Arc<Definition>> {
        self.iter().find(|definition| {
            definition.facts.role() == role
                && definition.maker.is_match(&identity.maker)
                && definition.model.is_match(&identity.model)
        })
    }
}

/// The identity in an answer to `*IDN?` (IEEE 488.2 10.14: four fields with commas between), before its driver is known.
pub fn identity(answer: &str, address: &str) -> Option<Identity> {
    let fields: Vec<String> = answer.splitn(4, ',').map(|field| field.trim().to_owned()).collect();
    let [maker, model, serial_number, firmware] = <[String; 4]>::try_from(fields).ok()?;
    if maker.is_empty() || model.is_empty() {
        return None;
    }
    let simulated =
        answer.to_ascii_uppercase().contains("SIMULATED") || answer.to_ascii_uppercase().contains("PLAYED BACK");
    let (driver, address) = (String::new(), address.to_owned());
    Some(Identity { maker, model, serial_number, firmware, driver, address, simulated })
}
