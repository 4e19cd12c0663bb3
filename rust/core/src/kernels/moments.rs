//! Statistics as one product: `sums[f][k] += sum over rows of r[row][k] * feature[f][row]`.
//!
//! Features are 1, x_i and x_i x_j, formed once a block for all components. Each sum is one chain over the rows of a
//! leaf in row order, so tiles and lanes (components side by side) change no bit.

use super::evaluator::{BLOCK, BLOCK_STRIDE};
use super::lanes::Lanes;

/// One feature: 1, a column, or a product of two columns.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Feature {
    /// 1
    One,
    /// x_i
    Column(u32),
    /// x_i x_j
    Product(u32, u32),
}

/// Features in the order of the sums: 1, the columns, then the products (all pairs j <= i by rows, or the squares).
pub fn features(d: usize, full: bool) -> Vec<Feature> {
    let d = d as u32;
    let mut list = vec![Feature::One];
    list.extend((0..d).map(Feature::Column));
    if full {
        list.extend((0..d).flat_map(|i| (0..=i).map(move |j| Feature::Product(i, j))));
    } else {
        list.extend((0..d).map(|i| Feature::Product(i, i)));
    }
    list
}

/// Features of a panel, formed together so that they stay in the first cache.
pub const PANEL: usize = 12;

/// Room for a panel of features.
pub type Panel = [[f64; BLOCK]; PANEL];

/// Adds a block of `n` rows to `sums` (features by `pad` components). `x` is a block of columns.
#[inline(always)]
pub fn add<L: Lanes>(
    l: L,
    list: &[Feature],
    k: usize,
    pad: usize,
    n: usize,
    x: &[f64],
    r: &[f64],
    panel: &mut Panel,
    sums: &mut [f64],
) {
    let vectors = k.div_ceil(L::N);
    for (features, sums) in list.chunks(PANEL).zip(sums.chunks_mut(PANEL * pad)) {
        fill(l, features, n, x, panel);
        let mut v = 0;
        while v + 2 <= vectors {
            tiles::<L, 2>(l, features.len(), pad, n, v * L::N, r, panel, sums);
            v += 2;
        }
        if v < vectors {
            tiles::<L, 1>(l, features.len(), pad, n, v * L::N, r, panel, sums);
        }
    }
}

#[inline(always)]
fn fill<L: Lanes>(l: L, features: &[Feature], n: usize, x: &[f64], panel: &mut Panel) {
    let width = n.div_ceil(L::N) * L::N;
    for (feature, line) in features.iter().zip(panel.iter_mut()) {
        match *feature {
            Feature::One => line[..width].fill(1.0),
            Feature::Column(i) => line[..width].copy_from_slice(&x[i as usize * BLOCK_STRIDE..][..width]),
            Feature::Product(i, j) => {
                let a = &x[i as usize * BLOCK_STRIDE..][..width];
                let b = &x[j as usize * BLOCK_STRIDE..][..width];
                for ((a, b), to) in a.chunks_exact(L::N).zip(b.chunks_exact(L::N)).zip(line.chunks_exact_mut(L::N)) {
                    l.store(l.mul(l.load(a), l.load(b)), to);
                }
            }
        }
    }
}

#[inline(always)]
fn tiles<L: Lanes, const NV: usize>(
    l: L,
    count: usize,
    pad: usize,
    n: usize,
    k0: usize,
    r: &[f64],
    panel: &Panel,
    sums: &mut [f64],
) {
    let mut f = 0;
    if L::N * NV <= 4 || L::N == 8 {
        while f + 12 <= count {
            tile::<L, 12, NV>(l, f, pad, n, k0, r, panel, sums);
            f += 12;
        }
    }
    while f + 6 <= count {
        tile::<L, 6, NV>(l, f, pad, n, k0, r, panel, sums);
        f += 6;
    }
    match count - f {
        1 => tile::<L, 1, NV>(l, f, pad, n, k0, r, panel, sums),
        2 => tile::<L, 2, NV>(l, f, pad, n, k0, r, panel, sums),
        3 => tile::<L, 3, NV>(l, f, pad, n, k0, r, panel, sums),
        4 => tile::<L, 4, NV>(l, f, pad, n, k0, r, panel, sums),
        5 => tile::<L, 5, NV>(l, f, pad, n, k0, r, panel, sums),
        _ => {}
    }
}

#[inline(always)]
fn tile<L: Lanes, const F: usize, const NV: usize>(
    l: L,
    f0: usize,
    pad: usize,
    n: usize,
    k0: usize,
    r: &[f64],
    panel: &Panel,
    sums: &mut [f64],
) {
    let mut acc = [[l.splat(0.0); NV]; F];
    for f in 0..F {
        for v in 0..NV {
            acc[f][v] = l.load(&sums[(f0 + f) * pad + k0 + v * L::N..]);
        }
    }
    let lines: &[[f64; BLOCK]; F] = match panel[f0..f0 + F].try_into() {
        Ok(lines) => lines,
        Err(_) => return,
    };
    for (row, shares) in r.chunks_exact(pad).enumerate().take(n.min(BLOCK)) {
        let shares = &shares[k0..k0 + NV * L::N];
        let mut rv = [acc[0][0]; NV];
        for v in 0..NV {
            rv[v] = l.load(&shares[v * L::N..]);
        }
        for f in 0..F {
            let x = l.splat(lines[f][row]);
            for v in 0..NV {
                acc[f][v] = l.fma(rv[v], x, acc[f][v]);
            }
        }
    }
    for f in 0..F {
        for v in 0..NV {
            l.store(acc[f][v], &mut sums[(f0 + f) * pad + k0 + v * L::N..]);
        }
    }
}
