//! Named faults as a client meets them.

use std::time::Duration;

use darkline_mock::{Fault, TimedFault};
use tokio::io::AsyncReadExt;
use tokio::time::timeout;

use crate::{bench, client};

fn timed(text: &str) -> TimedFault {
    text.parse().unwrap()
}

#[tokio::test(start_paused = true)]
async fn silence_and_its_end() {
    let bench = bench();
    let mut scope = client(&bench, "scope");
    bench.fault(Fault::Silent("scope".into()));
    assert!(
        timeout(Duration::from_secs(5), scope.ask("*IDN?"))
            .await
            .is_err()
    );
    bench.fault(Fault::Clear("scope".into()));
    assert_eq!(
        scope.ask("*OPC?").await,
        "1",
        "what it did not hear is not answered later"
    );
}

#[tokio::test(start_paused = true)]
async fn late_and_torn_replies() {
    let bench = bench();
    let mut scope = client(&bench, "scope");
    bench.schedule(timed("slow-reply:scope:1:0.3"));
    let before = tokio::time::Instant::now();
    assert_eq!(scope.ask("*OPC?").await, "1");
    assert!(before.elapsed() >= Duration::from_millis(300));
    // Replies keep their order: a late one comes before the next.
    scope.say("*ESE 5;*ESE?").await;
    scope.say("*ESE 6;*ESE?").await;
    assert_eq!(
        (scope.line().await, scope.line().await),
        ("5".to_owned(), "6".to_owned())
    );
    bench.schedule(timed("torn-reply:scope"));
    scope.say("*IDN?").await;
    let mut rest = Vec::new();
    scope.0.read_to_end(&mut rest).await.unwrap();
    assert_eq!(rest, b"Umbra,DIG-");
    assert_eq!(
        client(&bench, "scope").ask("*ESE?").await,
        "6",
        "the instrument is as it was"
    );
}

#[tokio::test(start_paused = true)]
async fn power_cycle_loses_settings_and_tells() {
    let bench = bench();
    let mut coil = client(&bench, "coil");
    coil.say("CURR 10 MA;:OUTP ON;*ESE 4").await;
    assert_eq!(coil.ask("*ESR?;*ESR?").await, "128;0");
    bench.schedule(timed("power-cycle:coil@2.5"));
    assert_eq!(coil.number("CURR?").await, 0.01);
    tokio::time::sleep(Duration::from_secs(3)).await;
    assert_eq!(
        coil.ask("CURR?;:OUTP?;*ESE?;*ESR?").await,
        "0.0E+00;0;0;128"
    );
    assert!(bench.with_world(|now, world| world.coil_current(now)).abs() < 1e-6);
    // A query that waits when the power goes is never answered.
    let mut scope = client(&bench, "scope");
    scope.say("TRIG:SOUR EXT;:INIT;*OPC?").await;
    tokio::time::sleep(Duration::from_millis(10)).await;
    bench.fault(Fault::PowerCycle("scope".into()));
    assert!(timeout(Duration::from_secs(5), scope.line()).await.is_err());
    assert_eq!(scope.ask("TRIG:SOUR?").await, "IMM");
}

#[tokio::test(start_paused = true)]
async fn links_are_closed_and_turned_away() {
    let bench = bench();
    let mut probe = client(&bench, "probe");
    probe.say("FREQ 81 MHZ").await;
    assert_eq!(probe.ask("*OPC?").await, "1");
    bench.fault(Fault::Disconnect("probe".into()));
    assert_eq!(probe.0.read(&mut [0; 8]).await.unwrap(), 0);
    let mut probe = client(&bench, "probe");
    assert_eq!(
        probe.number("FREQ?").await,
        81e6,
        "the same instrument in the same state"
    );
    bench.fault(Fault::Unreachable("probe".into()));
    assert_eq!(probe.0.read(&mut [0; 8]).await.unwrap(), 0);
    assert!(bench.connect("probe").is_none());
    bench.fault(Fault::Clear("probe".into()));
    assert_eq!(client(&bench, "probe").number("FREQ?").await, 81e6);
}

#[tokio::test(start_paused = true)]
async fn wrong_identity_and_wrong_readback() {
    let bench = bench();
    bench.schedule(timed("wrong-identity:control"));
    assert!(
        !client(&bench, "control")
            .ask("*IDN?")
            .await
            .contains("RFG-2")
    );
    let mut coil = client(&bench, "coil");
    let before = coil.number("MEAS:CURR?").await;
    bench.schedule(timed("readback-offset:coil:0.005"));
    let after = coil.number("MEAS:CURR?").await;
    assert!((after - before - 0.005).abs() < 1e-3, "{before} {after}");
}

#[tokio::test(start_paused = true)]
async fn lock_is_lost_for_its_time() {
    let bench = bench();
    let mut monitor = client(&bench, "lock");
    bench.schedule(timed("lock-lost:2@1"));
    let mut levels = Vec::new();
    for _ in 0..9 {
        levels.push(monitor.number("MEAS:VOLT?").await > 0.3);
        tokio::time::sleep(Duration::from_millis(500)).await;
    }
    assert_eq!(
        levels,
        [true, true, false, false, false, false, true, true, true]
    );
}
