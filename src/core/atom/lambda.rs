//! The dark resonance: three-level optical Bloch equations in the steady state, their Doppler average, and the
//! propagation of both beams through an optically thick cell. Knows no field, no coil and no detector.
//!
//! 1 = probe ground state, 2 = control ground state, 3 = excited state, 4 = sink (the other hyperfine level).
//! H/hbar = -dp |3><3| - delta |2><2| - (Wp |3><1| + Wc |3><2| + h.c.)/2 with delta = dp - dc. The equations are
//! textbook (e.g. Fleischhauer, Imamoglu, Marangos, Rev. Mod. Phys. 77, 633 (2005)); each is written out where it
//! is used. All rates and detunings are ordinary frequencies in one common unit; the equations are homogeneous in it.

use nalgebra::{Complex, SMatrix, SVector};

/// One atom in both beams.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Lambda {
    /// One-photon detuning of the probe, dp.
    pub probe_detuning: f64,
    /// One-photon detuning of the control, dc.
    pub control_detuning: f64,
    /// Rabi frequency of the probe, Wp.
    pub probe_rabi: f64,
    /// Rabi frequency of the control, Wc.
    pub control_rabi: f64,
    /// Decay rate from 3 to 1, G1.
    pub decay_to_probe: f64,
    /// Decay rate from 3 to 2, G2.
    pub decay_to_control: f64,
    /// Decay rate from 3 to the sink, Gs.
    pub decay_to_sink: f64,
    /// Ground-state decoherence, g12.
    pub ground_decoherence: f64,
    /// Rate at which atoms leave the beam and fresh ones enter, gt.
    pub transit: f64,
    /// Extra optical dephasing by buffer gas, gopt.
    pub optical_dephasing: f64,
    /// Populations (1, 2, sink) of the atoms that enter; they add up to 1.
    pub entry: [f64; 3],
}

/// A steady state, or the average of many.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Steady {
    /// Populations of 1, 2, 3 and the sink.
    pub populations: [f64; 4],
    /// Probe coherence rho31.
    pub probe: Complex<f64>,
    /// Control coherence rho32.
    pub control: Complex<f64>,
    /// Ground-state coherence rho21.
    pub ground: Complex<f64>,
}

/// The thermal velocity distribution and how it is summed: a trapezoid in t with s = s0 + w sinh t, dense where the
/// atoms are resonant. 51 nodes give 7e-9 (Gauss-Hermite is 44 % wrong with 256).
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Doppler {
    /// Half width at 1/e, ku, in the unit of the rates.
    pub half_width: f64,
    /// Number of nodes, at least 2.
    pub nodes: usize,
}

/// Imaginary part of a coherence over its Rabi frequency: what Beer's law needs, finite for weak light.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Absorption {
    /// Im rho31 / Wp; 0 without probe light.
    pub probe: f64,
    /// Im rho32 / Wc; 0 without control light.
    pub control: f64,
}

/// A cell along the light.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Cell {
    /// a0 L of alpha = a0 G Im rho31 / Wp: the optical depth of resting two-level atoms times 2.
    pub strength: f64,
    /// Number of slices, each taken at its middle (second order in their thickness).
    pub slices: usize,
}

const HALF_RANGE: f64 = 5.0;

impl Lambda {
    /// Total decay rate of the excited state, G.
    pub fn decay(&self) -> f64 {
        self.decay_to_probe + self.decay_to_control + self.decay_to_sink
    }

    /// The steady state, by solving the real linear system of ten unknowns. `None` if it is singular (no relaxation at
    /// all, or a number that is not finite).
    pub fn steady_state(&self) -> Option<Steady> {
        let (matrix, right) = self.system();
        let x = matrix.lu().solve(&right)?;
        x.iter().all(|v| v.is_finite()).then(|| Steady {
            populations: [x[0], x[1], x[2], x[3]],
            probe: Complex::new(x[4], x[5]),
            control: Complex::new(x[6], x[7]),
            ground: Complex::new(x[8], x[9]),
        })
    }

    /// The same state by eliminating the coherences by hand: some twenty times faster, for tables. `None` as above.
    pub fn absorption(&self) -> Option<Absorption> {
        let (probe, control) = self.responses()?;
        // Rows: r11' = 0, r22' = 0, and r33' = 0 or (without transit) the trace; unknowns r11, r22, r33.
        let (wp2, wc2) = (
            self.probe_rabi * self.probe_rabi,
            self.control_rabi * self.control_rabi,
        );
        let (p1, p2) = (wp2 * probe.0, wp2 * probe.1);
        let (c1, c2) = (wc2 * control.0, wc2 * control.1);
        let gt = self.transit;
        let first = [-p1 - gt, -p2, self.decay_to_probe + p1 + p2];
        let second = [-c1, -c2 - gt, self.decay_to_control + c1 + c2];
        let (third, last) = if gt > 0.0 {
            (
                [p1 + c1, p2 + c2, -(self.decay() + gt) - p1 - p2 - c1 - c2],
                0.0,
            )
        } else {
            (
                [1.0, 1.0, 1.0],
                if self.decay_to_sink > 0.0 { 0.0 } else { 1.0 },
            )
        };
        let [r11, r22, r33] = cramer(
            [first, second, third],
            [-gt * self.entry[0], -gt * self.entry[1], last],
        )?;
        let (d1, d2) = (r11 - r33, r22 - r33);
        let part = |rabi: f64, response: (f64, f64)| {
            if rabi == 0.0 {
                0.0
            } else {
                response.0 * d1 + response.1 * d2
            }
        };
        Some(Absorption {
            probe: part(self.probe_rabi, probe),
            control: part(self.control_rabi, control),
        })
    }

    /// Thermal average of the steady state. `None` if any velocity class has none.
    pub fn doppler_mean(&self, doppler: &Doppler) -> Option<Steady> {
        let zero = Complex::new(0.0, 0.0);
        let mut sum = Steady {
            populations: [0.0; 4],
            probe: zero,
            control: zero,
            ground: zero,
        };
        for (shift, weight) in doppler.nodes_about(-self.control_detuning, self.dense_width()) {
            let state = self.moving(shift).steady_state()?;
            for (total, part) in sum.populations.iter_mut().zip(state.populations) {
                *total += weight * part;
            }
            sum.probe += state.probe * weight;
            sum.control += state.control * weight;
            sum.ground += state.ground * weight;
        }
        Some(sum)
    }

    /// Thermal average of the absorption. `None` if any velocity class has no steady state.
    pub fn doppler_absorption(&self, doppler: &Doppler) -> Option<Absorption> {
        let mut sum = Absorption {
            probe: 0.0,
            control: 0.0,
        };
        for (shift, weight) in doppler.nodes_about(-self.control_detuning, self.dense_width()) {
            let part = self.moving(shift).absorption()?;
            sum.probe += weight * part.probe;
            sum.control += weight * part.control;
        }
        Some(sum)
    }

    /// Intensity transmissions (probe, control) of a thick cell, 0..1: dI/dz = -alpha I for both beams, Rabi
    /// frequencies falling with the square root of the intensity. `None` as above.
    pub fn transmission(&self, doppler: &Doppler, cell: &Cell) -> Option<(f64, f64)> {
        let (log_probe, log_control) = self.log_transmission(doppler, cell)?;
        Some((log_probe.exp(), log_control.exp()))
    }

    /// Natural logarithms of [`Lambda::transmission`].
    pub fn log_transmission(&self, doppler: &Doppler, cell: &Cell) -> Option<(f64, f64)> {
        let step = cell.strength * self.decay() / cell.slices as f64;
        let at = |log_probe: f64, log_control: f64| {
            Lambda {
                probe_rabi: self.probe_rabi * (log_probe / 2.0).exp(),
                control_rabi: self.control_rabi * (log_control / 2.0).exp(),
                ..*self
            }
            .doppler_absorption(doppler)
        };
        let (mut log_probe, mut log_control) = (0.0, 0.0);
        for _ in 0..cell.slices {
            let front = at(log_probe, log_control)?;
            let middle = at(
                log_probe - step / 2.0 * front.probe,
                log_control - step / 2.0 * front.control,
            )?;
            log_probe -= step * middle.probe;
            log_control -= step * middle.control;
        }
        Some((log_probe, log_control))
    }

    /// Width about the resonant velocity in which the nodes are dense.
    fn dense_width(&self) -> f64 {
        self.decay() / 2.0 + self.optical_dephasing + self.control_rabi
    }

    /// The same atom moving: `shift` added to both one-photon detunings.
    fn moving(&self, shift: f64) -> Lambda {
        Lambda {
            probe_detuning: self.probe_detuning + shift,
            control_detuning: self.control_detuning + shift,
            ..*self
        }
    }

    fn optical_width(&self) -> f64 {
        self.decay() / 2.0 + self.optical_dephasing + self.ground_decoherence / 2.0 + self.transit
    }

    /// Im rho31 / Wp and Im rho32 / Wc as linear functions of (rho11 - rho33, rho22 - rho33):
    /// rho31 (gamma - i dp) = i Wp/2 (r11 - r33) + i Wc/2 r21, rho32 likewise,
    /// r21 (g12 + gt - i delta) = i Wc/2 r31 - i Wp/2 conj(r32), solved for r21.
    fn responses(&self) -> Option<((f64, f64), (f64, f64))> {
        let gamma = self.optical_width();
        let delta = self.probe_detuning - self.control_detuning;
        let probe = Complex::new(gamma, -self.probe_detuning).inv();
        let control = Complex::new(gamma, self.control_detuning).inv();
        let (wp, wc) = (self.probe_rabi, self.control_rabi);
        let ground = Complex::new(self.ground_decoherence + self.transit, -delta)
            + probe * (wc * wc / 4.0)
            + control * (wp * wp / 4.0);
        if ground.norm_sqr() == 0.0 || !ground.norm_sqr().is_finite() {
            return None;
        }
        // r21 = -(Wp Wc / 4) (probe d1 + control d2) / ground.
        let from_probe = -probe / ground * 0.25;
        let from_control = -control / ground * 0.25;
        let half = Complex::new(0.0, 0.5);
        let r31 = (
            (Complex::new(1.0, 0.0) + from_probe * (wc * wc)) * probe * half,
            from_control * (wc * wc) * probe * half,
        );
        let back = control.conj();
        let r32 = (
            from_probe.conj() * (wp * wp) * back * half,
            (Complex::new(1.0, 0.0) + from_control.conj() * (wp * wp)) * back * half,
        );
        Some(((r31.0.im, r31.1.im), (r32.0.im, r32.1.im)))
    }

    /// Unknowns: r11, r22, r33, r44, Re and Im of r31, r32, r21. The first row is the trace, which the transit terms
    /// imply; without transit it closes the system. Without any way into the sink, r44 = 0 stands in its row.
    fn system(&self) -> (SMatrix<f64, 10, 10>, SVector<f64, 10>) {
        let mut m = SMatrix::<f64, 10, 10>::zeros();
        let mut right = SVector::<f64, 10>::zeros();
        let (wp, wc, gt) = (self.probe_rabi, self.control_rabi, self.transit);
        for column in 0..4 {
            m[(0, column)] = 1.0;
        }
        right[0] = 1.0;
        // r22' = G2 r33 - Wc Im r32 + gt (q2 - r22)
        (m[(1, 1)], m[(1, 2)], m[(1, 7)], right[1]) =
            (-gt, self.decay_to_control, -wc, -gt * self.entry[1]);
        // r33' = -(G + gt) r33 + Wp Im r31 + Wc Im r32
        (m[(2, 2)], m[(2, 5)], m[(2, 7)]) = (-(self.decay() + gt), wp, wc);
        // r44' = Gs r33 + gt (qs - r44)
        (m[(3, 2)], m[(3, 3)], right[3]) = (self.decay_to_sink, -gt, -gt * self.entry[2]);
        if gt == 0.0 && self.decay_to_sink == 0.0 {
            m[(3, 3)] = 1.0;
        }
        // r31' = -(gamma - i dp) r31 + i Wp/2 (r11 - r33) + i Wc/2 r21
        let (gamma, dp, dc) = (
            self.optical_width(),
            self.probe_detuning,
            self.control_detuning,
        );
        (m[(4, 4)], m[(4, 5)], m[(4, 9)]) = (-gamma, -dp, -wc / 2.0);
        (m[(5, 5)], m[(5, 4)], m[(5, 0)], m[(5, 2)], m[(5, 8)]) =
            (-gamma, dp, wp / 2.0, -wp / 2.0, wc / 2.0);
        // r32' = -(gamma - i dc) r32 + i Wc/2 (r22 - r33) + i Wp/2 conj(r21)
        (m[(6, 6)], m[(6, 7)], m[(6, 9)]) = (-gamma, -dc, wp / 2.0);
        (m[(7, 7)], m[(7, 6)], m[(7, 1)], m[(7, 2)], m[(7, 8)]) =
            (-gamma, dc, wc / 2.0, -wc / 2.0, wp / 2.0);
        // r21' = -(g12 + gt - i delta) r21 + i Wc/2 r31 - i Wp/2 conj(r32)
        let (ground, delta) = (self.ground_decoherence + gt, dp - dc);
        (m[(8, 8)], m[(8, 9)], m[(8, 5)], m[(8, 7)]) = (-ground, -delta, -wc / 2.0, -wp / 2.0);
        (m[(9, 9)], m[(9, 8)], m[(9, 4)], m[(9, 6)]) = (-ground, delta, wc / 2.0, -wp / 2.0);
        (m, right)
    }
}

impl Doppler {
    /// Shifts and weights over +-5 half widths, dense within `width` of `centre`.
    fn nodes_about(&self, centre: f64, width: f64) -> impl Iterator<Item = (f64, f64)> + use<> {
        let ku = self.half_width;
        let low = ((-HALF_RANGE * ku - centre) / width).asinh();
        let high = ((HALF_RANGE * ku - centre) / width).asinh();
        let last = self.nodes.max(2) - 1;
        let step = (high - low) / last as f64;
        (0..=last).map(move |index| {
            let t = low + step * index as f64;
            let shift = centre + width * t.sinh();
            let end = if index == 0 || index == last {
                0.5
            } else {
                1.0
            };
            let density = (-(shift / ku).powi(2)).exp() / (std::f64::consts::PI.sqrt() * ku);
            (shift, end * step * width * t.cosh() * density)
        })
    }
}

fn cramer(m: [[f64; 3]; 3], right: [f64; 3]) -> Option<[f64; 3]> {
    let cross = |a: [f64; 3], b: [f64; 3]| {
        [
            a[1] * b[2] - a[2] * b[1],
            a[2] * b[0] - a[0] * b[2],
            a[0] * b[1] - a[1] * b[0],
        ]
    };
    let dot = |a: [f64; 3], b: [f64; 3]| a[0] * b[0] + a[1] * b[1] + a[2] * b[2];
    let (c12, c20, c01) = (cross(m[1], m[2]), cross(m[2], m[0]), cross(m[0], m[1]));
    let determinant = dot(m[0], c12);
    (determinant != 0.0 && determinant.is_finite()).then(|| {
        std::array::from_fn(|k| {
            (right[0] * c12[k] + right[1] * c20[k] + right[2] * c01[k]) / determinant
        })
    })
}

#[cfg(test)]
mod tests;
