//! Opens the bench of a command: settled links, ownership, instruments that answer. Moves nothing.

use std::path::Path;
use std::sync::Arc;

use darkline_core::bench::Bench;
use darkline_core::diagnostic::Fault;
use darkline_drivers::link::tap::Tape;

use super::links::Reached;
use crate::bench::{OpenBench, open_bench};
use crate::reach::{Reach, ReachError};

/// Opens every instrument of a bench. The links are ours until the `Reach` is dropped.
///
/// # Errors
/// All faults at once.
pub async fn open(
    bench_file: &Path,
    bench: &Arc<Bench>,
    reached: &Reached,
    tape: Option<&Tape>,
) -> Result<(OpenBench, Reach), Vec<Fault>> {
    let reach = take(bench_file, bench, reached).map_err(ReachError::faults)?;
    let opened = open_bench(
        Arc::clone(bench),
        |declared| reach.dialler(declared, tape),
        |declared| reach.map(declared),
    )
    .await?;
    Ok((opened, reach))
}

/// Takes the links of a bench without opening them.
///
/// # Errors
/// See [`ReachError`].
pub fn take(bench_file: &Path, bench: &Bench, reached: &Reached) -> Result<Reach, ReachError> {
    let links = reached.links.as_ref().map(super::links::Links::by_name);
    let folder = bench_file.parent().unwrap_or(Path::new("."));
    Reach::take(bench, links.as_ref(), folder)
}
