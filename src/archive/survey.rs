//! First pass over a journal: how many points, samples and texts there are, so that the archive can be laid out
//! before a sample is written. Memory does not grow with the number of points.

use std::collections::BTreeSet;
use std::path::Path;

use darkline_core::answer::Answer;
use darkline_core::entry::{Entry, EntryKind, GuardStage, Header, PointRecord, State};
use darkline_core::quantity::Setting;
use darkline_core::trace::{Acquisition, ChannelData, Codes, Direction, Trace};

use super::fit_values;
use super::words::words;
use crate::journal::{self, JournalError};

/// What a run's journal holds, without the samples themselves.
#[derive(Debug, Default)]
pub struct Survey {
    /// Where the whole records end, bytes: a second pass reads as far.
    pub end: u64,
    /// The torn tail and damage, in words, in order.
    pub damage: Vec<String>,
    /// The first entry.
    pub header: Header,
    /// How the run stands, and why.
    pub state: Option<(State, String)>,
    /// Number of entries.
    pub entries: usize,
    /// Longest entry in words, bytes.
    pub longest_words: usize,
    /// Longest name of a kind of entry, bytes.
    pub longest_kind: usize,
    /// Number of completed points.
    pub points: usize,
    /// Sweep centre of the first point that has one, Hz: where detuning is counted from.
    pub zero: Option<f64>,
    /// Depth of the grid of steps.
    pub steps: usize,
    /// Directions that were swept, in the order of the archive.
    pub directions: BTreeSet<Direction>,
    /// Most acquisitions of a point in one direction.
    pub repeats: usize,
    /// Most samples of an acquisition.
    pub samples: usize,
    /// Acquisitions in all.
    pub acquisitions: usize,
    /// Recorded channels, in the order in which they first came.
    pub channels: Vec<Channel>,
    /// Quantities, in the order in which they first came.
    pub quantities: Vec<Quantity>,
    /// Guards with what they judge and when, in the order in which they first came.
    pub guards: Vec<(u32, String, GuardStage)>,
    /// Names of the numbers of a fit, in the order in which they first came.
    pub fit: Vec<String>,
    /// Identities: instrument, identity, serial number.
    pub identities: Vec<[String; 3]>,
    /// Settings: instrument, setting, unit, asked, granted.
    pub settings: Vec<(String, String, String, f64, f64)>,
    /// The last answer.
    pub answer: Option<Answer>,
}

/// A quantity that points have as a coordinate.
#[derive(Debug)]
pub struct Quantity {
    /// Its name.
    pub name: String,
    /// It is set to on or off.
    pub switch: bool,
}

/// A recorded channel over the whole run.
#[derive(Debug)]
pub struct Channel {
    /// What the sequence calls it.
    pub name: String,
    /// Unit of the scaled samples.
    pub unit: String,
    /// How its codes are kept in the archive.
    pub storage: Storage,
    /// Scale and offset if they are the same throughout.
    pub scaling: Option<(f64, f64)>,
    /// Samples in all.
    pub samples: usize,
    lowest: f64,
    highest: f64,
}

/// Number format of a channel's codes in the archive: the narrowest that holds them all, and a fill value that
/// none of them has where samples are missing.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord)]
pub enum Storage {
    /// 8 bits with sign.
    I8,
    /// 8 bits.
    U8,
    /// 16 bits with sign.
    I16,
    /// 16 bits.
    U16,
    /// 32 bits with sign.
    I32,
    /// Floating point, 32 bits.
    F32,
    /// Floating point, 64 bits.
    F64,
}

impl Storage {
    fn of(codes: &Codes) -> Self {
        match codes {
            Codes::I8(_) => Self::I8,
            Codes::U8(_) => Self::U8,
            Codes::I16(_) => Self::I16,
            Codes::U16(_) => Self::U16,
            Codes::F32(_) => Self::F32,
            Codes::F64(_) => Self::F64,
        }
    }

    /// The narrowest format that holds both without a loss.
    fn with(self, other: Self) -> Self {
        use Storage::{F32, F64, I8, I16, I32, U8, U16};
        match (self.min(other), self.max(other)) {
            (a, b) if a == b => a,
            (I8 | U8, U8 | I16) => I16,
            (U8, U16) => U16,
            (I8 | I16, U16) | (_, I32) => I32,
            // 24 bits of a 32-bit float hold any 16-bit code, not every 32-bit one.
            (I8 | U8 | I16 | U16, F32) => F32,
            _ => F64,
        }
    }

    /// The value that stands for a missing sample.
    pub fn fill(self) -> f64 {
        match self {
            Self::I8 => f64::from(i8::MIN),
            Self::U8 => f64::from(u8::MAX),
            Self::I16 => f64::from(i16::MIN),
            Self::U16 => f64::from(u16::MAX),
            Self::I32 => f64::from(i32::MIN),
            Self::F32 | Self::F64 => f64::NAN,
        }
    }
}

impl Channel {
    /// Bits of the codes as received are 16 or fewer: 24 bits hold any average of them.
    pub fn is_narrow(&self) -> bool {
        !matches!(self.storage, Storage::F64)
    }

    fn new(data: &ChannelData) -> Self {
        Self {
            name: data.name.clone(),
            unit: data.unit.clone(),
            storage: Storage::of(&data.codes),
            scaling: Some((data.scale, data.offset)),
            samples: 0,
            lowest: f64::INFINITY,
            highest: f64::NEG_INFINITY,
        }
    }

    fn see(&mut self, data: &ChannelData) {
        self.storage = self.storage.with(Storage::of(&data.codes));
        if self.scaling != Some((data.scale, data.offset)) {
            self.scaling = None;
        }
        self.samples += data.codes.len();
        let (lowest, highest) = match &data.codes {
            Codes::I8(codes) => ends(codes),
            Codes::U8(codes) => ends(codes),
            Codes::I16(codes) => ends(codes),
            Codes::U16(codes) => ends(codes),
            Codes::F32(_) | Codes::F64(_) => (f64::NEG_INFINITY, f64::INFINITY),
        };
        self.lowest = self.lowest.min(lowest);
        self.highest = self.highest.max(highest);
    }

    /// Settle the number format: where samples are missing, no code may be the fill value.
    fn settle(&mut self, cells: usize) {
        let fill = self.storage.fill();
        let taken = self.lowest <= fill && fill <= self.highest;
        if self.samples < cells && taken {
            self.storage = match self.storage {
                Storage::I8 | Storage::U8 => Storage::I16,
                Storage::I16 | Storage::U16 => Storage::I32,
                other => other,
            };
        }
    }
}

fn ends<T: Copy + Ord + Into<f64>>(codes: &[T]) -> (f64, f64) {
    match (codes.iter().min(), codes.iter().max()) {
        (Some(&lowest), Some(&highest)) => (lowest.into(), highest.into()),
        _ => (f64::INFINITY, f64::NEG_INFINITY),
    }
}

impl Survey {
    /// Go through the journal in run folder `folder`, as far as it reaches now.
    pub fn of(folder: &Path) -> Result<Self, JournalError> {
        let mut survey = Self::default();
        let mut records = journal::records(folder)?;
        for record in &mut records {
            match record {
                Ok(record) => survey.see(&record.entry, record.trace.as_ref()),
                Err(error) if error.can_go_on() => survey.damage.push(error.to_string()),
                Err(error) => return Err(error),
            }
        }
        survey.end = records.end();
        survey
            .damage
            .extend(records.tail().map(|tail| tail.to_string()));
        let cells = survey.points * survey.directions.len() * survey.repeats * survey.samples;
        for channel in &mut survey.channels {
            channel.settle(cells);
        }
        Ok(survey)
    }

    /// Whether there are samples to lay out.
    pub fn has_traces(&self) -> bool {
        self.points > 0 && self.samples > 0 && !self.channels.is_empty()
    }

    fn see(&mut self, entry: &Entry, trace: Option<&Trace>) {
        self.entries += 1;
        self.longest_words = self.longest_words.max(words(&entry.kind).len());
        self.longest_kind = self.longest_kind.max(super::words::kind(&entry.kind).len());
        match &entry.kind {
            EntryKind::Opened(header) => self.header = (**header).clone(),
            EntryKind::Turned { state, reason } | EntryKind::Closed { state, reason } => {
                self.state = Some((*state, reason.clone()));
            }
            EntryKind::Identified {
                instrument,
                identity,
                serial,
            } => self
                .identities
                .push([instrument.clone(), identity.clone(), serial.clone()]),
            EntryKind::Granted {
                instrument,
                setting,
                asked,
                granted,
                unit,
            } => self.settings.push((
                instrument.clone(),
                setting.clone(),
                unit.clone(),
                *asked,
                *granted,
            )),
            EntryKind::Answered(answer) => self.answer = Some((**answer).clone()),
            EntryKind::Point(point) => self.see_point(point, trace),
            _ => {}
        }
    }

    fn see_point(&mut self, point: &PointRecord, trace: Option<&Trace>) {
        self.points += 1;
        self.steps = self.steps.max(point.grid().map_or(0, <[u64]>::len));
        if self.zero.is_none() && point.sweep_centre != 0.0 {
            self.zero = Some(point.sweep_centre);
        }
        for coordinate in &point.coordinates {
            let name = coordinate.quantity.as_str();
            if !self.quantities.iter().any(|known| known.name == name) {
                self.quantities.push(Quantity {
                    name: name.to_owned(),
                    switch: matches!(coordinate.setpoint, Setting::Switch(_)),
                });
            }
        }
        for reading in &point.guards {
            let known = (reading.guard, reading.what.clone(), reading.stage);
            if !self.guards.contains(&known) {
                self.guards.push(known);
            }
        }
        for (name, _) in fit_values(point) {
            if !self.fit.contains(&name) {
                self.fit.push(name);
            }
        }
        for acquisition in trace.into_iter().flatten() {
            self.see_acquisition(acquisition);
        }
    }

    fn see_acquisition(&mut self, acquisition: &Acquisition) {
        self.acquisitions += 1;
        self.directions.insert(acquisition.direction);
        self.repeats = self.repeats.max(acquisition.repeat as usize + 1);
        for data in &acquisition.channels {
            self.samples = self.samples.max(data.codes.len());
            let known = self
                .channels
                .iter()
                .position(|channel| channel.name == data.name);
            let index = known.unwrap_or_else(|| {
                self.channels.push(Channel::new(data));
                self.channels.len() - 1
            });
            self.channels[index].see(data);
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_narrowest_format_that_holds_both() {
        use Storage::{F32, F64, I8, I16, I32, U8, U16};
        let all = [I8, U8, I16, U16, I32, F32, F64];
        let range = |storage| match storage {
            I8 => (-128.0, 127.0),
            U8 => (0.0, 255.0),
            I16 => (-32768.0, 32767.0),
            U16 => (0.0, 65535.0),
            I32 => (-2147483648.0, 2147483647.0),
            F32 => (-16777216.0, 16777216.0),
            F64 => (-9e15, 9e15),
        };
        for a in all {
            for b in all {
                let both = a.with(b);
                assert_eq!(both, b.with(a), "{a:?} {b:?}");
                for one in [a, b] {
                    assert!(range(both).0 <= range(one).0 && range(both).1 >= range(one).1);
                    assert!(both >= F32 || one < F32, "{a:?} {b:?} lose their fractions");
                }
            }
        }
        assert_eq!(I8.with(U8), I16);
        assert_eq!(U8.with(U16), U16);
        assert_eq!(I32.with(F32), F64);
    }

    #[test]
    fn a_fill_value_is_never_a_code() {
        let data = |codes| ChannelData {
            name: "s".into(),
            codes,
            scale: 1.0,
            offset: 0.0,
            unit: "V".into(),
            clipped: 0,
        };
        for (codes, complete, incomplete) in [
            (Codes::I8(vec![-128, 0]), Storage::I8, Storage::I16),
            (Codes::I8(vec![-127, 0]), Storage::I8, Storage::I8),
            (Codes::U8(vec![255, 0]), Storage::U8, Storage::I16),
            (Codes::I16(vec![i16::MIN, 0]), Storage::I16, Storage::I32),
            (Codes::I16(vec![-5, 32767]), Storage::I16, Storage::I16),
            (Codes::U16(vec![65535, 0]), Storage::U16, Storage::I32),
            (Codes::U16(vec![0, 7]), Storage::U16, Storage::U16),
            (Codes::F32(vec![0.0, 7.0]), Storage::F32, Storage::F32),
        ] {
            for (cells, expected) in [(2, complete), (3, incomplete)] {
                let data = data(codes.clone());
                let mut channel = Channel::new(&data);
                channel.see(&data);
                channel.settle(cells);
                assert_eq!(channel.storage, expected, "{codes:?} in {cells} cells");
            }
        }
    }
}
