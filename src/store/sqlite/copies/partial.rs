//! A file on its way to its final name.

use super::place::{COMPANIONS, beside, is_there, sync_folder, taken, trouble};
use crate::store::{CopyError, Existing};
use std::fs::{self, File, OpenOptions, Permissions, TryLockError};
use std::io;
use std::os::unix::fs::{MetadataExt, OpenOptionsExt};
use std::path::{Path, PathBuf};

/// After the final name. Long enough that nobody else uses it: a file of this
/// name is taken for what a copy that was cut off has left.
const SUFFIX: &str = ".counterpoise-partial";

/// An empty file beside the target, locked, which is gone again unless it has
/// been put in its place.
///
/// The lock (`flock`) keeps a second copy to the same target out, and goes with
/// the process, however that ends.
pub(super) struct Partial {
    target: PathBuf,
    path: PathBuf,
    file: File,
}

impl Partial {
    /// Begins a file for a target, in the place of what an earlier copy left.
    pub fn begin(target: &Path) -> Result<Partial, CopyError> {
        let path = beside(target, SUFFIX);
        let file = open_alone(&path)?;
        let partial = Partial {
            target: target.to_owned(),
            path,
            file,
        };
        // A journal that was left would be played back into the new file.
        partial.remove_companions();
        Ok(partial)
    }

    /// Where it stands until it is whole.
    pub fn path(&self) -> &Path {
        &self.path
    }

    /// Lets in whom the permissions given let in.
    pub fn permit(&self, permissions: Permissions) -> Result<(), CopyError> {
        let set = self.file.set_permissions(permissions);
        set.map_err(|error| self.unwritten(&error))
    }

    /// Copies a file into it.
    pub fn fill(&self, from: &Path) -> Result<(), CopyError> {
        let mut source =
            File::open(from).map_err(|e| trouble(from, "cannot be read", &e, "look at it"))?;
        let copied = io::copy(&mut source, &mut &self.file);
        copied.map(drop).map_err(|error| self.unwritten(&error))
    }

    /// Has the disk keep its content.
    pub fn sync(&self) -> Result<(), CopyError> {
        self.file.sync_all().map_err(|error| self.unwritten(&error))
    }

    /// Gives it its final name. Without [`Existing::Replace`] a file that has
    /// come there in the meantime stays.
    pub fn name(&self, existing: Existing) -> Result<(), CopyError> {
        let named = match existing {
            Existing::Replace => fs::rename(&self.path, &self.target),
            Existing::Refuse => self.name_a_vacant_place(),
        };
        named.map_err(|error| match error.kind() {
            io::ErrorKind::AlreadyExists => taken(&self.target),
            _ => trouble(
                &self.target,
                "cannot be given its name",
                &error,
                "try again",
            ),
        })
    }

    /// Has the disk keep the name; nothing is left under the other one.
    pub fn keep_name(self) -> Result<(), CopyError> {
        sync_folder(&self.target).map_err(|error| {
            let what = "it is in its place, but the disk does not say that it keeps the name";
            trouble(
                &self.target,
                what,
                &error,
                "look at the disk, then verify it",
            )
        })
    }

    /// A second name cannot be put over a file, as renaming would be. Disks
    /// without second names get the check alone.
    fn name_a_vacant_place(&self) -> io::Result<()> {
        match fs::hard_link(&self.path, &self.target) {
            Err(error) if error.kind() != io::ErrorKind::AlreadyExists => {
                if is_there(&self.target) {
                    return Err(io::ErrorKind::AlreadyExists.into());
                }
                fs::rename(&self.path, &self.target)
            }
            linked => linked,
        }
    }

    /// What is told where it could not be written.
    pub fn unwritten(&self, error: &io::Error) -> CopyError {
        trouble(
            &self.path,
            "cannot be written",
            error,
            "look at the disk and the rights of the folder",
        )
    }

    fn remove_companions(&self) {
        for suffix in COMPANIONS {
            let _ = fs::remove_file(beside(&self.path, suffix));
        }
    }
}

impl Drop for Partial {
    /// Where it has its final name this one may be a second name of it, or
    /// already another's file.
    fn drop(&mut self) {
        if is_named(&self.file, &self.path) {
            self.remove_companions();
            let _ = fs::remove_file(&self.path);
        }
    }
}

/// A new file at a path, locked. What an earlier copy left there is removed and
/// never written to: it may be a second name of a whole one.
fn open_alone(path: &Path) -> Result<File, CopyError> {
    loop {
        let mut options = OpenOptions::new();
        let options = options.read(true).write(true);
        match options.clone().create_new(true).mode(0o600).open(path) {
            Ok(file) => {
                lock(&file, path)?;
                // Whoever took it for one that was left has removed it.
                if is_named(&file, path) {
                    return Ok(file);
                }
            }
            Err(error) if error.kind() == io::ErrorKind::AlreadyExists => {
                if fs::symlink_metadata(path).is_ok_and(|found| !found.is_file()) {
                    return Err(CopyError::refused(path, "this is no file", "remove it"));
                }
                let left = match options.open(path) {
                    Err(error) if error.kind() == io::ErrorKind::NotFound => continue,
                    opened => opened.map_err(|error| unmade(path, &error))?,
                };
                lock(&left, path)?;
                if is_named(&left, path) {
                    fs::remove_file(path).map_err(|error| unmade(path, &error))?;
                }
            }
            Err(error) => return Err(unmade(path, &error)),
        }
    }
}

fn lock(file: &File, path: &Path) -> Result<(), CopyError> {
    file.try_lock().map_err(|error| match error {
        TryLockError::WouldBlock => CopyError::refused(
            path,
            "another copy of this name is being made",
            "wait for it, or name another file",
        ),
        TryLockError::Error(error) => unmade(path, &error),
    })
}

fn unmade(path: &Path, error: &io::Error) -> CopyError {
    let mend = "look at the disk and the rights of the folder";
    trouble(path, "cannot be made", error, mend)
}

/// Whether an open file stands at a path.
fn is_named(file: &File, path: &Path) -> bool {
    let named = fs::symlink_metadata(path).map(|named| (named.dev(), named.ino()));
    let open = file.metadata().map(|open| (open.dev(), open.ino()));
    matches!((named, open), (Ok(named), Ok(open)) if named == open)
}
