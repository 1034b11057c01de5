//! The bipolar current supply of the coil. It does not ramp by itself: whoever drives it has to.

use crate::instrument::{Call, Form, Instrument, InstrumentFault, Limits, Moment, Row, round_to};
use crate::scpi::ErrorCode;
use crate::scpi::number::Unit;

const RANGES: [f64; 4] = [0.01, 0.02, 0.05, 0.1];
const RANGE: Limits = Limits::new(Unit::Ampere, 0.0, 0.1, 0.1);
const COMPLIANCE: Limits = Limits::new(Unit::Volt, 0.1, 20.0, 10.0);
/// Setpoints are whole multiples of the range over this.
const STEPS_PER_RANGE: f64 = 1e5;

/// Bipolar current supply.
#[derive(Debug)]
pub struct Supply {
    setpoint: f64,
    range: f64,
    compliance: f64,
    output: bool,
    readback_offset: f64,
}

impl Supply {
    /// A supply as after `*RST`.
    pub fn new() -> Supply {
        Supply {
            setpoint: 0.0,
            range: RANGE.default,
            compliance: COMPLIANCE.default,
            output: false,
            readback_offset: 0.0,
        }
    }

    const ROWS: &[Row<Supply>] = &[
        Row::new(
            "[SOURce]:CURRent:[LEVel]:[IMMediate]:[AMPLitude]",
            Form::Both,
            Supply::current,
        ),
        Row::new("[SOURce]:CURRent:RANGe", Form::Both, Supply::range),
        Row::new(
            "[SOURce]:VOLTage:[PROTection]:[LEVel]",
            Form::Both,
            Supply::compliance,
        ),
        Row::new("OUTPut:[STATe]", Form::Both, Supply::output),
        Row::new(
            "MEASure:[SCALar]:CURRent:[DC]",
            Form::Query,
            Supply::measure_current,
        ),
        Row::new(
            "MEASure:[SCALar]:VOLTage:[DC]",
            Form::Query,
            Supply::measure_voltage,
        ),
    ];

    fn current(&mut self, call: &mut Call<'_, '_>) -> Result<(), ErrorCode> {
        let limits = Limits::new(Unit::Ampere, -self.range, self.range, 0.0);
        let Some(value) = call.real(&limits, self.setpoint)? else {
            return Ok(());
        };
        self.setpoint = round_to(value, STEPS_PER_RANGE / self.range);
        let moment = &mut *call.moment;
        moment.history.note(
            moment.now,
            "setpoint",
            self.setpoint,
            (-RANGE.highest, RANGE.highest),
            0.0,
        );
        self.drive(moment);
        Ok(())
    }

    fn range(&mut self, call: &mut Call<'_, '_>) -> Result<(), ErrorCode> {
        let Some(value) = call.real(&RANGE, self.range)? else {
            return Ok(());
        };
        let granted = RANGES
            .into_iter()
            .find(|range| *range >= value)
            .ok_or(ErrorCode::DATA_OUT_OF_RANGE)?;
        if self.setpoint.abs() > granted {
            return Err(ErrorCode::SETTINGS_CONFLICT);
        }
        self.range = granted;
        Ok(())
    }

    fn compliance(&mut self, call: &mut Call<'_, '_>) -> Result<(), ErrorCode> {
        let Some(value) = call.real(&COMPLIANCE, self.compliance)? else {
            return Ok(());
        };
        self.compliance = round_to(value, 100.0);
        self.drive(call.moment);
        Ok(())
    }

    fn output(&mut self, call: &mut Call<'_, '_>) -> Result<(), ErrorCode> {
        let Some(on) = call.boolean(self.output)? else {
            return Ok(());
        };
        self.switch(call.moment, on);
        Ok(())
    }

    fn measure_current(&mut self, call: &mut Call<'_, '_>) -> Result<(), ErrorCode> {
        call.end()?;
        let measured =
            call.moment.world.measured_coil_current(call.moment.now) + self.readback_offset;
        call.out.real(round_to(measured, 1e6));
        Ok(())
    }

    fn measure_voltage(&mut self, call: &mut Call<'_, '_>) -> Result<(), ErrorCode> {
        call.end()?;
        let measured = call.moment.world.coil_voltage(call.moment.now);
        call.out.real(round_to(measured, 1e4));
        Ok(())
    }

    fn switch(&mut self, moment: &mut Moment<'_>, on: bool) {
        self.output = on;
        moment.history.note(
            moment.now,
            "output",
            f64::from(u8::from(on)),
            (0.0, 1.0),
            0.0,
        );
        moment.world.set_coil_output(moment.now, on);
        self.drive(moment);
    }

    /// Hands the setpoint on, as far as the compliance lets it through the coil's resistance.
    fn drive(&self, moment: &mut Moment<'_>) {
        let most = self.most(moment);
        moment
            .world
            .set_coil_current(moment.now, self.setpoint.clamp(-most, most));
        let current = if self.output { self.setpoint } else { 0.0 };
        moment.history.note(
            moment.now,
            "current",
            current,
            (-RANGE.highest, RANGE.highest),
            0.0,
        );
    }

    fn most(&self, moment: &Moment<'_>) -> f64 {
        let most = self.compliance / moment.world.truth().coil.resistance;
        if most.is_finite() {
            most.abs()
        } else {
            f64::MAX
        }
    }
}

impl Default for Supply {
    fn default() -> Supply {
        Supply::new()
    }
}

impl Instrument for Supply {
    fn identity(&self) -> String {
        "Umbra,BCS-1,2001,2.0".to_owned()
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
        *self = Supply {
            readback_offset: self.readback_offset,
            ..Supply::new()
        };
        self.switch(moment, false);
    }

    fn conditions(&mut self, moment: &mut Moment<'_>) -> (u16, u16) {
        let limited = self.output && self.setpoint.abs() > self.most(moment);
        (0, u16::from(limited))
    }

    fn set_fault(&mut self, fault: &InstrumentFault) {
        match fault {
            InstrumentFault::ReadbackOffset(amperes) => self.readback_offset = *amperes,
            InstrumentFault::Clear => self.readback_offset = 0.0,
            InstrumentFault::MissTriggers(_) => {}
        }
    }
}
