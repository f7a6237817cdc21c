//! The one file writer: a whole new set beside the old one, then one swap.

use std::fs;
use std::io::{self, Read, Write};
use std::path::{Component, Path, PathBuf};

use super::{MARKER, MARKER_HEAD, ReportError, ReportFile, ReportSet};

const OLD_KEPT: &str = "what was there before is untouched";

/// Writes a report set as the folder `out_dir`.
///
/// The folder must be absent, empty, or carry our marker file. The new set is built in a sibling folder and takes the
/// place of the old one by renaming, so an interrupted run leaves one whole set. Files in the old folder that its
/// marker does not name are no files of ours: they are carried over.
///
/// # Errors
/// `NotOurs` for a folder that holds other things, `NotAFolder` for a file, `Io` where the system refuses; after any
/// of them the old set is whole.
pub fn write_set(out_dir: &Path, set: &ReportSet) -> Result<(), ReportError> {
    StagedSet::new(out_dir)?.finish(set)
}

/// A report set that grows in a sibling folder: large files are written as they come, the rest at the end.
///
/// Dropped before [`StagedSet::finish`] it leaves nothing behind.
#[derive(Debug)]
pub struct StagedSet {
    target: PathBuf,
    old_files: Vec<PathBuf>,
    fresh: tempfile::TempDir,
}

impl StagedSet {
    /// Opens the sibling folder of `out_dir`.
    ///
    /// # Errors
    /// As [`write_set`].
    pub fn new(out_dir: &Path) -> Result<Self, ReportError> {
        let target = resolved(out_dir)?;
        let old_files = old_set(&target)?;
        let parent = target.parent().unwrap_or(Path::new("/"));
        fs::create_dir_all(parent).map_err(|source| refused(parent, "created", source))?;
        let fresh = sibling(parent, ".thornmap-new-")?;
        Ok(Self { target, old_files, fresh })
    }

    /// Returns a new file of the set; `path` has `/` between its parts.
    ///
    /// # Errors
    /// `Io` where the system refuses.
    pub fn create(&self, path: &str) -> Result<StagedFile, ReportError> {
        let path = self.place(path)?;
        let file = fs::File::create(&path).map_err(|source| refused(&path, "written", source))?;
        Ok(StagedFile { path, file })
    }

    /// Returns the place of a file in the sibling folder, with its folder made.
    fn place(&self, path: &str) -> Result<PathBuf, ReportError> {
        let path = path.split('/').fold(self.fresh.path().to_owned(), |path, part| path.join(part));
        let folder = path.parent().unwrap_or(self.fresh.path());
        fs::create_dir_all(folder).map_err(|source| refused(folder, "created", source))?;
        Ok(path)
    }

    /// Writes the other files of the set and puts the whole in place of the old one.
    ///
    /// # Errors
    /// As [`write_set`].
    pub fn finish(self, set: &ReportSet) -> Result<(), ReportError> {
        for file in &set.files {
            let path = self.place(&file.path)?;
            fs::write(&path, &file.bytes).map_err(|source| refused(&path, "written", source))?;
        }
        let Self { target, old_files, fresh } = self;
        make_readable(fresh.path())?;
        if !target.exists() {
            return move_in(fresh, &target);
        }
        let parent = target.parent().unwrap_or(Path::new("/"));
        let aside = sibling(parent, ".thornmap-old-")?;
        let old = aside.path().join("set");
        fs::rename(&target, &old).map_err(|source| refused(&target, "moved aside", source))?;
        if let Err(error) = move_in(fresh, &target) {
            return match fs::rename(&old, &target) {
                Ok(()) => Err(error),
                Err(source) => {
                    let path = aside.keep();
                    Err(ReportError::Io { path, action: "moved back", kept: "the old set is there, in full", source })
                }
            };
        }
        carry_over(aside, &old, &target, &old_files)
    }
}

/// A file of a staged set that is being written.
#[derive(Debug)]
pub struct StagedFile {
    path: PathBuf,
    file: fs::File,
}

impl StagedFile {
    /// Writes bytes after those already there.
    ///
    /// # Errors
    /// `Io` where the system refuses.
    pub fn write(&mut self, bytes: &[u8]) -> Result<(), ReportError> {
        self.file.write_all(bytes).map_err(|source| refused(&self.path, "written", source))
    }

    /// Writes what stands in another file of the set, less its last `less` bytes, and removes that file.
    ///
    /// # Errors
    /// `Io` where the system refuses.
    pub fn take_over(&mut self, other: StagedFile, less: u64) -> Result<(), ReportError> {
        let StagedFile { path, file } = other;
        drop(file);
        let copied = fs::File::open(&path).and_then(|source| {
            let length = source.metadata()?.len().saturating_sub(less);
            io::copy(&mut source.take(length), &mut self.file)
        });
        copied.map_err(|source| refused(&self.path, "written", source))?;
        fs::remove_file(&path).map_err(|source| refused(&path, "removed", source))
    }
}

/// Checks, before the long work, that a set can be written as `out_dir`: absent, empty, or an earlier set, in a folder
/// that takes new files.
///
/// # Errors
/// As [`write_set`].
pub fn check_target(out_dir: &Path) -> Result<(), ReportError> {
    let target = resolved(out_dir)?;
    old_set(&target)?;
    let parent = target.parent().unwrap_or(Path::new("/"));
    let existing = parent.ancestors().find(|folder| folder.exists()).unwrap_or(parent);
    if !existing.is_dir() {
        return Err(ReportError::NotAFolder { path: existing.to_owned() });
    }
    sibling(existing, ".thornmap-new-").map(drop)
}

/// Adds files to the folder `out_dir`, beside a report set that may be there; each file is whole or absent.
///
/// The folder must be absent, empty, or carry our marker file; it carries it afterwards, and later surveys leave the
/// files where they are.
///
/// # Errors
/// As [`write_set`]; files written before the failure stay.
pub fn add_files(out_dir: &Path, files: &[ReportFile]) -> Result<(), ReportError> {
    let target = resolved(out_dir)?;
    old_set(&target)?;
    fs::create_dir_all(&target).map_err(|source| refused(&target, "created", source))?;
    let marker = target.join(MARKER);
    if !marker.exists() {
        fs::write(&marker, format!("{MARKER_HEAD}\n")).map_err(|source| refused(&marker, "written", source))?;
    }
    for file in files {
        let path = target.join(&file.path);
        // Created in the ordinary way, so that it has the permissions of any file of the user's.
        let fresh = target.join(format!(".{}.{}.part", file.path, std::process::id()));
        fs::write(&fresh, &file.bytes).map_err(|source| refused(&fresh, "written", source))?;
        if let Err(source) = fs::rename(&fresh, &path) {
            // The failure that matters is the one reported; a leftover is removed where that still works.
            let _ = fs::remove_file(&fresh);
            return Err(refused(&path, "written", source));
        }
    }
    Ok(())
}

/// Returns the absolute path of the output folder, through links, so that the folder itself is swapped and no link.
fn resolved(out_dir: &Path) -> Result<PathBuf, ReportError> {
    match fs::canonicalize(out_dir) {
        Ok(path) => Ok(path),
        Err(error) if error.kind() == io::ErrorKind::NotFound => {
            std::path::absolute(out_dir).map_err(|source| refused(out_dir, "found", source))
        }
        Err(error) if error.kind() == io::ErrorKind::NotADirectory => {
            Err(ReportError::NotAFolder { path: out_dir.to_owned() })
        }
        Err(source) => Err(refused(out_dir, "opened", source)),
    }
}

fn refused(path: &Path, action: &'static str, source: io::Error) -> ReportError {
    ReportError::Io { path: path.to_owned(), action, kept: OLD_KEPT, source }
}

/// Returns a new folder beside the target; it goes away by itself unless it is moved.
fn sibling(parent: &Path, prefix: &str) -> Result<tempfile::TempDir, ReportError> {
    tempfile::Builder::new().prefix(prefix).tempdir_in(parent).map_err(|source| refused(parent, "written to", source))
}

/// Returns the files that the marker of an existing set names; an absent or empty folder has none.
fn old_set(target: &Path) -> Result<Vec<PathBuf>, ReportError> {
    match fs::metadata(target) {
        Err(error) if error.kind() == io::ErrorKind::NotFound => return Ok(Vec::new()),
        Err(source) => return Err(refused(target, "opened", source)),
        Ok(found) if !found.is_dir() => return Err(ReportError::NotAFolder { path: target.to_owned() }),
        Ok(_) => {}
    }
    let mut names = Vec::new();
    for entry in fs::read_dir(target).map_err(|source| refused(target, "read", source))? {
        let entry = entry.map_err(|source| refused(target, "read", source))?;
        names.push(entry.file_name().to_string_lossy().into_owned());
    }
    names.sort();
    let Some(found) = names.first() else { return Ok(Vec::new()) };
    let marker = match fs::read_to_string(target.join(MARKER)) {
        Ok(text) if text.lines().next() == Some(MARKER_HEAD) => text,
        _ => return Err(ReportError::NotOurs { path: target.to_owned(), found: found.clone() }),
    };
    let inside = |path: &PathBuf| path.components().all(|part| matches!(part, Component::Normal(_)));
    Ok(marker.lines().skip(1).map(PathBuf::from).chain([PathBuf::from(MARKER)]).filter(inside).collect())
}

/// Gives the new folder the permissions of any folder made by the user: temporary ones are private.
#[cfg(unix)]
fn make_readable(folder: &Path) -> Result<(), ReportError> {
    use std::os::unix::fs::PermissionsExt;
    // A folder made in the ordinary way shows what the user's mask leaves.
    let probe = folder.join(".mode");
    fs::create_dir(&probe).map_err(|source| refused(&probe, "created", source))?;
    let mode = fs::metadata(&probe).map_err(|source| refused(&probe, "read", source))?.permissions().mode();
    fs::remove_dir(&probe).map_err(|source| refused(&probe, "removed", source))?;
    fs::set_permissions(folder, fs::Permissions::from_mode(mode))
        .map_err(|source| refused(folder, "made readable", source))
}

#[cfg(not(unix))]
fn make_readable(_: &Path) -> Result<(), ReportError> {
    Ok(())
}

/// Renames the new folder to its place; on failure it is removed again.
fn move_in(fresh: tempfile::TempDir, target: &Path) -> Result<(), ReportError> {
    fs::rename(fresh.path(), target).map_err(|source| refused(target, "put in place", source))?;
    // The folder has moved: there is nothing left to clean up under its old name.
    let _ = fresh.keep();
    Ok(())
}

/// Removes the old set file by file and moves everything else into the new folder.
fn carry_over(aside: tempfile::TempDir, old: &Path, target: &Path, old_files: &[PathBuf]) -> Result<(), ReportError> {
    for file in old_files {
        // A file that is gone already needs no removal; one that stays is carried over or left below.
        let _ = fs::remove_file(old.join(file));
    }
    if let Err(source) = move_rest(old, target) {
        return Err(ReportError::Io {
            path: aside.keep(),
            action: "emptied",
            kept: "the new set is in place, files of yours from the old folder are still there",
            source,
        });
    }
    Ok(())
}

/// Moves what is left of a folder into another without replacing anything there.
fn move_rest(from: &Path, to: &Path) -> io::Result<()> {
    for entry in fs::read_dir(from)? {
        let entry = entry?;
        let place = to.join(entry.file_name());
        if place.symlink_metadata().is_err() {
            fs::rename(entry.path(), place)?;
        } else if entry.file_type()?.is_dir() && place.is_dir() {
            move_rest(&entry.path(), &place)?;
        } else {
            return Err(io::Error::new(io::ErrorKind::AlreadyExists, format!("{} exists", place.display())));
        }
    }
    fs::remove_dir(from)
}
