//! The words of the command line. Parses; does nothing.

use std::path::{Path, PathBuf};

use clap::{Args, Parser, Subcommand};

/// Runs unattended dark-resonance field scans on a rubidium vapour-cell bench.
#[derive(Debug, Parser)]
#[command(name = "darkline", version, after_help = EXIT_CODES)]
pub struct Arguments {
    /// What to do.
    #[command(subcommand)]
    pub command: Command,
}

const EXIT_CODES: &str = "Exit codes: 0 finished; 2 a file is wrong; 3 a fault, bench safe; \
4 the bench may NOT be safe; 130 stopped by the user.";

/// One command of the program.
#[derive(Debug, Subcommand)]
pub enum Command {
    /// Find every fault of a sequence and its bench file, or print what a scan would do
    Check(CheckOptions),
    /// Run a sequence in the foreground and print its answer
    Scan(ScanOptions),
    /// Serve the mock bench on loopback TCP and pseudo-terminals
    Mock(MockOptions),
    /// Drive the bench to its declared safe state and verify it by readback
    Safe(BenchOptions),
    /// Ask every instrument of the bench who it is; moves nothing
    Identify(BenchOptions),
    /// Build run.h5 of a run folder from its journal
    Rebuild(RebuildOptions),
}

/// Options of `check`.
#[derive(Debug, Args)]
pub struct CheckOptions {
    /// The sequence file
    pub sequence: PathBuf,
    /// The bench file
    #[arg(long, value_name = "BENCH")]
    pub bench: PathBuf,
    /// Print one JSON object on standard output
    #[arg(long)]
    pub json: bool,
}

/// Options of `scan`.
#[derive(Debug, Args)]
pub struct ScanOptions {
    /// The sequence file
    pub sequence: PathBuf,
    /// Where the run folder is made
    #[arg(long, value_name = "FOLDER", default_value = "runs")]
    pub into: PathBuf,
    /// Which bench, and how it is reached
    #[command(flatten)]
    pub bench: BenchOptions,
}

/// Options of every command that reaches the bench.
#[derive(Debug, Args)]
pub struct BenchOptions {
    /// The bench file
    #[arg(long, value_name = "BENCH")]
    pub bench: PathBuf,
    /// Start the mock bench for this command and use it in place of the bench file's links
    #[arg(long, value_name = "WORLD", num_args = 0..=1, require_equals = true)]
    pub mock: Option<Option<PathBuf>>,
    /// Use the links of this file, as `darkline mock --json` prints them, in place of the bench file's
    #[arg(long, value_name = "LINKS", conflicts_with = "mock")]
    pub links: Option<PathBuf>,
    /// Print one JSON object, last on standard output
    #[arg(long)]
    pub json: bool,
}

/// Options of `mock`.
#[derive(Debug, Args)]
pub struct MockOptions {
    /// The world file: the truth behind the instruments, its noise and its seed
    #[arg(long, value_name = "WORLD")]
    pub world: Option<PathBuf>,
    /// Print where the instruments listen as one JSON object
    #[arg(long)]
    pub json: bool,
    /// End when standard input ends, so that a parent's death is noticed
    #[arg(long, hide = true)]
    pub with_parent: bool,
}

/// Options of `rebuild`.
#[derive(Debug, Args)]
pub struct RebuildOptions {
    /// The run folder
    pub run: PathBuf,
}

impl BenchOptions {
    /// The world of the mock bench, where one is asked for: `Some(None)` is the shipped world.
    pub fn world(&self) -> Option<Option<&Path>> {
        self.mock.as_ref().map(|world| world.as_deref())
    }
}
