//! The exchange: questions and answers with one instrument over one link, matched without fail.
//!
//! A reply that comes late must never answer the next question. So from the first byte of a message until
//! its reply is complete the link counts as *dirty*; whatever ends that early (a time limit, a dropped
//! future, a garbled reply) leaves it so, and [`Exchange::resync`] must succeed before the next question.
//! Owns the stream, its framing and its pace; knows no quantity.

use std::io;
use std::time::Duration;

use bytes::BytesMut;
use darkline_core::wire::frame::{Decoder, Message};
use tokio::io::{AsyncReadExt, AsyncWriteExt};
use tokio::time::{Instant, sleep_until, timeout_at};

use crate::error::DriverError;
use crate::link::{BoxStream, Dial, is_disconnected};
use crate::random::Random;
use crate::role::Outcome;

mod resync;

pub use resync::Sentinel;

/// How messages end.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Ends {
    /// LF.
    Lf,
    /// CR LF.
    CrLf,
}

/// How an instrument wants to be spoken to.
#[derive(Debug, Clone)]
pub struct Manners {
    /// How our messages end; its own may end either way.
    pub ends: Ends,
    /// Time limit of an exchange that names none.
    pub timeout: Duration,
    /// Least time from the beginning of one message to the next.
    pub pace: Duration,
    /// Longest reply taken, in bytes.
    pub longest: usize,
    /// How questions and answers are matched again.
    pub sentinel: Sentinel,
    /// Attempts at that before the link is given up.
    pub attempts: u32,
}

impl Default for Manners {
    fn default() -> Self {
        Self {
            ends: Ends::Lf,
            timeout: Duration::from_secs(2),
            pace: Duration::ZERO,
            // 2^20 samples of 8 bytes and some words.
            longest: (8 << 20) + (1 << 16),
            sentinel: Sentinel::default(),
            attempts: 5,
        }
    }
}

/// One instrument's link and the conversation over it.
pub struct Exchange {
    instrument: String,
    dialler: Box<dyn Dial>,
    manners: Manners,
    stream: Option<BoxStream>,
    /// Bytes of a message begun. Never forgotten while the link holds: half a message, ended by the next
    /// one's line end, could be another, valid command.
    outbox: BytesMut,
    inbox: BytesMut,
    decoder: Decoder,
    dirty: bool,
    /// How often answers may have been lost: settings should be read again when it changes.
    doubts: u64,
    next_message: Instant,
    random: Random,
}

impl Exchange {
    /// An exchange over a link that is dialled at the first message.
    pub fn new(instrument: impl Into<String>, dialler: Box<dyn Dial>, manners: Manners) -> Self {
        Self {
            instrument: instrument.into(),
            dialler,
            decoder: Decoder::new(manners.longest),
            manners,
            stream: None,
            outbox: BytesMut::new(),
            inbox: BytesMut::with_capacity(1 << 13),
            dirty: false,
            doubts: 0,
            next_message: Instant::now(),
            random: Random::fresh(),
        }
    }

    /// The instrument's name, for messages.
    pub fn instrument(&self) -> &str {
        &self.instrument
    }

    /// The link's address.
    pub fn address(&self) -> String {
        self.dialler.address()
    }

    /// The manners it was made with.
    pub fn manners(&self) -> &Manners {
        &self.manners
    }

    /// Whether a reply may still be under way: [`Self::resync`] comes before the next question.
    pub fn is_dirty(&self) -> bool {
        self.dirty
    }

    /// Whether a link is open.
    pub fn is_open(&self) -> bool {
        self.stream.is_some()
    }

    /// How often the link was made again or put back in step.
    pub fn doubts(&self) -> u64 {
        self.doubts
    }

    /// Opens the link, or opens it anew. The instrument's state is then unknown: verify who answers.
    ///
    /// # Errors
    /// [`DriverError::Unreachable`].
    pub async fn connect(&mut self) -> Outcome<()> {
        self.close();
        let within = crate::link::tcp::CONNECT_WITHIN + Duration::from_secs(1);
        let dialled = tokio::time::timeout(within, self.dialler.dial()).await;
        let why = match dialled {
            Ok(Ok(stream)) => {
                self.stream = Some(stream);
                self.doubts += 1;
                return Ok(());
            }
            Ok(Err(error)) => error.to_string(),
            Err(_) => "no connection in time".to_owned(),
        };
        Err(DriverError::Unreachable {
            instrument: self.instrument.clone(),
            link: self.dialler.address(),
            why,
        })
    }

    /// Closes the link.
    pub fn close(&mut self) {
        self.stream = None;
        self.outbox.clear();
        self.inbox.clear();
        self.decoder.reset();
        self.dirty = false;
    }

    /// Sends messages that have no reply.
    ///
    /// # Errors
    /// Any of the link's. The messages may then have been heard or not.
    pub async fn say(&mut self, messages: &[&str]) -> Outcome<()> {
        let until = Instant::now() + self.manners.timeout;
        self.ready().await?;
        self.send(messages, until).await
    }

    /// Sends messages of which the last has a reply, and waits for it with the usual time limit.
    ///
    /// # Errors
    /// As [`Self::ask_within`].
    pub async fn ask(&mut self, messages: &[&str]) -> Outcome<Message> {
        self.ask_within(messages, self.manners.timeout, None).await
    }

    /// Sends messages of which the last has a reply, and waits for it. An indefinite block in the reply is
    /// taken to have `indefinite` bytes.
    ///
    /// # Errors
    /// After [`DriverError::TimedOut`] and [`DriverError::Garbled`] the link is dirty; after
    /// [`DriverError::Disconnected`] it is closed. In all three the outcome is unknown, not failed.
    pub async fn ask_within(
        &mut self,
        messages: &[&str],
        within: Duration,
        indefinite: Option<usize>,
    ) -> Outcome<Message> {
        self.ready().await?;
        let until = Instant::now() + within;
        self.dirty = true;
        self.decoder.expect_indefinite(indefinite);
        self.send(messages, until).await?;
        let message = match timeout_at(until, self.receive()).await {
            Ok(received) => received,
            Err(_) => Err(Failure::Late),
        };
        let reply = message.map_err(|failure| self.failed(failure, messages, within))?;
        if !self.inbox.is_empty() {
            let got = shortened(&self.inbox);
            return Err(self.garbled(messages, got, "one reply"));
        }
        self.dirty = false;
        Ok(reply)
    }

    /// An error that says a reply is not what was asked for. The words were complete: the link stays clean.
    pub fn misread(&self, message: &str, reply: &[u8], wanted: impl Into<String>) -> DriverError {
        DriverError::Garbled {
            instrument: self.instrument.clone(),
            message: message.to_owned(),
            got: shortened(reply),
            wanted: wanted.into(),
        }
    }

    /// Distrusts the link: what was asked and what was answered may not belong together.
    pub fn distrust(&mut self) {
        self.dirty = true;
    }

    /// Makes the link open and clean.
    async fn ready(&mut self) -> Outcome<()> {
        if self.stream.is_none() {
            self.connect().await?;
        }
        if self.dirty {
            self.resync().await?;
        }
        Ok(())
    }

    async fn send(&mut self, messages: &[&str], until: Instant) -> Outcome<()> {
        let within = until.saturating_duration_since(Instant::now());
        let paced = self.manners.pace > Duration::ZERO;
        for message in messages {
            if paced {
                self.flush(until)
                    .await
                    .map_err(|failure| self.failed(failure, messages, within))?;
                sleep_until(self.next_message).await;
                self.next_message = Instant::now() + self.manners.pace;
            }
            self.outbox.extend_from_slice(message.as_bytes());
            self.outbox.extend_from_slice(match self.manners.ends {
                Ends::Lf => b"\n",
                Ends::CrLf => b"\r\n",
            });
        }
        self.flush(until)
            .await
            .map_err(|failure| self.failed(failure, messages, within))
    }

    /// Writes what is in the outbox; dropped midway, it goes on from there the next time.
    async fn flush(&mut self, until: Instant) -> Result<(), Failure> {
        let Self { stream, outbox, .. } = self;
        let stream = stream.as_mut().ok_or(Failure::Closed)?;
        while !outbox.is_empty() {
            match timeout_at(until, stream.write_buf(outbox)).await {
                Ok(Ok(0)) => return Err(Failure::Closed),
                Ok(Ok(_)) => {}
                Ok(Err(error)) => return Err(Failure::Link(error)),
                Err(_) => return Err(Failure::Late),
            }
        }
        Ok(())
    }

    async fn receive(&mut self) -> Result<Message, Failure> {
        loop {
            if !self.inbox.is_empty() {
                let (taken, message) = self
                    .decoder
                    .push(&self.inbox)
                    .map_err(|error| Failure::Frame(error.to_string()))?;
                let _ = self.inbox.split_to(taken);
                if let Some(message) = message {
                    return Ok(message);
                }
            }
            self.read_some().await?;
        }
    }

    /// Waits for at least one more byte. Nothing is lost when it is dropped.
    async fn read_some(&mut self) -> Result<(), Failure> {
        let Self { stream, inbox, .. } = self;
        let stream = stream.as_mut().ok_or(Failure::Closed)?;
        if inbox.is_empty() {
            // The same memory again, instead of ever more of it.
            inbox.clear();
        }
        inbox.reserve(1 << 12);
        match stream.read_buf(inbox).await {
            Ok(0) => Err(Failure::Closed),
            Ok(_) => Ok(()),
            Err(error) => Err(Failure::Link(error)),
        }
    }

    /// Turns a failure into an error; a broken link is closed, any other is left dirty.
    fn failed(&mut self, failure: Failure, messages: &[&str], within: Duration) -> DriverError {
        let message = messages.join(" | ");
        self.dirty = true;
        match failure {
            Failure::Late => DriverError::TimedOut {
                instrument: self.instrument.clone(),
                message,
                within,
            },
            Failure::Frame(wanted) => {
                let got = shortened(&self.inbox);
                self.garbled(messages, got, &format!("a reply of IEEE 488.2 ({wanted})"))
            }
            Failure::Closed => {
                self.disconnected(message, "it was closed at the other end".to_owned())
            }
            Failure::Link(error) => {
                let why = match is_disconnected(&error) {
                    true => format!("disconnected ({error})"),
                    false => error.to_string(),
                };
                self.disconnected(message, why)
            }
        }
    }

    fn disconnected(&mut self, message: String, why: String) -> DriverError {
        self.close();
        DriverError::Disconnected {
            instrument: self.instrument.clone(),
            message,
            why,
        }
    }

    fn garbled(&mut self, messages: &[&str], got: String, wanted: &str) -> DriverError {
        self.dirty = true;
        DriverError::Garbled {
            instrument: self.instrument.clone(),
            message: messages.join(" | "),
            got,
            wanted: wanted.to_owned(),
        }
    }
}

/// Why no reply was had.
#[derive(Debug)]
enum Failure {
    Late,
    Frame(String),
    Closed,
    Link(io::Error),
}

/// At most 60 bytes of a reply, for a message.
pub(crate) fn shortened(bytes: &[u8]) -> String {
    match bytes.get(..60) {
        Some(start) => format!("`{}…` ({} bytes)", start.escape_ascii(), bytes.len()),
        None => format!("`{}`", bytes.escape_ascii()),
    }
}
