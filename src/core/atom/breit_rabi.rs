//! Ground-state levels of rubidium in a magnetic field, both ways: field to frequency and back.
//! Knows nothing of coils or fits.
//!
//! G. Breit and I. I. Rabi, Phys. Rev. 38, 2082 (1931), in the form and sign convention of D. A. Steck,
//! "Rubidium 87 D Line Data", section 4.2.

use super::constants::{BOHR_MAGNETON_OVER_H, Isotope, RB85, RB87};
use serde::{Deserialize, Serialize};

/// A rubidium isotope.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, Serialize, Deserialize)]
pub enum Species {
    /// Rubidium 87, nuclear spin 3/2.
    #[serde(rename = "87Rb")]
    Rb87,
    /// Rubidium 85, nuclear spin 5/2.
    #[serde(rename = "85Rb")]
    Rb85,
}

impl Species {
    /// Published numbers of the isotope.
    pub fn isotope(self) -> &'static Isotope {
        match self {
            Species::Rb87 => &RB87,
            Species::Rb85 => &RB85,
        }
    }

    /// The species by its usual name, `87Rb` or `85Rb`.
    pub fn named(name: &str) -> Option<Species> {
        match name {
            "87Rb" => Some(Species::Rb87),
            "85Rb" => Some(Species::Rb85),
            _ => None,
        }
    }
}

/// One hyperfine level F of the ground state.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash)]
pub struct Level {
    species: Species,
    upper: bool,
}

impl Level {
    /// 87Rb, F = 2.
    pub const RB87_F2: Level = Level {
        species: Species::Rb87,
        upper: true,
    };
    /// 87Rb, F = 1.
    pub const RB87_F1: Level = Level {
        species: Species::Rb87,
        upper: false,
    };
    /// 85Rb, F = 3.
    pub const RB85_F3: Level = Level {
        species: Species::Rb85,
        upper: true,
    };
    /// 85Rb, F = 2.
    pub const RB85_F2: Level = Level {
        species: Species::Rb85,
        upper: false,
    };

    /// Level F = `f` of the species; `None` unless F = I - 1/2 or I + 1/2 (1 or 2 for 87Rb, 2 or 3 for 85Rb).
    pub fn new(species: Species, f: u8) -> Option<Level> {
        let twice_spin = species.isotope().twice_nuclear_spin;
        match 2 * i32::from(f) - twice_spin {
            1 => Some(Level {
                species,
                upper: true,
            }),
            -1 => Some(Level {
                species,
                upper: false,
            }),
            _ => None,
        }
    }

    /// The isotope.
    pub fn species(self) -> Species {
        self.species
    }

    /// Total angular momentum F.
    pub fn f(self) -> u8 {
        let twice_spin = self.species.isotope().twice_nuclear_spin;
        ((twice_spin + if self.upper { 1 } else { -1 }) / 2) as u8
    }

    /// Energy over h of the state `m` at `field` (T), Hz, counted from the centroid of both hyperfine levels.
    /// `None` if |m| > F.
    pub fn energy(self, m: i32, field: f64) -> Option<f64> {
        self.allows(m).then(|| {
            let (iso, x) = self.reduced(field);
            let spins = f64::from(iso.twice_nuclear_spin + 1);
            -iso.splitting / (2.0 * spins)
                + iso.g_i * BOHR_MAGNETON_OVER_H * f64::from(m) * field
                + self.sign() * iso.splitting / 2.0 * self.radical(m, x)
        })
    }

    /// Frequency of the two-photon transition from `m` to `m + 2` at `field` (T), Hz, signed: exact (Breit-Rabi).
    /// `None` if either state is outside the level.
    pub fn two_photon(self, m: i32, field: f64) -> Option<f64> {
        (self.allows(m) && self.allows(m + 2)).then(|| self.difference(m, m + 2, field))
    }

    /// The field (T) at which the transition from `m` to `m + 2` has that signed frequency (Hz): the inverse of
    /// [`Level::two_photon`], on the branch through zero field. `None` outside the level or beyond that branch.
    pub fn field_of_two_photon(self, m: i32, frequency: f64) -> Option<f64> {
        let mut field = frequency / self.two_photon_slope();
        for _ in 0..40 {
            let miss = self.two_photon(m, field)? - frequency;
            let step = 1e-6 + field.abs() * 1e-4;
            let slope = (self.two_photon(m, field + step)? - self.two_photon(m, field - step)?)
                / (2.0 * step);
            let next = field - miss / slope;
            if !next.is_finite() {
                return None;
            }
            if (next - field).abs() <= 1e-15 * next.abs() {
                return Some(next);
            }
            field = next;
        }
        let miss = self.two_photon(m, field)? - frequency;
        (miss.abs() <= 1e-9 * frequency.abs() + 1e-6).then_some(field)
    }

    /// The Larmor frequency nu_L (Hz, signed as the level's g-factor) at `field` (T): half the frequency of the pair
    /// m = -1 to +1, which is linear in the field up to a term of third order.
    pub fn larmor(self, field: f64) -> f64 {
        self.difference(-1, 1, field) / 2.0
    }

    /// The field (T) at which the line of index `q` (the peak at `q * nu_L`) stands at `frequency` (Hz, signed).
    /// `None` for q = 0, or beyond the branch through zero field.
    pub fn field_of_line(self, q: i32, frequency: f64) -> Option<f64> {
        (q != 0)
            .then(|| self.field_of_two_photon(-1, frequency * 2.0 / f64::from(q)))
            .flatten()
    }

    /// g-factor of the level, gJ and gI included: +-(gJ - gI)/(2I + 1) + gI.
    pub fn g(self) -> f64 {
        let iso = self.species.isotope();
        self.sign() * (iso.g_j - iso.g_i) / f64::from(iso.twice_nuclear_spin + 1) + iso.g_i
    }

    /// Slope of the dm = 2 two-photon frequency at zero field, Hz/T: 2 g muB / h (13.9916661 Hz/nT for 87Rb, F = 2).
    pub fn two_photon_slope(self) -> f64 {
        2.0 * self.g() * BOHR_MAGNETON_OVER_H
    }

    /// Curvature of the m = 0 to m + 2 = 2 frequency against the linear law, Hz/T^2: the nonlinear Zeeman term that
    /// tells the outer pairs (-2 to 0: minus this, 0 to +2: this) from the middle one. Second order in the field.
    pub fn outer_pair_curvature(self) -> f64 {
        // The root expanded to x^2: E2(m) = -+ dE x^2 m^2 / (2I+1)^2 plus a part common to all m.
        let iso = self.species.isotope();
        let spins = f64::from(iso.twice_nuclear_spin + 1);
        let per_tesla = (iso.g_j - iso.g_i) * BOHR_MAGNETON_OVER_H;
        -self.sign() * 4.0 * per_tesla * per_tesla / (iso.splitting * spins * spins)
    }

    fn allows(self, m: i32) -> bool {
        m.unsigned_abs() <= u32::from(self.f())
    }

    fn sign(self) -> f64 {
        if self.upper { 1.0 } else { -1.0 }
    }

    fn reduced(self, field: f64) -> (&'static Isotope, f64) {
        let iso = self.species.isotope();
        (
            iso,
            (iso.g_j - iso.g_i) * BOHR_MAGNETON_OVER_H * field / iso.splitting,
        )
    }

    /// The root in the formula; for the stretched states it is linear in the field, also past x = 1.
    fn radical(self, m: i32, x: f64) -> f64 {
        let spins = self.species.isotope().twice_nuclear_spin + 1;
        if 2 * m.abs() == spins {
            1.0 + f64::from(m.signum()) * x
        } else {
            (1.0 + 4.0 * f64::from(m) * x / f64::from(spins) + x * x).sqrt()
        }
    }

    /// E(to) - E(from), by the difference of roots, so that nothing cancels at nanotesla.
    fn difference(self, from: i32, to: i32, field: f64) -> f64 {
        let (iso, x) = self.reduced(field);
        let steps = f64::from(to - from);
        let roots = self.radical(from, x) + self.radical(to, x);
        let spins = f64::from(iso.twice_nuclear_spin + 1);
        iso.g_i * BOHR_MAGNETON_OVER_H * steps * field
            + self.sign() * iso.splitting / 2.0 * (4.0 * steps * x / spins) / roots
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::atom::published::{Table, check_value};
    use proptest::prelude::*;

    #[test]
    fn energies_agree_with_full_diagonalisation() {
        let table = Table::read(include_str!("../testdata/atom/breit_rabi_diag.csv"));
        for row in table.rows() {
            let species = Species::named(row.text("isotope")).unwrap();
            let level = Level::new(species, row.number("F") as u8).unwrap();
            let (m, field) = (row.number("mF") as i32, row.number("B_T"));
            let ours = level.energy(m, field).unwrap();
            // The table's two columns differ by up to 6e-6 Hz among themselves; f64 resolves 5e-7 Hz here.
            for column in [
                "E_over_h_Hz_full_diagonalisation",
                "E_over_h_Hz_breit_rabi_formula",
            ] {
                let published = row.number(column);
                assert!(
                    (ours - published).abs() < 1e-3,
                    "{m} {field}: {ours} against {published}"
                );
            }
        }
    }

    #[test]
    fn pairs_agree_with_full_diagonalisation() {
        for (field, name) in [
            (1e-6, "1e-06"),
            (1e-5, "1e-05"),
            (5e-5, "5e-05"),
            (1e-4, "0.0001"),
            (1e-2, "0.01"),
        ] {
            for (m, pair) in [(-2, "-2->0"), (-1, "-1->1"), (0, "0->2")] {
                let published = check_value("two_photon", &format!("f(mF={pair}) at B={name} T"));
                let ours = Level::RB87_F2.two_photon(m, field).unwrap();
                assert!(
                    (ours - published).abs() < 1e-3 + 1e-9 * published,
                    "{pair} {field}: {ours}"
                );
                let quantity = format!("nonlinear part f(mF={pair})-2gF muB B/h at B={name} T");
                let bent = ours - Level::RB87_F2.two_photon_slope() * field;
                assert!(
                    (bent - check_value("two_photon", &quantity)).abs() < 1e-3 + 1e-9 * published
                );
            }
        }
    }

    #[test]
    fn slopes_agree_with_the_table() {
        for (group, level, f) in [
            ("87Rb", Level::RB87_F1, 1),
            ("87Rb", Level::RB87_F2, 2),
            ("85Rb", Level::RB85_F2, 2),
            ("85Rb", Level::RB85_F3, 3),
        ] {
            assert_eq!(Level::new(level.species(), f), Some(level));
            assert_eq!(level.f(), f);
            let published = check_value(group, &format!("two_photon_slope_dm2_F{f}"));
            assert!((level.two_photon_slope() * 1e-9 / published - 1.0).abs() < 1e-7);
            assert!((level.g() / check_value(group, &format!("gF_5S1/2_F{f}")) - 1.0).abs() < 1e-8);
            let per_m = check_value(group, &format!("zeeman_slope_per_mF_F{f}"));
            assert!((level.larmor(1e-9) / per_m - 1.0).abs() < 1e-7);
        }
        assert!((Level::RB87_F2.two_photon_slope() * 1e-9 - 13.991_666_1).abs() < 1e-7);
        assert!(Level::new(Species::Rb87, 3).is_none() && Level::new(Species::Rb85, 1).is_none());
        assert!(
            Level::RB87_F2.two_photon(1, 1e-6).is_none() && Level::RB87_F1.energy(2, 0.0).is_none()
        );
    }

    #[test]
    fn clock_transition_has_the_published_quadratic_shift() {
        // Steck prints 575.15 Hz/G^2.
        let field = 1e-4;
        let at = |field| {
            Level::RB87_F2.energy(0, field).unwrap() - Level::RB87_F1.energy(0, field).unwrap()
        };
        let published = check_value("87Rb", "clock_quadratic_0-0");
        assert!(((at(field) - at(0.0)) / published - 1.0).abs() < 1e-5);
    }

    #[test]
    fn outer_pairs_bend_by_the_published_curvature() {
        // mock_bench_effects: 71.893 Hz at 50 uT.
        let published = check_value(
            "two_photon",
            "nonlinear part f(mF=0->2)-2gF muB B/h at B=5e-05 T",
        );
        assert!((Level::RB87_F2.outer_pair_curvature() * 25e-10 / published - 1.0).abs() < 1e-4);
    }

    #[test]
    fn a_few_milligauss_move_the_line_a_few_kilohertz() {
        // Common practice, no source. 1 mG = 100 nT.
        let shift = Level::RB87_F2.two_photon(-1, 300e-9).unwrap();
        assert!((2e3..6e3).contains(&shift), "{shift} Hz at 3 mG");
    }

    proptest! {
        #[test]
        fn frequency_and_field_are_inverse(field in -5e-4..5e-4f64, m in -2..=0i32, q in -2..=2i32) {
            let level = Level::RB87_F2;
            let back = level.field_of_two_photon(m, level.two_photon(m, field).unwrap()).unwrap();
            prop_assert!((back - field).abs() <= 1e-12 * field.abs() + 1e-21);
            match level.field_of_line(q, f64::from(q) * level.larmor(field)) {
                Some(back) => prop_assert!((back - field).abs() <= 1e-12 * field.abs() + 1e-21),
                None => prop_assert_eq!(q, 0),
            }
        }
    }
}
