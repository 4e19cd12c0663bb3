//! Statistics as one product: `sums[f][k] += sum over rows of r[row][k] * feature[f][row]`.
//!
//! Features are 1, x_i and x_i x_j, formed once a block for all components. Each sum is one chain over the rows of a
//! leaf in row order, so tiles and lanes (components side by side) change no bit. In float32 a chain begins at 0
//! and is as long as half a block: two chains run side by side where a tile leaves room for them. Then they are added to the
//! sums, which are float64 in both precisions.

use super::evaluator::{BLOCK, BLOCK_STRIDE};
use super::lanes::{AnyLanes, Scalar};

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

/// Features of a panel, formed together so that they stay in the first cache: products of three columns with four, where
/// there are so many.
pub const PANEL: usize = ROWS * COLUMNS;
const ROWS: usize = 3;
const COLUMNS: usize = 4;
/// Columns from which a block does not fit the first cache by far.
const WIDE: usize = 96;

/// The features of a shape.
#[derive(Debug)]
pub struct Features {
    /// In the order of the sums: 1, the columns, then the products (all pairs j <= i by rows, or the squares).
    pub list: Vec<Feature>,
    /// The first columns (i, j) of panels that are products of `ROWS` columns with `COLUMNS`.
    rectangles: Vec<(u32, u32)>,
    /// Features outside the rectangles, and their places in the list.
    rest: Vec<(Feature, u32)>,
}

/// The features of `d` columns: with all products, or with the squares.
pub fn features(d: usize, full: bool) -> Features {
    let d = d as u32;
    let mut list = vec![Feature::One];
    list.extend((0..d).map(Feature::Column));
    let (rows, columns) = (ROWS as u32, COLUMNS as u32);
    let mut rectangles = Vec::new();
    if full {
        list.extend((0..d).flat_map(|i| (0..=i).map(move |j| Feature::Product(i, j))));
        for i in (0..d / rows).map(|i| i * rows) {
            rectangles.extend((0..(i + 1) / columns).map(|j| (i, j * columns)));
        }
    } else {
        list.extend((0..d).map(|i| Feature::Product(i, i)));
    }
    // Below the last whole group of rows all products of row i with j below the last whole group of columns are taken.
    let taken = |i: u32, j: u32| full && i < d / rows * rows && j < (i / rows * rows + 1) / columns * columns;
    let outside = |feature: &Feature| !matches!(*feature, Feature::Product(i, j) if taken(i, j));
    let rest = list.iter().zip(0..).filter(|(f, _)| outside(f)).map(|(f, at)| (*f, at)).collect();
    Features { list, rectangles, rest }
}

impl Features {
    /// The feature 1 alone.
    pub fn one() -> Self {
        Self { list: vec![Feature::One], rectangles: Vec::new(), rest: vec![(Feature::One, 0)] }
    }

    /// Place of the product of columns j <= i.
    fn product(d: usize, i: usize, j: usize) -> u32 {
        (1 + d + i * (i + 1) / 2 + j) as u32
    }
}

/// Room for a panel of features.
pub type Panel<T = f64> = [[T; BLOCK]; PANEL];

/// Adds a block of `n` rows, times `unit`, to `sums` (features by `pad` components). `x` is a block of columns; `unit` must
/// be 1 in float64. Vectors with a component marked in `skip` are left out.
#[inline(always)]
pub fn add<L: AnyLanes>(
    l: L,
    features: &Features,
    k: usize,
    d: usize,
    pad: usize,
    n: usize,
    x: &[L::T],
    r: &[L::T],
    unit: f64,
    skip: &[bool],
    panel: &mut Panel<L::T>,
    sums: &mut [f64],
) {
    // Where columns come from the second cache, fewer rows at a time leave the first to the panel.
    let step = if d < WIDE { BLOCK } else { BLOCK / 2 };
    for start in (0..n).step_by(step) {
        let (x, r) = (&x[start..], &r[start * pad..]);
        part(l, features, k, d, pad, (n - start).min(step), x, r, unit, skip, panel, sums);
    }
}

/// [`add`] for `n` rows of a block.
#[inline(always)]
fn part<L: AnyLanes>(
    l: L,
    features: &Features,
    k: usize,
    d: usize,
    pad: usize,
    n: usize,
    x: &[L::T],
    r: &[L::T],
    unit: f64,
    skip: &[bool],
    panel: &mut Panel<L::T>,
    sums: &mut [f64],
) {
    for &(i, j) in &features.rectangles {
        let (i, j) = (i as usize, j as usize);
        rectangle(l, i, j, n, x, panel);
        let mut at = [0; PANEL];
        for (f, at) in at.iter_mut().enumerate() {
            *at = Features::product(d, i + f / COLUMNS, j + f % COLUMNS);
        }
        vectors(l, &at, k, pad, n, r, unit, skip, panel, sums);
    }
    for features in features.rest.chunks(PANEL) {
        let mut at = [0; PANEL];
        for ((line, at), (feature, place)) in panel.iter_mut().zip(&mut at).zip(features) {
            fill(l, *feature, n, x, line);
            *at = *place;
        }
        vectors(l, &at[..features.len()], k, pad, n, r, unit, skip, panel, sums);
    }
}

/// Adds a panel of features, whose places among the sums are `at`.
#[inline(always)]
fn vectors<L: AnyLanes>(
    l: L,
    at: &[u32],
    k: usize,
    pad: usize,
    n: usize,
    r: &[L::T],
    unit: f64,
    skip: &[bool],
    panel: &Panel<L::T>,
    sums: &mut [f64],
) {
    // Whole vectors first; what is left is at most one narrow vector.
    let places = k.div_ceil(L::Narrow::N) * L::Narrow::N;
    let vectors = places / L::N;
    let mut v = 0;
    while v < vectors {
        if !L::SCALAR && v + 2 <= vectors && !marked(skip, v * L::N, 2 * L::N) {
            tiles::<L, 2>(l, at, pad, n, v * L::N, r, unit, panel, sums);
            v += 2;
            continue;
        }
        if !marked(skip, v * L::N, L::N) {
            tiles::<L, 1>(l, at, pad, n, v * L::N, r, unit, panel, sums);
        }
        v += 1;
    }
    if vectors * L::N < places {
        tiles::<L::Narrow, 1>(l.narrow(), at, pad, n, vectors * L::N, r, unit, panel, sums);
    }
}

/// Whether one of `n` components from `k0` is marked.
#[inline(always)]
pub fn marked(marks: &[bool], k0: usize, n: usize) -> bool {
    marks.iter().skip(k0).take(n).any(|m| *m)
}

/// Products of `ROWS` columns from i with `COLUMNS` from j: each value is read once.
#[inline(always)]
fn rectangle<L: AnyLanes>(l: L, i: usize, j: usize, n: usize, x: &[L::T], panel: &mut Panel<L::T>) {
    let width = n.div_ceil(L::N).min(BLOCK / L::N) * L::N;
    let a = &x[i * BLOCK_STRIDE..][..(ROWS - 1) * BLOCK_STRIDE + width];
    let b = &x[j * BLOCK_STRIDE..][..(COLUMNS - 1) * BLOCK_STRIDE + width];
    for at in (0..width).step_by(L::N) {
        let mut right = [l.splat(L::T::ZERO); COLUMNS];
        for c in 0..COLUMNS {
            right[c] = l.load(&b[c * BLOCK_STRIDE + at..]);
        }
        for r in 0..ROWS {
            let left = l.load(&a[r * BLOCK_STRIDE + at..]);
            for c in 0..COLUMNS {
                l.store(l.mul(left, right[c]), &mut panel[r * COLUMNS + c][at..]);
            }
        }
    }
}

#[inline(always)]
fn fill<L: AnyLanes>(l: L, feature: Feature, n: usize, x: &[L::T], line: &mut [L::T; BLOCK]) {
    let width = n.div_ceil(L::N) * L::N;
    match feature {
        Feature::One => line[..width].fill(L::T::ONE),
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

#[inline(always)]
fn tiles<L: AnyLanes, const NV: usize>(
    l: L,
    at: &[u32],
    pad: usize,
    n: usize,
    k0: usize,
    r: &[L::T],
    unit: f64,
    panel: &Panel<L::T>,
    sums: &mut [f64],
) {
    let count = at.len();
    if L::SCALAR {
        (0..count).for_each(|f| tile::<L, 1, NV>(l, f, at, pad, n, k0, r, unit, panel, sums));
        return;
    }
    let mut f = 0;
    if NV == 1 || L::MANY {
        while f + 12 <= count {
            tile::<L, 12, NV>(l, f, at, pad, n, k0, r, unit, panel, sums);
            f += 12;
        }
    }
    while f + 6 <= count {
        tile::<L, 6, NV>(l, f, at, pad, n, k0, r, unit, panel, sums);
        f += 6;
    }
    match count - f {
        1 => tile::<L, 1, NV>(l, f, at, pad, n, k0, r, unit, panel, sums),
        2 => tile::<L, 2, NV>(l, f, at, pad, n, k0, r, unit, panel, sums),
        3 => tile::<L, 3, NV>(l, f, at, pad, n, k0, r, unit, panel, sums),
        4 => tile::<L, 4, NV>(l, f, at, pad, n, k0, r, unit, panel, sums),
        5 => tile::<L, 5, NV>(l, f, at, pad, n, k0, r, unit, panel, sums),
        _ => {}
    }
}

#[inline(always)]
fn tile<L: AnyLanes, const F: usize, const NV: usize>(
    l: L,
    f0: usize,
    places: &[u32],
    pad: usize,
    n: usize,
    k0: usize,
    r: &[L::T],
    unit: f64,
    panel: &Panel<L::T>,
    sums: &mut [f64],
) {
    let lines: &[[L::T; BLOCK]; F] = match panel[f0..f0 + F].try_into() {
        Ok(lines) => lines,
        Err(_) => return,
    };
    let n = n.min(BLOCK);
    let part = L::CHAIN.min(n);
    let places: &[u32; F] = match places[f0..f0 + F].try_into() {
        Ok(places) => places,
        Err(_) => return,
    };
    let at = |f: usize| places[f] as usize * pad + k0;
    if part == n {
        chain::<L, F, NV>(l, lines, pad, 0, n, k0, r, unit, sums, at);
    } else if NV == 1 && F <= 6 {
        // The first rows of both chains side by side; the first chain may be longer.
        let mut acc = [[l.splat(L::T::ZERO); F]; 2];
        let (first, second) = r.split_at(part * pad);
        let both = n - part;
        for (row, (a, b)) in first.chunks_exact(pad).zip(second.chunks_exact(pad)).enumerate().take(both) {
            let r = [l.load(&a[k0..]), l.load(&b[k0..])];
            for f in 0..F {
                acc[0][f] = l.fma(r[0], l.splat(lines[f][row]), acc[0][f]);
                acc[1][f] = l.fma(r[1], l.splat(lines[f][row + part]), acc[1][f]);
            }
        }
        for (row, a) in first.chunks_exact(pad).enumerate().skip(both) {
            let r = l.load(&a[k0..]);
            for f in 0..F {
                acc[0][f] = l.fma(r, l.splat(lines[f][row]), acc[0][f]);
            }
        }
        for f in 0..F {
            l.end(acc[0][f], unit, &mut sums[at(f)..]);
            l.end(acc[1][f], unit, &mut sums[at(f)..]);
        }
    } else {
        chain::<L, F, NV>(l, lines, pad, 0, part, k0, r, unit, sums, at);
        chain::<L, F, NV>(l, lines, pad, part, n, k0, r, unit, sums, at);
    }
}

/// One chain, over the rows `from..to`.
#[inline(always)]
fn chain<L: AnyLanes, const F: usize, const NV: usize>(
    l: L,
    lines: &[[L::T; BLOCK]; F],
    pad: usize,
    from: usize,
    to: usize,
    k0: usize,
    r: &[L::T],
    unit: f64,
    sums: &mut [f64],
    at: impl Fn(usize) -> usize,
) {
    let mut acc = [[l.splat(L::T::ZERO); NV]; F];
    for f in 0..F {
        for v in 0..NV {
            acc[f][v] = l.begin(&sums[at(f) + v * L::N..]);
        }
    }
    for (shares, row) in r[from * pad..].chunks_exact(pad).zip(from..to) {
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
            l.end(acc[f][v], unit, &mut sums[at(f) + v * L::N..]);
        }
    }
}
