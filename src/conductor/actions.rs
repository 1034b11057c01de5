//! What the conductor does at the instruments, one straight line each: move, read, degauss, leave.

use std::sync::Arc;
use std::time::Duration;

use darkline_core::channel::Role;
use darkline_core::diagnostic::Fault;
use darkline_core::entry::{Coordinate, EntryKind, SafeLevel};
use darkline_core::itinerary::{DegaussPlan, Move};
use darkline_core::quantity::{QuantityName, Setting};
use darkline_core::sequencer::{Outcome, Reading, Trouble};
use darkline_drivers::safe::SafeReport;
use tokio::time::sleep;

use super::works::Beside;
use crate::bench::OpenBench;
use crate::instrument::driver::{Reply, Request};
use crate::instrument::{Mailbox, Refusal};

/// What a work brings back.
pub type Worked = (Result<Outcome, Trouble>, Beside);

/// Sets quantities one after the other, each by way of its approach.
pub async fn go(bench: Arc<OpenBench>, moves: Vec<Move>) -> Worked {
    let mut coordinates = Vec::with_capacity(moves.len());
    for step in moves {
        match set(&bench, &step).await {
            Ok(coordinate) => coordinates.push(coordinate),
            Err(trouble) => return (Err(trouble), Beside::Nothing),
        }
    }
    (Ok(Outcome::Moved(coordinates)), Beside::Nothing)
}

async fn set(bench: &OpenBench, step: &Move) -> Result<Coordinate, Trouble> {
    let mailbox = mailbox(bench, &step.quantity)?;
    let property = step.quantity.property();
    if let Some(approach) = step.approach {
        let to = Setting::Number(approach);
        ask(mailbox, Request::Set(property.to_owned(), to)).await?;
    }
    let request = Request::Set(property.to_owned(), step.setpoint);
    let readback = match ask(mailbox, request).await? {
        Reply::Granted(granted) => granted.granted.number(),
        _ => None,
    };
    Ok(Coordinate {
        quantity: step.quantity.clone(),
        setpoint: step.setpoint,
        readback: readback.filter(|value| value.is_finite()),
        measured: None,
    })
}

/// Reads a quantity.
pub async fn read(bench: Arc<OpenBench>, quantity: QuantityName, what: Reading) -> Worked {
    match read_value(&bench, &quantity, what).await {
        Ok(value) => {
            let beside = match value {
                Some(value) => Beside::Reading(quantity, value),
                None => Beside::Nothing,
            };
            (Ok(Outcome::Read(value)), beside)
        }
        Err(trouble) => (Err(trouble), Beside::Nothing),
    }
}

async fn read_value(
    bench: &OpenBench,
    quantity: &QuantityName,
    what: Reading,
) -> Result<Option<f64>, Trouble> {
    let mailbox = mailbox(bench, quantity)?;
    let property = quantity.property();
    let measures = mailbox.measures(property);
    let by_measurement = match what {
        Reading::Measured => measures || mailbox.role() == Role::Monitor,
        // A controller's readback is its setpoint: what is waited for is the cell.
        Reading::Arrival => measures && mailbox.role() == Role::TemperatureController,
    };
    let request = if by_measurement {
        Request::Measure(property.to_owned())
    } else {
        Request::Readback(property.to_owned())
    };
    let value = match ask(mailbox, request).await? {
        Reply::Measured(value) => Some(value),
        Reply::Setting(Setting::Number(value)) => Some(value),
        Reply::Setting(Setting::Switch(on)) => Some(f64::from(u8::from(on))),
        _ => None,
    };
    Ok(value.filter(|value| value.is_finite()))
}

/// Goes through the alternation.
pub async fn degauss(bench: Arc<OpenBench>, plan: DegaussPlan) -> Worked {
    let work = async {
        let mailbox = mailbox(&bench, &plan.quantity)?;
        let dwell = Duration::try_from_secs_f64(plan.dwell).unwrap_or_default();
        for setpoint in plan.setpoints {
            let to = Setting::Number(setpoint);
            let property = plan.quantity.property().to_owned();
            ask(mailbox, Request::Set(property, to)).await?;
            sleep(dwell).await;
        }
        Ok(Outcome::Degaussed)
    };
    (work.await, Beside::Nothing)
}

/// Leaves the bench at rest or safe.
pub async fn leave(bench: Arc<OpenBench>, level: SafeLevel) -> Worked {
    let report = bench.leave(level).await;
    let EntryKind::LeftSafe {
        reached, unreached, ..
    } = left_safe(level, &report)
    else {
        return (Ok(Outcome::Degaussed), Beside::Nothing);
    };
    (
        Ok(Outcome::Left { reached, unreached }),
        Beside::Left(Box::new(report)),
    )
}

/// A report as an entry.
pub fn left_safe(level: SafeLevel, report: &SafeReport) -> EntryKind {
    let unreached = |(name, why): &(String, String)| {
        Fault::new(
            "F0342",
            format!("`{name}` may not be {}: {why}", word(level)),
        )
        .help("check it by hand, at its front panel")
        .of(name)
    };
    EntryKind::LeftSafe {
        level,
        reached: report.reached.clone(),
        unreached: report.unreached.iter().map(unreached).collect(),
    }
}

fn word(level: SafeLevel) -> &'static str {
    match level {
        SafeLevel::Rest => "at rest",
        SafeLevel::Safe => "safe",
    }
}

/// The way to the instrument of a quantity.
pub fn mailbox<'a>(bench: &'a OpenBench, quantity: &QuantityName) -> Result<&'a Mailbox, Trouble> {
    bench.mailbox(quantity.instrument()).map_err(Trouble::Fault)
}

/// Asks an instrument for one thing.
pub async fn ask(mailbox: &Mailbox, request: Request) -> Result<Reply, Trouble> {
    mailbox.ask(request).await.map_err(|refusal| match refusal {
        Refusal::MissedTrigger => Trouble::MissedTrigger,
        Refusal::Reconnected => Trouble::Reconnected(mailbox.name().to_owned()),
        Refusal::Fault(fault) => Trouble::Fault(fault),
        Refusal::Leaving => Trouble::Fault(
            Fault::new(
                "F0343",
                format!("`{}` was left and is not set again", mailbox.name()),
            )
            .of(mailbox.name()),
        ),
    })
}
