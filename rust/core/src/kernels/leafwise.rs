//! A whole leaf on the skipping path, shown to the measures of its mixture.

use super::evaluator::{BLOCK, Evaluator};
use super::lanes::{Kernel, Lanes};
use super::posterior;
use super::sparse::Sparse;
use super::tier;
use crate::scaled::Scaled;

/// Sums of one block.
#[derive(Clone, Copy, Default)]
pub struct BlockTotals {
    /// Rows.
    pub n: usize,
    /// Sum of row weight times log density.
    pub log_likelihood: f64,
    /// Sum of row weights.
    pub weight: f64,
    /// Sum of row weight times entropy of the responsibilities, when asked for.
    pub entropy: f64,
}

/// An evaluated leaf.
pub struct SparseLeaf<'a> {
    /// The mixture.
    pub evaluator: &'a Evaluator,
    /// Sums by block, in order.
    pub totals: Vec<BlockTotals>,
    sparse: &'a mut Sparse,
}

struct Run<'a> {
    e: &'a Evaluator,
    rows: &'a Scaled<'a>,
    labels: &'a [u16],
    sure: bool,
    mixed: bool,
    sparse: &'a mut Sparse,
}

impl Kernel for Run<'_> {
    type Out = Option<Vec<BlockTotals>>;
    #[inline(always)]
    fn run<L: Lanes>(self, l: L) -> Self::Out {
        let Self { e, rows, labels, sure, mixed, sparse } = self;
        let bounds = e.bounds()?;
        if !sparse.evaluate(l, e, bounds, rows, labels, sure, mixed) {
            return None;
        }
        let mut logs = [0.0; super::BLOCK_STRIDE];
        let totals = (0..rows.n)
            .step_by(BLOCK)
            .map(|start| {
                let n = (rows.n - start).min(BLOCK);
                let w = rows.weights_of(start, n);
                let sums = sparse.block_mut(start / BLOCK);
                if mixed {
                    posterior::entropies(l, n, sums);
                }
                BlockTotals {
                    n,
                    log_likelihood: posterior::log_likelihood(l, n, w, sums, &mut logs),
                    weight: posterior::weight(n, w),
                    entropy: if mixed { posterior::entropy(n, w, sums) } else { 0.0 },
                }
            })
            .collect();
        Some(totals)
    }
}

struct Sums<'a> {
    e: &'a Evaluator,
    sums: &'a mut [f64],
    sparse: &'a mut Sparse,
}

impl Kernel for Sums<'_> {
    type Out = ();
    #[inline(always)]
    fn run<L: Lanes>(self, l: L) {
        self.sparse.add_moments(l, self.e, self.sums);
    }
}

impl<'a> SparseLeaf<'a> {
    /// Evaluates the rows of a leaf, with a likely component of each (`sure`: see [`Sparse::evaluate`]); `None` where the dense path must or should be taken.
    pub fn evaluate(
        evaluator: &'a Evaluator,
        rows: &Scaled<'_>,
        labels: &[u16],
        sure: bool,
        mixed: bool,
        sparse: &'a mut Sparse,
    ) -> Option<Self> {
        let totals = tier::run(Run { e: evaluator, rows, labels, sure, mixed, sparse: &mut *sparse })?;
        Some(Self { evaluator, totals, sparse })
    }

    /// See [`Sparse::add_moments`].
    pub fn add_moments(&mut self, sums: &mut [f64]) {
        tier::run(Sums { e: self.evaluator, sums, sparse: &mut *self.sparse });
    }

    /// See [`Sparse::shares`].
    pub fn shares(&self, put: impl FnMut(usize, f64)) {
        self.sparse.shares(self.evaluator.k, put);
    }

    /// Whether skipping paid.
    pub fn paid(&self) -> bool {
        self.sparse.paid
    }

    /// Likely component of each row.
    pub fn labels(&self) -> &[u16] {
        &self.sparse.labels
    }
}
