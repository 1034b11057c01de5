//! Fields of ideal coils on their axis, from Biot and Savart (textbook formulas): to compare a measured coil constant
//! with a winding's geometry.

use super::constants::VACUUM_PERMEABILITY;

/// A single-layer solenoid of evenly spaced turns.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Solenoid {
    /// Number of turns.
    pub turns: f64,
    /// Length, m.
    pub length: f64,
    /// Radius, m.
    pub radius: f64,
}

impl Solenoid {
    /// Field per current on the axis, T/A, at `z` (m) from the centre: mu0 N/(2 L) (cos a1 + cos a2).
    pub fn constant(&self, z: f64) -> f64 {
        let cosine = |along: f64| along / along.hypot(self.radius);
        let ends = cosine(self.length / 2.0 - z) + cosine(self.length / 2.0 + z);
        VACUUM_PERMEABILITY * self.turns / (2.0 * self.length) * ends
    }

    /// Mean field per current over a cell of `length` (m) about the centre, T/A: the integral in closed form.
    pub fn mean_constant(&self, length: f64) -> f64 {
        let half = length / 2.0;
        let reach = |z: f64| z.hypot(self.radius);
        let integral = 2.0 * (reach(self.length / 2.0 + half) - reach(self.length / 2.0 - half));
        VACUUM_PERMEABILITY * self.turns / (2.0 * self.length) * integral / length
    }
}

/// Field per current in the middle of a Helmholtz pair, T/A: (4/5)^(3/2) mu0 n / R, `turns` in each coil, `radius` (m).
pub fn helmholtz_constant(turns: f64, radius: f64) -> f64 {
    0.8f64.powf(1.5) * VACUUM_PERMEABILITY * turns / radius
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::atom::published::check_value;

    fn close(ours: f64, quantity: &str, relative: f64) {
        let published = check_value("coil", quantity);
        assert!(
            (ours / published - 1.0).abs() < relative,
            "{quantity}: {ours} against {published}"
        );
    }

    #[test]
    fn helmholtz_pair_agrees_with_the_table() {
        close(0.8f64.powf(1.5), "helmholtz_factor_(4/5)^1.5", 1e-9);
        close(
            helmholtz_constant(100.0, 0.1) * 1e3,
            "helmholtz_n100_R0.1m_1A",
            1e-7,
        );
        close(
            helmholtz_constant(10.0, 0.15) * 1e6,
            "helmholtz_n10_R0.15m_1mA",
            1e-7,
        );
    }

    #[test]
    fn solenoid_agrees_with_the_table() {
        let coil = Solenoid {
            turns: 200.0,
            length: 0.20,
            radius: 0.03,
        };
        close(
            coil.constant(0.0) * 1e6,
            "solenoid_N200_L0.20_R0.03_centre_per_mA",
            1e-7,
        );
        close(
            coil.constant(0.05) * 1e6,
            "solenoid_N200_L0.20_R0.03_z0.05_per_mA",
            1e-7,
        );
        close(
            coil.constant(0.10) * 1e6,
            "solenoid_N200_L0.20_R0.03_end_z0.10_per_mA",
            1e-7,
        );
        close(
            coil.mean_constant(0.075) * 1e6,
            "solenoid_mean_over_centre_75mm_per_mA",
            1e-5,
        );
        let long = Solenoid {
            turns: 200.0 * 1e5,
            length: 0.20 * 1e5,
            radius: 0.03,
        };
        close(
            long.constant(0.0) * 1e6,
            "solenoid_infinite_N200_L0.20_per_mA",
            1e-7,
        );
    }
}
