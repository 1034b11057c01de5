//! Published constants: CODATA 2022 and the D1 numbers of both rubidium isotopes. Only numbers and their sources.
//!
//! CODATA 2022: as carried by scipy 1.17.1. Rubidium: D. A. Steck, "Rubidium 87 D Line Data" rev. 2.3.4 (2025) and
//! "Rubidium 85 D Line Data", read in public transcriptions, not in the PDF.

/// Bohr magneton over Planck's constant, Hz/T (CODATA 2022).
pub const BOHR_MAGNETON_OVER_H: f64 = 13_996_244_917.1;
/// Boltzmann's constant, J/K (exact, SI 2019).
pub const BOLTZMANN: f64 = 1.380649e-23;
/// Planck's constant, J s (exact, SI 2019).
pub const PLANCK: f64 = 6.62607015e-34;
/// Elementary charge, C (exact, SI 2019).
pub const ELEMENTARY_CHARGE: f64 = 1.602176634e-19;
/// Speed of light in vacuum, m/s (exact).
pub const SPEED_OF_LIGHT: f64 = 299_792_458.0;
/// Vacuum magnetic permeability, N/A^2 (CODATA 2022).
pub const VACUUM_PERMEABILITY: f64 = 1.256_637_061_27e-6;
/// Atomic mass constant, kg (CODATA 2022).
pub const ATOMIC_MASS: f64 = 1.660_539_068_92e-27;
/// Conventional torr, Pa (101325/760, exact).
pub const TORR: f64 = 101_325.0 / 760.0;
/// Zero of the Celsius scale, K (exact).
pub const ZERO_CELSIUS: f64 = 273.15;

/// What is known of one isotope's ground state and D1 line.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Isotope {
    /// Twice the nuclear spin.
    pub twice_nuclear_spin: i32,
    /// Ground-state hyperfine splitting, Hz.
    pub splitting: f64,
    /// Electron g-factor of 5S1/2 (Arimondo, Inguscio, Violino, Rev. Mod. Phys. 49, 31 (1977), as in Steck).
    pub g_j: f64,
    /// Nuclear g-factor in the convention H = muB (gJ Jz + gI Iz) B (as in Steck).
    pub g_i: f64,
    /// Mass, in atomic mass constants.
    pub mass: f64,
    /// Natural abundance, 0..1.
    pub abundance: f64,
    /// D1 line centroid, Hz.
    pub d1_frequency: f64,
    /// D1 natural width (full width at half maximum), Hz.
    pub d1_width: f64,
    /// Magnetic dipole constant of 5P1/2, Hz; half the splitting of its two levels for 87Rb.
    pub a_5p_half: f64,
}

/// Rubidium 87. The 5P1/2 constant is Steck's compromise between two discrepant measurements.
pub const RB87: Isotope = Isotope {
    twice_nuclear_spin: 3,
    splitting: 6_834_682_610.904_29,
    g_j: 2.002_331_13,
    g_i: -0.000_995_141_4,
    mass: 86.909_180_520,
    abundance: 0.2783,
    d1_frequency: 377.107_463_380e12,
    d1_width: 5.7500e6,
    a_5p_half: 407.25e6,
};

/// Rubidium 85. Its D1 width is taken as that of rubidium 87: the isotopes differ far below the uncertainty.
pub const RB85: Isotope = Isotope {
    twice_nuclear_spin: 5,
    splitting: 3_035_732_439.0,
    g_j: 2.002_331_13,
    g_i: -0.000_293_640_00,
    mass: 84.911_789_732,
    abundance: 0.7217,
    d1_frequency: 377.107_385_690e12,
    d1_width: 5.7500e6,
    a_5p_half: 120.527e6,
};

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn wavelength_agrees_with_the_published_one() {
        // Steck, Rubidium 87 D Line Data: 794.978 851 156(23) nm in vacuum.
        let wavelength = SPEED_OF_LIGHT / RB87.d1_frequency;
        assert!((wavelength / 794.978_851_156e-9 - 1.0).abs() < 1e-10);
    }

    #[test]
    fn natural_width_is_the_inverse_lifetime_and_about_6_megahertz() {
        // Steck: lifetime 27.679(27) ns. "About 6 MHz": common practice, no source.
        let from_lifetime = 1.0 / (2.0 * std::f64::consts::PI * 27.679e-9);
        assert!((RB87.d1_width / from_lifetime - 1.0).abs() < 1e-3);
        assert!((5.5e6..6.5e6).contains(&RB87.d1_width));
    }
}
