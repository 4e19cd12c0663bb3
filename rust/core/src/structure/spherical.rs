//! Spherical covariances: one variance for all columns.

use crate::linalg::natural_log;

pub(super) fn stored_len(_d: usize) -> usize {
    1
}

pub(super) fn free_parameters(_d: usize) -> u64 {
    1
}

pub(super) fn from_full(dense: &[f64], d: usize) -> Vec<f64> {
    let mut sum = 0.0;
    for j in 0..d {
        sum += dense[j * d + j];
    }
    vec![sum / d as f64]
}

pub(super) fn from_diagonal(variances: &[f64]) -> Vec<f64> {
    let mut sum = 0.0;
    for value in variances {
        sum += value;
    }
    vec![sum / variances.len() as f64]
}

pub(super) fn dense(stored: &[f64], d: usize) -> Vec<f64> {
    let mut full = vec![0.0; d * d];
    for j in 0..d {
        full[j * d + j] = stored[0];
    }
    full
}

pub(super) fn variance(stored: &[f64], _d: usize, _j: usize) -> f64 {
    stored[0]
}

/// With one factor for all columns two exact multiplications; otherwise the mean of the scaled variances.
pub(super) fn scale(stored: &mut [f64], factors: &[f64]) {
    let first = factors[0];
    if factors.iter().all(|f| *f == first) {
        stored[0] = stored[0] * first * first;
        return;
    }
    let mut sum = 0.0;
    for factor in factors {
        sum += stored[0] * factor * factor;
    }
    stored[0] = sum / factors.len() as f64;
}

pub(super) fn check(stored: &[f64], _d: usize) -> Result<(), usize> {
    if stored[0] > 0.0 && stored[0].is_finite() { Ok(()) } else { Err(0) }
}

pub(super) fn floor(stored: &mut [f64], _d: usize, floor: f64) -> bool {
    if stored[0] < floor {
        stored[0] = floor;
        return true;
    }
    false
}

pub(super) fn log_determinant(stored: &[f64], d: usize) -> f64 {
    if stored[0] > 0.0 { d as f64 * natural_log(stored[0]) } else { f64::NAN }
}
