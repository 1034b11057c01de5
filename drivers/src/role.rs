//! The role traits: what an instrument is to the bench, whatever its make and language.
//!
//! All numbers are `f64` in SI units (A, Hz, K, V, s), RF level in dBm. A driver asks and reports; it
//! keeps no limits and makes no ramps: those stand in the instrument's mailbox. Every future may be
//! dropped at any await: the driver then makes its link trustworthy again before its next exchange.

use std::future::Future;
use std::time::Duration;

use darkline_core::quantity::Setting;
use darkline_core::trace::{ChannelData, Direction};

use crate::error::DriverError;

/// What came of an exchange.
pub type Outcome<T> = Result<T, DriverError>;

/// What was asked for, and what the instrument says it granted (from a query, never assumed).
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Granted<T = f64> {
    /// As asked.
    pub asked: T,
    /// As read back.
    pub granted: T,
}

/// Who an instrument says it is: the four fields of `*IDN?` (IEEE 488.2, 10.14).
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Identity {
    /// Manufacturer.
    pub maker: String,
    /// Model.
    pub model: String,
    /// Serial number; "0" where the instrument has none.
    pub serial: String,
    /// Firmware level.
    pub firmware: String,
}

/// What every role can do. `property` is the part of a quantity's name after the dot: `current`.
pub trait Role: Send {
    /// The identity found when the link was opened.
    fn identity(&self) -> &Identity;

    /// Sets a property, reads it back, and reads the error queue and the power-on bit.
    ///
    /// # Errors
    /// Where [`DriverError::outcome_unknown`] holds, the property may be anywhere between its last
    /// value and `to`: read it back before going on.
    fn set(
        &mut self,
        property: &str,
        to: Setting,
    ) -> impl Future<Output = Outcome<Granted<Setting>>> + Send;

    /// What the instrument says the property is set to.
    fn readback(&mut self, property: &str) -> impl Future<Output = Outcome<Setting>> + Send;

    /// What the instrument measures of the property; an error where it measures nothing.
    fn measure(&mut self, property: &str) -> impl Future<Output = Outcome<f64>> + Send;

    /// Whether the map has a measurement of the property.
    fn measures(&self, property: &str) -> bool;

    /// The finest step of the property's readback, as the map declares it; 0 where it does not say.
    fn resolution(&self, property: &str) -> f64;

    /// Reads the error queue to empty and the power-on bit; any finding is an error.
    fn check(&mut self) -> impl Future<Output = Outcome<()>> + Send;

    /// Drops the link, dials again and verifies the identity *and* every number set before.
    fn reconnect(&mut self) -> impl Future<Output = Outcome<()>> + Send;

    /// Gives the front panel back and closes the link. Changes no setpoint.
    fn leave(&mut self) -> impl Future<Output = Outcome<()>> + Send;
}

/// A sweep that a generator makes by itself: `start` and `stop` in Hz with `start < stop`.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct FrequencySweep {
    /// Lower end in Hz.
    pub start: f64,
    /// Upper end in Hz.
    pub stop: f64,
    /// Time of one sweep in s.
    pub duration: f64,
    /// Number of steps; `None` for a phase-continuous ramp.
    pub steps: Option<u32>,
    /// `Down` runs from `stop` to `start`.
    pub direction: Direction,
}

/// `rf-generator`: properties `frequency` (Hz), `power` (dBm), `output` (switch), and sweeps.
pub trait RfGenerator: Role {
    /// Declares the next sweep and enters sweep mode. Only what differs from the last one is sent.
    fn prepare_sweep(
        &mut self,
        sweep: &FrequencySweep,
    ) -> impl Future<Output = Outcome<Granted<FrequencySweep>>> + Send;

    /// Starts the sweep that was prepared, at once.
    fn start_sweep(&mut self) -> impl Future<Output = Outcome<()>> + Send;

    /// Waits for the end of the sweep.
    fn await_sweep(&mut self, within: Duration) -> impl Future<Output = Outcome<()>> + Send;

    /// Ends any sweep and goes back to a fixed frequency (`frequency`, as last set).
    fn end_sweeping(&mut self) -> impl Future<Output = Outcome<()>> + Send;
}

/// `current-supply`: properties `current` (A, signed) and `output` (switch).
pub trait CurrentSupply: Role {}

/// `temperature-controller`: properties `temperature` (K) and `output` (switch).
pub trait TemperatureController: Role {}

/// `monitor`: measures named properties, such as `level` (V); sets nothing.
pub trait Monitor: Role {}

/// What one channel of a digitizer is asked for. `None` leaves it as the instrument stands.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct ChannelPlan {
    /// The digitizer's own name of the channel: `ch1`.
    pub channel: String,
    /// Peak-to-peak range in V.
    pub range: Option<f64>,
    /// Offset, the middle of the range, in V.
    pub offset: Option<f64>,
    /// `DC`, `AC` or `GROUND`.
    pub coupling: Option<String>,
    /// -3 dB bandwidth in Hz; `f64::INFINITY` for the full one.
    pub bandwidth: Option<f64>,
}

/// What starts a record.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum TriggerSource {
    /// The trigger input.
    External,
    /// [`Digitizer::trigger`].
    Bus,
    /// At once when armed.
    Immediate,
}

/// A record to be taken, of one or several channels.
#[derive(Debug, Clone, PartialEq)]
pub struct CapturePlan {
    /// Channels, in the order wanted.
    pub channels: Vec<ChannelPlan>,
    /// Samples per channel.
    pub samples: u32,
    /// Time between samples in s.
    pub interval: f64,
    /// Time from trigger to first sample in s.
    pub delay: f64,
    /// What starts the record.
    pub trigger: TriggerSource,
}

/// `digitizer`. In order: configure, arm, (the trigger comes), complete, fetch each channel.
pub trait Digitizer: Role {
    /// Configures channels and time axis; says what was granted. Only differences are sent.
    fn configure(
        &mut self,
        plan: &CapturePlan,
    ) -> impl Future<Output = Outcome<Granted<CapturePlan>>> + Send;

    /// Arms one record and returns once the instrument is known to wait for its trigger.
    fn arm(&mut self) -> impl Future<Output = Outcome<()>> + Send;

    /// Triggers over the bus.
    fn trigger(&mut self) -> impl Future<Output = Outcome<()>> + Send;

    /// Waits for the record to be complete and checks that exactly one was taken since `arm`.
    ///
    /// # Errors
    /// [`DriverError::MissedTrigger`] where none came: the record was ended, and `arm` may follow.
    fn complete(&mut self, within: Duration) -> impl Future<Output = Outcome<()>> + Send;

    /// One channel of the record, as received, with its scale. Volts = scale x code + offset.
    fn fetch(&mut self, channel: &str) -> impl Future<Output = Outcome<ChannelData>> + Send;

    /// Ends a record that waits or runs.
    fn abort(&mut self) -> impl Future<Output = Outcome<()>> + Send;
}
