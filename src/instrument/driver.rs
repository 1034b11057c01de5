//! One shape for the drivers of all roles, so that a mailbox need not know which it owns.

use std::future::Future;
use std::pin::Pin;
use std::time::Duration;

use darkline_core::bench::Instrument as Declared;
use darkline_core::quantity::Setting;
use darkline_core::trace::ChannelData;
use darkline_drivers::error::DriverError;
use darkline_drivers::instrument::Instrument;
use darkline_drivers::role::{
    CapturePlan, Digitizer, FrequencySweep, Granted, Identity, Outcome, RfGenerator, Role,
};
use darkline_drivers::safe::{Level, Readbacks, make_one_safe};

/// A future on the heap.
pub type Boxed<'a, T> = Pin<Box<dyn Future<Output = T> + Send + 'a>>;

/// What an instrument may be asked to do.
#[derive(Debug, Clone, PartialEq)]
pub enum Request {
    /// Set a property, by its name after the dot.
    Set(String, Setting),
    /// Say what a property is set to.
    Readback(String),
    /// Measure a property.
    Measure(String),
    /// Declare the next sweep.
    PrepareSweep(FrequencySweep),
    /// Start the sweep.
    StartSweep,
    /// Wait for the sweep's end, at most so long.
    AwaitSweep(Duration),
    /// Go back to a fixed frequency.
    EndSweeping,
    /// Configure the record.
    Configure(CapturePlan),
    /// Arm one record.
    Arm,
    /// Trigger the record over the bus.
    Trigger,
    /// Wait for the record, at most so long.
    Complete(Duration),
    /// Read out one channel.
    Fetch(String),
    /// End any record.
    Abort,
    /// Read the error queue.
    Check,
    /// Dial again, and verify identity and settings.
    Reconnect,
    /// Give the front panel back.
    Leave,
}

impl Request {
    /// Whether it only reads, and may be served between the stairs of a ramp.
    pub fn only_reads(&self) -> bool {
        matches!(self, Self::Readback(_) | Self::Measure(_))
    }

    /// Whether it waits for something to happen, and is to be broken off when the bench is left.
    pub fn only_waits(&self) -> bool {
        matches!(self, Self::AwaitSweep(_) | Self::Complete(_))
    }
}

/// What came of a request.
#[derive(Debug, Clone, PartialEq)]
pub enum Reply {
    /// `Set`.
    Granted(Granted<Setting>),
    /// `Readback`.
    Setting(Setting),
    /// `Measure`.
    Measured(f64),
    /// `PrepareSweep`.
    Sweep(Granted<FrequencySweep>),
    /// `Configure`.
    Capture(Box<Granted<CapturePlan>>),
    /// `Fetch`.
    Channel(ChannelData),
    /// Anything else.
    Done,
}

/// A driver of any role.
pub trait Driver: Send + 'static {
    /// The identity found when its link was opened.
    fn identity(&self) -> Identity;

    /// Whether it measures that property.
    fn measures(&self, property: &str) -> bool;

    /// Performs one request.
    fn perform<'a>(&'a mut self, request: &'a Request) -> Boxed<'a, Outcome<Reply>>;

    /// Brings the instrument to rest or makes it safe: ramped from its readback, verified by readback.
    fn make_safe<'a>(
        &'a mut self,
        declared: &'a Declared,
        level: Level,
    ) -> Boxed<'a, Outcome<Readbacks>>;
}

impl Driver for Instrument {
    fn identity(&self) -> Identity {
        Role::identity(self).clone()
    }

    fn measures(&self, property: &str) -> bool {
        Role::measures(self, property)
    }

    fn perform<'a>(&'a mut self, request: &'a Request) -> Boxed<'a, Outcome<Reply>> {
        match self {
            Self::RfGenerator(driver) => Box::pin(perform_generator(driver, request)),
            Self::Digitizer(driver) => Box::pin(perform_digitizer(driver, request)),
            Self::CurrentSupply(driver)
            | Self::TemperatureController(driver)
            | Self::Monitor(driver) => Box::pin(perform_plain(driver, request)),
        }
    }

    fn make_safe<'a>(
        &'a mut self,
        declared: &'a Declared,
        level: Level,
    ) -> Boxed<'a, Outcome<Readbacks>> {
        Box::pin(async move {
            if let Self::Digitizer(digitizer) = self {
                // It energises nothing: a record that goes on running is no reason to worry.
                let _ = digitizer.abort().await;
            }
            make_one_safe(self, declared, level).await
        })
    }
}

async fn perform_generator<T: RfGenerator>(driver: &mut T, request: &Request) -> Outcome<Reply> {
    match request {
        Request::PrepareSweep(sweep) => driver.prepare_sweep(sweep).await.map(Reply::Sweep),
        Request::StartSweep => driver.start_sweep().await.map(done),
        Request::AwaitSweep(within) => driver.await_sweep(*within).await.map(done),
        Request::EndSweeping => driver.end_sweeping().await.map(done),
        other => perform_plain(driver, other).await,
    }
}

async fn perform_digitizer<T: Digitizer>(driver: &mut T, request: &Request) -> Outcome<Reply> {
    match request {
        Request::Configure(plan) => {
            let granted = driver.configure(plan).await?;
            Ok(Reply::Capture(Box::new(granted)))
        }
        Request::Arm => driver.arm().await.map(done),
        Request::Trigger => driver.trigger().await.map(done),
        Request::Complete(within) => driver.complete(*within).await.map(done),
        Request::Fetch(channel) => driver.fetch(channel).await.map(Reply::Channel),
        Request::Abort => driver.abort().await.map(done),
        other => perform_plain(driver, other).await,
    }
}

async fn perform_plain<T: Role>(driver: &mut T, request: &Request) -> Outcome<Reply> {
    match request {
        Request::Set(property, to) => driver.set(property, *to).await.map(Reply::Granted),
        Request::Readback(property) => driver.readback(property).await.map(Reply::Setting),
        Request::Measure(property) => driver.measure(property).await.map(Reply::Measured),
        Request::Check => driver.check().await.map(done),
        Request::Reconnect => driver.reconnect().await.map(done),
        Request::Leave => driver.leave().await.map(done),
        other => Err(DriverError::NotInMap {
            instrument: driver.identity().model.clone(),
            what: format!("{other:?}"),
        }),
    }
}

fn done((): ()) -> Reply {
    Reply::Done
}
