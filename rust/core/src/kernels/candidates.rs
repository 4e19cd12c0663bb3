//! Candidates of a tile: which components the bounds leave, and the log density of one of them with early exit.

use super::bounds::Bounds;
use super::density::rows;
use super::evaluator::{CUT, Evaluator, FLOOR};
use super::lanes::Lanes;

/// Rows of a tile: two vectors on every tier, so at most this many.
pub const MOST_TILE: usize = 16;

/// Components that the bounds do not exclude on the whole tile, ascending; the own component is always among them.
#[inline(always)]
pub fn shortlist<L: Lanes>(
    l: L,
    e: &Evaluator,
    bounds: &Bounds,
    own: usize,
    log: [L::V; 2],
    lead: [L::V; 2],
    out: &mut Vec<u32>,
) {
    let mut values = [0.0; 2 * MOST_TILE];
    for v in 0..2 {
        l.store(log[v], &mut values[v * L::N..]);
        l.store(lead[v], &mut values[MOST_TILE + v * L::N..]);
    }
    let width = 2 * L::N;
    let least = values[..width].iter().fold(f64::INFINITY, |a, &v| a.min(v));
    // `lead` is c minus the squares of the first m rows; c - lead is rho squared but for the rounding of c.
    let far = values[MOST_TILE..MOST_TILE + width].iter().fold(f64::INFINITY, |a, &v| a.min(v));
    let c = e.constant[own];
    let rho = ((c - far).max(0.0) + 1e-12 * (c.abs() + far.abs() + 1.0)).sqrt() * (1.0 + 1e-9);
    let wanted = least - CUT;
    let wanted = wanted - 1e-9 * (wanted.abs() + 1.0);
    let (rho, wanted, zero) = (l.splat(rho), l.splat(wanted), l.splat(0.0));
    let mut bound = [0.0; 8];
    for k0 in (0..e.pad).step_by(L::N) {
        let at = own * bounds.pad + k0;
        let g = l.max_or(l.fnma(l.load(&bounds.stretch[at..]), rho, l.load(&bounds.distance[at..])), zero);
        let b = l.fnma(g, g, l.load(&e.constant_padded[k0..]));
        if !l.any_ge(b, wanted) && !(k0..k0 + L::N).contains(&own) {
            continue;
        }
        l.store(l.keep_ge(b, wanted, l.splat(1.0)), &mut bound);
        out.extend((0..L::N).filter(|&i| bound[i] > 0.0 || k0 + i == own).map(|i| (k0 + i) as u32));
    }
}

/// The log densities of one component on a tile, on their way: rows of the factor up to `done` are in.
#[derive(Clone, Copy)]
pub struct Running<L: Lanes> {
    /// The constant less the squares so far: it can only fall.
    pub log: [L::V; 2],
    done: usize,
    /// Where the factor goes on.
    at: usize,
}

/// Columns of a diagonal factor between two looks at whether a component is still in the running.
const STEP: usize = 8;

impl<L: Lanes> Running<L> {
    /// The log densities of component `k` before any row of the factor.
    #[inline(always)]
    pub fn new(l: L, e: &Evaluator, k: usize) -> Self {
        Self { log: [l.splat(e.constant[k]); 2], done: 0, at: 0 }
    }

    /// Goes on from `log` after the first step.
    #[inline(always)]
    pub fn resume(e: &Evaluator, log: [L::V; 2]) -> Self {
        let done = e.d.min(if e.triangular { 4 } else { STEP });
        let at = if e.triangular { done + done * (done + 1) / 2 } else { 2 * done };
        Self { log, done, at }
    }

    /// Rows of the factor that are in.
    #[inline(always)]
    pub fn done(&self) -> usize {
        self.done
    }

    /// Whether every row of the factor is in.
    #[inline(always)]
    pub fn is_done(&self, e: &Evaluator) -> bool {
        self.done == e.d
    }

    /// Takes the next rows of the factor: a tile of four, or eight of a diagonal. Returns how many of its values were used.
    #[inline(always)]
    pub fn step(&mut self, l: L, e: &Evaluator, k: usize, x: &[f64]) -> usize {
        let (d, i0) = (e.d, self.done);
        let packed = &e.packed_of(k)[self.at..];
        let used;
        if e.triangular {
            let r = (d - i0).min(4);
            used = r + r * i0 + r * (r + 1) / 2;
            let tile = &packed[..used];
            match (r, L::N) {
                (4, 8) => rows::<L, 2, 4, 16>(l, tile, i0, x, &mut self.log),
                (4, _) => rows::<L, 2, 4, 8>(l, tile, i0, x, &mut self.log),
                (3, 8) => rows::<L, 2, 3, 16>(l, tile, i0, x, &mut self.log),
                (3, _) => rows::<L, 2, 3, 8>(l, tile, i0, x, &mut self.log),
                (2, 8) => rows::<L, 2, 2, 16>(l, tile, i0, x, &mut self.log),
                (2, _) => rows::<L, 2, 2, 8>(l, tile, i0, x, &mut self.log),
                (_, 8) => rows::<L, 2, 1, 16>(l, tile, i0, x, &mut self.log),
                (_, _) => rows::<L, 2, 1, 8>(l, tile, i0, x, &mut self.log),
            }
            self.done += r;
        } else {
            let r = (d - i0).min(STEP);
            used = 2 * r;
            for (p, x) in packed[..used].chunks_exact(2).zip(x[i0 * 2 * L::N..].chunks_exact(2 * L::N)) {
                let (a, b) = (l.splat(p[0]), l.splat(p[1]));
                for v in 0..2 {
                    let y = l.fma(a, l.load(&x[v * L::N..]), b);
                    self.log[v] = l.fnma(y, y, self.log[v]);
                }
            }
            self.done += r;
        }
        self.at += used;
        used
    }

    /// Whether some row is not more than 37 nats below `best`.
    #[inline(always)]
    pub fn matters(&self, l: L, best: &[L::V; 2]) -> bool {
        let cut = l.splat(-CUT);
        l.any_ge(l.max_or(l.sub(self.log[0], best[0]), l.sub(self.log[1], best[1])), cut)
    }

    /// The log densities, held above the floor; every row of the factor must be in.
    #[inline(always)]
    pub fn finish(&self, l: L) -> [L::V; 2] {
        let floor = l.splat(FLOOR);
        [l.max_or(self.log[0], floor), l.max_or(self.log[1], floor)]
    }
}

/// The columns of a tile as component `k` takes them: less its mean where that is far from the centre.
#[inline(always)]
pub fn columns_for<'a, L: Lanes>(l: L, e: &Evaluator, k: usize, x: &'a [f64], shifted: &'a mut [f64]) -> &'a [f64] {
    if !e.far[k] {
        return x;
    }
    for (j, x) in x.chunks_exact(2 * L::N).enumerate() {
        let mean = l.splat(e.scaled.means[k * e.d + j]);
        for v in 0..2 {
            l.store(l.sub(l.load(&x[v * L::N..]), mean), &mut shifted[j * 2 * L::N + v * L::N..]);
        }
    }
    shifted
}
