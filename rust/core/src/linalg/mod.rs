//! Small dense linear algebra in double precision.
//!
//! Matrices are square slices in row-major order, `a[i * d + j]`. Every operation runs in one fixed order of plain
//! multiplications and additions, so that its bits do not depend on the machine, the library or the number of threads.
//! Failure is data (the pivot at which a factorisation broke down), never a panic.

mod cholesky;
mod eigen;
mod triangular;

pub use cholesky::{cholesky, log_determinant};
pub use eigen::{eigen_symmetric, reconstruct};
pub use triangular::{invert_lower, multiply_lower, solve_lower, solve_lower_transposed};

/// The scalar product of two equally long slices, summed from the first element to the last.
#[inline]
#[must_use]
pub fn dot(a: &[f64], b: &[f64]) -> f64 {
    let mut sum = 0.0;
    for (x, y) in a.iter().zip(b) {
        sum += x * y;
    }
    sum
}

/// Length of the packed lower triangle of a d x d matrix: row i begins at i (i + 1) / 2.
#[inline]
#[must_use]
pub const fn packed_len(d: usize) -> usize {
    d * (d + 1) / 2
}

/// Place of element (i, j), j <= i, in a packed lower triangle.
#[inline]
#[must_use]
pub const fn packed(i: usize, j: usize) -> usize {
    i * (i + 1) / 2 + j
}

/// Writes a packed lower triangle out as a full symmetric d x d matrix.
#[must_use]
pub fn unpack_symmetric(lower: &[f64], d: usize) -> Vec<f64> {
    let mut full = vec![0.0; d * d];
    for i in 0..d {
        for j in 0..=i {
            let value = lower[packed(i, j)];
            full[i * d + j] = value;
            full[j * d + i] = value;
        }
    }
    full
}

/// High part of log 2: its last 20 bits are zero, so that products with an exponent are exact.
const LN2_HIGH: f64 = f64::from_bits(0x3FE6_2E42_FEE0_0000);
/// log 2 less `LN2_HIGH`.
const LN2_LOW: f64 = 1.908_214_929_270_587_7e-10;

/// Natural logarithm with the same bits on every platform; error below 1 unit in the last place.
///
/// x = 2^e m with m in [sqrt(1/2), sqrt(2)), f = m - 1, s = f / (2 + f), log m = 2 artanh s. The series of artanh is
/// cut after s^21, where the next term is below 2^-60 of the first. -infinity at 0, NaN below.
#[must_use]
pub fn natural_log(x: f64) -> f64 {
    if x.is_nan() || x < 0.0 {
        return f64::NAN;
    }
    if x == 0.0 {
        return f64::NEG_INFINITY;
    }
    if x == f64::INFINITY {
        return x;
    }
    let (x, mut exponent) = if x < f64::MIN_POSITIVE { (x * 18_014_398_509_481_984.0, -54i64) } else { (x, 0) };
    let bits = x.to_bits();
    exponent += ((bits >> 52) as i64) - 1023;
    let mut m = f64::from_bits((bits & 0x000F_FFFF_FFFF_FFFF) | 0x3FF0_0000_0000_0000);
    if m >= std::f64::consts::SQRT_2 {
        m *= 0.5;
        exponent += 1;
    }
    let f = m - 1.0;
    let s = f / (2.0 + f);
    let z = s * s;
    let mut series = 2.0 / 23.0;
    for odd in [21.0, 19.0, 17.0, 15.0, 13.0, 11.0, 9.0, 7.0, 5.0, 3.0] {
        series = series * z + 2.0 / odd;
    }
    let half_square = 0.5 * f * f;
    let e = exponent as f64;
    // log m = f - (f^2/2 - s (f^2/2 + series z)), arranged so that the rounding of s enters in the second order only
    e * LN2_HIGH - ((half_square - (s * (half_square + series * z) + e * LN2_LOW)) - f)
}

#[cfg(test)]
pub(crate) mod testing {
    use crate::random::Stream;

    /// A well-conditioned positive definite matrix G G' + d I, and G's scale multiplies it.
    pub fn positive_definite(d: usize, seed: u64, scale: f64) -> Vec<f64> {
        let mut stream = Stream::new(seed, d as u64);
        let g: Vec<f64> = (0..d * d).map(|_| stream.normal()).collect();
        let mut a = vec![0.0; d * d];
        for i in 0..d {
            for j in 0..d {
                let mut sum = if i == j { d as f64 } else { 0.0 };
                for k in 0..d {
                    sum += g[i * d + k] * g[j * d + k];
                }
                a[i * d + j] = sum * scale * scale;
            }
        }
        a
    }

    /// Largest absolute difference as a share of the largest absolute value of `b`.
    pub fn relative_difference(a: &[f64], b: &[f64]) -> f64 {
        let top = b.iter().fold(0.0f64, |m, x| m.max(x.abs()));
        a.iter().zip(b).fold(0.0f64, |m, (x, y)| m.max((x - y).abs())) / top
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::random::Stream;

    #[test]
    fn logarithm_agrees_within_one_unit() {
        let mut stream = Stream::new(1, 1);
        for _ in 0..200_000 {
            let x = f64::from_bits(stream.next_u64() >> 2);
            if !x.is_finite() || x <= 0.0 {
                continue;
            }
            let y = 0.5 + 1.5 * stream.uniform();
            for v in [x, y, 1.0 + (y - 1.0) * 1e-6] {
                let (found, expected) = (natural_log(v), v.ln());
                assert!((found - expected).abs() <= expected.abs() * 2.5e-16, "{v}: {found} {expected}");
            }
        }
        assert_eq!(natural_log(1.0), 0.0);
        assert_eq!(natural_log(0.0), f64::NEG_INFINITY);
        assert!(natural_log(-1.0).is_nan());
        assert_eq!(natural_log(f64::INFINITY), f64::INFINITY);
        assert!((natural_log(5e-324) - 5e-324f64.ln()).abs() < 1e-12);
    }

    #[test]
    fn packing_round_trip() {
        for d in 1..=33 {
            let lower: Vec<f64> = (0..packed_len(d)).map(|i| i as f64).collect();
            let full = unpack_symmetric(&lower, d);
            for i in 0..d {
                for j in 0..=i {
                    assert_eq!(full[i * d + j], lower[packed(i, j)]);
                    assert_eq!(full[j * d + i], lower[packed(i, j)]);
                }
            }
        }
    }
}
