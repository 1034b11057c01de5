//! The command line: its words, its exit codes, and which command runs. Decides nothing about a scan.

mod arguments;
mod check;
mod diagnostics;
mod identify;
mod links;
mod mock;
mod opening;
mod output;
mod progress;
mod rebuild;
mod safe;
mod scan;
mod signals;

pub use arguments::Arguments;
use arguments::Command;

/// How a command ended, as the shell sees it.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
#[repr(u8)]
pub enum Exit {
    /// Finished as declared.
    Finished = 0,
    /// A file or the command line is wrong; nothing was touched.
    WrongFile = 2,
    /// The bench is wrong; it was left safe.
    Fault = 3,
    /// The bench may NOT be safe: look at the instruments named.
    MayNotBeSafe = 4,
    /// Stopped by the user; the bench is at rest.
    Stopped = 130,
}

/// Runs one command to its end.
pub async fn run(arguments: Arguments) -> Exit {
    match arguments.command {
        Command::Check(options) => check::run(&options),
        Command::Mock(options) => mock::run(&options).await,
        Command::Scan(options) => scan::run(&options).await,
        Command::Safe(options) => safe::run(&options).await,
        Command::Identify(options) => identify::run(&options).await,
        Command::Rebuild(options) => rebuild::run(&options),
    }
}

/// Starts the log on standard error; `DARKLINE_LOG` takes the filter, such as `debug`.
pub fn start_log() {
    let filter = tracing_subscriber::EnvFilter::try_from_env("DARKLINE_LOG")
        .unwrap_or_else(|_| tracing_subscriber::EnvFilter::new("warn"));
    let _ = tracing_subscriber::fmt()
        .with_env_filter(filter)
        .with_writer(std::io::stderr)
        // It would say so by `eprintln!`, which panics where standard error is a broken pipe or a closed terminal.
        .log_internal_errors(false)
        .with_ansi(diagnostics::colour())
        .try_init();
}
