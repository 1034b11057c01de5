//! One instrument behind the SCPI engine: IEEE 488.2 common commands, the SYSTem and STATus trees, and the order in
//! which the units of a message are carried out. Synchronous: a message that has to wait says for what.

use crate::history::InstrumentHistory;
use crate::instrument::{Call, Effect, Form, Instrument, Limits, Moment, Pending};
use crate::scpi::ErrorCode;
use crate::scpi::number::Unit as Dimension;
use crate::scpi::parse::{Header, Message, Unit};
use crate::scpi::pattern::{Fit, Pattern};
use crate::scpi::response::{LONGEST_RESPONSE, Response};
use crate::scpi::status::{Register, Status};
use crate::world::World;

const BYTE: Limits = Limits::new(Dimension::None, 0.0, 255.0, 0.0);
const WORD: Limits = Limits::new(Dimension::None, 0.0, 65_535.0, 0.0);

#[derive(Clone, Copy, Debug, PartialEq, Eq)]
enum Shared {
    NextError,
    ErrorCount,
    Version,
    Preset,
    Event(Tree),
    Condition(Tree),
    Enable(Tree),
    Positive(Tree),
    Negative(Tree),
}

#[derive(Clone, Copy, Debug, PartialEq, Eq)]
enum Tree {
    Operation,
    Questionable,
}

const SHARED: &[(&str, Form, Shared)] = &[
    ("SYSTem:ERRor:[NEXT]", Form::Query, Shared::NextError),
    ("SYSTem:ERRor:COUNt", Form::Query, Shared::ErrorCount),
    ("SYSTem:VERSion", Form::Query, Shared::Version),
    ("STATus:PRESet", Form::Set, Shared::Preset),
    (
        "STATus:OPERation:[EVENt]",
        Form::Query,
        Shared::Event(Tree::Operation),
    ),
    (
        "STATus:OPERation:CONDition",
        Form::Query,
        Shared::Condition(Tree::Operation),
    ),
    (
        "STATus:OPERation:ENABle",
        Form::Both,
        Shared::Enable(Tree::Operation),
    ),
    (
        "STATus:OPERation:PTRansition",
        Form::Both,
        Shared::Positive(Tree::Operation),
    ),
    (
        "STATus:OPERation:NTRansition",
        Form::Both,
        Shared::Negative(Tree::Operation),
    ),
    (
        "STATus:QUEStionable:[EVENt]",
        Form::Query,
        Shared::Event(Tree::Questionable),
    ),
    (
        "STATus:QUEStionable:CONDition",
        Form::Query,
        Shared::Condition(Tree::Questionable),
    ),
    (
        "STATus:QUEStionable:ENABle",
        Form::Both,
        Shared::Enable(Tree::Questionable),
    ),
    (
        "STATus:QUEStionable:PTRansition",
        Form::Both,
        Shared::Positive(Tree::Questionable),
    ),
    (
        "STATus:QUEStionable:NTRansition",
        Form::Both,
        Shared::Negative(Tree::Questionable),
    ),
];

/// One program message being carried out.
#[derive(Debug)]
pub(crate) struct Exchange {
    message: Message,
    waiting: Option<Unit>,
    response: Response,
    /// Whether a query was among the units so far, the waiting one included.
    pub asked: bool,
    /// Whether a unit was carried out; reset by who looks at it.
    pub moved: bool,
    epoch: u64,
}

/// How far an exchange came.
#[derive(Debug, PartialEq)]
pub(crate) enum Progress {
    /// To its end; the bytes to send, if it asked for any.
    Done(Option<Vec<u8>>),
    /// It waits for the end of an overlapped operation.
    Blocked(Pending),
}

/// One instrument.
pub(crate) struct Device {
    pub instrument: Box<dyn Instrument>,
    pub status: Status,
    pub history: InstrumentHistory,
    pub wrong_identity: bool,
    shared: Vec<(Pattern, Form, Shared)>,
    own: Vec<(Pattern, Form)>,
    epoch: u64,
}

impl Device {
    pub fn new(instrument: Box<dyn Instrument>) -> Device {
        let own = instrument
            .commands()
            .into_iter()
            .map(|(pattern, form)| (Pattern::new(pattern), form))
            .collect();
        let shared = SHARED
            .iter()
            .map(|(pattern, form, command)| (Pattern::new(pattern), *form, *command))
            .collect();
        Device {
            instrument,
            status: Status::power_on(),
            history: InstrumentHistory::default(),
            wrong_identity: false,
            shared,
            own,
            epoch: 0,
        }
    }

    pub fn begin(&mut self, message: Vec<u8>) -> Exchange {
        self.history.messages += 1;
        Exchange {
            message: Message::new(message),
            waiting: None,
            response: Response::default(),
            asked: false,
            moved: false,
            epoch: self.epoch,
        }
    }

    /// Everything as after power on. Exchanges under way are lost.
    pub fn power_cycle(&mut self, now: f64, world: &mut World, effects: &mut Vec<Effect>) {
        self.epoch += 1;
        self.status = Status::power_on();
        let mut moment = Moment {
            now,
            world,
            effects,
            history: &mut self.history,
        };
        self.instrument.reset(&mut moment);
        self.instrument.power_on();
    }

    /// Brings instrument and registers up to the moment.
    pub fn advance(&mut self, now: f64, world: &mut World, effects: &mut Vec<Effect>) {
        self.instrument.advance(&mut Moment {
            now,
            world,
            effects,
            history: &mut self.history,
        });
        if self.instrument.pending() == Pending::Idle {
            self.status.completed();
        }
    }

    /// Brings the condition registers up to the moment.
    pub fn refresh(&mut self, now: f64, world: &mut World, effects: &mut Vec<Effect>) {
        let mut moment = Moment {
            now,
            world,
            effects,
            history: &mut self.history,
        };
        let (operation, questionable) = self.instrument.conditions(&mut moment);
        self.status.operation.update(operation);
        self.status.questionable.update(questionable);
    }

    pub fn fail(&mut self, now: f64, code: ErrorCode) {
        self.status.push_error(code);
        self.history.refuse(now, code);
    }

    /// Carries out units until the end of the message or until one has to wait.
    pub fn proceed(
        &mut self,
        exchange: &mut Exchange,
        now: f64,
        world: &mut World,
        effects: &mut Vec<Effect>,
    ) -> Progress {
        if exchange.epoch != self.epoch {
            return Progress::Done(None);
        }
        while let Some(next) = exchange
            .waiting
            .take()
            .map(Ok)
            .or_else(|| exchange.message.next_unit())
        {
            let unit = match next {
                Ok(unit) => unit,
                Err(code) => {
                    self.fail(now, code);
                    break;
                }
            };
            exchange.asked |= unit.query;
            if waits(&unit) && self.instrument.pending() != Pending::Idle {
                exchange.waiting = Some(unit);
                return Progress::Blocked(self.instrument.pending());
            }
            self.refresh(now, world, effects);
            exchange.moved = true;
            let mark = exchange.response.mark();
            let outcome = self.unit(&unit, &mut exchange.response, now, world, effects);
            if self.instrument.pending() == Pending::Idle {
                self.status.completed();
            }
            self.refresh(now, world, effects);
            if let Err(code) = outcome {
                exchange.response.truncate(mark);
                self.fail(now, code);
                if code.is_command_error() {
                    break;
                }
            }
            if exchange.response.length() > LONGEST_RESPONSE {
                self.fail(now, ErrorCode::QUERY_DEADLOCKED);
                return Progress::Done(None);
            }
        }
        let response = std::mem::take(&mut exchange.response);
        Progress::Done((!response.is_empty()).then(|| response.into_bytes()))
    }

    fn unit(
        &mut self,
        unit: &Unit,
        out: &mut Response,
        now: f64,
        world: &mut World,
        effects: &mut Vec<Effect>,
    ) -> Result<(), ErrorCode> {
        if unit.query {
            if out.is_indefinite() {
                return Err(ErrorCode::QUERY_AFTER_INDEFINITE);
            }
            out.next_unit();
        }
        match &unit.header {
            Header::Common(name) => self.common(name, unit, out, now, world, effects),
            Header::Path(nodes) => {
                let shared = find(
                    self.shared.iter().map(|row| (&row.0, row.1)),
                    nodes,
                    unit.query,
                )?;
                if let Some((number, suffix)) = shared {
                    let command = self.shared[number].2;
                    let mut moment = Moment {
                        now,
                        world,
                        effects,
                        history: &mut self.history,
                    };
                    let mut call = Call::new(unit.query, suffix, &unit.data, out, &mut moment);
                    return status_tree(&mut self.status, command, &mut call);
                }
                let own = find(
                    self.own.iter().map(|row| (&row.0, row.1)),
                    nodes,
                    unit.query,
                )?;
                let (number, suffix) = own.ok_or(ErrorCode::UNDEFINED_HEADER)?;
                let mut moment = Moment {
                    now,
                    world,
                    effects,
                    history: &mut self.history,
                };
                self.instrument.run(
                    number,
                    &mut Call::new(unit.query, suffix, &unit.data, out, &mut moment),
                )
            }
        }
    }

    fn common(
        &mut self,
        name: &str,
        unit: &Unit,
        out: &mut Response,
        now: f64,
        world: &mut World,
        effects: &mut Vec<Effect>,
    ) -> Result<(), ErrorCode> {
        let waiting_ahead = out.units() > 1;
        let mut moment = Moment {
            now,
            world,
            effects,
            history: &mut self.history,
        };
        let mut call = Call::new(unit.query, 1, &unit.data, out, &mut moment);
        match (name, unit.query) {
            ("ESE", _) => {
                if let Some(mask) = call.integer(&BYTE, f64::from(self.status.event_enable()))? {
                    self.status.set_event_enable(mask as u8);
                }
                return Ok(());
            }
            ("SRE", _) => {
                if let Some(mask) = call.integer(&BYTE, f64::from(self.status.service_enable()))? {
                    self.status.set_service_enable(mask as u8);
                }
                return Ok(());
            }
            _ => call.end()?,
        }
        match (name, unit.query) {
            ("IDN", true) if self.wrong_identity => out.arbitrary("Umbra,XXX-0,0,0"),
            ("IDN", true) => out.arbitrary(&self.instrument.identity()),
            ("ESR", true) => out.integer(i64::from(self.status.take_event())),
            ("STB", true) => out.integer(i64::from(self.status.byte(waiting_ahead))),
            ("OPC", true) => out.integer(1),
            ("TST", true) => out.integer(0),
            ("OPC", false) => self.status.want_completion(),
            ("WAI", false) => {}
            ("CLS", false) => self.status.clear(),
            ("RST", false) => {
                self.status.forget_completion();
                self.instrument.reset(&mut moment);
            }
            ("TRG", false) => {
                return self
                    .instrument
                    .bus_trigger(&mut moment)
                    .unwrap_or(Err(ErrorCode::UNDEFINED_HEADER));
            }
            _ => return Err(ErrorCode::UNDEFINED_HEADER),
        }
        Ok(())
    }
}

/// Whether a unit waits for overlapped operations to end.
fn waits(unit: &Unit) -> bool {
    match &unit.header {
        Header::Common(name) => (name == "WAI" && !unit.query) || (name == "OPC" && unit.query),
        Header::Path(_) => false,
    }
}

/// The number of the command that a header means, and the header's suffix.
fn find<'a>(
    table: impl Iterator<Item = (&'a Pattern, Form)>,
    header: &[crate::scpi::parse::Node],
    query: bool,
) -> Result<Option<(usize, u32)>, ErrorCode> {
    for (number, (pattern, form)) in table.enumerate() {
        let known = form == Form::Both || (form == Form::Query) == query;
        match pattern.fit(header) {
            Fit::Yes(suffix) if known => return Ok(Some((number, suffix))),
            Fit::Suffix if known => return Err(ErrorCode::SUFFIX_OUT_OF_RANGE),
            _ => {}
        }
    }
    Ok(None)
}

fn status_tree(
    status: &mut Status,
    command: Shared,
    call: &mut Call<'_, '_>,
) -> Result<(), ErrorCode> {
    match command {
        Shared::NextError => {
            call.end()?;
            let error = status.pop_error();
            call.out
                .integer(error.map_or(0, |code| i64::from(code.number())));
            call.out.string(error.map_or("No error", ErrorCode::text));
        }
        Shared::ErrorCount => {
            call.end()?;
            call.out.integer(status.error_count() as i64);
        }
        Shared::Version => {
            call.end()?;
            call.out.word("1999.0");
        }
        Shared::Preset => {
            call.end()?;
            status.operation.preset();
            status.questionable.preset();
        }
        Shared::Event(tree) => {
            call.end()?;
            call.out
                .integer(i64::from(register(status, tree).take_event()));
        }
        Shared::Condition(tree) => {
            call.end()?;
            call.out
                .integer(i64::from(register(status, tree).condition()));
        }
        Shared::Enable(tree) => mask(call, &mut register(status, tree).enable)?,
        Shared::Positive(tree) => mask(call, &mut register(status, tree).positive)?,
        Shared::Negative(tree) => mask(call, &mut register(status, tree).negative)?,
    }
    Ok(())
}

fn register(status: &mut Status, tree: Tree) -> &mut Register {
    match tree {
        Tree::Operation => &mut status.operation,
        Tree::Questionable => &mut status.questionable,
    }
}

fn mask(call: &mut Call<'_, '_>, mask: &mut u16) -> Result<(), ErrorCode> {
    if let Some(value) = call.integer(&WORD, f64::from(*mask))? {
        *mask = value as u16 & 0x7FFF;
    }
    Ok(())
}
