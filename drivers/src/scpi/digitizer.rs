//! The generic digitizer: records by the map's `[record]`. In order: configure, arm and be sure that it
//! waits, the trigger, its completion, and each channel with its preamble.

use std::sync::Arc;
use std::time::Duration;

use darkline_core::quantity::Setting;
use darkline_core::trace::ChannelData;
use darkline_core::wire::block::{ByteOrder, Encoding};
use darkline_core::wire::number;

use super::Scpi;
use crate::error::DriverError;
use crate::map::{Entry, RecordMap, Waiting};
use crate::role::{
    CapturePlan, ChannelPlan, Digitizer, Granted, Identity, Outcome, Role, TriggerSource,
};

mod transfer;

/// Time within which an armed digitizer must say that it waits.
const ARMED_WITHIN: Duration = Duration::from_secs(1);

/// A digitizer behind a command map.
pub struct ScpiDigitizer {
    pub(crate) scpi: Scpi,
    /// The plan configured, and the standing of the instrument then: when that changes all is said again.
    configured: Option<(Granted<CapturePlan>, u64)>,
    /// Records counted before the one armed last, and the standing then; `None` before any.
    counted: Option<(u64, u64)>,
    /// Number of the record that `complete` found; its channels must carry it.
    record: Option<u64>,
}

/// One setting of a plan: what is said, and where its answer goes.
struct Part {
    say: Option<String>,
    entry: Entry,
    goes: Goes,
}

#[derive(Clone, Copy)]
enum Goes {
    Range(usize),
    Offset(usize),
    Coupling(usize),
    Filter(usize),
    Bandwidth(usize),
    Samples,
    Interval,
    Delay,
    /// A word that must come back as it was said.
    Word,
}

impl ScpiDigitizer {
    /// A digitizer over an opened instrument.
    pub fn new(scpi: Scpi) -> Self {
        Self {
            scpi,
            configured: None,
            counted: None,
            record: None,
        }
    }

    fn record_map(&self) -> Outcome<Arc<RecordMap>> {
        let record = self.scpi.map.record.clone().map(Arc::new);
        record.ok_or_else(|| self.scpi.not_in_map("`[record]`"))
    }

    fn parts(&self, map: &RecordMap, plan: &CapturePlan) -> Outcome<Vec<Part>> {
        let mut parts = Vec::new();
        let trigger = match plan.trigger {
            TriggerSource::External => "external",
            TriggerSource::Bus => "bus",
            TriggerSource::Immediate => "immediate",
        };
        parts.push(word(&map.format, map.encoding.word()));
        if let Some(order) = &map.order {
            parts.push(word(order, map.byte_order.word()));
        }
        parts.push(word(&map.trigger, trigger));
        parts.push(value(&map.samples, f64::from(plan.samples), Goes::Samples));
        parts.push(value(&map.interval, plan.interval, Goes::Interval));
        match &map.delay {
            Some(entry) => parts.push(value(entry, plan.delay, Goes::Delay)),
            None if plan.delay != 0.0 => return Err(self.scpi.not_in_map("trigger delay")),
            None => {}
        }
        for (at, channel) in plan.channels.iter().enumerate() {
            self.channel_parts(map, at, channel, &mut parts)?;
        }
        Ok(parts)
    }

    fn channel_parts(
        &self,
        map: &RecordMap,
        at: usize,
        plan: &ChannelPlan,
        parts: &mut Vec<Part>,
    ) -> Outcome<()> {
        let number = self.number(&plan.channel)?;
        let missing = |what: &str| self.scpi.not_in_map(format!("{what} of a channel"));
        let entry = |entry: &Option<Entry>, what: &str| {
            let entry = entry.as_ref().ok_or_else(|| missing(what))?;
            Ok::<_, DriverError>(entry.of_channel(number))
        };
        if let Some(range) = plan.range {
            parts.push(value(&entry(&map.range, "range")?, range, Goes::Range(at)));
        }
        if let Some(offset) = plan.offset {
            parts.push(value(
                &entry(&map.offset, "offset")?,
                offset,
                Goes::Offset(at),
            ));
        }
        if let Some(coupling) = &plan.coupling {
            let mut part = word(&entry(&map.coupling, "coupling")?, coupling);
            part.goes = Goes::Coupling(at);
            parts.push(part);
        }
        if let Some(bandwidth) = plan.bandwidth {
            let on = bandwidth.is_finite();
            if on {
                let entry = entry(&map.bandwidth, "bandwidth")?;
                parts.push(value(&entry, bandwidth, Goes::Bandwidth(at)));
            }
            if map.filter.is_some() {
                let entry = entry(&map.filter, "filter")?;
                parts.push(Part {
                    say: entry.write(Setting::Switch(on)),
                    entry,
                    goes: Goes::Filter(at),
                });
            }
        }
        Ok(())
    }

    /// The number at the end of a channel's name.
    fn number(&self, channel: &str) -> Outcome<u32> {
        let digits = channel.trim_start_matches(|c: char| !c.is_ascii_digit());
        digits
            .parse()
            .map_err(|_| self.scpi.not_in_map(format!("channel `{channel}`")))
    }

    async fn declare(&mut self, plan: &CapturePlan) -> Outcome<CapturePlan> {
        let map = self.record_map()?;
        let before = match &self.configured {
            Some((granted, standing)) if *standing == self.scpi.standing() => {
                self.parts(&map, &granted.asked)?
            }
            _ => Vec::new(),
        };
        self.configured = None;
        let parts = self.parts(&map, plan)?;
        let stands: Vec<&String> = before.iter().filter_map(|part| part.say.as_ref()).collect();
        let says: Vec<String> = parts
            .iter()
            .filter_map(|part| part.say.clone())
            .filter(|say| !stands.contains(&say))
            .collect();
        let asking: Vec<&Part> = parts
            .iter()
            .filter(|part| part.entry.readback.is_some())
            .collect();
        let questions: Vec<&str> = asking
            .iter()
            .filter_map(|part| part.entry.readback.as_deref())
            .collect();
        let answers = self.scpi.converse_checked(&says, &questions).await?;
        let mut granted = plan.clone();
        for ((part, answer), question) in asking.into_iter().zip(&answers).zip(&questions) {
            self.hear(&map, part, question, answer, &mut granted)?;
        }
        Ok(granted)
    }

    fn hear(
        &mut self,
        map: &RecordMap,
        part: &Part,
        question: &str,
        answer: &[u8],
        granted: &mut CapturePlan,
    ) -> Outcome<()> {
        match part.goes {
            Goes::Word => return self.hear_word(map, part, question, answer),
            Goes::Coupling(at) => {
                let word = part.entry.read_word(answer);
                return self.channel(granted, at, |channel| channel.coupling = word);
            }
            _ => {}
        }
        match (part.goes, self.scpi.heard(&part.entry, question, answer)?) {
            (Goes::Filter(at), Setting::Switch(false)) => self.channel(granted, at, |channel| {
                channel.bandwidth = Some(f64::INFINITY)
            }),
            (Goes::Filter(_), Setting::Switch(true)) => Ok(()),
            (Goes::Range(at), Setting::Number(value)) => {
                self.channel(granted, at, |channel| channel.range = Some(value))
            }
            (Goes::Offset(at), Setting::Number(value)) => {
                self.channel(granted, at, |channel| channel.offset = Some(value))
            }
            (Goes::Bandwidth(at), Setting::Number(value)) => {
                self.channel(granted, at, |channel| channel.bandwidth = Some(value))
            }
            (Goes::Samples, Setting::Number(value)) => {
                granted.samples = value as u32;
                Ok(())
            }
            (Goes::Interval, Setting::Number(value)) => {
                granted.interval = value;
                Ok(())
            }
            (Goes::Delay, Setting::Number(value)) => {
                granted.delay = value;
                Ok(())
            }
            _ => Err(self
                .scpi
                .out_of_place(question, answer, "a value of its kind")),
        }
    }

    fn channel(
        &self,
        granted: &mut CapturePlan,
        at: usize,
        put: impl FnOnce(&mut ChannelPlan),
    ) -> Outcome<()> {
        if let Some(channel) = granted.channels.get_mut(at) {
            put(channel);
        }
        Ok(())
    }

    /// Sample format and byte order come back in words of their own (`ASC,0` for `ASC`).
    fn hear_word(
        &mut self,
        map: &RecordMap,
        part: &Part,
        question: &str,
        answer: &[u8],
    ) -> Outcome<()> {
        let text = String::from_utf8_lossy(answer);
        let said = part.say.clone().unwrap_or_default();
        let right = if part.entry == map.format {
            Encoding::parse(&text) == Ok(map.encoding)
        } else if Some(&part.entry) == map.order.as_ref() {
            ByteOrder::parse(&text) == Ok(map.byte_order)
        } else {
            let word = part.entry.read_word(answer);
            let back = word.and_then(|word| part.entry.write_word(&word));
            back.is_some_and(|back| back.eq_ignore_ascii_case(&said))
        };
        match right {
            true => Ok(()),
            false => Err(self.scpi.exchange.misread(question, answer, said)),
        }
    }

    fn whole(&mut self, question: &str, answer: &[u8]) -> Outcome<u64> {
        match number::parse(answer) {
            Ok(value) if (0.0..9e15).contains(&value) => Ok(value as u64),
            _ => Err(self.scpi.out_of_place(question, answer, "a whole number")),
        }
    }

    async fn count(&mut self, map: &RecordMap) -> Outcome<Option<u64>> {
        let Some(question) = map.count.as_deref() else {
            return Ok(None);
        };
        let answers = self.scpi.converse_checked(&[], &[question]).await?;
        let answer = answers.first().map_or(&[][..], Vec::as_slice);
        self.whole(question, answer).map(Some)
    }

    async fn confirm_waiting(&mut self, map: &RecordMap) -> Outcome<()> {
        let (ask, bit) = match &map.waiting {
            Waiting::Delay(time) => {
                self.scpi.exchange.say(&[&map.arm]).await?;
                tokio::time::sleep(*time).await;
                return Ok(());
            }
            Waiting::Bit { ask, bit } => (ask, bit),
        };
        let until = tokio::time::Instant::now() + ARMED_WITHIN;
        let mut says = vec![map.arm.clone()];
        loop {
            let answers = self.scpi.converse_checked(&says, &[ask]).await?;
            let answer = answers.first().map_or(&[][..], Vec::as_slice);
            if self.whole(ask, answer)? >> bit & 1 == 1 {
                return Ok(());
            }
            if tokio::time::Instant::now() >= until {
                return Err(DriverError::TimedOut {
                    instrument: self.scpi.exchange.instrument().to_owned(),
                    message: format!("{} | {ask}", map.arm),
                    within: ARMED_WITHIN,
                });
            }
            says.clear();
            tokio::time::sleep(Duration::from_millis(1)).await;
        }
    }

    /// Ends a record that had no trigger, and says how many were counted.
    async fn missed(&mut self, map: &RecordMap, within: Duration) -> DriverError {
        let ended = async {
            self.scpi.steady().await?;
            self.scpi
                .converse_checked(std::slice::from_ref(&map.abort), &[])
                .await?;
            self.count(map).await
        };
        match ended.await {
            Ok(count) => {
                let before = self.counted.map_or(0, |(count, _)| count);
                DriverError::MissedTrigger {
                    instrument: self.scpi.exchange.instrument().to_owned(),
                    within,
                    counted: count.unwrap_or(before).saturating_sub(before),
                }
            }
            Err(error) => error,
        }
    }
}

impl Digitizer for ScpiDigitizer {
    async fn configure(&mut self, plan: &CapturePlan) -> Outcome<Granted<CapturePlan>> {
        self.scpi.steady().await?;
        if let Some((granted, standing)) = &self.configured
            && granted.asked == *plan
            && *standing == self.scpi.standing()
        {
            return Ok(granted.clone());
        }
        let granted = Granted {
            asked: plan.clone(),
            granted: self.declare(plan).await?,
        };
        self.configured = Some((granted.clone(), self.scpi.standing()));
        Ok(granted)
    }

    async fn arm(&mut self) -> Outcome<()> {
        let map = self.record_map()?;
        self.scpi.steady().await?;
        self.record = None;
        let standing = self.scpi.standing();
        if self.counted.is_none_or(|(_, then)| then != standing) {
            let count = self.count(&map).await?;
            self.counted = count.map(|count| (count, standing));
        }
        self.confirm_waiting(&map).await
    }

    async fn trigger(&mut self) -> Outcome<()> {
        let map = self.record_map()?;
        let Some(bus) = map.bus.as_deref() else {
            return Err(self.scpi.not_in_map("trigger over the bus"));
        };
        self.scpi.steady().await?;
        self.scpi.exchange.say(&[bus]).await
    }

    async fn complete(&mut self, within: Duration) -> Outcome<()> {
        let map = self.record_map()?;
        self.scpi.steady().await?;
        match self.scpi.await_end(&map.done, within).await {
            Err(DriverError::TimedOut { .. }) => {
                let error = self.missed(&map, within).await;
                self.counted = None;
                return Err(error);
            }
            other => other?,
        }
        let Some(now) = self.count(&map).await? else {
            return Ok(());
        };
        let before = self.counted.replace((now, self.scpi.standing()));
        self.record = Some(now);
        match before.map(|(before, _)| now.saturating_sub(before)) {
            Some(1) | None => Ok(()),
            Some(counted) => Err(DriverError::MissedTrigger {
                instrument: self.scpi.exchange.instrument().to_owned(),
                within,
                counted,
            }),
        }
    }

    async fn fetch(&mut self, channel: &str) -> Outcome<ChannelData> {
        let map = self.record_map()?;
        self.scpi.steady().await?;
        self.transfer(&map, channel).await
    }

    async fn abort(&mut self) -> Outcome<()> {
        let map = self.record_map()?;
        self.scpi.steady().await?;
        self.counted = None;
        self.scpi
            .converse_checked(std::slice::from_ref(&map.abort), &[])
            .await
            .map(drop)
    }
}

super::delegate_role!(ScpiDigitizer);

fn value(entry: &Entry, value: f64, goes: Goes) -> Part {
    Part {
        say: entry.write(Setting::Number(value)),
        entry: entry.clone(),
        goes,
    }
}

fn word(entry: &Entry, word: &str) -> Part {
    Part {
        say: entry.write_word(word),
        entry: entry.clone(),
        goes: Goes::Word,
    }
}
