//! The `darkline` program: hands its arguments to the command line and returns its exit code.

use std::process::ExitCode;

use clap::Parser;
use darkline::cli::{self, Arguments};

fn main() -> ExitCode {
    let arguments = Arguments::parse();
    cli::start_log();
    let runtime = match tokio::runtime::Builder::new_multi_thread()
        .worker_threads(2)
        .enable_all()
        .build()
    {
        Ok(runtime) => runtime,
        Err(error) => {
            eprintln!("cannot start: {error}");
            return ExitCode::from(cli::Exit::Fault as u8);
        }
    };
    let exit = runtime.block_on(cli::run(arguments));
    // A blocked read of standard input must not keep the program alive.
    runtime.shutdown_background();
    ExitCode::from(exit as u8)
}
