//! A reply that comes late never answers the next question. The measurement behind the design, again:
//! many queries with a share of late replies give no wrong answer, and many with mere draining instead.

use std::time::Duration;

use darkline_drivers::error::DriverError;
use darkline_drivers::exchange::{Exchange, Manners};
use darkline_drivers::link::spoil::{Spoil, Spoilt};
use darkline_drivers::link::{Dial, dial_with};
use tokio::io::{AsyncBufReadExt, AsyncReadExt, AsyncWriteExt, BufReader};

const QUERIES: u32 = 20_000;
const TIMEOUT: Duration = Duration::from_millis(20);

/// Answers `ECHO? n` with n, and keeps a register for `*ESE`.
fn echo() -> impl Dial {
    dial_with("echo", || {
        let (ours, theirs) = tokio::io::duplex(1 << 16);
        tokio::spawn(async move {
            let (from, mut to) = tokio::io::split(theirs);
            let mut lines = BufReader::new(from).lines();
            let mut register = String::from("0");
            while let Ok(Some(line)) = lines.next_line().await {
                let mut answers = Vec::new();
                for unit in line.split(';') {
                    match unit.split_once(' ') {
                        Some(("ECHO?", number)) => answers.push(number.to_owned()),
                        Some(("*ESE", number)) => register = number.to_owned(),
                        _ if unit == "*ESE?" => answers.push(register.clone()),
                        _ => panic!("{line}"),
                    }
                }
                let reply = answers.join(";") + "\n";
                if !answers.is_empty() && to.write_all(reply.as_bytes()).await.is_err() {
                    return;
                }
            }
        });
        Ok(ours)
    })
}

fn late() -> Spoilt<impl Dial> {
    let spoil = Spoil {
        seed: 1,
        delay: Duration::from_millis(1),
        late: 0.02,
        lateness: Duration::from_millis(35),
        ..Spoil::default()
    };
    Spoilt::new(echo(), spoil)
}

#[tokio::test(start_paused = true)]
async fn late_replies_answer_no_other_question() {
    let manners = Manners {
        timeout: TIMEOUT,
        ..Manners::default()
    };
    let mut exchange = Exchange::new("echo", Box::new(late()), manners);
    let (mut wrong, mut timed_out) = (0, 0);
    for number in 0..QUERIES {
        match exchange.ask(&[&format!("ECHO? {number}")]).await {
            Ok(reply) => wrong += u32::from(reply.bytes() != number.to_string().as_bytes()),
            Err(DriverError::TimedOut { .. }) => timed_out += 1,
            Err(other) => panic!("{other}"),
        }
    }
    assert_eq!(wrong, 0);
    // The measurement means something only if replies did come late.
    assert!((200..800).contains(&timed_out), "{timed_out}");
    let drained = wrong_answers_with_draining().await;
    assert!(
        drained > 1000,
        "draining instead of matching: {drained} wrong answers"
    );
    println!(
        "{QUERIES} queries, {timed_out} late: 0 wrong answers; {drained} with draining instead"
    );
}

/// What the exchange must not do: throw away what has come so far, and go on.
async fn wrong_answers_with_draining() -> u32 {
    let mut stream = late().dial().await.unwrap();
    let mut wrong = 0;
    for number in 0..QUERIES {
        let mut rest = [0u8; 4096];
        while let Ok(Ok(1..)) = tokio::time::timeout(Duration::ZERO, stream.read(&mut rest)).await {
        }
        stream
            .write_all(format!("ECHO? {number}\n").as_bytes())
            .await
            .unwrap();
        let mut reply = Vec::new();
        let read = async {
            while reply.last() != Some(&b'\n') {
                reply.push(stream.read_u8().await.unwrap());
            }
        };
        if tokio::time::timeout(TIMEOUT, read).await.is_ok() {
            wrong += u32::from(reply != format!("{number}\n").as_bytes());
        }
    }
    wrong
}

#[tokio::test(start_paused = true)]
async fn a_dropped_question_leaves_nothing_behind() {
    let manners = Manners {
        timeout: TIMEOUT,
        ..Manners::default()
    };
    let slow = Spoil {
        delay: Duration::from_millis(5),
        ..Spoil::default()
    };
    let mut exchange = Exchange::new("echo", Box::new(Spoilt::new(echo(), slow)), manners);
    exchange.ask(&["ECHO? 0"]).await.unwrap();
    for number in 0..200u32 {
        let question = format!("ECHO? {number}");
        let messages = [question.as_str()];
        // Dropped at a different moment every time: before, while, and after the reply is under way.
        let patience = Duration::from_millis(u64::from(number % 8));
        let asked = tokio::time::timeout(patience, exchange.ask(&messages)).await;
        if let Ok(reply) = asked {
            assert_eq!(reply.unwrap().bytes(), number.to_string().as_bytes());
        }
        let next = format!("ECHO? {}", number + 1_000_000);
        let reply = exchange.ask(&[&next]).await.unwrap();
        assert_eq!(reply.bytes(), (number + 1_000_000).to_string().as_bytes());
    }
}

#[tokio::test(start_paused = true)]
async fn a_silent_instrument_is_given_up() {
    let manners = Manners {
        timeout: TIMEOUT,
        ..Manners::default()
    };
    let mute = Spoil {
        drop: 1.0,
        ..Spoil::default()
    };
    let mut exchange = Exchange::new("echo", Box::new(Spoilt::new(echo(), mute)), manners);
    let first = exchange.ask(&["ECHO? 1"]).await.unwrap_err();
    assert!(matches!(first, DriverError::TimedOut { .. }) && first.outcome_unknown());
    let second = exchange.ask(&["ECHO? 2"]).await.unwrap_err();
    assert!(
        matches!(second, DriverError::OutOfStep { attempts: 5, .. }),
        "{second}"
    );
    assert!(!exchange.is_open());
}

#[tokio::test(start_paused = true)]
async fn garbled_replies_are_noticed_or_refused_but_never_block() {
    let manners = Manners {
        timeout: TIMEOUT,
        ..Manners::default()
    };
    let spoil = Spoil {
        seed: 3,
        garble: 0.05,
        drop: 0.02,
        ..Spoil::default()
    };
    let mut exchange = Exchange::new("echo", Box::new(Spoilt::new(echo(), spoil)), manners);
    let mut good = 0;
    for number in 10_000..12_000u32 {
        // A digit that became another digit cannot be noticed; a reply of another question would be.
        if let Ok(reply) = exchange.ask(&[&format!("ECHO? {number}")]).await {
            let differing = reply
                .bytes()
                .iter()
                .zip(number.to_string().as_bytes())
                .filter(|(a, b)| a != b)
                .count();
            assert!(
                differing <= 1,
                "{number}: {:?}",
                reply.bytes().escape_ascii()
            );
            good += u32::from(differing == 0);
        }
    }
    assert!(good > 1700, "{good}");
}

#[tokio::test(start_paused = true)]
async fn pace_is_kept_between_messages() {
    let toy = super::toy::Toy::new();
    let manners = Manners {
        pace: Duration::from_millis(30),
        ..Manners::default()
    };
    let mut exchange = Exchange::new("toy", toy.dialler(), manners);
    exchange.say(&["SOUR:CURR 0.01", "OUTP 1"]).await.unwrap();
    exchange.ask(&["OUTP 0", "OUTP?"]).await.unwrap();
    let times = toy.look().times.clone();
    assert_eq!(times.len(), 4);
    for pair in times.windows(2) {
        assert!(pair[1] - pair[0] >= Duration::from_millis(30));
    }
}
