//! Scores of each row of a block: log density, best and second component, responsibilities; Mahalanobis distances.

use super::density::densities;
use super::evaluator::{BLOCK_STRIDE, Evaluator, FLOOR};
use super::lanes::{Kernel, Lanes};
use super::posterior::{self, RowSums};
use super::tier;

/// A density this far below the best of its row still has the exponential 1: the half of an ulp of 1, and a hair.
const EQUAL: f64 = -(1.0 / (1u64 << 54) as f64) * (1.0 + f64::EPSILON);

/// What to tell of each row.
#[derive(Clone, Copy, Default, Debug, PartialEq, Eq)]
pub struct Asked {
    /// The log density.
    pub log: bool,
    /// The most likely component.
    pub best: bool,
    /// Its responsibility, and the second most likely component.
    pub second: bool,
    /// All responsibilities.
    pub all: bool,
}

/// Working room of one thread, and what was found; sized to the mixture and to what was asked.
#[derive(Default)]
pub struct Room {
    /// Log density.
    pub log: Vec<f64>,
    /// Label of the best component.
    pub best: Vec<f64>,
    /// Its responsibility.
    pub best_share: Vec<f64>,
    /// Label of the second, -1 when there is none.
    pub second: Vec<f64>,
    /// Responsibilities, `pad` places a row.
    pub all: Vec<f64>,
    density: Vec<f64>,
    shifted: Vec<f64>,
    share: Vec<f64>,
    sums: RowSums,
}

impl Room {
    /// Makes room for a block of `e`. What is there already stays.
    pub fn fit(&mut self, e: &Evaluator, asked: Asked) {
        let one = |v: &mut Vec<f64>, places: usize| {
            if v.len() < places {
                v.resize(places, 0.0);
            }
        };
        for v in [&mut self.log, &mut self.best, &mut self.best_share, &mut self.second, &mut self.share] {
            one(v, BLOCK_STRIDE);
        }
        one(&mut self.density, e.k * BLOCK_STRIDE);
        if e.far.contains(&true) {
            one(&mut self.shifted, e.d * BLOCK_STRIDE);
        }
        if asked.all {
            one(&mut self.all, e.pad * BLOCK_STRIDE);
        }
    }

    /// Bytes that it holds.
    pub fn bytes(&self) -> usize {
        8 * (self.density.len() + self.shifted.len() + self.all.len() + 8 * BLOCK_STRIDE)
    }
}

struct Score<'a> {
    e: &'a Evaluator,
    labels: &'a [f64],
    asked: Asked,
    x: &'a [f64],
    n: usize,
    room: &'a mut Room,
}

impl Kernel for Score<'_> {
    type Out = ();
    #[inline(always)]
    fn run<L: Lanes>(self, l: L) {
        let Self { e, labels, asked, x, n, room: r } = self;
        densities(l, e, x, n, &mut r.shifted, &mut r.density);
        if !(asked.log || asked.second || asked.all) {
            if likeliest(l, labels, n, &r.density, &mut r.sums, &mut r.best) {
                e.mend(x, n, &mut r.density, &mut r.sums);
                nearest(labels, n, &r.density, &r.sums, &mut r.best);
            }
            return;
        }
        if posterior::exponentials(l, e.k, n, false, &mut r.density, &mut r.sums) {
            e.mend(x, n, &mut r.density, &mut r.sums);
        }
        if asked.log {
            posterior::row_logs(l, n, &r.sums, &mut r.log);
        }
        if asked.second {
            ranks(l, labels, n, r);
        }
        if asked.all {
            posterior::responsibilities(l, e.k, e.pad, n, None, 1.0, &r.density, &r.sums, &mut r.share, &mut r.all);
        }
    }
}

/// The best two of the exponentials of each row; the first where some are equal.
#[inline(always)]
fn ranks<L: Lanes>(l: L, labels: &[f64], n: usize, r: &mut Room) {
    let width = n.div_ceil(L::N) * L::N;
    let none = l.splat(-1.0);
    for row in (0..width).step_by(L::N) {
        let (mut first, mut second) = (none, none);
        let (mut i, mut j) = (none, none);
        for (line, &label) in r.density.chunks_exact(BLOCK_STRIDE).zip(labels) {
            let v = l.load(&line[row..]);
            let at = l.splat(label);
            let place = l.select_gt(v, second, at, j);
            let value = l.max_or(v, second);
            j = l.select_gt(v, first, i, place);
            second = l.select_gt(v, first, first, value);
            i = l.select_gt(v, first, at, i);
            first = l.max_or(v, first);
        }
        l.store(i, &mut r.best[row..]);
        l.store(j, &mut r.second[row..]);
        l.store(l.div(first, l.load(&r.sums.sum[row..])), &mut r.best_share[row..]);
    }
}

/// The best of the log densities of each row, the very one that [`ranks`] finds by the exponentials. Returns whether some
/// row has every density at the floor, so that it needs [`Evaluator::mend`].
#[inline(always)]
fn likeliest<L: Lanes>(l: L, labels: &[f64], n: usize, log: &[f64], sums: &mut RowSums, best: &mut [f64]) -> bool {
    let width = n.div_ceil(L::N) * L::N;
    let (floor, one, zero, equal) = (l.splat(FLOOR), l.splat(1.0), l.splat(0.0), l.splat(EQUAL));
    let mut far = false;
    for row in (0..width).step_by(L::N) {
        let (mut most, mut i) = (floor, l.splat(-1.0));
        for (line, &label) in log.chunks_exact(BLOCK_STRIDE).zip(labels) {
            let v = l.load(&line[row..]);
            i = l.select_gt(v, most, l.splat(label), i);
            most = l.max_or(v, most);
        }
        // Near 0 floats are so dense that different densities have equal exponentials: the first of them is the best.
        if l.any_ge(l.fnma(most, most, one), zero) {
            for (line, &label) in log.chunks_exact(BLOCK_STRIDE).zip(labels).rev() {
                i = l.select_gt(l.sub(l.load(&line[row..]), most), equal, l.splat(label), i);
            }
        }
        far |= l.any_le(most, floor);
        l.store(most, &mut sums.most[row..]);
        l.store(i, &mut best[row..]);
    }
    far
}

/// The best of the rows that were mended.
fn nearest(labels: &[f64], n: usize, mended: &[f64], sums: &RowSums, best: &mut [f64]) {
    for row in (0..n).filter(|&row| sums.most[row] <= FLOOR) {
        for (line, &label) in mended.chunks_exact(BLOCK_STRIDE).zip(labels) {
            if line[row] == 1.0 {
                best[row] = label;
            }
        }
    }
}

/// Scores `n` rows of a block. `labels` has a number a component, by which the best and the second are told.
pub fn score(e: &Evaluator, labels: &[f64], asked: Asked, x: &[f64], n: usize, room: &mut Room) {
    tier::run(Score { e, labels, asked, x, n, room });
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

#[cfg(test)]
mod tests {
    use super::*;
    use crate::kernels::BLOCK;
    use crate::kernels::plain::alone;
    use crate::kernels::tier::Tier;
    use crate::random::Stream;

    /// The best by the log densities and by their exponentials.
    struct Both<'a>(&'a [f64], usize, usize, &'a [f64]);

    impl Kernel for Both<'_> {
        type Out = (Vec<f64>, Vec<f64>);
        #[inline(always)]
        fn run<L: Lanes>(self, l: L) -> Self::Out {
            let Self(log, k, n, labels) = self;
            let (mut quick, mut sums) = (vec![0.0; BLOCK_STRIDE], RowSums::default());
            likeliest(l, labels, n, log, &mut sums, &mut quick);
            let one = || vec![0.0; BLOCK_STRIDE];
            let mut room =
                Room { density: log.to_vec(), best: one(), second: one(), best_share: one(), ..Room::default() };
            posterior::exponentials(l, k, n, false, &mut room.density, &mut room.sums);
            ranks(l, labels, n, &mut room);
            (quick[..n].to_vec(), room.best[..n].to_vec())
        }
    }

    #[test]
    fn the_best_of_densities_a_few_ulps_apart_is_the_best_of_their_exponentials() {
        let _guard = alone();
        let mut stream = Stream::new(4, 4);
        let (k, n) = (5, BLOCK - 3);
        let labels = [40.0, 7.0, 0.0, 3.0, 12.0];
        let mut unlike = 0;
        for scale in [0.0, 1e-300, 1e-17, 1e-10, 0.01, 0.1, 0.24, 0.26, 0.49, 0.51, 0.99, 1.0, 1.01, 3.0, 700.0] {
            for sign in [-1.0, 1.0] {
                let mut log = vec![0.0; k * BLOCK_STRIDE];
                for row in 0..BLOCK {
                    let base = f64::to_bits(scale * (1.0 + 1e-3 * stream.uniform()));
                    let ulps = [1.0, 4.0, 300.0][row % 3];
                    for c in 0..k {
                        log[c * BLOCK_STRIDE + row] = sign * f64::from_bits(base + (ulps * stream.uniform()) as u64);
                    }
                }
                for tier in Tier::ALL.into_iter().filter(|t| t.usable()) {
                    let (quick, full) = tier::run_on(tier, Both(&log, k, n, &labels));
                    assert_eq!(quick, full, "{} {scale} {sign}", tier.name());
                    unlike += (0..n)
                        .filter(|&row| {
                            let of = |c: usize| log[c * BLOCK_STRIDE + row];
                            let most = (1..k).fold(0, |best, c| if of(c) > of(best) { c } else { best });
                            labels[most] != full[row]
                        })
                        .count();
                }
            }
        }
        assert!(unlike > 100, "{unlike}: the case is not in the data");
    }
}
