//! The shipped bench and sequence files: each passes `check` without a warning, and says what it is for.

#![expect(clippy::panic, reason = "a test says what is wrong by panicking")]

use std::path::PathBuf;
use std::sync::Arc;

use darkline_core::itinerary::{self, Itinerary, PointKind};
use darkline_core::quantity::{Dimension, display};

#[expect(
    clippy::disallowed_methods,
    reason = "the test reads the shipped files"
)]
fn read(path: &str) -> String {
    let root = PathBuf::from(env!("CARGO_MANIFEST_DIR")).join("../..");
    std::fs::read_to_string(root.join(path)).unwrap_or_else(|e| panic!("{path}: {e}"))
}

fn plan(sequence: &str) -> Itinerary {
    let found = itinerary::check(&read("mock/bench.toml"), &read(sequence));
    match found {
        Ok((_, _, itinerary)) => itinerary,
        Err(findings) => {
            let lines: Vec<String> = findings
                .iter()
                .map(|d| format!("{d} at {:?}", d.span))
                .collect();
            panic!("{sequence}: {}", lines.join("\n"))
        }
    }
}

const SEQUENCES: [&str; 6] = [
    "sequences/coil-constant.toml",
    "sequences/coil-constant-stepped.toml",
    "sequences/hysteresis.toml",
    "sequences/control-power.toml",
    "sequences/temperature.toml",
    "sequences/field-log.toml",
];

#[test]
fn every_shipped_sequence_passes_without_a_warning() {
    for sequence in SEQUENCES {
        let itinerary = plan(sequence);
        assert_eq!(itinerary.warnings(), [], "{sequence}");
        let forecast = itinerary.forecast();
        let time = |s| display(s, Dimension::Time);
        println!(
            "{sequence}: {} points, {} traces, {} bytes, {}",
            forecast.points,
            forecast.traces,
            forecast.bytes,
            time(forecast.seconds.total)
        );
        println!("  {:?}", forecast.seconds);
        assert!(!forecast.extremes.is_empty(), "{sequence}");
        for extreme in forecast.extremes {
            let (low, high) = extreme.limit.expect("numbers have limits");
            assert!(
                low <= extreme.lowest && extreme.highest <= high,
                "{extreme:?}"
            );
        }
    }
}

#[test]
fn the_coil_scan_is_planned_for_at_most_twelve_seconds() {
    let forecast = plan("sequences/coil-constant.toml").forecast();
    assert!(forecast.seconds.total <= 12.0, "{:?}", forecast.seconds);
    assert!(forecast.seconds.sweeping <= 7.0, "{:?}", forecast.seconds);
}

#[test]
fn moves_and_settings_agree_along_every_sequence() {
    for sequence in SEQUENCES {
        let itinerary = plan(sequence);
        let mut state = std::collections::BTreeMap::new();
        for index in 0..itinerary.len() {
            let point = itinerary.point(index).unwrap();
            assert_eq!(point.index, index);
            for step in point.moves {
                state.insert(step.quantity, step.setpoint);
            }
            let settings = itinerary.settings(index).unwrap();
            let wanted = settings.into_iter().map(|m| (m.quantity, m.setpoint));
            assert_eq!(state, wanted.collect(), "{sequence} {index}");
        }
        assert_eq!(itinerary.point(itinerary.len()), None);
    }
}

#[test]
fn references_frame_the_coil_scan() {
    let itinerary = plan("sequences/coil-constant.toml");
    let kinds: Vec<PointKind> = (0..itinerary.len())
        .map(|i| itinerary.point(i).unwrap().kind)
        .collect();
    let reference = PointKind::Reference { which: 0 };
    let places: Vec<usize> = (0..kinds.len())
        .filter(|i| kinds[*i] == reference)
        .collect();
    // Before the grid points 0, 10, 20 and 30, and at the end.
    assert_eq!(places, [0, 11, 22, 33, 35]);
    let grid: Vec<u64> = kinds
        .iter()
        .filter_map(|kind| match kind {
            PointKind::Grid { grid } => Some(grid[0]),
            _ => None,
        })
        .collect();
    assert_eq!(grid, (0..31).collect::<Vec<_>>());
}

#[test]
fn the_field_log_ticks_every_ten_seconds() {
    let itinerary = plan("sequences/field-log.toml");
    assert_eq!(itinerary.len(), 361);
    assert_eq!(itinerary.point(0).unwrap().due, Some(0.0));
    assert_eq!(itinerary.point(360).unwrap().due, Some(3600.0));
    assert!(itinerary.point(5).unwrap().moves.is_empty());
    // 14.01 Hz/nT x 118 nT/mA x 10 mA: the window goes along with the line.
    let centre = itinerary.point(0).unwrap().centre.unwrap();
    assert!((centre - 80.0165e6).abs() < 100.0, "{centre}");
}

#[test]
fn a_plan_from_parsed_parts_is_the_plan_of_check() {
    let (bench, sequence, itinerary) =
        itinerary::check(&read("mock/bench.toml"), &read(SEQUENCES[0])).unwrap();
    let again = Itinerary::plan(Arc::clone(&bench), sequence).unwrap();
    assert_eq!(again.len(), itinerary.len());
    assert_eq!(again.point(3), itinerary.point(3));
}
