//! Full covariances: any symmetric positive definite matrix, stored whole (d x d, row-major).

use crate::linalg::{cholesky, eigen_symmetric, log_determinant as factor_log_determinant, reconstruct};

pub(super) fn stored_len(d: usize) -> usize {
    d * d
}

pub(super) fn free_parameters(d: usize) -> u64 {
    let d = d as u64;
    d * (d + 1) / 2
}

pub(super) fn from_full(dense: &[f64], _d: usize) -> Vec<f64> {
    dense.to_vec()
}

pub(super) fn from_diagonal(variances: &[f64]) -> Vec<f64> {
    let d = variances.len();
    let mut full = vec![0.0; d * d];
    for j in 0..d {
        full[j * d + j] = variances[j];
    }
    full
}

pub(super) fn dense(stored: &[f64], _d: usize) -> Vec<f64> {
    stored.to_vec()
}

pub(super) fn variance(stored: &[f64], d: usize, j: usize) -> f64 {
    stored[j * d + j]
}

pub(super) fn scale(stored: &mut [f64], factors: &[f64]) {
    let d = factors.len();
    for i in 0..d {
        for j in 0..d {
            stored[i * d + j] = stored[i * d + j] * factors[i] * factors[j];
        }
    }
}

/// The Cholesky factorisation runs on the matrix scaled to unit diagonal, so that units do not matter.
pub(super) fn check(stored: &[f64], d: usize) -> Result<(), usize> {
    let mut unit = vec![0.0; d * d];
    for i in 0..d {
        let variance = stored[i * d + i];
        if !(variance > 0.0 && variance.is_finite()) {
            return Err(i);
        }
        for j in 0..=i {
            unit[i * d + j] = stored[i * d + j] / variance.sqrt() / stored[j * d + j].sqrt();
        }
    }
    cholesky(&mut unit, d)
}

/// Whether the matrix has a factor both as it stands and scaled to unit diagonal, so that no later check can disagree.
fn factors(stored: &[f64], d: usize, scratch: &mut [f64]) -> bool {
    scratch.copy_from_slice(stored);
    cholesky(scratch, d).is_ok() && check(stored, d).is_ok()
}

pub(super) fn floor(stored: &mut [f64], d: usize, floor: f64) -> bool {
    if floor <= 0.0 {
        return false;
    }
    // cheap test first: all eigenvalues are above the floor exactly if A - floor I has a Cholesky factor
    let mut scratch = stored.to_vec();
    for i in 0..d {
        scratch[i * d + i] -= floor;
    }
    if cholesky(&mut scratch, d).is_ok() && factors(stored, d, &mut scratch) {
        return false;
    }
    let (mut values, vectors) = eigen_symmetric(stored, d);
    let mut changed = false;
    if values.iter().any(|v| *v < floor) {
        values.iter_mut().for_each(|v| *v = v.max(floor));
        stored.copy_from_slice(&reconstruct(&values, &vectors, d));
        changed = true;
    }
    // rounding in the largest eigenvalue may still hide the floor: lift the diagonal by as little as is needed
    let mut bump = f64::EPSILON * values[d - 1].max(floor);
    for _ in 0..64 {
        if factors(stored, d, &mut scratch) {
            break;
        }
        for i in 0..d {
            stored[i * d + i] += bump;
        }
        bump *= 2.0;
        changed = true;
    }
    changed
}

pub(super) fn log_determinant(stored: &[f64], d: usize) -> f64 {
    let mut factor = stored.to_vec();
    match cholesky(&mut factor, d) {
        Ok(()) => factor_log_determinant(&factor, d),
        Err(_) => f64::NAN,
    }
}
