//! The generic drivers, by their built-in maps alone, against the mock bench: in virtual time with named
//! faults, and once over real sockets and pseudo-terminals.

use std::time::Duration;

use darkline_core::channel::Role;
use darkline_core::quantity::Setting;
use darkline_core::trace::Direction;
use darkline_drivers::error::DriverError;
use darkline_drivers::link::{Address, Dial, dial_with};
use darkline_drivers::map::CommandMap;
use darkline_drivers::role::{
    CapturePlan, ChannelPlan, Digitizer as _, FrequencySweep, Outcome, RfGenerator as _, Role as _,
    TriggerSource,
};
use darkline_drivers::scpi::{ScpiDigitizer, ScpiGenerator};
use darkline_drivers::{Instrument, open};
use darkline_mock::world::{Truth, World};
use darkline_mock::{Fault, MockBench};

const PATIENCE: Duration = Duration::from_millis(200);

fn bench() -> MockBench {
    MockBench::new(World::new(Truth::shipped()), tokio::time::Instant::now())
}

fn memory(bench: &MockBench, name: &'static str) -> Box<dyn Dial> {
    let bench = bench.clone();
    Box::new(dial_with(name, move || {
        bench
            .connect(name)
            .ok_or_else(|| std::io::Error::from(std::io::ErrorKind::ConnectionRefused))
    }))
}

async fn opened(name: &str, dialler: Box<dyn Dial>) -> Outcome<Instrument> {
    let role = Role::find(MockBench::role(name).unwrap()).unwrap();
    let map = CommandMap::find(&format!("scpi-{}", role.name()), &[]).unwrap();
    open(name, role, map, dialler, None).await
}

async fn generator(dialler: Box<dyn Dial>) -> ScpiGenerator {
    match opened("probe", dialler).await.unwrap() {
        Instrument::RfGenerator(generator) => generator,
        _ => panic!("no generator"),
    }
}

async fn digitizer(dialler: Box<dyn Dial>) -> ScpiDigitizer {
    match opened("scope", dialler).await.unwrap() {
        Instrument::Digitizer(digitizer) => digitizer,
        _ => panic!("no digitizer"),
    }
}

fn sweep(direction: Direction) -> FrequencySweep {
    FrequencySweep {
        start: 79.85e6,
        stop: 80.15e6,
        duration: 0.04,
        steps: Some(2000),
        direction,
    }
}

fn plan() -> CapturePlan {
    let channel = |name: &str| ChannelPlan {
        channel: name.to_owned(),
        range: Some(1.5),
        offset: Some(0.5),
        coupling: Some("DC".to_owned()),
        bandwidth: Some(f64::INFINITY),
    };
    CapturePlan {
        channels: ["ch1", "ch2", "ch3"].map(channel).to_vec(),
        samples: 2000,
        interval: 20e-6,
        delay: 0.0,
        trigger: TriggerSource::External,
    }
}

async fn swept_point(probe: &mut ScpiGenerator, scope: &mut ScpiDigitizer, way: Direction) {
    let granted = probe.prepare_sweep(&sweep(way)).await.unwrap();
    assert_eq!(granted.granted, sweep(way));
    scope.arm().await.unwrap();
    probe.start_sweep().await.unwrap();
    scope.complete(PATIENCE).await.unwrap();
    probe.await_sweep(PATIENCE).await.unwrap();
    for channel in ["ch1", "ch2", "ch3"] {
        let data = scope.fetch(channel).await.unwrap();
        assert_eq!(data.codes.len(), 2000);
        assert!(data.value(1000).unwrap().is_finite() && data.scale > 0.0);
    }
}

#[tokio::test(start_paused = true)]
async fn every_instrument_opens_sets_and_measures() {
    let bench = bench();
    let mut coil = opened("coil", memory(&bench, "coil")).await.unwrap();
    assert_eq!(coil.identity().model, "BCS-1");
    coil.set("output", Setting::Switch(true)).await.unwrap();
    coil.set("current", Setting::Number(0.0203)).await.unwrap();
    tokio::time::sleep(Duration::from_secs(2)).await;
    let measured = coil.measure("current").await.unwrap();
    assert!((measured - 0.0203).abs() < 1e-4, "{measured}");
    let error = coil.set("current", Setting::Number(0.2)).await.unwrap_err();
    assert!(error.to_string().contains("-222"), "{error}");
    let mut oven = opened("oven", memory(&bench, "oven")).await.unwrap();
    oven.set("temperature", Setting::Number(333.15))
        .await
        .unwrap();
    assert!((290.0..400.0).contains(&oven.measure("temperature").await.unwrap()));
    let mut lock = opened("lock", memory(&bench, "lock")).await.unwrap();
    assert!(lock.measure("level").await.unwrap().is_finite());
    let mut control = opened("control", memory(&bench, "control")).await.unwrap();
    control.set("power", Setting::Number(-3.0)).await.unwrap();
    control
        .set("frequency", Setting::Number(80.0e6))
        .await
        .unwrap();
}

#[tokio::test(start_paused = true)]
async fn swept_points_up_and_down_and_a_missed_trigger() {
    let bench = bench();
    let mut probe = generator(memory(&bench, "probe")).await;
    let mut scope = digitizer(memory(&bench, "scope")).await;
    let granted = scope.configure(&plan()).await.unwrap();
    // The next range of 1-2-5 is granted, and both are kept.
    assert_eq!(granted.asked.channels[0].range, Some(1.5));
    assert_eq!(granted.granted.channels[0].range, Some(2.0));
    assert_eq!(granted.granted.channels[0].bandwidth, Some(f64::INFINITY));
    for way in [Direction::Up, Direction::Down, Direction::Up] {
        swept_point(&mut probe, &mut scope, way).await;
    }
    bench.fault(Fault::MissTrigger(1));
    scope.arm().await.unwrap();
    probe.start_sweep().await.unwrap();
    let error = scope.complete(PATIENCE).await.unwrap_err();
    assert!(
        matches!(error, DriverError::MissedTrigger { counted: 0, .. }),
        "{error}"
    );
    probe.await_sweep(PATIENCE).await.unwrap();
    swept_point(&mut probe, &mut scope, Direction::Up).await;
    probe.end_sweeping().await.unwrap();
}

#[tokio::test(start_paused = true)]
async fn named_faults_end_as_declared() {
    let bench = bench();
    let name = || "coil".to_owned();
    let mut coil = opened("coil", memory(&bench, "coil")).await.unwrap();
    let number = Setting::Number;
    coil.set("current", number(0.01)).await.unwrap();

    bench.fault(Fault::Disconnect(name()));
    tokio::time::sleep(Duration::from_millis(10)).await;
    let error = coil.readback("current").await.unwrap_err();
    assert!(error.link_lost(), "{error}");
    assert_eq!(coil.readback("current").await.unwrap(), number(0.01));

    bench.fault(Fault::TornReply(name()));
    assert!(
        coil.readback("current")
            .await
            .unwrap_err()
            .outcome_unknown()
    );
    assert_eq!(coil.readback("current").await.unwrap(), number(0.01));

    bench.fault(Fault::SlowReply {
        name: name(),
        probability: 0.1,
        delay: 2.5,
    });
    let mut answered = 0;
    for _ in 0..40 {
        if let Ok(found) = coil.readback("current").await {
            assert_eq!(found, number(0.01));
            answered += 1;
        }
    }
    assert!(answered > 10, "{answered}");
    bench.fault(Fault::Clear(name()));
    tokio::time::sleep(Duration::from_secs(10)).await;

    bench.fault(Fault::Silent(name()));
    let error = coil.set("current", number(0.011)).await.unwrap_err();
    assert!(error.outcome_unknown(), "{error}");
    bench.fault(Fault::Clear(name()));
    // What was sent is lost, and it stands where it was: read back, not assumed.
    let found = coil.readback("current").await.unwrap();
    assert!(found == number(0.01) || found == number(0.011), "{found:?}");

    bench.fault(Fault::PowerCycle(name()));
    let mut cycled = false;
    for _ in 0..3 {
        let outcome = coil.set("current", number(0.0)).await;
        cycled |= matches!(outcome, Err(DriverError::PowerCycled { .. }));
        tokio::time::sleep(Duration::from_secs(1)).await;
    }
    assert!(cycled);
    coil.set("current", number(0.0)).await.unwrap();

    bench.fault(Fault::WrongIdentity(name()));
    let error = coil.reconnect().await.unwrap_err();
    assert!(
        matches!(error, DriverError::WrongIdentity { .. }),
        "{error}"
    );
    bench.fault(Fault::Unreachable(name()));
    let error = coil.reconnect().await.unwrap_err();
    assert!(matches!(error, DriverError::Unreachable { .. }), "{error}");
}

#[tokio::test]
async fn over_real_sockets_and_pseudo_terminals() {
    let bench = bench();
    let endpoints = bench.serve().await.unwrap();
    let address = |name: &str| -> Box<dyn Dial> {
        let endpoint = endpoints
            .iter()
            .find(|endpoint| endpoint.name == name)
            .unwrap();
        Box::new(endpoint.address.parse::<Address>().unwrap())
    };
    for name in ["coil", "oven"] {
        let mut serial = opened(name, address(name)).await.unwrap();
        serial.set("output", Setting::Switch(true)).await.unwrap();
        serial.check().await.unwrap();
        serial.reconnect().await.unwrap();
        assert_eq!(
            serial.readback("output").await.unwrap(),
            Setting::Switch(true)
        );
    }
    let mut probe = generator(address("probe")).await;
    let mut scope = digitizer(address("scope")).await;
    scope.configure(&plan()).await.unwrap();
    for way in [Direction::Up, Direction::Down] {
        swept_point(&mut probe, &mut scope, way).await;
    }
}
