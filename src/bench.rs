//! Opens a bench: dials every instrument, asks who it is, puts each behind its mailbox. Moves nothing.

use std::collections::BTreeMap;
use std::sync::Arc;

use darkline_core::bench::{Bench, Instrument as Declared};
use darkline_core::diagnostic::Fault;
use darkline_core::entry::{EntryKind, SafeLevel};
use darkline_core::quantity::QuantityName;
use darkline_drivers::error::DriverError;
use darkline_drivers::instrument::open;
use darkline_drivers::link::Dial;
use darkline_drivers::map::CommandMap;
use darkline_drivers::safe::{Level, SafeReport, make_safe_through};
use tokio::task::JoinSet;

use crate::instrument::Mailbox;
use crate::instrument::driver::Driver;

/// A bench whose instruments answer.
#[derive(Debug, Clone)]
pub struct OpenBench {
    bench: Arc<Bench>,
    mailboxes: BTreeMap<String, Mailbox>,
}

/// Opens all instruments at once.
///
/// # Errors
/// Every instrument that cannot be reached, or is not who it should be.
pub async fn open_bench(
    bench: Arc<Bench>,
    diallers: impl Fn(&Declared) -> Result<Box<dyn Dial>, Fault>,
    maps: impl Fn(&Declared) -> Result<CommandMap, Fault>,
) -> Result<OpenBench, Vec<Fault>> {
    let mut opening = JoinSet::new();
    let mut faults = Vec::new();
    for declared in bench.instruments.values() {
        let (dialler, map) = match (diallers(declared), maps(declared)) {
            (Ok(dialler), Ok(map)) => (dialler, map),
            (dialler, map) => {
                faults.extend(dialler.err());
                faults.extend(map.err());
                continue;
            }
        };
        let (name, role) = (declared.name.clone(), declared.role);
        let identity = declared.identity.clone();
        opening.spawn(async move {
            let opened = open(&name, role, map, dialler, identity.as_deref()).await;
            (name, opened)
        });
    }
    let mut drivers: BTreeMap<String, Box<dyn Driver>> = BTreeMap::new();
    while let Some(joined) = opening.join_next().await {
        match joined {
            Ok((name, Ok(instrument))) => {
                drivers.insert(name, Box::new(instrument));
            }
            Ok((_, Err(error))) => faults.push(error.into()),
            Err(panic) => faults.push(Fault::new("F0332", format!("a driver panicked: {panic}"))),
        }
    }
    if faults.is_empty() {
        Ok(OpenBench::new(bench, drivers))
    } else {
        faults.sort_by(|one, other| one.instrument.cmp(&other.instrument));
        Err(faults)
    }
}

impl OpenBench {
    /// A bench of these drivers, by the names of their instruments. Drivers that the bench does not
    /// declare are dropped.
    pub fn new(bench: Arc<Bench>, drivers: BTreeMap<String, Box<dyn Driver>>) -> Self {
        let mailboxes = drivers
            .into_iter()
            .filter_map(|(name, driver)| {
                let declared = bench.instruments.get(&name)?.clone();
                Some((name, Mailbox::open(declared, driver)))
            })
            .collect();
        Self { bench, mailboxes }
    }

    /// As declared.
    pub fn bench(&self) -> &Arc<Bench> {
        &self.bench
    }

    /// The way to an instrument.
    ///
    /// # Errors
    /// Where the bench has none of that name.
    pub fn mailbox(&self, name: &str) -> Result<&Mailbox, Fault> {
        self.mailboxes.get(name).ok_or_else(|| {
            Fault::new("F0333", format!("`{name}` is not open"))
                .help("declare it in bench.toml")
                .of(name)
        })
    }

    /// Whether the quantity is measured by its instrument.
    pub fn measures(&self, quantity: &QuantityName) -> bool {
        self.mailboxes
            .get(quantity.instrument())
            .is_some_and(|mailbox| mailbox.measures(quantity.property()))
    }

    /// What every instrument said of itself.
    pub fn identities(&self) -> Vec<EntryKind> {
        let identified = |mailbox: &Mailbox| {
            let who = mailbox.identity();
            EntryKind::Identified {
                instrument: mailbox.name().to_owned(),
                identity: format!(
                    "{},{},{},{}",
                    who.maker, who.model, who.serial, who.firmware
                ),
                serial: who.serial.clone(),
            }
        };
        self.mailboxes.values().map(identified).collect()
    }

    /// Breaks off everything and brings the bench to rest or makes it safe, verified by readback.
    pub async fn leave(&self, level: SafeLevel) -> SafeReport {
        let level = match level {
            SafeLevel::Rest => Level::Rest,
            SafeLevel::Safe => Level::Safe,
        };
        make_safe_through(&self.bench, level, |declared| {
            let mailbox = self.mailboxes.get(&declared.name).cloned();
            let declared = declared.clone();
            Box::pin(async move {
                match mailbox {
                    Some(mailbox) => mailbox.leave(level).await,
                    None => Err(DriverError::Unreachable {
                        instrument: declared.name,
                        link: declared.link,
                        why: "it was not opened".to_owned(),
                    }),
                }
            })
        })
        .await
    }
}
