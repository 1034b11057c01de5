//! The conductor: one loop that performs the sequencer's actions on the instruments and feeds back what
//! came of them. It decides nothing about the scan, and never leaves the bench but at rest or safe.

mod actions;
mod announcing;
mod recording;
mod standstill;
mod works;

use std::collections::{BTreeMap, HashMap};
use std::future::pending;
use std::sync::Arc;
use std::time::Duration;

use darkline_core::diagnostic::Fault;
use darkline_core::entry::{EntryKind, Header, SafeLevel, State};
use darkline_core::itinerary::Itinerary;
use darkline_core::quantity::QuantityName;
use darkline_core::run::RunState;
use darkline_core::sequencer::{
    AcquisitionOrder, Action, Input, Moment, Outcome, Plan, Sequencer, Ticket, Trouble,
};
use darkline_core::trace::Trace;
use darkline_drivers::safe::SafeReport;
use tokio::sync::{mpsc, watch};
use tokio::task::JoinSet;
use tokio::time::{Instant, interval, sleep_until};

pub use darkline_core::sequencer::Command;

use crate::bench::OpenBench;
use crate::instrument::unwind::catch;
use crate::seams::Seams;
use announcing::Announcer;
use recording::{Recording, Taken};
use standstill::Standstill;
use works::{Beside, Finished, supervised};

/// What a run shows while it goes on. Not announced: it may be ahead of what is durable.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct Progress {
    /// What it is doing now.
    pub state: State,
    /// Index of the point in work.
    pub point: Option<u64>,
    /// Time since it opened.
    pub elapsed: Duration,
    /// The state that the durable entries add up to.
    pub run: Arc<RunState>,
    /// The last reading of every quantity that was read.
    pub readings: BTreeMap<QuantityName, f64>,
    /// The last setpoint of every quantity that was set.
    pub setpoints: BTreeMap<QuantityName, f64>,
}

/// How a run ended.
#[derive(Debug, Clone, PartialEq)]
pub struct RunEnd {
    /// One of the ends.
    pub state: State,
    /// Why, in words.
    pub reason: String,
    /// How the bench was left.
    pub safe_report: SafeReport,
    /// What all durable entries add up to.
    pub run: RunState,
    /// The fault that ended it, where one did.
    pub fault: Option<Fault>,
}

impl RunEnd {
    /// Whether every instrument was left where it should be, verified by readback.
    pub fn is_safe(&self) -> bool {
        self.safe_report.is_safe()
    }
}

/// Runs an itinerary on an open bench, to its end. The bench is left at rest after finish or stop, and
/// safe after a trip or fault, a panic in here included.
pub async fn run(
    bench: OpenBench,
    itinerary: Itinerary,
    header: Header,
    seams: Seams,
    commands: mpsc::Receiver<Command>,
    progress: watch::Sender<Progress>,
) -> RunEnd {
    let mut conductor = Conductor::new(bench, itinerary, seams, commands, progress);
    match catch(conductor.conduct(header)).await {
        Ok(()) => conductor.end(),
        Err(panic) => conductor.end_in_panic(&panic).await,
    }
}

struct Conductor {
    bench: Arc<OpenBench>,
    itinerary: Itinerary,
    seams: Seams,
    commands: Option<mpsc::Receiver<Command>>,
    progress: watch::Sender<Progress>,
    opened: Instant,
    /// The time of day when it was last asked for.
    utc: i64,
    sequencer: Sequencer<Itinerary>,
    recording: Option<Arc<Recording>>,
    /// What goes on at the instruments: broken off when the bench is left.
    works: JoinSet<Finished>,
    tickets: HashMap<tokio::task::Id, Ticket>,
    /// Fits, and leaving the bench: never broken off.
    aside: JoinSet<Finished>,
    announcer: Announcer,
    samples: BTreeMap<u64, Trace>,
    taken: Option<(AcquisitionOrder, Taken)>,
    readings: BTreeMap<QuantityName, f64>,
    setpoints: BTreeMap<QuantityName, f64>,
    report: Option<SafeReport>,
    fault: Option<Fault>,
    over: Option<(State, String)>,
}

impl Conductor {
    fn new(
        bench: OpenBench,
        itinerary: Itinerary,
        seams: Seams,
        commands: mpsc::Receiver<Command>,
        progress: watch::Sender<Progress>,
    ) -> Self {
        let plan = plan_for(&itinerary, &bench);
        Self {
            bench: Arc::new(bench),
            sequencer: Sequencer::new(itinerary.clone(), plan),
            itinerary,
            commands: Some(commands),
            progress,
            opened: Instant::now(),
            utc: 0,
            recording: None,
            works: JoinSet::new(),
            tickets: HashMap::new(),
            aside: JoinSet::new(),
            announcer: Announcer::new(seams.clone()),
            seams,
            samples: BTreeMap::new(),
            taken: None,
            readings: BTreeMap::new(),
            setpoints: BTreeMap::new(),
            report: None,
            fault: None,
            over: None,
        }
    }

    /// The loop.
    async fn conduct(&mut self, header: Header) {
        self.open(header).await;
        let mut tick = interval(standstill::TICK);
        tick.set_missed_tick_behavior(tokio::time::MissedTickBehavior::Delay);
        let mut standstill = Standstill::new(self.seams.clock.utc());
        loop {
            self.perform_actions();
            self.show();
            if self.is_done() {
                break;
            }
            let timeout = self.sequencer.next_timeout().map(|at| self.opened + at);
            tokio::select! {
                Some(joined) = self.works.join_next_with_id(), if !self.works.is_empty() => {
                    self.joined(joined);
                }
                Some(joined) = self.aside.join_next(), if !self.aside.is_empty() => {
                    if let Ok(finished) = joined {
                        self.finished(finished);
                    }
                }
                announced = self.announcer.next() => {
                    for input in announced {
                        self.feed(input);
                    }
                }
                command = next_command(&mut self.commands) => self.feed(Input::Order(command)),
                () = sleep_until_some(timeout) => self.feed(Input::Tick),
                _ = tick.tick() => {
                    if let Some(gap) = standstill.look(self.seams.clock.utc()) {
                        self.feed(Input::Suspended(gap));
                    }
                }
            }
        }
        self.announcer.finish().await;
    }

    /// The first entries, and the settings of the record. Nothing moves yet.
    async fn open(&mut self, header: Header) {
        let now = self.now();
        self.announcer.say(now, EntryKind::Opened(Box::new(header)));
        for identity in self.bench.identities() {
            self.announcer.say(now, identity);
        }
        match recording::configure(&self.bench, &self.itinerary).await {
            Ok(None) => {}
            Ok(Some((recording, granted))) => {
                self.recording = Some(Arc::new(recording));
                let now = self.now();
                for granted in granted {
                    self.announcer.say(now, granted);
                }
            }
            Err(fault) => return self.feed(Input::Failed(fault)),
        }
        self.feed(Input::Begin);
    }

    fn now(&mut self) -> Moment {
        self.utc = self.seams.clock.utc();
        Moment {
            at: self.opened.elapsed(),
            utc: self.utc,
        }
    }

    fn feed(&mut self, input: Input) {
        let now = self.now();
        self.sequencer.handle(input, now);
    }

    fn perform_actions(&mut self) {
        while let Some(action) = self.sequencer.next_action() {
            self.perform(action);
        }
    }

    fn perform(&mut self, action: Action) {
        let bench = Arc::clone(&self.bench);
        match action {
            Action::Degauss { ticket, plan } => {
                self.work(ticket, actions::degauss(bench, plan));
            }
            Action::Move { ticket, moves } => {
                for step in &moves {
                    if let Some(value) = step.setpoint.number() {
                        self.setpoints.insert(step.quantity.clone(), value);
                    }
                }
                self.work(ticket, actions::go(bench, moves));
            }
            Action::Read {
                ticket,
                quantity,
                what,
            } => self.work(ticket, actions::read(bench, quantity, what)),
            Action::Acquire {
                ticket,
                acquisition,
            } => {
                let clock = Arc::clone(&self.seams.clock);
                let recording = self.recording.clone();
                self.work(
                    ticket,
                    recording::acquire(bench, recording, acquisition, clock),
                );
            }
            Action::Transfer {
                ticket,
                acquisition,
            } => {
                let taken = self.taken.take().filter(|(order, _)| *order == acquisition);
                let recording = self.recording.clone();
                self.work(
                    ticket,
                    recording::transfer(bench, recording, acquisition, taken),
                );
            }
            Action::Fit {
                ticket,
                visit,
                record,
            } => {
                let trace = Arc::new(self.samples.remove(&visit).unwrap_or_default());
                self.announcer.keep(visit, Arc::clone(&trace));
                let fitting = self.seams.fitter.fit(record, trace);
                self.set_aside(ticket, async {
                    (
                        Ok(Outcome::Fitted(Box::new(fitting.await))),
                        Beside::Nothing,
                    )
                });
            }
            Action::Complete {
                ticket,
                visit,
                record,
            } => {
                let now = self.now();
                self.announcer.complete(now, ticket, visit, record);
            }
            Action::Discard { visit } => {
                self.samples.remove(&visit);
                self.announcer.forget(visit);
            }
            Action::Say(kind) => {
                if let EntryKind::Faulted(fault) = &kind {
                    self.fault = Some(fault.clone());
                }
                let now = self.now();
                self.announcer.say(now, kind);
            }
            Action::Leave { ticket, level } => self.leave(ticket, level),
            Action::Over { state, reason } => self.over = Some((state, reason)),
        }
    }

    /// Breaks off all works at the instruments and leaves the bench.
    fn leave(&mut self, ticket: Ticket, level: SafeLevel) {
        self.works.abort_all();
        self.tickets.clear();
        let bench = Arc::clone(&self.bench);
        self.set_aside(ticket, async move { actions::leave(bench, level).await });
    }

    /// Starts a work at the instruments.
    fn work<F>(&mut self, ticket: Ticket, work: F)
    where
        F: Future<Output = (Result<Outcome, Trouble>, Beside)> + Send + 'static,
    {
        let task = self.works.spawn(supervised(ticket, work));
        self.tickets.insert(task.id(), ticket);
    }

    /// Starts a work that is never broken off.
    fn set_aside<F>(&mut self, ticket: Ticket, work: F)
    where
        F: Future<Output = (Result<Outcome, Trouble>, Beside)> + Send + 'static,
    {
        self.aside.spawn(supervised(ticket, work));
    }

    fn joined(&mut self, joined: Result<(tokio::task::Id, Finished), tokio::task::JoinError>) {
        match joined {
            Ok((id, finished)) => {
                if self.tickets.remove(&id).is_some() {
                    self.finished(finished);
                }
            }
            // Broken off, when the bench was left: nobody waits for it any more.
            Err(error) => {
                self.tickets.remove(&error.id());
            }
        }
    }

    fn finished(&mut self, finished: Finished) {
        match finished.beside {
            Beside::Nothing => {}
            Beside::Taken(order, taken) => self.taken = Some((order, taken)),
            Beside::Samples(visit, acquisition) => {
                self.samples.entry(visit).or_default().push(*acquisition);
            }
            Beside::Reading(quantity, value) => {
                self.readings.insert(quantity, value);
            }
            Beside::Left(report) => self.report = Some(*report),
        }
        self.feed(Input::Done {
            ticket: finished.ticket,
            outcome: finished.outcome,
        });
    }

    fn is_done(&self) -> bool {
        self.over.is_some() && self.announcer.is_quiet()
    }

    /// Shows how it stands, where that has changed.
    fn show(&mut self) {
        let (state, point) = (self.sequencer.state(), self.sequencer.point());
        let elapsed = self.opened.elapsed();
        let run = self.announcer.run();
        self.progress.send_if_modified(|shown| {
            let changed = shown.state != state
                || shown.point != point
                || !Arc::ptr_eq(&shown.run, run)
                || elapsed.saturating_sub(shown.elapsed) >= Duration::from_millis(250);
            if changed {
                shown.state = state;
                shown.point = point;
                shown.elapsed = elapsed;
                shown.run = Arc::clone(run);
                shown.readings.clone_from(&self.readings);
                shown.setpoints.clone_from(&self.setpoints);
            }
            changed
        });
    }

    fn end(&mut self) -> RunEnd {
        let (state, reason) = self.over.take().unwrap_or_else(|| {
            let reason = "the run ended without saying how".to_owned();
            (State::Faulted, reason)
        });
        RunEnd {
            state,
            reason,
            safe_report: self.report.take().unwrap_or_else(|| SafeReport {
                level: darkline_drivers::safe::Level::Safe,
                reached: Vec::new(),
                unreached: Vec::new(),
                readbacks: Vec::new(),
            }),
            run: RunState::clone(self.announcer.run()),
            fault: self.fault.take().filter(|_| state == State::Faulted),
        }
    }

    /// The loop panicked: we are wrong, but the coils are still energised.
    async fn end_in_panic(&mut self, panic: &str) -> RunEnd {
        self.works.abort_all();
        let report = self.bench.leave(SafeLevel::Safe).await;
        let reason = format!("the conductor panicked: {panic}");
        let fault = Fault::new("F0340", reason.clone())
            .help("this is a defect of the program; its log says where");
        let closing = [
            EntryKind::Faulted(fault.clone()),
            actions::left_safe(SafeLevel::Safe, &report),
            EntryKind::Closed {
                state: State::Faulted,
                reason: reason.clone(),
            },
        ];
        // The clock may be what panicked: it is not asked again.
        let moment = Moment {
            at: self.opened.elapsed(),
            utc: self.utc,
        };
        for kind in closing {
            self.announcer.say(moment, kind);
        }
        // The journal may be what panicked; the bench is safe already.
        let _ = catch(self.announcer.finish()).await;
        self.report = Some(report);
        self.fault = Some(fault);
        self.over = Some((State::Faulted, reason));
        self.end()
    }
}

/// The plan, with what the open bench can measure.
fn plan_for(itinerary: &Itinerary, bench: &OpenBench) -> Plan {
    let mut plan = Plan::of(itinerary);
    plan.measured = itinerary
        .settings(0)
        .unwrap_or_default()
        .into_iter()
        .filter(|step| step.setpoint.number().is_some() && bench.measures(&step.quantity))
        .map(|step| step.quantity)
        .collect();
    plan
}

/// The next command; never, once nobody is there to give one.
async fn next_command(commands: &mut Option<mpsc::Receiver<Command>>) -> Command {
    if let Some(receiver) = commands {
        if let Some(command) = receiver.recv().await {
            return command;
        }
        *commands = None;
    }
    pending().await
}

async fn sleep_until_some(until: Option<Instant>) {
    match until {
        Some(until) => sleep_until(until).await,
        None => pending().await,
    }
}
