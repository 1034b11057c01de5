//! What every mock instrument shares: the trait behind the SCPI engine, its command rows, and one command's call.
//! Knows no bytes and no links; time is seconds since the bench's start, handed in.

pub mod digitizer;
pub mod generator;
pub mod monitor;
pub mod oven;
pub mod supply;

use crate::history::InstrumentHistory;
use crate::scpi::ErrorCode;
use crate::scpi::number::{self, Unit};
use crate::scpi::parse::Datum;
use crate::scpi::pattern::{choose, is_keyword};
use crate::scpi::response::Response;
use crate::world::{Beam, World};

/// What an instrument does to the wires of the bench.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Effect {
    /// The sync output of that beam's generator fired.
    Sync(Beam),
}

/// The moment at which something happens, and what it can touch.
pub struct Moment<'a> {
    /// Seconds since the bench's start.
    pub now: f64,
    /// The one world.
    pub world: &'a mut World,
    /// Wires to be carried on after the command.
    pub effects: &'a mut Vec<Effect>,
    /// What tests read.
    pub history: &'a mut InstrumentHistory,
}

/// Whether an overlapped operation is going on.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Pending {
    /// No.
    Idle,
    /// Until that time.
    Until(f64),
    /// Until something else happens, a trigger for instance.
    Open,
}

/// Which forms of a command there are.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Form {
    /// Set and query.
    Both,
    /// Set only.
    Set,
    /// Query only.
    Query,
}

/// One command of an instrument.
pub struct Row<I: 'static> {
    /// Pattern as in [`crate::scpi::pattern::Pattern`].
    pub pattern: &'static str,
    /// Forms that there are.
    pub form: Form,
    /// Carries it out.
    pub run: fn(&mut I, &mut Call<'_, '_>) -> Result<(), ErrorCode>,
}

impl<I> Row<I> {
    /// A row of a command table.
    pub const fn new(
        pattern: &'static str,
        form: Form,
        run: fn(&mut I, &mut Call<'_, '_>) -> Result<(), ErrorCode>,
    ) -> Row<I> {
        Row { pattern, form, run }
    }
}

/// An instrument behind the SCPI engine.
pub trait Instrument: Send {
    /// Maker, model, serial number, firmware.
    fn identity(&self) -> String;

    /// Patterns and forms of the commands, in the order of their numbers.
    fn commands(&self) -> Vec<(&'static str, Form)>;

    /// Carries out the command of that number.
    fn run(&mut self, number: usize, call: &mut Call<'_, '_>) -> Result<(), ErrorCode>;

    /// `*RST`, and what power on does.
    fn reset(&mut self, moment: &mut Moment<'_>);

    /// What power on does beyond `*RST`.
    fn power_on(&mut self) {}

    /// Brings the instrument up to the moment: what was due by then is over.
    fn advance(&mut self, _moment: &mut Moment<'_>) {}

    /// Overlapped operations, for `*OPC`, `*OPC?` and `*WAI`.
    fn pending(&self) -> Pending {
        Pending::Idle
    }

    /// Condition registers: operation, questionable.
    fn conditions(&mut self, _moment: &mut Moment<'_>) -> (u16, u16) {
        (0, 0)
    }

    /// `*TRG`; `None` where the instrument knows no trigger.
    fn bus_trigger(&mut self, _moment: &mut Moment<'_>) -> Option<Result<(), ErrorCode>> {
        None
    }

    /// An edge at the external trigger input.
    fn external_trigger(&mut self, _moment: &mut Moment<'_>) {}

    /// Faults that live within the instrument.
    fn set_fault(&mut self, _fault: &InstrumentFault) {}
}

/// Faults within an instrument.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum InstrumentFault {
    /// So many next triggers are not seen.
    MissTriggers(u32),
    /// Added to every measured value.
    ReadbackOffset(f64),
    /// All of them end.
    Clear,
}

/// The range of a setting: inclusive limits and default, in the unit's own scale.
#[derive(Clone, Copy, Debug)]
pub struct Limits {
    /// Decides the suffixes.
    pub unit: Unit,
    /// Inclusive.
    pub lowest: f64,
    /// Inclusive.
    pub highest: f64,
    /// Also after `*RST`.
    pub default: f64,
}

impl Limits {
    /// Inclusive limits.
    pub const fn new(unit: Unit, lowest: f64, highest: f64, default: f64) -> Limits {
        Limits {
            unit,
            lowest,
            highest,
            default,
        }
    }

    /// The value, or -222. Not a number is out of range.
    pub fn check(&self, value: f64) -> Result<f64, ErrorCode> {
        if value >= self.lowest && value <= self.highest {
            Ok(value)
        } else {
            Err(ErrorCode::DATA_OUT_OF_RANGE)
        }
    }
}

/// One command being carried out.
pub struct Call<'a, 'm> {
    query: bool,
    suffix: u32,
    data: std::slice::Iter<'a, Datum>,
    /// Where a query answers.
    pub out: &'a mut Response,
    /// When, and what can be touched.
    pub moment: &'a mut Moment<'m>,
}

impl<'a, 'm> Call<'a, 'm> {
    /// A command with its first numeric suffix (1 where there was none).
    pub fn new(
        query: bool,
        suffix: u32,
        data: &'a [Datum],
        out: &'a mut Response,
        moment: &'a mut Moment<'m>,
    ) -> Call<'a, 'm> {
        Call {
            query,
            suffix,
            data: data.iter(),
            out,
            moment,
        }
    }

    /// Whether this is the query form.
    pub fn is_query(&self) -> bool {
        self.query
    }

    /// First numeric suffix of the header.
    pub fn suffix(&self) -> u32 {
        self.suffix
    }

    /// The next datum, `None` at the end.
    pub fn datum(&mut self) -> Option<&'a Datum> {
        self.data.next()
    }

    /// -108 where data are left over.
    pub fn end(&mut self) -> Result<(), ErrorCode> {
        if self.data.next().is_some() {
            Err(ErrorCode::PARAMETER_NOT_ALLOWED)
        } else {
            Ok(())
        }
    }

    /// A numeric setting: answers a query with `present` (or MIN, MAX, DEF), else gives the new value within limits.
    pub fn real(&mut self, limits: &Limits, present: f64) -> Result<Option<f64>, ErrorCode> {
        if self.query {
            let value = match self.datum() {
                None => present,
                Some(datum) => special(datum, limits).ok_or(ErrorCode::ILLEGAL_PARAMETER)?,
            };
            self.end()?;
            self.out.real(shown(value, limits.unit));
            return Ok(None);
        }
        let value = self.number(limits)?;
        self.end()?;
        limits.check(value).map(Some)
    }

    /// A setting of whole numbers; fractions are rounded (IEEE 488.2, 7.7.2.4).
    pub fn integer(&mut self, limits: &Limits, present: f64) -> Result<Option<f64>, ErrorCode> {
        if self.query {
            let value = match self.datum() {
                None => present,
                Some(datum) => special(datum, limits).ok_or(ErrorCode::ILLEGAL_PARAMETER)?,
            };
            self.end()?;
            self.out.integer(value as i64);
            return Ok(None);
        }
        let value = self.number(limits)?;
        self.end()?;
        limits.check(value.round()).map(Some)
    }

    /// A boolean setting.
    pub fn boolean(&mut self, present: bool) -> Result<Option<bool>, ErrorCode> {
        if self.query {
            self.end()?;
            self.out.boolean(present);
            return Ok(None);
        }
        let value = match self.datum().ok_or(ErrorCode::MISSING_PARAMETER)? {
            Datum::Number(_, Some(_)) => return Err(ErrorCode::SUFFIX_NOT_ALLOWED),
            Datum::Number(value, None) => value.round() != 0.0,
            Datum::NonDecimal(value) => *value != 0,
            Datum::Word(word) if is_keyword(word, "ON") => true,
            Datum::Word(word) if is_keyword(word, "OFF") => false,
            Datum::Word(_) => return Err(ErrorCode::ILLEGAL_PARAMETER),
            _ => return Err(ErrorCode::DATA_TYPE_ERROR),
        };
        self.end()?;
        Ok(Some(value))
    }

    /// A setting by keyword: the place of the one chosen. A query answers the short form.
    pub fn choice(
        &mut self,
        keywords: &[&str],
        present: usize,
    ) -> Result<Option<usize>, ErrorCode> {
        if self.query {
            self.end()?;
            self.out.word(crate::scpi::pattern::short_form(
                keywords.get(present).unwrap_or(&""),
            ));
            return Ok(None);
        }
        let chosen = choose(self.word()?, keywords)?;
        self.end()?;
        Ok(Some(chosen))
    }

    /// Character data.
    pub fn word(&mut self) -> Result<&'a str, ErrorCode> {
        match self.datum() {
            Some(Datum::Word(word)) => Ok(word),
            Some(_) => Err(ErrorCode::DATA_TYPE_ERROR),
            None => Err(ErrorCode::MISSING_PARAMETER),
        }
    }

    /// A channel: `CH1`, `1` or `(@1)`; `None` where no datum is left.
    pub fn channel(&mut self) -> Result<Option<u32>, ErrorCode> {
        let number = match self.datum() {
            None => return Ok(None),
            Some(Datum::Number(value, None)) if value.fract() == 0.0 && *value >= 0.0 => {
                *value as u32
            }
            Some(Datum::Word(word)) => {
                let digits = word
                    .strip_prefix("CH")
                    .ok_or(ErrorCode::ILLEGAL_PARAMETER)?;
                digits.parse().map_err(|_| ErrorCode::ILLEGAL_PARAMETER)?
            }
            Some(Datum::Expression(list)) => {
                let digits = list
                    .trim()
                    .strip_prefix('@')
                    .ok_or(ErrorCode::INVALID_EXPRESSION)?;
                digits
                    .trim()
                    .parse()
                    .map_err(|_| ErrorCode::INVALID_EXPRESSION)?
            }
            Some(_) => return Err(ErrorCode::DATA_TYPE_ERROR),
        };
        self.end()?;
        Ok(Some(number))
    }

    /// A number with its suffix applied, not yet held against the limits.
    fn number(&mut self, limits: &Limits) -> Result<f64, ErrorCode> {
        match self.datum().ok_or(ErrorCode::MISSING_PARAMETER)? {
            Datum::Number(value, suffix) => {
                number::with_suffix(*value, suffix.as_deref(), limits.unit)
            }
            Datum::NonDecimal(value) => Ok(*value as f64),
            word @ Datum::Word(_) => special(word, limits).ok_or(ErrorCode::ILLEGAL_PARAMETER),
            _ => Err(ErrorCode::DATA_TYPE_ERROR),
        }
    }
}

/// MIN, MAX and DEF.
fn special(datum: &Datum, limits: &Limits) -> Option<f64> {
    let Datum::Word(word) = datum else {
        return None;
    };
    match choose(word, &["MINimum", "MAXimum", "DEFault"]).ok()? {
        0 => Some(limits.lowest),
        1 => Some(limits.highest),
        _ => Some(limits.default),
    }
}

/// A value as its unit shows it.
fn shown(value: f64, unit: Unit) -> f64 {
    if unit == Unit::Celsius {
        round_to(value - number::CELSIUS_ZERO, 1e6)
    } else {
        value
    }
}

/// Rounds to a resolution of `1 / per_unit`; the result is the double nearest to that decimal.
pub fn round_to(value: f64, per_unit: f64) -> f64 {
    (value * per_unit).round() / per_unit
}
