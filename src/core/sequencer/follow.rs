//! Where the line will be at the next point: the nominal centre, corrected by what was measured so far.
//!
//! Learns the offset and the scale of the true displacement against the nominal one by linear least
//! squares with a prior, from five running sums: nothing grows with the points. The prior keeps the
//! first predictions at the bench file's nominal constants.

use super::words::WindowPlan;

/// Prior standard deviation of the scale: a nominal constant may be off by so much.
const SCALE_SIGMA: f64 = 0.3;

/// Prior standard deviation of the offset, as a part of the window.
const OFFSET_SIGMA: f64 = 0.25;

/// Standard deviation given to a measured centre, as a part of the window: the law is not quite linear.
const CENTRE_SIGMA: f64 = 0.02;

/// The predicted centre of the window.
#[derive(Debug, Clone)]
pub struct Follower {
    window: WindowPlan,
    /// Normal equations of `y = offset + (1 + scale) x`, in units of the window's width.
    n: f64,
    x: f64,
    xx: f64,
    y: f64,
    xy: f64,
}

impl Follower {
    /// Knows nothing but the nominal constants.
    pub fn new(window: WindowPlan) -> Self {
        Self {
            window,
            n: 0.0,
            x: 0.0,
            xx: 0.0,
            y: 0.0,
            xy: 0.0,
        }
    }

    /// Takes note that the line, nominally at `nominal`, was found at `found`, both in Hz.
    pub fn learn(&mut self, nominal: f64, found: f64) {
        let x = (nominal - self.window.centre) / self.window.span;
        let y = (found - nominal) / self.window.span;
        if !(x.is_finite() && y.is_finite()) {
            return;
        }
        let weight = CENTRE_SIGMA.powi(-2);
        self.n += weight;
        self.x += weight * x;
        self.xx += weight * x * x;
        self.y += weight * y;
        self.xy += weight * x * y;
    }

    /// Middle of the window at a point whose nominal centre is `nominal`, Hz.
    ///
    /// The nominal centre never leaves the window's middle half, and the window never leaves the bench's
    /// range: a line that was taken for another must not carry the window away.
    pub fn centre(&self, nominal: f64) -> f64 {
        let (span, (low, high)) = (self.window.span, self.window.range);
        let aim = if self.window.follow {
            let x = (nominal - self.window.centre) / span;
            let (offset, scale) = self.law();
            nominal + span * (offset + scale * x).clamp(-0.25, 0.25)
        } else {
            self.window.centre
        };
        if !aim.is_finite() {
            return self.window.centre;
        }
        // Not `clamp`: where the range is narrower than the window its ends are the wrong way round.
        aim.min(high - span / 2.0).max(low + span / 2.0)
    }

    fn law(&self) -> (f64, f64) {
        let n = self.n + OFFSET_SIGMA.powi(-2);
        let xx = self.xx + SCALE_SIGMA.powi(-2);
        let determinant = n * xx - self.x * self.x;
        (
            (xx * self.y - self.x * self.xy) / determinant,
            (n * self.xy - self.x * self.y) / determinant,
        )
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    const WINDOW: WindowPlan = WindowPlan {
        centre: 80e6,
        span: 300e3,
        follow: true,
        range: (79e6, 81e6),
    };

    #[test]
    fn it_begins_at_the_nominal_constants() {
        assert_eq!(Follower::new(WINDOW).centre(80.02e6), 80.02e6);
        let fixed = WindowPlan {
            follow: false,
            ..WINDOW
        };
        assert_eq!(Follower::new(fixed).centre(80.02e6), 80e6);
    }

    #[test]
    fn it_learns_offset_and_scale() {
        let mut follower = Follower::new(WINDOW);
        let truth = |nominal: f64| 80e6 + 9e3 + 1.2 * (nominal - 80e6);
        for i in -10..=10 {
            let nominal = 80e6 + f64::from(i) * 4e3;
            follower.learn(nominal, truth(nominal));
        }
        for nominal in [79.95e6, 80e6, 80.05e6] {
            let error = follower.centre(nominal) - truth(nominal);
            assert!(error.abs() < 500.0, "{error} Hz off at {nominal}");
        }
    }

    #[test]
    fn wrong_centres_do_not_carry_it_away() {
        let mut follower = Follower::new(WINDOW);
        for _ in 0..100 {
            follower.learn(80e6, 95e6);
        }
        follower.learn(80e6, f64::NAN);
        assert_eq!(follower.centre(80e6), 80e6 + 75e3);
        assert_eq!(follower.centre(80.95e6), 81e6 - 150e3);
    }
}
