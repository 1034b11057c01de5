//! The folder of one run: how it is named, made, locked and found.
//!
//! Owns names and durability of the folder itself. Never writes a journal record and never builds a path from a
//! name that a user typed: such a name is only compared with the names that are there.

use std::io;
use std::path::{Path, PathBuf};

use thiserror::Error;

use crate::journal::JOURNAL;
use crate::journal::disk::{Disk, Lock};

/// Name of the bench file as run.
pub const BENCH: &str = "bench.toml";
/// Name of the sequence file as run.
pub const SEQUENCE: &str = "sequence.toml";

/// Longest part of a title that goes into a folder's name, bytes.
const LONGEST_SLUG: usize = 40;
/// Runs of one title that may begin within one second.
const MOST_ALIKE: u32 = 100;

/// Why a run folder cannot be made or opened.
#[derive(Debug, Error)]
pub enum FolderError {
    /// The system refused.
    #[error("cannot {doing} `{}`: {source}", path.display())]
    Io {
        /// What was being done.
        doing: &'static str,
        /// With what.
        path: PathBuf,
        /// What the system says.
        source: io::Error,
    },
    /// Another process writes this run.
    #[error("run `{}` is in use by another process; wait for it or stop it", path.display())]
    InUse {
        /// The folder.
        path: PathBuf,
    },
    /// No run of this name.
    #[error("there is no run named `{name}` in `{}`", runs.display())]
    Unknown {
        /// The name asked for.
        name: String,
        /// Where it was looked for.
        runs: PathBuf,
    },
}

/// A run folder that this process may write to. Dropping it gives the folder free.
#[derive(Debug)]
pub struct RunFolder {
    path: PathBuf,
    _lock: Box<dyn Lock>,
}

impl RunFolder {
    /// Make the folder `<UTC>-<slug of title>` in `runs`, which is made if it is missing. `utc` is the start in
    /// ns since 1970. On return the folder's name is on the medium, and the folder is locked.
    pub fn create(
        disk: &dyn Disk,
        runs: &Path,
        utc: i64,
        title: &str,
    ) -> Result<Self, FolderError> {
        ensure_folder(disk, runs)?;
        let name = name(utc, title);
        for again in 1..=MOST_ALIKE {
            let path = match again {
                1 => runs.join(&name),
                _ => runs.join(format!("{name}-{again}")),
            };
            match disk.create_folder(&path) {
                Err(error)
                    if error.kind() == io::ErrorKind::AlreadyExists && again < MOST_ALIKE => {}
                Err(error) => return Err(failed("create", &path, error)),
                Ok(()) => {
                    disk.sync_folder(runs)
                        .map_err(|error| failed("sync", runs, error))?;
                    return Self::open(disk, &path);
                }
            }
        }
        Err(failed(
            "create",
            &runs.join(name),
            io::ErrorKind::AlreadyExists.into(),
        ))
    }

    /// Take an existing run folder for this process; refused while another one has it.
    pub fn open(disk: &dyn Disk, path: &Path) -> Result<Self, FolderError> {
        match disk.lock_folder(path) {
            Ok(lock) => Ok(Self {
                path: path.to_owned(),
                _lock: lock,
            }),
            Err(error) if error.kind() == io::ErrorKind::WouldBlock => Err(FolderError::InUse {
                path: path.to_owned(),
            }),
            Err(error) => Err(failed("lock", path, error)),
        }
    }

    /// The folder.
    pub fn path(&self) -> &Path {
        &self.path
    }

    /// Keep `text` as file `name`, one of [`BENCH`] and [`SEQUENCE`], byte for byte. On return it is on the medium.
    pub fn keep(&self, disk: &dyn Disk, name: &'static str, text: &str) -> Result<(), FolderError> {
        let path = self.path.join(name);
        let write = || {
            let mut file = disk.create(&path)?;
            file.append(text.as_bytes())?;
            file.sync()?;
            disk.sync_folder(&self.path)
        };
        write().map_err(|error| failed("write", &path, error))
    }
}

/// Name of the folder of a run that began at `utc`, ns since 1970: `20261201T190000Z-coil-constant`.
pub fn name(utc: i64, title: &str) -> String {
    let time =
        jiff::Timestamp::from_nanosecond(i128::from(utc)).unwrap_or(jiff::Timestamp::UNIX_EPOCH);
    format!("{}-{}", time.strftime("%Y%m%dT%H%M%SZ"), slug(title))
}

/// `title` in small letters, digits and hyphens; `run` if nothing is left of it.
pub fn slug(title: &str) -> String {
    let mut slug = String::new();
    for character in title.chars() {
        if character.is_ascii_alphanumeric() {
            slug.push(character.to_ascii_lowercase());
        } else if !slug.is_empty() && !slug.ends_with('-') {
            slug.push('-');
        }
        if slug.len() >= LONGEST_SLUG {
            break;
        }
    }
    let slug = slug.trim_end_matches('-');
    if slug.is_empty() { "run" } else { slug }.to_owned()
}

/// The runs in `runs`, by name, oldest first: folders that hold a journal.
pub fn list(runs: &Path) -> Result<Vec<String>, FolderError> {
    let read = |error| failed("read", runs, error);
    let mut names = Vec::new();
    for entry in std::fs::read_dir(runs).map_err(read)? {
        let entry = entry.map_err(read)?;
        if entry.path().join(JOURNAL).is_file()
            && let Ok(name) = entry.file_name().into_string()
        {
            names.push(name);
        }
    }
    names.sort_unstable();
    Ok(names)
}

/// The folder of the run called `name` in `runs`.
pub fn find(runs: &Path, name: &str) -> Result<PathBuf, FolderError> {
    match list(runs)?.into_iter().find(|known| known == name) {
        Some(known) => Ok(runs.join(known)),
        None => Err(FolderError::Unknown {
            name: name.to_owned(),
            runs: runs.to_owned(),
        }),
    }
}

/// Make `path` and what is missing above it, each on the medium before the next.
fn ensure_folder(disk: &dyn Disk, path: &Path) -> Result<(), FolderError> {
    let above = match path.parent() {
        Some(above) if !above.as_os_str().is_empty() => above,
        _ => Path::new("."),
    };
    match disk.create_folder(path) {
        Ok(()) => disk
            .sync_folder(above)
            .map_err(|error| failed("sync", above, error)),
        Err(error) if error.kind() == io::ErrorKind::AlreadyExists => Ok(()),
        Err(error) if error.kind() == io::ErrorKind::NotFound && path.parent().is_some() => {
            ensure_folder(disk, above)?;
            disk.create_folder(path)
                .and_then(|()| disk.sync_folder(above))
                .map_err(|error| failed("create", path, error))
        }
        Err(error) => Err(failed("create", path, error)),
    }
}

fn failed(doing: &'static str, path: &Path, source: io::Error) -> FolderError {
    FolderError::Io {
        doing,
        path: path.to_owned(),
        source,
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::journal::disk::LocalDisk;

    const UTC: i64 = 1_796_151_600_000_000_000;

    #[test]
    fn a_title_never_becomes_a_path() {
        for (title, expected) in [
            (
                "Coil constant and residual field",
                "coil-constant-and-residual-field",
            ),
            ("../../etc/passwd", "etc-passwd"),
            ("/", "run"),
            ("..", "run"),
            ("", "run"),
            ("a\0b\nc", "a-b-c"),
            ("Übung µ-metal 5 %", "bung-metal-5"),
        ] {
            assert_eq!(slug(title), expected);
        }
        assert_eq!(slug(&"x".repeat(500)).len(), LONGEST_SLUG);
        assert_eq!(name(UTC, "A b"), "20261201T190000Z-a-b");
    }

    #[test]
    fn two_runs_in_one_second_get_two_folders_and_the_second_process_is_refused() {
        let runs = tempfile::tempdir().unwrap();
        let deep = runs.path().join("a/b");
        let first = RunFolder::create(&LocalDisk, &deep, UTC, "x").unwrap();
        let second = RunFolder::create(&LocalDisk, &deep, UTC, "x").unwrap();
        assert_ne!(first.path(), second.path());
        let refused = RunFolder::open(&LocalDisk, first.path()).unwrap_err();
        assert!(matches!(refused, FolderError::InUse { .. }), "{refused}");
        let path = first.path().to_owned();
        drop(first);
        assert!(RunFolder::open(&LocalDisk, &path).is_ok());
    }

    #[test]
    fn a_run_is_found_by_its_name_alone() {
        let runs = tempfile::tempdir().unwrap();
        let run = RunFolder::create(&LocalDisk, runs.path(), UTC, "x").unwrap();
        run.keep(&LocalDisk, BENCH, "a = 1\n").unwrap();
        std::fs::write(run.path().join(JOURNAL), b"").unwrap();
        let name = "20261201T190000Z-x";
        assert_eq!(find(runs.path(), name).unwrap(), run.path());
        for bad in [
            "",
            ".",
            "..",
            "../x",
            "20261201T190000Z-x/",
            "./20261201T190000Z-x",
        ] {
            assert!(find(runs.path(), bad).is_err(), "{bad}");
        }
    }
}
