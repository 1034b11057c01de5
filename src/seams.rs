//! Where the conductor touches the outside besides the instruments: disk, fits, archive, clock.
//!
//! Each is a small trait with a version in memory, so that whole runs can be simulated. The versions
//! that reach a real disk or start a process are made by those who own them.

use std::sync::{Arc, Mutex, PoisonError};
use std::time::{Duration, SystemTime, UNIX_EPOCH};

use darkline_core::answer::Answer;
use darkline_core::diagnostic::Fault;
use darkline_core::entry::{Entry, PointRecord};
use darkline_core::sequencer::{Fitted, Verdict};
use darkline_core::trace::Trace;
use tokio::sync::{broadcast, mpsc, oneshot};
use tokio::time::Instant;

pub use crate::instrument::driver::Boxed;

/// Makes entries durable.
pub trait Recorder: Send + Sync + 'static {
    /// Makes an entry, and the samples that belong to it, durable. The conductor appends one at a time,
    /// in the order of their numbers.
    ///
    /// # Errors
    /// Where it may not be durable. The conductor appends nothing after that.
    fn append(
        &self,
        entry: Arc<Entry>,
        trace: Option<Arc<Trace>>,
    ) -> Boxed<'static, Result<(), Fault>>;
}

/// Fits points, and answers at the end.
pub trait Fitter: Send + Sync + 'static {
    /// Fits the samples of one point. Points come one at a time, in the order of the run, some of them
    /// more than once.
    fn fit(&self, record: Box<PointRecord>, trace: Arc<Trace>) -> Boxed<'static, Fitted>;

    /// Takes note of a completed point.
    fn completed(&self, record: &PointRecord);

    /// The answer from all completed points, once the bench is left; `None` where there is none to give.
    fn answer(&self) -> Boxed<'static, Option<Answer>>;
}

/// Builds the archive from what is durable.
pub trait Builder: Send + Sync + 'static {
    /// Builds it anew. Never two at a time.
    ///
    /// # Errors
    /// Why it could not, in words: the run goes on, and the archive is built later.
    fn build(&self) -> Boxed<'static, Result<(), String>>;
}

/// The time of day. Passing time is tokio's.
pub trait Clock: Send + Sync + 'static {
    /// ns since 1970-01-01 UTC.
    fn utc(&self) -> i64;
}

/// All seams of one run.
#[derive(Clone)]
pub struct Seams {
    /// Where entries are made durable.
    pub recorder: Arc<dyn Recorder>,
    /// Who fits.
    pub fitter: Arc<dyn Fitter>,
    /// Who builds the archive.
    pub builder: Arc<dyn Builder>,
    /// The time of day.
    pub clock: Arc<dyn Clock>,
    /// Every entry once it is durable. Who reads too slowly loses some, and reads them from the journal.
    pub entries: broadcast::Sender<Arc<Entry>>,
}

impl Seams {
    /// All in memory: nothing durable, no fits, no archive, virtual time. Says where the entries go.
    pub fn in_memory() -> (Self, Arc<MemoryRecorder>) {
        let recorder = Arc::new(MemoryRecorder::default());
        let seams = Self {
            recorder: Arc::clone(&recorder) as Arc<dyn Recorder>,
            fitter: Arc::new(NoFitter),
            builder: Arc::new(NoBuilder),
            clock: Arc::new(VirtualClock::new(1_767_225_600_000_000_000)),
            entries: broadcast::channel(64).0,
        };
        (seams, recorder)
    }
}

/// The system's clock.
#[derive(Debug, Clone, Copy, Default)]
pub struct SystemClock;

impl Clock for SystemClock {
    fn utc(&self) -> i64 {
        match SystemTime::now().duration_since(UNIX_EPOCH) {
            Ok(since) => nanoseconds(since),
            Err(before) => -nanoseconds(before.duration()),
        }
    }
}

/// A clock that goes with tokio's time, from a moment of its own.
#[derive(Debug, Clone, Copy)]
pub struct VirtualClock {
    origin: Instant,
    utc: i64,
}

impl VirtualClock {
    /// Shows `utc`, ns since 1970, now.
    pub fn new(utc: i64) -> Self {
        Self {
            origin: Instant::now(),
            utc,
        }
    }
}

impl Clock for VirtualClock {
    fn utc(&self) -> i64 {
        self.utc.saturating_add(nanoseconds(self.origin.elapsed()))
    }
}

fn nanoseconds(duration: Duration) -> i64 {
    i64::try_from(duration.as_nanos()).unwrap_or(i64::MAX)
}

/// An entry, and its samples where they are kept.
type Kept = (Arc<Entry>, Option<Arc<Trace>>);

/// Keeps entries in memory; of the samples, their number only, unless told otherwise.
#[derive(Debug, Default)]
pub struct MemoryRecorder {
    kept: Mutex<Vec<Kept>>,
    /// Whether samples are kept too.
    pub keeps_samples: bool,
    /// Number of the entry from which on every append fails.
    pub fails_at: Option<u64>,
}

impl MemoryRecorder {
    /// One whose disk is full from the entry of this number on.
    pub fn failing_at(seq: u64) -> Self {
        Self {
            fails_at: Some(seq),
            ..Self::default()
        }
    }

    /// All entries so far.
    pub fn entries(&self) -> Vec<Arc<Entry>> {
        let kept = self.kept.lock().unwrap_or_else(PoisonError::into_inner);
        kept.iter().map(|(entry, _)| Arc::clone(entry)).collect()
    }

    /// All samples so far, where they are kept.
    pub fn traces(&self) -> Vec<Arc<Trace>> {
        let kept = self.kept.lock().unwrap_or_else(PoisonError::into_inner);
        kept.iter().filter_map(|(_, trace)| trace.clone()).collect()
    }
}

impl Recorder for MemoryRecorder {
    fn append(
        &self,
        entry: Arc<Entry>,
        trace: Option<Arc<Trace>>,
    ) -> Boxed<'static, Result<(), Fault>> {
        let outcome = if self.fails_at.is_some_and(|from| entry.seq >= from) {
            Err(Fault::new("F0330", "the disk is full").help("make room on it"))
        } else {
            let trace = trace.filter(|_| self.keeps_samples);
            let mut kept = self.kept.lock().unwrap_or_else(PoisonError::into_inner);
            kept.push((entry, trace));
            Ok(())
        };
        Box::pin(std::future::ready(outcome))
    }
}

/// An append on its way to a disk thread.
type Append = (
    Arc<Entry>,
    Option<Arc<Trace>>,
    oneshot::Sender<Result<(), Fault>>,
);

/// A thread of its own that owns the disk and acknowledges every append.
#[derive(Debug, Clone)]
pub struct DiskThread {
    appends: mpsc::Sender<Append>,
}

impl DiskThread {
    /// Starts the thread; it ends when this and all its clones are gone. `append` returns once the entry
    /// is durable.
    ///
    /// # Errors
    /// Where the system has no thread left.
    pub fn start<F>(mut append: F) -> std::io::Result<Self>
    where
        F: FnMut(&Entry, Option<&Trace>) -> Result<(), Fault> + Send + 'static,
    {
        let (appends, mut queue) = mpsc::channel::<Append>(4);
        std::thread::Builder::new()
            .name("disk".to_owned())
            .spawn(move || {
                while let Some((entry, trace, acknowledge)) = queue.blocking_recv() {
                    let outcome = append(&entry, trace.as_deref());
                    // Who asked may have gone: the entry is durable all the same.
                    let _ = acknowledge.send(outcome);
                }
            })?;
        Ok(Self { appends })
    }
}

impl Recorder for DiskThread {
    fn append(
        &self,
        entry: Arc<Entry>,
        trace: Option<Arc<Trace>>,
    ) -> Boxed<'static, Result<(), Fault>> {
        let appends = self.appends.clone();
        Box::pin(async move {
            let ended = || {
                Fault::new("F0331", "the journal's thread has ended")
                    .help("this is a defect of the program; its log says where")
            };
            let (acknowledge, acknowledged) = oneshot::channel();
            let sent = appends.send((entry, trace, acknowledge)).await;
            sent.map_err(|_| ended())?;
            acknowledged.await.map_err(|_| ended())?
        })
    }
}

/// Fits nothing.
#[derive(Debug, Clone, Copy, Default)]
pub struct NoFitter;

impl Fitter for NoFitter {
    fn fit(&self, _: Box<PointRecord>, _: Arc<Trace>) -> Boxed<'static, Fitted> {
        Box::pin(std::future::ready(Fitted {
            line: None,
            verdict: Verdict::Nothing,
        }))
    }

    fn completed(&self, _: &PointRecord) {}

    fn answer(&self) -> Boxed<'static, Option<Answer>> {
        Box::pin(std::future::ready(None))
    }
}

/// Builds nothing.
#[derive(Debug, Clone, Copy, Default)]
pub struct NoBuilder;

impl Builder for NoBuilder {
    fn build(&self) -> Boxed<'static, Result<(), String>> {
        Box::pin(std::future::ready(Ok(())))
    }
}
