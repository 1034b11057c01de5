//! One input of the digitizer: range, offset, coupling, filter, and the converter behind it.

use crate::instrument::digitizer::settings::CORNER;
use crate::scpi::ErrorCode;

/// Bits of the converter.
pub const BITS: u32 = 14;
/// Codes run from -HALF to HALF - 1.
pub const HALF: f64 = (1u32 << (BITS - 1)) as f64;

const SPANS: [f64; 10] = [0.02, 0.05, 0.1, 0.2, 0.5, 1.0, 2.0, 5.0, 10.0, 20.0];
const CORNERS: [f64; 3] = [20e3, 200e3, 1e6];

#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Coupling {
    Dc,
    Ac,
    Ground,
}

/// The settings of one input.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Input {
    /// Peak to peak, V.
    pub span: f64,
    /// Middle of the span, V.
    pub offset: f64,
    pub coupling: Coupling,
    pub filtered: bool,
    /// -3 dB corner of the filter, Hz.
    pub corner: f64,
}

impl Default for Input {
    fn default() -> Input {
        Input {
            span: 2.0,
            offset: 0.0,
            coupling: Coupling::Dc,
            filtered: false,
            corner: CORNER.default,
        }
    }
}

impl Input {
    /// Grants the next span of the 1-2-5 list.
    pub fn set_span(&mut self, asked: f64) -> Result<(), ErrorCode> {
        // What was computed from an end of the range may be off in its last bit.
        let asked = asked * (1.0 - 1e-12);
        self.span = SPANS
            .into_iter()
            .find(|span| *span >= asked)
            .ok_or(ErrorCode::DATA_OUT_OF_RANGE)?;
        Ok(())
    }

    /// Grants the next corner.
    pub fn set_corner(&mut self, asked: f64) -> Result<(), ErrorCode> {
        self.corner = CORNERS
            .into_iter()
            .find(|corner| *corner >= asked)
            .ok_or(ErrorCode::DATA_OUT_OF_RANGE)?;
        Ok(())
    }

    /// Volts per code.
    pub fn step(&self) -> f64 {
        self.span / (2.0 * HALF)
    }

    /// Volts at the connector, sampled every `interval` seconds, into codes: coupled, filtered, rounded, clipped.
    pub fn convert(&self, volts: &mut [f64], interval: f64) -> Vec<i16> {
        match self.coupling {
            Coupling::Dc => {}
            Coupling::Ac => {
                // A corner far below one record: what is left of it is the mean.
                let mean = volts.iter().sum::<f64>() / volts.len().max(1) as f64;
                volts.iter_mut().for_each(|volt| *volt -= mean);
            }
            Coupling::Ground => volts.fill(0.0),
        }
        if self.filtered {
            low_pass(
                volts,
                1.0 - (-std::f64::consts::TAU * self.corner * interval).exp(),
            );
        }
        let (offset, step) = (self.offset, self.step());
        volts
            .iter()
            .map(|volt| ((volt - offset) / step).round().clamp(-HALF, HALF - 1.0) as i16)
            .collect()
    }
}

/// First-order low pass that starts settled.
fn low_pass(volts: &mut [f64], share: f64) {
    let Some(first) = volts.first().copied() else {
        return;
    };
    let mut state = first;
    for volt in volts {
        state += share * (*volt - state);
        *volt = state;
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn rounds_and_clips_at_the_ends() {
        let input = Input {
            offset: 0.5,
            ..Input::default()
        };
        let step = input.step();
        assert_eq!(step, 2.0 / 16384.0);
        let mut volts = [0.5, 0.5 + 0.6 * step, 9.0, -9.0, 0.5 - 1.0];
        assert_eq!(input.convert(&mut volts, 1e-6), [0, 1, 8191, -8192, -8192]);
    }

    #[test]
    fn spans_are_granted_upwards() {
        let mut input = Input::default();
        for (asked, granted) in [
            (0.02, 0.02),
            (0.3, 0.5),
            (2.0, 2.0),
            (2.1, 5.0),
            (20.0, 20.0),
        ] {
            input.set_span(asked).unwrap();
            assert_eq!(input.span, granted);
        }
        assert_eq!(input.set_span(20.1), Err(ErrorCode::DATA_OUT_OF_RANGE));
        assert_eq!(input.span, 20.0);
    }

    #[test]
    fn coupling_and_filter() {
        let ground = Input {
            coupling: Coupling::Ground,
            ..Input::default()
        };
        assert_eq!(ground.convert(&mut [0.3, 0.4], 1e-6), [0, 0]);
        let ac = Input {
            coupling: Coupling::Ac,
            ..Input::default()
        };
        let codes = ac.convert(&mut [0.3, 0.4], 1e-6);
        assert_eq!(codes[0], -codes[1]);
        let mut step = [0.0, 1.0, 1.0, 1.0];
        low_pass(&mut step, 0.5);
        assert_eq!(step, [0.0, 0.5, 0.75, 0.875]);
    }
}
