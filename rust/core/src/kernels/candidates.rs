//! Candidates of a tile: which components the bounds leave, and the log density of one of them with early exit.

use super::bounds::Bounds;
use super::density::rows;
use super::evaluator::{CUT, Evaluator, FLOOR};
use super::lanes::Lanes;

/// Rows of a tile: two vectors on every tier, so at most this many.
pub const MOST_TILE: usize = 16;

/// What the own component of a tile says of its rows.
pub struct Own<L: Lanes> {
    own: usize,
    /// Log densities.
    pub log: [L::V; 2],
    /// At least the largest distance |W (x - mu)| over the first m columns.
    rho: f64,
    /// The same over all columns.
    reach: f64,
    /// Below the smallest log density less 37 nats, rounding covered.
    wanted: f64,
    /// How far below a row's log density a bound must lie, rounding covered.
    cut: f64,
}

impl<L: Lanes> Own<L> {
    /// From the log densities and their running values after the first m rows of the factor.
    #[inline(always)]
    pub fn new(l: L, e: &Evaluator, own: usize, log: [L::V; 2], lead: [L::V; 2]) -> Self {
        let mut values = [0.0; 2 * MOST_TILE];
        for v in 0..2 {
            l.store(log[v], &mut values[v * L::N..]);
            l.store(lead[v], &mut values[MOST_TILE + v * L::N..]);
        }
        let width = 2 * L::N;
        let least = values[..width].iter().fold(f64::INFINITY, |a, &v| a.min(v));
        let most = values[..width].iter().fold(f64::NEG_INFINITY, |a, &v| a.max(v));
        // `lead` is c minus the squares of the first m rows; c - lead is rho squared but for the rounding of c.
        let far = values[MOST_TILE..MOST_TILE + width].iter().fold(f64::INFINITY, |a, &v| a.min(v));
        let c = e.constant[own];
        let distance = |low: f64| ((c - low).max(0.0) + 1e-12 * (c.abs() + low.abs() + 1.0)).sqrt() * (1.0 + 1e-9);
        let wanted = least - CUT;
        let cut = CUT + 1e-9 * (least.abs() + most.abs() + CUT);
        let wanted = wanted - 1e-9 * (wanted.abs() + 1.0);
        Self { own, log, rho: distance(far), reach: distance(least), wanted, cut }
    }

    /// Components that the distances do not exclude on the whole tile, ascending; the own component is always among them.
    #[inline(always)]
    pub fn shortlist(&self, l: L, e: &Evaluator, bounds: &Bounds, out: &mut Vec<u32>) {
        let (rho, wanted, zero) = (l.splat(self.rho), l.splat(self.wanted), l.splat(0.0));
        for k0 in (0..e.pad).step_by(L::N) {
            let at = self.own * bounds.pad + k0;
            let g = l.max_or(l.fnma(l.load(&bounds.stretch[at..]), rho, l.load(&bounds.distance[at..])), zero);
            let b = l.fnma(g, g, l.load(&e.constant_padded[k0..]));
            let mut bits = !l.bits_gt(wanted, b) & ((1 << L::N) - 1);
            if (k0..k0 + L::N).contains(&self.own) {
                bits |= 1 << (self.own - k0);
            }
            while bits != 0 {
                let k = k0 + bits.trailing_zeros() as usize;
                bits &= bits - 1;
                if k < e.k {
                    out.push(k as u32);
                }
            }
        }
    }

    /// Drops the components that their directions exclude on the whole tile `x`.
    #[inline(always)]
    pub fn direct(&self, l: L, e: &Evaluator, bounds: &Bounds, x: &[f64], list: &mut Vec<u32>) {
        if bounds.direction_len == 0 {
            return;
        }
        let m = bounds.direction_len - 3;
        let (zero, cut) = (l.splat(0.0), l.splat(-self.cut));
        let mut count = 0;
        for i in 0..list.len() {
            let k = list[i] as usize;
            let (a, rest) = bounds.direction(self.own, k).split_at(m);
            let mut way = [l.splat(rest[0]); 2];
            for (a, x) in a.iter().zip(x.chunks_exact(2 * L::N)) {
                let a = l.splat(*a);
                for v in 0..2 {
                    way[v] = l.fma(a, l.load(&x[v * L::N..]), way[v]);
                }
            }
            let slack = l.splat(rest[1] + rest[2] * self.reach);
            let constant = l.splat(e.constant[k]);
            let mut above = [zero; 2];
            for v in 0..2 {
                let far = l.max_or(way[v], l.sub(zero, way[v]));
                let far = l.max_or(l.sub(far, slack), zero);
                above[v] = l.sub(l.fnma(far, far, constant), self.log[v]);
            }
            list[count] = k as u32;
            count += usize::from(k == self.own || l.any_ge(l.max_or(above[0], above[1]), cut));
        }
        list.truncate(count);
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
