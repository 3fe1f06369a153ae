//! Where files stand, and what SQLite keeps beside them.

use crate::store::{CopyError, Existing};
use std::ffi::OsString;
use std::fs::{self, File};
use std::io;
use std::os::unix::fs::MetadataExt;
use std::path::{Path, PathBuf};

/// What SQLite puts beside a database in use, after its name: the write-ahead
/// log, the index of it that programs share, and the rollback journal.
pub(super) const LOG: &str = "-wal";
pub(super) const SHARED: &str = "-shm";
pub(super) const JOURNAL: &str = "-journal";
pub(super) const COMPANIONS: [&str; 3] = [LOG, SHARED, JOURNAL];

/// A path with something after its name.
pub(super) fn beside(path: &Path, suffix: &str) -> PathBuf {
    let mut name = OsString::from(path);
    name.push(suffix);
    name.into()
}

/// Whether anything stands at a path, be it a link to nowhere.
pub(super) fn is_there(path: &Path) -> bool {
    fs::symlink_metadata(path).is_ok()
}

/// Which of the companions of a file are there.
pub(super) fn companions(path: &Path) -> Vec<PathBuf> {
    let all = COMPANIONS.iter().map(|suffix| beside(path, suffix));
    all.filter(|path| is_there(path)).collect()
}

/// A file that has to be there. Its path is made absolute and without links:
/// SQLite puts its companions beside the file itself.
pub(super) fn readable(path: &Path) -> Result<PathBuf, CopyError> {
    let found = fs::canonicalize(path)
        .map_err(|error| trouble(path, "cannot be found", &error, "look at the name"))?;
    let kind = fs::metadata(&found)
        .map_err(|error| trouble(path, "cannot be looked at", &error, "look at its rights"))?;
    if kind.is_file() {
        Ok(found)
    } else {
        Err(CopyError::refused(path, "this is no file", "name a file"))
    }
}

/// A path to be written to, absolute and without links; the folder has to be
/// there.
pub(super) fn writable(path: &Path) -> Result<PathBuf, CopyError> {
    if is_there(path) {
        return readable(path);
    }
    let Some(name) = path.file_name() else {
        return Err(CopyError::refused(path, "this is no file", "name a file"));
    };
    let folder = match path.parent() {
        Some(folder) if !folder.as_os_str().is_empty() => folder,
        _ => Path::new("."),
    };
    let found = fs::canonicalize(folder)
        .map_err(|error| trouble(folder, "cannot be found", &error, "make the folder first"))?;
    Ok(found.join(name))
}

/// Refuses two names for one file.
pub(super) fn distinct(from: &Path, to: &Path) -> Result<(), CopyError> {
    let identity = |path: &Path| fs::metadata(path).map(|data| (data.dev(), data.ino())).ok();
    if from == to || identity(from).is_some_and(|from| Some(from) == identity(to)) {
        return Err(CopyError::refused(
            to,
            "this is the file that is to be copied",
            "name another",
        ));
    }
    Ok(())
}

/// Refuses a name that is taken, unless it may be replaced.
pub(super) fn vacant(path: &Path, existing: Existing) -> Result<(), CopyError> {
    if existing == Existing::Replace || !is_there(path) {
        return Ok(());
    }
    Err(taken(path))
}

/// The name is taken.
pub(super) fn taken(path: &Path) -> CopyError {
    CopyError::refused(
        path,
        "it is there already",
        "name another file, or say --replace",
    )
}

/// What the disk or the system refused.
pub(super) fn trouble(path: &Path, what: &str, error: &io::Error, mend: &str) -> CopyError {
    let mend = match error.kind() {
        io::ErrorKind::StorageFull | io::ErrorKind::QuotaExceeded => {
            "free space on that disk, or name another"
        }
        io::ErrorKind::PermissionDenied => "use an account that may do this",
        _ => mend,
    };
    CopyError::refused(path, format!("{what}: {error}"), mend)
}

/// Has the names in the folder of a file kept by the disk.
pub(super) fn sync_folder(path: &Path) -> io::Result<()> {
    path.parent()
        .map_or(Ok(()), |folder| File::open(folder)?.sync_all())
}
