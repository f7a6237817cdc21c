//! One file that the user names: whole or as it was before.

use std::fs;
use std::io;
use std::path::Path;

use super::ReportError;

/// Most bytes of a survey that is read back.
const LARGEST_INPUT: u64 = 4 << 30;

fn refused(path: &Path, action: &'static str, source: io::Error) -> ReportError {
    ReportError::Io { path: path.to_owned(), action, kept: "what was there before is untouched", source }
}

/// Writes one file; what stood there is replaced only by the whole new content.
///
/// # Errors
/// `Io` where the system refuses, for a folder too.
pub fn write_file(path: &Path, bytes: &[u8]) -> Result<(), ReportError> {
    if path.is_dir() {
        return Err(refused(path, "written", io::Error::new(io::ErrorKind::IsADirectory, "it is a folder")));
    }
    // A device or pipe cannot be renamed over: it is written as it is.
    if path.metadata().is_ok_and(|found| !found.is_file()) {
        return fs::write(path, bytes).map_err(|source| refused(path, "written", source));
    }
    let Some(name) = path.file_name() else {
        return Err(refused(path, "written", io::Error::new(io::ErrorKind::InvalidInput, "it has no file name")));
    };
    let fresh = path.with_file_name(format!(".{}.{}.part", name.to_string_lossy(), std::process::id()));
    fs::write(&fresh, bytes).map_err(|source| refused(path, "written", source))?;
    fs::rename(&fresh, path).map_err(|source| {
        // The failure that matters is the one reported; a leftover is removed where that still works.
        let _ = fs::remove_file(&fresh);
        refused(path, "written", source)
    })
}

/// Returns the bytes of a file.
///
/// # Errors
/// `Io` where the system refuses, for a folder and for more than 4 GiB.
pub fn read_file(path: &Path) -> Result<Vec<u8>, ReportError> {
    let refused = |path: &Path, action, source| ReportError::Io {
        path: path.to_owned(),
        action,
        kept: "nothing was written",
        source,
    };
    let size = fs::metadata(path).map_err(|source| refused(path, "read", source))?.len();
    if size > LARGEST_INPUT {
        return Err(refused(path, "read", io::Error::new(io::ErrorKind::FileTooLarge, "more than 4 GiB")));
    }
    fs::read(path).map_err(|source| refused(path, "read", source))
}
