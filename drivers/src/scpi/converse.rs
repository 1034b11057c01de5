//! Conversations of the generic driver: questions put together and answers taken apart, the error queue, the
//! power-on bit, and ends that are waited for.

use std::sync::Arc;
use std::time::Duration;

use darkline_core::wire::frame::{Message, elements, unquoted};
use darkline_core::wire::number;

use super::Scpi;
use crate::error::{DriverError, QueuedError};
use crate::map::Done;
use crate::role::Outcome;

/// Bytes of questions put into one message: the input buffers of simple instruments are short.
const MESSAGE_ROOM: usize = 200;
/// Errors read from a queue before it is taken to be endless.
const QUEUE_ROOM: usize = 64;
/// Bit 7 of the event status register: power on (IEEE 488.2, 11.5.1.1.2).
pub(super) const POWER_ON: u32 = 1 << 7;

impl Scpi {
    /// Says messages, then asks questions: as few exchanges as the map allows. One answer per question.
    pub(crate) async fn converse(
        &mut self,
        says: &[String],
        questions: &[&str],
    ) -> Outcome<Vec<Vec<u8>>> {
        let mut says: Vec<&str> = says.iter().map(String::as_str).collect();
        let mut answers = Vec::with_capacity(questions.len());
        for part in self.parts(questions) {
            let joined = joined(part);
            let mut messages = std::mem::take(&mut says);
            messages.push(&joined);
            let reply = self.exchange.ask(&messages).await?;
            self.take_answers(&joined, part.len(), &reply, &mut answers)
                .await?;
        }
        if !says.is_empty() {
            self.exchange.say(&says).await?;
        }
        Ok(answers)
    }

    pub(super) async fn take_answers(
        &mut self,
        message: &str,
        wanted: usize,
        reply: &Message,
        answers: &mut Vec<Vec<u8>>,
    ) -> Outcome<()> {
        if reply.len() == wanted {
            answers.extend((0..wanted).filter_map(|at| reply.unit(at).map(<[u8]>::to_vec)));
            return Ok(());
        }
        // A question that was refused leaves a gap: the queue says so better than the gap does.
        let wanted = format!("{wanted} answers");
        let misread = self.exchange.misread(message, reply.bytes(), wanted);
        match self.read_errors().await? {
            errors if errors.is_empty() => {
                self.exchange.distrust();
                Err(misread)
            }
            errors => Err(self.refused(message, errors)),
        }
    }

    fn parts<'q>(&self, questions: &'q [&'q str]) -> Vec<&'q [&'q str]> {
        if !self.map.talk.compound {
            return questions.chunks(1).collect();
        }
        let mut parts = Vec::new();
        let (mut from, mut length) = (0, 0);
        for (at, question) in questions.iter().enumerate() {
            if at > from && length + question.len() > MESSAGE_ROOM {
                parts.push(&questions[from..at]);
                (from, length) = (at, 0);
            }
            length += question.len() + 2;
        }
        if from < questions.len() {
            parts.push(&questions[from..]);
        }
        parts
    }

    /// As [`Self::converse`], with the error queue and the power-on bit after it.
    pub(crate) async fn converse_checked(
        &mut self,
        says: &[String],
        questions: &[&str],
    ) -> Outcome<Vec<Vec<u8>>> {
        let map = Arc::clone(&self.map);
        let mut all = questions.to_vec();
        all.extend(map.talk.error.as_deref());
        if map.talk.power_on {
            all.push("*ESR?");
        }
        let mut answers = self.converse(says, &all).await?;
        let checks = answers.split_off(questions.len().min(answers.len()));
        let said = says.join(" | ");
        let mut checks = checks.iter();
        if map.talk.error.is_some()
            && let Some(first) = checks.next()
        {
            let first = self.queued(first)?;
            if first.number != 0 {
                let mut errors = vec![first];
                errors.extend(self.read_errors().await?);
                return Err(self.refused(&said, errors));
            }
        }
        if map.talk.power_on
            && let Some(status) = checks.next()
        {
            let status = self.status(status)?;
            self.judge_power(status)?;
        }
        Ok(answers)
    }

    /// Asks for one more error until there is none.
    pub(super) async fn read_errors(&mut self) -> Outcome<Vec<QueuedError>> {
        let map = Arc::clone(&self.map);
        let Some(question) = map.talk.error.as_deref() else {
            return Ok(Vec::new());
        };
        let mut errors = Vec::new();
        while errors.len() < QUEUE_ROOM {
            let reply = self.exchange.ask(&[question]).await?;
            let error = self.queued(reply.unit(0).unwrap_or_default())?;
            if error.number == 0 {
                return Ok(errors);
            }
            errors.push(error);
        }
        Err(self.refused(question, errors))
    }

    fn queued(&mut self, answer: &[u8]) -> Outcome<QueuedError> {
        let parts = elements(answer);
        let number = parts
            .first()
            .and_then(|first| std::str::from_utf8(first).ok())
            .and_then(|text| text.parse::<i32>().ok());
        match number {
            Some(number) => Ok(QueuedError {
                number,
                text: parts.get(1).map(|text| unquoted(text)).unwrap_or_default(),
            }),
            None => Err(self.out_of_place("the error queue", answer, "number,\"text\"")),
        }
    }

    fn status(&mut self, answer: &[u8]) -> Outcome<u32> {
        match number::parse(answer) {
            Ok(value) if (0.0..=65535.0).contains(&value) => Ok(value as u32),
            _ => Err(self.out_of_place("a status register", answer, "a whole number")),
        }
    }

    /// An answer that belongs to no question: the link is dirty from here on.
    pub(crate) fn out_of_place(
        &mut self,
        message: &str,
        answer: &[u8],
        wanted: &str,
    ) -> DriverError {
        self.exchange.distrust();
        self.exchange.misread(message, answer, wanted)
    }

    fn refused(&self, message: &str, errors: Vec<QueuedError>) -> DriverError {
        DriverError::Refused {
            instrument: self.exchange.instrument().to_owned(),
            message: message.to_owned(),
            errors,
        }
    }

    pub(super) fn judge_power(&mut self, status: u32) -> Outcome<()> {
        if status & POWER_ON == 0 {
            return Ok(());
        }
        // What we set is gone; the next message finds the instrument as it wakes up.
        self.known.clear();
        self.cycles += 1;
        Err(DriverError::PowerCycled {
            instrument: self.exchange.instrument().to_owned(),
        })
    }

    pub(super) async fn power_on_bit(&mut self) -> Outcome<u32> {
        if !self.map.talk.power_on {
            return Ok(0);
        }
        let reply = self.exchange.ask(&["*ESR?"]).await?;
        self.status(reply.unit(0).unwrap_or_default())
    }

    /// Waits for an end as the map tells it.
    pub(crate) async fn await_end(&mut self, done: &Done, within: Duration) -> Outcome<()> {
        match done {
            Done::Deferred(ask) => {
                self.exchange.ask_within(&[ask], within, None).await?;
                Ok(())
            }
            Done::Poll { ask, clear, every } => {
                let until = tokio::time::Instant::now() + within;
                loop {
                    let answers = self.converse(&[], &[ask]).await?;
                    let status = self.status(answers.first().map_or(&[], Vec::as_slice))?;
                    if status & clear == 0 {
                        return Ok(());
                    }
                    if tokio::time::Instant::now() >= until {
                        return Err(DriverError::TimedOut {
                            instrument: self.exchange.instrument().to_owned(),
                            message: ask.clone(),
                            within,
                        });
                    }
                    tokio::time::sleep(*every).await;
                }
            }
        }
    }
}

/// Several questions in one message; each header begins at the root again (SCPI-1999 Volume 1, 6.2.4).
pub(super) fn joined(questions: &[&str]) -> String {
    let mut message = String::new();
    for question in questions {
        if !message.is_empty() {
            message.push(';');
            if !question.starts_with(['*', ':']) {
                message.push(':');
            }
        }
        message.push_str(question);
    }
    message
}

#[cfg(test)]
mod tests {
    use super::joined;

    #[test]
    fn questions_are_joined_at_the_root() {
        assert_eq!(
            joined(&["A:B?", "C:D?", "*ESR?", ":E?"]),
            "A:B?;:C:D?;*ESR?;:E?"
        );
    }
}
