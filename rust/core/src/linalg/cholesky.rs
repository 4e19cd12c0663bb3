//! The Cholesky factorisation A = L L' of a symmetric positive definite matrix.

use super::{dot, natural_log};

/// Replaces the symmetric d x d matrix `a` by its lower Cholesky factor, the upper triangle by zeros.
///
/// Only the lower triangle of `a` is read. `Err(pivot)` names the first row whose pivot is not a positive finite
/// number; `a` is then half overwritten. Row by row, each element one scalar product (Cholesky-Banachiewicz order): d^3
/// / 3 multiplications. The factor of D A D, D diagonal of powers of two, is D L to the bit.
pub fn cholesky(a: &mut [f64], d: usize) -> Result<(), usize> {
    debug_assert_eq!(a.len(), d * d);
    for i in 0..d {
        let (above, rest) = a.split_at_mut(i * d);
        let row = &mut rest[..d];
        for j in 0..i {
            let other = &above[j * d..j * d + j + 1];
            let value = (row[j] - dot(&row[..j], &other[..j])) / other[j];
            row[j] = value;
        }
        let pivot = row[i] - dot(&row[..i], &row[..i]);
        if !(pivot > 0.0 && pivot.is_finite()) {
            return Err(i);
        }
        row[i] = pivot.sqrt();
        row[i + 1..].fill(0.0);
    }
    Ok(())
}

/// log |L L'| of a lower Cholesky factor, in nats.
#[must_use]
pub fn log_determinant(l: &[f64], d: usize) -> f64 {
    let mut sum = 0.0;
    for i in 0..d {
        sum += natural_log(l[i * d + i]);
    }
    2.0 * sum
}

#[cfg(test)]
mod tests {
    use super::super::testing::{positive_definite, relative_difference};
    use super::super::{cholesky, log_determinant, multiply_lower};

    #[test]
    fn every_size_and_scale() {
        for d in 1..=33 {
            for scale in [1e-140, 1e-20, 1.0, 1e20, 1e140] {
                let a = positive_definite(d, 5, scale);
                let mut l = a.clone();
                assert_eq!(cholesky(&mut l, d), Ok(()));
                assert!(relative_difference(&multiply_lower(&l, d), &a) < 1e-14);
                for i in 0..d {
                    assert!(l[i * d + i + 1..(i + 1) * d].iter().all(|&x| x == 0.0));
                }
                assert!(log_determinant(&l, d).is_finite());
            }
        }
    }

    #[test]
    fn powers_of_two_pass_through_exactly() {
        for d in 1..=33 {
            let a = positive_definite(d, 9, 1.0);
            let scale: Vec<f64> = (0..d).map(|i| 2f64.powi(40 * (i as i32 % 7) - 120)).collect();
            let mut scaled = a.clone();
            for i in 0..d {
                for j in 0..d {
                    scaled[i * d + j] *= scale[i] * scale[j];
                }
            }
            let mut l = a;
            assert_eq!((cholesky(&mut l, d), cholesky(&mut scaled, d)), (Ok(()), Ok(())));
            for i in 0..d {
                for j in 0..d {
                    assert_eq!(scaled[i * d + j], l[i * d + j] * scale[i]);
                }
            }
        }
    }

    #[test]
    fn failures_name_the_pivot() {
        assert_eq!(cholesky(&mut [0.0], 1), Err(0));
        assert_eq!(cholesky(&mut [f64::NAN], 1), Err(0));
        assert_eq!(cholesky(&mut [f64::INFINITY], 1), Err(0));
        assert_eq!(cholesky(&mut [1.0, 1.0, 1.0, 1.0], 2), Err(1));
        assert_eq!(cholesky(&mut [1.0, 0.0, 0.0, 0.0, 1.0, 2.0, 0.0, 2.0, 1.0], 3), Err(2));
    }

    #[test]
    fn logarithm_of_a_known_determinant() {
        let mut a = vec![4.0, 2.0, 2.0, 3.0];
        assert_eq!(cholesky(&mut a, 2), Ok(()));
        assert!((log_determinant(&a, 2) - 8f64.ln()).abs() < 1e-15);
    }
}
