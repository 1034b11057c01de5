//! The generic RF generator: properties by the map's entries, sweeps by its `[sweep]`.

use std::sync::Arc;
use std::time::Duration;

use darkline_core::quantity::Setting;
use darkline_core::trace::Direction;

use super::Scpi;
use crate::map::{Entry, SweepMap};
use crate::role::{FrequencySweep, Granted, Identity, Outcome, RfGenerator, Role};

/// An RF generator behind a command map.
pub struct ScpiGenerator {
    pub(crate) scpi: Scpi,
    /// The sweep prepared, and the standing of the instrument then: when that changes all is said again.
    prepared: Option<(Granted<FrequencySweep>, u64)>,
}

/// What is said and asked for one part of a sweep.
struct Part {
    entry: Entry,
    say: Option<String>,
    kind: Kind,
}

#[derive(Clone, Copy)]
enum Kind {
    Start,
    Stop,
    Duration,
    Steps,
    Word,
}

impl ScpiGenerator {
    /// A generator over an opened instrument.
    pub fn new(scpi: Scpi) -> Self {
        Self {
            scpi,
            prepared: None,
        }
    }

    fn sweep_map(&self) -> Outcome<SweepMap> {
        let sweep = self.scpi.map.sweep.clone();
        sweep.ok_or_else(|| self.scpi.not_in_map("`[sweep]`"))
    }

    fn parts(&self, map: &SweepMap, sweep: &FrequencySweep) -> Outcome<Vec<Part>> {
        let mut parts = Vec::new();
        let mut number = |entry: &Entry, value: f64, kind: Kind| {
            parts.push(Part {
                entry: entry.clone(),
                say: entry.write(Setting::Number(value)),
                kind,
            });
        };
        number(&map.start, sweep.start, Kind::Start);
        number(&map.stop, sweep.stop, Kind::Stop);
        if let (Some(entry), Some(steps)) = (&map.steps, sweep.steps) {
            number(entry, f64::from(steps), Kind::Steps);
        }
        number(&map.duration, sweep.duration, Kind::Duration);
        let way = match sweep.direction {
            Direction::Up => "up",
            Direction::Down => "down",
        };
        let course = match sweep.steps {
            Some(_) => "stepped",
            None => "continuous",
        };
        for (entry, word, needed) in [
            (&map.direction, way, sweep.direction == Direction::Down),
            (&map.kind, course, false),
        ] {
            match entry {
                Some(entry) => parts.push(Part {
                    entry: entry.clone(),
                    say: entry.write_word(word),
                    kind: Kind::Word,
                }),
                None if needed => return Err(self.scpi.not_in_map(format!("sweep {word}"))),
                None => {}
            }
        }
        Ok(parts)
    }

    async fn declare(&mut self, sweep: &FrequencySweep) -> Outcome<Granted<FrequencySweep>> {
        let map = self.sweep_map()?;
        let before = match &self.prepared {
            Some((granted, standing)) if *standing == self.scpi.standing() => {
                self.parts(&map, &granted.asked)?
            }
            _ => Vec::new(),
        };
        let mut says = match before.is_empty() {
            true => map.enter.clone(),
            false => Vec::new(),
        };
        self.prepared = None;
        let parts = self.parts(&map, sweep)?;
        let stands: Vec<&String> = before.iter().filter_map(|part| part.say.as_ref()).collect();
        for say in parts.iter().filter_map(|part| part.say.as_ref()) {
            if !stands.contains(&say) {
                says.push(say.clone());
            }
        }
        let questions: Vec<&str> = parts
            .iter()
            .filter_map(|part| part.entry.readback.as_deref())
            .collect();
        let answers = self.scpi.converse_checked(&says, &questions).await?;
        let asking = parts.iter().filter(|part| part.entry.readback.is_some());
        let mut granted = *sweep;
        for ((part, answer), question) in asking.zip(&answers).zip(&questions) {
            self.hear(part, question, answer, &mut granted)?;
        }
        Ok(Granted {
            asked: *sweep,
            granted,
        })
    }

    fn hear(
        &mut self,
        part: &Part,
        question: &str,
        answer: &[u8],
        granted: &mut FrequencySweep,
    ) -> Outcome<()> {
        if matches!(part.kind, Kind::Word) {
            let said = part.say.clone().unwrap_or_default();
            let word = part.entry.read_word(answer);
            let back = word.and_then(|word| part.entry.write_word(&word));
            return match back.is_some_and(|back| back.eq_ignore_ascii_case(&said)) {
                true => Ok(()),
                false => Err(self.scpi.exchange.misread(question, answer, said)),
            };
        }
        let value = match self.scpi.heard(&part.entry, question, answer)? {
            Setting::Number(value) => value,
            Setting::Switch(_) => return Err(self.scpi.out_of_place(question, answer, "a number")),
        };
        match part.kind {
            Kind::Start => granted.start = value,
            Kind::Stop => granted.stop = value,
            Kind::Duration => granted.duration = value,
            Kind::Steps => granted.steps = Some(value as u32),
            Kind::Word => {}
        }
        Ok(())
    }
}

impl RfGenerator for ScpiGenerator {
    async fn prepare_sweep(&mut self, sweep: &FrequencySweep) -> Outcome<Granted<FrequencySweep>> {
        self.scpi.steady().await?;
        if let Some((granted, standing)) = &self.prepared
            && granted.asked == *sweep
            && *standing == self.scpi.standing()
        {
            return Ok(*granted);
        }
        let granted = self.declare(sweep).await?;
        self.prepared = Some((granted, self.scpi.standing()));
        Ok(granted)
    }

    async fn start_sweep(&mut self) -> Outcome<()> {
        let map = Arc::clone(&self.scpi.map);
        let Some(sweep) = &map.sweep else {
            return Err(self.scpi.not_in_map("`[sweep]`"));
        };
        self.scpi.steady().await?;
        self.scpi.exchange.say(&[&sweep.begin]).await
    }

    async fn await_sweep(&mut self, within: Duration) -> Outcome<()> {
        let map = Arc::clone(&self.scpi.map);
        let Some(sweep) = &map.sweep else {
            return Err(self.scpi.not_in_map("`[sweep]`"));
        };
        self.scpi.steady().await?;
        self.scpi.await_end(&sweep.done, within).await?;
        self.scpi.converse_checked(&[], &[]).await.map(drop)
    }

    async fn end_sweeping(&mut self) -> Outcome<()> {
        let map = Arc::clone(&self.scpi.map);
        self.prepared = None;
        match &map.sweep {
            Some(sweep) if !sweep.leave.is_empty() => {
                self.scpi.steady().await?;
                self.scpi
                    .converse_checked(&sweep.leave, &[])
                    .await
                    .map(drop)
            }
            _ => Ok(()),
        }
    }
}

super::delegate_role!(ScpiGenerator);
