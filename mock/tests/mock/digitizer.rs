//! The digitizer: records as the world has them, rounded, clipped, and in every format.

use std::time::Duration;

use darkline_mock::{DigitizerOptions, Fault, MockBench, Options};

use crate::{Client, bench, bench_with, client, truth};

/// Probe and control on and swept once, the scope triggered by it; its clients.
async fn acquire(bench: &MockBench, points: usize) -> (Client, Client) {
    let (mut probe, mut scope) = (client(bench, "probe"), client(bench, "scope"));
    let mut control = client(bench, "control");
    control.say("FREQ 80 MHZ;:POW 0;:OUTP ON").await;
    probe
        .say("POW 0;:OUTP ON;:FREQ:MODE SWE;CENT 80 MHZ;SPAN 300 KHZ")
        .await;
    probe.say("SWE:TIME 40 MS").await;
    let interval = 0.04 / points as f64;
    scope
        .say(&format!(
            "SENS:SWE:POIN {points};TINT {interval};:TRIG:SOUR EXT;:INIT"
        ))
        .await;
    assert_eq!(scope.ask("STAT:OPER:COND?").await, "32");
    assert_eq!(control.ask("*OPC?").await, "1");
    probe.say("INIT").await;
    assert_eq!(probe.ask("*OPC?").await, "1");
    (probe, scope)
}

fn numbers(text: &str) -> Vec<f64> {
    text.split(',')
        .map(|number| number.parse().unwrap())
        .collect()
}

#[tokio::test(start_paused = true)]
async fn record_is_the_worlds_to_half_a_step() {
    let bench = bench();
    let (_, mut scope) = acquire(&bench, 2000).await;
    assert_eq!(scope.ask("*OPC?;:TRAC:COUN?").await, "1;1");
    let start = bench.history().of("probe").unwrap().clone();
    assert_eq!(start.triggers, 1);
    scope.say("FORM INT,16").await;
    let mut distinct = 0;
    for channel in 1..=3u8 {
        let preamble = numbers(&scope.ask(&format!("TRAC:PRE? CH{channel}")).await);
        let (points, interval, scale, offset) =
            (preamble[0], preamble[1], preamble[2], preamble[3]);
        assert_eq!(
            (points, interval, preamble[4], preamble[5]),
            (2000.0, 20e-6, 0.0, 1.0)
        );
        let data = scope.block(&format!("TRAC? CH{channel}")).await;
        assert_eq!(data.len(), 4000);
        // The sweep started at time 0 of the paused clock, and the wire takes 12 us.
        let mut volts = vec![0.0; 2000];
        bench.with_world(|_, world| world.record(channel, 1, 12e-6, 20e-6, &mut volts));
        for (bytes, volt) in data.chunks(2).zip(&volts) {
            let code = f64::from(i16::from_be_bytes([bytes[0], bytes[1]]));
            let clipped = volt.clamp(scale * preamble[6] + offset, scale * preamble[7] + offset);
            assert!(
                (scale * code + offset - clipped).abs() <= scale * 0.5001,
                "channel {channel}"
            );
        }
        distinct += volts.windows(2).filter(|pair| pair[0] != pair[1]).count();
    }
    assert!(distinct > 1000, "the world gave noise: {distinct}");
    let history = bench.history();
    let transfers: Vec<_> = history.of("scope").unwrap().transfers().copied().collect();
    assert_eq!(
        transfers
            .iter()
            .map(|transfer| transfer.channel)
            .collect::<Vec<_>>(),
        [1, 2, 3]
    );
    let again = scope.block("FETC2?").await;
    assert_eq!(transfers[1].crc32c, crc32c::crc32c(&again));
}

#[tokio::test(start_paused = true)]
async fn all_formats_carry_the_same_record() {
    let bench = bench();
    let (_, mut scope) = acquire(&bench, 100).await;
    assert_eq!(scope.ask("*OPC?").await, "1");
    scope.say("FORM ASC").await;
    let volts = numbers(&scope.ask("FETC1?").await);
    assert_eq!(volts.len(), 100);
    for order in ["NORM", "SWAP"] {
        for (format, size) in [
            ("INT,8", 1),
            ("INT,16", 2),
            ("UINT,8", 1),
            ("UINT,16", 2),
            ("REAL,32", 4),
            ("REAL,64", 8),
        ] {
            scope.say(&format!("FORM {format};FORM:BORD {order}")).await;
            assert_eq!(
                scope.ask("FORM?;FORM:BORD?").await,
                format!("{format};{order}")
            );
            let preamble = numbers(&scope.ask("TRAC:PRE? CH1").await);
            let (scale, offset) = (preamble[2], preamble[3]);
            let data = scope.block("TRAC:DATA? (@1)").await;
            assert_eq!(data.len(), 100 * size);
            let step = 2.0 / 16384.0;
            let tolerance = if size == 1 { 64.0 * step / 2.0 } else { 1e-7 };
            for (bytes, volt) in data.chunks(size).zip(&volts) {
                let seen = scale * value(format, bytes, order == "SWAP") + offset;
                assert!(
                    (seen - volt).abs() <= tolerance,
                    "{format} {order}: {seen} {volt}"
                );
            }
        }
    }
    scope.say("FORM:BLOC IND;:FORM UINT,8;:FETC1?").await;
    let mut data = vec![0; 103];
    tokio::io::AsyncReadExt::read_exact(&mut scope.0, &mut data)
        .await
        .unwrap();
    assert_eq!((&data[..2], data[102]), (&b"#0"[..], b'\n'));
}

fn value(format: &str, bytes: &[u8], swapped: bool) -> f64 {
    let mut word = bytes.to_vec();
    if swapped {
        word.reverse();
    }
    match format {
        "INT,8" => f64::from(word[0] as i8),
        "UINT,8" => f64::from(word[0]),
        "INT,16" => f64::from(i16::from_be_bytes([word[0], word[1]])),
        "UINT,16" => f64::from(u16::from_be_bytes([word[0], word[1]])),
        "REAL,32" => f64::from(f32::from_be_bytes(word.try_into().unwrap())),
        _ => f64::from_be_bytes(word.try_into().unwrap()),
    }
}

#[tokio::test(start_paused = true)]
async fn settings_are_granted_upwards() {
    let bench = bench();
    let mut scope = client(&bench, "scope");
    for (set, query, answer) in [
        (
            "VOLT:RANG 0.3",
            "SENS1:VOLT:DC:RANG:UPP?;LOW?;PTP?",
            "5.0E-01;-5.0E-01;1.0E+00",
        ),
        (
            "SENS2:VOLT:RANG:PTP 0.03;OFFS 0.12345",
            "SENS2:VOLT:RANG:PTP?;OFFS?",
            "5.0E-02;1.23E-01",
        ),
        (
            "INP3:COUP AC;FILT ON;FILT:FREQ 30 KHZ",
            "INP3:COUP?;FILT?;FILT:FREQ?",
            "AC;1;2.0E+05",
        ),
        (
            "SWE:POIN 2001;TINT 20.001 US",
            "SWE:POIN?;TINT?;TIME?",
            "2001;2.002E-05;4.004E-02",
        ),
        ("SWE:TIME 40 MS", "SWE:TINT?", "2.0E-05"),
        ("TRIG:DEL 1 MS;SOUR EXT", "TRIG:DEL?;SOUR?", "1.0E-03;EXT"),
        ("FORM INT", "FORM?", "INT,16"),
        ("FORM REAL,32", "FORM:DATA?", "REAL,32"),
    ] {
        scope.say(set).await;
        assert_eq!(scope.ask(query).await, answer, "{set}");
    }
    assert_eq!(
        scope.ask("TRAC:CAT?").await,
        "\"CH1\",\"CH2\",\"CH3\",\"CH4\""
    );
    for (text, code) in [
        ("VOLT:RANG 11", -222),
        ("SENS5:VOLT:RANG 1", -114),
        ("INP0:COUP DC", -114),
        ("FORM INT,7", -224),
        ("FORM WORD", -224),
        ("SWE:POIN 1", -222),
        ("SWE:POIN 262145", -222),
        ("TRAC? CH5", -224),
        ("TRAC? CH1", -230),
        ("TRAC:PRE? CH1", -230),
    ] {
        scope.say(text).await;
        assert_eq!(scope.error().await, code, "{text}");
    }
}

#[tokio::test(start_paused = true)]
async fn clips_at_the_ends_of_its_range() {
    let bench = bench();
    let (mut probe, mut scope) = acquire(&bench, 200).await;
    scope.say("VOLT:RANG:PTP 20 MV;:FORM INT,16;:INIT").await;
    probe.say("INIT").await;
    assert_eq!(probe.ask("*OPC?").await, "1");
    assert_eq!(scope.ask("*OPC?").await, "1");
    let data = scope.block("TRAC? CH1").await;
    let ends = data
        .chunks(2)
        .filter(|bytes| matches!(i16::from_be_bytes([bytes[0], bytes[1]]), 8191 | -8192));
    assert_eq!(
        ends.count(),
        200,
        "a photodiode in light is far beyond 10 mV"
    );
}

#[tokio::test(start_paused = true)]
async fn missed_triggers_leave_it_waiting_and_uncounted() {
    let bench = bench();
    let (mut probe, mut scope) = acquire(&bench, 100).await;
    assert_eq!(scope.ask("*OPC?").await, "1");
    bench.fault(Fault::MissTrigger(1));
    scope.say("INIT").await;
    probe.say("INIT").await;
    assert_eq!(probe.ask("*OPC?").await, "1");
    assert_eq!(scope.ask("STAT:OPER:COND?;:TRAC:COUN?").await, "32;1");
    probe.say("INIT").await;
    assert_eq!(
        scope.ask("*OPC?;:TRAC:COUN?").await,
        "1;2",
        "the next one is seen"
    );
    let history = bench.history();
    assert_eq!(history.of("scope").unwrap().missed_triggers, 1);
    let options = Options {
        digitizer: DigitizerOptions {
            missed_trigger: 0.3,
            ..DigitizerOptions::default()
        },
    };
    let bench = bench_with(truth(5), options);
    let (mut probe, mut scope) = (client(&bench, "probe"), client(&bench, "scope"));
    probe.say("FREQ:MODE SWE;:SWE:TIME 1 MS").await;
    scope.say("TRIG:SOUR EXT;:SWE:POIN 10;TINT 10 US").await;
    for _ in 0..300 {
        scope.say("ABOR;INIT").await;
        assert_eq!(scope.ask("*STB?").await, "0");
        probe.say("INIT").await;
        assert_eq!(probe.ask("*OPC?").await, "1");
    }
    let missed = bench.history().of("scope").unwrap().missed_triggers;
    // 300 draws at 0.3: 90 with a standard deviation of 8.
    assert!((60..120).contains(&missed), "{missed}");
    assert_eq!(scope.number("TRAC:COUN?").await, 300.0 - missed as f64);
}

#[tokio::test(start_paused = true)]
async fn fetch_before_the_end_is_stale_and_abort_keeps_no_data() {
    let bench = bench();
    let mut scope = client(&bench, "scope");
    scope.say("INIT").await;
    assert_eq!(scope.ask("STAT:OPER:COND?").await, "16", "measures at once");
    scope.say("TRAC? CH1").await;
    assert_eq!(scope.error().await, -230);
    scope.say("INIT").await;
    assert_eq!(scope.error().await, -213);
    scope.say("ABOR").await;
    tokio::time::sleep(Duration::from_secs(1)).await;
    assert_eq!(scope.ask("TRAC:COUN?").await, "0");
    scope.say("TRIG:SOUR BUS;:INIT;*TRG").await;
    assert_eq!(scope.ask("*OPC?;:TRAC:COUN?;POIN? CH1").await, "1;1;2000");
}

/// All that a scan of a few points says and hears.
async fn conversation(seed: u64) -> Vec<u8> {
    let bench = bench_with(truth(seed), Options::default());
    let (mut probe, mut scope) = acquire(&bench, 500).await;
    let (mut coil, mut monitor) = (client(&bench, "coil"), client(&bench, "lock"));
    scope.say("FORM INT,16").await;
    coil.say("OUTP ON").await;
    let mut all = Vec::new();
    for step in 0..4 {
        coil.say(&format!("CURR {} MA", 5 * step)).await;
        tokio::time::sleep(Duration::from_millis(50)).await;
        all.extend(coil.ask("MEAS:CURR?").await.into_bytes());
        all.extend(monitor.ask("MEAS:VOLT?").await.into_bytes());
        scope.say("INIT").await;
        assert_eq!(scope.ask("STAT:OPER:COND?").await, "32");
        probe.say("INIT").await;
        assert_eq!(scope.ask("*OPC?").await, "1");
        for channel in 1..=3 {
            all.extend(scope.block(&format!("TRAC? CH{channel}")).await);
        }
        assert_eq!(probe.ask("*OPC?").await, "1");
    }
    all
}

#[tokio::test(start_paused = true)]
async fn same_seed_gives_the_same_bytes_in_virtual_time() {
    let first = conversation(11).await;
    assert_eq!(first, conversation(11).await);
    assert_ne!(first, conversation(12).await, "another seed, other noise");
}

#[tokio::test(start_paused = true)]
async fn a_waiting_query_is_woken_by_the_trigger() {
    let bench = bench();
    let (mut probe, mut scope) = (client(&bench, "probe"), client(&bench, "scope"));
    probe.say("FREQ:MODE SWE").await;
    scope.say("TRIG:SOUR EXT;:INIT;*OPC?").await;
    tokio::time::sleep(Duration::from_secs(7)).await;
    let before = tokio::time::Instant::now();
    probe.say("INIT").await;
    assert_eq!(scope.line().await, "1");
    // 12 us of the wire and 2000 x 20 us; the runtime's timers tick in milliseconds.
    let waited = before.elapsed().as_secs_f64();
    assert!((0.040012..0.0421).contains(&waited), "{waited}");
}

#[tokio::test(start_paused = true)]
async fn a_response_beyond_the_output_queue_is_a_deadlock() {
    let bench = bench();
    let mut scope = client(&bench, "scope");
    scope
        .say("SWE:POIN MAX;TINT MIN;:FORM ASC;:INIT;*OPC?")
        .await;
    assert_eq!(scope.line().await, "1");
    scope.say(&[":TRAC? CH4"; 5].join(";")).await;
    assert_eq!(scope.ask("*OPC?").await, "1");
    assert_eq!(scope.error().await, -430);
}
