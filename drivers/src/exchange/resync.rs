//! Matching questions and answers again after a reply may have been missed.
//!
//! Three fresh random numbers are written to a register and read back; once exactly these three have come,
//! with nothing behind them, every older reply has come before them (a link keeps its order) and was thrown
//! away. Draining the input instead does not help: a late reply comes after the draining.

use darkline_core::wire::frame::FrameError;
use tokio::time::{Instant, timeout_at};

use super::{Exchange, Failure};
use crate::error::DriverError;
use crate::role::Outcome;

/// A register that can be written and read back without any effect on what the bench does.
#[derive(Debug, Clone, PartialEq, Eq, Default)]
pub enum Sentinel {
    /// The event status enable register (`*ESE`, IEEE 488.2, 10.10) in one compound message.
    #[default]
    EventStatusEnable,
    /// Another register, written and asked in messages of their own, `{n}` standing for the number.
    Own {
        /// Writes the number.
        say: String,
        /// Asks for it; the reply is the number alone.
        ask: String,
        /// Highest number it holds.
        most: u32,
    },
    /// None: after a doubt the link is given up and made again.
    None,
}

impl Exchange {
    /// Puts questions and answers back in step. The error queue and the settings are then to be read again.
    ///
    /// # Errors
    /// [`DriverError::OutOfStep`] after the attempts that the manners allow; the link is then closed.
    pub async fn resync(&mut self) -> Outcome<()> {
        self.dirty = true;
        let attempts = match self.manners.sentinel {
            Sentinel::None => 0,
            _ => self.manners.attempts,
        };
        for attempt in 0..attempts {
            self.decoder.reset();
            self.inbox.clear();
            // Longer from one attempt to the next: an instrument that is merely slow must get its chance.
            let until = Instant::now() + self.manners.timeout * (attempt + 1);
            let (messages, awaited) = self.sentinel_messages();
            let messages: Vec<&str> = messages.iter().map(String::as_str).collect();
            let sent = self.send(&messages, until).await;
            match sent {
                Err(DriverError::TimedOut { .. }) => continue,
                other => other?,
            }
            match timeout_at(until, self.await_sentinel(&awaited)).await {
                Ok(Ok(())) => return self.in_step().await,
                Ok(Err(failure)) => {
                    return Err(self.failed(failure, &messages, self.manners.timeout));
                }
                Err(_) => {}
            }
        }
        self.close();
        Err(DriverError::OutOfStep {
            instrument: self.instrument.clone(),
            attempts,
        })
    }

    async fn in_step(&mut self) -> Outcome<()> {
        self.inbox.clear();
        self.dirty = false;
        self.doubts += 1;
        if self.manners.sentinel == Sentinel::EventStatusEnable {
            // We never enable an event, so that nothing else can be its value before.
            let until = Instant::now() + self.manners.timeout;
            self.send(&["*ESE 0"], until).await?;
        }
        Ok(())
    }

    /// The messages, and the bytes that their replies must be.
    fn sentinel_messages(&mut self) -> (Vec<String>, Vec<Vec<u8>>) {
        let most = match &self.manners.sentinel {
            Sentinel::Own { most, .. } => *most,
            _ => 255,
        };
        let room = usize::try_from(most).unwrap_or(255).saturating_add(1);
        let numbers = [(); 3].map(|()| self.random.below(room));
        let texts = numbers.map(|number| number.to_string());
        match &self.manners.sentinel {
            Sentinel::Own { say, ask, .. } => {
                let messages = texts
                    .iter()
                    .flat_map(|text| [say.replace("{n}", text), ask.clone()])
                    .collect();
                (messages, texts.map(String::into_bytes).to_vec())
            }
            Sentinel::EventStatusEnable | Sentinel::None => {
                let parts = texts.each_ref().map(|text| format!("*ESE {text};*ESE?"));
                (vec![parts.join(";")], vec![texts.join(";").into_bytes()])
            }
        }
    }

    /// Reads raw bytes until they end in exactly the awaited lines. No framing: the rest of a torn block may
    /// hold any byte.
    async fn await_sentinel(&mut self, awaited: &[Vec<u8>]) -> Result<(), Failure> {
        loop {
            if ends_in(&self.inbox, awaited) {
                return Ok(());
            }
            if self.inbox.len() > 2 * self.manners.longest {
                let limit = self.manners.longest;
                let length = self.inbox.len();
                return Err(Failure::Frame(
                    FrameError::TooLong { length, limit }.to_string(),
                ));
            }
            self.read_some().await?;
        }
    }
}

/// Whether the bytes end in these lines, each ended by LF or CR LF, with no digit before the first and
/// nothing after the last.
pub(super) fn ends_in(bytes: &[u8], lines: &[Vec<u8>]) -> bool {
    let mut rest = bytes;
    for line in lines.iter().rev() {
        let Some(before) = rest.strip_suffix(b"\n") else {
            return false;
        };
        let before = before.strip_suffix(b"\r").unwrap_or(before);
        let Some(before) = before.strip_suffix(&line[..]) else {
            return false;
        };
        rest = before;
    }
    // "1" + "2;3;4" of a reply torn off would else pass for "12;3;4" and the other way round.
    !rest
        .last()
        .is_some_and(|byte| byte.is_ascii_digit() || b";.+-".contains(byte))
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn exactly_the_numbers_and_nothing_after() {
        let awaited = [b"12;3;255".to_vec()];
        for bytes in [
            "12;3;255\n",
            "12;3;255\r\n",
            "1.5E-3\n12;3;255\n",
            "#3100ab\"12;3;255\n",
        ] {
            assert!(ends_in(bytes.as_bytes(), &awaited), "{bytes}");
        }
        for bytes in [
            "",
            "12;3;255",
            "112;3;255\n",
            "7;12;3;255\n",
            "12;3;255\n1.5\n",
            "12;3;255;1\n",
            "12;3;25\n",
        ] {
            assert!(!ends_in(bytes.as_bytes(), &awaited), "{bytes}");
        }
        let lines = [b"1".to_vec(), b"2".to_vec(), b"3".to_vec()];
        assert!(ends_in(b"late\n1\n2\r\n3\n", &lines));
        assert!(!ends_in(b"late\n1\n2\n", &lines));
    }
}
