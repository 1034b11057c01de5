//! Everything of one run that goes to disk while it lasts: its folder, the two files as run, the journal on a
//! thread of its own, and the wire record. Interprets nothing.

use std::io::{BufWriter, Write};
use std::path::{Path, PathBuf};
use std::sync::Arc;

use darkline_core::diagnostic::Fault;
use darkline_core::entry::{Entry, EntryKind, Header, State};
use darkline_core::itinerary::Itinerary;
use darkline_core::wire::record::Line;
use darkline_drivers::link::tap::Tape;
use tokio::sync::{broadcast, mpsc};
use tokio::task::JoinHandle;

use crate::cli::diagnostics::Files;
use crate::folder::{self, RunFolder};
use crate::journal::disk::LocalDisk;
use crate::journal::{Journal, JournalError};
use crate::seams::{Clock, DiskThread, Fitter, NoBuilder, Seams, SystemClock};

/// Lines of the wire record that may wait for the disk.
const WIRE_ROOM: usize = 4096;
/// Entries that may wait for a reader of the live run.
const ENTRY_ROOM: usize = 256;
/// Name of the wire record in the run folder.
const WIRE: &str = "wire.jsonl";

/// The run on disk.
pub struct Recording {
    folder: RunFolder,
    header: Header,
    journal: Option<Journal>,
    tape: Option<Tape>,
    wire: Option<JoinHandle<std::io::Result<()>>>,
}

impl Recording {
    /// Makes the run folder with both files as run, an empty journal and the wire record.
    ///
    /// # Errors
    /// One line for the user; nothing has been set on the bench then.
    pub fn begin(into: &Path, files: &Files, itinerary: &Itinerary) -> Result<Self, String> {
        let header = Header {
            title: itinerary.title().to_owned(),
            version: env!("CARGO_PKG_VERSION").to_owned(),
            commit: option_env!("DARKLINE_COMMIT")
                .unwrap_or_default()
                .to_owned(),
            points: itinerary.len(),
            bench: files.bench.1.clone(),
            sequence: files
                .sequence
                .as_ref()
                .map_or_else(String::new, |(_, text)| text.clone()),
            started_utc: SystemClock.utc(),
        };
        let made = |error: folder::FolderError| error.to_string();
        let folder =
            RunFolder::create(&LocalDisk, into, header.started_utc, &header.title).map_err(made)?;
        folder
            .keep(&LocalDisk, folder::BENCH, &header.bench)
            .map_err(made)?;
        folder
            .keep(&LocalDisk, folder::SEQUENCE, &header.sequence)
            .map_err(made)?;
        let journal = Journal::create(&LocalDisk, folder.path()).map_err(|e| e.to_string())?;
        let (tape, lines) = Tape::new(WIRE_ROOM);
        let wire = write_wire(folder.path().join(WIRE), lines);
        Ok(Self {
            folder,
            header,
            journal: Some(journal),
            tape: Some(tape),
            wire: Some(wire),
        })
    }

    /// The run folder.
    pub fn folder(&self) -> &Path {
        self.folder.path()
    }

    /// What the first entry will say.
    pub fn header(&self) -> &Header {
        &self.header
    }

    /// Where links put their bytes.
    pub fn tape(&self) -> Option<&Tape> {
        self.tape.as_ref()
    }

    /// The seams of this run. The journal goes to its thread; asked again, there is none left.
    pub fn seams(&mut self, fitter: Arc<dyn Fitter>) -> Seams {
        let mut journal = self.journal.take();
        let disk = DiskThread::start(move |entry, trace| match &mut journal {
            Some(journal) => journal.append(entry, trace).map_err(|error| fault(&error)),
            None => Err(Fault::new("F0410", "the journal was taken twice")),
        });
        let recorder: Arc<dyn crate::seams::Recorder> = match disk {
            Ok(disk) => Arc::new(disk),
            Err(error) => Arc::new(NoDisk(error.to_string())),
        };
        Seams {
            recorder,
            fitter,
            builder: Arc::new(NoBuilder),
            clock: Arc::new(SystemClock),
            entries: broadcast::channel(ENTRY_ROOM).0,
        }
    }

    /// Notes in the journal that the run ended before the bench was open.
    pub fn close_unopened(&mut self, state: State, reason: &str, faults: &[Fault]) {
        let Some(mut journal) = self.journal.take() else {
            return;
        };
        let mut kinds = vec![EntryKind::Opened(Box::new(self.header.clone()))];
        kinds.extend(faults.iter().cloned().map(EntryKind::Faulted));
        kinds.push(EntryKind::Closed {
            state,
            reason: reason.to_owned(),
        });
        for (seq, kind) in (0..).zip(kinds) {
            let entry = Entry {
                seq,
                at: 0,
                utc: self.header.started_utc,
                kind,
            };
            if let Err(error) = journal.append(&entry, None) {
                tracing::warn!("{error}");
                return;
            }
        }
    }

    /// Waits until the wire record is on disk. All links must be gone.
    pub async fn finish(&mut self) {
        let lost = self.tape.take().map_or(0, |tape| tape.lost());
        if lost > 0 {
            tracing::warn!("{lost} lines of the wire record were lost: the disk was too slow");
        }
        let Some(wire) = self.wire.take() else {
            return;
        };
        match wire.await {
            Ok(Ok(())) => {}
            Ok(Err(error)) => tracing::warn!("the wire record is not whole: {error}"),
            Err(error) => tracing::warn!("the wire record is not whole: {error}"),
        }
    }
}

fn fault(error: &JournalError) -> Fault {
    Fault::new("F0411", error.to_string())
        .help("make room on the disk or mend it; all earlier points are whole")
}

/// Stands in where the system has no thread left: every append fails, so nothing is ever announced.
struct NoDisk(String);

impl crate::seams::Recorder for NoDisk {
    fn append(
        &self,
        _: Arc<Entry>,
        _: Option<Arc<darkline_core::trace::Trace>>,
    ) -> crate::instrument::driver::Boxed<'static, Result<(), Fault>> {
        let fault = Fault::new("F0412", format!("no thread for the journal: {}", self.0));
        Box::pin(std::future::ready(Err(fault)))
    }
}

fn write_wire(path: PathBuf, mut lines: mpsc::Receiver<Line>) -> JoinHandle<std::io::Result<()>> {
    tokio::task::spawn_blocking(move || {
        let mut file = BufWriter::new(std::fs::File::create(path)?);
        while let Some(line) = lines.blocking_recv() {
            let text = line.print().map_err(std::io::Error::other)?;
            writeln!(file, "{text}")?;
        }
        file.into_inner()?.sync_all()
    })
}
