//! Statistics as one product: `sums[f][k] += sum over rows of r[row][k] * feature[f][row]`.
//!
//! Features are 1, x_i and x_i x_j, formed once a block for all components. Each sum is one chain over the rows of a
//! leaf in row order, so tiles and lanes (components side by side) change no bit.
//!
//! A component that lies far from 0 has its features taken about its own mean. Vectors of components with such a one go
//! through `apart`, which forms the features lane by lane: about twice the work, and none where there is no such component.

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

/// Rows whose differences from the means of a vector of components are formed together.
const APART: usize = 24;

/// Points that the features of each component are taken about.
#[derive(Clone, Copy)]
pub struct About<'a> {
    /// Whether it is another point than 0 (k).
    pub apart: &'a [bool],
    /// The points, columns by `pad` components.
    pub points: &'a [f64],
}

/// Adds a block of `n` rows to `sums` (features by `pad` components). `x` is a block of columns; `room` grows as needed.
#[inline(always)]
pub fn add<L: Lanes>(
    l: L,
    list: &[Feature],
    k: usize,
    pad: usize,
    n: usize,
    x: &[f64],
    r: &[f64],
    about: Option<About<'_>>,
    panel: &mut Panel,
    room: &mut Vec<f64>,
    sums: &mut [f64],
) {
    let vectors = k.div_ceil(L::N);
    let shared = |v: usize| about.is_none_or(|a| !a.apart.iter().skip(v * L::N).take(L::N).any(|f| *f));
    for (features, sums) in list.chunks(PANEL).zip(sums.chunks_mut(PANEL * pad)) {
        fill(l, features, n, x, panel);
        let mut v = 0;
        while v < vectors {
            if v + 2 <= vectors && shared(v) && shared(v + 1) {
                tiles::<L, 2>(l, features.len(), pad, n, v * L::N, r, panel, sums);
                v += 2;
                continue;
            }
            if shared(v) {
                tiles::<L, 1>(l, features.len(), pad, n, v * L::N, r, panel, sums);
            }
            v += 1;
        }
    }
    if let Some(about) = about {
        for v in (0..vectors).filter(|v| !shared(*v)) {
            apart(l, list, pad, n, v * L::N, x, r, about.points, room, sums);
        }
    }
}

/// One vector of components, each about its own point.
#[inline(always)]
fn apart<L: Lanes>(
    l: L,
    list: &[Feature],
    pad: usize,
    n: usize,
    k0: usize,
    x: &[f64],
    r: &[f64],
    points: &[f64],
    room: &mut Vec<f64>,
    sums: &mut [f64],
) {
    let d = points.len() / pad;
    let size = APART * L::N;
    room.clear();
    room.resize((d + 1) * size, 1.0); // what is behind the columns stays 1: the feature 1 is 1 times 1, a column x times 1
    for start in (0..n).step_by(APART) {
        let rows = (n - start).min(APART);
        for (j, to) in room.chunks_exact_mut(size).take(d).enumerate() {
            let point = l.load(&points[j * pad + k0..]);
            let from = &x[j * BLOCK_STRIDE + start..][..rows];
            for (x, to) in from.iter().zip(to.chunks_exact_mut(L::N)) {
                l.store(l.sub(l.splat(*x), point), to);
            }
        }
        let r = &r[start * pad + k0..];
        let mut f = 0;
        while f + 8 <= list.len() {
            lanes::<L, 8>(l, &list[f..], pad, rows, r, room, &mut sums[f * pad + k0..]);
            f += 8;
        }
        if f + 4 <= list.len() {
            lanes::<L, 4>(l, &list[f..], pad, rows, r, room, &mut sums[f * pad + k0..]);
            f += 4;
        }
        while f < list.len() {
            lanes::<L, 1>(l, &list[f..], pad, rows, r, room, &mut sums[f * pad + k0..]);
            f += 1;
        }
    }
}

/// `F` features of [`apart`].
#[inline(always)]
fn lanes<L: Lanes, const F: usize>(
    l: L,
    list: &[Feature],
    pad: usize,
    rows: usize,
    r: &[f64],
    room: &[f64],
    sums: &mut [f64],
) {
    let size = APART * L::N;
    let last = room.len() - size;
    let mut from = [(&room[..0], &room[..0]); F];
    let mut acc = [l.splat(0.0); F];
    for f in 0..F {
        let (a, b) = match list[f] {
            Feature::One => (last, last),
            Feature::Column(i) => (i as usize * size, last),
            Feature::Product(i, j) => (i as usize * size, j as usize * size),
        };
        from[f] = (&room[a..][..rows * L::N], &room[b..][..rows * L::N]);
        acc[f] = l.load(&sums[f * pad..]);
    }
    for (i, r) in r.chunks(pad).take(rows).enumerate() {
        let r = l.load(r);
        for f in 0..F {
            let (a, b) = (&from[f].0[i * L::N..], &from[f].1[i * L::N..]);
            acc[f] = l.fma(r, l.mul(l.load(a), l.load(b)), acc[f]);
        }
    }
    for f in 0..F {
        l.store(acc[f], &mut sums[f * pad..]);
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
