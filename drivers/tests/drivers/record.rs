//! A conversation that was recorded plays back: same answers, and a departure is noticed.

use darkline_core::wire::record::Line;
use darkline_drivers::error::DriverError;
use darkline_drivers::exchange::{Exchange, Manners};
use darkline_drivers::link::replay::Replay;
use darkline_drivers::link::tap::{Recorded, Tape};

use super::toy::Toy;

#[tokio::test(start_paused = true)]
async fn a_record_plays_back() {
    let toy = Toy::new();
    let (tape, mut lines) = Tape::new(1000);
    let dialler = Recorded::new(toy.dialler(), "coil", tape.clone());
    let talk = |dialler| Exchange::new("coil", dialler, Manners::default());
    let mut exchange = talk(Box::new(dialler));
    let questions = ["*IDN?", "SOUR:CURR?", "MEAS:VOLT? (@1)"];
    let mut answers = Vec::new();
    for question in questions {
        answers.push(exchange.ask(&[question]).await.unwrap());
    }
    drop(exchange);
    assert_eq!(tape.lost(), 0);
    let mut record = Vec::new();
    while let Ok(line) = lines.try_recv() {
        // Through text and back, as from a file.
        record.push(Line::parse(&line.print().unwrap()).unwrap());
    }
    assert_eq!(record.len(), 8);

    let replay = Replay::new("coil", &record);
    let mut exchange = talk(Box::new(replay.clone()));
    for (question, answer) in questions.iter().zip(&answers) {
        assert_eq!(&exchange.ask(&[question]).await.unwrap(), answer);
    }
    assert_eq!(replay.departure(), None);

    let replay = Replay::new("coil", &record);
    let mut exchange = talk(Box::new(replay.clone()));
    let error = exchange.ask(&["*OPT?"]).await.unwrap_err();
    assert!(matches!(error, DriverError::Disconnected { .. }), "{error}");
    assert!(replay.departure().unwrap().contains("*OPT?"));
}
