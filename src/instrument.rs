//! One task per instrument, behind a bounded mailbox. It owns driver and link; nobody else reaches them.
//!
//! The mailbox enforces limits and ramps, whoever asks. Beside it stands a one-slot safe signal, which
//! ends waits at once and a wire exchange at its end. A caller that goes away loses no bytes: the task
//! finishes the exchange; only a ramp stops between two stairs.

pub mod driver;
pub mod limits;
pub mod unwind;

mod task;

use std::collections::BTreeSet;
use std::sync::Arc;
use std::sync::atomic::{AtomicU64, Ordering};

use darkline_core::bench;
use darkline_core::channel::Role;
use darkline_core::diagnostic::Fault;
use darkline_drivers::error::DriverError;
use darkline_drivers::role::{Identity, Outcome};
use darkline_drivers::safe::{Level, Readbacks};
use tokio::sync::{mpsc, oneshot, watch};

use driver::{Driver, Reply, Request};
use task::Task;

/// Requests that may wait in a mailbox; further callers wait outside.
const SLOTS: usize = 16;

/// Why a request was not done.
#[derive(Debug, Clone, PartialEq)]
pub enum Refusal {
    /// No trigger, or not exactly one.
    MissedTrigger,
    /// The instrument was lost and is back, settings verified; the request was not done.
    Reconnected,
    /// The bench is being left: nothing else is done any more.
    Leaving,
    /// The bench is wrong.
    Fault(Fault),
}

/// A request on its way, with the place for its answer.
#[derive(Debug)]
struct Envelope {
    request: Request,
    reply: oneshot::Sender<Result<Reply, Refusal>>,
}

/// An order to leave the instrument at rest or safe. Later ones have higher numbers.
#[derive(Debug, Clone, Copy)]
struct Signal {
    number: u64,
    level: Level,
}

/// How the instrument was left upon a signal of that number.
type Left = (u64, Outcome<Readbacks>);

/// The way to an instrument. Cheap to clone; the task ends when all are gone.
#[derive(Debug, Clone)]
pub struct Mailbox {
    name: Arc<str>,
    role: Role,
    identity: Arc<Identity>,
    measures: Arc<BTreeSet<String>>,
    orders: mpsc::Sender<Envelope>,
    reads: mpsc::Sender<Envelope>,
    signal: watch::Sender<Option<Signal>>,
    signals: Arc<AtomicU64>,
    left: watch::Receiver<Option<Left>>,
}

impl Mailbox {
    /// Starts the task of an instrument.
    pub fn open(instrument: bench::Instrument, driver: Box<dyn Driver>) -> Self {
        let (orders, ordered) = mpsc::channel(SLOTS);
        let (reads, read) = mpsc::channel(SLOTS);
        let (signal, signalled) = watch::channel(None);
        let (leave, left) = watch::channel(None);
        let measured = |property: &&String| driver.measures(property);
        let mailbox = Self {
            name: instrument.name.as_str().into(),
            role: instrument.role,
            identity: Arc::new(driver.identity()),
            measures: Arc::new(
                instrument
                    .properties
                    .keys()
                    .filter(measured)
                    .cloned()
                    .collect(),
            ),
            orders,
            reads,
            signal,
            signals: Arc::new(AtomicU64::new(0)),
            left,
        };
        let task = Task::new(instrument, driver, signalled, leave);
        tokio::spawn(task.run(ordered, read));
        mailbox
    }

    /// The instrument's name.
    pub fn name(&self) -> &str {
        &self.name
    }

    /// Its role.
    pub fn role(&self) -> Role {
        self.role
    }

    /// Who it says it is.
    pub fn identity(&self) -> &Identity {
        &self.identity
    }

    /// Whether it measures that property.
    pub fn measures(&self, property: &str) -> bool {
        self.measures.contains(property)
    }

    /// Asks for one thing and waits for the answer.
    ///
    /// # Errors
    /// See [`Refusal`].
    pub async fn ask(&self, request: Request) -> Result<Reply, Refusal> {
        let (reply, answer) = oneshot::channel();
        let slot = if request.only_reads() {
            &self.reads
        } else {
            &self.orders
        };
        let sent = slot.send(Envelope { request, reply }).await;
        if sent.is_err() {
            return Err(Refusal::Fault(self.ended()));
        }
        match answer.await {
            Ok(answer) => answer,
            Err(_) => Err(Refusal::Fault(self.ended())),
        }
    }

    /// Breaks off what the instrument is at and brings it to rest or makes it safe, verified by readback.
    /// Takes as long as its ramps; callers bound the time.
    ///
    /// # Errors
    /// Where it may not be there.
    pub async fn leave(&self, level: Level) -> Outcome<Readbacks> {
        let number = self.signals.fetch_add(1, Ordering::Relaxed) + 1;
        self.signal.send_replace(Some(Signal { number, level }));
        let mut left = self.left.clone();
        let done = |left: &Option<Left>| left.as_ref().is_some_and(|(upon, _)| *upon >= number);
        match left.wait_for(done).await {
            Ok(left) => match left.as_ref() {
                Some((_, outcome)) => outcome.clone(),
                None => Err(self.gone()),
            },
            Err(_) => Err(self.gone()),
        }
    }

    fn gone(&self) -> DriverError {
        DriverError::Unreachable {
            instrument: self.name.to_string(),
            link: "its mailbox".to_owned(),
            why: "its task has ended".to_owned(),
        }
    }

    fn ended(&self) -> Fault {
        Fault::new("F0320", format!("the task of `{}` has ended", self.name))
            .help("this is a defect of the program; check the instrument by hand")
            .of(&*self.name)
    }
}
