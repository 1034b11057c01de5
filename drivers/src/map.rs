//! Command maps: how one kind of instrument is spoken to, as a TOML file. A map says words only; what they
//! are for is fixed by the role. A user's own map is found beside the bench file or in the user's
//! configuration, before the ones that are built in, without recompiling.

mod entry;
mod harmless;
mod raw;

use std::collections::BTreeMap;
use std::fmt;
use std::path::{Path, PathBuf};
use std::time::Duration;

use darkline_core::channel;
use darkline_core::wire::block::{ByteOrder, Encoding};
use thiserror::Error;

pub use entry::{Entry, Template};

use crate::exchange::Manners;

/// A command map, read and checked.
#[derive(Debug, Clone)]
pub struct CommandMap {
    /// File name without its ending.
    pub name: String,
    /// The role it is for.
    pub role: channel::Role,
    /// Pattern of the `*IDN?` reply; `*` stands for any text.
    pub identity: String,
    /// How the instrument wants to be spoken to.
    pub talk: Talk,
    /// What can be set or read, by property.
    pub quantities: BTreeMap<String, Entry>,
    /// Sweeps of an RF generator.
    pub sweep: Option<SweepMap>,
    /// Records of a digitizer.
    pub record: Option<RecordMap>,
}

/// How an instrument wants to be spoken to.
#[derive(Debug, Clone)]
pub struct Talk {
    /// Ends, pace, time limits, sentinel.
    pub manners: Manners,
    /// Whether several questions may stand in one message (IEEE 488.2, 6.3.1).
    pub compound: bool,
    /// Said after connecting, such as entering remote.
    pub enter: Vec<String>,
    /// Said before parting, such as leaving remote.
    pub leave: Vec<String>,
    /// Asks for the next error; `None` where there is no queue.
    pub error: Option<String>,
    /// Whether `*ESR?` tells of a power cycle by its bit 7.
    pub power_on: bool,
}

/// How an RF generator is made to sweep by itself.
#[derive(Debug, Clone)]
pub struct SweepMap {
    /// Enters sweep mode.
    pub enter: Vec<String>,
    /// Leaves it.
    pub leave: Vec<String>,
    /// Lower end.
    pub start: Entry,
    /// Upper end.
    pub stop: Entry,
    /// Time of one sweep.
    pub duration: Entry,
    /// Number of steps; `None` where it is always continuous.
    pub steps: Option<Entry>,
    /// Words `up` and `down`; `None` where it only goes up.
    pub direction: Option<Entry>,
    /// Words `stepped` and `continuous`; `None` where there is no choice.
    pub kind: Option<Entry>,
    /// Starts one sweep.
    pub begin: String,
    /// Asked after it; answered at its end.
    pub done: Done,
}

/// How a digitizer takes records.
#[derive(Debug, Clone)]
pub struct RecordMap {
    /// Peak-to-peak range of channel `{n}`.
    pub range: Option<Entry>,
    /// Middle of the range.
    pub offset: Option<Entry>,
    /// Words `DC`, `AC`, `GROUND`.
    pub coupling: Option<Entry>,
    /// Whether the filter is on.
    pub filter: Option<Entry>,
    /// The filter's corner.
    pub bandwidth: Option<Entry>,
    /// Samples of a record.
    pub samples: Entry,
    /// Time between them.
    pub interval: Entry,
    /// Time from trigger to sample 0.
    pub delay: Option<Entry>,
    /// Words `external`, `bus`, `immediate`.
    pub trigger: Entry,
    /// Arms one record.
    pub arm: String,
    /// How it is known to wait for its trigger.
    pub waiting: Waiting,
    /// How it is known to be complete.
    pub done: Done,
    /// Asks how many records were taken; `None` where it does not count.
    pub count: Option<String>,
    /// Triggers over the bus.
    pub bus: Option<String>,
    /// Ends a record.
    pub abort: String,
    /// Sets and asks the sample format.
    pub format: Entry,
    /// The format wanted.
    pub encoding: Encoding,
    /// Sets and asks the byte order; `None` where it is fixed.
    pub order: Option<Entry>,
    /// The byte order wanted, or fixed.
    pub byte_order: ByteOrder,
    /// Asks for the preamble of channel `{n}`.
    pub preamble: String,
    /// What its elements are.
    pub fields: Vec<Field>,
    /// Asks for the samples of channel `{n}`.
    pub data: String,
    /// Time limit of a transfer.
    pub transfer: Duration,
}

/// One element of a preamble.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Field {
    /// Number of samples.
    Samples,
    /// Time between samples, s.
    Interval,
    /// Volts per code.
    Scale,
    /// Volts of code 0.
    Offset,
    /// Time from trigger to sample 0, s.
    Delay,
    /// Number of the record.
    Count,
    /// Code of a sample clipped below.
    Lowest,
    /// Code of a sample clipped above.
    Highest,
    /// Something else.
    Other,
}

/// How an instrument is known to wait for its trigger.
#[derive(Debug, Clone, PartialEq)]
pub enum Waiting {
    /// A bit of the answer is set.
    Bit {
        /// The question.
        ask: String,
        /// From 0.
        bit: u32,
    },
    /// It does so after a time.
    Delay(Duration),
}

/// How an instrument is known to have ended something.
#[derive(Debug, Clone, PartialEq)]
pub enum Done {
    /// It answers this question only then (`*OPC?`).
    Deferred(String),
    /// All these bits of the answer are clear.
    Poll {
        /// The question.
        ask: String,
        /// A mask.
        clear: u32,
        /// Time between questions.
        every: Duration,
    },
}

/// What is wrong with a map, and where.
#[derive(Debug, Clone, PartialEq, Eq, Error)]
pub struct MapError {
    /// The file, or the name asked for.
    pub file: String,
    /// Line, from 1; `None` where the whole file is meant.
    pub line: Option<usize>,
    /// What is wrong.
    pub message: String,
    /// What to do.
    pub help: String,
}

impl fmt::Display for MapError {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match self.line {
            Some(line) => write!(f, "{}:{line}: {}; {}", self.file, self.message, self.help),
            None => write!(f, "{}: {}; {}", self.file, self.message, self.help),
        }
    }
}

/// The maps that are built in, one per role, on the trees of SCPI-1999.
pub const BUILT_IN: [(&str, &str); 5] = [
    (
        "scpi-rf-generator",
        include_str!("../maps/scpi-rf-generator.toml"),
    ),
    (
        "scpi-current-supply",
        include_str!("../maps/scpi-current-supply.toml"),
    ),
    (
        "scpi-digitizer",
        include_str!("../maps/scpi-digitizer.toml"),
    ),
    (
        "scpi-temperature-controller",
        include_str!("../maps/scpi-temperature-controller.toml"),
    ),
    ("scpi-monitor", include_str!("../maps/scpi-monitor.toml")),
];

impl CommandMap {
    /// Reads a map's text. `file` is named in errors.
    ///
    /// # Errors
    /// The first thing that is wrong, with its line.
    pub fn parse(text: &str, file: &str) -> Result<Self, MapError> {
        raw::parse(text, file)
    }

    /// Finds a map by name in these folders, in order, then among those built in. A name that ends in
    /// `.toml` is a path, from the first folder if it is not absolute.
    ///
    /// # Errors
    /// No such map, or one that cannot be read.
    pub fn find(name: &str, folders: &[PathBuf]) -> Result<Self, MapError> {
        if name.ends_with(".toml") {
            let start = folders.first().map_or(Path::new("."), PathBuf::as_path);
            return read(&start.join(name));
        }
        let file = format!("{name}.toml");
        if let Some(path) = folders
            .iter()
            .map(|folder| folder.join(&file))
            .find(|path| path.is_file())
        {
            return read(&path);
        }
        match BUILT_IN.iter().find(|(known, _)| *known == name) {
            Some((_, text)) => Self::parse(text, &file),
            None => Err(MapError {
                file,
                line: None,
                message: format!("there is no command map `{name}` in {}", listed(folders)),
                help: format!("write one there, or use {}", names()),
            }),
        }
    }
}

/// Where maps are looked for: the bench file's folder, then `darkline/maps` of the user's configuration.
pub fn search_path(bench_folder: &Path) -> Vec<PathBuf> {
    let home = || std::env::var_os("HOME").map(|home| PathBuf::from(home).join(".config"));
    let config = std::env::var_os("XDG_CONFIG_HOME")
        .filter(|folder| !folder.is_empty())
        .map(PathBuf::from)
        .or_else(home);
    let mut folders = vec![bench_folder.to_owned()];
    folders.extend(config.map(|folder| folder.join("darkline").join("maps")));
    folders
}

fn read(path: &Path) -> Result<CommandMap, MapError> {
    let file = path.display().to_string();
    let text = std::fs::read_to_string(path).map_err(|error| MapError {
        file: file.clone(),
        line: None,
        message: format!("it cannot be read: {error}"),
        help: "check the path and its permissions".to_owned(),
    })?;
    CommandMap::parse(&text, &file)
}

fn listed(folders: &[PathBuf]) -> String {
    let paths: Vec<String> = folders
        .iter()
        .map(|folder| folder.display().to_string())
        .collect();
    match paths.is_empty() {
        true => "any folder".to_owned(),
        false => paths.join(", "),
    }
}

fn names() -> String {
    let names: Vec<&str> = BUILT_IN.iter().map(|(name, _)| *name).collect();
    names.join(", ")
}
