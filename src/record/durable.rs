//! Files that are either whole or absent, whatever happens: temporary file, synchronise, rename, synchronise the folder.

use super::RecordError;
use sha2::{Digest, Sha256};
use std::{
    fs::{self, File},
    io::Write,
    path::Path,
};

/// Writes a finished file; a reader sees the old content or the new, never a part.
pub(crate) fn write(path: &Path, bytes: &[u8]) -> Result<(), RecordError> {
    let mut name = path.file_name().unwrap_or_default().to_owned();
    name.push(".part");
    let part = path.with_file_name(name);
    let written = File::create(&part).and_then(|mut file| {
        file.write_all(bytes)?;
        file.sync_all()?;
        fs::rename(&part, path)
    });
    if written.is_err() {
        // The write has failed already; a leftover part is no worse than the error that is reported.
        let _ = fs::remove_file(&part);
    }
    written.map_err(RecordError::io("write", path))?;
    sync_folder(path.parent().unwrap_or(Path::new(".")))
}

/// Makes the names in a folder durable: a rename is not, until its folder is synchronised.
pub(crate) fn sync_folder(folder: &Path) -> Result<(), RecordError> {
    let folder = if folder.as_os_str().is_empty() { Path::new(".") } else { folder };
    #[cfg(unix)]
    File::open(folder).and_then(|opened| opened.sync_all()).map_err(RecordError::io("synchronise", folder))?;
    Ok(())
}

/// SHA-256 as lower-case hexadecimal (FIPS 180-4).
pub(crate) fn sha256(bytes: &[u8]) -> String {
    Sha256::digest(bytes).iter().map(|byte| format!("{byte:02x}")).collect()
}
