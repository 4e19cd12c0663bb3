//! Scores of each row of a block: log density, best and second component; Mahalanobis distances.

use super::density::densities;
use super::evaluator::{BLOCK_STRIDE, Evaluator, Scratch};
use super::lanes::{Kernel, Lanes};
use super::{posterior, tier};

/// What scoring gives for each row of a block.
pub struct RowScores {
    /// Log density.
    pub log: Vec<f64>,
    /// Position of the best component.
    pub best: Vec<f64>,
    /// Its responsibility.
    pub best_share: Vec<f64>,
    /// Position of the second, -1 when there is none.
    pub second: Vec<f64>,
}

impl RowScores {
    /// Room for a block.
    pub fn new() -> Self {
        let v = || vec![0.0; BLOCK_STRIDE];
        Self { log: v(), best: v(), best_share: v(), second: v() }
    }
}

impl Default for RowScores {
    fn default() -> Self {
        Self::new()
    }
}

struct Score<'a> {
    e: &'a Evaluator,
    x: &'a [f64],
    n: usize,
    scratch: &'a mut Scratch,
    out: &'a mut RowScores,
}

impl Kernel for Score<'_> {
    type Out = ();
    #[inline(always)]
    fn run<L: Lanes>(self, l: L) {
        let Self { e, x, n, scratch: s, out } = self;
        densities(l, e, x, n, &mut s.shifted, &mut s.log);
        if posterior::exponentials(l, e.k, n, false, &mut s.log, &mut s.sums) {
            e.mend(x, n, &mut s.log, &mut s.sums);
        }
        posterior::row_logs(l, n, &s.sums, &mut out.log);
        let width = n.div_ceil(L::N) * L::N;
        let none = l.splat(-1.0);
        for row in (0..width).step_by(L::N) {
            let (mut first, mut second) = (none, none);
            let (mut i, mut j) = (none, none);
            for k in 0..e.k {
                let v = l.load(&s.log[k * BLOCK_STRIDE + row..]);
                let at = l.splat(k as f64);
                let place = l.select_gt(v, second, at, j);
                let value = l.max_or(v, second);
                j = l.select_gt(v, first, i, place);
                second = l.select_gt(v, first, first, value);
                i = l.select_gt(v, first, at, i);
                first = l.max_or(v, first);
            }
            l.store(i, &mut out.best[row..]);
            l.store(j, &mut out.second[row..]);
            l.store(l.div(first, l.load(&s.sums.sum[row..])), &mut out.best_share[row..]);
        }
    }
}

/// Scores `n` rows of a block.
pub fn score(e: &Evaluator, x: &[f64], n: usize, scratch: &mut Scratch, out: &mut RowScores) {
    tier::run(Score { e, x, n, scratch, out });
}

/// Mahalanobis distances: `out[k * BLOCK_STRIDE + row]`.
pub fn distances(e: &Evaluator, x: &[f64], n: usize, out: &mut [f64]) {
    let mut y = vec![0.0; e.d];
    for k in 0..e.k {
        for row in 0..n {
            for j in 0..e.d {
                y[j] = x[j * BLOCK_STRIDE + row] - e.scaled.means[k * e.d + j];
            }
            out[k * BLOCK_STRIDE + row] = (2.0 * e.distance_squared(k, &mut y)).sqrt();
        }
    }
}
