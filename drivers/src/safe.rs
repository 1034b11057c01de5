//! Making the bench safe: groups in the declared order, instruments of a group in parallel, each bounded in
//! time, ramps from the readback, every value verified by readback. What cannot be reached is passed over
//! and reported. Never waits for anything but the instruments.

use std::collections::BTreeMap;
use std::future::Future;
use std::pin::Pin;
use std::time::Duration;

use darkline_core::bench::{Bench, Instrument as Declared, Property};
use darkline_core::quantity::{QuantityName, Setting};
use tokio::task::JoinSet;

use crate::error::DriverError;
use crate::instrument::Instrument;
use crate::role::{Outcome, RfGenerator, Role};
use crate::scpi::agree;

/// Time allowed for one instrument besides its ramps.
const BESIDES: Duration = Duration::from_secs(12);

/// Which of the two declared states.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Level {
    /// After finish or stop: coils ramped down, RF off, oven and laser lock kept.
    Rest,
    /// After a trip, fault or crash.
    Safe,
}

/// What came of it.
#[derive(Debug, Clone, PartialEq)]
pub struct SafeReport {
    /// Which state was asked for.
    pub level: Level,
    /// Instruments that stand there now, verified by readback.
    pub reached: Vec<String>,
    /// Those that do not, or of which it is not known, and why.
    pub unreached: Vec<(String, String)>,
    /// What the instruments said at the end.
    pub readbacks: Vec<(QuantityName, Setting)>,
}

impl SafeReport {
    /// Whether every instrument stands where it should.
    pub fn is_safe(&self) -> bool {
        self.unreached.is_empty()
    }
}

/// What one instrument said at the end.
pub type Readbacks = Vec<(QuantityName, Setting)>;

/// One instrument on its way, for [`make_safe_through`].
pub type OnItsWay = Pin<Box<dyn Future<Output = Outcome<Readbacks>> + Send>>;

impl Level {
    fn target(self, property: &Property) -> Option<Setting> {
        match self {
            Self::Rest => property.rest,
            Self::Safe => property.safe,
        }
    }

    fn order(self, bench: &Bench) -> &[Vec<String>] {
        match self {
            Self::Rest => &bench.rest_order,
            Self::Safe => &bench.safe_order,
        }
    }
}

/// Drives all instruments to a state. Instruments that the order names and `instruments` lacks are reported
/// as not reached; all are given back as they are then.
pub async fn make_safe(
    bench: &Bench,
    level: Level,
    instruments: &mut BTreeMap<String, Instrument>,
) -> SafeReport {
    let (back, mut returned) = tokio::sync::mpsc::channel(instruments.len().max(1));
    let report = make_safe_through(bench, level, |declared| {
        let name = declared.name.clone();
        let instrument = instruments.remove(&name);
        let (declared, back) = (declared.clone(), back.clone());
        Box::pin(async move {
            let Some(mut instrument) = instrument else {
                return Err(DriverError::Unreachable {
                    link: declared.link,
                    instrument: name,
                    why: "it was not opened".to_owned(),
                });
            };
            let outcome = tokio::time::timeout(
                patience(&declared),
                make_one_safe(&mut instrument, &declared, level),
            )
            .await;
            let outcome = outcome.unwrap_or_else(|_| Err(too_slow(&declared)));
            let _ = back.send((name, instrument)).await;
            outcome
        })
    })
    .await;
    drop(back);
    while let Some((name, instrument)) = returned.recv().await {
        instruments.insert(name, instrument);
    }
    report
}

/// The same for instruments that stand behind something else, such as their mailboxes: `reach` brings one
/// to the state by [`make_one_safe`], wherever it lives.
pub async fn make_safe_through(
    bench: &Bench,
    level: Level,
    mut reach: impl FnMut(&Declared) -> OnItsWay,
) -> SafeReport {
    let mut report = SafeReport {
        level,
        reached: Vec::new(),
        unreached: Vec::new(),
        readbacks: Vec::new(),
    };
    for group in level.order(bench) {
        let mut under_way = JoinSet::new();
        let mut names = BTreeMap::new();
        for name in group {
            let Some(declared) = bench.instruments.get(name) else {
                let why = "the bench file does not declare it".to_owned();
                report.unreached.push((name.clone(), why));
                continue;
            };
            let limit = patience(declared) + Duration::from_secs(1);
            let slow = too_slow(declared);
            let reaching = reach(declared);
            let task = under_way.spawn(async move {
                let outcome = tokio::time::timeout(limit, reaching).await;
                outcome.unwrap_or(Err(slow))
            });
            names.insert(task.id(), name.clone());
        }
        while let Some(joined) = under_way.join_next_with_id().await {
            let (id, outcome) = match joined {
                Ok((id, outcome)) => (id, outcome.map_err(|error| error.to_string())),
                Err(panic) => (panic.id(), Err(format!("its driver failed: {panic}"))),
            };
            let name = names.remove(&id).unwrap_or_default();
            match outcome {
                Ok(readbacks) => {
                    report.reached.push(name);
                    report.readbacks.extend(readbacks);
                }
                Err(why) => report.unreached.push((name, why)),
            }
        }
    }
    report
}

/// Brings one instrument to its declared values: first ramps what must be ramped, then the switches, then
/// the rest; then reads everything back. A failure on the way does not keep it from trying what follows.
///
/// # Errors
/// The first failure, or a readback that is not the declared value.
pub async fn make_one_safe(
    instrument: &mut Instrument,
    declared: &Declared,
    level: Level,
) -> Outcome<Readbacks> {
    let mut first: Option<DriverError> = None;
    let mut note = |outcome: Outcome<()>| {
        if let Err(error) = outcome {
            first.get_or_insert(error);
        }
    };
    if let Instrument::RfGenerator(generator) = instrument {
        // A power cycle found on the way is told by the switch's readback, not by this.
        let _ = generator.end_sweeping().await;
    }
    let mut targets: Vec<(&Property, Setting)> = declared
        .properties
        .values()
        .filter_map(|property| Some((property, level.target(property)?)))
        .collect();
    targets.sort_by_key(|(property, target)| match (property.slew, target) {
        (Some(_), Setting::Number(_)) => 0,
        (_, Setting::Switch(_)) => 1,
        _ => 2,
    });
    for (property, target) in &targets {
        let mut outcome = approach(instrument, property, *target).await;
        if let Err(error) = &outcome
            && (error.link_lost() || matches!(error, DriverError::PowerCycled { .. }))
        {
            // Once more over a fresh link: whatever it forgot, it must stand where it is safe.
            let _ = instrument.reconnect().await;
            outcome = approach(instrument, property, *target).await;
        }
        note(outcome);
    }
    let mut readbacks = Vec::new();
    for (property, target) in targets {
        match verified(instrument, property, target).await {
            Ok(found) => readbacks.push((property.name.clone(), found)),
            Err(error) => note(Err(error)),
        }
    }
    match first {
        None => Ok(readbacks),
        Some(error) => Err(error),
    }
}

/// Sets a property, in stairs from its readback where it has a slew.
async fn approach(
    instrument: &mut Instrument,
    property: &Property,
    target: Setting,
) -> Outcome<()> {
    let name = property.name.property();
    if let (Setting::Number(to), Some(slew)) = (target, property.slew)
        && let Setting::Number(from) = instrument.readback(name).await?
    {
        let step = property.ramp_step.unwrap_or((to - from).abs());
        for stair in stairs(from, to, step) {
            instrument.set(name, Setting::Number(stair)).await?;
            tokio::time::sleep(Duration::from_secs_f64((step / slew).clamp(0.0, 60.0))).await;
        }
    }
    instrument.set(name, target).await.map(drop)
}

/// The stairs between two values, neither of them included.
fn stairs(from: f64, to: f64, step: f64) -> impl Iterator<Item = f64> {
    let count = ((to - from).abs() / step).ceil();
    // Whatever the numbers are, a ramp has an end.
    let count = if count.is_finite() {
        count.min(1e5) as u32
    } else {
        0
    };
    (1..count).map(move |at| from + (to - from) * f64::from(at) / f64::from(count))
}

async fn verified(
    instrument: &mut Instrument,
    property: &Property,
    target: Setting,
) -> Outcome<Setting> {
    let name = property.name.property();
    let found = instrument.readback(name).await?;
    let resolution = property
        .resolution
        .unwrap_or(0.0)
        .max(instrument.resolution(name));
    match agree(target, found, resolution) {
        true => Ok(found),
        false => Err(DriverError::Readback {
            instrument: property.name.instrument().to_owned(),
            property: name.to_owned(),
            asked: target.display(property.dimension),
            readback: found.display(property.dimension),
        }),
    }
}

/// The longest that one instrument may take: twice across its ranges at their slews, and some exchanges.
fn patience(declared: &Declared) -> Duration {
    let ramps: f64 = declared
        .properties
        .values()
        .filter_map(|property| {
            let ((low, high), slew) = (property.range?, property.slew?);
            Some(2.0 * (high - low) / slew)
        })
        .sum();
    BESIDES + Duration::try_from_secs_f64(ramps).unwrap_or_default()
}

fn too_slow(declared: &Declared) -> DriverError {
    DriverError::TimedOut {
        instrument: declared.name.clone(),
        message: "ramping to its declared state".to_owned(),
        within: patience(declared),
    }
}

#[cfg(test)]
mod tests {
    use super::stairs;

    #[test]
    fn stairs_are_no_higher_than_a_step_and_end() {
        let all: Vec<f64> = stairs(0.02, -0.001, 0.002).collect();
        assert_eq!(all.len(), 10);
        let mut last = 0.02;
        for stair in all.into_iter().chain([-0.001]) {
            assert!(
                (stair - last).abs() <= 0.002 * (1.0 + 1e-9),
                "{last} to {stair}"
            );
            last = stair;
        }
        assert_eq!(stairs(1.0, 1.0, 0.1).count(), 0);
        assert_eq!(stairs(1.0, 1.05, 0.1).count(), 0);
        assert_eq!(stairs(0.0, 1.0, 0.0).count(), 0);
        assert_eq!(stairs(f64::NAN, 1.0, 0.1).count(), 0);
    }
}
