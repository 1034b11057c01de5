//! Prints the honest-answer table: whole runs in virtual time on seeded worlds, none excluded.
//! `cargo run --release --example honest-answer -- [FIRST] [LAST]`, seeds 1 to 2000 by default.
#![allow(
    clippy::unwrap_used,
    reason = "a check may panic: that is how it fails"
)]

#[path = "../tests/campaign/mod.rs"]
mod campaign;

use std::sync::atomic::{AtomicU64, Ordering};

fn main() {
    let mut bounds = std::env::args().skip(1).map(|text| text.parse::<u64>());
    let (first, last) = match (bounds.next(), bounds.next()) {
        (None, _) => (1, 2000),
        (Some(Ok(first)), Some(Ok(last))) if first <= last => (first, last),
        _ => {
            eprintln!("usage: honest-answer [FIRST LAST]");
            std::process::exit(2);
        }
    };
    let next = AtomicU64::new(first);
    let threads = std::thread::available_parallelism().map_or(1, usize::from);
    let mut outcomes: Vec<campaign::Outcome> = std::thread::scope(|scope| {
        let work = || {
            let mut done = Vec::new();
            loop {
                let seed = next.fetch_add(1, Ordering::Relaxed);
                if seed > last {
                    return done;
                }
                done.push(campaign::run_seed(seed));
            }
        };
        let workers: Vec<_> = (0..threads).map(|_| scope.spawn(work)).collect();
        workers
            .into_iter()
            .flat_map(|worker| worker.join().unwrap_or_default())
            .collect()
    });
    outcomes.sort_by_key(|outcome| outcome.seed);
    for outcome in &outcomes {
        if let Some(failure) = &outcome.failure {
            println!("seed {}: {failure}", outcome.seed);
        }
        for (name, pull) in outcome.pulls.iter().filter(|(_, pull)| pull.abs() > 4.0) {
            println!("seed {}: {name} is {pull:+.1} sigma off", outcome.seed);
        }
    }
    println!("seeds {first} to {last}");
    print!("{}", campaign::table(&outcomes));
}
