//! The task of one instrument: serves its mailbox, ramps, reconnects, and leaves when told to.

use std::collections::HashMap;
use std::time::Duration;

use darkline_core::bench;
use darkline_core::diagnostic::Fault;
use darkline_core::quantity::Setting;
use darkline_drivers::error::DriverError;
use darkline_drivers::role::Granted;
use tokio::sync::{mpsc, oneshot, watch};
use tokio::time::{Instant, timeout_at};

use super::driver::{Driver, Reply, Request};
use super::limits::{judge_readback, permit, permit_sweep, stairs};
use super::unwind::catch;
use super::{Envelope, Left, Refusal, Signal};

/// Pauses before the attempts to reconnect.
const RECONNECT_AFTER: [Duration; 3] = [
    Duration::from_millis(100),
    Duration::from_secs(1),
    Duration::from_secs(3),
];

/// Longest time that all attempts to reconnect may take together: the bench is energised meanwhile.
const RECONNECT_WITHIN: Duration = Duration::from_secs(20);

/// Longest time that giving the front panel back may take.
const FAREWELL: Duration = Duration::from_secs(2);

/// Where a property stands.
#[derive(Debug, Clone, Copy, PartialEq)]
enum Standing {
    /// Anywhere: it has to be read back.
    Unknown,
    /// There, as granted.
    At(f64),
}

/// The task of one instrument.
pub(super) struct Task {
    instrument: bench::Instrument,
    driver: Box<dyn Driver>,
    standing: HashMap<String, Standing>,
    /// When the next stair of a property may be sent.
    free: HashMap<String, Instant>,
    signal: watch::Receiver<Option<Signal>>,
    /// Number of the signal acted upon last.
    acted: u64,
    leave: watch::Sender<Option<Left>>,
    is_left: bool,
}

/// What a pause ended with.
enum Pause {
    Over,
    Signal,
    Abandoned,
    Read(Envelope),
}

impl Task {
    pub(super) fn new(
        instrument: bench::Instrument,
        driver: Box<dyn Driver>,
        signal: watch::Receiver<Option<Signal>>,
        leave: watch::Sender<Option<Left>>,
    ) -> Self {
        Self {
            instrument,
            driver,
            standing: HashMap::new(),
            free: HashMap::new(),
            signal,
            acted: 0,
            leave,
            is_left: false,
        }
    }

    /// Serves until all mailboxes are gone.
    pub(super) async fn run(
        mut self,
        mut orders: mpsc::Receiver<Envelope>,
        mut reads: mpsc::Receiver<Envelope>,
    ) {
        loop {
            let acted = self.acted;
            tokio::select! {
                biased;
                () = signalled(&mut self.signal, acted) => self.act_upon_signal().await,
                Some(envelope) = reads.recv() => self.serve(envelope, &mut reads).await,
                envelope = orders.recv() => match envelope {
                    Some(envelope) => self.serve(envelope, &mut reads).await,
                    None => break,
                },
            }
        }
        let farewell = catch(self.driver.perform(&Request::Leave));
        if !matches!(
            tokio::time::timeout(FAREWELL, farewell).await,
            Ok(Ok(Ok(_)))
        ) {
            tracing::debug!(instrument = self.instrument.name, "did not take leave");
        }
    }

    /// Brings the instrument to the state that the signal names; a newer signal breaks in.
    async fn act_upon_signal(&mut self) {
        let Some(signal) = *self.signal.borrow_and_update() else {
            return;
        };
        self.acted = signal.number;
        self.is_left = true;
        // A ramp broken off a moment ago left its last stair; the next keeps its distance.
        if let Some(free) = self.free.values().max() {
            tokio::time::sleep_until(*free).await;
        }
        self.standing.clear();
        let leaving = catch(self.driver.make_safe(&self.instrument, signal.level));
        let outcome = tokio::select! {
            biased;
            () = signalled(&mut self.signal, self.acted) => return,
            outcome = leaving => outcome,
        };
        let outcome = outcome.unwrap_or_else(|panic| {
            Err(DriverError::Unreachable {
                instrument: self.instrument.name.clone(),
                link: self.instrument.link.clone(),
                why: format!("its driver panicked: {panic}"),
            })
        });
        self.leave.send_replace(Some((signal.number, outcome)));
    }

    async fn serve(&mut self, envelope: Envelope, reads: &mut mpsc::Receiver<Envelope>) {
        let Envelope { request, mut reply } = envelope;
        if reply.is_closed() {
            return;
        }
        let answer = match &request {
            Request::Set(property, to) => self.set(property, *to, &mut reply, reads).await,
            _ => self.other(&request).await,
        };
        // A caller that went away does not want to know.
        let _ = reply.send(answer);
    }

    /// Everything but setting a property.
    async fn other(&mut self, request: &Request) -> Result<Reply, Refusal> {
        match request {
            Request::PrepareSweep(sweep) => {
                self.may_act()?;
                permit_sweep(&self.instrument, sweep).map_err(Refusal::Fault)?;
            }
            Request::StartSweep | Request::Arm | Request::Trigger => self.may_act()?,
            _ => {}
        }
        let reply = self.exchange(request).await?;
        if let (Request::Readback(property), Reply::Setting(Setting::Number(value))) =
            (request, &reply)
        {
            self.standing.insert(property.clone(), Standing::At(*value));
            judge_readback(&self.instrument, property, *value).map_err(Refusal::Fault)?;
        }
        Ok(reply)
    }

    /// Sets a property within its limits, by its ramp.
    async fn set(
        &mut self,
        property: &str,
        to: Setting,
        caller: &mut oneshot::Sender<Result<Reply, Refusal>>,
        reads: &mut mpsc::Receiver<Envelope>,
    ) -> Result<Reply, Refusal> {
        self.may_act()?;
        let found = permit(&self.instrument, property, to).map_err(Refusal::Fault)?;
        let (Setting::Number(value), true) = (to, found.slew.is_some()) else {
            return self.set_once(property, to).await.map(Reply::Granted);
        };
        let found = found.clone();
        let from = self.whereabouts(property).await?;
        let (stairs, pause) = stairs(&found, from, value);
        let mut granted = Granted {
            asked: to,
            granted: Setting::Number(from),
        };
        for stair in stairs {
            let until = self.free.get(property).copied();
            loop {
                match self.pause(until, Some(caller), Some(reads)).await {
                    Pause::Over => break,
                    Pause::Signal | Pause::Abandoned => return Err(Refusal::Leaving),
                    Pause::Read(envelope) => self.serve_read(envelope).await,
                }
            }
            granted = self.set_once(property, Setting::Number(stair)).await?;
            self.free
                .insert(property.to_owned(), Instant::now() + pause);
        }
        granted.asked = to;
        Ok(Reply::Granted(granted))
    }

    async fn serve_read(&mut self, envelope: Envelope) {
        let answer = self.other(&envelope.request).await;
        let _ = envelope.reply.send(answer);
    }

    /// Where a property stands; read back where that is not known for certain.
    async fn whereabouts(&mut self, property: &str) -> Result<f64, Refusal> {
        if let Some(Standing::At(value)) = self.standing.get(property) {
            return Ok(*value);
        }
        match self
            .exchange(&Request::Readback(property.to_owned()))
            .await?
        {
            Reply::Setting(Setting::Number(value)) if value.is_finite() => {
                self.standing
                    .insert(property.to_owned(), Standing::At(value));
                Ok(value)
            }
            other => Err(Refusal::Fault(
                Fault::new(
                    "F0321",
                    format!(
                        "`{}` reads back {property} as {other:?}, not as a number",
                        self.instrument.name
                    ),
                )
                .of(&self.instrument.name),
            )),
        }
    }

    /// One setpoint, one exchange.
    async fn set_once(&mut self, property: &str, to: Setting) -> Result<Granted<Setting>, Refusal> {
        // Until the outcome is known it may stand anywhere between the last and this one.
        self.standing.insert(property.to_owned(), Standing::Unknown);
        let request = Request::Set(property.to_owned(), to);
        let Reply::Granted(granted) = self.exchange(&request).await? else {
            return Err(Refusal::Fault(self.defect("a set was not granted")));
        };
        if let Setting::Number(value) = granted.granted {
            self.standing
                .insert(property.to_owned(), Standing::At(value));
            judge_readback(&self.instrument, property, value).map_err(Refusal::Fault)?;
        }
        Ok(granted)
    }

    /// One request to the driver. A wait ends with the safe signal, any other exchange at its own end.
    async fn exchange(&mut self, request: &Request) -> Result<Reply, Refusal> {
        let acted = self.acted;
        let performed = catch(self.driver.perform(request));
        let outcome = if request.only_waits() {
            tokio::select! {
                biased;
                () = signalled(&mut self.signal, acted) => return Err(Refusal::Leaving),
                outcome = performed => outcome,
            }
        } else {
            performed.await
        };
        match outcome {
            Ok(Ok(reply)) => Ok(reply),
            Ok(Err(error)) => Err(self.recover(error).await),
            Err(panic) => {
                self.standing.clear();
                Err(Refusal::Fault(self.defect(&panic)))
            }
        }
    }

    /// What becomes of a driver's error: where the link is to blame, dialling again may cure it.
    async fn recover(&mut self, error: DriverError) -> Refusal {
        if matches!(error, DriverError::MissedTrigger { .. }) {
            return Refusal::MissedTrigger;
        }
        if !(error.link_lost() || error.outcome_unknown()) {
            return Refusal::Fault(error.into());
        }
        self.standing.clear();
        let until = Instant::now() + RECONNECT_WITHIN;
        for pause in RECONNECT_AFTER {
            if !matches!(
                self.pause(Some(Instant::now() + pause), None, None).await,
                Pause::Over
            ) {
                return Refusal::Leaving;
            }
            let reconnecting = catch(self.driver.perform(&Request::Reconnect));
            let Ok(reconnected) = timeout_at(until, reconnecting).await else {
                break;
            };
            match reconnected {
                Ok(Ok(_)) => return Refusal::Reconnected,
                Ok(Err(
                    worse @ (DriverError::WrongIdentity { .. } | DriverError::PowerCycled { .. }),
                )) => {
                    return Refusal::Fault(worse.into());
                }
                Ok(Err(_)) => {}
                Err(panic) => return Refusal::Fault(self.defect(&panic)),
            }
        }
        Refusal::Fault(error.into())
    }

    /// Waits until then; the signal, a caller gone away, or a reading to be served ends it before.
    async fn pause(
        &mut self,
        until: Option<Instant>,
        caller: Option<&mut oneshot::Sender<Result<Reply, Refusal>>>,
        reads: Option<&mut mpsc::Receiver<Envelope>>,
    ) -> Pause {
        let acted = self.acted;
        let over = async {
            match until {
                Some(until) => tokio::time::sleep_until(until).await,
                None => std::future::ready(()).await,
            }
        };
        let abandoned = async {
            match caller {
                Some(caller) => caller.closed().await,
                None => std::future::pending().await,
            }
        };
        let read = async {
            match reads {
                Some(reads) => reads.recv().await,
                None => std::future::pending().await,
            }
        };
        tokio::select! {
            biased;
            () = signalled(&mut self.signal, acted) => Pause::Signal,
            () = abandoned => Pause::Abandoned,
            Some(envelope) = read => Pause::Read(envelope),
            () = over => Pause::Over,
        }
    }

    /// After the instrument was left, nothing energises it again.
    fn may_act(&self) -> Result<(), Refusal> {
        if self.is_left {
            Err(Refusal::Leaving)
        } else {
            Ok(())
        }
    }

    fn defect(&self, panic: &str) -> Fault {
        let name = &self.instrument.name;
        Fault::new("F0322", format!("the driver of `{name}` panicked: {panic}"))
            .help("this is a defect of the program; its log says where")
            .of(name)
    }
}

/// Waits for a signal that was not acted upon yet.
async fn signalled(signal: &mut watch::Receiver<Option<Signal>>, acted: u64) {
    let newer = |signal: &Option<Signal>| signal.is_some_and(|signal| signal.number > acted);
    if signal.wait_for(newer).await.is_err() {
        // No mailbox is left that could signal; the empty mailbox ends the task.
        std::future::pending::<()>().await;
    }
}
