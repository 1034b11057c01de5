//! Time of one trace's fit, from samples to covariance and tests, start included, beside scipy's `curve_fit` on the
//! same data from the same start, in the same run. `PYTHON` names a Python with scipy (default `python3`).
#![expect(
    clippy::disallowed_methods,
    clippy::disallowed_types,
    reason = "a benchmark needs a clock, a file and the environment; the core itself has none"
)]

use std::fmt::Write as _;
use std::process::Command;
use std::time::Instant;

use darkline_core::fit::line::{LineOptions, fit_line};
use darkline_core::fit::shapes::absorptive;

/// Repeats; the median counts.
const REPEATS: usize = 200;
/// Most time a 2,000-sample trace may take, microseconds; fewest times it must be faster than scipy.
const BUDGET: (f64, f64) = (600.0, 5.0);

const SCRIPT: &str = r"
import sys, time
import numpy as np
from scipy.optimize import curve_fit
rows = np.loadtxt(sys.argv[1], comments='#')
start = [float(v) for v in sys.argv[2].split(',')]
x, y = rows[:, 0], rows[:, 1]
def model(x, c, w, h, b, s):
    u = 2 * (x - c) / w
    return b + s * x + h / (1 + u * u)
times = []
for _ in range(30):
    t = time.perf_counter()
    p, cov = curve_fit(model, x, y, p0=start)
    times.append(time.perf_counter() - t)
print(sorted(times)[15] * 1e6, p[0], abs(p[1]), cov[0][0] ** 0.5)
";

/// Deterministic noise, near enough to normal for a timing: twelve uniforms.
fn noise(state: &mut u64) -> f64 {
    let uniform = |state: &mut u64| {
        *state = state
            .wrapping_mul(6_364_136_223_846_793_005)
            .wrapping_add(1_442_695_040_888_963_407);
        (*state >> 11) as f64 / 9_007_199_254_740_992.0
    };
    (0..12).map(|_| uniform(state)).sum::<f64>() - 6.0
}

fn trace(samples: usize, centre: f64, fwhm: f64, height: f64) -> (Vec<f64>, Vec<f64>) {
    let mut state = 1;
    let place = |i: usize| -150e3 + 300e3 * i as f64 / (samples - 1) as f64;
    let axis: Vec<f64> = (0..samples).map(place).collect();
    let value = |x: &f64| 0.5 + height * absorptive(2.0 * (x - centre) / fwhm).value;
    let signal = axis
        .iter()
        .map(|x| value(x) + 0.01 * noise(&mut state))
        .collect();
    (axis, signal)
}

/// Median time in microseconds.
fn median_of(mut once: impl FnMut()) -> f64 {
    let mut times: Vec<f64> = (0..REPEATS)
        .map(|_| {
            let begin = Instant::now();
            once();
            begin.elapsed().as_secs_f64() * 1e6
        })
        .collect();
    times.sort_by(f64::total_cmp);
    times[REPEATS / 2]
}

/// scipy on the same data: microseconds, centre, FWHM, or why not.
fn scipy(axis: &[f64], signal: &[f64], start: [f64; 5]) -> Result<(f64, f64, f64), String> {
    let python = std::env::var("PYTHON").unwrap_or_else(|_| "python3".to_owned());
    let path = std::env::temp_dir().join(format!("line-fit-{}.txt", std::process::id()));
    let mut text = String::new();
    for (x, y) in axis.iter().zip(signal) {
        let _ = writeln!(text, "{x:e} {y:e}");
    }
    std::fs::write(&path, text).map_err(|e| format!("{}: {e}", path.display()))?;
    let start = start.map(|v| format!("{v:e}")).join(",");
    let path_text = path.to_string_lossy().into_owned();
    // One thread each: a thread pool that waits for other processes would only slow scipy down.
    let output = Command::new(&python)
        .env("OPENBLAS_NUM_THREADS", "1")
        .env("OMP_NUM_THREADS", "1")
        .args(["-c", SCRIPT, &path_text, &start])
        .output();
    let _ = std::fs::remove_file(&path);
    let output = output.map_err(|e| format!("cannot run `{python}`: {e}"))?;
    let printed = String::from_utf8_lossy(&output.stdout);
    let values: Vec<f64> = printed
        .split_whitespace()
        .filter_map(|v| v.parse().ok())
        .collect();
    match values.as_slice() {
        [time, centre, fwhm, _] => Ok((*time, *centre, *fwhm)),
        _ => Err(format!("`{python}` has no working scipy; set PYTHON")),
    }
}

fn main() {
    println!(
        "{:>8} {:>9} {:>7} {:>11} {:>11} {:>7} {:>15}",
        "samples", "FWHM Hz", "height", "fit us", "scipy us", "ratio", "centres differ"
    );
    for (samples, fwhm, height) in [
        (2000, 8e3, 0.1),
        (2000, 2e3, 0.1),
        (2000, 30e3, 0.05),
        (400, 8e3, 0.1),
        (10_000, 8e3, 0.1),
    ] {
        let centre = 23_456.0;
        let (axis, signal) = trace(samples, centre, fwhm, height);
        let options = LineOptions::default();
        let Ok(fit) = fit_line(&axis, &signal, &options) else {
            continue;
        };
        let Some(peak) = fit.peak() else { continue };
        let time = median_of(|| {
            let _ = std::hint::black_box(fit_line(std::hint::black_box(&axis), &signal, &options));
        });
        // Start for scipy: within a third of a width and 40 % of the width, as a grid gives it.
        let start = [centre + 0.3 * fwhm, 1.4 * fwhm, 0.8 * height, 0.5, 0.0];
        let verdict = match scipy(&axis, &signal, start) {
            Ok((other, there, _)) => format!(
                "{other:11.1} {:7.1} {:12.4} Hz",
                other / time,
                peak.centre.value - there
            ),
            Err(word) => format!("  skipped: {word}"),
        };
        println!("{samples:8} {fwhm:9.0} {height:7.2} {time:11.1} {verdict}");
    }
    println!(
        "budget: 2,000 samples within {} us and {} x faster than scipy",
        BUDGET.0, BUDGET.1
    );
}
