//! A link that plays a wire record back: it waits for the bytes that were sent then, and answers with the
//! bytes, and after the times, of then. The first byte that differs ends the link.

use std::collections::VecDeque;
use std::io;
use std::sync::{Arc, Mutex, PoisonError};
use std::time::Duration;

use darkline_core::wire::record::{Line, Way};
use tokio::io::{AsyncReadExt, AsyncWriteExt, DuplexStream};

use super::{BoxStream, Dial, Dialling};

/// Room for bytes on their way, so that a block is never in the way of the next question.
const ROOM: usize = 1 << 20;

/// A dialler that plays one instrument's part of a record; each dial plays on from the next `opened`.
#[derive(Debug, Clone)]
pub struct Replay {
    instrument: String,
    scenes: Arc<Mutex<VecDeque<Vec<Line>>>>,
    departure: Arc<Mutex<Option<String>>>,
}

impl Replay {
    /// Takes the lines of `instrument` out of a whole record.
    pub fn new(instrument: impl Into<String>, record: &[Line]) -> Self {
        let instrument = instrument.into();
        let mut scenes: VecDeque<Vec<Line>> = VecDeque::new();
        for line in record.iter().filter(|line| line.link == instrument) {
            match line.way {
                Way::Opened => scenes.push_back(Vec::new()),
                _ => match scenes.back_mut() {
                    Some(scene) => scene.push(line.clone()),
                    None => scenes.push_back(vec![line.clone()]),
                },
            }
        }
        Self {
            instrument,
            scenes: Arc::new(Mutex::new(scenes)),
            departure: Arc::default(),
        }
    }

    /// Where the drivers first departed from the record; `None` so far.
    pub fn departure(&self) -> Option<String> {
        self.departure
            .lock()
            .unwrap_or_else(PoisonError::into_inner)
            .clone()
    }
}

impl Dial for Replay {
    fn dial(&self) -> Dialling<'_> {
        Box::pin(async move {
            let scene = self
                .scenes
                .lock()
                .unwrap_or_else(PoisonError::into_inner)
                .pop_front()
                .ok_or_else(|| {
                    io::Error::new(
                        io::ErrorKind::NotConnected,
                        "the record has no further link",
                    )
                })?;
            let (ours, theirs) = tokio::io::duplex(ROOM);
            let departure = Arc::clone(&self.departure);
            tokio::spawn(async move {
                if let Err(why) = play(theirs, scene).await {
                    let mut first = departure.lock().unwrap_or_else(PoisonError::into_inner);
                    first.get_or_insert(why);
                }
            });
            Ok(Box::new(ours) as BoxStream)
        })
    }

    fn address(&self) -> String {
        format!("replay of {}", self.instrument)
    }
}

async fn play(mut link: DuplexStream, scene: Vec<Line>) -> Result<(), String> {
    let mut last = scene.first().map_or(0, |line| line.at);
    for line in scene {
        match line.way {
            Way::Sent => expect(&mut link, &line.bytes).await?,
            Way::Received => {
                let pause = Duration::from_nanos(line.at.saturating_sub(last));
                tokio::time::sleep(pause).await;
                if link.write_all(&line.bytes).await.is_err() {
                    return Ok(());
                }
            }
            Way::Opened | Way::Lost => return Ok(()),
        }
        last = line.at;
    }
    let mut more = [0u8; 64];
    match link.read(&mut more).await {
        Ok(count) if count > 0 => Err(departed(&more[..count], b"nothing more")),
        _ => Ok(()),
    }
}

async fn expect(link: &mut DuplexStream, wanted: &[u8]) -> Result<(), String> {
    let mut got = vec![0; wanted.len()];
    if link.read_exact(&mut got).await.is_err() {
        return Ok(());
    }
    match got == wanted {
        true => Ok(()),
        false => Err(departed(&got, wanted)),
    }
}

fn departed(got: &[u8], wanted: &[u8]) -> String {
    format!(
        "`{}` was sent where the record has `{}`",
        got.escape_ascii(),
        wanted.escape_ascii()
    )
}
