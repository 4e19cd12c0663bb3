//! Lower triangular matrices: solving, inverting, multiplying.

use super::dot;

/// Inverse of the lower triangular d x d matrix `l`, itself lower triangular with zeros above.
///
/// Row i of the inverse is (e_i - sum over k < i of l_ik times row k) / l_ii, summed in the order of k.
#[must_use]
pub fn invert_lower(l: &[f64], d: usize) -> Vec<f64> {
    let mut inverse = vec![0.0; d * d];
    for i in 0..d {
        let (above, rest) = inverse.split_at_mut(i * d);
        let row = &mut rest[..d];
        for k in 0..i {
            let factor = l[i * d + k];
            for j in 0..=k {
                row[j] -= factor * above[k * d + j];
            }
        }
        row[i] = 1.0;
        let pivot = l[i * d + i];
        for value in &mut row[..=i] {
            *value /= pivot;
        }
    }
    inverse
}

/// Solves L y = b in place: `b` (length d) becomes y.
pub fn solve_lower(l: &[f64], d: usize, b: &mut [f64]) {
    for i in 0..d {
        let row = &l[i * d..i * d + i + 1];
        b[i] = (b[i] - dot(&row[..i], &b[..i])) / row[i];
    }
}

/// Solves L' y = b in place: `b` (length d) becomes y.
pub fn solve_lower_transposed(l: &[f64], d: usize, b: &mut [f64]) {
    for i in (0..d).rev() {
        let value = b[i] / l[i * d + i];
        b[i] = value;
        for j in 0..i {
            b[j] -= l[i * d + j] * value;
        }
    }
}

/// L L' of a lower triangular matrix, as a full symmetric d x d matrix.
#[must_use]
pub fn multiply_lower(l: &[f64], d: usize) -> Vec<f64> {
    let mut product = vec![0.0; d * d];
    for i in 0..d {
        for j in 0..=i {
            let value = dot(&l[i * d..i * d + j + 1], &l[j * d..j * d + j + 1]);
            product[i * d + j] = value;
            product[j * d + i] = value;
        }
    }
    product
}

#[cfg(test)]
mod tests {
    use super::super::testing::{positive_definite, relative_difference};
    use super::super::{cholesky, dot};
    use super::*;

    #[test]
    fn every_size_and_scale() {
        for d in 1..=33 {
            for scale in [1e-140, 1.0, 1e140] {
                let a = positive_definite(d, 3, scale);
                let mut l = a.clone();
                assert_eq!(cholesky(&mut l, d), Ok(()));
                let inverse = invert_lower(&l, d);
                for i in 0..d {
                    for j in 0..d {
                        let column: Vec<f64> = (0..d).map(|k| inverse[k * d + j]).collect();
                        let expected = if i == j { 1.0 } else { 0.0 };
                        assert!((dot(&l[i * d..(i + 1) * d], &column) - expected).abs() < 1e-13);
                        assert!(j <= i || inverse[i * d + j] == 0.0);
                    }
                }
                // A x = b through both triangles
                let x: Vec<f64> = (0..d).map(|i| 1.0 + i as f64).collect();
                let mut b: Vec<f64> = (0..d).map(|i| dot(&a[i * d..(i + 1) * d], &x)).collect();
                solve_lower(&l, d, &mut b);
                solve_lower_transposed(&l, d, &mut b);
                assert!(relative_difference(&b, &x) < 1e-12);
            }
        }
    }
}
