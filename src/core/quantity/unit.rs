//! Dimensions and units: which unit texts belong to which dimension, and their factor to SI.

use serde::{Deserialize, Serialize};

/// What kind of thing a value is. Its comment names the unit that values inside the program have.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord, Hash, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Dimension {
    /// A
    Current,
    /// A/s
    CurrentRate,
    /// Hz
    Frequency,
    /// Hz/s
    FrequencyRate,
    /// K, absolute; degC is converted
    Temperature,
    /// K, a difference or tolerance
    TemperatureDifference,
    /// K/s
    TemperatureRate,
    /// V
    Voltage,
    /// V/s
    VoltageRate,
    /// s
    Time,
    /// T
    Field,
    /// T/s
    FieldRate,
    /// T/A
    FieldPerCurrent,
    /// Hz/T
    FrequencyPerField,
    /// dBm
    Level,
    /// dB, a difference of levels, a gain
    LevelDifference,
    /// dB/s
    LevelRate,
    /// W
    Power,
    /// W/s
    PowerRate,
    /// 1
    Ratio,
    /// 1/s
    RatioRate,
    /// m
    Length,
    /// Pa
    Pressure,
    /// on or off; no number
    Switch,
}

/// One unit of a dimension: value in SI = factor * number + offset.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Unit {
    /// Multiplies the number.
    pub factor: f64,
    /// Added after; not zero for degC alone.
    pub offset: f64,
    /// The dimension the unit measures.
    pub dimension: Dimension,
}

/// SI prefixes that are read; "µ" is both U+00B5 and U+03BC.
const PREFIXES: &[(&str, f64)] = &[
    ("f", 1e-15),
    ("p", 1e-12),
    ("n", 1e-9),
    ("u", 1e-6),
    ("\u{b5}", 1e-6),
    ("\u{3bc}", 1e-6),
    ("m", 1e-3),
    ("k", 1e3),
    ("M", 1e6),
    ("G", 1e9),
    ("T", 1e12),
];

/// Units that take prefixes. 1 G = 1e-4 T exactly; 1 bar = 1e5 Pa exactly (SI brochure, 9th ed.).
const PREFIXED: &[(&str, f64, Dimension)] = &[
    ("A", 1.0, Dimension::Current),
    ("Hz", 1.0, Dimension::Frequency),
    ("K", 1.0, Dimension::Temperature),
    ("V", 1.0, Dimension::Voltage),
    ("s", 1.0, Dimension::Time),
    ("T", 1.0, Dimension::Field),
    ("G", 1e-4, Dimension::Field),
    ("W", 1.0, Dimension::Power),
    ("m", 1.0, Dimension::Length),
    ("Pa", 1.0, Dimension::Pressure),
    ("bar", 1e5, Dimension::Pressure),
];

/// Units without prefix. 1 Torr = 101325/760 Pa exactly (NIST SP 811, appendix B).
const BARE: &[(&str, f64, f64, Dimension)] = &[
    ("degC", 1.0, 273.15, Dimension::Temperature),
    ("\u{b0}C", 1.0, 273.15, Dimension::Temperature),
    ("dBm", 1.0, 0.0, Dimension::Level),
    ("dB", 1.0, 0.0, Dimension::LevelDifference),
    ("min", 60.0, 0.0, Dimension::Time),
    ("h", 3600.0, 0.0, Dimension::Time),
    ("d", 86400.0, 0.0, Dimension::Time),
    ("%", 1e-2, 0.0, Dimension::Ratio),
    ("ppm", 1e-6, 0.0, Dimension::Ratio),
    ("ppb", 1e-9, 0.0, Dimension::Ratio),
    ("Torr", 101_325.0 / 760.0, 0.0, Dimension::Pressure),
    ("mTorr", 101.325 / 760.0, 0.0, Dimension::Pressure),
    ("cm", 1e-2, 0.0, Dimension::Length),
];

impl Unit {
    /// Finds the unit that `text` names: "mA", "nT/mA", "mK/min", "%", "degC".
    pub fn find(text: &str) -> Option<Self> {
        match text.split_once('/') {
            None => simple(text),
            Some((over, under)) => {
                let (over, under) = (simple(over.trim())?, simple(under.trim())?);
                Some(Self {
                    factor: over.factor / under.factor,
                    offset: 0.0,
                    dimension: quotient(over, under)?,
                })
            }
        }
    }
}

fn simple(text: &str) -> Option<Unit> {
    let bare = BARE.iter().find(|(name, ..)| *name == text);
    if let Some(&(_, factor, offset, dimension)) = bare {
        return Some(Unit {
            factor,
            offset,
            dimension,
        });
    }
    PREFIXED.iter().find_map(|&(name, factor, dimension)| {
        let prefix = text.strip_suffix(name)?;
        let scale = match prefix {
            "" => 1.0,
            _ => PREFIXES.iter().find(|(p, _)| *p == prefix)?.1,
        };
        Some(Unit {
            factor: factor * scale,
            offset: 0.0,
            dimension,
        })
    })
}

fn quotient(over: Unit, under: Unit) -> Option<Dimension> {
    match (over.dimension, under.dimension) {
        // A rate in degC/s would be read as K/s by some and refused by others: refuse it.
        (Dimension::Temperature, _) if over.offset != 0.0 => None,
        (Dimension::Field, Dimension::Current) => Some(Dimension::FieldPerCurrent),
        (Dimension::Frequency, Dimension::Field) => Some(Dimension::FrequencyPerField),
        (of, Dimension::Time) => of.rate(),
        _ => None,
    }
}

impl Dimension {
    /// The dimension of a change per second; `None` where no such rate is used.
    pub fn rate(self) -> Option<Self> {
        match self {
            Self::Current => Some(Self::CurrentRate),
            Self::Frequency => Some(Self::FrequencyRate),
            Self::Temperature | Self::TemperatureDifference => Some(Self::TemperatureRate),
            Self::Voltage => Some(Self::VoltageRate),
            Self::Field => Some(Self::FieldRate),
            Self::Level | Self::LevelDifference => Some(Self::LevelRate),
            Self::Power => Some(Self::PowerRate),
            Self::Ratio => Some(Self::RatioRate),
            _ => None,
        }
    }

    /// The dimension of a difference of two such values: K for degC, dB for dBm, else the same.
    pub fn difference(self) -> Self {
        match self {
            Self::Temperature => Self::TemperatureDifference,
            Self::Level => Self::LevelDifference,
            other => other,
        }
    }

    /// What it is called in a message.
    pub fn name(self) -> &'static str {
        match self {
            Self::Current => "a current",
            Self::CurrentRate => "a current per time",
            Self::Frequency => "a frequency",
            Self::FrequencyRate => "a frequency per time",
            Self::Temperature => "a temperature",
            Self::TemperatureDifference => "a temperature difference",
            Self::TemperatureRate => "a temperature per time",
            Self::Voltage => "a voltage",
            Self::VoltageRate => "a voltage per time",
            Self::Time => "a time",
            Self::Field => "a magnetic field",
            Self::FieldRate => "a magnetic field per time",
            Self::FieldPerCurrent => "a field per current",
            Self::FrequencyPerField => "a frequency per field",
            Self::Level => "a level",
            Self::LevelDifference => "a level difference",
            Self::LevelRate => "a level change per time",
            Self::Power => "a power",
            Self::PowerRate => "a power per time",
            Self::Ratio => "a ratio",
            Self::RatioRate => "a ratio per time",
            Self::Length => "a length",
            Self::Pressure => "a pressure",
            Self::Switch => "on or off",
        }
    }

    /// Units that may be written, for a message.
    pub fn accepted(self) -> &'static str {
        match self {
            Self::Current => "nA, uA, mA, A",
            Self::CurrentRate => "uA/s, mA/s, A/s, mA/min",
            Self::Frequency => "mHz, Hz, kHz, MHz, GHz",
            Self::FrequencyRate => "Hz/s, kHz/s, MHz/s",
            Self::Temperature => "degC, K, mK",
            Self::TemperatureDifference => "K, mK, uK",
            Self::TemperatureRate => "K/s, mK/s, K/min, mK/min",
            Self::Voltage => "uV, mV, V",
            Self::VoltageRate => "mV/s, V/s",
            Self::Time => "us, ms, s, min, h, d",
            Self::Field => "nT, uT, mT, T, mG, G",
            Self::FieldRate => "nT/s, uT/s, nT/min",
            Self::FieldPerCurrent => "nT/mA, uT/A, mT/A, mG/mA, G/A",
            Self::FrequencyPerField => "Hz/nT, kHz/uT, kHz/mG, MHz/G",
            Self::Level => "dBm",
            Self::LevelDifference => "dB",
            Self::LevelRate => "dB/s, dB/min",
            Self::Power => "uW, mW, W",
            Self::PowerRate => "uW/s, mW/s",
            Self::Ratio => "a plain number, %, ppm",
            Self::RatioRate => "%/s, ppm/s, %/min",
            Self::Length => "um, mm, cm, m",
            Self::Pressure => "Pa, kPa, mbar, Torr, mTorr",
            Self::Switch => "\"on\", \"off\"",
        }
    }
}
