//! A linear axis: data to pixels, round ticks and their text.
//! Owns numbers only; never draws.

/// A linear axis between two pixel places.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Axis {
    low: f64,
    high: f64,
    from: f64,
    to: f64,
}

impl Axis {
    /// An axis over `low..high` drawn from pixel `from` to pixel `to`; an empty or impossible range is
    /// widened so that there is always something to draw.
    pub fn new(low: f64, high: f64, from: f64, to: f64) -> Self {
        let (mut low, mut high) = if low <= high {
            (low, high)
        } else {
            (high, low)
        };
        if !(low.is_finite() && high.is_finite()) {
            (low, high) = (-1.0, 1.0);
        }
        // A range finer than an f64 resolves cannot be ticked.
        let least = low.abs().max(high.abs()) * 1e-9;
        if high - low <= least {
            let half = if least > 0.0 { low.abs() * 0.1 } else { 1.0 };
            (low, high) = (low - half, high + half);
        }
        Self {
            low,
            high,
            from,
            to,
        }
    }

    /// Pixel of a value.
    pub fn at(&self, value: f64) -> f64 {
        self.from + (value - self.low) / (self.high - self.low) * (self.to - self.from)
    }

    /// Whether the value lies on the axis, its ends included.
    pub fn holds(&self, value: f64) -> bool {
        (self.low..=self.high).contains(&value)
    }

    /// Smallest value.
    pub fn low(&self) -> f64 {
        self.low
    }

    /// Largest value.
    pub fn high(&self) -> f64 {
        self.high
    }

    /// About `count` round places (steps of 1, 2 or 5 times a power of ten) with their text.
    pub fn ticks(&self, count: usize) -> Vec<(f64, String)> {
        let span = self.high - self.low;
        let coarse = span / count.max(1) as f64;
        let decade = coarse.log10().floor();
        let power = 10f64.powf(decade);
        let step = match coarse / power {
            share if share <= 1.0 => power,
            share if share <= 2.0 => 2.0 * power,
            share if share <= 5.0 => 5.0 * power,
            _ => 10.0 * power,
        };
        let first = (self.low / step - 1e-6).ceil();
        let places = (0..4 * count as u32 + 4).map(|number| (first + f64::from(number)) * step);
        let places = places.take_while(|place| *place <= self.high + step * 1e-6);
        let largest = self.low.abs().max(self.high.abs());
        places
            .map(|place| (place, tick_text(place, step, largest)))
            .collect()
    }
}

/// Lowest and highest finite value; `None` without any.
pub fn range(values: impl IntoIterator<Item = f64>) -> Option<(f64, f64)> {
    let finite = values.into_iter().filter(|value| value.is_finite());
    finite.fold(None, |range, value| match range {
        None => Some((value, value)),
        Some((low, high)) => Some((f64::min(low, value), f64::max(high, value))),
    })
}

fn tick_text(place: f64, step: f64, largest: f64) -> String {
    let decimals = (-(step * 1.0001).log10().floor()).max(0.0) as usize;
    let place = if place.abs() < step * 1e-6 {
        0.0
    } else {
        place
    };
    let text = if largest >= 1e7 || decimals > 6 {
        format!("{place:.2e}")
    } else {
        format!("{place:.decimals$}")
    };
    // A true minus sign has the width of a digit.
    text.replace('-', "\u{2212}")
}

#[cfg(test)]
mod tests {
    use super::*;

    fn texts(low: f64, high: f64, count: usize) -> Vec<String> {
        let ticks = Axis::new(low, high, 0.0, 100.0).ticks(count);
        ticks.into_iter().map(|(_, text)| text).collect()
    }

    #[test]
    fn ticks_are_round_and_inside() {
        assert_eq!(texts(-20.0, 20.0, 5), ["−20", "−10", "0", "10", "20"]);
        assert_eq!(texts(0.07, 0.33, 5), ["0.1", "0.2", "0.3"]);
        assert_eq!(
            texts(0.0, 1.0, 5),
            ["0.0", "0.2", "0.4", "0.6", "0.8", "1.0"]
        );
        assert_eq!(texts(3.0, 3.0, 3), ["2.8", "3.0", "3.2"]);
    }

    #[test]
    fn impossible_ranges_still_make_an_axis() {
        for (low, high) in [
            (f64::NAN, 1.0),
            (0.0, f64::INFINITY),
            (0.0, 0.0),
            (1e300, 1e300),
            (5.0, -5.0),
            (1.0, 1.0 + 1e-15),
            (1e-30, 2e-30),
        ] {
            let axis = Axis::new(low, high, 0.0, 100.0);
            assert!(axis.high() > axis.low(), "{low} {high}");
            let ticks = axis.ticks(5);
            assert!((1..=24).contains(&ticks.len()), "{low} {high}: {ticks:?}");
            assert!(ticks.iter().all(|(place, _)| axis.at(*place).is_finite()));
        }
    }
}
