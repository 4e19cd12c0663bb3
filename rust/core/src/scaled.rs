//! The rows of a leaf as blocks of scaled columns, `(x - centre) / spread` held within ±[`FAR`]: straight from the batches
//! where every row is taken as it is, else from the leaf as it was loaded.

use crate::batch::{Column, Values};
use crate::kernels::lanes::{Kernel, Lanes};
use crate::kernels::{BLOCK, BLOCK_STRIDE, tier};
use crate::leaf::{FAR, LEAF_STRIDE, Leaf, Loaded};
use crate::scaling::Scaling;

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
    next: Option<&'a Leaf>,
}

impl<'a> Scaled<'a> {
    /// `n` rows of `origin`.
    pub fn new(origin: Origin<'a>, n: usize, weights: Option<&'a [f64]>, scaling: &'a Scaling) -> Self {
        Self { n, weights, origin, scaling, next: None }
    }

    /// The same with the leaf that probably comes next.
    pub fn before(self, next: Option<&'a Leaf>) -> Self {
        Self { next, ..self }
    }

    /// Row weights of rows `start..start + n`.
    pub fn weights_of(&self, start: usize, n: usize) -> Option<&'a [f64]> {
        self.weights.map(|w| &w[start..start + n])
    }

    /// Fills block `b`: column j at `to[j * BLOCK_STRIDE..]`, rows beyond the last are zero. Returns its rows.
    pub fn block(&self, b: usize, to: &mut [f64]) -> usize {
        let start = b * BLOCK;
        let n = (self.n - start).min(BLOCK);
        tier::run(Fill { rows: self, start, n, to });
        n
    }

    /// Asks for the values of rows `start..start + 2 L::N` of the leaf that comes next.
    #[inline(always)]
    pub fn prefetch_next<L: Lanes>(&self, l: L, start: usize) {
        let Some(piece) = self.next.and_then(|leaf| leaf.pieces.first()) else { return };
        if start + 2 * L::N > piece.len {
            return;
        }
        for column in &piece.rows.features {
            if let Values::F64(values) = column.values(piece.start + start, 2 * L::N) {
                l.prefetch(values, 0);
                l.prefetch(values, L::N);
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

struct Fill<'a> {
    rows: &'a Scaled<'a>,
    start: usize,
    n: usize,
    to: &'a mut [f64],
}

impl Kernel for Fill<'_> {
    type Out = ();
    #[inline(always)]
    fn run<L: Lanes>(self, l: L) {
        let Self { rows, start, n, to } = self;
        match rows.origin {
            Origin::Loaded(loaded) => {
                for j in 0..rows.scaling.dims() {
                    let to = &mut to[j * BLOCK_STRIDE..][..BLOCK_STRIDE];
                    scale(l, &loaded.values[j * LEAF_STRIDE + start..][..n], rows.unit(j), to);
                    to[n..].fill(0.0);
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
                    to[j * BLOCK_STRIDE + n..(j + 1) * BLOCK_STRIDE].fill(0.0);
                }
            }
        }
    }
}

/// A run of one column inside a block.
#[inline(always)]
fn column<L: Lanes>(l: L, column: &Column, start: usize, unit: (f64, f64), to: &mut [f64]) {
    match column.values(start, to.len()) {
        Values::F64(values) => scale(l, values, unit, to),
        Values::F32(values) => {
            let mut wide = [0.0; BLOCK];
            let wide = &mut wide[..to.len()];
            wide.iter_mut().zip(values).for_each(|(w, v)| *w = f64::from(*v));
            scale(l, wide, unit, to);
        }
    }
}

#[inline(always)]
fn scale<L: Lanes>(l: L, from: &[f64], (centre, inverse): (f64, f64), to: &mut [f64]) {
    let (c, s) = (l.splat(centre), l.splat(inverse));
    let (low, high) = (l.splat(-FAR), l.splat(FAR));
    let mut targets = to[..from.len()].chunks_exact_mut(L::N);
    let chunks = from.chunks_exact(L::N);
    let rest = chunks.remainder();
    for (from, to) in chunks.zip(&mut targets) {
        l.prefetch(from, BLOCK);
        let x = l.max_or(l.mul(l.sub(l.load(from), c), s), low);
        l.store(l.select_gt(x, high, high, x), to);
    }
    for (x, to) in rest.iter().zip(targets.into_remainder()) {
        *to = scale_one(*x, centre, inverse);
    }
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
    }
}
