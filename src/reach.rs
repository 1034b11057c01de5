//! How the instruments of a bench are reached: whose links, whose command maps, and that nobody else has them.
//! Opens no link and knows no command.

use std::collections::BTreeMap;
use std::path::{Path, PathBuf};

use darkline_core::bench::{Bench, Instrument};
use darkline_core::diagnostic::Fault;
use darkline_drivers::link::tap::{Recorded, Tape};
use darkline_drivers::link::{Address, Dial, Ownership, OwnershipError};
use darkline_drivers::map::{CommandMap, search_path};

/// The links of a bench, ours as long as this lives.
#[derive(Debug)]
pub struct Reach {
    addresses: BTreeMap<String, Address>,
    maps: Vec<PathBuf>,
    _owned: Vec<Ownership>,
}

/// Why the links of a bench are not ours.
#[derive(Debug)]
pub enum ReachError {
    /// Another process has one of them.
    Owned {
        /// Its process id, where it is known.
        owner: Option<i32>,
        /// In words for the user.
        fault: Fault,
    },
    /// Anything else, all faults at once.
    Faults(Vec<Fault>),
}

impl ReachError {
    /// All of it as faults.
    pub fn faults(self) -> Vec<Fault> {
        match self {
            Self::Owned { fault, .. } => vec![fault],
            Self::Faults(faults) => faults,
        }
    }
}

impl Reach {
    /// Takes every link of `bench`, or of `links` where that names addresses in place of the bench file's.
    /// `bench_folder` is where the user's own command maps are looked for first.
    ///
    /// # Errors
    /// See [`ReachError`].
    pub fn take(
        bench: &Bench,
        links: Option<&BTreeMap<String, String>>,
        bench_folder: &Path,
    ) -> Result<Self, ReachError> {
        let mut addresses = BTreeMap::new();
        let mut faults = Vec::new();
        for instrument in bench.instruments.values() {
            match address(instrument, links) {
                Ok(address) => {
                    addresses.insert(instrument.name.clone(), address);
                }
                Err(fault) => faults.push(fault),
            }
        }
        if !faults.is_empty() {
            return Err(ReachError::Faults(faults));
        }
        let mut owned = Vec::new();
        for (name, address) in &addresses {
            owned.push(Ownership::take(address).map_err(|error| not_ours(name, error))?);
        }
        Ok(Self {
            addresses,
            maps: search_path(bench_folder),
            _owned: owned,
        })
    }

    /// The way to one instrument, recorded on `tape` where there is one.
    ///
    /// # Errors
    /// Where the bench does not have it.
    pub fn dialler(
        &self,
        instrument: &Instrument,
        tape: Option<&Tape>,
    ) -> Result<Box<dyn Dial>, Fault> {
        let name = &instrument.name;
        let address =
            self.addresses.get(name).cloned().ok_or_else(|| {
                Fault::new("F0401", format!("`{name}` has no link")).of(name.clone())
            })?;
        Ok(match tape {
            Some(tape) => Box::new(Recorded::new(address, name.clone(), tape.clone())),
            None => Box::new(address),
        })
    }

    /// The command map of one instrument.
    ///
    /// # Errors
    /// No such map, or one with a fault in it: file, line and help.
    pub fn map(&self, instrument: &Instrument) -> Result<CommandMap, Fault> {
        CommandMap::find(&instrument.map, &self.maps).map_err(|error| {
            Fault::new("F0402", error.to_string())
                .help(error.help)
                .of(instrument.name.clone())
        })
    }
}

fn address(
    instrument: &Instrument,
    links: Option<&BTreeMap<String, String>>,
) -> Result<Address, Fault> {
    let name = &instrument.name;
    let text = match links {
        None => &instrument.link,
        Some(links) => links.get(name).ok_or_else(|| {
            Fault::new("F0401", format!("there is no link for `{name}`"))
                .help(format!(
                    "the links given are those of {}; name the bench file's instruments alike",
                    names(links)
                ))
                .of(name.clone())
        })?,
    };
    text.parse()
        .map_err(|error: darkline_drivers::link::AddressError| {
            Fault::new("F0401", error.to_string()).of(name.clone())
        })
}

fn names(links: &BTreeMap<String, String>) -> String {
    let names: Vec<_> = links.keys().map(|name| format!("`{name}`")).collect();
    names.join(", ")
}

fn not_ours(name: &str, error: OwnershipError) -> ReachError {
    let fault = Fault::new("F0403", error.to_string()).of(name);
    match error {
        OwnershipError::Owned { owner, .. } => ReachError::Owned {
            owner: owner.parse().ok(),
            fault: fault.help(
                "wait until it ends, or end it: `kill` makes it ramp down and leave the bench at rest",
            ),
        },
        OwnershipError::File { .. } => ReachError::Faults(vec![fault]),
    }
}
