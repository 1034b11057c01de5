//! The generic drivers against the toy instrument.

use std::time::Duration;

use darkline_core::channel;
use darkline_core::quantity::Setting;
use darkline_core::trace::{Codes, Direction};
use darkline_drivers::error::DriverError;
use darkline_drivers::map::CommandMap;
use darkline_drivers::role::{
    CapturePlan, ChannelPlan, Digitizer, FrequencySweep, RfGenerator, Role, TriggerSource,
};
use darkline_drivers::{Instrument, open};

use super::toy::Toy;

fn built_in(role: channel::Role) -> CommandMap {
    CommandMap::find(&format!("scpi-{}", role.name()), &[]).unwrap()
}

async fn opened(toy: &Toy, role: channel::Role) -> Instrument {
    open("toy", role, built_in(role), toy.dialler(), None)
        .await
        .unwrap()
}

async fn digitizer(toy: &Toy) -> darkline_drivers::scpi::ScpiDigitizer {
    match opened(toy, channel::Role::Digitizer).await {
        Instrument::Digitizer(driver) => driver,
        _ => panic!("no digitizer"),
    }
}

fn plan() -> CapturePlan {
    CapturePlan {
        channels: vec![ChannelPlan {
            channel: "ch1".to_owned(),
            range: Some(1.0),
            offset: Some(0.25),
            coupling: Some("AC".to_owned()),
            bandwidth: Some(2e5),
        }],
        samples: 4,
        interval: 1e-5,
        delay: 0.0,
        trigger: TriggerSource::External,
    }
}

#[tokio::test(start_paused = true)]
async fn connecting_changes_nothing() {
    for role in channel::Role::ALL {
        let toy = Toy::new();
        let before = toy.look().registers.clone();
        let instrument = opened(&toy, role).await;
        assert_eq!(instrument.identity().to_string(), "Toy,Works,7,1.0");
        assert_eq!(toy.look().registers, before);
        assert!(
            toy.look()
                .heard
                .iter()
                .all(|message| !message.contains("*RST"))
        );
    }
}

#[tokio::test(start_paused = true)]
async fn set_read_back_and_measure() {
    let toy = Toy::new();
    let mut coil = opened(&toy, channel::Role::CurrentSupply).await;
    let granted = coil.set("current", Setting::Number(0.0203)).await.unwrap();
    assert_eq!(granted.granted, Setting::Number(0.0203));
    assert_eq!(toy.register("SOUR:CURR"), "0.0203");
    assert_eq!(coil.measure("current").await.unwrap(), 0.0203);
    assert!(coil.measures("current") && !coil.measures("output"));
    coil.set("output", Setting::Switch(true)).await.unwrap();
    assert_eq!(
        coil.readback("output").await.unwrap(),
        Setting::Switch(true)
    );
    // Past the instrument's own limit: refused with its words, nothing changed.
    let error = coil.set("current", Setting::Number(0.2)).await.unwrap_err();
    assert!(
        error.to_string().contains("-222 \"Data out of range\""),
        "{error}"
    );
    assert!(!error.outcome_unknown());
    assert_eq!(
        coil.readback("current").await.unwrap(),
        Setting::Number(0.0203)
    );
    let error = coil.set("field", Setting::Number(1.0)).await.unwrap_err();
    assert!(matches!(error, DriverError::NotInMap { .. }));
    // SCPI's not-a-number is a value, not an error.
    let toy = Toy::new();
    let mut oven = opened(&toy, channel::Role::TemperatureController).await;
    oven.set("temperature", Setting::Number(353.15))
        .await
        .unwrap();
    assert_eq!(toy.register("SOUR:TEMP"), "80");
    assert!(oven.measure("temperature").await.unwrap().is_nan());
}

#[tokio::test(start_paused = true)]
async fn a_readback_that_differs_is_an_error() {
    let toy = Toy::new();
    let mut coil = opened(&toy, channel::Role::CurrentSupply).await;
    // It rounds to 1 mA, coarser than its map says.
    toy.look().coarse = true;
    coil.set("current", Setting::Number(0.012)).await.unwrap();
    let error = coil
        .set("current", Setting::Number(0.0125))
        .await
        .unwrap_err();
    assert!(matches!(error, DriverError::Readback { .. }), "{error}");
}

#[tokio::test(start_paused = true)]
async fn wrong_identity_silence_and_no_link() {
    let toy = Toy::new();
    let role = channel::Role::CurrentSupply;
    let wrong = open("coil", role, built_in(role), toy.dialler(), Some("BCS-1")).await;
    assert!(matches!(
        wrong.err(),
        Some(DriverError::WrongIdentity { .. })
    ));
    toy.look().silent = true;
    let silent = open("coil", role, built_in(role), toy.dialler(), None).await;
    assert!(matches!(silent.err(), Some(DriverError::OutOfStep { .. })));
    toy.look().unplugged = true;
    let none = open("coil", role, built_in(role), toy.dialler(), None).await;
    assert!(matches!(none.err(), Some(DriverError::Unreachable { .. })));
    let other = open(
        "coil",
        role,
        built_in(channel::Role::Monitor),
        toy.dialler(),
        None,
    )
    .await;
    assert!(matches!(other.err(), Some(DriverError::NotInMap { .. })));
}

#[tokio::test(start_paused = true)]
async fn a_power_cycle_is_a_fault() {
    let toy = Toy::new();
    let mut coil = opened(&toy, channel::Role::CurrentSupply).await;
    coil.set("current", Setting::Number(0.01)).await.unwrap();
    {
        let mut look = toy.look();
        look.esr = 128;
        look.registers
            .insert("SOUR:CURR".to_owned(), "0".to_owned());
    }
    let error = coil.set("output", Setting::Switch(true)).await.unwrap_err();
    assert!(matches!(error, DriverError::PowerCycled { .. }), "{error}");
    // It can be spoken to afterwards, so that it can be made safe.
    coil.set("output", Setting::Switch(false)).await.unwrap();
}

#[tokio::test(start_paused = true)]
async fn after_a_doubt_every_number_is_read_again() {
    let toy = Toy::new();
    let mut coil = opened(&toy, channel::Role::CurrentSupply).await;
    coil.set("current", Setting::Number(0.01)).await.unwrap();
    toy.look().silent = true;
    let lost = coil.set("output", Setting::Switch(true)).await.unwrap_err();
    assert!(lost.outcome_unknown(), "{lost}");
    {
        let mut look = toy.look();
        look.silent = false;
        look.registers
            .insert("SOUR:CURR".to_owned(), "0.03".to_owned());
    }
    let error = coil.readback("output").await.unwrap_err();
    assert!(matches!(error, DriverError::Readback { .. }), "{error}");
    // Said once; from then on what it says counts.
    assert_eq!(
        coil.readback("current").await.unwrap(),
        Setting::Number(0.03)
    );
    assert_eq!(
        coil.readback("output").await.unwrap(),
        Setting::Switch(true)
    );
}

#[tokio::test(start_paused = true)]
async fn a_broken_link_is_made_again_and_verified() {
    let toy = Toy::new();
    let mut scope = digitizer(&toy).await;
    scope.configure(&plan()).await.unwrap();
    scope.arm().await.unwrap();
    scope.complete(Duration::from_secs(1)).await.unwrap();
    toy.look().cut_block = Some(40);
    let error = scope.fetch("ch1").await.unwrap_err();
    assert!(matches!(error, DriverError::Disconnected { .. }), "{error}");
    assert!(error.link_lost() && error.outcome_unknown());
    // The next question dials again; the record is still there.
    assert_eq!(scope.fetch("ch1").await.unwrap().codes.len(), 4);
    // Another instrument behind the same address is not taken for the first.
    toy.look().cut_block = Some(40);
    scope.fetch("ch1").await.unwrap_err();
    toy.look().identity = "Toy,Works,8,1.0".to_owned();
    let error = scope.fetch("ch1").await.unwrap_err();
    assert!(
        matches!(error, DriverError::WrongIdentity { .. }),
        "{error}"
    );
}

#[tokio::test(start_paused = true)]
async fn records_with_what_was_granted() {
    let toy = Toy::new();
    let mut scope = digitizer(&toy).await;
    let granted = scope.configure(&plan()).await.unwrap();
    assert_eq!(granted.granted, plan());
    assert_eq!(toy.register("FORM"), "INT,16");
    assert_eq!(toy.register("INP1:FILT"), "1");
    let heard = toy.look().heard.len();
    scope.configure(&plan()).await.unwrap();
    assert_eq!(
        toy.look().heard.len(),
        heard,
        "the same plan again says nothing"
    );
    let mut other = plan();
    other.channels[0].offset = Some(0.5);
    scope.configure(&other).await.unwrap();
    let said: Vec<String> = toy.look().heard[heard..].to_vec();
    assert_eq!(said[0], "SENS1:VOLT:RANG:OFFS 0.5");
    assert!(
        said[1..].iter().all(|message| message.ends_with('?')),
        "{said:?}"
    );

    scope.arm().await.unwrap();
    assert!(toy.look().armed);
    scope.complete(Duration::from_secs(1)).await.unwrap();
    let data = scope.fetch("ch1").await.unwrap();
    assert_eq!(data.codes, Codes::I16(vec![-2, 256, -3, 300]));
    assert_eq!((data.scale, data.offset, data.clipped), (0.5, 1.5, 2));
    assert_eq!(data.value(0), Some(0.5));
    // An indefinite block, where the length is known, is as good.
    toy.look().indefinite = true;
    assert_eq!(scope.fetch("ch1").await.unwrap(), data);
}

#[tokio::test(start_paused = true)]
async fn a_missed_trigger_ends_in_its_own_error() {
    let toy = Toy::new();
    let mut scope = digitizer(&toy).await;
    scope.configure(&plan()).await.unwrap();
    toy.look().miss = 1;
    scope.arm().await.unwrap();
    let error = scope
        .complete(Duration::from_millis(100))
        .await
        .unwrap_err();
    assert!(
        matches!(error, DriverError::MissedTrigger { counted: 0, .. }),
        "{error}"
    );
    assert!(!toy.look().armed, "the record was ended");
    scope.arm().await.unwrap();
    scope.complete(Duration::from_millis(100)).await.unwrap();
    // A record that nobody asked for shows in the count.
    scope.arm().await.unwrap();
    toy.look().count += 1;
    let error = scope
        .complete(Duration::from_millis(100))
        .await
        .unwrap_err();
    assert!(
        matches!(error, DriverError::MissedTrigger { counted: 2, .. }),
        "{error}"
    );
}

#[tokio::test(start_paused = true)]
async fn a_torn_block_ends_in_time_and_leaves_no_trace() {
    let toy = Toy::new();
    let mut scope = digitizer(&toy).await;
    scope.configure(&plan()).await.unwrap();
    scope.arm().await.unwrap();
    scope.complete(Duration::from_secs(1)).await.unwrap();
    toy.look().short_block = Some(34);
    let error = scope.fetch("ch1").await.unwrap_err();
    assert!(matches!(error, DriverError::TimedOut { .. }), "{error}");
    let data = scope.fetch("ch1").await.unwrap();
    assert_eq!(data.codes, Codes::I16(vec![-2, 256, -3, 300]));
}

#[tokio::test(start_paused = true)]
async fn sweeps_say_only_what_differs() {
    let toy = Toy::new();
    let Instrument::RfGenerator(mut probe) = opened(&toy, channel::Role::RfGenerator).await else {
        panic!("no generator");
    };
    let mut sweep = FrequencySweep {
        start: 79.85e6,
        stop: 80.15e6,
        duration: 0.04,
        steps: Some(401),
        direction: Direction::Up,
    };
    let granted = probe.prepare_sweep(&sweep).await.unwrap();
    assert_eq!(granted.granted, sweep);
    assert_eq!(toy.register("SOUR:FREQ:MODE"), "SWE");
    assert_eq!(toy.register("SOUR:FREQ:STAR"), "79850000");
    let heard = toy.look().heard.len();
    sweep.direction = Direction::Down;
    probe.prepare_sweep(&sweep).await.unwrap();
    let said = toy.look().heard[heard..].to_vec();
    assert_eq!(said[0], "SOUR:SWE:DIR DOWN");
    assert!(said[1].starts_with("SOUR:FREQ:STAR?"), "{said:?}");
    probe.start_sweep().await.unwrap();
    probe.await_sweep(Duration::from_secs(1)).await.unwrap();
    assert!(toy.look().heard.iter().any(|message| message == "INIT"));
    probe.end_sweeping().await.unwrap();
    assert_eq!(toy.register("SOUR:FREQ:MODE"), "CW");
}

#[tokio::test(start_paused = true)]
async fn after_a_power_cycle_all_is_said_again() {
    let toy = Toy::new();
    let mut scope = digitizer(&toy).await;
    scope.configure(&plan()).await.unwrap();
    scope.arm().await.unwrap();
    scope.complete(Duration::from_secs(1)).await.unwrap();
    {
        let mut look = toy.look();
        look.esr = 128;
        look.count = 0;
        look.registers.insert("FORM".to_owned(), "ASC".to_owned());
    }
    let error = scope.arm().await.unwrap_err();
    assert!(matches!(error, DriverError::PowerCycled { .. }), "{error}");
    scope.configure(&plan()).await.unwrap();
    assert_eq!(toy.register("FORM"), "INT,16");
    scope.arm().await.unwrap();
    scope.complete(Duration::from_secs(1)).await.unwrap();
    assert_eq!(scope.fetch("ch1").await.unwrap().codes.len(), 4);
}

#[tokio::test(start_paused = true)]
async fn simple_instruments_are_asked_one_by_one_and_spared() {
    let text = r#"
role = "current-supply"
[talk]
ends = "crlf"
compound = false
error = ""
power_on = false
sentinel = { kind = "own", say = "TAG {n}", ask = "TAG?", most = 99 }
[quantity.current]
say = "SOUR:CURR {A}"
readback = "SOUR:CURR?"
resolution = "1 uA"
budget = 2
"#;
    let map = CommandMap::parse(text, "simple.toml").unwrap();
    let toy = Toy::new();
    let role = channel::Role::CurrentSupply;
    let mut coil = open("coil", role, map, toy.dialler(), None).await.unwrap();
    for value in [0.01, 0.01, 0.01, 0.02] {
        coil.set("current", Setting::Number(value)).await.unwrap();
    }
    let error = coil
        .set("current", Setting::Number(0.03))
        .await
        .unwrap_err();
    assert!(
        matches!(error, DriverError::BudgetSpent { written: 2, .. }),
        "{error}"
    );
    assert!(
        toy.look()
            .heard
            .iter()
            .all(|message| !message.contains(';'))
    );
    // Its own sentinel serves after a doubt.
    toy.look().silent = true;
    coil.readback("current").await.unwrap_err();
    toy.look().silent = false;
    assert_eq!(
        coil.readback("current").await.unwrap(),
        Setting::Number(0.02)
    );
}
