//! Bounds that tell, before a component is evaluated, that it cannot matter for a row: screens only, never a summed value.
//!
//! Notation: W_k the packed factor (inverse Cholesky factor times sqrt(1/2)) of component k, so that the log density is
//! l_k = c_k - |W_k (x - mu_k)|^2. W is lower triangular: its first m rows see the first m columns only, and dropping the
//! other rows can only raise l_k. Below, W, x and mu are cut to the first m.
//!
//! Bound. With q the row's likely component and rho = |W_q (x - mu_q)|,
//!
//!   |W_k (x - mu_k)| = |W_k (mu_q - mu_k) + (W_k W_q^-1) W_q (x - mu_q)| >= D_qk - S_qk rho,
//!
//! D_qk = |W_k (mu_q - mu_k)|, S_qk >= the spectral norm of W_k W_q^-1. So l_k <= c_k - max(0, D_qk - S_qk rho)^2. The
//! norm of A is bounded by tr((A'A)^16)^(1/32), at most 1.07 times too large for m = 8, 1.1 for m = 16; for diagonal factors it is the
//! largest ratio, exactly.
//!
//! Rounding. The kernels compute y = W x - c in floating point. Each y_i has at most m + 1 fused operations, so with
//! a_k = the largest absolute row sum of W_k, X and M_k the largest |x_j| and |mu_kj|, the error of the vector y is below
//! eps_k (X + M_k) with eps_k = 64 m^2 2^-53 a_k (the factor 64 also covers the rounding in D and in W_k W_q^-1 itself).
//! And X <= M_q + N_q rho with N_q the Frobenius norm of W_q^-1. So the *computed* |y| of component k is at least
//! D_qk - 2 eps_k (M_q + M_k) - (S_qk + 2 eps_k N_q) rho, and the exact rho at most
//! (rho_computed + 2 eps_q M_q) (1 + 2 eps_q N_q) as long as eps_q N_q < 1/4; otherwise q gives no bound. These terms are
//! folded into the tables, and the caller keeps another 1e-9 relative to what it compares. A component that is skipped
//! therefore has a computed log density more than 37 nats below the computed best: the dense path sets it to exactly 0.

//!
//! Directions. For any unit vector u, |W_k (x - mu_k)| >= |u' W_k (x - mu_k)|. With u along W_k (mu_q - mu_k), the way from k
//! to q, this one number a' x + b, a = W_k' u, b = -a' mu_k, tells q's rows from k better than the first rows of W_k do. It is
//! computed with m + 1 fused operations and sum |a_j| <= sqrt(m) a_k, so its error too is below eps_k (X + M_k); the table
//! keeps twice that as `slack` + `slope` rho.

use super::evaluator::Evaluator;
use super::lanes::{Kernel, Lanes};
use super::tier;

/// Components up to which tables are made: they grow with the square of the number.
pub const MOST_TABLED: usize = 512;
/// Columns of a triangle that are used, and components up to which it is so many: a table costs 5 m^3 for each pair.
const MOST: usize = 16;
const MOST_WIDE: usize = 32;
/// Components up to which directions are kept, and the columns that they use.
const MOST_DIRECTED: usize = 128;
const DIRECTED: usize = 16;

/// D and S for every pair of components.
pub struct Bounds {
    /// Columns used.
    pub m: usize,
    /// Components, padded to 8 with entries that never pass.
    pub pad: usize,
    /// D_qk at `distance[q * pad + k]`, rounding taken off.
    pub distance: Vec<f64>,
    /// S_qk likewise, rounding added.
    pub stretch: Vec<f64>,
    /// Values of one direction: a, b, slack, slope; 0 where there are none.
    pub direction_len: usize,
    directions: Vec<f64>,
}

impl Bounds {
    /// Tables of a mixture; `None` where they would be too large or there is nothing to skip.
    pub fn new(e: &Evaluator) -> Option<Self> {
        let (k, d) = (e.k, e.d);
        if !(2..=MOST_TABLED).contains(&k) {
            return None;
        }
        let m = d.min(if !e.triangular {
            32
        } else if k <= MOST_WIDE {
            MOST
        } else {
            8
        });
        let factors: Vec<Vec<f64>> = (0..k).map(|c| e.leading_factor(c, m)).collect();
        let inverses: Vec<Vec<f64>> = factors.iter().map(|w| invert(w, m, e.triangular)).collect();
        let row_sum: Vec<f64> = factors.iter().map(|w| largest_row_sum(w, m, e.triangular)).collect();
        let norm: Vec<f64> = inverses.iter().map(|v| v.iter().map(|x| x * x).sum::<f64>().sqrt()).collect();
        let mean = |c: usize| &e.scaled.means[c * d..][..m];
        let largest: Vec<f64> = (0..k).map(|c| mean(c).iter().fold(0.0f64, |a, v| a.max(v.abs()))).collect();
        let unit = 64.0 * (m * m) as f64 * f64::EPSILON;
        let eps: Vec<f64> = row_sum.iter().map(|a| unit * a).collect();
        let pad = k.div_ceil(8) * 8;
        let mut distance = vec![f64::INFINITY; k * pad];
        let mut stretch = vec![0.0; k * pad];
        for q in 0..k {
            for c in 0..k {
                let at = q * pad + c;
                if eps[q] * norm[q] >= 0.25 || q == c {
                    (distance[at], stretch[at]) = (0.0, 0.0);
                    continue;
                }
                let gap: Vec<f64> = mean(q).iter().zip(mean(c)).map(|(a, b)| a - b).collect();
                let d0 = apply(&factors[c], &gap, m, e.triangular).iter().map(|v| v * v).sum::<f64>().sqrt();
                let s0 = if e.triangular {
                    spectral(&factors[c], &inverses[q], m, k > 128)
                } else {
                    factors[c].iter().zip(&inverses[q]).fold(0.0f64, |a, (x, y)| a.max(x * y))
                };
                let s = (s0 * (1.0 + 1e-12) + 2.0 * eps[c] * norm[q]) * (1.0 + 2.0 * eps[q] * norm[q]);
                let off = 2.0 * eps[c] * (largest[q] + largest[c]) + s * 2.0 * eps[q] * largest[q];
                let ok = d0.is_finite() && s.is_finite() && off.is_finite();
                (distance[at], stretch[at]) = if ok { (d0 * (1.0 - 1e-12) - off, s) } else { (0.0, 0.0) };
            }
        }
        let directions = Directions::new(e);
        Some(Self { m, pad, distance, stretch, direction_len: directions.len, directions: directions.values })
    }

    /// The direction that tells rows of q from component k: a, b, slack, slope.
    #[inline(always)]
    pub fn direction(&self, q: usize, k: usize) -> &[f64] {
        let components = self.distance.len() / self.pad;
        &self.directions[(q * components + k) * self.direction_len..][..self.direction_len]
    }
}

struct Directions {
    len: usize,
    values: Vec<f64>,
}

impl Directions {
    fn new(e: &Evaluator) -> Self {
        let (k, d) = (e.k, e.d);
        if !e.triangular || k > MOST_DIRECTED {
            return Self { len: 0, values: Vec::new() };
        }
        let m = d.min(DIRECTED);
        let factors: Vec<Vec<f64>> = (0..k).map(|c| e.leading_factor(c, m)).collect();
        let unit = 64.0 * (m * m) as f64 * f64::EPSILON;
        let eps: Vec<f64> = factors.iter().map(|w| unit * largest_row_sum(w, m, true)).collect();
        let mean = |c: usize| &e.scaled.means[c * d..][..m];
        let largest: Vec<f64> = (0..k).map(|c| mean(c).iter().fold(0.0f64, |a, v| a.max(v.abs()))).collect();
        let mut values = Vec::with_capacity(k * k * (m + 3));
        for q in 0..k {
            let norm = invert(&factors[q], m, true).iter().map(|x| x * x).sum::<f64>().sqrt();
            for c in 0..k {
                let gap: Vec<f64> = mean(q).iter().zip(mean(c)).map(|(a, b)| a - b).collect();
                let way = apply(&factors[c], &gap, m, true);
                let length = way.iter().map(|v| v * v).sum::<f64>().sqrt();
                // A little short of a unit vector, for the rounding of its own length.
                let scale = (1.0 - 1e-12) / length;
                let a: Vec<f64> =
                    (0..m).map(|j| (j..m).map(|i| way[i] * scale * factors[c][i * m + j]).sum()).collect();
                let b = -a.iter().zip(mean(c)).map(|(a, x)| a * x).sum::<f64>();
                let (slack, slope) = (4.0 * eps[c] * (largest[q] + largest[c]), 4.0 * eps[c] * norm);
                let sound = eps[q] * norm < 0.25 && [length, scale, b, slack, slope].iter().all(|v| v.is_finite());
                if sound && a.iter().all(|v| v.is_finite()) {
                    values.extend(a);
                    values.extend([b, slack, slope]);
                } else {
                    values.extend(std::iter::repeat_n(0.0, m + 3));
                }
            }
        }
        Self { len: m + 3, values }
    }
}

fn invert(w: &[f64], m: usize, triangular: bool) -> Vec<f64> {
    if triangular { crate::linalg::invert_lower(w, m) } else { w.iter().map(|v| 1.0 / v).collect() }
}

fn largest_row_sum(w: &[f64], m: usize, triangular: bool) -> f64 {
    if triangular {
        (0..m).map(|i| w[i * m..][..m].iter().map(|v| v.abs()).sum::<f64>()).fold(0.0, f64::max)
    } else {
        w.iter().fold(0.0f64, |a, v| a.max(v.abs()))
    }
}

fn apply(w: &[f64], x: &[f64], m: usize, triangular: bool) -> Vec<f64> {
    if triangular {
        (0..m).map(|i| (0..=i).map(|j| w[i * m + j] * x[j]).sum()).collect()
    } else {
        w.iter().zip(x).map(|(a, b)| a * b).collect()
    }
}

/// An upper bound of the spectral norm of A = W V (lower triangles, m by m): tr((A'A)^16)^(1/32), or the Frobenius norm where
/// that must do.
fn spectral(w: &[f64], v: &[f64], m: usize, rough: bool) -> f64 {
    match m {
        0..=8 => tier::run(Norm::<8> { w, v, m, rough }),
        _ => tier::run(Norm::<MOST> { w, v, m, rough }),
    }
}

type Square<const M: usize> = [[f64; M]; M];

struct Norm<'a, const M: usize> {
    w: &'a [f64],
    v: &'a [f64],
    m: usize,
    rough: bool,
}

impl<const M: usize> Kernel for Norm<'_, M> {
    type Out = f64;
    /// Plain loops over whole rows, which the compiler turns into vectors.
    #[inline(always)]
    fn run<L: Lanes>(self, _: L) -> f64 {
        let Self { w, v, m, rough } = self;
        let mut a = [[0.0; M]; M];
        let mut rows = [[0.0; M]; M];
        for (row, v) in rows.iter_mut().zip(v.chunks_exact(m)) {
            row[..m].copy_from_slice(v);
        }
        for i in 0..m {
            for t in 0..=i {
                add_row(&mut a[i], w[i * m + t], &rows[t]);
            }
        }
        let frobenius = a.iter().flatten().map(|x| x * x).sum::<f64>().sqrt();
        if rough || !(frobenius.is_normal() && frobenius < 1e15) {
            return frobenius;
        }
        // Scaled by the Frobenius norm, so that no power overflows; entries that underflow are below 1e-300 of the trace.
        a.iter_mut().flatten().for_each(|x| *x /= frobenius);
        let mut g: Square<M> = [[0.0; M]; M];
        for t in 0..m {
            for i in 0..=t {
                add_row(&mut g[i], a[t][i], &a[t]);
            }
        }
        for _ in 0..3 {
            let mut square = [[0.0; M]; M];
            for i in 0..m {
                for t in 0..m {
                    add_row(&mut square[i], g[i][t], &g[t]);
                }
            }
            g = square;
        }
        // g = (A'A)^8; the sum of its squares is the trace of the 16th power.
        let mut root = g.iter().flatten().map(|x| x * x).sum::<f64>();
        for _ in 0..5 {
            root = root.sqrt();
        }
        frobenius * root * (1.0 + 1e-9)
    }
}

#[inline(always)]
fn add_row<const M: usize>(to: &mut [f64; M], factor: f64, row: &[f64; M]) {
    for j in 0..M {
        to[j] += factor * row[j];
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::linalg::{eigen_symmetric, invert_lower};
    use crate::random::Stream;

    #[test]
    fn the_norm_is_bounded_from_above_and_closely() {
        let mut stream = Stream::new(1, 0);
        for m in 1..=16 {
            for _ in 0..50 {
                let mut lower = || -> Vec<f64> {
                    (0..m * m)
                        .map(|i| match (i / m).cmp(&(i % m)) {
                            std::cmp::Ordering::Less => 0.0,
                            std::cmp::Ordering::Equal => 0.1 + 3.0 * stream.uniform(),
                            std::cmp::Ordering::Greater => stream.normal(),
                        })
                        .collect()
                };
                let (w, v) = (lower(), invert_lower(&lower(), m));
                let mut a = vec![0.0; m * m];
                for i in 0..m {
                    for j in 0..m {
                        a[i * m + j] = (0..m).map(|t| w[i * m + t] * v[t * m + j]).sum();
                    }
                }
                let mut g = vec![0.0; m * m];
                for i in 0..m {
                    for j in 0..m {
                        g[i * m + j] = (0..m).map(|t| a[t * m + i] * a[t * m + j]).sum();
                    }
                }
                let exact = eigen_symmetric(&g, m).0[m - 1].sqrt();
                let bound = spectral(&w, &v, m, false);
                assert!(bound >= exact * (1.0 - 1e-13) && bound <= exact * 1.1, "{m}: {bound} {exact}");
                assert!(spectral(&w, &v, m, true) >= exact * (1.0 - 1e-13));
            }
        }
    }
}
