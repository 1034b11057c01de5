//! Draws whole truths from a seed, for the campaign that asks whether answers are honest: coil constant 50 to
//! 2000 nT/mA, fields, line, noise; transverse fields either clearly resolved or too small to matter; light shift off.

use super::*;
use crate::world::uniform;

/// Counts the draws of one case.
struct Draws {
    seed: u64,
    drawn: u64,
}

impl Draws {
    /// Evenly spread over `low..high`.
    fn even(&mut self, low: f64, high: f64) -> f64 {
        self.drawn += 1;
        low + (high - low) * uniform(self.seed, self.drawn)
    }

    /// Evenly spread in the logarithm.
    fn log(&mut self, low: f64, high: f64) -> f64 {
        self.even(low.ln(), high.ln()).exp()
    }
}

pub(super) fn campaign(seed: u64) -> Campaign {
    let mut draws = Draws { seed, drawn: 0 };
    let mut truth = Truth {
        seed,
        ..Truth::shipped()
    };
    let fwhm = draws.even(3e3, 6e3);
    let contrast = draws.even(0.04, 0.10);
    truth.line = LineTruth::Lorentzian {
        fwhm,
        contrast,
        base: draws.even(0.35, 0.65),
    };
    truth.coil.constant = draws.log(50e-6, 2000e-6);
    // Warming is a systematic error of the coil, not one of the fit: it would move the truth itself.
    truth.coil.expansion = 0.0;
    let strongest = draws.even(1.5e-6, 2.5e-6);
    let current_range = strongest / truth.coil.constant;
    truth.coil.supply_limit = 2.0 * current_range;
    truth.coil.readback_noise = current_range * 2e-5;
    truth.field.residual = draws.even(-400e-9, 400e-9);
    // Resolved: nu_L at least 2 FWHM where the axial field vanishes. Too small: nu_L under FWHM / 500.
    let larmor_per_tesla = truth.atom.level.two_photon_slope() / 2.0;
    let resolved = draws.even(0.0, 1.0) < 0.5;
    let larmor = if resolved {
        fwhm * draws.even(2.0, 2.6)
    } else {
        fwhm * draws.even(0.0, 0.002)
    };
    truth.field.transverse = larmor / larmor_per_tesla;
    // Height of the peak over the noise of one sample, at 20 us a sample as the world's own bandwidth has it.
    truth.detector.transimpedance = 0.0;
    truth.detector.white *= draws.log(0.6, 1.6);
    let nominal_constant = truth.coil.constant * draws.even(0.83, 1.19);
    // Wide enough that the line stays inside a fixed window, with three linewidths of baseline beyond it.
    let farthest = (strongest + truth.field.residual.abs()).hypot(truth.field.transverse);
    let span = ((2.0 * larmor_per_tesla * farthest + 3.0 * fwhm) * 2.0 / 10e3).ceil() * 10e3;
    // Slow enough for the line (rate under 0.03 pi FWHM^2) and whole mains periods.
    let slowest = span / (0.025 * std::f64::consts::PI * fwhm * fwhm);
    let duration = (slowest / 0.02).ceil().max(2.0) * 0.02;
    Campaign {
        truth,
        current_range,
        nominal_constant,
        span,
        duration,
    }
}
