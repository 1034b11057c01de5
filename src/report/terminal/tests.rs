//! Snapshots of the answer as text, the odd cases included.

use darkline_core::answer::{Answer, Stated};
use insta::assert_snapshot;

use super::*;

fn answer() -> Answer {
    Answer {
        coil_constant: Stated::measured(118.6304, 0.0412, "nT/mA"),
        residual_field: Stated::measured(-123.42, 2.13, "nT").qualified("including light shift"),
        null_current: Stated::measured(1.0404, 0.0181, "mA"),
        transverse_field: Stated::limit(34.2, "nT"),
        linewidth: Stated::measured(12.3512, 0.0781, "kHz").qualified("at 1.0 mA"),
        contrast: Stated::measured(4.312, 0.0502, "%").qualified("at 1.0 mA"),
        chi2: Some(39.1),
        dof: Some(38),
        used: 40,
        sigma_over_scatter: Some(0.971),
    }
}

fn run() -> RunSummary {
    RunSummary {
        done: 41,
        flagged: 1,
        repeated: 2,
        folder: "runs/20261201T134430Z-coil-constant".into(),
        state: "finished".into(),
    }
}

fn nothing(reason: &str) -> Answer {
    let missing = |unit| Stated::missing(reason, unit);
    Answer {
        coil_constant: missing("nT/mA"),
        residual_field: missing("nT"),
        null_current: missing("mA"),
        transverse_field: missing("nT"),
        linewidth: missing("kHz"),
        contrast: missing("%"),
        chi2: None,
        dof: None,
        used: 0,
        sigma_over_scatter: None,
    }
}

#[test]
fn a_good_run() {
    assert_snapshot!(answer_text(&answer(), false, 80, &run()), @r"
    coil constant     118.630 ± 0.041 nT/mA
    residual field    -123.4 ± 2.1 nT, including light shift
    null current      1.040 ± 0.018 mA
    transverse field  < 35 nT (95 %)
    linewidth         12.351 ± 0.078 kHz at 1.0 mA
    contrast          4.312 ± 0.050 % at 1.0 mA

    chi-square        39.10 for 38 degrees of freedom, 1.03 each
    points            41 done, 40 used, 1 flagged, 2 repeated
    fit sigma         0.97 of the scatter of separate acquisitions
    state             finished
    run               runs/20261201T134430Z-coil-constant
    ");
}

#[test]
fn a_systematic_part_and_a_transverse_value() {
    let mut answer = answer();
    answer.coil_constant.systematic = Some(0.12);
    answer.residual_field.systematic = Some(6.0);
    answer.transverse_field = Stated::measured(412.3, 18.4, "nT");
    assert_snapshot!(answer_text(&answer, false, 80, &run()), @r"
    coil constant     118.630 ± 0.041 (stat) ± 0.120 (syst) nT/mA
    residual field    -123.4 ± 2.1 (stat) ± 6.0 (syst) nT, including light shift
    null current      1.040 ± 0.018 mA
    transverse field  412 ± 18 nT
    linewidth         12.351 ± 0.078 kHz at 1.0 mA
    contrast          4.312 ± 0.050 % at 1.0 mA

    chi-square        39.10 for 38 degrees of freedom, 1.03 each
    points            41 done, 40 used, 1 flagged, 2 repeated
    fit sigma         0.97 of the scatter of separate acquisitions
    state             finished
    run               runs/20261201T134430Z-coil-constant
    ");
}

#[test]
fn a_narrow_terminal_wraps_and_keeps_the_folder_whole() {
    let mut answer = answer();
    answer.transverse_field = Stated::missing(
        "the five peaks of the tilted field overlap at this linewidth",
        "nT",
    );
    assert_snapshot!(answer_text(&answer, false, 44, &run()), @r"
    coil constant     118.630 ± 0.041 nT/mA
    residual field    -123.4 ± 2.1 nT,
                      including light shift
    null current      1.040 ± 0.018 mA
    transverse field  cannot tell: the five
                      peaks of the tilted
                      field overlap at this
                      linewidth
    linewidth         12.351 ± 0.078 kHz at
                      1.0 mA
    contrast          4.312 ± 0.050 % at 1.0
                      mA

    chi-square        39.10 for 38 degrees of
                      freedom, 1.03 each
    points            41 done, 40 used, 1
                      flagged, 2 repeated
    fit sigma         0.97 of the scatter of
                      separate acquisitions
    state             finished
    run               runs/20261201T134430Z-coil-constant
    ");
}

#[test]
fn no_fit_at_all() {
    let run = RunSummary {
        done: 3,
        flagged: 3,
        state: "stopped".into(),
        ..run()
    };
    let text = answer_text(&nothing("only 0 of 3 points show a peak"), false, 80, &run);
    assert_snapshot!(text, @r"
    coil constant     cannot tell: only 0 of 3 points show a peak
    residual field    cannot tell: only 0 of 3 points show a peak
    null current      cannot tell: only 0 of 3 points show a peak
    transverse field  cannot tell: only 0 of 3 points show a peak
    linewidth         cannot tell: only 0 of 3 points show a peak
    contrast          cannot tell: only 0 of 3 points show a peak

    chi-square        none: the field law was not fitted
    points            3 done, 0 used, 3 flagged, 2 repeated
    state             stopped
    run               runs/20261201T134430Z-coil-constant
    ");
}

#[test]
fn numbers_that_are_none() {
    let mut answer = answer();
    answer.coil_constant.value = Some(f64::NAN);
    answer.residual_field.sigma = Some(f64::NAN);
    answer.null_current.sigma = Some(f64::INFINITY);
    answer.transverse_field = Stated::limit(f64::NAN, "nT");
    answer.linewidth = Stated::default();
    answer.chi2 = Some(f64::NAN);
    answer.sigma_over_scatter = Some(f64::NAN);
    assert_snapshot!(answer_text(&answer, false, 80, &run()), @r"
    coil constant     cannot tell: the result is not a finite number
    residual field    -123.42 nT (statistical uncertainty unknown), including
                      light shift
    null current      1.0404 mA (statistical uncertainty unknown)
    transverse field  cannot tell: the result is not a finite number
    linewidth         cannot tell: no reason was given
    contrast          4.312 ± 0.050 % at 1.0 mA

    chi-square        cannot tell: the result is not a finite number
    points            41 done, 40 used, 1 flagged, 2 repeated
    state             finished
    run               runs/20261201T134430Z-coil-constant
    ");
}

#[test]
fn exactly_determined_and_badly_fitted() {
    let mut answer = answer();
    (answer.chi2, answer.dof) = (Some(0.0), Some(0));
    assert_eq!(
        chi_square(&answer),
        "cannot tell: no degree of freedom is left"
    );
    (answer.chi2, answer.dof) = (Some(4321.0), Some(1));
    assert_eq!(
        chi_square(&answer),
        "4320 for 1 degree of freedom, 4320 each"
    );
}

#[test]
fn colour_adds_escapes_and_changes_no_letter() {
    let (plain, coloured) = (
        answer_text(&answer(), false, 44, &run()),
        answer_text(&answer(), true, 44, &run()),
    );
    assert!(coloured.contains("\u{1b}[1m118.630 ± 0.041 nT/mA\u{1b}[0m"));
    assert!(coloured.contains("\u{1b}[32mfinished\u{1b}[0m"));
    let mut stripped = coloured;
    for escape in [BOLD, DIM, GREEN, YELLOW, RED, PLAIN] {
        stripped = stripped.replace(escape, "");
    }
    assert_eq!(stripped, plain);
}
