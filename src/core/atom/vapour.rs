//! Rubidium vapour: saturated pressure, number density, and absorption of weak light.
//!
//! C. B. Alcock, V. P. Itkin, M. K. Horrigan, Can. Metall. Q. 23, 309 (1984), as D. A. Steck uses it in "Rubidium 87
//! D Line Data" (rev. 2): good to 5 %.

use super::breit_rabi::Species;
use super::constants::{BOLTZMANN, SPEED_OF_LIGHT, TORR};

/// Melting point of rubidium, K (39.30 degC, as in Steck).
pub const MELTING_POINT: f64 = 312.45;

/// Saturated vapour pressure, Pa, at `temperature` (K); good to 5 % from room temperature to 550 K.
pub fn pressure(temperature: f64) -> f64 {
    let exponent = if temperature < MELTING_POINT {
        2.881 + 4.857 - 4215.0 / temperature
    } else {
        2.881 + 4.312 - 4040.0 / temperature
    };
    10f64.powf(exponent) * TORR
}

/// Number density of all rubidium atoms, 1/m^3, at `temperature` (K): ideal gas.
pub fn density(temperature: f64) -> f64 {
    pressure(temperature) / (BOLTZMANN * temperature)
}

/// Resonant cross section lambda^2 / (2 pi) of the D1 line, m^2 (Steck's sigma0 for the D1 line, detuned light).
pub fn cross_section(species: Species) -> f64 {
    let wavelength = SPEED_OF_LIGHT / species.isotope().d1_frequency;
    wavelength * wavelength / (2.0 * std::f64::consts::PI)
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::atom::constants::ZERO_CELSIUS;
    use crate::atom::published::check_value;

    #[test]
    fn pressure_and_density_agree_with_the_table() {
        for celsius in [20, 25, 50, 60, 80, 100] {
            let kelvin = f64::from(celsius) + ZERO_CELSIUS;
            let torr = pressure(kelvin) / TORR;
            let per_cubic_centimetre = density(kelvin) * 1e-6;
            let published = check_value("vapour", &format!("P_alcock_steck_{celsius}C"));
            assert!(
                (torr / published - 1.0).abs() < 1e-4,
                "{celsius} degC: {torr} against {published} torr"
            );
            let published = check_value("vapour", &format!("n_total_alcock_steck_{celsius}C"));
            assert!(
                (per_cubic_centimetre / published - 1.0).abs() < 1e-4,
                "{celsius} degC"
            );
        }
        let printed = check_value("vapour", "P_alcock_steck_298.00K");
        assert!((pressure(298.0) / TORR / printed - 1.0).abs() < 1e-3);
    }

    #[test]
    fn a_centimetre_cell_near_80_degrees_is_optically_thick() {
        // Common practice, no source; the formula is that of check_values.csv, group optics.
        let published = check_value("optics", "alpha_weak_unpolarised_natural_Rb_80C_F2-F1prime");
        let voigt = check_value("optics", "voigt_factor_D1_F2-F1prime_80C");
        let alpha = density(353.15)
            * 0.2783
            * (5.0 / 8.0)
            * 0.5
            * cross_section(Species::Rb87)
            * voigt
            * 1e-2;
        assert!(
            (alpha / published - 1.0).abs() < 0.01,
            "{alpha} against {published} per cm"
        );
        assert!(alpha > 1.0);
    }

    #[test]
    fn cross_section_agrees_with_the_table() {
        let published = check_value("optics", "resonant_cross_section_lambda^2/2pi_D1") * 1e-4;
        assert!((cross_section(Species::Rb87) / published - 1.0).abs() < 1e-6);
    }
}
