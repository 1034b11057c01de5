//! Making the bench safe: order, ramps, readback, and what cannot be reached.

use std::collections::BTreeMap;
use std::time::Duration;

use darkline_core::bench::{Bench, Instrument as Declared, Property, Specimen};
use darkline_core::channel::{Access, Role};
use darkline_core::quantity::{Dimension, QuantityName, Setting};
use darkline_drivers::map::CommandMap;
use darkline_drivers::role::Role as _;
use darkline_drivers::{Instrument, Level, make_safe, open};

use super::toy::Toy;

const SLEW: f64 = 0.1;
const STEP: f64 = 0.001;

fn property(name: &str, dimension: Dimension, rest: Setting, safe: Setting) -> Property {
    let ramped = dimension == Dimension::Current;
    Property {
        name: QuantityName::new(name).unwrap(),
        dimension,
        access: Access::Settable,
        range: (dimension != Dimension::Switch).then_some((-0.05, 0.05)),
        slew: ramped.then_some(SLEW),
        ramp_step: ramped.then_some(STEP),
        rest: Some(rest),
        safe: Some(safe),
        resolution: None,
        accuracy: None,
    }
}

fn supply(name: &str) -> Declared {
    let (zero, off) = (Setting::Number(0.0), Setting::Switch(false));
    let current = property(&format!("{name}.current"), Dimension::Current, zero, zero);
    let on = Setting::Switch(true);
    let output = property(&format!("{name}.output"), Dimension::Switch, on, off);
    Declared {
        name: name.to_owned(),
        role: Role::CurrentSupply,
        map: "scpi-current-supply".to_owned(),
        link: "memory".to_owned(),
        identity: None,
        properties: [
            ("current".to_owned(), current),
            ("output".to_owned(), output),
        ]
        .into(),
        channels: BTreeMap::new(),
        polarity: None,
        amplifier: 0.0,
        modulator_limit: None,
    }
}

fn bench(order: &[&[&str]]) -> Bench {
    let names = |group: &&[&str]| group.iter().map(|name| (*name).to_owned()).collect();
    let order: Vec<Vec<String>> = order.iter().map(names).collect();
    let instruments = order
        .iter()
        .flatten()
        .map(|name| (name.clone(), supply(name)));
    Bench {
        title: "toys".to_owned(),
        instruments: instruments.collect(),
        rest_order: order.clone(),
        safe_order: order,
        interlocks: Vec::new(),
        timing: None,
        physics: None,
        specimen: Specimen::default(),
    }
}

async fn driven(name: &str, current: f64) -> (Toy, Instrument) {
    let toy = Toy::new();
    let map = CommandMap::find("scpi-current-supply", &[]).unwrap();
    let dialler = toy.dialler();
    let mut coil = open(name, Role::CurrentSupply, map, dialler, None)
        .await
        .unwrap();
    coil.set("current", Setting::Number(current)).await.unwrap();
    coil.set("output", Setting::Switch(true)).await.unwrap();
    toy.look().heard.clear();
    toy.look().times.clear();
    (toy, coil)
}

/// The currents said, with their times in s since the first.
fn currents(toy: &Toy) -> Vec<(f64, f64)> {
    let look = toy.look();
    let begun = look.times[0];
    let said = look.heard.iter().zip(&look.times);
    said.filter_map(|(message, at)| {
        let value = message.strip_prefix("SOUR:CURR ")?.parse().unwrap();
        Some(((*at - begun).as_secs_f64(), value))
    })
    .collect()
}

#[tokio::test(start_paused = true)]
async fn ramps_down_in_stairs_then_switches_off() {
    let (toy, coil) = driven("coil", 0.0203).await;
    let mut instruments: BTreeMap<_, _> = [("coil".to_owned(), coil)].into();
    let bench = bench(&[&["coil"]]);
    let report = make_safe(&bench, Level::Safe, &mut instruments).await;
    assert!(report.is_safe(), "{report:?}");
    assert_eq!(report.reached, ["coil"]);
    assert_eq!(report.readbacks.len(), 2);
    assert!(instruments.contains_key("coil"), "given back");
    assert_eq!(
        (
            toy.register("SOUR:CURR").as_str(),
            toy.register("OUTP").as_str()
        ),
        ("0", "0")
    );
    let stairs = currents(&toy);
    assert!(stairs.len() > 20);
    let mut last = 0.0203;
    for (_, value) in &stairs {
        assert!(
            (value - last).abs() <= STEP * (1.0 + 1e-9),
            "{last} to {value}"
        );
        last = *value;
    }
    // Over any 100 ms at most slew x 100 ms and one stair.
    for (at, value) in &stairs {
        for (_, later) in stairs.iter().filter(|(t, _)| *t >= *at && *t <= at + 0.1) {
            assert!((later - value).abs() <= SLEW * 0.1 + STEP + 1e-12);
        }
    }
    let heard = toy.look().heard.clone();
    let last_current = heard
        .iter()
        .rposition(|m| m.starts_with("SOUR:CURR "))
        .unwrap();
    let off = heard.iter().position(|m| m == "OUTP 0").unwrap();
    assert!(off > last_current, "the output goes off at zero current");
}

#[tokio::test(start_paused = true)]
async fn rest_keeps_what_it_declares() {
    let (toy, coil) = driven("coil", 0.005).await;
    let mut instruments: BTreeMap<_, _> = [("coil".to_owned(), coil)].into();
    let report = make_safe(&bench(&[&["coil"]]), Level::Rest, &mut instruments).await;
    assert!(report.is_safe(), "{report:?}");
    assert_eq!(
        (
            toy.register("SOUR:CURR").as_str(),
            toy.register("OUTP").as_str()
        ),
        ("0", "1")
    );
}

#[tokio::test(start_paused = true)]
async fn what_cannot_be_reached_is_passed_over_and_named() {
    let (mute, deaf) = driven("deaf", 0.02).await;
    mute.look().silent = true;
    let (first, one) = driven("one", 0.02).await;
    let (second, two) = driven("two", -0.02).await;
    let mut instruments: BTreeMap<_, _> = [
        ("deaf".to_owned(), deaf),
        ("one".to_owned(), one),
        ("two".to_owned(), two),
    ]
    .into();
    let begun = tokio::time::Instant::now();
    let bench = bench(&[&["deaf", "one"], &["absent", "two"]]);
    let report = make_safe(&bench, Level::Safe, &mut instruments).await;
    assert!(
        begun.elapsed() < Duration::from_secs(40),
        "bounded: {:?}",
        begun.elapsed()
    );
    assert!(!report.is_safe());
    assert_eq!(report.reached, ["one", "two"]);
    let names: Vec<&str> = report
        .unreached
        .iter()
        .map(|(name, _)| name.as_str())
        .collect();
    assert_eq!(names, ["deaf", "absent"]);
    assert!(report.unreached[1].1.contains("not opened"), "{report:?}");
    for toy in [&first, &second] {
        assert_eq!(toy.register("SOUR:CURR"), "0");
        assert_eq!(toy.register("OUTP"), "0");
    }
    // Groups in order, instruments of a group at the same time.
    let (first, second) = (first.look(), second.look());
    assert!(second.times[0] >= *first.times.last().unwrap());
}

#[tokio::test(start_paused = true)]
async fn a_link_that_broke_is_dialled_once_more() {
    let (toy, mut coil) = driven("coil", 0.01).await;
    // The link breaks in a question; the instrument stays as it was.
    let Instrument::CurrentSupply(scpi) = &mut coil else {
        panic!("no supply");
    };
    scpi.exchange().close();
    let mut instruments: BTreeMap<_, _> = [("coil".to_owned(), coil)].into();
    let report = make_safe(&bench(&[&["coil"]]), Level::Safe, &mut instruments).await;
    assert!(report.is_safe(), "{report:?}");
    assert_eq!(toy.register("SOUR:CURR"), "0");
    // A power cycle in between: the instrument woke up at zero, which is where it should be.
    toy.look().esr = 128;
    let report = make_safe(&bench(&[&["coil"]]), Level::Safe, &mut instruments).await;
    assert!(report.is_safe(), "{report:?}");
    // Unplugged: said, not waited for.
    toy.look().unplugged = true;
    let Some(Instrument::CurrentSupply(scpi)) = instruments.get_mut("coil") else {
        panic!("no supply");
    };
    scpi.exchange().close();
    let report = make_safe(&bench(&[&["coil"]]), Level::Safe, &mut instruments).await;
    assert!(
        report.unreached[0].1.contains("cannot be reached"),
        "{report:?}"
    );
}
