//! Samples with their axes, as the digitizer delivered them: integer codes with a scale.
//!
//! Holds them and answers questions about single samples; never fits, filters or averages.

use serde::{Deserialize, Serialize};

/// Which way the probe is swept.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, PartialOrd, Ord, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Direction {
    /// From the low to the high end.
    Up,
    /// From the high to the low end.
    Down,
}

/// How the swept quantity ran while the samples were taken.
///
/// The sweep runs from `start` to `stop` whichever way that is: a sweep down has `start > stop`.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct SweepAxis {
    /// Frequency at the beginning of the sweep, Hz.
    pub start: f64,
    /// Frequency at the end of the sweep, Hz.
    pub stop: f64,
    /// Length of the sweep, s.
    pub duration: f64,
    /// Equal steps that the generator makes, at least 2; `None` for a phase-continuous ramp.
    pub steps: Option<u32>,
    /// When sample 0 was taken after the beginning of the sweep, s; negative before it.
    pub delay: f64,
    /// Time between samples, s.
    pub interval: f64,
    /// Number of samples of every channel.
    pub samples: u32,
}

impl SweepAxis {
    /// When sample `i` was taken after the beginning of the sweep, s.
    pub fn time(&self, i: u32) -> f64 {
        self.delay + f64::from(i) * self.interval
    }

    /// Frequency of the sweep while sample `i` was taken, Hz; held at the ends outside of the sweep.
    ///
    /// A stepped sweep of n steps stands at `start + k (stop - start) / (n - 1)` for `duration / n` each.
    pub fn frequency(&self, i: u32) -> f64 {
        let done = if self.duration > 0.0 {
            self.time(i) / self.duration
        } else {
            0.0
        };
        let span = self.stop - self.start;
        match self.steps {
            Some(steps) if steps >= 2 => {
                let last = f64::from(steps - 1);
                // A sample on the very edge of a step belongs to the step that begins there, although
                // the division may fall short of the whole number by a rounding error.
                let step = (done * f64::from(steps) + 1e-9).floor().clamp(0.0, last);
                self.start + span * (step / last)
            }
            _ => self.start + span * done.clamp(0.0, 1.0),
        }
    }

    /// Which way it ran.
    pub fn direction(&self) -> Direction {
        if self.stop >= self.start {
            Direction::Up
        } else {
            Direction::Down
        }
    }
}

/// Samples of one channel in the number format in which they came over the wire.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Codes {
    /// `INT,8`.
    I8(Vec<i8>),
    /// `UINT,8`.
    U8(Vec<u8>),
    /// `INT,16`.
    I16(Vec<i16>),
    /// `UINT,16`.
    U16(Vec<u16>),
    /// `REAL,32`.
    F32(Vec<f32>),
    /// `REAL,64`, and `ASC`.
    F64(Vec<f64>),
}

impl Codes {
    /// Number of samples.
    pub fn len(&self) -> usize {
        match self {
            Self::I8(codes) => codes.len(),
            Self::U8(codes) => codes.len(),
            Self::I16(codes) => codes.len(),
            Self::U16(codes) => codes.len(),
            Self::F32(codes) => codes.len(),
            Self::F64(codes) => codes.len(),
        }
    }

    /// Whether there is no sample.
    pub fn is_empty(&self) -> bool {
        self.len() == 0
    }

    /// The number of sample `i`, unscaled; `None` past the end.
    pub fn get(&self, i: usize) -> Option<f64> {
        match self {
            Self::I8(codes) => codes.get(i).copied().map(f64::from),
            Self::U8(codes) => codes.get(i).copied().map(f64::from),
            Self::I16(codes) => codes.get(i).copied().map(f64::from),
            Self::U16(codes) => codes.get(i).copied().map(f64::from),
            Self::F32(codes) => codes.get(i).copied().map(f64::from),
            Self::F64(codes) => codes.get(i).copied(),
        }
    }

    /// All numbers, unscaled, in order.
    pub fn iter(&self) -> impl Iterator<Item = f64> + '_ {
        (0..self.len()).filter_map(|i| self.get(i))
    }
}

/// One recorded channel. A sample's value is `scale x code + offset`, in `unit`.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct ChannelData {
    /// What the sequence calls it: `signal`, `reference`, `lock`.
    pub name: String,
    /// The samples as they came.
    pub codes: Codes,
    /// Value of one code, in `unit`.
    pub scale: f64,
    /// Value of code 0, in `unit`.
    pub offset: f64,
    /// Unit of the scaled samples, `V`.
    pub unit: String,
    /// Samples that stand at an end of the digitizer's range.
    pub clipped: u32,
}

impl ChannelData {
    /// The value of sample `i`, in `unit`; `None` past the end.
    pub fn value(&self, i: usize) -> Option<f64> {
        self.codes
            .get(i)
            .map(|code| self.scale * code + self.offset)
    }

    /// All values in order, in `unit`.
    pub fn values(&self) -> impl Iterator<Item = f64> + '_ {
        self.codes
            .iter()
            .map(|code| self.scale * code + self.offset)
    }

    /// Mean of all values, in `unit`; `None` without samples.
    pub fn mean(&self) -> Option<f64> {
        if self.codes.is_empty() {
            return None;
        }
        Some(self.values().sum::<f64>() / self.codes.len() as f64)
    }

    /// Lowest and highest value, in `unit`; `None` without samples that are numbers.
    pub fn extremes(&self) -> Option<(f64, f64)> {
        self.values()
            .filter(|value| value.is_finite())
            .fold(None, |seen, value| match seen {
                None => Some((value, value)),
                Some((low, high)) => Some((value.min(low), value.max(high))),
            })
    }
}

/// One record of the digitizer: one sweep in one direction, all channels.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Acquisition {
    /// Index of the point in the itinerary.
    pub point: u64,
    /// Which way the probe was swept.
    pub direction: Direction,
    /// Which of the point's averages in this direction, from 0.
    pub repeat: u32,
    /// The swept quantity at every sample.
    pub axis: SweepAxis,
    /// When the sweep was started, ns since 1970-01-01 UTC.
    pub begun: i64,
    /// The recorded channels, in the sequence's order; all of `axis.samples` samples.
    pub channels: Vec<ChannelData>,
}

impl Acquisition {
    /// The channel that the sequence calls `name`.
    pub fn channel(&self, name: &str) -> Option<&ChannelData> {
        self.channels.iter().find(|channel| channel.name == name)
    }
}

/// All acquisitions of one point, in the order in which they were taken. Travels as an `Arc`.
pub type Trace = Vec<Acquisition>;

#[cfg(test)]
mod tests {
    use super::*;

    fn axis(steps: Option<u32>) -> SweepAxis {
        SweepAxis {
            start: 80.0e6,
            stop: 80.3e6,
            duration: 40e-3,
            steps,
            delay: 12e-6,
            interval: 20e-6,
            samples: 2000,
        }
    }

    #[test]
    fn a_ramp_is_linear_and_held_at_its_ends() {
        let axis = axis(None);
        assert!((axis.frequency(0) - (80.0e6 + 0.3e6 * 12e-6 / 40e-3)).abs() < 1e-6);
        assert_eq!(axis.frequency(3000), 80.3e6);
        let before = SweepAxis {
            delay: -1.0,
            ..axis
        };
        assert_eq!(before.frequency(0), 80.0e6);
    }

    #[test]
    fn a_stepped_sweep_stands_on_its_steps_and_reaches_both_ends() {
        let axis = SweepAxis {
            delay: 0.0,
            ..axis(Some(401))
        };
        let step = 40e-3 / 401.0;
        assert_eq!(axis.frequency(0), 80.0e6);
        // 4.987 samples to a step: the fifth sample is the first of step 1.
        assert_eq!((step / axis.interval).floor(), 4.0);
        assert_eq!(axis.frequency(4), 80.0e6);
        assert!((axis.frequency(5) - 80.00075e6).abs() < 1e-6);
        assert_eq!(axis.frequency(1999), 80.3e6);
    }

    #[test]
    fn one_sample_per_step_falls_on_every_step_once() {
        let axis = SweepAxis {
            duration: 10.0,
            interval: 10.0 / 400.0,
            samples: 400,
            ..SweepAxis {
                delay: 0.0,
                ..axis(Some(400))
            }
        };
        let seen: std::collections::BTreeSet<u64> =
            (0..400).map(|i| axis.frequency(i).to_bits()).collect();
        assert_eq!(seen.len(), 400);
    }

    #[test]
    fn a_sweep_down_runs_down() {
        let up = axis(None);
        let down = SweepAxis {
            start: up.stop,
            stop: up.start,
            ..up
        };
        assert_eq!(down.direction(), Direction::Down);
        assert!(down.frequency(0) > down.frequency(1000));
    }

    #[test]
    fn a_value_is_scaled_and_the_mean_is_over_all() {
        let channel = ChannelData {
            name: "signal".into(),
            codes: Codes::I16(vec![-2, 0, 5]),
            scale: 0.5,
            offset: 1.0,
            unit: "V".into(),
            clipped: 0,
        };
        assert_eq!(channel.values().collect::<Vec<_>>(), vec![0.0, 1.0, 3.5]);
        assert_eq!(channel.mean(), Some(1.5));
        assert_eq!(channel.extremes(), Some((0.0, 3.5)));
        assert_eq!(channel.value(3), None);
    }
}
