//! Itineraries against the shipped bench: orders, visits, moves, size.

#![expect(
    clippy::unwrap_used,
    clippy::panic,
    reason = "a test says what is wrong by panicking"
)]

use std::collections::BTreeSet;
use std::path::Path;

use darkline_core::itinerary::{Itinerary, PointKind, check};
use darkline_core::quantity::Setting;

#[expect(
    clippy::disallowed_methods,
    reason = "the test reads the shipped bench"
)]
fn plan(sequence: &str) -> Itinerary {
    let path = Path::new(env!("CARGO_MANIFEST_DIR")).join("../../mock/bench.toml");
    let bench = std::fs::read_to_string(path).unwrap();
    match check(&bench, &format!("{HEAD}{sequence}{TAIL}")) {
        Ok((_, _, itinerary)) => itinerary,
        Err(found) => panic!("{found:#?}"),
    }
}

const HEAD: &str = r#"
title = "A scan"
[set]
"control.output" = "on"
"probe.output" = "on"
"coil.output" = "on"
"#;
const TAIL: &str = r#"
[sweep]
quantity = "probe.frequency"
centre = "80 MHz"
span = "120 kHz"
duration = "40 ms"
record = { signal = "scope.ch1" }
samples = 1000
"#;

/// Setpoint of a quantity at every point.
fn setpoints(itinerary: &Itinerary, quantity: &str) -> Vec<f64> {
    let at = |index| {
        let settings = itinerary.settings(index).unwrap();
        let found = settings
            .into_iter()
            .find(|m| m.quantity.as_str() == quantity);
        found.and_then(|m| m.setpoint.number()).unwrap()
    };
    (0..itinerary.len()).map(at).collect()
}

fn coil(order: &str) -> String {
    format!(
        "[[step]]\nquantity = \"coil.current\"\nfrom = \"-10 mA\"\nto = \"10 mA\"\ncount = 5\norder = {order}\n"
    )
}

fn milli(values: &[f64]) -> Vec<i64> {
    values.iter().map(|v| (v * 1e3).round() as i64).collect()
}

#[test]
fn orders_are_kept() {
    let at = |order| milli(&setpoints(&plan(&coil(order)), "coil.current"));
    assert_eq!(at("\"rising\""), [-10, -5, 0, 5, 10]);
    assert_eq!(at("\"falling\""), [10, 5, 0, -5, -10]);
    assert_eq!(at("\"there-and-back\""), [-10, -5, 0, 5, 10, 5, 0, -5, -10]);
    let shuffled = at("\"shuffled\"\nseed = 3");
    assert_eq!(shuffled, at("\"shuffled\"\nseed = 3"));
    assert_eq!(shuffled.iter().collect::<BTreeSet<_>>().len(), 5);
}

#[test]
fn a_serpentine_turns_at_every_pass() {
    let outer = "[[step]]\nquantity = \"control.power\"\nvalues = [\"0 dBm\", \"-3 dBm\"]\n";
    let itinerary = plan(&format!("{outer}{}", coil("\"serpentine\"")));
    let currents = milli(&setpoints(&itinerary, "coil.current"));
    assert_eq!(currents, [-10, -5, 0, 5, 10, 10, 5, 0, -5, -10]);
    assert_eq!(setpoints(&itinerary, "control.power")[4..6], [0.0, -3.0]);
    let kind = itinerary.point(5).unwrap().kind;
    assert_eq!(kind, PointKind::Grid { grid: vec![1, 4] });
    // The coil stays where it is: only the power moves.
    assert_eq!(itinerary.point(5).unwrap().moves.len(), 1);
}

#[test]
fn lists_ranges_and_logarithms_are_expanded() {
    let list = "[[step]]\nquantity = \"coil.current\"\nvalues = [\"5 mA\", \"-5 mA\", \"1 mA\"]\n";
    assert_eq!(milli(&setpoints(&plan(list), "coil.current")), [5, -5, 1]);
    let rising = format!("{list}order = \"rising\"\n");
    assert_eq!(
        milli(&setpoints(&plan(&rising), "coil.current")),
        [-5, 1, 5]
    );
    let ranges = "[[step]]\nquantity = \"coil.current\"\nranges = [\n\
        { from = \"-20 mA\", to = \"-10 mA\", count = 2 },\n\
        { from = \"-1 mA\", to = \"1 mA\", count = 3 },\n]\n";
    assert_eq!(
        milli(&setpoints(&plan(ranges), "coil.current")),
        [-20, -10, -1, 0, 1]
    );
    let log = "[[step]]\nquantity = \"coil.current\"\nfrom = \"10 uA\"\nto = \"10 mA\"\ncount = 4\nspacing = \"log\"\n";
    let values = setpoints(&plan(log), "coil.current");
    for (value, wanted) in values.iter().zip([1e-5, 1e-4, 1e-3, 1e-2]) {
        assert!((value / wanted - 1.0).abs() < 1e-12, "{values:?}");
    }
}

#[test]
fn quantities_step_together() {
    let step = format!(
        "{}together = [{{ quantity = \"control.power\", from = \"-4 dBm\", to = \"0 dBm\" }}]\n",
        coil("\"rising\"")
    );
    let itinerary = plan(&step);
    assert_eq!(itinerary.len(), 5);
    assert_eq!(
        setpoints(&itinerary, "control.power"),
        [-4.0, -3.0, -2.0, -1.0, 0.0]
    );
    assert_eq!(itinerary.point(1).unwrap().moves.len(), 2);
    assert_eq!(itinerary.steps()[0].quantities.len(), 2);
}

#[test]
fn an_approach_comes_from_one_side_and_forbids_overlap() {
    let step = format!(
        "{}approach = {{ from = \"below\", by = \"1 mA\" }}\n",
        coil("\"falling\"")
    );
    let itinerary = plan(&step);
    let point = itinerary.point(1).unwrap();
    assert!(!point.overlap);
    let approach = point.moves[0].approach.unwrap();
    assert!((approach - 4e-3).abs() < 1e-12, "{approach}");
    let coil = itinerary
        .forecast()
        .extremes
        .into_iter()
        .find(|e| e.quantity.as_str() == "coil.current");
    assert!((coil.unwrap().lowest + 11e-3).abs() < 1e-12);
    assert!(plan(&self::coil("\"falling\"")).point(1).unwrap().overlap);
}

#[test]
fn a_background_is_put_back_with_its_own_settle_rule() {
    let step = format!(
        "{}[[background]]\nevery = 2\nwith = {{ \"control.output\" = \"off\" }}\nsettle = {{ at_least = \"70 ms\" }}\n",
        coil("\"rising\"")
    );
    let itinerary = plan(&step);
    // Before the grid points 0, 2 and 4.
    let kinds: Vec<bool> = (0..itinerary.len())
        .map(|i| {
            matches!(
                itinerary.point(i).unwrap().kind,
                PointKind::Background { which: 0 }
            )
        })
        .collect();
    assert_eq!(kinds, [true, false, false, true, false, false, true, false]);
    let (there, back) = (itinerary.point(3).unwrap(), itinerary.point(4).unwrap());
    let switched = |moves: &[darkline_core::itinerary::Move]| {
        let found = moves
            .iter()
            .find(|m| m.quantity.as_str() == "control.output")
            .cloned();
        found.map(|m| (m.setpoint, m.settle.at_least))
    };
    assert_eq!(switched(&there.moves), Some((Setting::Switch(false), 0.07)));
    assert_eq!(switched(&back.moves), Some((Setting::Switch(true), 0.07)));
    assert_eq!(
        back.moves.len(),
        1,
        "the coil went there with the background"
    );
}

#[test]
fn a_degauss_alternates_decays_and_ends_at_zero() {
    let degauss = "[degauss]\nquantity = \"coil.current\"\nfrom = \"20 mA\"\ndecay = 0.5\ncount = 4\ndwell = \"100 ms\"\n";
    let itinerary = plan(&format!("{}{degauss}", coil("\"rising\"")));
    let plan = itinerary.degauss().unwrap();
    let wanted = [20e-3, -10e-3, 5e-3, -2.5e-3, 0.0];
    assert_eq!(plan.setpoints.len(), wanted.len());
    for (found, wanted) in plan.setpoints.iter().zip(wanted) {
        assert!((found - wanted).abs() < 1e-12);
    }
    // The supply must be on before it begins.
    assert!(
        plan.before
            .iter()
            .any(|m| m.quantity.as_str() == "coil.output")
    );
    assert!(itinerary.forecast().seconds.degaussing > 0.5);
}

fn square(side: u32) -> String {
    let step = |quantity: &str, from: &str, to: &str| {
        format!(
            "[[step]]\nquantity = \"{quantity}\"\nfrom = \"{from}\"\nto = \"{to}\"\ncount = {side}\norder = \"shuffled\"\nseed = 1\n"
        )
    };
    step("coil.current", "-10 mA", "10 mA") + &step("control.power", "-30 dBm", "0 dBm")
}

/// What an itinerary holds, printed whole, is as long for a million points as for a hundred.
#[test]
fn a_million_points_take_no_more_memory_than_a_hundred() {
    let (small, large) = (plan(&square(10)), plan(&square(1000)));
    assert_eq!((small.len(), large.len()), (100, 1_000_000));
    let held = |itinerary: &Itinerary| format!("{itinerary:?}").len();
    assert!(
        held(&large) < held(&small) + 100,
        "{} {}",
        held(&small),
        held(&large)
    );
    assert!(large.point(999_999).is_some());
    assert_eq!(large.forecast().traces, 1_000_000);
}

#[test]
fn no_point_of_a_shuffled_grid_comes_twice() {
    let itinerary = plan(&square(30));
    let mut seen = BTreeSet::new();
    for index in 0..itinerary.len() {
        let PointKind::Grid { grid } = itinerary.point(index).unwrap().kind else {
            panic!("no grid point at {index}");
        };
        assert!(seen.insert(grid));
    }
    assert_eq!(seen.len(), 900);
}
