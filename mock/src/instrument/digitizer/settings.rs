//! The digitizer's settings: what was asked for, and what is granted.

use crate::instrument::digitizer::input::{Coupling, Input};
use crate::instrument::digitizer::{Digitizer, TriggerSource};
use crate::instrument::{Call, Limits, round_to};
use crate::scpi::ErrorCode;
use crate::scpi::number::Unit;

pub(super) const POINTS: Limits = Limits::new(Unit::None, 2.0, 262_144.0, 2000.0);
pub(super) const INTERVAL: Limits = Limits::new(Unit::Second, 100e-9, 1.0, 20e-6);
pub(super) const DELAY: Limits = Limits::new(Unit::Second, 0.0, 10.0, 0.0);
pub(super) const OFFSET: Limits = Limits::new(Unit::Volt, -5.0, 5.0, 0.0);
pub(super) const SPAN: Limits = Limits::new(Unit::Volt, 0.02, 20.0, 2.0);
pub(super) const CORNER: Limits = Limits::new(Unit::Hertz, 0.0, 1e6, 1e6);
/// The sample clock is 50 MHz: times are whole multiples of 20 ns.
pub(super) const CLOCK: f64 = 50e6;

impl Digitizer {
    pub(super) fn input(&mut self, call: &Call<'_, '_>) -> Result<&mut Input, ErrorCode> {
        self.inputs
            .get_mut((call.suffix() as usize).wrapping_sub(1))
            .ok_or(ErrorCode::SUFFIX_OUT_OF_RANGE)
    }

    pub(super) fn upper(&mut self, call: &mut Call<'_, '_>) -> Result<(), ErrorCode> {
        let input = self.input(call)?;
        let half = |span: f64| input.offset + span / 2.0;
        let limits = Limits::new(
            Unit::Volt,
            half(SPAN.lowest),
            half(SPAN.highest),
            half(SPAN.default),
        );
        if let Some(value) = call.real(&limits, half(input.span))? {
            input.set_span(2.0 * (value - input.offset))?;
        }
        Ok(())
    }

    pub(super) fn lower(&mut self, call: &mut Call<'_, '_>) -> Result<(), ErrorCode> {
        let input = *self.input(call)?;
        call.end()?;
        call.out.real(input.offset - input.span / 2.0);
        Ok(())
    }

    pub(super) fn peak_to_peak(&mut self, call: &mut Call<'_, '_>) -> Result<(), ErrorCode> {
        let input = self.input(call)?;
        if let Some(value) = call.real(&SPAN, input.span)? {
            input.set_span(value)?;
        }
        Ok(())
    }

    pub(super) fn offset(&mut self, call: &mut Call<'_, '_>) -> Result<(), ErrorCode> {
        let input = self.input(call)?;
        if let Some(value) = call.real(&OFFSET, input.offset)? {
            input.offset = round_to(value, 1e3);
        }
        Ok(())
    }

    pub(super) fn coupling(&mut self, call: &mut Call<'_, '_>) -> Result<(), ErrorCode> {
        let input = self.input(call)?;
        let all = [Coupling::Dc, Coupling::Ac, Coupling::Ground];
        let present = all
            .iter()
            .position(|coupling| *coupling == input.coupling)
            .unwrap_or(0);
        if let Some(chosen) = call.choice(&["DC", "AC", "GROund"], present)? {
            input.coupling = all[chosen];
        }
        Ok(())
    }

    pub(super) fn filter(&mut self, call: &mut Call<'_, '_>) -> Result<(), ErrorCode> {
        let input = self.input(call)?;
        if let Some(on) = call.boolean(input.filtered)? {
            input.filtered = on;
        }
        Ok(())
    }

    pub(super) fn corner(&mut self, call: &mut Call<'_, '_>) -> Result<(), ErrorCode> {
        let input = self.input(call)?;
        if let Some(value) = call.real(&CORNER, input.corner)? {
            input.set_corner(value)?;
        }
        Ok(())
    }

    pub(super) fn points(&mut self, call: &mut Call<'_, '_>) -> Result<(), ErrorCode> {
        self.input(call)?;
        if let Some(value) = call.integer(&POINTS, self.points)? {
            self.points = value;
        }
        Ok(())
    }

    pub(super) fn interval(&mut self, call: &mut Call<'_, '_>) -> Result<(), ErrorCode> {
        self.input(call)?;
        if let Some(value) = call.real(&INTERVAL, self.interval)? {
            self.interval = ticks(value);
        }
        Ok(())
    }

    pub(super) fn time(&mut self, call: &mut Call<'_, '_>) -> Result<(), ErrorCode> {
        self.input(call)?;
        let gaps = self.points - 1.0;
        let limits = Limits::new(
            Unit::Second,
            INTERVAL.lowest * gaps,
            INTERVAL.highest * gaps,
            INTERVAL.default * gaps,
        );
        if let Some(value) = call.real(&limits, round_to(self.interval * gaps, CLOCK))? {
            self.interval = ticks(value / gaps);
        }
        Ok(())
    }

    pub(super) fn trigger_source(&mut self, call: &mut Call<'_, '_>) -> Result<(), ErrorCode> {
        let all = [
            TriggerSource::External,
            TriggerSource::Immediate,
            TriggerSource::Bus,
        ];
        let present = all
            .iter()
            .position(|source| *source == self.source)
            .unwrap_or(0);
        if let Some(chosen) = call.choice(&["EXTernal", "IMMediate", "BUS"], present)? {
            self.source = all[chosen];
        }
        Ok(())
    }

    pub(super) fn trigger_delay(&mut self, call: &mut Call<'_, '_>) -> Result<(), ErrorCode> {
        if let Some(value) = call.real(&DELAY, self.delay)? {
            self.delay = ticks(value);
        }
        Ok(())
    }
}

/// Up to the next multiple of the sample clock's period; a rounding error is none.
fn ticks(seconds: f64) -> f64 {
    (seconds * CLOCK - 1e-6).ceil() / CLOCK
}
