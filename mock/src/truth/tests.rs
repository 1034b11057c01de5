//! World files, good and bad, and the drawn truths.

use super::*;

#[test]
fn the_shipped_file_says_what_the_code_says() {
    assert_eq!(Truth::parse(Truth::SHIPPED_FILE).unwrap(), Truth::shipped());
    assert_eq!(Truth::parse("").unwrap(), Truth::shipped());
}

#[test]
fn the_other_worlds_can_be_read() {
    let shifted = Truth::parse(include_str!("../../worlds/light-shift.toml")).unwrap();
    assert!((shifted.laser.light_shift / -102.312e-12 - 1.0).abs() < 1e-12);
    let rough = Truth::parse(include_str!("../../worlds/rough-lab.toml")).unwrap();
    assert!(
        (rough.probe.curvature / -0.4e-14 - 1.0).abs() < 1e-12
            && (rough.lock.rate - 20.0 / 3600.0).abs() < 1e-12
    );
    let vacuum = Truth::parse(include_str!("../../worlds/vacuum-cell.toml")).unwrap();
    let width = crate::world::World::new(vacuum).true_linewidth(0.0);
    assert!((20e3..100e3).contains(&width), "{width}");
}

#[test]
fn what_a_file_says_arrives() {
    let text = "seed = 7\n[coil]\nconstant = \"240 nT/mA\"\n[atom]\nprobe = \"sigma-\"\nspecies = \"85Rb\"\nlevel = 3\n\
                [line]\nkind = \"lorentzian\"\nfwhm = \"4 kHz\"\ncontrast = 0.05\n[[lock.loss]]\nat = \"12 s\"\nfor = \"3 s\"\n";
    let truth = Truth::parse(text).unwrap();
    assert_eq!(
        (truth.seed, truth.coil.constant, truth.atom.handedness),
        (7, 240e-6, -1.0)
    );
    assert_eq!(truth.atom.level, Level::RB85_F3);
    assert_eq!(
        truth.line,
        LineTruth::Lorentzian {
            fwhm: 4e3,
            contrast: 0.05,
            base: 0.5
        }
    );
    assert_eq!(truth.lock.losses, [(12.0, 3.0)]);
}

#[test]
fn every_fault_is_named_with_its_line_and_remedy() {
    for (text, parts) in [
        (
            "[coil]\nconstnat = \"1 nT/mA\"",
            ["line 2", "unknown key `coil.constnat`", "constant"],
        ),
        (
            "[coil]\nconstant = \"1 nT\"",
            ["line 2", "`coil.constant` has the unit `nT`", "nT/mA"],
        ),
        ("[coil]\nconstant = 3", ["line 2", "is a integer", "nT/mA"]),
        (
            "\n[field]\ntransverse = \"-3 nT\"",
            ["line 3", "`field.transverse`", "outside"],
        ),
        (
            "[field]\nresidual = \"nan nT\"",
            ["line 2", "`field.residual`", "no quantity"],
        ),
        (
            "[line]\nkind = \"gaussian\"",
            ["line 2", "`line.kind`", "bloch, lorentzian"],
        ),
        (
            "[atom]\nlevel = 3",
            ["`atom.level` 3", "87Rb has 1, 2", "ground level"],
        ),
        (
            "[lock]\nloss = 3",
            ["line 2", "`lock.loss`", "[[lock.loss]]"],
        ),
        (
            "[[lock.loss]]\nat = \"3 s\"",
            ["`lock.loss`", "`at`", "`for`"],
        ),
        ("seed = -1", ["line 1", "`seed`", "whole number"]),
        (
            "colour = 1",
            ["line 1", "unknown key `colour`", "known here: seed"],
        ),
        ("coil = 3", ["line 1", "`coil` must be a table", "[coil]"]),
        ("[coil\n", ["line 1", "world file", "TOML parse error"]),
    ] {
        let error = Truth::parse(text).unwrap_err().to_string();
        for part in parts {
            assert!(error.contains(part), "{text:?}: {error}");
        }
    }
    let two = Truth::parse("[coil]\na = 1\n[field]\nb = 2")
        .unwrap_err()
        .message;
    assert_eq!(two.lines().count(), 2, "{two}");
}

#[test]
fn drawn_truths_keep_their_promises() {
    let mut resolved = 0;
    for seed in 1..=2000 {
        let case = Truth::seeded(seed);
        assert_eq!(case, Truth::seeded(seed));
        let truth = &case.truth;
        assert!((50e-6..=2000e-6).contains(&truth.coil.constant) && truth.seed == seed);
        let strongest = truth.coil.constant * case.current_range;
        assert!((1.5e-6..=2.5e-6 + 1e-18).contains(&strongest));
        assert!((case.nominal_constant / truth.coil.constant - 1.0).abs() < 0.2);
        let LineTruth::Lorentzian { fwhm, .. } = truth.line else {
            panic!()
        };
        let larmor = truth.atom.level.larmor(truth.field.transverse);
        assert!(larmor >= 1.99 * fwhm || larmor < 0.0021 * fwhm);
        resolved += u32::from(larmor > fwhm);
        let farthest = (strongest + truth.field.residual.abs()).hypot(truth.field.transverse);
        assert!(2.0 * truth.atom.level.larmor(farthest) + 3.0 * fwhm <= case.span / 2.0 + 1.0);
        assert!(case.span / case.duration < 0.03 * std::f64::consts::PI * fwhm * fwhm);
        assert!(((case.duration / 0.02).round() * 0.02 - case.duration).abs() < 1e-9);
        assert_eq!(truth.laser.light_shift, 0.0);
    }
    assert!((900..1100).contains(&resolved), "{resolved}");
}
