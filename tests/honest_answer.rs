//! A share of the honest-answer campaign: none of its answers is far off, and as many lie within one and two sigma
//! as should. `cargo run --release --example honest-answer` runs all of it.
#![allow(
    clippy::unwrap_used,
    reason = "a check may panic: that is how it fails"
)]

mod campaign;

use campaign::{NAMES, coverage, run_seed, table};

/// Seeds of this share.
const SEEDS: u64 = 40;

#[test]
fn a_share_of_the_campaign_is_answered_honestly() {
    let outcomes: Vec<_> = std::thread::scope(|scope| {
        let halves: Vec<_> = (0..2)
            .map(|half| {
                scope.spawn(move || {
                    (1..=SEEDS)
                        .filter(|seed| seed % 2 == half)
                        .map(run_seed)
                        .collect::<Vec<_>>()
                })
            })
            .collect();
        halves
            .into_iter()
            .flat_map(|half| half.join().unwrap())
            .collect()
    });
    let table = table(&outcomes);
    println!("{table}");
    for outcome in &outcomes {
        assert!(
            outcome.failure.is_none(),
            "seed {}: {:?}",
            outcome.seed,
            outcome.failure
        );
        for (name, pull) in &outcome.pulls {
            assert!(
                pull.abs() < 5.0,
                "seed {}: {name} is {pull:+.1} sigma off",
                outcome.seed
            );
        }
    }
    for name in NAMES {
        let found = coverage(&outcomes, name);
        if found.count < 10 {
            continue;
        }
        // Four binomial standard deviations of so few seeds around the normal distribution's shares.
        let room = |share: f64| 4.0 * (share * (1.0 - share) / found.count as f64).sqrt();
        for (within, share) in [(found.one, 0.683), (found.two, 0.954)] {
            assert!(
                (within - share).abs() <= room(share),
                "{name}: {within:.3} of the answers where {share} are due\n{table}"
            );
        }
    }
    let limits: Vec<bool> = outcomes.iter().filter_map(|o| o.limit_covers).collect();
    let missed = limits.iter().filter(|covers| !**covers).count();
    assert!(
        missed <= 4,
        "{missed} of {} limits miss the truth",
        limits.len()
    );
}
