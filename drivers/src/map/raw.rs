//! A command map as written: TOML with places, checked into a [`CommandMap`]. Every refusal names its line.

use std::collections::BTreeMap;
use std::time::Duration;

use darkline_core::channel;
use darkline_core::quantity::{self, Dimension};
use darkline_core::wire::block::{ByteOrder, Encoding};
use serde::Deserialize;
use toml::Spanned;

use super::entry::{Entry, Template};
use super::harmless::forbidden;
use super::{CommandMap, Done, Field, MapError, RecordMap, SweepMap, Talk, Waiting};
use crate::exchange::{Ends, Manners, Sentinel};

type Text = Spanned<String>;

#[derive(Deserialize)]
#[serde(deny_unknown_fields)]
struct RawMap {
    role: Text,
    #[serde(default = "any")]
    identity: String,
    #[serde(default)]
    talk: RawTalk,
    #[serde(default)]
    quantity: BTreeMap<String, Spanned<RawEntry>>,
    sweep: Option<Spanned<RawSweep>>,
    record: Option<Spanned<RawRecord>>,
}

#[derive(Deserialize, Default)]
#[serde(deny_unknown_fields)]
struct RawTalk {
    ends: Option<Text>,
    timeout: Option<Text>,
    pace: Option<Text>,
    compound: Option<bool>,
    #[serde(default)]
    enter: Vec<Text>,
    #[serde(default)]
    leave: Vec<Text>,
    error: Option<String>,
    power_on: Option<bool>,
    sentinel: Option<Spanned<RawSentinel>>,
}

#[derive(Deserialize)]
#[serde(deny_unknown_fields)]
struct RawSentinel {
    kind: String,
    say: Option<String>,
    ask: Option<String>,
    most: Option<u32>,
}

#[derive(Deserialize)]
#[serde(deny_unknown_fields)]
struct RawEntry {
    say: Option<Text>,
    readback: Option<Text>,
    measure: Option<Text>,
    hear: Option<Text>,
    resolution: Option<Text>,
    budget: Option<u64>,
    #[serde(default)]
    words: BTreeMap<String, String>,
}

#[derive(Deserialize)]
#[serde(deny_unknown_fields)]
struct RawSweep {
    #[serde(default)]
    enter: Vec<String>,
    #[serde(default)]
    leave: Vec<String>,
    start: Spanned<RawEntry>,
    stop: Spanned<RawEntry>,
    duration: Spanned<RawEntry>,
    steps: Option<Spanned<RawEntry>>,
    direction: Option<Spanned<RawEntry>>,
    kind: Option<Spanned<RawEntry>>,
    begin: String,
    done: Spanned<RawDone>,
}

#[derive(Deserialize)]
#[serde(deny_unknown_fields)]
struct RawDone {
    deferred: Option<String>,
    poll: Option<String>,
    clear: Option<u32>,
    every: Option<Text>,
}

#[derive(Deserialize)]
#[serde(deny_unknown_fields)]
struct RawWaiting {
    ask: Option<String>,
    bit: Option<u32>,
    delay: Option<Text>,
}

#[derive(Deserialize)]
#[serde(deny_unknown_fields)]
struct RawRecord {
    range: Option<Spanned<RawEntry>>,
    offset: Option<Spanned<RawEntry>>,
    coupling: Option<Spanned<RawEntry>>,
    filter: Option<Spanned<RawEntry>>,
    bandwidth: Option<Spanned<RawEntry>>,
    samples: Spanned<RawEntry>,
    interval: Spanned<RawEntry>,
    delay: Option<Spanned<RawEntry>>,
    trigger: Spanned<RawEntry>,
    arm: String,
    waiting: Spanned<RawWaiting>,
    done: Spanned<RawDone>,
    count: Option<String>,
    bus: Option<String>,
    abort: String,
    format: Spanned<RawEntry>,
    encoding: Text,
    order: Option<Spanned<RawEntry>>,
    byte_order: Option<Text>,
    preamble: String,
    fields: Vec<Text>,
    data: String,
    transfer: Option<Text>,
}

fn any() -> String {
    "*".to_owned()
}

/// The text at hand, for errors that know their line.
struct Reader<'a> {
    text: &'a str,
    file: &'a str,
}

type Checked<T> = Result<T, MapError>;

pub(super) fn parse(text: &str, file: &str) -> Checked<CommandMap> {
    let reader = Reader { text, file };
    let raw: RawMap = toml::from_str(text).map_err(|error| reader.toml(&error))?;
    let map = reader.map(raw)?;
    reader.touches_no_limit(&map)?;
    Ok(map)
}

impl Reader<'_> {
    fn fail(&self, at: usize, message: impl Into<String>, help: impl Into<String>) -> MapError {
        let before = self.text.as_bytes().get(..at).unwrap_or_default();
        MapError {
            file: self.file.to_owned(),
            line: Some(1 + before.iter().filter(|byte| **byte == b'\n').count()),
            message: message.into(),
            help: help.into(),
        }
    }

    fn toml(&self, error: &toml::de::Error) -> MapError {
        let at = error.span().map_or(0, |span| span.start);
        let help = "see the built-in maps for every key there is";
        self.fail(at, error.message(), help)
    }

    fn map(&self, raw: RawMap) -> Checked<CommandMap> {
        let role = channel::Role::find(raw.role.get_ref()).ok_or_else(|| {
            let names: Vec<&str> = channel::Role::ALL.iter().map(|role| role.name()).collect();
            self.fail(
                raw.role.span().start,
                format!("`{}` is no role", raw.role.get_ref()),
                format!("write one of {}", names.join(", ")),
            )
        })?;
        let quantities = raw
            .quantity
            .into_iter()
            .map(|(name, entry)| Ok((name.clone(), self.entry(entry, usual(role, &name))?)))
            .collect::<Checked<_>>()?;
        let name = self.file.rsplit('/').next().unwrap_or(self.file);
        Ok(CommandMap {
            name: name.trim_end_matches(".toml").to_owned(),
            role,
            identity: raw.identity,
            talk: self.talk(raw.talk)?,
            quantities,
            sweep: raw.sweep.map(|sweep| self.sweep(sweep)).transpose()?,
            record: raw.record.map(|record| self.record(record)).transpose()?,
        })
    }

    fn talk(&self, raw: RawTalk) -> Checked<Talk> {
        let usual = Manners::default();
        let ends = match &raw.ends {
            None => Ends::Lf,
            Some(text) => match text.get_ref().as_str() {
                "lf" => Ends::Lf,
                "crlf" => Ends::CrLf,
                other => {
                    let message = format!("messages end in `lf` or `crlf`, not in `{other}`");
                    return Err(self.fail(text.span().start, message, "write one of the two"));
                }
            },
        };
        Ok(Talk {
            manners: Manners {
                ends,
                timeout: self.time(raw.timeout.as_ref(), usual.timeout)?,
                pace: self.time(raw.pace.as_ref(), usual.pace)?,
                sentinel: self.sentinel(raw.sentinel)?,
                ..usual
            },
            compound: raw.compound.unwrap_or(true),
            enter: raw.enter.into_iter().map(Spanned::into_inner).collect(),
            leave: raw.leave.into_iter().map(Spanned::into_inner).collect(),
            error: match raw.error {
                None => Some("SYST:ERR?".to_owned()),
                Some(text) if text.is_empty() => None,
                Some(text) => Some(text),
            },
            power_on: raw.power_on.unwrap_or(true),
        })
    }

    fn sentinel(&self, raw: Option<Spanned<RawSentinel>>) -> Checked<Sentinel> {
        let Some(raw) = raw else {
            return Ok(Sentinel::EventStatusEnable);
        };
        let at = raw.span().start;
        match raw.into_inner() {
            RawSentinel { kind, say: None, ask: None, most: None } if kind == "ese" => {
                Ok(Sentinel::EventStatusEnable)
            }
            RawSentinel { kind, say: None, ask: None, most: None } if kind == "none" => {
                Ok(Sentinel::None)
            }
            RawSentinel { kind, say: Some(say), ask: Some(ask), most: Some(most) }
                if kind == "own" && say.contains("{n}") && most >= 15 =>
            {
                Ok(Sentinel::Own { say, ask, most })
            }
            _ => Err(self.fail(
                at,
                "a sentinel is of kind `ese`, `none`, or `own` with `say` (with {n} in it), `ask`, and `most` of 15 or more",
                "name a register that can be written and read back without any effect",
            )),
        }
    }

    fn time(&self, text: Option<&Text>, usual: Duration) -> Checked<Duration> {
        let Some(text) = text else {
            return Ok(usual);
        };
        quantity::parse(text.get_ref(), Dimension::Time)
            .map_err(|error| error.to_string())
            .and_then(|seconds| {
                Duration::try_from_secs_f64(seconds).map_err(|error| error.to_string())
            })
            .map_err(|why| self.fail(text.span().start, why, "write a time such as \"20 ms\""))
    }

    fn entry(&self, raw: Spanned<RawEntry>, usual: Option<Dimension>) -> Checked<Entry> {
        let at = raw.span().start;
        let raw = raw.into_inner();
        let template = |text: &Text| {
            Template::parse(text.get_ref()).map_err(|why| {
                self.fail(
                    text.span().start,
                    why,
                    "write for instance \"SOUR:CURR {A}\"",
                )
            })
        };
        let say = raw.say.as_ref().map(template).transpose()?;
        if let (Some(text), Some(say)) = (&raw.say, &say)
            && !say.takes_value()
        {
            let help = "write the value's unit in braces, such as {A} or {switch}";
            return Err(self.fail(text.span().start, "`say` has no place for the value", help));
        }
        if say.is_some() && raw.readback.is_none() {
            let message = "what can be set must be read back";
            return Err(self.fail(at, message, "add `readback`"));
        }
        let hear = match (&raw.hear, &raw.say) {
            (Some(text), _) => template(text)?,
            (None, Some(text)) => {
                // The value as it is said, alone.
                let said = text.get_ref();
                let alone = said
                    .split('{')
                    .next_back()
                    .and_then(|rest| rest.split('}').next());
                let alone = format!("{{{}}}", alone.unwrap_or("number"));
                Template::parse(&alone).map_err(|why| self.fail(text.span().start, why, ""))?
            }
            (None, None) => {
                return Err(self.fail(
                    at,
                    "`hear` is missing",
                    "write for instance hear = \"{V}\"",
                ));
            }
        };
        let resolution = match (&raw.resolution, usual) {
            (None, _) => 0.0,
            (Some(text), usual) => {
                let read = match usual {
                    Some(dimension) => quantity::parse(text.get_ref(), dimension.difference()),
                    None => quantity::parse_any(text.get_ref()).map(|(value, _)| value),
                };
                read.map_err(|error| {
                    let help = "write it with its unit, such as \"1 uA\"";
                    self.fail(text.span().start, error.to_string(), help)
                })?
            }
        };
        Ok(Entry {
            say,
            readback: raw.readback.map(Spanned::into_inner),
            measure: raw.measure.map(Spanned::into_inner),
            hear,
            resolution,
            budget: raw.budget,
            words: raw.words,
        })
    }

    fn optional(&self, raw: Option<Spanned<RawEntry>>) -> Checked<Option<Entry>> {
        raw.map(|entry| self.entry(entry, None)).transpose()
    }

    fn sweep(&self, raw: Spanned<RawSweep>) -> Checked<SweepMap> {
        let raw = raw.into_inner();
        Ok(SweepMap {
            enter: raw.enter,
            leave: raw.leave,
            start: self.entry(raw.start, None)?,
            stop: self.entry(raw.stop, None)?,
            duration: self.entry(raw.duration, None)?,
            steps: self.optional(raw.steps)?,
            direction: self.optional(raw.direction)?,
            kind: self.optional(raw.kind)?,
            begin: raw.begin,
            done: self.done(raw.done)?,
        })
    }

    fn done(&self, raw: Spanned<RawDone>) -> Checked<Done> {
        let at = raw.span().start;
        let raw = raw.into_inner();
        match (raw.deferred, raw.poll, raw.clear) {
            (Some(ask), None, None) => Ok(Done::Deferred(ask)),
            (None, Some(ask), Some(clear)) => Ok(Done::Poll {
                ask,
                clear,
                every: self.time(raw.every.as_ref(), Duration::from_millis(5))?,
            }),
            _ => Err(self.fail(
                at,
                "an end is known by `deferred`, or by `poll` with `clear`",
                "write done = { deferred = \"*OPC?\" }",
            )),
        }
    }

    fn waiting(&self, raw: Spanned<RawWaiting>) -> Checked<Waiting> {
        let at = raw.span().start;
        let raw = raw.into_inner();
        match (raw.ask, raw.bit, raw.delay) {
            (Some(ask), Some(bit @ 0..=31), None) => Ok(Waiting::Bit { ask, bit }),
            (None, None, Some(delay)) => {
                Ok(Waiting::Delay(self.time(Some(&delay), Duration::ZERO)?))
            }
            _ => Err(self.fail(
                at,
                "waiting is known by `ask` with `bit`, or by `delay`",
                "write waiting = { ask = \"STAT:OPER:COND?\", bit = 5 }",
            )),
        }
    }

    fn record(&self, raw: Spanned<RawRecord>) -> Checked<RecordMap> {
        let raw = raw.into_inner();
        let word = |text: &Text, error: String| {
            self.fail(text.span().start, error, "see SCPI-1999, FORMat subsystem")
        };
        let byte_order = match &raw.byte_order {
            None => ByteOrder::Normal,
            Some(text) => {
                ByteOrder::parse(text.get_ref()).map_err(|error| word(text, error.to_string()))?
            }
        };
        Ok(RecordMap {
            range: self.optional(raw.range)?,
            offset: self.optional(raw.offset)?,
            coupling: self.optional(raw.coupling)?,
            filter: self.optional(raw.filter)?,
            bandwidth: self.optional(raw.bandwidth)?,
            samples: self.entry(raw.samples, None)?,
            interval: self.entry(raw.interval, None)?,
            delay: self.optional(raw.delay)?,
            trigger: self.entry(raw.trigger, None)?,
            arm: raw.arm,
            waiting: self.waiting(raw.waiting)?,
            done: self.done(raw.done)?,
            count: raw.count,
            bus: raw.bus,
            abort: raw.abort,
            format: self.entry(raw.format, None)?,
            encoding: Encoding::parse(raw.encoding.get_ref())
                .map_err(|error| word(&raw.encoding, error.to_string()))?,
            order: self.optional(raw.order)?,
            byte_order,
            preamble: raw.preamble,
            fields: raw
                .fields
                .iter()
                .map(|text| self.field(text))
                .collect::<Checked<_>>()?,
            data: raw.data,
            transfer: self.time(raw.transfer.as_ref(), Duration::from_secs(10))?,
        })
    }

    fn field(&self, text: &Text) -> Checked<Field> {
        Ok(match text.get_ref().as_str() {
            "samples" => Field::Samples,
            "interval" => Field::Interval,
            "scale" => Field::Scale,
            "offset" => Field::Offset,
            "delay" => Field::Delay,
            "count" => Field::Count,
            "lowest" => Field::Lowest,
            "highest" => Field::Highest,
            "other" => Field::Other,
            unknown => {
                return Err(self.fail(
                    text.span().start,
                    format!("`{unknown}` is no element of a preamble"),
                    "there are samples, interval, scale, offset, delay, count, lowest, highest, other",
                ));
            }
        })
    }

    /// Connecting and parting must not change what the bench does: nothing that resets, recalls or sets.
    fn touches_no_limit(&self, map: &CommandMap) -> Checked<()> {
        let talk: RawMap = toml::from_str(self.text).map_err(|error| self.toml(&error))?;
        for message in talk.talk.enter.iter().chain(&talk.talk.leave) {
            for unit in message.get_ref().split(';') {
                if let Some(what) = forbidden(unit, map) {
                    return Err(self.fail(
                        message.span().start,
                        format!("`{}` {what} when the link is made or left", unit.trim()),
                        "leave it out: only a person or a sequence sets what the bench does",
                    ));
                }
            }
        }
        Ok(())
    }
}

fn usual(role: channel::Role, property: &str) -> Option<Dimension> {
    let offers = role.offers();
    let offer = offers.iter().find(|offer| offer.property == property)?;
    Some(offer.dimension)
}
