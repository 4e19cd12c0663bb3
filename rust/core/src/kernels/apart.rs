//! Statistics about the means of components that lie apart from the centre: lane by lane, each component about its own point.
//!
//! The same chains as in `moments`, of features of x less the point.

use super::evaluator::{BLOCK, BLOCK_STRIDE};
use super::lanes::Lanes;
use super::moments::{Feature, marked};

/// Rows whose differences from the means of a vector of components are formed together.
const APART: usize = BLOCK / 8;

/// Room for such differences, one line a column.
pub type Differences = Vec<[f64; APART * 8]>;

/// Adds a block of `n` rows to the `sums` of every vector with a component marked in `marks`. `points` holds columns by `pad`
/// components; `room` grows as needed.
#[inline(always)]
pub fn add<L: Lanes>(
    l: L,
    list: &[Feature],
    marks: &[bool],
    pad: usize,
    n: usize,
    x: &[f64],
    r: &[f64],
    points: &[f64],
    room: &mut Differences,
    sums: &mut [f64],
) {
    for k0 in (0..marks.len()).step_by(L::N).filter(|k0| marked(marks, *k0, L::N)) {
        vector(l, list, pad, n, k0, x, r, points, room, sums);
    }
}

/// One vector of components, each about its own point.
#[inline(always)]
fn vector<L: Lanes>(
    l: L,
    list: &[Feature],
    pad: usize,
    n: usize,
    k0: usize,
    x: &[f64],
    r: &[f64],
    points: &[f64],
    room: &mut Differences,
    sums: &mut [f64],
) {
    let d = points.len() / pad;
    room.clear();
    room.resize(d + 1, [1.0; APART * 8]); // the last line stays 1: the feature 1 is 1 times 1, a column x times 1
    for start in (0..n).step_by(APART) {
        let rows = (n - start).min(APART);
        for (j, to) in room.iter_mut().take(d).enumerate() {
            let point = l.load(&points[j * pad + k0..]);
            let from = &x[j * BLOCK_STRIDE + start..][..rows];
            for (x, to) in from.iter().zip(to.chunks_exact_mut(L::N)) {
                l.store(l.sub(l.splat(*x), point), to);
            }
        }
        let r = &r[start * pad + k0..];
        let mut f = 0;
        while !L::SCALAR && f + 8 <= list.len() {
            lanes::<L, 8>(l, &list[f..], pad, rows, r, room, &mut sums[f * pad + k0..]);
            f += 8;
        }
        if !L::SCALAR && f + 4 <= list.len() {
            lanes::<L, 4>(l, &list[f..], pad, rows, r, room, &mut sums[f * pad + k0..]);
            f += 4;
        }
        while f < list.len() {
            lanes::<L, 1>(l, &list[f..], pad, rows, r, room, &mut sums[f * pad + k0..]);
            f += 1;
        }
    }
}

/// `F` features of [`vector`].
#[inline(always)]
fn lanes<L: Lanes, const F: usize>(
    l: L,
    list: &[Feature],
    pad: usize,
    rows: usize,
    r: &[f64],
    room: &[[f64; APART * 8]],
    sums: &mut [f64],
) {
    let last = room.len() - 1;
    let mut from = [(&room[last], &room[last]); F];
    let mut acc = [l.splat(0.0); F];
    for f in 0..F {
        match list[f] {
            Feature::One => {}
            Feature::Column(i) => from[f].0 = &room[i as usize],
            Feature::Product(i, j) => from[f] = (&room[i as usize], &room[j as usize]),
        }
        acc[f] = l.load(&sums[f * pad..]);
    }
    for (i, r) in r.chunks(pad).enumerate().take(rows.min(APART)) {
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
