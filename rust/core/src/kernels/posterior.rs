//! Log-sum-exp and responsibilities of a block.
//!
//! m = max_k l_k; e_k = exp(l_k - m), exactly 0 where l_k - m < -37; s = sum of e_k in the order of components;
//! responsibility = e_k (w / s) with w the row weight. Log density of the row = m + ln s.

use super::evaluator::{BLOCK_STRIDE, CUT};
use super::lanes::{AnyLanes, Lanes, Scalar, Square};
use super::math;

/// Per-row results of a block: largest log density, sum of exponentials, and (for the entropy) sum of e_k (l_k - m).
pub struct RowSums<T = f64> {
    /// m
    pub most: Vec<T>,
    /// s
    pub sum: Vec<T>,
    /// t = sum of e_k (l_k - m); filled when asked for
    pub mixed: Vec<T>,
}

impl<T: Scalar> RowSums<T> {
    /// Room for a block.
    pub fn new() -> Self {
        let v = |x| vec![x; BLOCK_STRIDE];
        Self { most: v(T::ZERO), sum: v(T::ONE), mixed: v(T::ZERO) }
    }
}

impl<T: Scalar> Default for RowSums<T> {
    fn default() -> Self {
        Self::new()
    }
}

/// Turns `log` (see [`super::density::densities`]) into exponentials in place. Returns whether some row has every
/// density at the floor, so that it needs [`super::evaluator::Evaluator::mend`].
#[inline(always)]
pub fn exponentials<L: AnyLanes>(
    l: L,
    k: usize,
    n: usize,
    mixed: bool,
    log: &mut [L::T],
    sums: &mut RowSums<L::T>,
) -> bool {
    let width = n.div_ceil(L::N) * L::N;
    let mut far = false;
    let mut row = 0;
    while !L::SCALAR && row + 4 * L::N <= width {
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
fn group<L: AnyLanes, const NV: usize>(
    l: L,
    k: usize,
    row: usize,
    mixed: bool,
    log: &mut [L::T],
    sums: &mut RowSums<L::T>,
) -> bool {
    let mut most = [l.splat(L::T::FLOOR); NV];
    for line in log.chunks_exact(BLOCK_STRIDE).take(k) {
        let line = &line[row..][..NV * L::N];
        for v in 0..NV {
            most[v] = l.max_or(l.load(&line[v * L::N..]), most[v]);
        }
    }
    let mut far = false;
    for v in 0..NV {
        far |= l.any_le(most[v], l.splat(L::T::FLOOR));
    }
    let zero = l.splat(L::T::ZERO);
    let (cut, low) = (l.splat(L::T::from_f64(-CUT)), l.splat(L::T::from_f64(-40.0)));
    let mut sum = [zero; NV];
    let mut mix = [zero; NV];
    for line in log.chunks_exact_mut(BLOCK_STRIDE).take(k) {
        let line = &mut line[row..][..NV * L::N];
        let mut t = [zero; NV];
        let mut any = false;
        for v in 0..NV {
            t[v] = l.sub(l.load(&line[v * L::N..]), most[v]);
            any |= l.any_ge(t[v], cut);
        }
        if !any {
            for v in 0..NV {
                l.store(zero, &mut line[v * L::N..]);
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
            l.store(e, &mut line[v * L::N..]);
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

/// Writes `r[row * pad + k]` = e_k (w / s) for rows below `n` rounded up to whole vectors; rows from `n` on get 0. Row
/// weights are multiplied by `scale`.
#[inline(always)]
pub fn responsibilities<L: AnyLanes>(
    l: L,
    k: usize,
    pad: usize,
    n: usize,
    weights: Option<&[f64]>,
    scale: f64,
    log: &[L::T],
    sums: &RowSums<L::T>,
    share: &mut [L::T],
    r: &mut [L::T],
) {
    let width = n.div_ceil(L::N) * L::N;
    match weights {
        Some(w) => share[..n].iter_mut().zip(w).for_each(|(s, w)| *s = L::T::from_f64(w * scale)),
        None => share[..n].fill(L::T::ONE),
    }
    share[n..width].fill(L::T::ZERO);
    for row in (0..width).step_by(L::N) {
        let s = l.div(l.load(&share[row..]), l.load(&sums.sum[row..]));
        l.store(s, &mut share[row..]);
    }
    let (l, side) = (l.narrow(), L::Narrow::N);
    let zero = l.splat(L::T::ZERO);
    let mut square = [zero; 8];
    for row in (0..width).step_by(side) {
        let s = l.load(&share[row..]);
        let mut c = 0;
        while c < k {
            for i in 0..side {
                square[i] = if c + i < k { l.mul(l.load(&log[(c + i) * BLOCK_STRIDE + row..]), s) } else { zero };
            }
            l.transpose(&mut square[..side]);
            for i in 0..side {
                l.store(square[i], &mut r[(row + i) * pad + c..]);
            }
            c += side;
        }
    }
}

/// Weighted sum of m + ln s over the rows in float64, in eight fixed lanes (row modulo 8) added up in order.
///
/// Without weights the sums s of a lane are multiplied and one ln is taken: at most 24 factors below 2^16.
#[inline(always)]
pub fn log_likelihood<L: AnyLanes>(
    l: L,
    n: usize,
    weights: Option<&[f64]>,
    sums: &RowSums<L::T>,
    logs: &mut [f64],
) -> f64 {
    let l = l.double();
    let lanes = L::Double::N;
    let mut total = [0.0f64; 8];
    match weights {
        None => {
            let mut product = [1.0f64; 8];
            let full = n / 8 * 8;
            for (m, s) in sums.most[..full].chunks_exact(8).zip(sums.sum[..full].chunks_exact(8)) {
                for i in 0..8 {
                    total[i] += m[i].to_f64();
                    product[i] *= s[i].to_f64();
                }
            }
            for i in full..n {
                total[i - full] += sums.most[i].to_f64();
                product[i - full] *= sums.sum[i].to_f64();
            }
            for v in (0..8).step_by(lanes) {
                l.store(math::ln(l, l.load(&product[v..])), &mut logs[v..]);
            }
            (0..8).fold(0.0, |sum, i| sum + (total[i] + logs[i]))
        }
        Some(w) => {
            let width = n.div_ceil(lanes) * lanes;
            for row in (0..width).step_by(lanes) {
                let v = l.add(widened(l, &sums.most[row..]), math::ln(l, widened(l, &sums.sum[row..])));
                l.store(v, &mut logs[row..]);
            }
            for i in 0..n {
                total[i % 8] += w[i] * logs[i];
            }
            total.iter().fold(0.0, |sum, t| sum + t)
        }
    }
}

#[inline(always)]
fn widened<T: Scalar, L: Lanes>(l: L, from: &[T]) -> L::V {
    let mut wide = [0.0; 8];
    wide[..L::N].iter_mut().zip(&from[..L::N]).for_each(|(w, x)| *w = x.to_f64());
    l.load(&wide)
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
