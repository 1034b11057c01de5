//! The solver against the certified values of the NIST Statistical Reference Datasets, nonlinear regression
//! (<https://www.itl.nist.gov/div898/strd/>), from both of NIST's starts.

use nalgebra::DMatrix;

use super::{Residuals, solve};

/// Model value for parameters b and predictors x.
type Function = fn(&[f64], &[f64]) -> f64;

/// Problem, its file, its model, whether the response is its logarithm.
const PROBLEMS: [(&str, &str, Function); 22] = [
    (
        "Bennett5",
        include_str!("../../testdata/fit/nist/Bennett5.dat"),
        |b, x| b[0] * (b[1] + x[0]).powf(-1.0 / b[2]),
    ),
    (
        "BoxBOD",
        include_str!("../../testdata/fit/nist/BoxBOD.dat"),
        |b, x| b[0] * (1.0 - (-b[1] * x[0]).exp()),
    ),
    (
        "Chwirut1",
        include_str!("../../testdata/fit/nist/Chwirut1.dat"),
        |b, x| (-b[0] * x[0]).exp() / (b[1] + b[2] * x[0]),
    ),
    (
        "Chwirut2",
        include_str!("../../testdata/fit/nist/Chwirut2.dat"),
        |b, x| (-b[0] * x[0]).exp() / (b[1] + b[2] * x[0]),
    ),
    (
        "DanWood",
        include_str!("../../testdata/fit/nist/DanWood.dat"),
        |b, x| b[0] * x[0].powf(b[1]),
    ),
    (
        "ENSO",
        include_str!("../../testdata/fit/nist/ENSO.dat"),
        enso,
    ),
    (
        "Gauss1",
        include_str!("../../testdata/fit/nist/Gauss1.dat"),
        gauss,
    ),
    (
        "Gauss3",
        include_str!("../../testdata/fit/nist/Gauss3.dat"),
        gauss,
    ),
    (
        "Kirby2",
        include_str!("../../testdata/fit/nist/Kirby2.dat"),
        |b, x| (b[0] + x[0] * (b[1] + x[0] * b[2])) / (1.0 + x[0] * (b[3] + x[0] * b[4])),
    ),
    (
        "Lanczos1",
        include_str!("../../testdata/fit/nist/Lanczos1.dat"),
        lanczos,
    ),
    (
        "Lanczos2",
        include_str!("../../testdata/fit/nist/Lanczos2.dat"),
        lanczos,
    ),
    (
        "Lanczos3",
        include_str!("../../testdata/fit/nist/Lanczos3.dat"),
        lanczos,
    ),
    (
        "MGH09",
        include_str!("../../testdata/fit/nist/MGH09.dat"),
        |b, x| b[0] * (x[0] * x[0] + x[0] * b[1]) / (x[0] * x[0] + x[0] * b[2] + b[3]),
    ),
    (
        "MGH17",
        include_str!("../../testdata/fit/nist/MGH17.dat"),
        |b, x| b[0] + b[1] * (-x[0] * b[3]).exp() + b[2] * (-x[0] * b[4]).exp(),
    ),
    (
        "Misra1a",
        include_str!("../../testdata/fit/nist/Misra1a.dat"),
        |b, x| b[0] * (1.0 - (-b[1] * x[0]).exp()),
    ),
    (
        "Misra1b",
        include_str!("../../testdata/fit/nist/Misra1b.dat"),
        |b, x| b[0] * (1.0 - (1.0 + b[1] * x[0] / 2.0).powi(-2)),
    ),
    (
        "Misra1c",
        include_str!("../../testdata/fit/nist/Misra1c.dat"),
        |b, x| b[0] * (1.0 - (1.0 + 2.0 * b[1] * x[0]).powf(-0.5)),
    ),
    (
        "Misra1d",
        include_str!("../../testdata/fit/nist/Misra1d.dat"),
        |b, x| b[0] * b[1] * x[0] / (1.0 + b[1] * x[0]),
    ),
    (
        "Nelson",
        include_str!("../../testdata/fit/nist/Nelson.dat"),
        |b, x| b[0] - b[1] * x[0] * (-b[2] * x[1]).exp(),
    ),
    (
        "Rat42",
        include_str!("../../testdata/fit/nist/Rat42.dat"),
        |b, x| b[0] / (1.0 + (b[1] - b[2] * x[0]).exp()),
    ),
    (
        "Rat43",
        include_str!("../../testdata/fit/nist/Rat43.dat"),
        |b, x| b[0] / (1.0 + (b[1] - b[2] * x[0]).exp()).powf(1.0 / b[3]),
    ),
    (
        "Roszman1",
        include_str!("../../testdata/fit/nist/Roszman1.dat"),
        |b, x| b[0] - b[1] * x[0] - (b[2] / (x[0] - b[3])).atan() / std::f64::consts::PI,
    ),
];

fn enso(b: &[f64], x: &[f64]) -> f64 {
    let turn = std::f64::consts::TAU * x[0];
    let wave = |period: f64, c: f64, s: f64| c * (turn / period).cos() + s * (turn / period).sin();
    b[0] + wave(12.0, b[1], b[2]) + wave(b[3], b[4], b[5]) + wave(b[6], b[7], b[8])
}

fn gauss(b: &[f64], x: &[f64]) -> f64 {
    let bell = |h: f64, c: f64, w: f64| h * (-((x[0] - c) / w).powi(2)).exp();
    b[0] * (-b[1] * x[0]).exp() + bell(b[2], b[3], b[4]) + bell(b[5], b[6], b[7])
}

fn lanczos(b: &[f64], x: &[f64]) -> f64 {
    b[0] * (-b[1] * x[0]).exp() + b[2] * (-b[3] * x[0]).exp() + b[4] * (-b[5] * x[0]).exp()
}

struct Problem {
    function: Function,
    rows: Vec<Vec<f64>>,
    logarithm: bool,
}

impl Residuals for Problem {
    fn count(&self) -> usize {
        self.rows.len()
    }

    fn residuals(&self, parameters: &[f64], out: &mut [f64]) {
        for (o, row) in out.iter_mut().zip(&self.rows) {
            let y = if self.logarithm { row[0].ln() } else { row[0] };
            *o = (self.function)(parameters, &row[1..]) - y;
        }
    }

    /// Fourth-order central differences: good to 1e-12 or so relative, which is as good as analytic here.
    fn jacobian(&self, parameters: &[f64], out: &mut DMatrix<f64>) {
        let mut at = parameters.to_vec();
        for (column, value) in parameters.iter().enumerate() {
            let step = if *value == 0.0 {
                1e-10
            } else {
                value.abs() * 1e-3
            };
            for (i, row) in self.rows.iter().enumerate() {
                let mut f = |k: f64| {
                    at[column] = value + k * step;
                    (self.function)(&at, &row[1..])
                };
                let near = f(1.0) - f(-1.0);
                let far = f(2.0) - f(-2.0);
                out[(i, column)] = (8.0 * near - far) / (12.0 * step);
            }
            at[column] = *value;
        }
    }
}

/// Starts, certified values and certified standard deviations; residual standard deviation; data rows.
struct Certified {
    starts: [Vec<f64>; 2],
    values: Vec<f64>,
    deviations: Vec<f64>,
    residual_deviation: f64,
    rows: Vec<Vec<f64>>,
}

fn read(text: &str) -> Certified {
    let numbers = |line: &str| {
        line.split_whitespace()
            .map(str::parse::<f64>)
            .collect::<Result<Vec<_>, _>>()
    };
    let mut certified = Certified {
        starts: [Vec::new(), Vec::new()],
        values: Vec::new(),
        deviations: Vec::new(),
        residual_deviation: f64::NAN,
        rows: Vec::new(),
    };
    for line in text.lines().take(60) {
        if let Some((name, rest)) = line.split_once('=')
            && name.trim().starts_with('b')
            && let Ok([a, b, value, deviation]) =
                numbers(rest).map(|v| <[f64; 4]>::try_from(v).unwrap_or([f64::NAN; 4]))
            && value.is_finite()
        {
            certified.starts[0].push(a);
            certified.starts[1].push(b);
            certified.values.push(value);
            certified.deviations.push(deviation);
        }
        if let Some(rest) = line.trim().strip_prefix("Residual Standard Deviation:") {
            certified.residual_deviation = rest.trim().parse().unwrap();
        }
    }
    certified.rows = text
        .lines()
        .skip(60)
        .filter_map(|l| numbers(l).ok())
        .filter(|r| r.len() >= 2)
        .collect();
    certified
}

/// Digits of agreement, 11 at most (as many as are certified).
fn digits(got: f64, want: f64) -> f64 {
    let error = ((got - want) / want).abs();
    if error == 0.0 {
        11.0
    } else {
        (-error.log10()).clamp(0.0, 11.0)
    }
}

#[test]
fn nist_problems_agree_to_six_digits_from_both_starts() {
    println!(
        "{:10} {:>6} {:>6} {:>11}  (fewest digits of a parameter, start 1, 2; of the deviations)",
        "problem", "1", "2", "deviations"
    );
    let mut good = 0;
    for (name, text, function) in PROBLEMS {
        let certified = read(text);
        assert!(
            !certified.values.is_empty() && certified.rows.len() >= certified.values.len(),
            "{name} misread"
        );
        let problem = Problem {
            function,
            rows: certified.rows,
            logarithm: name == "Nelson",
        };
        let mut worst = [0.0; 2];
        let mut deviations = 0.0;
        for (start, least) in certified.starts.iter().zip(&mut worst) {
            let solution = solve(&problem, start).unwrap();
            let pairs = solution.parameters.iter().zip(&certified.values);
            *least = pairs.map(|(g, w)| digits(*g, *w)).fold(11.0, f64::min);
            deviations = solution.covariance.map_or(0.0, |c| {
                let sigma = certified.residual_deviation;
                let each = certified.deviations.iter().enumerate();
                each.map(|(i, want)| digits(c[(i, i)].sqrt() * sigma, *want))
                    .fold(11.0, f64::min)
            });
        }
        println!(
            "{name:10} {:6.1} {:6.1} {deviations:11.1}",
            worst[0], worst[1]
        );
        good += usize::from(worst.iter().all(|d| *d >= 6.0));
    }
    println!("{good} of {} to 6 digits from both starts", PROBLEMS.len());
    assert!(good >= 20);
}
