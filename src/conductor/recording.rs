//! How a record is taken: arm, confirm, start, await completion; and how it is read out.

use std::collections::BTreeSet;
use std::sync::Arc;
use std::time::Duration;

use darkline_core::bench::{AxisCalibration, AxisKind, Coupling, Starts};
use darkline_core::diagnostic::Fault;
use darkline_core::entry::EntryKind;
use darkline_core::itinerary::{GuardSource, Itinerary, SweepPlan};
use darkline_core::sequencer::{AcquisitionOrder, Outcome, Summary, Trouble};
use darkline_core::trace::{Acquisition, ChannelData, Direction, SweepAxis};
use darkline_drivers::role::{CapturePlan, ChannelPlan, FrequencySweep, Granted, TriggerSource};

use super::actions::{Worked, ask};
use super::works::Beside;
use crate::bench::OpenBench;
use crate::instrument::Mailbox;
use crate::instrument::driver::{Reply, Request};
use crate::seams::Clock;

/// A record may take so much longer than planned, and this part more, before its trigger was missed.
const GRACE: (Duration, f64) = (Duration::from_secs(1), 0.5);

/// How the records of a run are taken.
#[derive(Debug)]
pub struct Recording {
    digitizer: String,
    /// The generator that sweeps; `None` for a stepped probe.
    generator: Option<String>,
    sweep: Option<SweepPlan>,
    duration: f64,
    /// Time from the sweep's start to sample 0, s.
    delay: f64,
    /// As granted, s.
    interval: f64,
    /// As granted.
    samples: u32,
    trigger: TriggerSource,
    /// What the sequence calls a signal, and the digitizer's input.
    record: Vec<(String, String)>,
    /// Signals that are guarded: their clipping is the guards' affair.
    guarded: BTreeSet<String>,
}

/// A record that waits in the digitizer.
#[derive(Debug, Clone)]
pub struct Taken {
    axis: SweepAxis,
    begun: i64,
}

/// Configures the digitizer for the run; says what was granted. `None` where nothing is recorded.
///
/// # Errors
/// Those of the digitizer.
pub async fn configure(
    bench: &OpenBench,
    itinerary: &Itinerary,
) -> Result<Option<(Recording, Vec<EntryKind>)>, Fault> {
    let Some(mut recording) = describe(bench, itinerary) else {
        return Ok(None);
    };
    let plan = capture_plan(bench, &recording);
    let digitizer = bench.mailbox(&recording.digitizer)?;
    let reply = ask(digitizer, Request::Configure(plan)).await;
    let granted = match reply {
        Ok(Reply::Capture(granted)) => granted,
        Ok(_) => return Ok(None),
        Err(Trouble::Fault(fault)) => return Err(fault),
        Err(_) => {
            let name = digitizer.name();
            let fault = Fault::new(
                "F0350",
                format!("`{name}` was lost while it was configured"),
            )
            .help("check its power and cable")
            .of(name);
            return Err(fault);
        }
    };
    recording.interval = granted.granted.interval;
    recording.samples = granted.granted.samples;
    let entries = granted_entries(digitizer.name(), &granted);
    Ok(Some((recording, entries)))
}

fn describe(bench: &OpenBench, itinerary: &Itinerary) -> Option<Recording> {
    let declared = bench.bench();
    let guarded = itinerary
        .guards()
        .iter()
        .filter_map(|guard| match &guard.source {
            GuardSource::Signal(name) => Some(name.clone()),
            GuardSource::Quantity(_) => None,
        })
        .collect();
    if let Some(sweep) = itinerary.sweep() {
        let trigger = match declared.timing.as_ref().map(|timing| &timing.starts) {
            Some(Starts::Bus) => TriggerSource::Bus,
            _ => TriggerSource::External,
        };
        return Some(Recording {
            digitizer: sweep.digitizer.clone(),
            generator: Some(sweep.quantity.instrument().to_owned()),
            duration: sweep.duration,
            delay: sweep.delay,
            interval: sweep.duration / f64::from(sweep.samples.max(1)),
            samples: sweep.samples,
            trigger,
            record: sweep.record.clone(),
            guarded,
            sweep: Some(sweep.clone()),
        });
    }
    let dwell = itinerary.dwell()?;
    Some(Recording {
        digitizer: dwell.digitizer.clone(),
        generator: None,
        sweep: None,
        duration: dwell.duration,
        delay: 0.0,
        interval: dwell.duration / f64::from(dwell.samples.max(1)),
        samples: dwell.samples,
        // Not at once when armed: then nothing would show that it was armed at all.
        trigger: TriggerSource::Bus,
        record: dwell.record.clone(),
        guarded,
    })
}

fn capture_plan(bench: &OpenBench, recording: &Recording) -> CapturePlan {
    let inputs = bench
        .bench()
        .instruments
        .get(&recording.digitizer)
        .map(|declared| &declared.channels);
    let channel = |(_, input): &(String, String)| {
        let declared = inputs.and_then(|inputs| inputs.get(input));
        ChannelPlan {
            channel: input.clone(),
            range: declared.map(|input| input.range),
            offset: declared.map(|input| input.offset),
            coupling: declared.map(|input| match input.coupling {
                Coupling::Dc => "DC".to_owned(),
                Coupling::Ac => "AC".to_owned(),
            }),
            bandwidth: declared.and_then(|input| input.bandwidth),
        }
    };
    CapturePlan {
        channels: recording.record.iter().map(channel).collect(),
        samples: recording.samples,
        interval: recording.interval,
        delay: 0.0,
        trigger: recording.trigger,
    }
}

fn granted_entries(instrument: &str, granted: &Granted<CapturePlan>) -> Vec<EntryKind> {
    let entry = |setting: String, asked: f64, granted: f64, unit: &str| EntryKind::Granted {
        instrument: instrument.to_owned(),
        setting,
        asked,
        granted,
        unit: unit.to_owned(),
    };
    let (plan, real) = (&granted.asked, &granted.granted);
    let mut entries = vec![
        entry("interval".to_owned(), plan.interval, real.interval, "s"),
        entry(
            "samples".to_owned(),
            f64::from(plan.samples),
            f64::from(real.samples),
            "",
        ),
    ];
    for (plan, real) in plan.channels.iter().zip(&real.channels) {
        let settings = [
            ("range", plan.range, real.range, "V"),
            ("offset", plan.offset, real.offset, "V"),
            ("bandwidth", plan.bandwidth, real.bandwidth, "Hz"),
        ];
        for (setting, asked, granted, unit) in settings {
            if let (Some(asked), Some(granted)) = (asked, granted)
                && asked.is_finite()
                && granted.is_finite()
            {
                let setting = format!("{}.{setting}", plan.channel);
                entries.push(entry(setting, asked, granted, unit));
            }
        }
    }
    entries
}

/// Takes one record.
pub async fn acquire(
    bench: Arc<OpenBench>,
    recording: Option<Arc<Recording>>,
    order: AcquisitionOrder,
    clock: Arc<dyn Clock>,
) -> Worked {
    let Some(recording) = recording else {
        return (Err(Trouble::Fault(not_configured())), Beside::Nothing);
    };
    match take(&bench, &recording, &order, &*clock).await {
        Ok(taken) => (Ok(Outcome::Acquired), Beside::Taken(order, taken)),
        Err(trouble) => {
            // Whatever went wrong, the digitizer must not go on waiting for its trigger.
            if may_still_wait(&trouble, &recording.digitizer)
                && let Ok(digitizer) = bench.mailbox(&recording.digitizer)
            {
                let _ = digitizer.ask(Request::Abort).await;
            }
            (Err(trouble), Beside::Nothing)
        }
    }
}

/// Whether the digitizer may be armed after this, and can be told to end it.
fn may_still_wait(trouble: &Trouble, digitizer: &str) -> bool {
    match trouble {
        Trouble::MissedTrigger => false,
        Trouble::Reconnected(_) => true,
        Trouble::Fault(fault) => fault.instrument.as_deref() != Some(digitizer),
    }
}

async fn take(
    bench: &OpenBench,
    recording: &Recording,
    order: &AcquisitionOrder,
    clock: &dyn Clock,
) -> Result<Taken, Trouble> {
    let digitizer = bench
        .mailbox(&recording.digitizer)
        .map_err(Trouble::Fault)?;
    match (&recording.generator, &recording.sweep) {
        (Some(generator), Some(sweep)) => {
            let generator = bench.mailbox(generator).map_err(Trouble::Fault)?;
            take_sweep((digitizer, generator), recording, sweep, order, clock).await
        }
        _ => take_dwell(digitizer, recording, order, clock).await,
    }
}

async fn take_sweep(
    (digitizer, generator): (&Mailbox, &Mailbox),
    recording: &Recording,
    plan: &SweepPlan,
    order: &AcquisitionOrder,
    clock: &dyn Clock,
) -> Result<Taken, Trouble> {
    let centre = order.centre.unwrap_or(plan.centre);
    let sweep = FrequencySweep {
        start: centre - plan.span / 2.0,
        stop: centre + plan.span / 2.0,
        duration: plan.duration,
        steps: matches!(plan.axis, AxisKind::SteppedList).then_some(recording.samples.max(2)),
        direction: order.direction,
    };
    let (prepared, armed) = tokio::join!(
        ask(generator, Request::PrepareSweep(sweep)),
        ask(digitizer, Request::Arm),
    );
    armed?;
    let Reply::Sweep(granted) = prepared? else {
        return Err(Trouble::Fault(not_configured()));
    };
    let begun = clock.utc();
    if recording.trigger == TriggerSource::Bus {
        ask(digitizer, Request::Trigger).await?;
    }
    ask(generator, Request::StartSweep).await?;
    let within = patience(recording);
    let (complete, swept) = tokio::join!(
        ask(digitizer, Request::Complete(within)),
        ask(generator, Request::AwaitSweep(within)),
    );
    complete?;
    swept?;
    let axis = axis_of(&granted.granted, plan.axis, recording);
    Ok(Taken { axis, begun })
}

async fn take_dwell(
    digitizer: &Mailbox,
    recording: &Recording,
    order: &AcquisitionOrder,
    clock: &dyn Clock,
) -> Result<Taken, Trouble> {
    ask(digitizer, Request::Arm).await?;
    let begun = clock.utc();
    ask(digitizer, Request::Trigger).await?;
    ask(digitizer, Request::Complete(patience(recording))).await?;
    let frequency = order.centre.unwrap_or(0.0);
    let axis = SweepAxis {
        start: frequency,
        stop: frequency,
        duration: recording.duration,
        steps: None,
        delay: 0.0,
        interval: recording.interval,
        samples: recording.samples,
    };
    Ok(Taken { axis, begun })
}

fn patience(recording: &Recording) -> Duration {
    let record = recording.interval * f64::from(recording.samples);
    let planned = record.max(recording.duration) + recording.delay.max(0.0);
    Duration::try_from_secs_f64(planned * (1.0 + GRACE.1)).unwrap_or_default() + GRACE.0
}

/// The axis as the generator granted it, corrected by its calibration where it has one.
fn axis_of(granted: &FrequencySweep, kind: AxisKind, recording: &Recording) -> SweepAxis {
    let centre = (granted.start + granted.stop) / 2.0;
    let truth = |frequency: f64| match kind {
        AxisKind::SteppedList | AxisKind::PhaseContinuous => frequency,
        AxisKind::FmRamp(calibration) | AxisKind::FreeRunning(calibration) => {
            let AxisCalibration { gain, offset, .. } = calibration;
            centre + offset + gain * (frequency - centre)
        }
    };
    let (start, stop) = match granted.direction {
        Direction::Up => (granted.start, granted.stop),
        Direction::Down => (granted.stop, granted.start),
    };
    SweepAxis {
        start: truth(start),
        stop: truth(stop),
        duration: granted.duration,
        steps: granted.steps,
        delay: recording.delay,
        interval: recording.interval,
        samples: recording.samples,
    }
}

/// Reads the last record out of the digitizer.
pub async fn transfer(
    bench: Arc<OpenBench>,
    recording: Option<Arc<Recording>>,
    order: AcquisitionOrder,
    taken: Option<(AcquisitionOrder, Taken)>,
) -> Worked {
    let (Some(recording), Some((_, taken))) = (recording, taken) else {
        return (Err(Trouble::Fault(not_configured())), Beside::Nothing);
    };
    match fetch(&bench, &recording).await {
        Ok(channels) => {
            let summary = summarise(&channels, &recording.guarded);
            let acquisition = Acquisition {
                point: order.point,
                direction: order.direction,
                repeat: order.repeat,
                axis: taken.axis,
                begun: taken.begun,
                channels,
            };
            (
                Ok(Outcome::Transferred(summary)),
                Beside::Samples(order.visit, Box::new(acquisition)),
            )
        }
        Err(trouble) => (Err(trouble), Beside::Nothing),
    }
}

async fn fetch(bench: &OpenBench, recording: &Recording) -> Result<Vec<ChannelData>, Trouble> {
    let digitizer = bench
        .mailbox(&recording.digitizer)
        .map_err(Trouble::Fault)?;
    let mut channels = Vec::with_capacity(recording.record.len());
    for (signal, input) in &recording.record {
        let Reply::Channel(mut channel) = ask(digitizer, Request::Fetch(input.clone())).await?
        else {
            return Err(Trouble::Fault(not_configured()));
        };
        if channel.codes.len() != recording.samples as usize {
            return Err(Trouble::Fault(miscounted(recording, signal, &channel)));
        }
        channel.name.clone_from(signal);
        channels.push(channel);
    }
    Ok(channels)
}

fn miscounted(recording: &Recording, signal: &str, channel: &ChannelData) -> Fault {
    let digitizer = &recording.digitizer;
    Fault::new(
        "F0351",
        format!(
            "`{digitizer}` delivered {} samples of {signal}, not {}",
            channel.codes.len(),
            recording.samples
        ),
    )
    .help("check its record length, and `format` in its command map")
    .of(digitizer)
}

fn summarise(channels: &[ChannelData], guarded: &BTreeSet<String>) -> Summary {
    let mut summary = Summary::default();
    for channel in channels {
        if guarded.contains(&channel.name) {
            let (lowest, highest) = channel.extremes().unwrap_or((f64::NAN, f64::NAN));
            summary
                .extremes
                .push((channel.name.clone(), lowest, highest));
        } else {
            summary.clipped = summary.clipped.saturating_add(channel.clipped);
        }
    }
    summary
}

fn not_configured() -> Fault {
    Fault::new("F0352", "a record was asked for that was never configured")
        .help("this is a defect of the program; its log says where")
}
