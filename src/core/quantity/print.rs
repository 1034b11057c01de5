//! Value to text: with a sensible prefix, and with as many digits as the uncertainty bears.

use super::unit::{Dimension, Unit};

/// A value as a person writes it: "20 mA", "60 degC", "118 nT/mA". Rounded to 9 significant digits.
pub fn display(value: f64, dimension: Dimension) -> String {
    if dimension == Dimension::Switch {
        return if value == 0.0 { "off" } else { "on" }.to_owned();
    }
    display_in(value, unit_for(value.abs(), dimension))
}

/// A value in the unit named, "118 nT/mA"; in SI with the unit's text behind where it is unknown.
pub fn display_in(value: f64, unit: &str) -> String {
    let number = significant(in_unit(value, unit), 9);
    if unit.is_empty() {
        number
    } else {
        format!("{number} {unit}")
    }
}

/// Value and standard uncertainty as the GUM (JCGM 100, 7.2.6) has it: two digits of the uncertainty,
/// the value to the same place: "118.630 ± 0.044 nT/mA".
pub fn display_with_sigma(value: f64, sigma: f64, dimension: Dimension) -> String {
    if !(sigma.is_finite() && sigma > 0.0 && value.is_finite()) {
        return display(value, dimension);
    }
    let unit = unit_for_both(value, sigma, dimension);
    let (number, width) = (in_unit(value, unit), sigma * slope(unit));
    let (number, width) = digits(number, width);
    let text = format!("{number} \u{b1} {width} {unit}");
    text.trim_end().to_owned()
}

/// Both numbers with as many decimals as two significant digits of the second need.
fn digits(number: f64, sigma: f64) -> (String, String) {
    // Rounding 0.0996 to two digits gives 0.10: the exponent is taken after rounding.
    let rounded: f64 = format!("{sigma:.1e}").parse().unwrap_or(sigma);
    let place = 1 - rounded.abs().log10().floor() as i32;
    if place >= 0 {
        let decimals = place as usize;
        (
            format!("{number:.decimals$}"),
            format!("{rounded:.decimals$}"),
        )
    } else {
        let grain = 10f64.powi(-place);
        (
            format!("{:.0}", (number / grain).round() * grain),
            format!("{rounded:.0}"),
        )
    }
}

fn slope(unit: &str) -> f64 {
    Unit::find(unit).map_or(1.0, |unit| 1.0 / unit.factor)
}

fn in_unit(value: f64, unit: &str) -> f64 {
    match Unit::find(unit) {
        Some(unit) => (value - unit.offset) / unit.factor,
        None => value,
    }
}

/// At most `count` significant digits, without trailing zeros.
fn significant(value: f64, count: usize) -> String {
    let rounded: f64 = format!("{:.*e}", count.saturating_sub(1), value)
        .parse()
        .unwrap_or(value);
    if rounded != 0.0 && !(1e-6..1e15).contains(&rounded.abs()) {
        format!("{rounded:e}")
    } else {
        // "-0" would puzzle a reader.
        format!("{}", rounded + 0.0)
    }
}

/// Units of a dimension from small to large, each with its size in SI.
fn ladder(dimension: Dimension) -> &'static [(&'static str, f64)] {
    match dimension {
        Dimension::Current => &[("nA", 1e-9), ("uA", 1e-6), ("mA", 1e-3), ("A", 1.0)],
        Dimension::CurrentRate => &[("uA/s", 1e-6), ("mA/s", 1e-3), ("A/s", 1.0)],
        Dimension::Frequency => &[
            ("mHz", 1e-3),
            ("Hz", 1.0),
            ("kHz", 1e3),
            ("MHz", 1e6),
            ("GHz", 1e9),
        ],
        Dimension::FrequencyRate => &[("Hz/s", 1.0), ("kHz/s", 1e3), ("MHz/s", 1e6)],
        Dimension::Temperature => &[("degC", 1.0)],
        Dimension::TemperatureDifference => &[("uK", 1e-6), ("mK", 1e-3), ("K", 1.0)],
        Dimension::TemperatureRate => &[("mK/s", 1e-3), ("K/s", 1.0)],
        Dimension::Voltage => &[("uV", 1e-6), ("mV", 1e-3), ("V", 1.0)],
        Dimension::VoltageRate => &[("mV/s", 1e-3), ("V/s", 1.0)],
        Dimension::Time => &[
            ("us", 1e-6),
            ("ms", 1e-3),
            ("s", 1.0),
            ("min", 60.0),
            ("h", 3600.0),
        ],
        Dimension::Field => &[
            ("pT", 1e-12),
            ("nT", 1e-9),
            ("uT", 1e-6),
            ("mT", 1e-3),
            ("T", 1.0),
        ],
        Dimension::FieldRate => &[("nT/s", 1e-9), ("uT/s", 1e-6), ("T/s", 1.0)],
        Dimension::FieldPerCurrent => &[("nT/mA", 1e-6)],
        Dimension::FrequencyPerField => &[("Hz/nT", 1e9)],
        Dimension::Level => &[("dBm", 1.0)],
        Dimension::LevelDifference => &[("dB", 1.0)],
        Dimension::LevelRate => &[("dB/s", 1.0)],
        Dimension::Power => &[("nW", 1e-9), ("uW", 1e-6), ("mW", 1e-3), ("W", 1.0)],
        Dimension::PowerRate => &[("uW/s", 1e-6), ("mW/s", 1e-3), ("W/s", 1.0)],
        Dimension::Ratio => &[("ppm", 1e-6), ("", 1.0)],
        Dimension::RatioRate => &[("ppm/s", 1e-6), ("%/s", 1e-2)],
        Dimension::Length => &[("um", 1e-6), ("mm", 1e-3), ("m", 1.0)],
        Dimension::Pressure => &[("Pa", 1.0), ("kPa", 1e3)],
        Dimension::Switch => &[("", 1.0)],
    }
}

/// The largest unit that leaves at least 1 before the point; zero takes the base unit.
fn unit_for(size: f64, dimension: Dimension) -> &'static str {
    let ladder = ladder(dimension);
    if size == 0.0 {
        let base = ladder.iter().find(|(_, scale)| *scale == 1.0);
        return base.or(ladder.first()).map_or("", |(unit, _)| *unit);
    }
    // A hair below 1 (0.9999999999 mA) still prints as 1 of the larger unit.
    let fits = |unit: &str, scale: f64| size >= least(unit, scale) * (1.0 - 1e-9);
    let largest = ladder.iter().rev().find(|(unit, scale)| fits(unit, *scale));
    largest.or(ladder.first()).map_or("", |(unit, _)| *unit)
}

/// From which size on a unit is used: 90 s are not 1.5 min, and 0.5 % are 0.005, not 5000 ppm.
fn least(unit: &str, scale: f64) -> f64 {
    match unit {
        "min" => 600.0,
        "h" => 36_000.0,
        "" => 1e-3,
        _ => scale,
    }
}

/// As [`unit_for`], but large enough that two digits of the uncertainty end at or behind the point.
fn unit_for_both(value: f64, sigma: f64, dimension: Dimension) -> &'static str {
    let by_value = unit_for(value.abs().max(sigma), dimension);
    let coarse = |unit: &str| sigma * slope(unit) >= 99.5;
    if !coarse(by_value) {
        return by_value;
    }
    let larger = ladder(dimension).iter().find(|(unit, _)| !coarse(unit));
    larger.map_or(by_value, |(unit, _)| *unit)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn values_print_with_a_sensible_prefix() {
        let cases = [
            (0.02, Dimension::Current, "20 mA"),
            (-1e-6, Dimension::Current, "-1 uA"),
            (80e6, Dimension::Frequency, "80 MHz"),
            (80.0165e6, Dimension::Frequency, "80.0165 MHz"),
            (333.15, Dimension::Temperature, "60 degC"),
            (0.02, Dimension::TemperatureDifference, "20 mK"),
            (1.18e-4, Dimension::FieldPerCurrent, "118 nT/mA"),
            (13.99167e9, Dimension::FrequencyPerField, "13.99167 Hz/nT"),
            (-3.0, Dimension::Level, "-3 dBm"),
            (90.0, Dimension::Time, "90 s"),
            (7200.0, Dimension::Time, "120 min"),
            (0.04, Dimension::Time, "40 ms"),
            (5e-4, Dimension::Ratio, "500 ppm"),
            (0.25, Dimension::Ratio, "0.25"),
            (0.0, Dimension::Current, "0 A"),
            (-0.0, Dimension::Current, "0 A"),
            (1.0, Dimension::Switch, "on"),
        ];
        for (value, dimension, text) in cases {
            assert_eq!(display(value, dimension), text);
        }
    }

    // JCGM 100:2008, 7.2.6: two significant digits of the uncertainty suffice, and the estimate is
    // rounded to be consistent with it; its example (recalled): 10,057 62 ohm with 27 mohm is 10,058 ohm.
    #[test]
    fn digits_follow_the_uncertainty() {
        let cases = [
            (
                118.6304e-6,
                0.0441e-6,
                Dimension::FieldPerCurrent,
                "118.630 \u{b1} 0.044 nT/mA",
            ),
            (212.34e-9, 3.04e-9, Dimension::Field, "212.3 \u{b1} 3.0 nT"),
            (
                12_345.0,
                1234.0,
                Dimension::Frequency,
                "12.3 \u{b1} 1.2 kHz",
            ),
            (500.0, 200.0, Dimension::Frequency, "0.50 \u{b1} 0.20 kHz"),
            (1.0, 0.0996, Dimension::Voltage, "1.00 \u{b1} 0.10 V"),
            (
                333.15,
                0.02,
                Dimension::Temperature,
                "60.000 \u{b1} 0.020 degC",
            ),
            (
                0.012_34,
                0.000_56,
                Dimension::Ratio,
                "0.01234 \u{b1} 0.00056",
            ),
            (0.0, 2.5e-9, Dimension::Field, "0.0 \u{b1} 2.5 nT"),
        ];
        for (value, sigma, dimension, text) in cases {
            assert_eq!(display_with_sigma(value, sigma, dimension), text);
        }
        assert_eq!(
            display_with_sigma(0.02, f64::NAN, Dimension::Current),
            "20 mA"
        );
    }

    #[test]
    fn a_unit_can_be_asked_for() {
        assert_eq!(display_in(118e-6, "nT/mA"), "118 nT/mA");
        assert_eq!(display_in(118e-6, "uT/A"), "118 uT/A");
        assert_eq!(display_in(333.15, "K"), "333.15 K");
    }
}
