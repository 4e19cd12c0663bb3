//! Log-sum-exp and responsibilities of a block.
//!
//! m = max_k l_k; e_k = exp(l_k - m), exactly 0 where l_k - m < -37; s = sum of e_k in the order of components;
//! responsibility = e_k (w / s) with w the row weight. Log density of the row = m + ln s.

use super::evaluator::{BLOCK_STRIDE, CUT, FLOOR};
use super::lanes::Lanes;
use super::math;

/// Per-row results of a block: largest log density, sum of exponentials, and (for the entropy) sum of e_k (l_k - m).
pub struct RowSums {
    /// m
    pub most: Vec<f64>,
    /// s
    pub sum: Vec<f64>,
    /// t = sum of e_k (l_k - m); filled when asked for
    pub mixed: Vec<f64>,
}

impl RowSums {
    /// Room for a block.
    pub fn new() -> Self {
        Self { most: vec![0.0; BLOCK_STRIDE], sum: vec![1.0; BLOCK_STRIDE], mixed: vec![0.0; BLOCK_STRIDE] }
    }
}

impl Default for RowSums {
    fn default() -> Self {
        Self::new()
    }
}

/// Turns `log` (see [`super::density::densities`]) into exponentials in place. Returns whether some row has every
/// density at the floor, so that it needs [`super::evaluator::Evaluator::mend`].
#[inline(always)]
pub fn exponentials<L: Lanes>(l: L, k: usize, n: usize, mixed: bool, log: &mut [f64], sums: &mut RowSums) -> bool {
    let width = n.div_ceil(L::N) * L::N;
    let mut far = false;
    let mut row = 0;
    while row + 4 * L::N <= width {
        far |= group::<L, 4>(l, k, row, mixed, log, sums);
        row += 4 * L::N;
    }
    while row < width {
        far |= group::<L, 1>(l, k, row, mixed, log, sums);
        row += L::N;
    }
    far
}

#[inline(always)]
fn group<L: Lanes, const NV: usize>(
    l: L,
    k: usize,
    row: usize,
    mixed: bool,
    log: &mut [f64],
    sums: &mut RowSums,
) -> bool {
    let mut most = [l.splat(FLOOR); NV];
    for line in log.chunks_exact(BLOCK_STRIDE).take(k) {
        for v in 0..NV {
            most[v] = l.max_or(l.load(&line[row + v * L::N..]), most[v]);
        }
    }
    let mut far = false;
    for v in 0..NV {
        far |= l.any_le(most[v], l.splat(FLOOR));
    }
    let zero = l.splat(0.0);
    let (cut, low) = (l.splat(-CUT), l.splat(-40.0));
    let mut sum = [zero; NV];
    let mut mix = [zero; NV];
    for line in log.chunks_exact_mut(BLOCK_STRIDE).take(k) {
        let mut t = [zero; NV];
        let mut any = false;
        for v in 0..NV {
            t[v] = l.sub(l.load(&line[row + v * L::N..]), most[v]);
            any |= l.any_ge(t[v], cut);
        }
        if !any {
            for v in 0..NV {
                l.store(zero, &mut line[row + v * L::N..]);
            }
            continue;
        }
        let mut bounded = t;
        for v in 0..NV {
            bounded[v] = l.max_or(t[v], low);
        }
        let e = math::exp::<L, NV>(l, bounded);
        for v in 0..NV {
            let e = l.keep_ge(t[v], cut, e[v]);
            sum[v] = l.add(sum[v], e);
            if mixed {
                mix[v] = l.fma(e, bounded[v], mix[v]);
            }
            l.store(e, &mut line[row + v * L::N..]);
        }
    }
    for v in 0..NV {
        l.store(most[v], &mut sums.most[row + v * L::N..]);
        l.store(sum[v], &mut sums.sum[row + v * L::N..]);
        if mixed {
            l.store(mix[v], &mut sums.mixed[row + v * L::N..]);
        }
    }
    far
}

/// Writes `r[row * pad + k]` = e_k (w / s) for rows below `n` rounded up to whole vectors; rows from `n` on get 0.
#[inline(always)]
pub fn responsibilities<L: Lanes>(
    l: L,
    k: usize,
    pad: usize,
    n: usize,
    weights: Option<&[f64]>,
    log: &[f64],
    sums: &RowSums,
    share: &mut [f64],
    r: &mut [f64],
) {
    let width = n.div_ceil(L::N) * L::N;
    match weights {
        Some(w) => {
            share[..n].copy_from_slice(&w[..n]);
            share[n..width].fill(0.0);
        }
        None => {
            share[..n].fill(1.0);
            share[n..width].fill(0.0);
        }
    }
    for row in (0..width).step_by(L::N) {
        let s = l.div(l.load(&share[row..]), l.load(&sums.sum[row..]));
        l.store(s, &mut share[row..]);
    }
    let zero = l.splat(0.0);
    let mut square = [zero; 8];
    for row in (0..width).step_by(L::N) {
        let s = l.load(&share[row..]);
        let mut c = 0;
        while c < k {
            for i in 0..L::N {
                square[i] = if c + i < k { l.mul(l.load(&log[(c + i) * BLOCK_STRIDE + row..]), s) } else { zero };
            }
            l.transpose(&mut square[..L::N]);
            for i in 0..L::N {
                l.store(square[i], &mut r[(row + i) * pad + c..]);
            }
            c += L::N;
        }
    }
}

/// Weighted sum of m + ln s over the rows, in eight fixed lanes (row modulo 8) added up in order.
///
/// Without weights the sums s of a lane are multiplied and one ln is taken: at most 24 factors below 2^16.
#[inline(always)]
pub fn log_likelihood<L: Lanes>(l: L, n: usize, weights: Option<&[f64]>, sums: &RowSums, logs: &mut [f64]) -> f64 {
    let mut total = [0.0f64; 8];
    match weights {
        None => {
            let mut product = [1.0f64; 8];
            let full = n / 8 * 8;
            for (m, s) in sums.most[..full].chunks_exact(8).zip(sums.sum[..full].chunks_exact(8)) {
                for i in 0..8 {
                    total[i] += m[i];
                    product[i] *= s[i];
                }
            }
            for i in full..n {
                total[i - full] += sums.most[i];
                product[i - full] *= sums.sum[i];
            }
            for v in (0..8).step_by(L::N) {
                l.store(math::ln(l, l.load(&product[v..])), &mut logs[v..]);
            }
            (0..8).fold(0.0, |sum, i| sum + (total[i] + logs[i]))
        }
        Some(w) => {
            let width = n.div_ceil(L::N) * L::N;
            for row in (0..width).step_by(L::N) {
                let v = l.add(l.load(&sums.most[row..]), math::ln(l, l.load(&sums.sum[row..])));
                l.store(v, &mut logs[row..]);
            }
            for i in 0..n {
                total[i % 8] += w[i] * logs[i];
            }
            total.iter().fold(0.0, |sum, t| sum + t)
        }
    }
}

/// Log density of each row, m + ln s.
#[inline(always)]
pub fn row_logs<L: Lanes>(l: L, n: usize, sums: &RowSums, out: &mut [f64]) {
    let width = n.div_ceil(L::N) * L::N;
    for row in (0..width).step_by(L::N) {
        let v = l.add(l.load(&sums.most[row..]), math::ln(l, l.load(&sums.sum[row..])));
        l.store(v, &mut out[row..]);
    }
}

/// Turns `mixed` from t = sum of e_k (l_k - m) into the entropy of each row, -sum_k tau ln tau = ln s - t / s.
#[inline(always)]
pub fn entropies<L: Lanes>(l: L, n: usize, sums: &mut RowSums) {
    let width = n.div_ceil(L::N) * L::N;
    for row in (0..width).step_by(L::N) {
        let s = l.load(&sums.sum[row..]);
        let h = l.sub(math::ln(l, s), l.div(l.load(&sums.mixed[row..]), s));
        l.store(h, &mut sums.mixed[row..]);
    }
}

/// Sum of the row weights of a block.
pub fn weight(n: usize, weights: Option<&[f64]>) -> f64 {
    weights.map_or(n as f64, |w| w[..n].iter().fold(0.0, |sum, w| sum + w))
}

/// Sum of row weight times entropy of a block, after [`entropies`].
pub fn entropy(n: usize, weights: Option<&[f64]>, sums: &RowSums) -> f64 {
    let entropies = &sums.mixed[..n];
    match weights {
        Some(w) => entropies.iter().zip(w).fold(0.0, |sum, (h, w)| sum + w * h),
        None => entropies.iter().fold(0.0, |sum, h| sum + h),
    }
}
