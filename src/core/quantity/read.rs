//! Text to value: "20 mA", "-20 mA .. 20 mA", "13.99 Hz/nT", "60 degC", "on".

use super::unit::{Dimension, Unit};

/// Why a text is no value of the wanted dimension.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum QuantityError {
    /// Nothing there.
    #[error("an empty text is no value; expected {} ({})", .0.name(), .0.accepted())]
    Empty(Dimension),
    /// No number at the start.
    #[error("`{text}` does not begin with a number; expected {} ({})", .wanted.name(), .wanted.accepted())]
    NoNumber {
        /// What was written.
        text: String,
        /// What was expected.
        wanted: Dimension,
    },
    /// NaN, infinity, or beyond f64.
    #[error("`{0}` is not a finite number")]
    NotFinite(String),
    /// A number without its unit.
    #[error("`{text}` has no unit; expected {} ({})", .wanted.name(), .wanted.accepted())]
    NoUnit {
        /// What was written.
        text: String,
        /// What was expected.
        wanted: Dimension,
    },
    /// A unit that nobody knows.
    #[error("unknown unit `{unit}`; expected {} ({})", .wanted.name(), .wanted.accepted())]
    UnknownUnit {
        /// The unit as written.
        unit: String,
        /// What was expected.
        wanted: Dimension,
    },
    /// A unit of another dimension.
    #[error("`{unit}` measures {}; expected {} ({})", .found.name(), .wanted.name(), .wanted.accepted())]
    WrongUnit {
        /// The unit as written.
        unit: String,
        /// What it measures.
        found: Dimension,
        /// What was expected.
        wanted: Dimension,
    },
    /// A temperature difference in degC.
    #[error("a temperature difference is written in K or mK, not in `{0}`")]
    CelsiusDifference(String),
    /// Below absolute zero.
    #[error("`{0}` lies below absolute zero")]
    BelowZeroKelvin(String),
    /// A range without "..".
    #[error("`{text}` is no range; write `low .. high`, each with its unit ({})", .wanted.accepted())]
    NoRange {
        /// What was written.
        text: String,
        /// What was expected.
        wanted: Dimension,
    },
    /// A range whose low end is not below its high end.
    #[error("the range `{0}` is reversed or empty; write the lower end first")]
    Reversed(String),
    /// Not "on" or "off".
    #[error("`{0}` is no switch position; write \"on\" or \"off\"")]
    NoSwitch(String),
    /// No unit known at all, where any dimension would do.
    #[error("`{0}` is no number with a known unit")]
    NoQuantity(String),
}

/// Reads a value of one dimension, in SI base units (dBm for a level).
///
/// # Errors
/// Where number or unit is missing, unknown, of another dimension, or not finite.
pub fn parse(text: &str, wanted: Dimension) -> Result<f64, QuantityError> {
    let text = text.trim();
    if text.is_empty() {
        return Err(QuantityError::Empty(wanted));
    }
    if wanted == Dimension::Switch {
        return parse_switch(text).map(f64::from);
    }
    let (number, unit_text) = split(text, wanted)?;
    if unit_text.is_empty() {
        return if wanted == Dimension::Ratio {
            Ok(number)
        } else {
            Err(QuantityError::NoUnit {
                text: text.to_owned(),
                wanted,
            })
        };
    }
    let unit = Unit::find(unit_text).ok_or_else(|| QuantityError::UnknownUnit {
        unit: unit_text.to_owned(),
        wanted,
    })?;
    check_dimension(unit, unit_text, wanted)?;
    let value = in_si(number, unit);
    if !value.is_finite() {
        return Err(QuantityError::NotFinite(text.to_owned()));
    }
    if wanted == Dimension::Temperature && value < 0.0 {
        return Err(QuantityError::BelowZeroKelvin(text.to_owned()));
    }
    Ok(value)
}

/// Reads a value of whatever dimension its unit has.
///
/// # Errors
/// Where there is no finite number with a known unit; a plain number is a ratio.
pub fn parse_any(text: &str) -> Result<(f64, Dimension), QuantityError> {
    let text = text.trim();
    let (_, unit_text) = split(text, Dimension::Ratio).map_err(|e| match e {
        QuantityError::NotFinite(_) => e,
        _ => QuantityError::NoQuantity(text.to_owned()),
    })?;
    let dimension = match unit_text {
        "" => Dimension::Ratio,
        _ => {
            Unit::find(unit_text)
                .ok_or_else(|| QuantityError::NoQuantity(text.to_owned()))?
                .dimension
        }
    };
    Ok((parse(text, dimension)?, dimension))
}

/// Reads "low .. high", both inclusive.
///
/// # Errors
/// As [`parse`], and where ".." is missing or the low end is not below the high end.
pub fn parse_range(text: &str, wanted: Dimension) -> Result<(f64, f64), QuantityError> {
    let Some((low, high)) = text.split_once("..") else {
        return Err(QuantityError::NoRange {
            text: text.trim().to_owned(),
            wanted,
        });
    };
    let (low, high) = (parse(low, wanted)?, parse(high, wanted)?);
    if low < high {
        Ok((low, high))
    } else {
        Err(QuantityError::Reversed(text.trim().to_owned()))
    }
}

/// Reads "on" or "off".
///
/// # Errors
/// Where it is neither.
pub fn parse_switch(text: &str) -> Result<bool, QuantityError> {
    match text.trim() {
        "on" => Ok(true),
        "off" => Ok(false),
        other => Err(QuantityError::NoSwitch(other.to_owned())),
    }
}

/// Splits into a finite number and the unit's text, which may be empty.
fn split(text: &str, wanted: Dimension) -> Result<(f64, &str), QuantityError> {
    // "1e3 mA": an "e" belongs to the number only where digits follow it.
    let bytes = text.as_bytes();
    let mut end = 0;
    while let Some(byte) = bytes.get(end) {
        let follows = |at: usize| bytes.get(at).is_some_and(u8::is_ascii_digit);
        let sign = |at: usize| matches!(bytes.get(at), Some(b'+' | b'-'));
        match byte {
            b'0'..=b'9' | b'.' => end += 1,
            b'+' | b'-' if end == 0 => end += 1,
            b'e' | b'E' if end > 0 && follows(end + 1) => end += 1,
            b'e' | b'E' if end > 0 && sign(end + 1) && follows(end + 2) => end += 2,
            _ => break,
        }
    }
    let (number, unit) = text.split_at(end);
    match number.parse::<f64>() {
        Ok(value) if value.is_finite() => Ok((value, unit.trim())),
        Ok(_) => Err(QuantityError::NotFinite(text.to_owned())),
        Err(_) if names_no_finite(text) => Err(QuantityError::NotFinite(text.to_owned())),
        Err(_) => Err(QuantityError::NoNumber {
            text: text.to_owned(),
            wanted,
        }),
    }
}

fn names_no_finite(text: &str) -> bool {
    let word = text
        .trim_start_matches(['+', '-'])
        .split_whitespace()
        .next()
        .unwrap_or_default()
        .to_ascii_lowercase();
    matches!(word.as_str(), "nan" | "inf" | "infinity")
}

fn check_dimension(unit: Unit, text: &str, wanted: Dimension) -> Result<(), QuantityError> {
    let difference = wanted == Dimension::TemperatureDifference;
    if difference && unit.dimension == Dimension::Temperature {
        return if unit.offset == 0.0 {
            Ok(())
        } else {
            Err(QuantityError::CelsiusDifference(text.to_owned()))
        };
    }
    if unit.dimension == wanted {
        return Ok(());
    }
    Err(QuantityError::WrongUnit {
        unit: text.to_owned(),
        found: unit.dimension,
        wanted,
    })
}

/// Dividing by the reciprocal keeps "20 mA" the f64 nearest to 0.02 where multiplying would not.
fn in_si(number: f64, unit: Unit) -> f64 {
    let reciprocal = 1.0 / unit.factor;
    if unit.factor < 1.0 && reciprocal.round() == reciprocal {
        number / reciprocal + unit.offset
    } else {
        number * unit.factor + unit.offset
    }
}

#[cfg(test)]
mod tests {
    use super::super::display;
    use super::*;
    use proptest::prelude::*;

    #[test]
    fn values_are_read_in_si() {
        let cases = [
            ("20 mA", Dimension::Current, 0.02),
            ("-20mA", Dimension::Current, -0.02),
            ("1e-3 A", Dimension::Current, 1e-3),
            ("5 \u{b5}A", Dimension::Current, 5e-6),
            ("5 \u{3bc}A", Dimension::Current, 5e-6),
            ("300 kHz", Dimension::Frequency, 300e3),
            ("13.99 Hz/nT", Dimension::FrequencyPerField, 13.99e9),
            ("118 nT/mA", Dimension::FieldPerCurrent, 118e-6),
            ("1.18 G/A", Dimension::FieldPerCurrent, 118e-6),
            ("3 mG", Dimension::Field, 300e-9),
            ("60 degC", Dimension::Temperature, 333.15),
            ("333.15 K", Dimension::Temperature, 333.15),
            ("20 mK", Dimension::TemperatureDifference, 0.02),
            ("30 mK/min", Dimension::TemperatureRate, 0.5e-3),
            ("200 mA/s", Dimension::CurrentRate, 0.2),
            ("-3 dBm", Dimension::Level, -3.0),
            ("10 min", Dimension::Time, 600.0),
            ("2 h", Dimension::Time, 7200.0),
            ("0.25", Dimension::Ratio, 0.25),
            ("25 %", Dimension::Ratio, 0.25),
            ("100 ppm", Dimension::Ratio, 1e-4),
            ("25 mm", Dimension::Length, 0.025),
            ("1 Torr", Dimension::Pressure, 133.322_368_421),
        ];
        for (text, dimension, value) in cases {
            let read = parse(text, dimension).unwrap();
            assert!(
                (read - value).abs() <= 1e-11 * value.abs(),
                "{text}: {read}"
            );
        }
        assert_eq!(parse("20 mA", Dimension::Current), Ok(0.02));
        assert_eq!(parse_any("13 nT"), Ok((13e-9, Dimension::Field)));
        assert_eq!(parse_any("0.5"), Ok((0.5, Dimension::Ratio)));
        assert_eq!(
            parse_range("-20 mA .. 20 mA", Dimension::Current),
            Ok((-0.02, 0.02))
        );
        assert_eq!(parse_switch("on"), Ok(true));
    }

    #[test]
    fn wrong_texts_are_told_apart() {
        use QuantityError as E;
        let current = |text| parse(text, Dimension::Current).unwrap_err();
        assert!(matches!(current(""), E::Empty(_)));
        assert!(matches!(current("mA"), E::NoNumber { .. }));
        assert!(matches!(current("--5 mA"), E::NoNumber { .. }));
        assert!(matches!(current("NaN mA"), E::NotFinite(_)));
        assert!(matches!(current("-inf A"), E::NotFinite(_)));
        assert!(matches!(current("1e400 A"), E::NotFinite(_)));
        assert!(matches!(current("20"), E::NoUnit { .. }));
        assert!(matches!(current("20 furlong"), E::UnknownUnit { .. }));
        assert!(matches!(
            current("20 mV"),
            E::WrongUnit {
                found: Dimension::Voltage,
                ..
            }
        ));
        assert_eq!(
            current("20 mV").to_string(),
            "`mV` measures a voltage; expected a current (nA, uA, mA, A)"
        );
        let tolerance = parse("0.1 degC", Dimension::TemperatureDifference);
        assert!(matches!(tolerance, Err(E::CelsiusDifference(_))));
        assert!(matches!(
            parse("-1 K", Dimension::Temperature),
            Err(E::BelowZeroKelvin(_))
        ));
        assert!(matches!(
            parse_range("5 mA", Dimension::Current),
            Err(E::NoRange { .. })
        ));
        assert!(matches!(
            parse_range("5 mA .. 5 mA", Dimension::Current),
            Err(E::Reversed(_))
        ));
        assert!(matches!(parse_switch("yes"), Err(E::NoSwitch(_))));
    }

    const DIMENSIONS: [Dimension; 14] = [
        Dimension::Current,
        Dimension::CurrentRate,
        Dimension::Frequency,
        Dimension::TemperatureDifference,
        Dimension::TemperatureRate,
        Dimension::Voltage,
        Dimension::Time,
        Dimension::Field,
        Dimension::FieldPerCurrent,
        Dimension::FrequencyPerField,
        Dimension::Level,
        Dimension::Power,
        Dimension::Ratio,
        Dimension::Pressure,
    ];

    proptest! {
        #[test]
        fn what_is_printed_is_read_back(
            mantissa in -9.99f64..9.99,
            exponent in -12i32..10,
            dimension in prop::sample::select(&DIMENSIONS[..]),
        ) {
            let value = mantissa * 10f64.powi(exponent);
            let text = display(value, dimension);
            let read = parse(&text, dimension).unwrap();
            prop_assert!((read - value).abs() <= 6e-9 * value.abs(), "{} {}", text, read);
        }

        #[test]
        fn any_text_is_read_or_refused(text in ".{0,12}") {
            for dimension in DIMENSIONS {
                let _ = parse(&text, dimension);
                let _ = parse_range(&text, dimension);
            }
            let _ = parse_any(&text);
        }
    }
}
