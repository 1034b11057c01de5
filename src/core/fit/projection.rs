//! Sums over the samples of one trace and their reduction by variable projection (Golub & Pereyra 1973).
//!
//! A trace model is linear in some columns (baseline, slope, heights) and nonlinear in a few parameters. One pass
//! over the samples gives the Gram matrix of [linear columns | derivative columns | residual]; eliminating the
//! linear block leaves information matrix, gradient and chi-square of the nonlinear parameters alone (a Schur
//! complement). Columns are scaled to order one by the callers, which is what makes normal equations safe here.

use nalgebra::{DMatrix, DVector};

/// Samples per block: the columns of one block stay in the first-level cache.
pub(super) const BLOCK: usize = 64;
/// Most columns a model may have: 2 of the baseline, 10 of peaks, 6 derivatives, 1 of data.
pub(super) const COLUMNS: usize = 19;

/// Column values of one block of samples; unused places hold zero.
pub(super) type Block = [[f64; BLOCK]; COLUMNS];

/// A pivot smaller than this share of its column's norm counts as zero: that column is not determined.
const RANK_TOLERANCE: f64 = 1e-11;

/// Sums of products of the first `size` columns. The last column is the data.
#[derive(Debug, Clone)]
pub(super) struct Gram {
    size: usize,
    /// Are the products of baseline and data among themselves already there?
    seeded: bool,
    sums: [[f64; COLUMNS]; COLUMNS],
}

/// The nonlinear problem after the linear parameters have been eliminated.
#[derive(Debug, Clone)]
pub(super) struct Reduced {
    /// Least-squares values of the linear parameters; 0 for a column that the data do not determine.
    pub linear: [f64; COLUMNS],
    /// Information matrix of the nonlinear parameters (per unit noise variance).
    pub information: DMatrix<f64>,
    /// Derivative columns times residual: the Gauss-Newton step solves information * step = gradient.
    pub gradient: DVector<f64>,
    /// Sum of squared residuals at the best linear parameters.
    pub sum_of_squares: f64,
}

impl Gram {
    pub fn new(size: usize) -> Gram {
        debug_assert!(size <= COLUMNS);
        Gram {
            size: size.min(COLUMNS),
            seeded: false,
            sums: [[0.0; COLUMNS]; COLUMNS],
        }
    }

    /// As `new`, with the products of the columns 0, 1 (baseline) and data, which no pass changes, taken from a Gram
    /// matrix of just those three.
    pub fn seeded(size: usize, baseline: &Gram) -> Gram {
        let mut gram = Gram::new(size);
        let data = gram.size - 1;
        gram.seeded = true;
        for (i, from) in [(0, 0), (1, 1), (data, 2)] {
            for (j, to) in [(0, 0), (1, 1), (data, 2)] {
                gram.sums[i][j] = baseline.sum(from, to);
            }
        }
        gram
    }

    /// Adds one block. Every column must be zero beyond the samples it holds.
    pub fn add(&mut self, block: &Block) {
        let data = self.size - 1;
        let known = |i: usize| i < 2 || i == data;
        for i in 0..self.size {
            for j in 0..=i {
                if self.seeded && known(i) && known(j) {
                    continue;
                }
                self.sums[i][j] += dot(&block[i], &block[j]);
            }
        }
    }

    /// Sum of products of columns `i` and `j`.
    pub fn sum(&self, i: usize, j: usize) -> f64 {
        if j <= i {
            self.sums[i][j]
        } else {
            self.sums[j][i]
        }
    }

    /// Eliminates the first `linear` columns; the columns between them and the data are the derivatives.
    pub fn reduce(&self, linear: usize) -> Reduced {
        let size = self.size;
        let mut a = self.sums;
        let mut determined = [false; COLUMNS];
        for pivot in 0..linear {
            let value = a[pivot][pivot];
            determined[pivot] = value > RANK_TOLERANCE * self.sums[pivot][pivot] && value > 0.0;
            if !determined[pivot] {
                continue;
            }
            for i in pivot + 1..size {
                let factor = a[i][pivot] / value;
                let column: [f64; COLUMNS] = std::array::from_fn(|j| a[j][pivot]);
                for (value, other) in a[i][pivot + 1..=i].iter_mut().zip(&column[pivot + 1..]) {
                    *value -= factor * other;
                }
            }
        }
        let data = size - 1;
        let mut values = [0.0; COLUMNS];
        for pivot in (0..linear).rev().filter(|&p| determined[p]) {
            let known: f64 = (pivot + 1..linear).map(|j| a[j][pivot] * values[j]).sum();
            values[pivot] = (a[data][pivot] - known) / a[pivot][pivot];
        }
        let count = data - linear;
        let information =
            DMatrix::from_fn(count, count, |i, j| a[linear + i.max(j)][linear + i.min(j)]);
        let gradient = DVector::from_fn(count, |i, _| a[data][linear + i]);
        Reduced {
            linear: values,
            information,
            gradient,
            sum_of_squares: a[data][data].max(0.0),
        }
    }

    /// The Gram matrix of all columns but the data, for the covariance of all parameters together.
    pub fn normal_matrix(&self) -> DMatrix<f64> {
        DMatrix::from_fn(self.size - 1, self.size - 1, |i, j| self.sum(i, j))
    }
}

/// Dot product in eight lanes, which the compiler turns into vector instructions.
#[inline]
fn dot(a: &[f64; BLOCK], b: &[f64; BLOCK]) -> f64 {
    let mut lanes = [0.0; 8];
    for (x, y) in a.chunks_exact(8).zip(b.chunks_exact(8)) {
        for lane in 0..8 {
            lanes[lane] += x[lane] * y[lane];
        }
    }
    (lanes[0] + lanes[4]) + (lanes[1] + lanes[5]) + (lanes[2] + lanes[6]) + (lanes[3] + lanes[7])
}

/// Inverse of a symmetric positive matrix, scaled to unit diagonal first; `None` if it is singular.
pub(super) fn invert(matrix: &DMatrix<f64>) -> Option<DMatrix<f64>> {
    let n = matrix.nrows();
    let scale: Vec<f64> = (0..n).map(|i| matrix[(i, i)].sqrt()).collect();
    if scale.iter().any(|s| !s.is_finite() || *s <= 0.0) {
        return None;
    }
    let scaled = DMatrix::from_fn(n, n, |i, j| matrix[(i, j)] / (scale[i] * scale[j]));
    let factor = scaled.cholesky()?;
    if (0..n).any(|i| factor.l_dirty()[(i, i)] < 1e-7) {
        return None;
    }
    let inverse = factor.inverse();
    Some(DMatrix::from_fn(n, n, |i, j| {
        inverse[(i, j)] / (scale[i] * scale[j])
    }))
}
