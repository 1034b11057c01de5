//! `darkline rebuild`: builds run.h5 of a run folder from its journal. Also the builder process of a scan.

use super::Exit;
use super::arguments::RebuildOptions;
use super::{diagnostics, output};
use crate::archive;

/// Runs `rebuild`.
pub fn run(options: &RebuildOptions) -> Exit {
    match archive::build(&options.run) {
        Ok(path) => {
            output::text(&format!("{}\n", path.display()));
            Exit::Finished
        }
        Err(error) => {
            diagnostics::show_error(&error.to_string());
            Exit::WrongFile
        }
    }
}
