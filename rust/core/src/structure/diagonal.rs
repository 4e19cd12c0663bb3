//! Diagonal covariances: d variances.

use crate::linalg::natural_log;

pub(super) fn stored_len(d: usize) -> usize {
    d
}

pub(super) fn free_parameters(d: usize) -> u64 {
    d as u64
}

pub(super) fn from_full(dense: &[f64], d: usize) -> Vec<f64> {
    (0..d).map(|j| dense[j * d + j]).collect()
}

pub(super) fn from_diagonal(variances: &[f64]) -> Vec<f64> {
    variances.to_vec()
}

pub(super) fn dense(stored: &[f64], d: usize) -> Vec<f64> {
    let mut full = vec![0.0; d * d];
    for j in 0..d {
        full[j * d + j] = stored[j];
    }
    full
}

pub(super) fn variance(stored: &[f64], _d: usize, j: usize) -> f64 {
    stored[j]
}

pub(super) fn scale(stored: &mut [f64], factors: &[f64]) {
    for (value, factor) in stored.iter_mut().zip(factors) {
        *value = *value * factor * factor;
    }
}

pub(super) fn check(stored: &[f64], _d: usize) -> Result<(), usize> {
    match stored.iter().position(|v| !(*v > 0.0 && v.is_finite())) {
        Some(pivot) => Err(pivot),
        None => Ok(()),
    }
}

pub(super) fn floor(stored: &mut [f64], _d: usize, floor: f64) -> bool {
    let mut lifted = false;
    for value in stored {
        if *value < floor {
            *value = floor;
            lifted = true;
        }
    }
    lifted
}

pub(super) fn log_determinant(stored: &[f64], _d: usize) -> f64 {
    let mut sum = 0.0;
    for &value in stored {
        sum += if value > 0.0 { natural_log(value) } else { f64::NAN };
    }
    sum
}
