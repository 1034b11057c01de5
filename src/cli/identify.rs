//! `darkline identify`: asks every instrument of a bench who it is. Moves nothing, sets nothing.

use std::sync::Arc;

use darkline_core::bench::Bench;
use darkline_core::diagnostic::Fault;
use darkline_drivers::instrument::open;
use darkline_drivers::role::Role as _;
use serde_json::json;
use tokio::task::JoinSet;

use super::arguments::BenchOptions;
use super::diagnostics::{self, Files};
use super::links::Reached;
use super::safe::Instruments;
use super::{Exit, opening, output};
use crate::reach::{Reach, ReachError};

/// Runs `identify`.
pub async fn run(options: &BenchOptions) -> Exit {
    let bench = match read_bench(options) {
        Ok(bench) => bench,
        Err(exit) => return exit,
    };
    let reached = match Reached::settle(options.world(), options.links.as_deref()).await {
        Ok(reached) => reached,
        Err(message) => {
            diagnostics::show_error(&message);
            return Exit::WrongFile;
        }
    };
    let reach = match opening::take(&options.bench, &bench, &reached).map_err(ReachError::faults) {
        Ok(reach) => reach,
        Err(faults) => {
            faults.iter().for_each(diagnostics::show_fault);
            return Exit::Fault;
        }
    };
    let (instruments, faults) = open_each(&bench, &reach).await;
    let identities = instruments.iter().map(|(name, instrument)| {
        let who = instrument.identity();
        let identity = format!(
            "{},{},{},{}",
            who.maker, who.model, who.serial, who.firmware
        );
        (name.as_str(), instrument.role().name(), identity)
    });
    if options.json {
        let answered: Vec<_> = identities
            .map(|(name, role, identity)| json!({"instrument": name, "role": role, "identity": identity}))
            .collect();
        output::json(&json!({"instruments": answered, "faults": faults}));
    } else {
        for (name, role, identity) in identities {
            output::text(&format!("{name:<10} {role:<23} {identity}\n"));
        }
        faults.iter().for_each(diagnostics::show_fault);
    }
    if faults.is_empty() {
        Exit::Finished
    } else {
        Exit::Fault
    }
}

/// Reads the bench file of a command, showing what is wrong with it.
///
/// # Errors
/// The exit code, once everything has been said.
pub fn read_bench(options: &BenchOptions) -> Result<Arc<Bench>, Exit> {
    let files = Files::read(&options.bench, None).map_err(|message| {
        diagnostics::show_error(&message);
        Exit::WrongFile
    })?;
    Bench::parse(&files.bench.1)
        .map(Arc::new)
        .map_err(|findings| {
            diagnostics::show(&files, &findings);
            Exit::WrongFile
        })
}

/// Opens every instrument that answers; the others as faults.
pub async fn open_each(bench: &Arc<Bench>, reach: &Reach) -> (Instruments, Vec<Fault>) {
    let mut opening = JoinSet::new();
    let mut faults = Vec::new();
    for declared in bench.instruments.values() {
        let (dialler, map) = match (reach.dialler(declared, None), reach.map(declared)) {
            (Ok(dialler), Ok(map)) => (dialler, map),
            (dialler, map) => {
                faults.extend(dialler.err());
                faults.extend(map.err());
                continue;
            }
        };
        let declared = declared.clone();
        opening.spawn(async move {
            let (name, identity) = (&declared.name, declared.identity.as_deref());
            let opened = open(name, declared.role, map, dialler, identity).await;
            (declared.name, opened)
        });
    }
    let mut instruments = Instruments::new();
    while let Some(joined) = opening.join_next().await {
        match joined {
            Ok((name, Ok(instrument))) => {
                instruments.insert(name, instrument);
            }
            Ok((_, Err(error))) => faults.push(error.into()),
            Err(panic) => faults.push(Fault::new("F0332", format!("a driver panicked: {panic}"))),
        }
    }
    faults.sort_by(|one, other| one.instrument.cmp(&other.instrument));
    (instruments, faults)
}
