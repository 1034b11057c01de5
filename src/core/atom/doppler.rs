//! Thermal motion: speeds and Doppler widths of a vapour. Maxwell-Boltzmann textbook formulas.

use super::breit_rabi::Species;
use super::constants::{ATOMIC_MASS, BOLTZMANN, SPEED_OF_LIGHT};

/// Most probable speed sqrt(2 k T / m), m/s, at `temperature` (K).
pub fn most_probable_speed(species: Species, temperature: f64) -> f64 {
    (2.0 * BOLTZMANN * temperature / (species.isotope().mass * ATOMIC_MASS)).sqrt()
}

/// Doppler half width at 1/e of the D1 line in ordinary frequency, u / lambda, Hz, at `temperature` (K).
pub fn one_over_e_half_width(species: Species, temperature: f64) -> f64 {
    most_probable_speed(species, temperature) * species.isotope().d1_frequency / SPEED_OF_LIGHT
}

/// Doppler full width at half maximum of the D1 line, Hz, at `temperature` (K).
pub fn full_width(species: Species, temperature: f64) -> f64 {
    2.0 * std::f64::consts::LN_2.sqrt() * one_over_e_half_width(species, temperature)
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::atom::constants::ZERO_CELSIUS;
    use crate::atom::published::check_value;

    #[test]
    fn speeds_and_widths_agree_with_the_table() {
        for (name, species) in [("87Rb", Species::Rb87), ("85Rb", Species::Rb85)] {
            for celsius in [20, 25, 50, 60, 80, 100] {
                let kelvin = f64::from(celsius) + ZERO_CELSIUS;
                let close = |quantity: String, ours: f64| {
                    let published = check_value(name, &quantity);
                    assert!(
                        (ours / published - 1.0).abs() < 1e-6,
                        "{name} {quantity}: {ours} against {published}"
                    );
                };
                close(
                    format!("most_probable_speed_{celsius}C"),
                    most_probable_speed(species, kelvin),
                );
                let half = one_over_e_half_width(species, kelvin) * 1e-6;
                close(format!("doppler_1/e_halfwidth_ku/2pi_{celsius}C"), half);
                close(
                    format!("doppler_FWHM_D1_{celsius}C"),
                    full_width(species, kelvin) * 1e-6,
                );
            }
        }
    }
}
