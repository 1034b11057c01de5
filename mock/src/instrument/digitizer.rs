//! The digitizer: four channels, one record per trigger, a bounded memory for it. What goes over the wire is made in
//! `transfer`, what a channel does to its volts in `input`, what may be set in `settings`.

mod input;
mod settings;
mod transfer;

use crate::instrument::{Call, Form, Instrument, InstrumentFault, Moment, Pending, Row};
use crate::scpi::ErrorCode;
use crate::world::Fault as WorldFault;

use input::Input;
use settings::{DELAY, INTERVAL, POINTS};
use transfer::Transport;

/// Channels.
pub const CHANNELS: usize = 4;

/// What the digitizer is built with.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct DigitizerOptions {
    /// From the edge at the trigger input to the first sample, s, on top of `TRIG:DEL`.
    pub trigger_delay: f64,
    /// Probability that an edge is missed.
    pub missed_trigger: f64,
}

impl Default for DigitizerOptions {
    fn default() -> DigitizerOptions {
        DigitizerOptions {
            trigger_delay: 12e-6,
            missed_trigger: 0.0,
        }
    }
}

#[derive(Clone, Copy, Debug, PartialEq)]
enum TriggerSource {
    External,
    Immediate,
    Bus,
}

#[derive(Clone, Copy, Debug, PartialEq)]
enum Phase {
    Idle,
    Waiting,
    Measuring { end: f64 },
}

/// One acquisition: when and with what it was taken. The samples are computed when they are first asked for; the
/// world answers for the past.
#[derive(Clone, Debug)]
struct Capture {
    /// Since the bench's start, from 1; seeds the noise.
    acquisition: u64,
    /// Since power on, from 1; what the instrument tells.
    count: u64,
    first_sample: f64,
    interval: f64,
    points: usize,
    inputs: [Input; CHANNELS],
    codes: [Option<Vec<i16>>; CHANNELS],
    delay: f64,
}

/// Digitizer.
#[derive(Debug)]
pub struct Digitizer {
    options: DigitizerOptions,
    inputs: [Input; CHANNELS],
    points: f64,
    interval: f64,
    delay: f64,
    source: TriggerSource,
    phase: Phase,
    taking: Option<Capture>,
    done: Option<Capture>,
    transport: Transport,
    acquisitions: u64,
    count: u64,
    edges: u64,
    to_miss: u32,
}

impl Digitizer {
    /// A digitizer as after power on.
    pub fn new(options: DigitizerOptions) -> Digitizer {
        Digitizer {
            options,
            inputs: [Input::default(); CHANNELS],
            points: POINTS.default,
            interval: INTERVAL.default,
            delay: DELAY.default,
            source: TriggerSource::Immediate,
            phase: Phase::Idle,
            taking: None,
            done: None,
            transport: Transport::default(),
            acquisitions: 0,
            count: 0,
            edges: 0,
            to_miss: 0,
        }
    }

    const ROWS: &[Row<Digitizer>] = &[
        Row::new(
            "[SENSe#]:VOLTage:[DC]:RANGe:[UPPer]",
            Form::Both,
            Digitizer::upper,
        ),
        Row::new(
            "[SENSe#]:VOLTage:[DC]:RANGe:LOWer",
            Form::Query,
            Digitizer::lower,
        ),
        Row::new(
            "[SENSe#]:VOLTage:[DC]:RANGe:PTPeak",
            Form::Both,
            Digitizer::peak_to_peak,
        ),
        Row::new(
            "[SENSe#]:VOLTage:[DC]:RANGe:OFFSet",
            Form::Both,
            Digitizer::offset,
        ),
        Row::new("INPut#:COUPling", Form::Both, Digitizer::coupling),
        Row::new(
            "INPut#:FILTer:[LPASs]:[STATe]",
            Form::Both,
            Digitizer::filter,
        ),
        Row::new(
            "INPut#:FILTer:[LPASs]:FREQuency",
            Form::Both,
            Digitizer::corner,
        ),
        Row::new("[SENSe#]:SWEep:POINts", Form::Both, Digitizer::points),
        Row::new("[SENSe#]:SWEep:TINTerval", Form::Both, Digitizer::interval),
        Row::new("[SENSe#]:SWEep:TIME", Form::Both, Digitizer::time),
        Row::new(
            "TRIGger:[SEQuence]:SOURce",
            Form::Both,
            Digitizer::trigger_source,
        ),
        Row::new(
            "TRIGger:[SEQuence]:DELay",
            Form::Both,
            Digitizer::trigger_delay,
        ),
        Row::new("TRIGger:[SEQuence]:[IMMediate]", Form::Set, |this, call| {
            call.end()?;
            this.trigger(call.moment)
        }),
        Row::new("INITiate:[IMMediate]", Form::Set, Digitizer::initiate),
        Row::new("ABORt", Form::Set, |this, call| {
            call.end()?;
            this.abort();
            Ok(())
        }),
        Row::new("FORMat:[DATA]", Form::Both, |this, call| {
            this.transport.format(call)
        }),
        Row::new("FORMat:BORDer", Form::Both, |this, call| {
            this.transport.byte_order(call)
        }),
        Row::new("FORMat:BLOCk", Form::Both, |this, call| {
            this.transport.block_kind(call)
        }),
        Row::new("TRACe:[DATA]", Form::Query, Digitizer::fetch),
        Row::new("FETCh#", Form::Query, Digitizer::fetch),
        Row::new("TRACe:PREamble", Form::Query, Digitizer::preamble),
        Row::new("TRACe:POINts", Form::Query, Digitizer::record_points),
        Row::new("TRACe:COUNt", Form::Query, |this, call| {
            call.end()?;
            call.out.integer(this.count as i64);
            Ok(())
        }),
        Row::new("TRACe:CATalog", Form::Query, |_, call| {
            call.end()?;
            (1..=CHANNELS).for_each(|channel| call.out.string(&format!("CH{channel}")));
            Ok(())
        }),
    ];

    fn initiate(&mut self, call: &mut Call<'_, '_>) -> Result<(), ErrorCode> {
        call.end()?;
        if self.phase != Phase::Idle {
            return Err(ErrorCode::INIT_IGNORED);
        }
        self.done = None;
        self.phase = Phase::Waiting;
        if self.source == TriggerSource::Immediate {
            self.trigger(call.moment)
        } else {
            Ok(())
        }
    }

    fn abort(&mut self) {
        self.phase = Phase::Idle;
        self.taking = None;
    }

    fn trigger(&mut self, moment: &mut Moment<'_>) -> Result<(), ErrorCode> {
        if self.phase != Phase::Waiting {
            return Err(ErrorCode::TRIGGER_IGNORED);
        }
        let first_sample = moment.now + self.options.trigger_delay + self.delay;
        let end = first_sample + self.interval * self.points;
        self.acquisitions += 1;
        moment.history.triggers += 1;
        self.phase = Phase::Measuring { end };
        self.taking = Some(Capture {
            acquisition: self.acquisitions,
            count: 0,
            first_sample,
            interval: self.interval,
            points: self.points as usize,
            inputs: self.inputs,
            codes: [const { None }; CHANNELS],
            delay: self.delay,
        });
        Ok(())
    }

    /// Whether the trigger circuit misses this edge: by a fault, or by its own probability.
    fn misses(&mut self, moment: &Moment<'_>) -> bool {
        self.edges += 1;
        if self.to_miss > 0 {
            self.to_miss -= 1;
            return true;
        }
        let drawn = crate::chance::uniform(moment.world.truth().seed, "trigger", self.edges);
        moment.world.fault(moment.now, WorldFault::MissedTrigger)
            || drawn < self.options.missed_trigger
    }

    /// Channel by data (`CH1`, `(@1)`) or, without, by the header's suffix.
    fn asked_channel(&self, call: &mut Call<'_, '_>) -> Result<usize, ErrorCode> {
        let number = call.channel()?.unwrap_or(call.suffix());
        let known = (1..=CHANNELS as u32).contains(&number);
        if known {
            Ok(number as usize - 1)
        } else {
            Err(ErrorCode::ILLEGAL_PARAMETER)
        }
    }

    fn fetch(&mut self, call: &mut Call<'_, '_>) -> Result<(), ErrorCode> {
        let channel = self.asked_channel(call)?;
        let capture = self.done.as_mut().ok_or(ErrorCode::DATA_STALE)?;
        let input = capture.inputs[channel];
        let codes = capture.codes(channel, call.moment.world);
        let sent = self.transport.send(codes, &input, call.out);
        call.moment.history.transfer(crate::history::Transfer {
            channel: channel as u32 + 1,
            acquisition: capture.acquisition,
            bytes: sent.bytes,
            crc32c: sent.crc32c,
        });
        Ok(())
    }

    fn preamble(&mut self, call: &mut Call<'_, '_>) -> Result<(), ErrorCode> {
        let channel = self.asked_channel(call)?;
        let capture = self.done.as_ref().ok_or(ErrorCode::DATA_STALE)?;
        let scaling = self.transport.scaling(&capture.inputs[channel]);
        call.out.integer(capture.points as i64);
        call.out.real(capture.interval);
        call.out.real(scaling.scale);
        call.out.real(scaling.offset);
        call.out.real(capture.delay);
        call.out.integer(capture.count as i64);
        call.out.real(scaling.lowest);
        call.out.real(scaling.highest);
        Ok(())
    }

    fn record_points(&mut self, call: &mut Call<'_, '_>) -> Result<(), ErrorCode> {
        self.asked_channel(call)?;
        let capture = self.done.as_ref().ok_or(ErrorCode::DATA_STALE)?;
        call.out.integer(capture.points as i64);
        Ok(())
    }
}

impl Capture {
    fn codes(&mut self, channel: usize, world: &mut crate::world::World) -> &[i16] {
        let (acquisition, start, interval, points) = (
            self.acquisition,
            self.first_sample,
            self.interval,
            self.points,
        );
        let input = self.inputs[channel];
        self.codes[channel].get_or_insert_with(|| {
            let mut volts = vec![0.0; points];
            world.record(channel as u8 + 1, acquisition, start, interval, &mut volts);
            input.convert(&mut volts, interval)
        })
    }
}

impl Instrument for Digitizer {
    fn identity(&self) -> String {
        "Umbra,DIG-4,3001,3.1".to_owned()
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

    fn reset(&mut self, _moment: &mut Moment<'_>) {
        let fresh = Digitizer::new(self.options);
        let Digitizer {
            acquisitions,
            count,
            edges,
            to_miss,
            ..
        } = *self;
        *self = Digitizer {
            acquisitions,
            count,
            edges,
            to_miss,
            ..fresh
        };
    }

    fn power_on(&mut self) {
        self.count = 0;
    }

    fn advance(&mut self, moment: &mut Moment<'_>) {
        if let Phase::Measuring { end } = self.phase
            && moment.now >= end
        {
            self.phase = Phase::Idle;
            self.count += 1;
            self.done = self.taking.take().map(|capture| Capture {
                count: self.count,
                ..capture
            });
        }
    }

    fn pending(&self) -> Pending {
        match self.phase {
            Phase::Idle => Pending::Idle,
            Phase::Waiting => Pending::Open,
            Phase::Measuring { end } => Pending::Until(end),
        }
    }

    fn conditions(&mut self, _moment: &mut Moment<'_>) -> (u16, u16) {
        match self.phase {
            Phase::Idle => (0, 0),
            Phase::Waiting => (1 << 5, 0),
            Phase::Measuring { .. } => (1 << 4, 0),
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
        if self.source != TriggerSource::External || self.phase != Phase::Waiting {
            return;
        }
        if self.misses(moment) {
            moment.history.missed_triggers += 1;
        } else {
            // Waiting is all that a trigger needs, so this one is never ignored.
            let _ = self.trigger(moment);
        }
    }

    fn set_fault(&mut self, fault: &InstrumentFault) {
        match fault {
            InstrumentFault::MissTriggers(count) => self.to_miss = *count,
            InstrumentFault::Clear => self.to_miss = 0,
            InstrumentFault::ReadbackOffset(_) => {}
        }
    }
}
