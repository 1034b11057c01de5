//! Entries on their way: numbered, made durable one at a time, and only then announced.
//!
//! Also has the archive built now and then, at checkpoints whose spacing doubles, beside the run.

use std::collections::{BTreeMap, VecDeque};
use std::future::pending;
use std::sync::Arc;
use std::time::Duration;

use darkline_core::diagnostic::Fault;
use darkline_core::entry::{Entry, EntryKind, PointRecord, State};
use darkline_core::run::RunState;
use darkline_core::sequencer::{Input, Moment, Outcome, Ticket, Trouble};
use darkline_core::trace::Trace;
use tokio::task::JoinHandle;
use tokio::time::timeout;

use crate::instrument::unwind::catch;
use crate::seams::Seams;

/// Points after which the archive is built first.
const FIRST_CHECKPOINT: u64 = 64;

/// Longest time that an answer may take.
const ANSWER_WITHIN: Duration = Duration::from_secs(60);

/// An entry on its way.
struct Pending {
    moment: Moment,
    kind: EntryKind,
    trace: Option<Arc<Trace>>,
    ticket: Option<Ticket>,
}

/// An entry being made durable.
struct Appending {
    entry: Arc<Entry>,
    ticket: Option<Ticket>,
    task: JoinHandle<Result<(), Fault>>,
}

/// Makes entries durable and announces them.
pub struct Announcer {
    seams: Seams,
    queue: VecDeque<Pending>,
    appending: Option<Appending>,
    next_seq: u64,
    run: Arc<RunState>,
    kept: BTreeMap<u64, Arc<Trace>>,
    checkpoint: u64,
    building: Option<JoinHandle<()>>,
    answering: Option<JoinHandle<Option<EntryKind>>>,
    answered: bool,
    /// Points that can no longer be written.
    refused: Vec<Ticket>,
    why_broken: Option<Fault>,
}

impl Announcer {
    pub fn new(seams: Seams) -> Self {
        Self {
            seams,
            queue: VecDeque::new(),
            appending: None,
            next_seq: 0,
            run: Arc::default(),
            kept: BTreeMap::new(),
            checkpoint: FIRST_CHECKPOINT,
            building: None,
            answering: None,
            answered: false,
            refused: Vec::new(),
            why_broken: None,
        }
    }

    /// The state that the announced entries add up to.
    pub fn run(&self) -> &Arc<RunState> {
        &self.run
    }

    /// Has an entry written.
    pub fn say(&mut self, moment: Moment, kind: EntryKind) {
        if self.why_broken.is_some() {
            return;
        }
        self.queue.push_back(Pending {
            moment,
            kind,
            trace: None,
            ticket: None,
        });
    }

    /// Keeps the samples of a visit until its point is completed.
    pub fn keep(&mut self, visit: u64, trace: Arc<Trace>) {
        self.kept.insert(visit, trace);
    }

    /// Forgets the samples of a visit.
    pub fn forget(&mut self, visit: u64) {
        self.kept.remove(&visit);
    }

    /// Has a point written, with its samples.
    pub fn complete(
        &mut self,
        moment: Moment,
        ticket: Ticket,
        visit: u64,
        record: Box<PointRecord>,
    ) {
        let trace = self.kept.remove(&visit);
        if self.why_broken.is_some() {
            return self.refused.push(ticket);
        }
        self.queue.push_back(Pending {
            moment,
            kind: EntryKind::Point(record),
            trace,
            ticket: Some(ticket),
        });
    }

    /// Whether nothing is on its way.
    pub fn is_quiet(&self) -> bool {
        self.queue.is_empty() && self.appending.is_none() && self.refused.is_empty()
    }

    /// Waits for the next entry to be durable and announces it; says what the sequencer has to know.
    /// Never returns while nothing is on its way. May be dropped at any time.
    pub async fn next(&mut self) -> Vec<Input> {
        if let (Some(fault), false) = (&self.why_broken, self.refused.is_empty()) {
            let fault = fault.clone();
            let refused = std::mem::take(&mut self.refused);
            return refuse(refused, &fault);
        }
        if self.appending.is_none() {
            self.answer_before_closing().await;
            self.begin();
        }
        let Some(appending) = &mut self.appending else {
            return pending().await;
        };
        let outcome = match (&mut appending.task).await {
            Ok(outcome) => outcome,
            Err(error) => Err(
                Fault::new("F0334", format!("the journal panicked: {error}"))
                    .help("this is a defect of the program; its log says where"),
            ),
        };
        let Some(Appending { entry, ticket, .. }) = self.appending.take() else {
            return Vec::new();
        };
        match outcome {
            Ok(()) => {
                self.announce(&entry);
                let done = |ticket| Input::Done {
                    ticket,
                    outcome: Ok(Outcome::Kept),
                };
                ticket.map(done).into_iter().collect()
            }
            Err(fault) => self.failed(ticket, fault),
        }
    }

    /// Writes what is on its way, and builds the archive a last time.
    pub async fn finish(&mut self) {
        while !self.is_quiet() {
            self.next().await;
        }
        if let Some(building) = self.building.take() {
            let _ = building.await;
        }
        if self.why_broken.is_none() {
            self.build();
        }
        if let Some(building) = self.building.take() {
            let _ = building.await;
        }
    }

    /// Where the run is about to close, has the fitter answer first.
    async fn answer_before_closing(&mut self) {
        let Some(front) = self.queue.front() else {
            return;
        };
        if self.answered || !matches!(front.kind, EntryKind::Closed { .. }) {
            return;
        }
        let moment = front.moment;
        let fitter = Arc::clone(&self.seams.fitter);
        let answering = self.answering.get_or_insert_with(|| {
            tokio::spawn(async move {
                match timeout(ANSWER_WITHIN, catch(fitter.answer())).await {
                    Ok(Ok(answer)) => answer.map(|answer| EntryKind::Answered(Box::new(answer))),
                    Ok(Err(panic)) => Some(note(format!("the answer panicked: {panic}"))),
                    Err(_) => Some(note("the answer took too long".to_owned())),
                }
            })
        });
        let answer = answering.await;
        self.answering = None;
        self.answered = true;
        if let Ok(Some(kind)) = answer {
            self.queue.push_front(Pending {
                moment,
                kind,
                trace: None,
                ticket: None,
            });
        }
    }

    /// Takes the next entry from the queue, where there is one.
    fn begin(&mut self) {
        let Some(next) = self.queue.pop_front() else {
            return;
        };
        let entry = Arc::new(Entry {
            seq: self.next_seq,
            at: u64::try_from(next.moment.at.as_nanos()).unwrap_or(u64::MAX),
            utc: next.moment.utc,
            kind: next.kind,
        });
        self.next_seq += 1;
        let appended = self.seams.recorder.append(Arc::clone(&entry), next.trace);
        self.appending = Some(Appending {
            entry,
            ticket: next.ticket,
            task: tokio::spawn(appended),
        });
    }

    fn announce(&mut self, entry: &Arc<Entry>) {
        Arc::make_mut(&mut self.run).apply(entry);
        let held = matches!(
            entry.kind,
            EntryKind::Turned {
                state: State::Held,
                ..
            }
        );
        if let EntryKind::Point(record) = &entry.kind {
            self.seams.fitter.completed(record);
        }
        // Nobody may be listening.
        let _ = self.seams.entries.send(Arc::clone(entry));
        if held || self.run.done >= self.checkpoint {
            self.checkpoint = self.checkpoint.max(self.run.done) * 2;
            self.build();
        }
    }

    /// Has the archive built beside the run, unless it is being built.
    fn build(&mut self) {
        let busy = self
            .building
            .as_ref()
            .is_some_and(|building| !building.is_finished());
        if busy {
            return;
        }
        let building = self.seams.builder.build();
        self.building = Some(tokio::spawn(async move {
            match catch(building).await {
                Ok(Ok(())) => {}
                Ok(Err(why)) => tracing::warn!("the archive was not built: {why}"),
                Err(panic) => tracing::error!("building the archive panicked: {panic}"),
            }
        }));
    }

    /// The journal failed: nothing more is written, and nothing more is announced.
    fn failed(&mut self, ticket: Option<Ticket>, fault: Fault) -> Vec<Input> {
        self.why_broken = Some(fault.clone());
        let waiting = self.queue.drain(..).filter_map(|pending| pending.ticket);
        let inputs = refuse(ticket.into_iter().chain(waiting), &fault);
        if inputs.is_empty() {
            return vec![Input::Failed(fault)];
        }
        inputs
    }
}

fn refuse(tickets: impl IntoIterator<Item = Ticket>, fault: &Fault) -> Vec<Input> {
    let refused = |ticket| Input::Done {
        ticket,
        outcome: Err(Trouble::Fault(fault.clone())),
    };
    tickets.into_iter().map(refused).collect()
}

fn note(text: String) -> EntryKind {
    EntryKind::Note { text }
}
