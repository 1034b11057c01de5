//! Starts that cannot fail: a grid over centre and width with the linear parameters solved exactly (variable
//! projection, Golub & Pereyra, SIAM J. Numer. Anal. 10, 413 (1973)). No iteration, so nothing to diverge.

use super::shapes::absorptive;

/// Bins over the span: enough for a line of 1/250 of it, few enough to search in a fraction of a millisecond.
const BINS: usize = 256;
/// A template reaches this many FWHM to either side, where the Lorentzian has fallen to 1/37 of its height.
const REACH: f64 = 3.0;
/// Neighbouring widths of the grid differ by this factor.
const WIDTH_RATIO: f64 = 1.8;
/// Neighbouring centres of the grid are this share of a FWHM apart, in whole bins, at least one.
const CENTRE_STEP: f64 = 0.4;

/// Sign a line may have against its baseline.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default, serde::Serialize, serde::Deserialize)]
pub enum Polarity {
    /// Above the baseline, as the dark resonance in transmission.
    #[default]
    Peak,
    /// Below it.
    Dip,
    /// Either.
    Either,
}

impl Polarity {
    /// Does a line of this height qualify?
    pub fn admits(self, height: f64) -> bool {
        match self {
            Polarity::Peak => height > 0.0,
            Polarity::Dip => height < 0.0,
            Polarity::Either => height != 0.0,
        }
    }
}

/// Where a search may look, in the units of the axis.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Search {
    /// The centre lies in [lo, hi].
    pub centre: (f64, f64),
    /// The FWHM lies in [least, most].
    pub fwhm: (f64, f64),
    /// The sign of the line.
    pub polarity: Polarity,
}

/// A start for a fit.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Start {
    /// Centre, in the units of the axis.
    pub centre: f64,
    /// Full width at half maximum.
    pub fwhm: f64,
    /// Decrease of the sum of squares against a sloped baseline, in the units of the signal squared.
    pub gain: f64,
}

/// The best Lorentzian of the grid on a sloped baseline, or `None` if no node of the grid has the wanted sign.
///
/// `axis` in [-1, 1], any order, any spacing; `signal` belongs to it sample by sample.
pub fn search(axis: &[f64], signal: &[f64], search: &Search) -> Option<Start> {
    let bins = Bins::collect(axis, signal);
    let (first, last) = (bins.place(search.centre.0), bins.place(search.centre.1));
    let mut best: Option<Start> = None;
    let mut fwhm = search.fwhm.0.max(1.2 * bins.width);
    loop {
        let fwhm_here = fwhm.min(search.fwhm.1);
        let template = bins.template(fwhm_here);
        let step = ((CENTRE_STEP * fwhm_here / bins.width) as usize).max(1);
        for place in (first..=last).step_by(step) {
            if let Some(gain) = bins.gain(place, &template, search.polarity)
                && best.is_none_or(|b| gain > b.gain)
            {
                let centre = bins.centre(place).clamp(search.centre.0, search.centre.1);
                best = Some(Start {
                    centre,
                    fwhm: fwhm_here,
                    gain,
                });
            }
        }
        if fwhm_here >= search.fwhm.1 {
            return best;
        }
        fwhm *= WIDTH_RATIO;
    }
}

/// A trace in bins of equal width, baseline removed, kept as counts and sums.
struct Bins {
    width: f64,
    count: [f64; BINS],
    /// Sum of the signal in each bin, less the sloped baseline.
    sum: [f64; BINS],
    /// Counts times the place of the bin.
    count_x: [f64; BINS],
    /// Normal matrix of the baseline 1, x over the samples: n, sum x, sum x^2.
    moments: [f64; 3],
}

impl Bins {
    fn collect(axis: &[f64], signal: &[f64]) -> Bins {
        let width = 2.0 / BINS as f64;
        let mut bins = Bins {
            width,
            count: [0.0; BINS],
            sum: [0.0; BINS],
            count_x: [0.0; BINS],
            moments: [0.0; 3],
        };
        for (x, y) in axis.iter().zip(signal) {
            let place = (((x + 1.0) / width) as usize).min(BINS - 1);
            bins.count[place] += 1.0;
            bins.sum[place] += y;
        }
        let (mut sum, mut first) = (0.0, 0.0);
        for i in 0..BINS {
            let x = bins.centre(i);
            bins.count_x[i] = bins.count[i] * x;
            bins.moments[0] += bins.count[i];
            bins.moments[1] += bins.count[i] * x;
            bins.moments[2] += bins.count[i] * x * x;
            sum += bins.sum[i];
            first += bins.sum[i] * x;
        }
        let (level, slope) = solve_baseline(&bins.moments, sum, first);
        for i in 0..BINS {
            bins.sum[i] -= bins.count[i] * (level + slope * bins.centre(i));
        }
        bins
    }

    fn centre(&self, bin: usize) -> f64 {
        (bin as f64 + 0.5) * self.width - 1.0
    }

    fn place(&self, x: f64) -> usize {
        (((x + 1.0) / self.width).max(0.0) as usize).min(BINS - 1)
    }

    /// A truncated Lorentzian on bins, its peak in the middle: odd length.
    fn template(&self, fwhm: f64) -> Vec<f64> {
        let reach = ((REACH * fwhm / self.width) as usize).clamp(1, BINS);
        let edge = absorptive(2.0 * (reach + 1) as f64 * self.width / fwhm).value;
        let value = |i: usize| {
            let u = 2.0 * (i as f64 - reach as f64) * self.width / fwhm;
            absorptive(u).value - edge
        };
        (0..=2 * reach).map(value).collect()
    }

    /// Decrease of the sum of squares by the template centred here, baseline readjusted; `None` for a wrong sign.
    fn gain(&self, place: usize, template: &[f64], polarity: Polarity) -> Option<f64> {
        let reach = template.len() / 2;
        let first = place.saturating_sub(reach);
        let last = (place + reach).min(BINS - 1);
        let template = &template[first + reach - place..=last + reach - place];
        let columns = [&self.sum, &self.count, &self.count_x].map(|c| &c[first..=last]);
        let [with_signal, square, total, moment] = sums(columns, template);
        let (level, slope) = solve_baseline(&self.moments, total, moment);
        let left = square - level * total - slope * moment;
        (left > 1e-9 * square && polarity.admits(with_signal))
            .then(|| with_signal * with_signal / left)
    }
}

/// Sums of signal t, count t^2, count t and count x t over the bins, in four lanes for the compiler to vectorise.
#[inline]
fn sums([signal, count, count_x]: [&[f64]; 3], template: &[f64]) -> [f64; 4] {
    let mut lanes = [[0.0; 4]; 4];
    let whole = template.len() / 4 * 4;
    for i in (0..whole).step_by(4) {
        let (t, y) = (&template[i..i + 4], &signal[i..i + 4]);
        let (n, x) = (&count[i..i + 4], &count_x[i..i + 4]);
        for k in 0..4 {
            let weighted = n[k] * t[k];
            lanes[0][k] += y[k] * t[k];
            lanes[1][k] += weighted * t[k];
            lanes[2][k] += weighted;
            lanes[3][k] += x[k] * t[k];
        }
    }
    let mut sums = lanes.map(|l| (l[0] + l[1]) + (l[2] + l[3]));
    for i in whole..template.len() {
        let weighted = count[i] * template[i];
        sums[0] += signal[i] * template[i];
        sums[1] += weighted * template[i];
        sums[2] += weighted;
        sums[3] += count_x[i] * template[i];
    }
    sums
}

/// Least-squares baseline (level at x = 0, slope) for the given moments and right-hand sides.
fn solve_baseline(moments: &[f64; 3], sum: f64, first: f64) -> (f64, f64) {
    let [n, x, xx] = *moments;
    let determinant = n * xx - x * x;
    if determinant <= 1e-12 * n * xx {
        return (sum / n.max(1.0), 0.0);
    }
    (
        (xx * sum - x * first) / determinant,
        (n * first - x * sum) / determinant,
    )
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_noiseless_line_is_found_within_a_third_of_its_width_wherever_it_stands() {
        let axis: Vec<f64> = (0..2000)
            .map(|i| -1.0 + 2.0 * f64::from(i) / 1999.0)
            .collect();
        for (centre, fwhm) in [(-0.9, 0.02), (0.0, 0.3), (0.73, 0.01), (0.4, 0.9)] {
            let signal: Vec<f64> = axis
                .iter()
                .map(|x| 0.2 - 0.3 * x + 0.1 * absorptive(2.0 * (x - centre) / fwhm).value)
                .collect();
            let window = Search {
                centre: (-1.0, 1.0),
                fwhm: (0.004, 2.0),
                polarity: Polarity::Peak,
            };
            let start = search(&axis, &signal, &window).unwrap();
            assert!(
                (start.centre - centre).abs() < fwhm / 3.0,
                "{start:?} for {centre}, {fwhm}"
            );
            assert!(
                (start.fwhm / fwhm).ln().abs() < 0.8,
                "{start:?} for {centre}, {fwhm}"
            );
        }
    }

    #[test]
    fn a_dip_is_no_peak() {
        let axis: Vec<f64> = (0..400)
            .map(|i| -1.0 + 2.0 * f64::from(i) / 399.0)
            .collect();
        let signal: Vec<f64> = axis.iter().map(|x| -absorptive(x / 0.05).value).collect();
        let window = |polarity| Search {
            centre: (-0.02, 0.02),
            fwhm: (0.05, 0.2),
            polarity,
        };
        assert!(search(&axis, &signal, &window(Polarity::Peak)).is_none());
        assert!(search(&axis, &signal, &window(Polarity::Either)).is_some());
    }
}
