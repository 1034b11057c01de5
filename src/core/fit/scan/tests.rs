//! Are the sigmas honest? Synthetic scans from traces to answer, many seeds, shares within 1 and 2 sigma.
//!
//! Acceptance: 1 sigma 65.0 to 71.5 %, 2 sigma 93.8 to 97.0 %, limits cover at least 93.8 %, over 2,000 seeds. The
//! tests run a share of the seeds and widen the bands by 3.3 binomial standard deviations of that share; the whole
//! is `cargo test --release -p darkline-core -- --ignored coverage --nocapture`.

use super::*;
use crate::fit::field::{Transverse, Zeeman};
use crate::fit::line::tests::Noise;
use crate::fit::shapes::{ORDERS, absorptive, tilt_weights};

/// 87Rb F = 2, Delta m = 2, from gJ and gI (see the atom's Breit-Rabi test): Hz/T.
const SLOPE: f64 = 13.991_666_1e9;

/// How the line of the synthetic cell looks.
#[derive(Clone, Copy, PartialEq)]
enum Cell {
    /// Sum of Lorentzians.
    Thin,
    /// Transmission exp(depth x sum of Lorentzians): heights are not proportional to weights, shapes not Lorentzian.
    Thick(f64),
}

#[derive(Clone, Copy)]
struct World {
    constant: f64,
    residual: f64,
    transverse: f64,
    offset: f64,
    fwhm: f64,
    noise: f64,
    handedness: f64,
    cell: Cell,
    points: usize,
    samples: usize,
    lag: f64,
    nominal: f64,
}

#[derive(Clone, Copy, PartialEq)]
enum Tilt {
    Resolved,
    Tiny,
}

impl World {
    fn draw(seed: u64, tilt: Tilt, cell: Cell) -> World {
        let mut source = Noise(seed.wrapping_mul(0x5851_F42D_4C95_7F2D) ^ 0xDA2E);
        let mut uniform = |lo: f64, hi: f64| lo + (hi - lo) * source.uniform();
        let constant = 50e-6 * 40f64.powf(uniform(0.0, 1.0));
        let fwhm = match tilt {
            Tilt::Resolved => uniform(1e3, 4e3),
            Tilt::Tiny => 1e3 * 15f64.powf(uniform(0.0, 1.0)),
        };
        let transverse = match tilt {
            Tilt::Resolved => uniform(1.8, 5.0) * fwhm / (0.5 * SLOPE),
            Tilt::Tiny => uniform(0.0, 0.01) * fwhm / (0.5 * SLOPE),
        };
        World {
            constant,
            residual: uniform(-1e-6, 1e-6),
            transverse,
            offset: 0.0,
            fwhm,
            noise: 0.1 / uniform(5.0, 40.0),
            handedness: if uniform(0.0, 1.0) < 0.5 { -1.0 } else { 1.0 },
            cell,
            points: 21,
            samples: 1000,
            lag: uniform(-0.05, 0.05) * fwhm,
            nominal: constant * uniform(0.82, 1.18),
        }
    }

    fn currents(&self) -> Vec<f64> {
        let most = 2.5e-6 / self.constant;
        (0..self.points)
            .map(|i| most * (2.0 * i as f64 / (self.points - 1) as f64 - 1.0))
            .collect()
    }

    fn signal(&self, detuning: f64, axial: f64) -> f64 {
        let magnitude = axial.hypot(self.transverse);
        let (weights, _) = tilt_weights(axial / magnitude.max(1e-15));
        let spacing = 0.5 * SLOPE * magnitude;
        let sum: f64 = ORDERS
            .iter()
            .zip(weights)
            .map(|(q, w)| {
                let at = self.offset + self.handedness * q * spacing;
                w * absorptive(2.0 * (detuning - at) / self.fwhm).value
            })
            .sum();
        let sloped = 0.4 + 3e-8 * detuning;
        match self.cell {
            Cell::Thin => sloped + 0.1 * sum,
            Cell::Thick(depth) => {
                sloped * (0.25 / depth.exp_m1()) * (depth * sum).exp_m1() + sloped
            }
        }
    }
}

type Samples = Vec<(f64, Vec<(Direction, Vec<f64>, Vec<f64>)>)>;

fn record(world: &World, seed: u64) -> Samples {
    let mut source = Noise(seed.wrapping_mul(0xA076_1D64_78BD_642F) ^ 7);
    let half = SLOPE * 4.2e-6;
    let axis: Vec<f64> = (0..world.samples)
        .map(|i| half * (2.0 * i as f64 / (world.samples - 1) as f64 - 1.0))
        .collect();
    let mut points = Vec::new();
    for current in world.currents() {
        let axial = world.constant * current + world.residual;
        let mut traces = Vec::new();
        for direction in [Direction::Up, Direction::Down] {
            let lag = direction.sign() * world.lag;
            let signal = axis
                .iter()
                .map(|x| world.signal(x - lag, axial) + world.noise * source.normal())
                .collect();
            traces.push((direction, axis.clone(), signal));
        }
        points.push((current, traces));
    }
    points
}

fn options(world: &World, light_shift_known: bool) -> ScanOptions {
    let zeeman = Zeeman {
        slope: SLOPE,
        quadratic: 0.0,
    };
    let field = FieldOptions {
        zeeman,
        handedness: world.handedness,
        nominal: world.nominal,
        tolerance: 0.25,
        light_shift_known,
    };
    ScanOptions {
        line: LineOptions::default(),
        field,
        expected_width: None,
    }
}

fn fit(samples: &Samples, options: &ScanOptions) -> Result<ScanFit, FitError> {
    let points: Vec<ScanPoint> = samples
        .iter()
        .map(|(current, traces)| ScanPoint {
            current: *current,
            acquisitions: traces
                .iter()
                .map(|(direction, detuning, signal)| Acquisition {
                    direction: *direction,
                    detuning,
                    signal,
                    clipped: false,
                })
                .collect(),
        })
        .collect();
    fit_scan(&points, options)
}

#[derive(Default)]
struct Tally {
    pulls: Vec<f64>,
}

impl Tally {
    fn add(&mut self, estimate: Estimate, truth: f64) {
        self.pulls.push((estimate.value - truth) / estimate.sigma);
    }

    fn share(&self, within: f64) -> f64 {
        self.pulls.iter().filter(|p| p.abs() <= within).count() as f64 / self.pulls.len() as f64
    }

    /// Prints the line of the table; true if both shares lie in their bands, widened for the number of seeds.
    fn judge(&self, name: &str) -> bool {
        let n = self.pulls.len() as f64;
        let mean = self.pulls.iter().sum::<f64>() / n;
        let sd = (self.pulls.iter().map(|p| (p - mean).powi(2)).sum::<f64>() / n).sqrt();
        let (one, two) = (self.share(1.0), self.share(2.0));
        let worst = self.pulls.iter().fold(0.0, |m: f64, p| m.max(p.abs()));
        println!(
            "{name:>16} n {n:5} 1s {:.1}% 2s {:.1}% mean {mean:+.3} sd {sd:.3} worst {worst:.1}",
            100.0 * one,
            100.0 * two
        );
        // Three sigma of the share beyond what 2,000 seeds would show.
        let slack = |p: f64| {
            if n >= 2000.0 {
                0.0
            } else {
                3.3 * (p * (1.0 - p) / n).sqrt()
            }
        };
        let (a, b) = (slack(0.683), slack(0.954));
        one > 0.650 - a && one < 0.715 + a && two > 0.938 - b && two < 0.970 + b
    }
}

/// Runs the seeds, prints the table, says whether all is in its bands.
fn coverage(seeds: std::ops::Range<u64>, tilt: Tilt, cell: Cell, offset: f64) -> bool {
    let mut tallies: [Tally; 5] = Default::default();
    let (mut limits, mut covered, mut unknown, mut failed, mut chi2, mut dof) =
        (0, 0, 0, 0, 0.0, 0);
    for seed in seeds {
        let mut world = World::draw(seed, tilt, cell);
        world.offset = offset;
        let samples = record(&world, seed);
        let scan = match fit(&samples, &options(&world, offset == 0.0)) {
            Ok(scan) => scan,
            Err(error) => {
                println!("seed {seed}: {error}");
                failed += 1;
                continue;
            }
        };
        let field = &scan.field;
        let including = world.residual + world.handedness * offset / SLOPE;
        tallies[0].add(field.coil_constant, world.constant);
        tallies[1].add(field.residual_field, including);
        tallies[2].add(field.null_current, -including / world.constant);
        if let Some(width) = scan.linewidth {
            tallies[3].add(width, world.fwhm);
        }
        match &field.transverse {
            Transverse::Measured(value) => tallies[4].add(*value, world.transverse),
            Transverse::UpperLimit { limit, .. } => {
                limits += 1;
                covered += usize::from(*limit >= world.transverse);
            }
            Transverse::CannotTell { .. } => unknown += 1,
        }
        chi2 += field.chi2;
        dof += field.dof;
        let pull = (field.coil_constant.value - world.constant) / field.coil_constant.sigma;
        if pull.abs() > 4.5 {
            println!(
                "seed {seed}: k pull {pull:.1}, chi2 {:.1}/{}, k {:.4e} B0 {:.3e} Bt {:.3e} fwhm {:.0} snr {:.1} got {:?} {:?} {:?}",
                field.chi2,
                field.dof,
                world.constant,
                world.residual,
                world.transverse,
                world.fwhm,
                0.1 / world.noise,
                field.coil_constant,
                field.residual_field,
                field.transverse
            );
        }
    }
    let names = [
        "coil constant",
        "residual field",
        "null current",
        "linewidth",
        "transverse",
    ];
    let mut good = failed == 0;
    for (name, tally) in names.iter().zip(&tallies) {
        if !tally.pulls.is_empty() {
            let fine = tally.judge(name);
            good &= fine || (*name == "linewidth" && cell != Cell::Thin);
        }
    }
    println!(
        "{limits} limits cover {covered}, {unknown} cannot tell, {failed} failed, chi2/dof {:.3}",
        chi2 / f64::from(dof as u32)
    );
    let share = covered as f64 / (limits as f64).max(1.0);
    let slack = if limits >= 2000 {
        0.0
    } else {
        3.3 * (0.05 * 0.95 / (limits as f64).max(1.0)).sqrt()
    };
    good && (limits == 0 || share >= 0.938 - slack)
}

#[test]
fn resolved_tilts_give_honest_sigmas() {
    assert!(coverage(1..41, Tilt::Resolved, Cell::Thin, 0.0));
}

#[test]
fn tiny_tilts_give_honest_sigmas_and_limits() {
    assert!(coverage(1..41, Tilt::Tiny, Cell::Thin, 0.0));
}

#[test]
#[ignore = "minutes in release: the whole acceptance"]
fn coverage_resolved() {
    assert!(coverage(1..2001, Tilt::Resolved, Cell::Thin, 0.0));
}

#[test]
#[ignore = "minutes in release: the whole acceptance"]
fn coverage_tiny() {
    assert!(coverage(1..2001, Tilt::Tiny, Cell::Thin, 0.0));
}

#[test]
#[ignore = "minutes in release: how far a thick cell's shape leads astray"]
fn coverage_resolved_thick() {
    assert!(coverage(1..501, Tilt::Resolved, Cell::Thick(0.5), 0.0));
}

#[test]
#[ignore = "minutes in release: how far a thick cell's shape leads astray"]
fn coverage_tiny_thick() {
    assert!(coverage(1..501, Tilt::Tiny, Cell::Thick(0.5), 0.0));
}

#[test]
fn an_unknown_light_shift_is_part_of_the_residual_field() {
    assert!(coverage(1..31, Tilt::Resolved, Cell::Thin, -400.0));
    assert!(coverage(1..31, Tilt::Tiny, Cell::Thin, -400.0));
}

#[test]
#[ignore = "minutes in release: light shift unknown"]
fn coverage_resolved_shifted() {
    assert!(coverage(1..501, Tilt::Resolved, Cell::Thin, -400.0));
}

#[test]
#[ignore = "minutes in release: light shift unknown"]
fn coverage_tiny_shifted() {
    assert!(coverage(1..501, Tilt::Tiny, Cell::Thin, -400.0));
}
