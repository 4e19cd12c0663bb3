//! Log densities of a block: l = constant - sum_i y_i^2, y = W x - c, with W the inverse Cholesky factor times sqrt(1/2).
//!
//! One order of operations on every path and tier: y_i starts at -c_i and takes W_ij x_j for ascending j, then l takes
//! y_i^2 for ascending i. Tiles only decide which of these independent chains run side by side.

use super::evaluator::{BLOCK_STRIDE, Factors};
use super::lanes::{AnyLanes, Scalar};

/// Fills `log[k * BLOCK_STRIDE + row]` for rows below `n` rounded up to whole vectors. `x` holds scaled columns at
/// `x[j * BLOCK_STRIDE..]`, `shifted` has as many places.
#[inline(always)]
pub fn densities<L: AnyLanes, E: Factors<L::T>>(
    l: L,
    e: &E,
    x: &[L::T],
    n: usize,
    shifted: &mut [L::T],
    log: &mut [L::T],
) {
    let width = n.div_ceil(L::N) * L::N;
    let (k, d) = (e.components(), e.dims());
    for k in 0..k {
        let out = &mut log[k * BLOCK_STRIDE..][..BLOCK_STRIDE];
        let x = match e.about(k) {
            Some(mean) => {
                shift(l, mean, x, width, shifted);
                &*shifted
            }
            None => x,
        };
        let (packed, constant) = (e.packed_of(k), e.constant_of(k));
        let mut row = 0;
        if e.is_triangular() {
            // Sixteen registers hold a tile of 4 by 2 vectors, thirty-two one of 4 by 4.
            if L::MANY {
                while row + 4 * L::N <= width {
                    triangle::<L, 4>(l, packed, d, &x[row..], constant, &mut out[row..]);
                    row += 4 * L::N;
                }
            }
            while !L::SCALAR && row + 2 * L::N <= width {
                triangle::<L, 2>(l, packed, d, &x[row..], constant, &mut out[row..]);
                row += 2 * L::N;
            }
            while row < width {
                triangle::<L, 1>(l, packed, d, &x[row..], constant, &mut out[row..]);
                row += L::N;
            }
        } else {
            while !L::SCALAR && row + 4 * L::N <= width {
                diagonal::<L, 4>(l, packed, d, &x[row..], constant, &mut out[row..]);
                row += 4 * L::N;
            }
            while row < width {
                diagonal::<L, 1>(l, packed, d, &x[row..], constant, &mut out[row..]);
                row += L::N;
            }
        }
    }
}

/// Writes x - mean.
#[inline(always)]
pub fn shift<L: AnyLanes>(l: L, mean: &[L::T], x: &[L::T], width: usize, shifted: &mut [L::T]) {
    for (j, &mean) in mean.iter().enumerate() {
        let mean = l.splat(mean);
        let from = &x[j * BLOCK_STRIDE..][..width];
        let to = &mut shifted[j * BLOCK_STRIDE..][..width];
        for (a, b) in from.chunks_exact(L::N).zip(to.chunks_exact_mut(L::N)) {
            l.store(l.sub(l.load(a), mean), b);
        }
    }
}

#[inline(always)]
fn triangle<L: AnyLanes, const NV: usize>(
    l: L,
    packed: &[L::T],
    d: usize,
    x: &[L::T],
    constant: L::T,
    out: &mut [L::T],
) {
    let mut acc = [l.splat(constant); NV];
    let mut rest = packed;
    let mut i0 = 0;
    while i0 + 4 <= d {
        let (tile, after) = rest.split_at(4 + 4 * i0 + 10);
        rows::<L, NV, 4, BLOCK_STRIDE>(l, tile, i0, x, &mut acc);
        rest = after;
        i0 += 4;
    }
    match d - i0 {
        1 => rows::<L, NV, 1, BLOCK_STRIDE>(l, rest, i0, x, &mut acc),
        2 => rows::<L, NV, 2, BLOCK_STRIDE>(l, rest, i0, x, &mut acc),
        3 => rows::<L, NV, 3, BLOCK_STRIDE>(l, rest, i0, x, &mut acc),
        _ => {}
    }
    let floor = l.splat(L::T::FLOOR);
    for v in 0..NV {
        l.store(l.max_or(acc[v], floor), &mut out[v * L::N..]);
    }
}

/// `R` rows of W from row `i0`: `tile` = -c, then R values for each column below i0, then the triangle by columns.
#[inline(always)]
pub(super) fn rows<L: AnyLanes, const NV: usize, const R: usize, const STRIDE: usize>(
    l: L,
    tile: &[L::T],
    i0: usize,
    x: &[L::T],
    acc: &mut [L::V; NV],
) {
    let mut y = [[acc[0]; NV]; R];
    let (start, rest) = tile.split_at(R);
    for i in 0..R {
        y[i] = [l.splat(start[i]); NV];
    }
    let (square, triangle) = rest.split_at(R * i0);
    for (j, w) in square.chunks_exact(R).enumerate() {
        let xs = &x[j * STRIDE..][..NV * L::N];
        let mut xv = [acc[0]; NV];
        for v in 0..NV {
            xv[v] = l.load(&xs[v * L::N..]);
        }
        for i in 0..R {
            let wi = l.splat(w[i]);
            for v in 0..NV {
                y[i][v] = l.fma(wi, xv[v], y[i][v]);
            }
        }
    }
    let mut t = 0;
    for j in 0..R {
        let xs = &x[(i0 + j) * STRIDE..][..NV * L::N];
        let mut xv = [acc[0]; NV];
        for v in 0..NV {
            xv[v] = l.load(&xs[v * L::N..]);
        }
        for i in j..R {
            let wi = l.splat(triangle[t]);
            t += 1;
            for v in 0..NV {
                y[i][v] = l.fma(wi, xv[v], y[i][v]);
            }
        }
    }
    for i in 0..R {
        for v in 0..NV {
            acc[v] = l.fnma(y[i][v], y[i][v], acc[v]);
        }
    }
}

/// `packed` = pairs (scale, -c) per column.
#[inline(always)]
fn diagonal<L: AnyLanes, const NV: usize>(
    l: L,
    packed: &[L::T],
    d: usize,
    x: &[L::T],
    constant: L::T,
    out: &mut [L::T],
) {
    let mut acc = [l.splat(constant); NV];
    for (j, p) in packed.chunks_exact(2).enumerate().take(d) {
        let (a, b) = (l.splat(p[0]), l.splat(p[1]));
        let xs = &x[j * BLOCK_STRIDE..][..NV * L::N];
        for v in 0..NV {
            let y = l.fma(a, l.load(&xs[v * L::N..]), b);
            acc[v] = l.fnma(y, y, acc[v]);
        }
    }
    let floor = l.splat(L::T::FLOOR);
    for v in 0..NV {
        l.store(l.max_or(acc[v], floor), &mut out[v * L::N..]);
    }
}
