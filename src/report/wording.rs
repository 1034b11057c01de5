//! Words a number as a physicist states it: value, uncertainty and unit, a limit, or the reason why there is none.
//! Owns rounding and the short phrases; never lays anything out.

use darkline_core::answer::Stated;

/// A statement in words.
#[derive(Debug, Clone, PartialEq)]
pub struct Worded {
    /// `118.630 ± 0.041 nT/mA`, `< 35 nT (95 %)` or `cannot tell: reason`.
    pub text: String,
    /// Where or how it holds, such as `at -2.0 mA`.
    pub qualifier: Option<String>,
    /// Whether `text` holds a number.
    pub known: bool,
}

/// The statement in words; a value that is not finite counts as none.
pub fn worded(stated: &Stated) -> Worded {
    let qualifier = stated.qualifier.clone().filter(|text| !text.is_empty());
    let finite = |number: Option<f64>| number.filter(|number| number.is_finite());
    let (text, known) = if let Some(value) = finite(stated.value) {
        (measured(value, stated), true)
    } else if let Some(limit) = finite(stated.upper_limit) {
        let limit = with_unit(&rounded_up(limit), &stated.unit);
        (format!("< {limit} (95 %)"), true)
    } else {
        (missing(stated), false)
    };
    Worded {
        text,
        qualifier,
        known,
    }
}

/// Value and standard uncertainties to one place: two significant digits of the smallest uncertainty
/// (GUM, JCGM 100:2008, 7.2.6). Returns the value and each uncertainty as text; uncertainties that are
/// not finite and positive are left out.
pub fn digits(value: f64, sigmas: &[f64]) -> (String, Vec<String>) {
    let sigmas = sigmas.iter().copied();
    let sigmas: Vec<f64> = sigmas.filter(|s| s.is_finite() && *s > 0.0).collect();
    let smallest = sigmas.iter().copied().fold(f64::INFINITY, f64::min);
    if !smallest.is_finite() {
        return (significant(value, 6), Vec::new());
    }
    // Rounding 0.0996 to two digits gives 0.10: the place is taken after rounding.
    let place = decade(rounded_to(smallest, 2)) - 1;
    // Beyond 15 significant digits an f64 would print noise.
    let place = place.max(decade(value) - 14);
    let at_place = |number: f64| {
        if place <= 0 {
            format!("{number:.*}", place.unsigned_abs() as usize)
        } else {
            let grain = 10f64.powi(place);
            format!("{:.0}", (number / grain).round() * grain)
        }
    };
    let printed = sigmas.iter().map(|sigma| {
        let text = at_place(*sigma);
        let lost = text.parse() == Ok(0.0);
        if lost { format!("{sigma:.1e}") } else { text }
    });
    let printed = printed.collect();
    (positive_zero(at_place(value)), printed)
}

/// At most `count` significant digits, without trailing zeros; a power of ten where it is very large or small.
pub fn significant(value: f64, count: usize) -> String {
    let rounded = rounded_to(value, count);
    if rounded != 0.0 && !(1e-5..1e9).contains(&rounded.abs()) {
        format!("{rounded:e}")
    } else {
        format!("{}", rounded + 0.0)
    }
}

fn measured(value: f64, stated: &Stated) -> String {
    let usable = |sigma: Option<f64>| sigma.filter(|s| s.is_finite() && *s > 0.0);
    let (statistical, systematic) = (usable(stated.sigma), usable(stated.systematic));
    let sigmas: Vec<f64> = statistical.into_iter().chain(systematic).collect();
    let (number, sigmas) = digits(value, &sigmas);
    let text = match (&sigmas[..], statistical, systematic) {
        ([first, second], _, _) => format!("{number} ± {first} (stat) ± {second} (syst)"),
        ([only], None, Some(_)) => format!("{number} ± {only} (syst)"),
        ([only], _, _) => format!("{number} ± {only}"),
        _ => number,
    };
    let text = with_unit(&text, &stated.unit);
    if statistical.is_none() {
        return format!("{text} (statistical uncertainty unknown)");
    }
    text
}

fn missing(stated: &Stated) -> String {
    // A number that is none must not borrow a reason that was written for a number.
    let reason = match (&stated.reason, stated.value.or(stated.upper_limit)) {
        (_, Some(_)) => "the result is not a finite number",
        (Some(reason), None) if !reason.is_empty() => reason.as_str(),
        _ => "no reason was given",
    };
    if reason.starts_with("cannot tell") {
        return reason.to_owned();
    }
    format!("cannot tell: {reason}")
}

fn with_unit(number: &str, unit: &str) -> String {
    format!("{number} {unit}").trim_end().to_owned()
}

/// An upper limit to two significant digits, rounded up: a limit rounded down would promise too much.
fn rounded_up(limit: f64) -> String {
    if limit <= 0.0 {
        return significant(limit, 2);
    }
    let place = decade(limit) - 1;
    // Through text, so that 35 stays 35 although 35 / 10^0 may come out a hair above.
    let steps: f64 = format!("{:.9}", limit / 10f64.powi(place))
        .parse()
        .unwrap_or(limit);
    let up = format!("{}e{place}", steps.ceil());
    significant(up.parse().unwrap_or(limit), 2)
}

fn rounded_to(value: f64, count: usize) -> f64 {
    let text = format!("{:.*e}", count.saturating_sub(1), value);
    text.parse().unwrap_or(value)
}

/// Power of ten of the leading digit; 0 for zero.
fn decade(value: f64) -> i32 {
    if value == 0.0 || !value.is_finite() {
        return 0;
    }
    value.abs().log10().floor() as i32
}

/// "-0.00" would puzzle a reader.
fn positive_zero(text: String) -> String {
    let zero = text.starts_with('-') && !text.contains(|sign: char| ('1'..='9').contains(&sign));
    if zero { text[1..].to_owned() } else { text }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn text(stated: &Stated) -> String {
        worded(stated).text
    }

    #[test]
    fn two_digits_of_the_uncertainty_and_the_value_to_the_same_place() {
        // JCGM 100:2008, 7.2.6 (recalled): "if y = 10.057 62 ohm with uc(y) = 27 mohm, y should be rounded to 10.058 ohm".
        assert_eq!(
            digits(10.05762, &[0.027]),
            ("10.058".into(), vec!["0.027".into()])
        );
        // JCGM 100:2008, 7.2.2 (recalled): m = 100.021 47 g with u = 0.35 mg.
        assert_eq!(digits(100.02147, &[0.00035]).0, "100.02147");
        let case = |value, sigma| text(&Stated::measured(value, sigma, "nT"));
        assert_eq!(case(118.6304, 0.0412), "118.630 ± 0.041 nT");
        assert_eq!(case(1.23456, 0.0996), "1.23 ± 0.10 nT");
        assert_eq!(case(56789.0, 1234.0), "56800 ± 1200 nT");
        assert_eq!(case(12345.6, 99.6), "12350 ± 100 nT");
        assert_eq!(case(-0.0001, 0.5), "0.00 ± 0.50 nT");
        assert_eq!(case(0.0, 1e-3), "0.0000 ± 0.0010 nT");
    }

    #[test]
    fn a_systematic_part_is_named() {
        let mut stated = Stated::measured(118.6304, 0.0412, "nT/mA");
        stated.systematic = Some(0.12);
        assert_eq!(text(&stated), "118.630 ± 0.041 (stat) ± 0.120 (syst) nT/mA");
        stated.sigma = None;
        assert_eq!(
            text(&stated),
            "118.63 ± 0.12 (syst) nT/mA (statistical uncertainty unknown)"
        );
    }

    #[test]
    fn limits_are_rounded_up() {
        let case = |limit| text(&Stated::limit(limit, "nT"));
        assert_eq!(case(34.2), "< 35 nT (95 %)");
        assert_eq!(case(35.0), "< 35 nT (95 %)");
        assert_eq!(case(0.0701), "< 0.071 nT (95 %)");
        assert_eq!(case(991.0), "< 1000 nT (95 %)");
    }

    #[test]
    fn odd_numbers_are_worded_not_printed() {
        let case = |value, sigma| text(&Stated::measured(value, sigma, "nT"));
        assert_eq!(
            case(f64::NAN, 1.0),
            "cannot tell: the result is not a finite number"
        );
        assert_eq!(
            case(1.5, f64::NAN),
            "1.5 nT (statistical uncertainty unknown)"
        );
        assert_eq!(case(1.5, 0.0), "1.5 nT (statistical uncertainty unknown)");
        assert_eq!(
            case(1.5e12, f64::INFINITY),
            "1.5e12 nT (statistical uncertainty unknown)"
        );
        assert_eq!(case(123.456, 1e-20), "123.456000000000 ± 1.0e-20 nT");
        assert_eq!(text(&Stated::default()), "cannot tell: no reason was given");
        assert_eq!(
            text(&Stated::missing("no peak", "nT")),
            "cannot tell: no peak"
        );
        assert_eq!(text(&Stated::missing("cannot tell", "nT")), "cannot tell");
    }
}
