//! Eigenvalues and eigenvectors of a symmetric matrix, by cyclic Jacobi rotations.
//!
//! Source: Golub & Van Loan, Matrix Computations, section 8.5. The stopping rule compares each off-diagonal element
//! with its own two diagonal elements, which gives small eigenvalues of graded positive definite matrices to high
//! relative accuracy (Demmel & Veselic 1992).

/// Sweeps after which the rotations stop; symmetric matrices need about ten.
const MOST_SWEEPS: usize = 64;

/// Eigenvalues (ascending, length d) and eigenvectors (d x d row-major, eigenvector j in column j) of `a`.
///
/// Only the lower triangle of `a` is read. The entry of largest size in each vector is positive (the first of equals),
/// so that the answer is unique for distinct eigenvalues. The matrix is brought to size 1 by a power of two first, so
/// any scale that doubles can hold works. A matrix with a value that is not finite gives NaN values and unit vectors.
#[must_use]
pub fn eigen_symmetric(a: &[f64], d: usize) -> (Vec<f64>, Vec<f64>) {
    let mut vectors = vec![0.0; d * d];
    for i in 0..d {
        vectors[i * d + i] = 1.0;
    }
    let mut top = 0.0f64;
    for i in 0..d {
        for j in 0..=i {
            let size = a[i * d + j].abs();
            if !size.is_finite() {
                return (vec![f64::NAN; d], vectors);
            }
            top = top.max(size);
        }
    }
    if top == 0.0 {
        return (vec![0.0; d], vectors);
    }
    // a power of two near `top`, kept where its reciprocal is a normal number too
    let unit = f64::from_bits(top.to_bits() & 0x7FF0_0000_0000_0000).clamp(f64::MIN_POSITIVE * 4.0, 2f64.powi(1020));
    let mut m = vec![0.0; d * d];
    for i in 0..d {
        for j in 0..=i {
            let value = a[i * d + j] / unit;
            m[i * d + j] = value;
            m[j * d + i] = value;
        }
    }
    for _ in 0..MOST_SWEEPS {
        if !sweep(&mut m, &mut vectors, d) {
            break;
        }
    }
    let mut order: Vec<usize> = (0..d).collect();
    order.sort_by(|&i, &j| m[i * d + i].total_cmp(&m[j * d + j]).then(i.cmp(&j)));
    let values = order.iter().map(|&i| m[i * d + i] * unit).collect();
    let mut sorted = vec![0.0; d * d];
    for (new, &old) in order.iter().enumerate() {
        let mut largest = 0.0f64;
        for i in 0..d {
            let value = vectors[i * d + old];
            // strictly larger by more than rounding, so that mirror images of one entry do not compete
            if value.abs() > largest.abs() * (1.0 + 1e-12) {
                largest = value;
            }
        }
        let sign = if largest < 0.0 { -1.0 } else { 1.0 };
        for i in 0..d {
            sorted[i * d + new] = sign * vectors[i * d + old];
        }
    }
    (values, sorted)
}

/// One sweep over all pairs; tells whether any pair was rotated.
fn sweep(m: &mut [f64], vectors: &mut [f64], d: usize) -> bool {
    let mut rotated = false;
    for p in 0..d {
        for q in p + 1..d {
            let off = m[p * d + q];
            let (first, second) = (m[p * d + p], m[q * d + q]);
            let small = f64::EPSILON * 0.25 * (first.abs() * second.abs()).sqrt();
            if off.abs() <= small || off.abs() < 1e-300 {
                m[p * d + q] = 0.0;
                m[q * d + p] = 0.0;
                continue;
            }
            rotated = true;
            let theta = (second - first) / (2.0 * off);
            let t = if theta.abs() > 1e150 {
                0.5 / theta
            } else {
                let size = 1.0 / (theta.abs() + (theta * theta + 1.0).sqrt());
                if theta < 0.0 { -size } else { size }
            };
            let c = 1.0 / (t * t + 1.0).sqrt();
            let s = t * c;
            let tau = s / (1.0 + c);
            m[p * d + p] = first - t * off;
            m[q * d + q] = second + t * off;
            m[p * d + q] = 0.0;
            m[q * d + p] = 0.0;
            for r in 0..d {
                if r != p && r != q {
                    let (x, y) = (m[r * d + p], m[r * d + q]);
                    let (x, y) = (x - s * (y + tau * x), y + s * (x - tau * y));
                    m[r * d + p] = x;
                    m[p * d + r] = x;
                    m[r * d + q] = y;
                    m[q * d + r] = y;
                }
                let (x, y) = (vectors[r * d + p], vectors[r * d + q]);
                vectors[r * d + p] = x - s * (y + tau * x);
                vectors[r * d + q] = y + s * (x - tau * y);
            }
        }
    }
    rotated
}

/// V diag(values) V': the symmetric d x d matrix with these eigenvalues and eigenvectors (in columns).
#[must_use]
pub fn reconstruct(values: &[f64], vectors: &[f64], d: usize) -> Vec<f64> {
    let mut a = vec![0.0; d * d];
    for i in 0..d {
        for j in 0..=i {
            let mut sum = 0.0;
            for k in 0..d {
                sum += vectors[i * d + k] * values[k] * vectors[j * d + k];
            }
            a[i * d + j] = sum;
            a[j * d + i] = sum;
        }
    }
    a
}

#[cfg(test)]
mod tests {
    use super::super::testing::{positive_definite, relative_difference};
    use super::*;

    #[test]
    fn every_size_and_scale() {
        for d in 1..=33 {
            for scale in [1e-140, 1.0, 1e140] {
                let a = positive_definite(d, 21, scale);
                let (values, vectors) = eigen_symmetric(&a, d);
                assert!(relative_difference(&reconstruct(&values, &vectors, d), &a) < 1e-13, "{d} {scale}");
                assert!(values.windows(2).all(|w| w[0] <= w[1]) && values[0] > 0.0);
                let mut gram = vec![0.0; d * d];
                let mut unit = vec![0.0; d * d];
                for i in 0..d {
                    unit[i * d + i] = 1.0;
                    for j in 0..d {
                        gram[i * d + j] = (0..d).map(|k| vectors[k * d + i] * vectors[k * d + j]).sum();
                    }
                }
                assert!(relative_difference(&gram, &unit) < 1e-13);
            }
        }
    }

    #[test]
    fn known_and_degenerate_matrices() {
        let (values, vectors) = eigen_symmetric(&[2.0, 1.0, 1.0, 2.0], 2);
        assert!((values[0] - 1.0).abs() < 1e-15 && (values[1] - 3.0).abs() < 1e-15);
        assert!(vectors[0] > 0.0 && vectors[2] < 0.0 && vectors[1] > 0.0 && vectors[3] > 0.0);
        assert_eq!(eigen_symmetric(&[0.0; 9], 3).0, vec![0.0; 3]);
        assert!(eigen_symmetric(&[f64::NAN], 1).0[0].is_nan());
        let (values, _) = eigen_symmetric(&[0.0, 1.0, 1.0, 0.0], 2);
        assert!((values[0] + 1.0).abs() < 1e-15 && (values[1] - 1.0).abs() < 1e-15);
        // rank one: all but one eigenvalue vanish to rounding
        let d = 12;
        let ones = vec![1.0; d * d];
        let (values, _) = eigen_symmetric(&ones, d);
        assert!((values[d - 1] - d as f64).abs() < 1e-13 && values[..d - 1].iter().all(|v| v.abs() < 1e-14));
    }

    #[test]
    fn graded_matrices_keep_small_eigenvalues() {
        // D R D with unit-diagonal R: the product of the eigenvalues must equal the determinant, 15 orders apart
        let (s, r) = ([1.0, 1e-7, 1e-15], [1.0, 0.5, 0.25, 0.5, 1.0, 0.5, 0.25, 0.5, 1.0]);
        let a: Vec<f64> = (0..9).map(|i| r[i] * s[i / 3] * s[i % 3]).collect();
        let (values, _) = eigen_symmetric(&a, 3);
        let determinant = 0.5625 * 1e-44;
        assert!((values.iter().product::<f64>() / determinant - 1.0).abs() < 1e-12);
    }
}
