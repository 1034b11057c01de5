//! The journal of a run: the truth about it, on disk before anything is announced.
//!
//! Owns the append-only file `journal` of a run folder: one framed, checksummed record per entry, the samples
//! of a point in the same record as its entry. Never rewrites a record, never interprets an entry, and never
//! takes time from a clock. `docs/archive.md` lays the file out for other languages.

pub mod disk;
pub mod frame;
mod read;
pub mod samples;

use std::io;
use std::path::{Path, PathBuf};

use darkline_core::entry::Entry;
use darkline_core::trace::Trace;
use thiserror::Error;

use disk::{Disk, DiskFile, LocalDisk};
use frame::{Flaw, Kind};
pub use read::{Frame, Frames, Record, Records, Tail};

/// Name of the journal in its run folder.
pub const JOURNAL: &str = "journal";

/// Blocks set aside on disk at a time, bytes.
const AHEAD: u64 = 8 << 20;

/// Why a journal cannot be written or read.
#[derive(Debug, Error)]
pub enum JournalError {
    /// The system refused.
    #[error("cannot {doing} `{}`: {source}{}", path.display(), remedy(source))]
    Io {
        /// What was being done.
        doing: &'static str,
        /// With which file.
        path: PathBuf,
        /// What the system says.
        source: io::Error,
    },
    /// The file is not a journal.
    #[error("`{}` is not a journal of this program", path.display())]
    Foreign {
        /// The file.
        path: PathBuf,
    },
    /// The journal was written by a later version.
    #[error("`{}` has layout {version}, this program reads up to {}; use a newer version of it", path.display(), frame::VERSION)]
    Newer {
        /// The file.
        path: PathBuf,
        /// Its version of the layout.
        version: u16,
    },
    /// Bytes within the journal are damaged; whole records may follow them.
    #[error("`{}` is damaged at byte {at} ({bytes} bytes passed over): {flaw}", path.display())]
    Damaged {
        /// The file.
        path: PathBuf,
        /// Where the damage begins, bytes from the start.
        at: u64,
        /// How many bytes are passed over.
        bytes: u64,
        /// What is wrong.
        flaw: Flaw,
    },
    /// The entry cannot be written in a way that it could be read again.
    #[error("entry {seq} cannot be recorded: {reason}")]
    Unwritable {
        /// Its number.
        seq: u64,
        /// Why.
        reason: String,
    },
    /// An earlier write or sync failed in a way after which the end of the file is not known.
    #[error("`{}` failed earlier and takes no more entries: {reason}", path.display())]
    Broken {
        /// The file.
        path: PathBuf,
        /// What failed.
        reason: String,
    },
}

impl JournalError {
    pub(crate) fn io(doing: &'static str, path: &Path, source: io::Error) -> Self {
        Self::Io {
            doing,
            path: path.to_owned(),
            source,
        }
    }

    /// Whether a reader can go on after this error.
    pub fn can_go_on(&self) -> bool {
        matches!(self, Self::Damaged { .. })
    }
}

fn remedy(error: &io::Error) -> &'static str {
    match error.kind() {
        io::ErrorKind::StorageFull | io::ErrorKind::QuotaExceeded => {
            "; free some space on this disk"
        }
        io::ErrorKind::NotFound => "; is this a run folder?",
        _ => "",
    }
}

/// What was found when a journal was opened to go on with it.
#[derive(Debug)]
pub struct Recovered {
    /// Whole records in it.
    pub records: u64,
    /// What was cut off its end.
    pub tail: Option<Tail>,
    /// Damage before its end; left as it is.
    pub damage: Vec<JournalError>,
}

/// The writer of a journal. Whoever holds it also holds the lock on the run folder.
#[derive(Debug)]
pub struct Journal {
    file: Box<dyn DiskFile>,
    path: PathBuf,
    length: u64,
    set_aside: u64,
    number: u64,
    buffer: Vec<u8>,
    broken: Option<String>,
}

impl Journal {
    /// Begin the journal of the new run in `folder`. On return its name and header are on the medium.
    pub fn create(disk: &dyn Disk, folder: &Path) -> Result<Self, JournalError> {
        let path = folder.join(JOURNAL);
        let failed = |error| JournalError::io("create", &path, error);
        let file = disk.create(&path).map_err(failed)?;
        let mut journal = Self::over(file, &path);
        journal.write_file_header()?;
        disk.sync_folder(folder).map_err(failed)?;
        journal.reserve(AHEAD)?;
        Ok(journal)
    }

    /// Go on with the journal in `folder`: a torn tail is cut off, damage before it is left and told.
    pub fn reopen(disk: &dyn Disk, folder: &Path) -> Result<(Self, Recovered), JournalError> {
        let path = folder.join(JOURNAL);
        let open = |error| JournalError::io("open", &path, error);
        let mut frames = Frames::new(disk.open(&path).map_err(open)?, &path)?;
        let mut recovered = Recovered {
            records: 0,
            tail: None,
            damage: Vec::new(),
        };
        loop {
            match frames.next_frame() {
                Ok(Some(_)) => recovered.records += 1,
                Ok(None) => break,
                Err(error) if error.can_go_on() => recovered.damage.push(error),
                Err(error) => return Err(error),
            }
        }
        recovered.tail = frames.tail();
        let mut journal = Self::over(disk.open_append(&path).map_err(open)?, &path);
        journal.length = frames.position();
        journal.number = frames.next_number();
        // The cut must be on the medium before a new record takes its place.
        let cut = |error| JournalError::io("cut the torn end of", &path, error);
        journal.file.truncate(journal.length).map_err(cut)?;
        journal.file.sync().map_err(cut)?;
        if journal.length < frame::FILE_HEADER as u64 {
            journal.write_file_header()?;
        }
        journal.reserve(AHEAD)?;
        Ok((journal, recovered))
    }

    /// Record `entry` and the samples that belong to it. On return both are on the medium.
    ///
    /// An entry that could not be read again (a number that is not finite where one is required) is refused.
    /// After an error the journal holds everything appended before; it takes further entries unless the error
    /// left the end of the file unknown ([`JournalError::Broken`]).
    pub fn append(&mut self, entry: &Entry, trace: Option<&Trace>) -> Result<(), JournalError> {
        if let Some(reason) = &self.broken {
            return Err(JournalError::Broken {
                path: self.path.clone(),
                reason: reason.clone(),
            });
        }
        let kind = self
            .encode(entry, trace)
            .map_err(|reason| JournalError::Unwritable {
                seq: entry.seq,
                reason,
            })?;
        if !frame::finish(&mut self.buffer, kind, self.number) {
            return Err(JournalError::Unwritable {
                seq: entry.seq,
                reason: format!("it is longer than {} bytes", frame::LONGEST_PAYLOAD),
            });
        }
        self.write_buffer()?;
        self.number += 1;
        Ok(())
    }

    /// Make sure that `bytes` more fit on the disk, so that a full disk shows before a measurement.
    pub fn reserve(&mut self, bytes: u64) -> Result<(), JournalError> {
        if self.length + bytes <= self.set_aside {
            return Ok(());
        }
        let ample = bytes.max(AHEAD);
        let wanted = match self.file.allocate(self.length, ample) {
            Ok(()) => ample,
            Err(_) => {
                self.file.allocate(self.length, bytes).map_err(|error| {
                    JournalError::io("set room aside for the next point in", &self.path, error)
                })?;
                bytes
            }
        };
        self.set_aside = self.length + wanted;
        Ok(())
    }

    /// Give back what was set aside and not used. The journal stays usable.
    pub fn release(&mut self) -> Result<(), JournalError> {
        self.set_aside = self.length;
        self.file
            .truncate(self.length)
            .map_err(|error| JournalError::io("give back room of", &self.path, error))
    }

    /// The file.
    pub fn path(&self) -> &Path {
        &self.path
    }

    /// Length of the journal, bytes.
    pub fn length(&self) -> u64 {
        self.length
    }

    fn over(file: Box<dyn DiskFile>, path: &Path) -> Self {
        Self {
            file,
            path: path.to_owned(),
            length: 0,
            set_aside: 0,
            number: 0,
            buffer: Vec::new(),
            broken: None,
        }
    }

    fn write_file_header(&mut self) -> Result<(), JournalError> {
        self.buffer.clear();
        self.buffer.extend_from_slice(&frame::file_header());
        self.write_buffer()
    }

    /// Put the payload of a record into the buffer, room for its header before it.
    fn encode(&mut self, entry: &Entry, trace: Option<&Trace>) -> Result<Kind, String> {
        let json = serde_json::to_vec(entry).map_err(|error| error.to_string())?;
        // JSON has no NaN: it would be written as null and could never be read again.
        if let Err(error) = serde_json::from_slice::<Entry>(&json) {
            return Err(format!("a number in it is not finite ({error})"));
        }
        frame::begin(&mut self.buffer);
        let Some(trace) = trace else {
            self.buffer.extend_from_slice(&json);
            return Ok(Kind::Entry);
        };
        let length = u32::try_from(json.len()).map_err(|error| error.to_string())?;
        self.buffer.extend_from_slice(&length.to_le_bytes());
        self.buffer.extend_from_slice(&json);
        samples::encode(trace, &mut self.buffer)?;
        Ok(Kind::EntryWithTrace)
    }

    fn write_buffer(&mut self) -> Result<(), JournalError> {
        if let Err(error) = self.file.append(&self.buffer) {
            // Part of the record may stand there. Without it the journal is as before.
            if let Err(second) = self.file.truncate(self.length) {
                self.broken = Some(second.to_string());
            }
            return Err(JournalError::io("write to", &self.path, error));
        }
        if let Err(error) = self.file.sync() {
            // After a failed sync nobody knows which pages reached the medium, and a second one may lie.
            self.broken = Some(error.to_string());
            return Err(JournalError::io("sync", &self.path, error));
        }
        self.length += self.buffer.len() as u64;
        Ok(())
    }
}

/// Read the journal in run folder `folder`, as far as it reaches now. The run may be going on.
pub fn records(folder: &Path) -> Result<Records, JournalError> {
    Ok(Records::new(frames(folder)?))
}

/// The whole frames of the journal in run folder `folder`.
pub fn frames(folder: &Path) -> Result<Frames, JournalError> {
    let path = folder.join(JOURNAL);
    let source = LocalDisk
        .open(&path)
        .map_err(|error| JournalError::io("open", &path, error))?;
    Frames::new(source, &path)
}
