//! The rows of a leaf as blocks of scaled columns, `(x - centre) / spread` held within ±[`FAR`]: straight from the batches
//! where every row is taken as it is, else from the leaf as it was loaded. float32 blocks are centred and scaled in float64
//! and rounded once.

use crate::batch::{Column, Values};
use crate::kernels::lanes::{AnyKernel, AnyLanes, Lanes, Scalar};
use crate::kernels::prepare::widened;
use crate::kernels::tier::Precision;
use crate::kernels::{BLOCK, BLOCK_STRIDE};
use crate::leaf::{FAR, LEAF_STRIDE, Leaf, Loaded};
use crate::scaling::Scaling;

/// Values asked for ahead of those in use.
const AHEAD: usize = 64;
/// Scaled values in float32 are held within this range: their squares, summed over a block, stay finite.
pub const SINGLE_FAR: f64 = 1.0e15;

/// Where the values lie.
#[derive(Clone, Copy)]
pub enum Origin<'a> {
    /// Every row of the leaf, complete and finite: see [`Leaf::is_plain`].
    Plain(&'a Leaf),
    /// The rows that were kept.
    Loaded(&'a Loaded),
}

/// See the module.
#[derive(Clone, Copy)]
pub struct Scaled<'a> {
    /// Rows.
    pub n: usize,
    /// Row weights, when they are not all 1.
    pub weights: Option<&'a [f64]>,
    origin: Origin<'a>,
    scaling: &'a Scaling,
}

impl<'a> Scaled<'a> {
    /// `n` rows of `origin`.
    pub fn new(origin: Origin<'a>, n: usize, weights: Option<&'a [f64]>, scaling: &'a Scaling) -> Self {
        Self { n, weights, origin, scaling }
    }

    /// Row weights of rows `start..start + n`.
    pub fn weights_of(&self, start: usize, n: usize) -> Option<&'a [f64]> {
        self.weights.map(|w| &w[start..start + n])
    }

    /// Fills block `b`: column j at `to[j * BLOCK_STRIDE..]`, rows beyond the last are zero. Returns its rows.
    pub fn block<T: Entry>(&self, b: usize, to: &mut [T]) -> usize {
        let start = b * BLOCK;
        let n = (self.n - start).min(BLOCK);
        T::run(Fill { rows: self, start, n, to });
        n
    }

    /// Writes all rows, row after row: column j of row i at `to[i * wide + j]`, zero up to `wide`, a multiple of 8.
    #[inline(always)]
    pub fn turn<L: Lanes>(&self, l: L, to: &mut [f64], wide: usize) {
        match self.origin {
            Origin::Loaded(loaded) => {
                let run = |j: usize| Values::F64(&loaded.values[j * LEAF_STRIDE..][..self.n]);
                self.turn_run(l, self.n, run, to, wide);
            }
            Origin::Plain(leaf) => {
                let mut to = to;
                for piece in &leaf.pieces {
                    self.turn_run(l, piece.len, |j| piece.rows.features[j].values(piece.start, piece.len), to, wide);
                    to = &mut to[piece.len * wide..];
                }
            }
        }
    }

    /// A run of `n` rows whose columns `values` lends.
    #[inline(always)]
    fn turn_run<'b, L: Lanes>(
        &self,
        l: L,
        n: usize,
        values: impl Fn(usize) -> Values<'b>,
        to: &mut [f64],
        wide: usize,
    ) {
        let d = self.scaling.dims();
        let zero = l.splat(0.0);
        for j0 in (0..wide).step_by(L::N) {
            let mut columns = [Values::F64(&[]); 8];
            let mut units = [(zero, zero); 8];
            for i in 0..L::N.min(d.saturating_sub(j0)) {
                let (centre, inverse) = self.unit(j0 + i);
                columns[i] = values(j0 + i);
                units[i] = (l.splat(centre), l.splat(inverse));
            }
            let count = L::N.min(d.saturating_sub(j0));
            let mut square = [zero; 8];
            let mut row = 0;
            while row + L::N <= n {
                for i in 0..L::N {
                    square[i] = if i < count {
                        let x = match columns[i] {
                            Values::F64(values) => {
                                l.prefetch(&values[row..], AHEAD);
                                l.load(&values[row..])
                            }
                            Values::F32(values) => widened(l, &values[row..]),
                        };
                        scale_vector(l, x, units[i])
                    } else {
                        zero
                    };
                }
                l.transpose(&mut square[..L::N]);
                for i in 0..L::N {
                    l.store(square[i], &mut to[(row + i) * wide + j0..]);
                }
                row += L::N;
            }
            for row in row..n {
                for i in 0..L::N {
                    let (centre, inverse) = if i < count { self.unit(j0 + i) } else { (0.0, 0.0) };
                    to[row * wide + j0 + i] = match columns[i] {
                        _ if i >= count => 0.0,
                        Values::F64(values) => scale_one(values[row], centre, inverse),
                        Values::F32(values) => scale_one(f64::from(values[row]), centre, inverse),
                    };
                }
            }
        }
    }

    /// One value, the same bits as in its block.
    pub fn value(&self, row: usize, j: usize) -> f64 {
        let (centre, inverse) = self.unit(j);
        let x = match self.origin {
            Origin::Loaded(loaded) => loaded.values[j * LEAF_STRIDE + row],
            Origin::Plain(leaf) => {
                let mut at = row;
                let mut pieces = leaf.pieces.iter();
                loop {
                    let Some(piece) = pieces.next() else { return 0.0 };
                    if at < piece.len {
                        break piece.rows.features[j].value(piece.start + at);
                    }
                    at -= piece.len;
                }
            }
        };
        scale_one(x, centre, inverse)
    }

    fn unit(&self, j: usize) -> (f64, f64) {
        (self.scaling.centre()[j], 1.0 / self.scaling.spread()[j])
    }
}

/// A precision of blocks.
pub trait Entry: Precision {
    /// Writes scaled values; `unit` is centre and inverse spread.
    fn scale<L: Lanes>(l: L, from: &[f64], unit: (f64, f64), to: &mut [Self]);
    /// The same from float32.
    fn scale_single<L: Lanes>(l: L, from: &[f32], unit: (f64, f64), to: &mut [Self]);
}

struct Fill<'a, T> {
    rows: &'a Scaled<'a>,
    start: usize,
    n: usize,
    to: &'a mut [T],
}

impl<T: Entry> AnyKernel<T> for Fill<'_, T> {
    type Out = ();
    #[inline(always)]
    fn run<L: AnyLanes<T = T>>(self, l: L) {
        let Self { rows, start, n, to } = self;
        let l = l.double();
        match rows.origin {
            Origin::Loaded(loaded) => {
                for j in 0..rows.scaling.dims() {
                    let to = &mut to[j * BLOCK_STRIDE..][..BLOCK_STRIDE];
                    T::scale(l, &loaded.values[j * LEAF_STRIDE + start..][..n], rows.unit(j), to);
                    to[n..].fill(T::ZERO);
                }
            }
            Origin::Plain(leaf) => {
                let (mut before, mut at) = (0, 0);
                for piece in &leaf.pieces {
                    let (from, end) = (before.max(start), (before + piece.len).min(start + n));
                    if from < end {
                        for j in 0..rows.scaling.dims() {
                            let to = &mut to[j * BLOCK_STRIDE + at..][..end - from];
                            column(l, &piece.rows.features[j], piece.start + from - before, rows.unit(j), to);
                        }
                        at += end - from;
                    }
                    before += piece.len;
                }
                for j in 0..rows.scaling.dims() {
                    to[j * BLOCK_STRIDE + n..(j + 1) * BLOCK_STRIDE].fill(T::ZERO);
                }
            }
        }
    }
}

/// A run of one column inside a block.
#[inline(always)]
fn column<T: Entry, L: Lanes>(l: L, column: &Column, start: usize, unit: (f64, f64), to: &mut [T]) {
    match column.values(start, to.len()) {
        Values::F64(values) => T::scale(l, values, unit, to),
        Values::F32(values) => T::scale_single(l, values, unit, to),
    }
}

impl Entry for f64 {
    #[inline(always)]
    fn scale<L: Lanes>(l: L, from: &[f64], (centre, inverse): (f64, f64), to: &mut [f64]) {
        let unit = (l.splat(centre), l.splat(inverse));
        let mut targets = to[..from.len()].chunks_exact_mut(L::N);
        let chunks = from.chunks_exact(L::N);
        let rest = chunks.remainder();
        for (from, to) in chunks.zip(&mut targets) {
            l.prefetch(from, BLOCK);
            l.store(scale_vector(l, l.load(from), unit), to);
        }
        for (x, to) in rest.iter().zip(targets.into_remainder()) {
            *to = scale_one(*x, centre, inverse);
        }
    }

    #[inline(always)]
    fn scale_single<L: Lanes>(l: L, from: &[f32], unit: (f64, f64), to: &mut [f64]) {
        let mut wide = [0.0; BLOCK];
        let wide = &mut wide[..from.len()];
        wide.iter_mut().zip(from).for_each(|(w, v)| *w = f64::from(*v));
        Self::scale(l, wide, unit, to);
    }
}

impl Entry for f32 {
    #[inline(always)]
    fn scale<L: Lanes>(l: L, from: &[f64], unit: (f64, f64), to: &mut [f32]) {
        round(l, from, unit, to);
    }

    #[inline(always)]
    fn scale_single<L: Lanes>(l: L, from: &[f32], unit: (f64, f64), to: &mut [f32]) {
        round(l, from, unit, to);
    }
}

/// Scaled in float64 and rounded. Runs of fixed length, which the compiler turns into vectors.
#[inline(always)]
fn round<T: Scalar, L: Lanes>(l: L, from: &[T], (centre, inverse): (f64, f64), to: &mut [f32]) {
    let one = |x: T| {
        let x = (x.to_f64() - centre) * inverse;
        let x = if x > SINGLE_FAR { SINGLE_FAR } else { x };
        (if x > -SINGLE_FAR { x } else { -SINGLE_FAR }) as f32
    };
    let (runs, rest) = from.as_chunks::<32>();
    let (to_runs, to_rest) = to[..from.len()].as_chunks_mut::<32>();
    for (from, to) in runs.iter().zip(to_runs) {
        l.prefetch(from, BLOCK);
        l.prefetch(from, BLOCK + 16);
        for (x, to) in from.iter().zip(to) {
            *to = one(*x);
        }
    }
    for (x, to) in rest.iter().zip(to_rest) {
        *to = one(*x);
    }
}

/// Centred, scaled and held within ±[`FAR`].
#[inline(always)]
pub fn scale_vector<L: Lanes>(l: L, x: L::V, (centre, inverse): (L::V, L::V)) -> L::V {
    let (low, high) = (l.splat(-FAR), l.splat(FAR));
    let x = l.max_or(l.mul(l.sub(x, centre), inverse), low);
    l.select_gt(x, high, high, x)
}

fn scale_one(x: f64, centre: f64, inverse: f64) -> f64 {
    let x = (x - centre) * inverse;
    if x > FAR {
        FAR
    } else if x > -FAR {
        x
    } else {
        -FAR
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::batch::{Reading, Rows};
    use crate::kernels::lanes::Kernel;
    use crate::kernels::tier;
    use crate::leaf::{Cutter, Part};
    use arrow_array::{Float32Array, Float64Array};
    use std::sync::Arc;

    /// Batches of several sizes, so that pieces begin and end inside blocks and vectors.
    fn leaf(sizes: &[usize]) -> Leaf {
        let mut cutter = Cutter::new(0);
        let mut next = 0u32;
        for &len in sizes {
            let values: Vec<f64> = (next..next + len as u32).map(|i| f64::from(i) * 1.37e3 - 5e4).collect();
            next += len as u32;
            let features = vec![
                Column::F32(Float32Array::from(values.iter().map(|v| *v as f32).collect::<Vec<_>>())),
                Column::F64(Float64Array::from(values.iter().map(|v| v * 1e290).collect::<Vec<_>>())),
                Column::F64(Float64Array::from(values)),
            ];
            let rows = Rows { first_row: 0, len, features, weight: None, keep: None, held: None, key: None };
            cutter.push(Arc::new(rows), |_| {});
        }
        cutter.finish().expect("a leaf")
    }

    #[test]
    fn straight_and_loaded_rows_have_the_same_bits() {
        let leaf = leaf(&[1, 190, 7, 300, 5, 64]);
        assert!(leaf.is_plain());
        let mut loaded = Loaded::new(3);
        loaded.load(&leaf, &Reading::default(), Part::Fit).expect("loads");
        let scaling = Scaling::new(vec![3.25, 0.0, -7.0], vec![4.0, 1e-3, 0.5]).expect("a scaling");
        let straight = Scaled::new(Origin::Plain(&leaf), leaf.len(), None, &scaling);
        let kept = Scaled::new(Origin::Loaded(&loaded), loaded.n, None, &scaling);
        for b in 0..leaf.len().div_ceil(BLOCK) {
            let (mut one, mut two) = (vec![1.0; 3 * BLOCK_STRIDE], vec![2.0; 3 * BLOCK_STRIDE]);
            let n = straight.block(b, &mut one);
            assert_eq!(n, kept.block(b, &mut two));
            assert_eq!(one, two);
            for j in 0..3 {
                for i in 0..n {
                    assert_eq!(straight.value(b * BLOCK + i, j), one[j * BLOCK_STRIDE + i]);
                    assert_eq!(kept.value(b * BLOCK + i, j), one[j * BLOCK_STRIDE + i]);
                }
            }
        }
        assert_eq!(straight.value(5, 1).abs(), FAR);
        struct Turn<'a>(Scaled<'a>, &'a mut [f64]);
        impl Kernel for Turn<'_> {
            type Out = ();
            fn run<L: Lanes>(self, l: L) {
                self.0.turn(l, self.1, 8);
            }
        }
        for rows in [straight, kept] {
            let mut turned = vec![1.0; rows.n * 8];
            tier::run(Turn(rows, &mut turned));
            for (i, row) in turned.chunks_exact(8).enumerate() {
                assert_eq!(row[3..], [0.0; 5]);
                (0..3).for_each(|j| assert_eq!(row[j], rows.value(i, j)));
            }
        }
    }
}
