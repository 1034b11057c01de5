//! The RF generator of one beam: frequency, level, output, and a triggered sweep whose start fires the sync output.

use crate::instrument::{Call, Effect, Form, Instrument, Limits, Moment, Pending, Row, round_to};
use crate::scpi::ErrorCode;
use crate::scpi::number::Unit;
use crate::world::{Beam, BeamState, Sweep};

const FREQUENCY: Limits = Limits::new(Unit::Hertz, 1e6, 250e6, 80e6);
const SPAN: Limits = Limits::new(Unit::Hertz, 0.0, 249e6, 300e3);
const POWER: Limits = Limits::new(Unit::Dbm, -60.0, 15.0, -60.0);
const TIME: Limits = Limits::new(Unit::Second, 1e-3, 1000.0, 40e-3);
const POINTS: Limits = Limits::new(Unit::None, 2.0, 65_536.0, 401.0);
/// Frequencies are whole millihertz.
const PER_HERTZ: f64 = 1e3;

#[derive(Clone, Copy, Debug, PartialEq)]
enum Phase {
    Idle,
    Waiting,
    Sweeping { end: f64 },
}

#[derive(Clone, Copy, Debug, PartialEq)]
enum TriggerSource {
    Bus,
    Immediate,
    External,
}

/// RF generator.
#[derive(Debug)]
pub struct Generator {
    beam: Beam,
    serial: u32,
    frequency: f64,
    sweeps: bool,
    start: f64,
    stop: f64,
    time: f64,
    points: f64,
    downwards: bool,
    stepped: bool,
    power: f64,
    output: bool,
    source: TriggerSource,
    phase: Phase,
    /// Where the output stands in sweep mode while no sweep runs.
    standing: f64,
}

impl Generator {
    /// A generator as after `*RST`.
    pub fn new(beam: Beam, serial: u32) -> Generator {
        Generator {
            beam,
            serial,
            frequency: FREQUENCY.default,
            sweeps: false,
            start: FREQUENCY.default - SPAN.default / 2.0,
            stop: FREQUENCY.default + SPAN.default / 2.0,
            time: TIME.default,
            points: POINTS.default,
            downwards: false,
            stepped: true,
            power: POWER.default,
            output: false,
            source: TriggerSource::Immediate,
            phase: Phase::Idle,
            standing: FREQUENCY.default,
        }
    }

    const ROWS: &[Row<Generator>] = &[
        Row::new(
            "[SOURce]:FREQuency:[CW|FIXed]",
            Form::Both,
            Generator::frequency,
        ),
        Row::new("[SOURce]:FREQuency:MODE", Form::Both, Generator::mode),
        Row::new("[SOURce]:FREQuency:STARt", Form::Both, |this, call| {
            this.ends(call, true)
        }),
        Row::new("[SOURce]:FREQuency:STOP", Form::Both, |this, call| {
            this.ends(call, false)
        }),
        Row::new("[SOURce]:FREQuency:CENTer", Form::Both, Generator::centre),
        Row::new("[SOURce]:FREQuency:SPAN", Form::Both, Generator::span),
        Row::new("[SOURce]:SWEep:TIME", Form::Both, Generator::time),
        Row::new("[SOURce]:SWEep:DWELl", Form::Both, Generator::dwell),
        Row::new("[SOURce]:SWEep:POINts", Form::Both, Generator::points),
        Row::new("[SOURce]:SWEep:DIRection", Form::Both, Generator::direction),
        Row::new("[SOURce]:SWEep:SPACing", Form::Both, |_, call| {
            call.choice(&["LINear"], 0).map(drop)
        }),
        Row::new(
            "[SOURce]:SWEep:GENeration",
            Form::Both,
            Generator::generation,
        ),
        Row::new(
            "[SOURce]:POWer:[LEVel]:[IMMediate]:[AMPLitude]",
            Form::Both,
            Generator::power,
        ),
        Row::new("OUTPut:[STATe]", Form::Both, Generator::output),
        Row::new(
            "TRIGger:[SEQuence]:SOURce",
            Form::Both,
            Generator::trigger_source,
        ),
        Row::new("TRIGger:[SEQuence]:[IMMediate]", Form::Set, |this, call| {
            call.end()?;
            this.trigger(call.moment)
        }),
        Row::new("INITiate:[IMMediate]", Form::Set, Generator::initiate),
        Row::new("ABORt", Form::Set, Generator::abort),
    ];

    fn frequency(&mut self, call: &mut Call<'_, '_>) -> Result<(), ErrorCode> {
        let Some(value) = call.real(&FREQUENCY, self.frequency)? else {
            return Ok(());
        };
        self.frequency = round_to(value, PER_HERTZ);
        let moment = &mut *call.moment;
        let limits = (FREQUENCY.lowest, FREQUENCY.highest);
        moment.history.note(
            moment.now,
            "frequency",
            self.frequency,
            limits,
            FREQUENCY.default,
        );
        if !self.sweeps {
            self.drive(moment);
        }
        Ok(())
    }

    fn mode(&mut self, call: &mut Call<'_, '_>) -> Result<(), ErrorCode> {
        let keywords = ["CW", "FIXed", "SWEep"];
        let Some(chosen) = call.choice(&keywords, if self.sweeps { 2 } else { 0 })? else {
            return Ok(());
        };
        self.sweeps = chosen == 2;
        self.stand_at_beginning(call.moment);
        Ok(())
    }

    fn ends(&mut self, call: &mut Call<'_, '_>, start: bool) -> Result<(), ErrorCode> {
        let place = if start {
            &mut self.start
        } else {
            &mut self.stop
        };
        if let Some(value) = call.real(&FREQUENCY, *place)? {
            *place = round_to(value, PER_HERTZ);
            self.note_window(call.moment);
        }
        Ok(())
    }

    fn centre(&mut self, call: &mut Call<'_, '_>) -> Result<(), ErrorCode> {
        let span = self.stop - self.start;
        match call.real(&FREQUENCY, (self.start + self.stop) / 2.0)? {
            Some(value) => self.set_window(call.moment, value, span),
            None => Ok(()),
        }
    }

    fn span(&mut self, call: &mut Call<'_, '_>) -> Result<(), ErrorCode> {
        let centre = (self.start + self.stop) / 2.0;
        match call.real(&SPAN, self.stop - self.start)? {
            Some(value) => self.set_window(call.moment, centre, value),
            None => Ok(()),
        }
    }

    fn set_window(
        &mut self,
        moment: &mut Moment<'_>,
        centre: f64,
        span: f64,
    ) -> Result<(), ErrorCode> {
        let start = FREQUENCY.check(round_to(centre - span / 2.0, PER_HERTZ))?;
        let stop = FREQUENCY.check(round_to(centre + span / 2.0, PER_HERTZ))?;
        (self.start, self.stop) = (start, stop);
        self.note_window(moment);
        Ok(())
    }

    fn note_window(&self, moment: &mut Moment<'_>) {
        let limits = (FREQUENCY.lowest, FREQUENCY.highest);
        moment
            .history
            .note(moment.now, "start", self.start, limits, self.start);
        moment
            .history
            .note(moment.now, "stop", self.stop, limits, self.stop);
    }

    fn time(&mut self, call: &mut Call<'_, '_>) -> Result<(), ErrorCode> {
        if let Some(value) = call.real(&TIME, self.time)? {
            self.time = round_to(value, 1e6);
        }
        Ok(())
    }

    fn dwell(&mut self, call: &mut Call<'_, '_>) -> Result<(), ErrorCode> {
        let limits = Limits::new(
            Unit::Second,
            TIME.lowest / self.points,
            TIME.highest / self.points,
            TIME.default / self.points,
        );
        if let Some(value) = call.real(&limits, self.time / self.points)? {
            self.time = TIME.check(round_to(value * self.points, 1e6))?;
        }
        Ok(())
    }

    fn points(&mut self, call: &mut Call<'_, '_>) -> Result<(), ErrorCode> {
        if let Some(value) = call.integer(&POINTS, self.points)? {
            self.points = value;
        }
        Ok(())
    }

    fn direction(&mut self, call: &mut Call<'_, '_>) -> Result<(), ErrorCode> {
        if let Some(chosen) = call.choice(&["UP", "DOWN"], usize::from(self.downwards))? {
            self.downwards = chosen == 1;
        }
        Ok(())
    }

    fn generation(&mut self, call: &mut Call<'_, '_>) -> Result<(), ErrorCode> {
        if let Some(chosen) = call.choice(&["STEPped", "ANALog"], usize::from(!self.stepped))? {
            self.stepped = chosen == 0;
        }
        Ok(())
    }

    fn power(&mut self, call: &mut Call<'_, '_>) -> Result<(), ErrorCode> {
        let Some(value) = call.real(&POWER, self.power)? else {
            return Ok(());
        };
        let changed = self.power != round_to(value, 100.0);
        self.power = round_to(value, 100.0);
        let moment = &mut *call.moment;
        moment.history.note(
            moment.now,
            "power",
            self.power,
            (POWER.lowest, POWER.highest),
            POWER.default,
        );
        if changed {
            self.end_sweep();
            self.drive(moment);
        }
        Ok(())
    }

    fn output(&mut self, call: &mut Call<'_, '_>) -> Result<(), ErrorCode> {
        let Some(on) = call.boolean(self.output)? else {
            return Ok(());
        };
        let changed = self.output != on;
        self.output = on;
        let moment = &mut *call.moment;
        moment.history.note(
            moment.now,
            "output",
            f64::from(u8::from(on)),
            (0.0, 1.0),
            0.0,
        );
        if changed {
            self.end_sweep();
            self.drive(moment);
        }
        Ok(())
    }

    fn trigger_source(&mut self, call: &mut Call<'_, '_>) -> Result<(), ErrorCode> {
        let sources = [
            TriggerSource::Bus,
            TriggerSource::Immediate,
            TriggerSource::External,
        ];
        let present = sources
            .iter()
            .position(|source| *source == self.source)
            .unwrap_or(0);
        if let Some(chosen) = call.choice(&["BUS", "IMMediate", "EXTernal"], present)? {
            self.source = sources[chosen];
        }
        Ok(())
    }

    fn initiate(&mut self, call: &mut Call<'_, '_>) -> Result<(), ErrorCode> {
        call.end()?;
        if self.phase != Phase::Idle {
            return Err(ErrorCode::INIT_IGNORED);
        }
        if !self.sweeps || self.start > self.stop {
            return Err(ErrorCode::SETTINGS_CONFLICT);
        }
        self.stand_at_beginning(call.moment);
        self.phase = Phase::Waiting;
        if self.source == TriggerSource::Immediate {
            self.trigger(call.moment)
        } else {
            Ok(())
        }
    }

    fn abort(&mut self, call: &mut Call<'_, '_>) -> Result<(), ErrorCode> {
        call.end()?;
        if self.phase != Phase::Idle {
            self.stand_at_beginning(call.moment);
        }
        Ok(())
    }

    fn trigger(&mut self, moment: &mut Moment<'_>) -> Result<(), ErrorCode> {
        if self.phase != Phase::Waiting {
            return Err(ErrorCode::TRIGGER_IGNORED);
        }
        let (start, stop) = if self.downwards {
            (self.stop, self.start)
        } else {
            (self.start, self.stop)
        };
        let steps = self.stepped.then_some(self.points as u32);
        moment.world.start_sweep(
            moment.now,
            self.beam,
            Sweep {
                start,
                stop,
                duration: self.time,
                steps,
            },
        );
        moment.history.triggers += 1;
        moment.effects.push(Effect::Sync(self.beam));
        self.phase = Phase::Sweeping {
            end: moment.now + self.time,
        };
        self.standing = stop;
        Ok(())
    }

    fn stand_at_beginning(&mut self, moment: &mut Moment<'_>) {
        self.end_sweep();
        self.standing = if self.downwards {
            self.stop
        } else {
            self.start
        };
        self.drive(moment);
    }

    fn end_sweep(&mut self) {
        self.phase = Phase::Idle;
    }

    fn drive(&self, moment: &mut Moment<'_>) {
        let frequency = if self.sweeps {
            self.standing
        } else {
            self.frequency
        };
        let state = BeamState {
            frequency,
            power: self.power,
            on: self.output,
        };
        moment.world.set_beam(moment.now, self.beam, state);
    }
}

impl Instrument for Generator {
    fn identity(&self) -> String {
        format!("Umbra,RFG-2,{},1.4", self.serial)
    }

    fn commands(&self) -> Vec<(&'static str, Form)> {
        Self::ROWS
            .iter()
            .map(|row| (row.pattern, row.form))
            .collect()
    }

    fn run(&mut self, number: usize, call: &mut Call<'_, '_>) -> Result<(), ErrorCode> {
        (Self::ROWS[number].run)(self, call)
    }

    fn reset(&mut self, moment: &mut Moment<'_>) {
        *self = Generator::new(self.beam, self.serial);
        moment
            .history
            .note(moment.now, "output", 0.0, (0.0, 1.0), 0.0);
        self.drive(moment);
    }

    fn advance(&mut self, moment: &mut Moment<'_>) {
        if let Phase::Sweeping { end } = self.phase
            && moment.now >= end
        {
            self.end_sweep();
        }
    }

    fn pending(&self) -> Pending {
        match self.phase {
            Phase::Idle => Pending::Idle,
            Phase::Waiting => Pending::Open,
            Phase::Sweeping { end } => Pending::Until(end),
        }
    }

    fn conditions(&mut self, _moment: &mut Moment<'_>) -> (u16, u16) {
        match self.phase {
            Phase::Idle => (0, 0),
            Phase::Waiting => (1 << 5, 0),
            Phase::Sweeping { .. } => (1 << 3, 0),
        }
    }

    fn bus_trigger(&mut self, moment: &mut Moment<'_>) -> Option<Result<(), ErrorCode>> {
        if self.source == TriggerSource::Bus {
            Some(self.trigger(moment))
        } else {
            Some(Err(ErrorCode::TRIGGER_IGNORED))
        }
    }

    fn external_trigger(&mut self, moment: &mut Moment<'_>) {
        if self.source == TriggerSource::External && self.phase == Phase::Waiting {
            // Waiting is all that a trigger needs, so this one is never ignored.
            let _ = self.trigger(moment);
        }
    }
}
