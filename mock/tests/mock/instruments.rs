//! Generators, supply, oven and monitor: what they accept, what they refuse, and what the world gets of it.

use std::time::Duration;

use darkline_mock::world::Beam;

use crate::{bench, client};

#[tokio::test(start_paused = true)]
async fn generator_grants_what_it_can() {
    let bench = bench();
    let mut probe = client(&bench, "probe");
    for (set, query, answer) in [
        ("FREQ 80.1234567 MHZ", "SOUR:FREQ:CW?", "8.01234567E+07"),
        ("FREQ 80000000.00049", "FREQ?", "8.0E+07"),
        ("POW -3.14159 DBM", "SOUR:POW:LEV:IMM:AMPL?", "-3.14E+00"),
        ("SWE:TIME 40 MS", "SWE:TIME?", "4.0E-02"),
        ("SWE:POIN 201.4", "SWE:POIN?", "201"),
        ("SWE:DWEL 1 MS", "SWE:TIME?", "2.01E-01"),
        ("SWE:DIR down", "SWE:DIR?", "DOWN"),
        ("SWE:GEN ANALOG", "SWE:GEN?", "ANAL"),
        ("SWE:SPAC LIN", "SWE:SPAC?", "LIN"),
        ("TRIG:SEQ:SOUR bus", "TRIG:SOUR?", "BUS"),
        ("OUTP ON", "OUTP:STAT?", "1"),
        ("OUTP 0", "OUTP?", "0"),
        (
            "FREQ:CENT 80 MHZ;SPAN 300 KHZ",
            "FREQ:STAR?;STOP?",
            "7.985E+07;8.015E+07",
        ),
        (
            "FREQ:STAR 79 MHZ;STOP 80 MHZ",
            "FREQ:CENT?;SPAN?",
            "7.95E+07;1.0E+06",
        ),
        (
            "FREQ MIN",
            "FREQ?;FREQ? MAX;FREQ? DEF",
            "1.0E+06;2.5E+08;8.0E+07",
        ),
        ("FREQ:MODE SWEEP", "FREQ:MODE?", "SWE"),
        (
            "*RST",
            "FREQ:MODE?;:FREQ?;:POW?;:OUTP?",
            "CW;8.0E+07;-6.0E+01;0",
        ),
    ] {
        probe.say(set).await;
        assert_eq!(probe.ask(query).await, answer, "{set}");
    }
    assert_eq!(probe.error().await, 0);
    for refused in [
        "FREQ 0.9 MHZ",
        "FREQ 250.001 MHZ",
        "POW 15.01",
        "POW -61",
        "FREQ:CENT 1.1 MHZ;SPAN 300 KHZ",
    ] {
        let before = probe.ask("FREQ?;:POW?;:FREQ:SPAN?").await;
        probe.say(refused).await;
        let after = probe.ask("FREQ?;:POW?;:FREQ:SPAN?").await;
        assert_eq!((before, probe.error().await), (after, -222), "{refused}");
        assert_eq!(probe.error().await, 0);
        probe.say("FREQ:CENT 1.15 MHZ;SPAN 200 KHZ").await;
    }
}

#[tokio::test(start_paused = true)]
async fn sweep_runs_both_ways_and_ends_in_time() {
    let bench = bench();
    let mut probe = client(&bench, "probe");
    let at = |bench: &darkline_mock::MockBench| {
        bench.with_world(|now, world| world.frequency(now, Beam::Probe))
    };
    probe
        .say("FREQ:MODE SWE;:FREQ:STAR 79 MHZ;STOP 81 MHZ;:SWE:TIME 1;GEN ANAL;:OUTP ON")
        .await;
    for (direction, begin, quarter, end) in
        [("UP", 79e6, 79.5e6, 81e6), ("DOWN", 81e6, 80.5e6, 79e6)]
    {
        probe
            .say(&format!("SWE:DIR {direction};:TRIG:SOUR BUS;:INIT"))
            .await;
        assert_eq!(
            probe.ask("STAT:OPER:COND?").await,
            "32",
            "waits for its trigger"
        );
        assert_eq!(at(&bench), begin);
        probe.say("*TRG").await;
        assert_eq!(probe.ask("STAT:OPER:COND?").await, "8", "sweeps");
        tokio::time::sleep(Duration::from_millis(250)).await;
        let there = at(&bench);
        assert!((there - quarter).abs() < 1.0, "{there}");
        let before = tokio::time::Instant::now();
        assert_eq!(probe.ask("*OPC?").await, "1");
        // The runtime's timers tick in milliseconds.
        let waited = before.elapsed().as_secs_f64();
        assert!((0.75..0.753).contains(&waited), "{waited}");
        assert_eq!(at(&bench), end);
        assert_eq!(probe.ask("STAT:OPER:COND?").await, "0");
    }
    probe.say("INIT;INIT").await;
    assert_eq!(probe.error().await, -213);
    probe.say("*TRG;:ABOR").await;
    assert_eq!(
        probe.ask("*OPC?").await,
        "1",
        "nothing is pending after an abort"
    );
    assert_eq!(at(&bench), 81e6, "back at the beginning");
    probe.say("FREQ:STAR 82 MHZ;:INIT").await;
    assert_eq!(probe.error().await, -221, "start above stop");
    probe.say("FREQ:MODE CW;:FREQ 80.5 MHZ").await;
    assert_eq!(probe.number("FREQ?").await, 80.5e6);
    assert_eq!(at(&bench), 80.5e6);
    assert_eq!(bench.history().of("probe").unwrap().triggers, 3);
}

#[tokio::test(start_paused = true)]
async fn supply_drives_the_coil_within_its_range() {
    let bench = bench();
    let mut coil = client(&bench, "coil");
    coil.say("SOUR:CURR 20 MA").await;
    tokio::time::sleep(Duration::from_secs(1)).await;
    assert!(
        bench.with_world(|now, world| world.coil_current(now)).abs() < 1e-9,
        "output is off"
    );
    coil.say("OUTP ON").await;
    tokio::time::sleep(Duration::from_secs(1)).await;
    let actual = bench.with_world(|now, world| world.coil_current(now));
    assert!((actual - 0.02).abs() < 1e-6, "{actual}");
    let measured = coil.number("MEAS:CURR?").await;
    assert!((measured - 0.02).abs() < 1e-3, "{measured}");
    assert!(coil.number("MEAS:VOLT?").await > 0.0);
    coil.say("CURR -12.3456789 MA").await;
    assert_eq!(
        coil.number("CURR?").await,
        -0.012346,
        "whole microamperes at 100 mA"
    );
    coil.say("CURR:RANG 15 MA").await;
    assert_eq!(coil.number("CURR:RANG?").await, 0.02);
    coil.say("CURR -12.3456789 MA").await;
    assert_eq!(
        coil.number("CURR?").await,
        -0.0123456,
        "finer in a smaller range"
    );
    coil.say("CURR:RANG 10 MA").await;
    assert_eq!(coil.error().await, -221);
    coil.say("CURR 20.1 MA").await;
    assert_eq!(coil.error().await, -222);
    coil.say("VOLT:PROT 5;:SOUR:VOLT?").await;
    assert_eq!(coil.line().await, "5.0E+00");
    coil.say("OUTP OFF").await;
    assert_eq!(coil.ask("OUTP?").await, "0");
    let history = bench.history();
    let history = history.of("coil").unwrap();
    let seen = history.extremes("current").unwrap();
    assert_eq!(
        (seen.greatest, seen.least, seen.last),
        (0.02, -0.012346, 0.0)
    );
    assert!((seen.greatest_step - 0.032346).abs() < 1e-12, "{seen:?}");
    assert_eq!((history.violations, history.refusals().len()), (0, 2));
}

#[tokio::test(start_paused = true)]
async fn nothing_beyond_the_own_limits_is_ever_accepted() {
    let bench = bench();
    let mut refused = 0;
    for (name, command, most) in [
        ("coil", "CURR", 0.1),
        ("probe", "FREQ", 250e6),
        ("control", "POW", 15.0),
        ("oven", "TEMP", 120.0),
    ] {
        let mut client = client(&bench, name);
        client.say("OUTP ON").await;
        for step in 0..=60 {
            let value = most * (f64::from(step) / 20.0 - 1.5);
            client.say(&format!("{command} {value:E}")).await;
            let accepted = client.number(&format!("{command}?")).await;
            assert!(
                accepted <= most && (accepted >= -most || name == "control"),
                "{name} {accepted}"
            );
        }
        for odd in ["9.9E37", "-9.9E37", "1E400", "-1E400", "9.91E37"] {
            client.say(&format!("{command} {odd}")).await;
        }
        let history = bench.history();
        let history = history.of(name).unwrap();
        assert_eq!(history.violations, 0);
        assert!(history.sets().len() > 10);
        refused += history.refusals().len();
    }
    assert!(refused > 100, "{refused}");
    let history = bench.history();
    assert_eq!(
        history.of("coil").unwrap().greatest_magnitude("current"),
        0.1
    );
    assert_eq!(
        history.of("probe").unwrap().greatest_magnitude("frequency"),
        250e6
    );
}

#[tokio::test(start_paused = true)]
async fn compliance_holds_the_current_and_says_so() {
    let bench = bench();
    let resistance = bench.with_world(|_, world| world.truth().coil.resistance);
    let mut coil = client(&bench, "coil");
    coil.say("VOLT:PROT 0.1;:CURR 100 MA;:OUTP ON").await;
    tokio::time::sleep(Duration::from_secs(1)).await;
    let actual = bench.with_world(|now, world| world.coil_current(now));
    let limited = 0.1 / resistance < 0.1;
    assert_eq!(
        coil.ask("STAT:QUES:COND?").await,
        if limited { "1" } else { "0" }
    );
    let most = (0.1 / resistance).min(0.1);
    assert!((actual - most).abs() < 1e-3 * most, "{actual} {most}");
}

#[tokio::test(start_paused = true)]
async fn oven_holds_its_cell() {
    let bench = bench();
    let truth = bench.with_world(|_, world| world.truth().cell.temperature) - 273.15;
    let mut oven = client(&bench, "oven");
    assert!((oven.number("MEAS:TEMP?").await - truth).abs() < 1.0);
    assert_eq!(oven.ask("OUTP?").await, "1", "a bench is found warm");
    oven.say("SOUR:TEMP:SPO 60.004 CEL").await;
    assert_eq!(oven.number("SOUR:TEMP?").await, 60.0);
    oven.say("UNIT:TEMP K").await;
    assert_eq!(oven.ask("SOUR:TEMP?;:UNIT:TEMP?").await, "3.3315E+02;K");
    oven.say("TEMP 340").await;
    oven.say("UNIT:TEMP C").await;
    assert_eq!(oven.number("TEMP?").await, 66.85);
    assert_eq!(
        oven.ask("STAT:OPER:COND?;:STAT:QUES:COND?").await,
        "2;16",
        "on its way"
    );
    tokio::time::sleep(Duration::from_secs(100_000)).await;
    assert_eq!(oven.ask("STAT:OPER:COND?;:STAT:QUES:COND?").await, "0;0");
    for refused in ["TEMP 19", "TEMP 121", "TEMP 80 K"] {
        oven.say(refused).await;
        assert_eq!(oven.error().await, -222, "{refused}");
    }
    oven.say("*RST").await;
    assert_eq!(oven.ask("OUTP?;:TEMP?").await, "0;2.5E+01");
}

#[tokio::test(start_paused = true)]
async fn monitor_reads_by_channel() {
    let bench = bench();
    let level = bench.with_world(|_, world| world.truth().lock.level);
    let mut monitor = client(&bench, "lock");
    for question in ["MEAS:VOLT?", "MEAS:SCAL:VOLT:DC? 1", "MEAS:VOLT? (@1)"] {
        let seen = monitor.number(question).await;
        assert!((seen - level).abs() < 0.2, "{question} {seen}");
    }
    let cell = bench.with_world(|_, world| world.truth().cell.temperature) - 273.15;
    assert!((monitor.number("MEAS:TEMP? (@2)").await - cell).abs() < 1.0);
    monitor.say("MEAS:VOLT? 7").await;
    assert_eq!(monitor.error().await, -224);
}
