//! Structure of the drawing on good and odd data; `DARKLINE_FIGURES=folder` keeps the pictures for the eye.

use darkline_core::answer::{Answer, Stated};

use super::*;
use crate::report::png::png;

/// 2 g muB / h of 87Rb, Hz/nT, times the coil constant, nT/A.
const SLOPE: f64 = 13.99167 * 118_630.0;

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

fn unanswered(reason: &str) -> Answer {
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

/// Numbers between -1 and 1 that look like noise and are the same each time.
fn noise(seed: u64) -> f64 {
    let mut state = seed.wrapping_add(1).wrapping_mul(0x9e37_79b9_7f4a_7c15);
    state ^= state >> 29;
    state = state.wrapping_mul(0xbf58_476d_1ce4_e5b9);
    state ^= state >> 32;
    (state >> 11) as f64 / (1u64 << 52) as f64 - 1.0
}

fn law(current: f64) -> f64 {
    SLOPE * (current - 1.04e-3)
}

fn point(current: f64, window: (f64, f64), seed: u64) -> PicturePoint {
    let expected = law(current);
    let centre = expected + 40.0 * noise(seed);
    let detuning: Vec<f64> = (0..200)
        .map(|step| window.0 + (window.1 - window.0) * f64::from(step) / 199.0)
        .collect();
    let peak = |hertz: &f64| {
        let offset = (hertz - centre) / 6_000.0;
        0.62 + 0.06 / (1.0 + offset * offset)
    };
    let signal = detuning
        .iter()
        .enumerate()
        .map(|(index, hertz)| peak(hertz) + 0.002 * noise(seed * 1000 + index as u64));
    let signal = signal.collect();
    PicturePoint {
        current,
        centre: Some((centre, 25.0)),
        used: true,
        expected: Some(expected),
        sweep: Some(super::super::picture::PictureSweep { detuning, signal }),
        ..PicturePoint::default()
    }
}

fn picture(points: Vec<PicturePoint>) -> ScanPicture {
    let line = (0..=80).map(|step| -20e-3 + 0.5e-3 * f64::from(step));
    ScanPicture {
        title: "Coil constant and residual field".into(),
        points,
        field_line: line.map(|current| (current, law(current))).collect(),
        answer: answer(),
    }
}

fn common() -> Vec<PicturePoint> {
    let points = (0..41u64).map(|step| point(-20e-3 + 1e-3 * step as f64, (-150e3, 150e3), step));
    points.collect()
}

/// Draws, checks what must hold for every drawing and keeps the picture where asked.
fn drawn(name: &str, picture: &ScanPicture) -> String {
    let svg = figure(picture);
    let tree = roxmltree::Document::parse(&svg).unwrap();
    assert!(
        !svg.contains("NaN") && !svg.contains("inf\"") && !svg.contains("inf "),
        "{name}"
    );
    let texts: Vec<_> = tree
        .descendants()
        .filter(|node| node.has_tag_name("text"))
        .map(|node| node.text().unwrap_or_default().to_owned())
        .collect();
    for label in [
        "coil current (mA)",
        "two-photon detuning (kHz)",
        "coil constant",
    ] {
        assert!(texts.iter().any(|text| text == label), "{name}: {label}");
    }
    assert!(
        texts.iter().any(|text| text.starts_with("residual (")),
        "{name}"
    );
    nothing_cut_off(name, &tree);
    let bytes = png(&svg, 1200).unwrap();
    if let Ok(folder) = std::env::var("DARKLINE_FIGURES") {
        std::fs::write(format!("{folder}/{name}.png"), &bytes).unwrap();
        std::fs::write(format!("{folder}/{name}.svg"), &svg).unwrap();
    }
    svg
}

/// Every text lies inside the drawing, and no two level texts overlap.
fn nothing_cut_off(name: &str, tree: &roxmltree::Document) {
    let height: f64 = tree
        .root_element()
        .attribute("height")
        .unwrap()
        .parse()
        .unwrap();
    let mut boxes: Vec<(f64, f64, f64, f64, String)> = Vec::new();
    for node in tree.descendants().filter(|node| node.has_tag_name("text")) {
        let number = |key| {
            node.attribute(key)
                .and_then(|text| text.parse::<f64>().ok())
        };
        let (Some(x), Some(y), Some(size)) = (number("x"), number("y"), number("font-size")) else {
            continue;
        };
        let text = node.text().unwrap_or_default();
        let bold = node.attribute("font-weight").is_some();
        let pen = Pen {
            bold,
            ..Pen::new(size, Anchor::Start)
        };
        let width = text_width(text, pen);
        let left = match node.attribute("text-anchor") {
            Some("middle") => x - width / 2.0,
            Some("end") => x - width,
            _ => x,
        };
        let here = (left, left + width, y - 0.75 * size, y, text.to_owned());
        assert!(
            here.0 >= 0.0 && here.1 <= WIDTH && here.2 >= 0.0,
            "{name}: {here:?}"
        );
        assert!(y + 0.25 * size <= height, "{name}: {here:?}");
        for other in &boxes {
            let apart =
                here.0 >= other.1 || here.1 <= other.0 || here.2 >= other.3 || here.3 <= other.2;
            assert!(apart, "{name}: {here:?} over {other:?}");
        }
        boxes.push(here);
    }
}

fn count(svg: &str, pattern: &str) -> usize {
    svg.matches(pattern).count()
}

#[test]
fn a_good_scan_has_every_part() {
    let mut points = common();
    points[7].flagged = true;
    points[7].used = false;
    points[7].centre = Some((law(points[7].current) + 900.0, 60.0));
    points[30].used = false;
    let svg = drawn("good", &picture(points));
    for text in [
        "118.630 ±\u{a0}0.041 nT/mA",
        "&lt; 35 nT\u{a0}(95 %)",
        "including light shift",
        "mean signal (V)",
        "residual (Hz)",
    ] {
        assert!(svg.contains(text), "{text}");
    }
    assert_eq!(count(&svg, "class=\"scatter-band\""), 1);
    assert_eq!(count(&svg, "class=\"field-law\""), 1);
    assert_eq!(
        count(&svg, "class=\"beyond\""),
        1,
        "the flagged one is far off"
    );
    assert_eq!(
        count(&svg, "<circle"),
        40 + 40 + 2,
        "map, residuals, legend"
    );
    assert!(svg.len() < 600_000, "{} bytes", svg.len());
}

#[test]
fn order_of_the_points_does_not_matter() {
    let mut shuffled = common();
    shuffled.sort_by_key(|point| (point.current * 1e6) as i64 * 7919 % 1013);
    assert_ne!(shuffled, common());
    assert_eq!(figure(&picture(shuffled)), figure(&picture(common())));
}

#[test]
fn windows_that_follow_the_line_are_drawn_at_their_own_range() {
    let points = (0..41u64).map(|step| {
        let current = -20e-3 + 1e-3 * step as f64;
        point(current, (law(current) - 40e3, law(current) + 40e3), step)
    });
    drawn("following", &picture(points.collect()));
}

#[test]
fn uneven_steps_and_gaps() {
    let currents = [
        -20e-3, -19e-3, -5e-3, -1e-3, -0.5e-3, 0.0, 0.2e-3, 0.4e-3, 1e-3, 5e-3, 18e-3,
    ];
    let points = currents.iter().enumerate();
    let points = points.map(|(step, current)| point(*current, (-80e3, 80e3), step as u64));
    drawn("uneven", &picture(points.collect()));
}

#[test]
fn a_single_point() {
    let mut picture = picture(vec![point(5e-3, (-50e3, 50e3), 3)]);
    picture.field_line.clear();
    picture.answer = unanswered("one point cannot tell a slope from an offset");
    let svg = drawn("single", &picture);
    // The residual is smaller than its error bar of 25 Hz, which is still seen whole, with both caps.
    let pattern = r#"stroke-width="1.3" stroke-opacity="1""#;
    let bars: Vec<_> = svg.lines().filter(|line| line.contains(pattern)).collect();
    assert_eq!(bars.len(), 1);
    assert_eq!(count(bars[0], "M"), 3, "{}", bars[0]);
}

#[test]
fn nothing_at_all() {
    let mut picture = picture(Vec::new());
    picture.title = String::new();
    picture.field_line.clear();
    picture.answer = unanswered("no point was recorded");
    let svg = drawn("nothing", &picture);
    assert!(svg.contains("no signal was recorded"));
    assert!(svg.contains("no residuals"));
}

#[test]
fn no_fit_and_all_flagged() {
    let mut points = common();
    for point in &mut points {
        (point.flagged, point.used, point.expected) = (true, false, None);
        if point.current > 0.0 {
            point.centre = None;
        }
    }
    let mut picture = picture(points);
    picture.field_line.clear();
    picture.answer = unanswered(
        "all 41 points are flagged: the laser lock was lost from the first to the last of them, \
         and no point without a flag remains to be fitted",
    );
    let svg = drawn("flagged", &picture);
    assert!(svg.contains("no residuals"));
}

#[test]
fn numbers_that_are_none_or_huge() {
    let mut points = common();
    points[0].current = f64::NAN;
    points[1].centre = Some((f64::NAN, f64::NAN));
    points[2].centre = Some((f64::INFINITY, 1.0));
    points[3].residual = Some(f64::NAN);
    points[4].expected = Some(f64::NEG_INFINITY);
    points[5].centre = Some((law(points[5].current), f64::INFINITY));
    points[6].centre = Some((law(points[6].current), 1e12));
    points[8].residual = Some(1e300);
    if let Some(sweep) = &mut points[9].sweep {
        sweep.signal.fill(f64::NAN);
    }
    if let Some(sweep) = &mut points[10].sweep {
        (sweep.detuning, sweep.signal) = (vec![0.0], vec![0.65]);
    }
    points[11].sweep = Some(Default::default());
    let mut picture = picture(points);
    picture.field_line[40] = (f64::NAN, f64::NAN);
    picture.answer.coil_constant.value = Some(f64::NAN);
    picture.answer.chi2 = Some(f64::NAN);
    picture.title = "<script> & \u{1} \"quotes\", a title that is far too long for one line of the figure \
                     and goes on and on until it must be cut off at the end of its second line, here or later"
        .into();
    drawn("odd", &picture);
}

#[test]
fn a_lost_lock_does_not_bleach_the_map() {
    let mut points = common();
    for point in &mut points[12..15] {
        (point.flagged, point.used) = (true, false);
        point.centre = None;
        if let Some(sweep) = &mut point.sweep {
            sweep.signal.iter_mut().for_each(|signal| *signal *= 0.1);
        }
    }
    let mut picture = picture(points);
    picture.answer.coil_constant.systematic = Some(0.12);
    picture.answer.transverse_field = Stated::missing(
        "the five peaks of the tilted field overlap at this linewidth",
        "nT",
    );
    drawn("lost-lock", &picture);
}

#[test]
fn many_points_and_repeats_stay_small() {
    let points = (0..20_000u64).map(|step| {
        let current = -20e-3 + 2e-6 * (step % 20_000) as f64;
        let mut point = point(current, (-80e3, 80e3), step);
        let sweep = point.sweep.take().unwrap_or_default();
        point.sweep = Some(crate::report::PictureSweep::decimated(
            &sweep.detuning,
            &sweep.signal,
            50,
        ));
        point
    });
    let mut points: Vec<_> = points.collect();
    points.extend((0..50).map(|step| point(0.0, (-80e3, 80e3), step)));
    let svg = drawn("many", &picture(points));
    assert!(svg.len() < 3_000_000, "{} bytes", svg.len());
}
