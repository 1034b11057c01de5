//! What a durable record costs beside a bare write and fdatasync of as many bytes, and how fast an archive is built.
//! Prints a table of ratios within one run; asserts nothing, since times depend on the disk.
#![expect(clippy::unwrap_used, reason = "a benchmark fails by panicking")]

#[path = "../tests/archive/runs.rs"]
#[expect(dead_code, reason = "the tests use more of it")]
mod runs;

use std::fs::File;
use std::io::Write;
use std::time::{Duration, Instant};

use darkline::archive;
use darkline::journal::disk::LocalDisk;
use darkline::journal::{JOURNAL, Journal};
use runs::Shape;

const POINTS: u64 = 500;

fn main() {
    println!("samples  journal MB/s  bare MB/s  ratio of times  build MB/s");
    for samples in [100, 1000, 10_000] {
        let run = runs::run(&Shape::regular(POINTS, samples));
        let folder = tempfile::tempdir().unwrap();

        let mut journal = Journal::create(&LocalDisk, folder.path()).unwrap();
        let begun = Instant::now();
        let mut lengths = Vec::new();
        for (entry, trace) in &run {
            let before = journal.length();
            journal.append(entry, trace.as_ref()).unwrap();
            lengths.push((journal.length() - before) as usize);
        }
        let appended = begun.elapsed();
        let bytes = std::fs::metadata(folder.path().join(JOURNAL))
            .unwrap()
            .len();

        let bare = bare(&folder.path().join("bare"), &lengths);
        let begun = Instant::now();
        archive::build(folder.path()).unwrap();
        let built = begun.elapsed();

        let rate = |time: Duration| bytes as f64 / 1e6 / time.as_secs_f64();
        println!(
            "{samples:7}  {:12.1}  {:9.1}  {:14.2}  {:10.1}",
            rate(appended),
            rate(bare),
            appended.as_secs_f64() / bare.as_secs_f64(),
            rate(built)
        );
    }
}

/// Write records of these lengths, each with one write and one fdatasync.
fn bare(path: &std::path::Path, lengths: &[usize]) -> Duration {
    let zeros = vec![0; lengths.iter().copied().max().unwrap()];
    let mut file = File::create(path).unwrap();
    let begun = Instant::now();
    for &length in lengths {
        file.write_all(&zeros[..length]).unwrap();
        file.sync_data().unwrap();
    }
    begun.elapsed()
}
