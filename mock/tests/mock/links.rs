//! Real sockets and pseudo-terminals.

use std::collections::BTreeMap;
use std::io::{Read, Write};
use std::time::{Duration, Instant};

use darkline_mock::world::Truth;
use darkline_mock::{Fault, MockBench, Options};
use rustix::fs::{Mode, OFlags};
use tokio::net::TcpStream;

use crate::{Client, bench, bench_with, truth};

async fn addresses(bench: &MockBench) -> BTreeMap<&'static str, String> {
    let endpoints = bench.serve().await.unwrap();
    endpoints
        .into_iter()
        .map(|endpoint| (endpoint.name, endpoint.address))
        .collect()
}

async fn socket(address: &str) -> Client<TcpStream> {
    let stream = TcpStream::connect(address.strip_prefix("tcp://").unwrap())
        .await
        .unwrap();
    stream.set_nodelay(true).unwrap();
    Client(stream)
}

#[tokio::test]
async fn sockets_share_one_instrument() {
    let bench = bench();
    let addresses = addresses(&bench).await;
    assert_eq!(addresses.len(), 6);
    let mut first = socket(&addresses["probe"]).await;
    let mut second = socket(&addresses["probe"]).await;
    first.say("FREQ 81 MHZ").await;
    assert_eq!(first.ask("*OPC?").await, "1");
    assert_eq!(second.number("FREQ?").await, 81e6);
    drop(first);
    assert_eq!(
        socket(&addresses["probe"]).await.number("FREQ?").await,
        81e6
    );
    bench.fault(Fault::Unreachable("probe".into()));
    assert_eq!(
        tokio::io::AsyncReadExt::read(&mut second.0, &mut [0; 8])
            .await
            .unwrap_or(0),
        0
    );
    let mut turned_away = socket(&addresses["probe"]).await;
    assert_eq!(
        tokio::io::AsyncReadExt::read(&mut turned_away.0, &mut [0; 8])
            .await
            .unwrap_or(0),
        0
    );
    bench.fault(Fault::Clear("probe".into()));
    assert_eq!(
        socket(&addresses["probe"]).await.number("FREQ?").await,
        81e6
    );
}

#[tokio::test]
async fn listeners_end_with_the_bench() {
    let bench = bench();
    let addresses = addresses(&bench).await;
    let mut scope = socket(&addresses["scope"]).await;
    assert_eq!(scope.ask("*OPC?").await, "1");
    drop(bench);
    assert_eq!(
        tokio::io::AsyncReadExt::read(&mut scope.0, &mut [0; 8])
            .await
            .unwrap_or(0),
        0
    );
}

/// A record over a socket with nothing in the light and nothing that depends on the time of day.
async fn dark_record(pause: Duration) -> Vec<u8> {
    let mut truth: Truth = truth(3);
    truth.detector.pickup = 0.0;
    let bench = bench_with(truth, Options::default());
    let mut scope = socket(&addresses(&bench).await["scope"]).await;
    tokio::time::sleep(pause).await;
    scope
        .say("VOLT:RANG:PTP 20 MV;:SWE:POIN 500;TINT 20 US;:FORM INT,16;:INIT")
        .await;
    assert_eq!(scope.ask("*OPC?").await, "1");
    scope.block("TRAC? CH2").await
}

#[tokio::test]
async fn noise_over_sockets_depends_on_the_acquisition_only() {
    let first = dark_record(Duration::ZERO).await;
    assert_eq!(first, dark_record(Duration::from_millis(37)).await);
}

/// The client's end of a serial line, blocking.
fn terminal(address: &str) -> std::fs::File {
    let path = address
        .strip_prefix("serial://")
        .unwrap()
        .split('?')
        .next()
        .unwrap();
    std::fs::File::from(
        rustix::fs::open(path, OFlags::RDWR | OFlags::NOCTTY, Mode::empty()).unwrap(),
    )
}

/// Asks on a serial line: the answer, and the time it took.
fn converse(mut terminal: &std::fs::File, text: &str) -> (String, Duration) {
    let before = Instant::now();
    terminal
        .write_all(format!("{text}\r\n").as_bytes())
        .unwrap();
    let mut answer = Vec::new();
    while answer.last() != Some(&b'\n') {
        let mut byte = [0];
        terminal.read_exact(&mut byte).unwrap();
        answer.push(byte[0]);
    }
    (
        String::from_utf8(answer).unwrap().trim_end().to_owned(),
        before.elapsed(),
    )
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn serial_lines_are_paced_by_their_baud_rate() {
    let bench = bench();
    let addresses = addresses(&bench).await;
    assert!(
        addresses["oven"].ends_with("?baud=9600"),
        "{}",
        addresses["oven"]
    );
    let oven = addresses["oven"].clone();
    let (answer, took) = tokio::task::spawn_blocking(move || converse(&terminal(&oven), "*IDN?"))
        .await
        .unwrap();
    assert_eq!(answer, "Umbra,TCU-1,4001,1.0");
    // 7 bytes there and 21 back, 10 bits each at 9600 a second: a lower bound, whatever else the machine does.
    assert!(took >= Duration::from_micros(29_100), "{took:?}");
    let coil = addresses["coil"].clone();
    let again = coil.clone();
    let (answer, took) =
        tokio::task::spawn_blocking(move || converse(&terminal(&coil), "CURR 5 MA;CURR?"))
            .await
            .unwrap();
    assert_eq!(answer, "5.0E-03");
    assert!(took >= Duration::from_micros(2170), "{took:?}");
    let (answer, _) = tokio::task::spawn_blocking(move || converse(&terminal(&again), "CURR?"))
        .await
        .unwrap();
    assert_eq!(
        answer, "5.0E-03",
        "closed and opened again: the same instrument"
    );
}
