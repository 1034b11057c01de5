//! IEEE 488.2 and SCPI-1999 as every instrument speaks them.

use crate::{bench, client};

#[tokio::test(start_paused = true)]
async fn every_instrument_has_the_mandated_commands() {
    // SCPI-1999 volume 1, 4.2: SYSTem:ERRor?, SYSTem:VERSion?, STATus; IEEE 488.2, 10: the common commands.
    let bench = bench();
    for name in darkline_mock::MockBench::names() {
        let mut client = client(&bench, name);
        let identity = client.ask("*IDN?").await;
        assert_eq!(identity.split(',').count(), 4, "{identity}");
        assert!(identity.starts_with("Umbra,"), "{identity}");
        assert_eq!(
            client.ask("*ESR?;*ESR?").await,
            "128;0",
            "power on is told once"
        );
        assert_eq!(
            client
                .ask("*STB?;*ESE 36;*ESE?;*SRE 191;*SRE?;*TST?;*OPC?")
                .await,
            "0;36;191;0;1"
        );
        assert_eq!(
            client.ask("SYST:ERR?;VERS?;ERR:COUN?").await,
            "0,\"No error\";1999.0;0"
        );
        assert_eq!(
            client.ask("STAT:OPER:ENAB 48;ENAB?;PTR?;NTR?;EVEN?").await,
            "48;32767;0;0"
        );
        assert_eq!(client.ask("STAT:PRES;OPER:ENAB?;:STAT:QUES?").await, "0;0");
        client.say("*CLS;*RST;*WAI;*OPC").await;
        assert_eq!(
            client.ask("*ESR?;:system:error:next?").await,
            "1;0,\"No error\"",
            "{name}"
        );
    }
}

#[tokio::test(start_paused = true)]
async fn faults_of_the_text_have_their_numbers() {
    let bench = bench();
    let mut probe = client(&bench, "probe");
    for (text, code) in [
        ("NONSENSE 1", -113),
        ("FREQ:NONSENSE 1", -113),
        ("INIT?", -113),
        ("*OPT?", -113),
        ("FREQ", -109),
        ("FREQ 1MHZ,2MHZ", -108),
        ("*RST 1", -108),
        ("FREQ 'a'", -104),
        ("OUTP (1)", -104),
        ("FREQ 80 MV", -131),
        ("SWE:POIN 3 S", -138),
        ("FREQ NEAR", -224),
        ("SWE:DIR SIDEWAYS", -224),
        ("FREQ 1E99", -222),
        ("*ESE 256", -222),
        ("SOUR2:FREQ 1 MHZ", -114),
        ("FREQ 1 2", -103),
        ("FREQ@ 1", -101),
        (":;:", -102),
        ("TRIG", -211),
        ("*TRG", -211),
        ("INIT", -221),
    ] {
        probe.say(text).await;
        assert_eq!(probe.error().await, code, "{text}");
        assert_eq!(probe.error().await, 0, "{text}: one error only");
    }
    assert_eq!(
        probe.number("FREQ?").await,
        80e6,
        "nothing of it was accepted"
    );
}

#[tokio::test(start_paused = true)]
async fn a_command_error_ends_its_message_and_an_execution_error_does_not() {
    let bench = bench();
    let mut probe = client(&bench, "probe");
    probe.say("FREQ 1;POW -20").await;
    assert_eq!(probe.number("POW?").await, -20.0);
    assert_eq!(probe.error().await, -222);
    probe.say("FREQU 1;POW -30").await;
    assert_eq!(probe.number("POW?").await, -20.0);
    assert_eq!(probe.error().await, -113);
    assert_eq!(
        probe.ask("FREQ?;XXX?;POW?").await,
        "8.0E+07",
        "what was answered before it is sent"
    );
}

#[tokio::test(start_paused = true)]
async fn queue_overflows_with_its_number() {
    let bench = bench();
    let mut coil = client(&bench, "coil");
    for _ in 0..30 {
        coil.say("CURR 9").await;
    }
    assert_eq!(coil.ask("SYST:ERR:COUN?").await, "16");
    let mut codes = Vec::new();
    for _ in 0..17 {
        codes.push(coil.error().await);
    }
    assert_eq!(codes[..15], [-222; 15]);
    assert_eq!(codes[15..], [-350, 0]);
}

#[tokio::test(start_paused = true)]
async fn query_errors() {
    let bench = bench();
    let mut scope = client(&bench, "scope");
    // IEEE 488.2, 6.3.2.3: a message that comes before the response was read interrupts the query.
    scope.say("TRIG:SOUR EXT;:INIT;*OPC?").await;
    tokio::time::sleep(std::time::Duration::from_millis(5)).await;
    assert_eq!(
        scope.ask("*ESE 7;*ESE?").await,
        "7",
        "the interrupting message is answered, and it alone"
    );
    assert_eq!(scope.error().await, -410);
    scope.say("ABOR").await;
    // IEEE 488.2, 6.5.7.5: nothing can follow a response of indefinite length.
    assert_eq!(scope.ask("*IDN?;*OPC?").await, "Umbra,DIG-4,3001,3.1");
    assert_eq!(scope.error().await, -440);
    // A message without end, then a good one.
    scope.say(&"A".repeat(70_000)).await;
    assert_eq!(scope.error().await, -363);
    scope.say("FORM #6999999xx").await;
    assert_eq!(scope.error().await, -223);
}

#[tokio::test(start_paused = true)]
async fn a_link_that_ends_within_a_message_is_told() {
    let bench = bench();
    let mut first = client(&bench, "lock");
    tokio::io::AsyncWriteExt::write_all(&mut first.0, b"MEAS:VO")
        .await
        .unwrap();
    drop(first);
    tokio::time::sleep(std::time::Duration::from_millis(1)).await;
    assert_eq!(client(&bench, "lock").error().await, -420);
}

#[tokio::test(start_paused = true)]
async fn wait_holds_the_message_until_the_operation_is_over() {
    let bench = bench();
    let mut probe = client(&bench, "probe");
    probe.say("FREQ:MODE SWE;:SWE:TIME 2;:INIT;*OPC").await;
    assert_eq!(probe.ask("*ESR?").await, "128", "not complete yet");
    let before = tokio::time::Instant::now();
    assert_eq!(probe.ask("*WAI;:STAT:OPER:COND?").await, "0");
    assert!(before.elapsed().as_secs_f64() > 1.99);
    assert_eq!(probe.ask("*ESR?").await, "1");
}
