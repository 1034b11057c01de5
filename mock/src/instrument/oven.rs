//! The temperature controller of the cell's oven. The cut-out of a real oven is never software: see the README.

use crate::instrument::{Call, Form, Instrument, Limits, Moment, Row, round_to};
use crate::scpi::ErrorCode;
use crate::scpi::number::{CELSIUS_ZERO, Unit};

const LOWEST: f64 = CELSIUS_ZERO + 20.0;
const HIGHEST: f64 = CELSIUS_ZERO + 120.0;
const DEFAULT: f64 = CELSIUS_ZERO + 25.0;
/// Off the setpoint by more than this, K, the temperature is questionable.
const TOLERANCE: f64 = 1.0;

/// Temperature controller.
#[derive(Debug)]
pub struct Oven {
    setpoint: f64,
    output: bool,
    in_kelvin: bool,
}

impl Oven {
    /// A controller that already holds its cell at `kelvin`.
    pub fn holding(kelvin: f64) -> Oven {
        Oven {
            setpoint: kelvin,
            output: true,
            in_kelvin: false,
        }
    }

    const ROWS: &[Row<Oven>] = &[
        Row::new("[SOURce]:TEMPerature:[SPOint]", Form::Both, Oven::setpoint),
        Row::new("MEASure:[SCALar]:TEMPerature", Form::Query, Oven::measure),
        Row::new("OUTPut:[STATe]", Form::Both, Oven::output),
        Row::new("UNIT:TEMPerature", Form::Both, Oven::unit),
    ];

    fn limits(&self) -> Limits {
        Limits::new(
            if self.in_kelvin {
                Unit::Kelvin
            } else {
                Unit::Celsius
            },
            LOWEST,
            HIGHEST,
            DEFAULT,
        )
    }

    fn setpoint(&mut self, call: &mut Call<'_, '_>) -> Result<(), ErrorCode> {
        let Some(value) = call.real(&self.limits(), self.setpoint)? else {
            return Ok(());
        };
        self.setpoint = round_to(value, 100.0);
        self.drive(call.moment);
        Ok(())
    }

    fn measure(&mut self, call: &mut Call<'_, '_>) -> Result<(), ErrorCode> {
        call.end()?;
        let kelvin = call.moment.world.oven_reading(call.moment.now);
        let shown = if self.in_kelvin {
            kelvin
        } else {
            kelvin - CELSIUS_ZERO
        };
        call.out.real(round_to(shown, 1e3));
        Ok(())
    }

    fn output(&mut self, call: &mut Call<'_, '_>) -> Result<(), ErrorCode> {
        let Some(on) = call.boolean(self.output)? else {
            return Ok(());
        };
        self.output = on;
        self.drive(call.moment);
        Ok(())
    }

    fn unit(&mut self, call: &mut Call<'_, '_>) -> Result<(), ErrorCode> {
        if let Some(chosen) = call.choice(&["CEL", "C", "K"], if self.in_kelvin { 2 } else { 0 })? {
            self.in_kelvin = chosen == 2;
        }
        Ok(())
    }

    fn drive(&self, moment: &mut Moment<'_>) {
        moment.history.note(
            moment.now,
            "temperature",
            self.setpoint,
            (LOWEST, HIGHEST),
            self.setpoint,
        );
        moment.history.note(
            moment.now,
            "output",
            f64::from(u8::from(self.output)),
            (0.0, 1.0),
            1.0,
        );
        moment
            .world
            .set_oven(moment.now, self.setpoint, self.output);
    }

    fn off_setpoint(&self, moment: &mut Moment<'_>) -> bool {
        self.output && (moment.world.cell_temperature(moment.now) - self.setpoint).abs() > TOLERANCE
    }
}

impl Instrument for Oven {
    fn identity(&self) -> String {
        "Umbra,TCU-1,4001,1.0".to_owned()
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
        *self = Oven {
            setpoint: DEFAULT,
            output: false,
            in_kelvin: false,
        };
        self.drive(moment);
    }

    fn conditions(&mut self, moment: &mut Moment<'_>) -> (u16, u16) {
        let off = u16::from(self.off_setpoint(moment));
        (off << 1, off << 4)
    }
}
