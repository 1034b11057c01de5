//! The mock bench: six devices over one world behind one lock, the wire between them, faults in time, and the links
//! that are served. All state changes happen under the lock and in the order of time; what waits, waits outside.

use std::io;
use std::sync::{Arc, Mutex, MutexGuard, PoisonError};
use std::time::Duration;

use tokio::io::DuplexStream;
use tokio::sync::{Notify, watch};
use tokio::time::Instant;

use crate::chance;
use crate::device::{Device, Exchange, Progress};
use crate::endpoint;
use crate::fault::{Fault, TimedFault};
use crate::history::History;
use crate::instrument::digitizer::{Digitizer, DigitizerOptions};
use crate::instrument::generator::Generator;
use crate::instrument::monitor::Monitor;
use crate::instrument::oven::Oven;
use crate::instrument::supply::Supply;
use crate::instrument::{Effect, InstrumentFault, Moment};
use crate::scpi::ErrorCode;
use crate::world::{Beam, Fault as WorldFault, World};

/// The instruments in the order of their numbers.
pub const NAMES: [&str; 6] = ["probe", "control", "coil", "scope", "oven", "lock"];
const ROLES: [&str; 6] = [
    "rf-generator",
    "rf-generator",
    "current-supply",
    "digitizer",
    "temperature-controller",
    "monitor",
];
/// Baud rate where an instrument is on a serial line.
const BAUD: [Option<u32>; 6] = [None, None, Some(115_200), None, Some(9600), None];
const SCOPE: usize = 3;
/// Faults waiting for their time.
const MOST_SCHEDULED: usize = 1024;
const PIPE: usize = 64 * 1024;

/// What a bench is built with beside its world.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct Options {
    /// The digitizer's trigger circuit.
    pub digitizer: DigitizerOptions,
}

/// Where an instrument is reached.
#[derive(Clone, Debug, PartialEq, Eq, serde::Serialize)]
pub struct Endpoint {
    /// Instrument.
    pub name: &'static str,
    /// Its role on the bench.
    pub role: &'static str,
    /// `tcp://127.0.0.1:PORT` or `serial:///dev/pts/N?baud=RATE`.
    pub address: String,
}

/// The mock bench. Clones are the same bench; links and listeners end with the last of them.
#[derive(Clone)]
pub struct MockBench {
    shared: Arc<Shared>,
    alive: Arc<watch::Sender<()>>,
}

/// What serving tasks share.
pub(crate) struct Shared {
    start: Instant,
    inside: Mutex<Inside>,
    /// Told after every exchange: what a waiting one waits for may have come.
    pub changed: Notify,
    cuts: [watch::Sender<u64>; 6],
}

struct Inside {
    world: World,
    devices: Vec<Device>,
    effects: Vec<Effect>,
    schedule: Vec<(f64, Fault)>,
    links: [LinkFaults; 6],
    latest: f64,
}

/// Faults of a link.
#[derive(Clone, Copy, Debug, Default)]
struct LinkFaults {
    silent: bool,
    slow: Option<(f64, f64)>,
    torn: bool,
    unreachable: bool,
    replies: u64,
}

/// What is to be done with a finished exchange.
pub(crate) struct Reply {
    pub bytes: Vec<u8>,
    pub delay: Option<Duration>,
    pub torn: bool,
}

/// How far an exchange came.
pub(crate) enum Step {
    Done(Option<Reply>),
    /// Until that moment at the latest, where one is known.
    Blocked(Option<Instant>),
}

/// Ends a link or listener: by a fault, or with the bench.
#[derive(Clone)]
pub(crate) struct Leash {
    cut: watch::Receiver<u64>,
    alive: watch::Receiver<()>,
}

impl Leash {
    /// Resolves when the link has to end. `true`: with the bench.
    pub async fn pulled(&mut self) -> bool {
        tokio::select! {
            _ = self.cut.changed() => false,
            _ = self.alive.changed() => true,
        }
    }
}

impl MockBench {
    /// A bench whose world's time zero is `start`. Spawns nothing yet.
    pub fn new(world: World, start: Instant) -> MockBench {
        MockBench::with_options(world, start, Options::default())
    }

    /// The same, with a digitizer of one's own.
    pub fn with_options(world: World, start: Instant, options: Options) -> MockBench {
        let temperature = world.truth().cell.temperature;
        let devices = vec![
            Device::new(Box::new(Generator::new(Beam::Probe, 1001))),
            Device::new(Box::new(Generator::new(Beam::Control, 1002))),
            Device::new(Box::new(Supply::new())),
            Device::new(Box::new(Digitizer::new(options.digitizer))),
            Device::new(Box::new(Oven::holding(temperature))),
            Device::new(Box::new(Monitor)),
        ];
        let inside = Inside {
            world,
            devices,
            effects: Vec::new(),
            schedule: Vec::new(),
            links: Default::default(),
            latest: 0.0,
        };
        let shared = Shared {
            start,
            inside: Mutex::new(inside),
            changed: Notify::new(),
            cuts: std::array::from_fn(|_| watch::channel(0).0),
        };
        MockBench {
            shared: Arc::new(shared),
            alive: Arc::new(watch::channel(()).0),
        }
    }

    /// The instruments.
    pub fn names() -> [&'static str; 6] {
        NAMES
    }

    /// The role of an instrument; `None` for an unknown name.
    pub fn role(name: &str) -> Option<&'static str> {
        number(name).map(|device| ROLES[device])
    }

    /// An in-memory link, served by a task of the present runtime; works under a paused clock. `None` for an unknown
    /// name and for an instrument that is unreachable.
    pub fn connect(&self, name: &str) -> Option<DuplexStream> {
        let device = number(name)?;
        if self.shared.is_unreachable(device) {
            return None;
        }
        let (near, far) = tokio::io::duplex(PIPE);
        let serving = endpoint::serve_stream(self.shared.clone(), device, far, self.leash(device));
        tokio::spawn(serving);
        Some(near)
    }

    /// Serves every instrument: serial ones on a pseudo-terminal each, the others on a free port of the loopback.
    pub async fn serve(&self) -> io::Result<Vec<Endpoint>> {
        let mut endpoints = Vec::with_capacity(NAMES.len());
        for (device, name) in NAMES.into_iter().enumerate() {
            let address = match BAUD[device] {
                Some(baud) => {
                    let path = endpoint::serve_serial(
                        self.shared.clone(),
                        device,
                        baud,
                        self.leash(device),
                    )?;
                    format!("serial://{path}?baud={baud}")
                }
                None => {
                    let port = endpoint::serve_tcp(self.shared.clone(), device, self.leash(device))
                        .await?;
                    format!("tcp://127.0.0.1:{port}")
                }
            };
            endpoints.push(Endpoint {
                name,
                role: ROLES[device],
                address,
            });
        }
        Ok(endpoints)
    }

    /// What the instruments were told and sent until now.
    pub fn history(&self) -> History {
        let inside = self.shared.lock();
        let instruments = NAMES
            .into_iter()
            .zip(inside.devices.iter().map(|device| device.history.clone()))
            .collect();
        History { instruments }
    }

    /// Lets a fault happen now.
    pub fn fault(&self, fault: Fault) {
        let now = self.shared.seconds();
        let mut inside = self.shared.lock();
        inside.advance(now, &self.shared.cuts);
        inside.apply(now, &fault, &self.shared.cuts);
        drop(inside);
        self.shared.changed.notify_waiters();
    }

    /// Lets a fault happen at its time; at most 1024 wait, further ones are dropped.
    pub fn schedule(&self, timed: TimedFault) {
        match timed.at {
            None => self.fault(timed.fault),
            Some(at) => self.shared.lock().schedule(at, timed.fault),
        }
    }

    /// Looks into the world or changes it, at the bench's present time.
    pub fn with_world<T>(&self, look: impl FnOnce(f64, &mut World) -> T) -> T {
        let now = self.shared.seconds();
        let mut inside = self.shared.lock();
        inside.advance(now, &self.shared.cuts);
        look(now, &mut inside.world)
    }

    fn leash(&self, device: usize) -> Leash {
        Leash {
            cut: self.shared.cuts[device].subscribe(),
            alive: self.alive.subscribe(),
        }
    }
}

fn number(name: &str) -> Option<usize> {
    NAMES.iter().position(|known| *known == name)
}

impl Shared {
    fn lock(&self) -> MutexGuard<'_, Inside> {
        // A panic under the lock is a defect that a test shows anyway; the bench goes on for the others.
        self.inside.lock().unwrap_or_else(PoisonError::into_inner)
    }

    fn seconds(&self) -> f64 {
        Instant::now()
            .saturating_duration_since(self.start)
            .as_secs_f64()
    }

    fn instant(&self, seconds: f64) -> Instant {
        // A microsecond more, so that rounding never wakes the waiting one before its time.
        self.start
            + Duration::try_from_secs_f64(seconds + 1e-6).unwrap_or(Duration::from_secs(86_400))
    }

    pub fn is_unreachable(&self, device: usize) -> bool {
        self.lock().links[device].unreachable
    }

    /// Whether a message arrives at all.
    pub fn hears(&self, device: usize) -> bool {
        let now = self.seconds();
        let mut inside = self.lock();
        inside.advance(now, &self.cuts);
        !inside.links[device].silent && !inside.links[device].unreachable
    }

    pub fn begin(&self, device: usize, message: Vec<u8>) -> Exchange {
        self.lock().devices[device].begin(message)
    }

    pub fn fail(&self, device: usize, code: ErrorCode) {
        let now = self.seconds();
        self.lock().devices[device].fail(now, code);
    }

    /// Carries an exchange on.
    pub fn proceed(&self, device: usize, exchange: &mut Exchange) -> Step {
        let mut inside = self.lock();
        let now = self.seconds().max(inside.latest);
        inside.advance(now, &self.cuts);
        let Inside {
            world,
            devices,
            effects,
            ..
        } = &mut *inside;
        exchange.moved = false;
        let progress = devices[device].proceed(exchange, now, world, effects);
        inside.carry_effects(now);
        let step = match progress {
            Progress::Blocked(crate::instrument::Pending::Until(end)) => {
                Step::Blocked(Some(self.instant(end)))
            }
            Progress::Blocked(_) => Step::Blocked(None),
            Progress::Done(bytes) => {
                Step::Done(bytes.and_then(|bytes| inside.reply(device, bytes)))
            }
        };
        drop(inside);
        // A look that changed nothing wakes nobody, or two that wait would wake each other for ever.
        if exchange.moved {
            self.changed.notify_waiters();
        }
        step
    }
}

impl Inside {
    /// Brings everything up to the moment, in the order of time.
    fn advance(&mut self, now: f64, cuts: &[watch::Sender<u64>; 6]) {
        self.latest = self.latest.max(now);
        while let Some(place) = self.schedule.iter().position(|(at, _)| *at <= now) {
            let (at, fault) = self.schedule.remove(place);
            self.settle(at);
            self.apply(at, &fault, cuts);
        }
        self.settle(now);
    }

    fn settle(&mut self, now: f64) {
        let Inside {
            world,
            devices,
            effects,
            ..
        } = self;
        devices
            .iter_mut()
            .for_each(|device| device.advance(now, world, effects));
    }

    /// The wire `probe.sync -> scope.ext`.
    fn carry_effects(&mut self, now: f64) {
        let effects = std::mem::take(&mut self.effects);
        for effect in effects {
            if effect == Effect::Sync(Beam::Probe) {
                let Inside {
                    world,
                    devices,
                    effects,
                    ..
                } = self;
                let Device {
                    instrument,
                    history,
                    ..
                } = &mut devices[SCOPE];
                instrument.external_trigger(&mut Moment {
                    now,
                    world,
                    effects,
                    history,
                });
                devices[SCOPE].refresh(now, world, effects);
            }
        }
    }

    fn reply(&mut self, device: usize, bytes: Vec<u8>) -> Option<Reply> {
        let links = &mut self.links[device];
        links.replies += 1;
        let seed = self.world.truth().seed;
        let delay = links.slow.and_then(|(probability, delay)| {
            let late = chance::uniform(seed, NAMES[device], links.replies) < probability;
            late.then(|| Duration::try_from_secs_f64(delay).unwrap_or_default())
        });
        let torn = std::mem::take(&mut links.torn);
        (!links.silent).then_some(Reply { bytes, delay, torn })
    }

    fn schedule(&mut self, at: f64, fault: Fault) {
        if self.schedule.len() < MOST_SCHEDULED {
            let place = self.schedule.partition_point(|(other, _)| *other <= at);
            self.schedule.insert(place, (at, fault));
        }
    }

    fn apply(&mut self, now: f64, fault: &Fault, cuts: &[watch::Sender<u64>; 6]) {
        match fault {
            Fault::World(fault, on) => return self.world.set_fault(now, *fault, *on),
            Fault::LockLost { duration } => {
                self.world.set_fault(now, WorldFault::LockLost, true);
                return self.schedule(now + duration, Fault::World(WorldFault::LockLost, false));
            }
            Fault::MissTrigger(count) => {
                return self.devices[SCOPE]
                    .instrument
                    .set_fault(&InstrumentFault::MissTriggers(*count));
            }
            _ => {}
        }
        if let Some(device) = named(fault).and_then(number) {
            self.apply_to(now, device, fault, cuts);
        }
    }

    fn apply_to(&mut self, now: f64, device: usize, fault: &Fault, cuts: &[watch::Sender<u64>; 6]) {
        let cut = || cuts[device].send_modify(|count| *count += 1);
        let links = &mut self.links[device];
        match fault {
            Fault::Silent(_) => links.silent = true,
            Fault::SlowReply {
                probability, delay, ..
            } => links.slow = Some((*probability, *delay)),
            Fault::TornReply(_) => links.torn = true,
            Fault::WrongIdentity(_) => self.devices[device].wrong_identity = true,
            Fault::PowerCycle(_) => {
                let Inside {
                    world,
                    devices,
                    effects,
                    ..
                } = self;
                devices[device].power_cycle(now, world, effects);
            }
            Fault::Disconnect(_) => cut(),
            Fault::Unreachable(_) => {
                links.unreachable = true;
                cut();
            }
            Fault::ReadbackOffset { amperes, .. } => {
                self.devices[device]
                    .instrument
                    .set_fault(&InstrumentFault::ReadbackOffset(*amperes));
            }
            Fault::Clear(_) => {
                *links = LinkFaults {
                    replies: links.replies,
                    ..LinkFaults::default()
                };
                self.devices[device].wrong_identity = false;
                self.devices[device]
                    .instrument
                    .set_fault(&InstrumentFault::Clear);
            }
            Fault::MissTrigger(_) | Fault::LockLost { .. } | Fault::World(..) => {}
        }
    }
}

fn named(fault: &Fault) -> Option<&str> {
    match fault {
        Fault::Silent(name)
        | Fault::SlowReply { name, .. }
        | Fault::TornReply(name)
        | Fault::WrongIdentity(name)
        | Fault::PowerCycle(name)
        | Fault::Disconnect(name)
        | Fault::Unreachable(name)
        | Fault::ReadbackOffset { name, .. }
        | Fault::Clear(name) => Some(name),
        Fault::MissTrigger(_) | Fault::LockLost { .. } | Fault::World(..) => None,
    }
}
