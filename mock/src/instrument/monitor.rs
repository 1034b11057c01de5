//! The monitor: voltages and temperatures that are only read, the level of the laser lock first.

use crate::instrument::{Call, Form, Instrument, Moment, Row, round_to};
use crate::scpi::ErrorCode;
use crate::scpi::number::CELSIUS_ZERO;

/// Monitor.
#[derive(Debug, Default)]
pub struct Monitor;

impl Monitor {
    const ROWS: &[Row<Monitor>] = &[
        Row::new(
            "MEASure:[SCALar]:VOLTage:[DC]",
            Form::Query,
            Monitor::voltage,
        ),
        Row::new(
            "MEASure:[SCALar]:TEMPerature",
            Form::Query,
            Monitor::temperature,
        ),
    ];

    fn voltage(&mut self, call: &mut Call<'_, '_>) -> Result<(), ErrorCode> {
        match call.channel()? {
            None | Some(1) => {
                let level = call.moment.world.lock_level(call.moment.now);
                call.out.real(round_to(level, 1e5));
                Ok(())
            }
            Some(_) => Err(ErrorCode::ILLEGAL_PARAMETER),
        }
    }

    fn temperature(&mut self, call: &mut Call<'_, '_>) -> Result<(), ErrorCode> {
        let kelvin = match call.channel()? {
            None | Some(2) => call.moment.world.cell_temperature(call.moment.now),
            Some(3) => call.moment.world.truth().room_temperature,
            Some(_) => return Err(ErrorCode::ILLEGAL_PARAMETER),
        };
        call.out.real(round_to(kelvin - CELSIUS_ZERO, 1e3));
        Ok(())
    }
}

impl Instrument for Monitor {
    fn identity(&self) -> String {
        "Umbra,MON-2,5001,1.2".to_owned()
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

    fn reset(&mut self, _moment: &mut Moment<'_>) {}
}
