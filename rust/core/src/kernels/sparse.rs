//! The skipping path: a leaf whose rows each matter to few components. Same bits as the dense path.
//!
//! Rows are grouped by their likely component (a label of an earlier pass: a screen only) into tiles. A tile evaluates its
//! own component first, drops what the bounds of `bounds` exclude, and leaves off a component as soon as its running log
//! density, which can only fall, is more than 37 nats below the best so far on every row. What is evaluated to the end goes
//! through the operations of `density` and `posterior` in the same order; what is not would have been exactly 0 there. The
//! statistics then take each component's rows in row order, as the dense chains do.

use super::bounds::Bounds;
use super::candidates::{MOST_TILE, Own, Running, columns_for};
use super::evaluator::{BLOCK, CUT, Evaluator, FLOOR};
use super::gathered;
use super::lanes::Lanes;
use super::math;
use super::pairs::Pairs;
use super::posterior::RowSums;
use super::turned::Turned;
use crate::leaf::LEAF_ROWS;
use crate::scaled::Scaled;

/// Tiles evaluated before it is judged whether skipping pays.
const TRIAL: usize = 3;

/// A leaf on the skipping path: working room and results.
#[derive(Default)]
pub struct Sparse {
    /// Row (within the loaded leaf) at each place; a tile's spare places repeat its last row.
    order: Vec<u16>,
    tiles: Vec<Tile>,
    counts: Vec<u32>,
    next: Vec<u32>,
    turned: Turned,
    /// The columns of one tile.
    data: Vec<f64>,
    shifted: Vec<f64>,
    candidates: Vec<u32>,
    /// Log densities, then exponentials, of the candidates of one tile.
    logs: Vec<f64>,
    pairs: Pairs,
    sums: Vec<RowSums>,
    chunk: gathered::Chunk,
    /// Sums of eight components, each in the order of features.
    found: Vec<f64>,
    /// Likely component of each row after this pass.
    pub labels: Vec<u16>,
    /// Whether skipping took fewer operations than the dense path, by the counts of the whole leaf.
    pub paid: bool,
    work: Work,
    /// Whether tiles are only tried.
    trying: bool,
}

#[derive(Clone, Copy)]
struct Tile {
    own: u32,
    start: u32,
    /// Places that are rows, not spares.
    live: u32,
}

/// What was done, in counted operations.
#[derive(Clone, Copy, Default, Debug)]
struct Work {
    /// Products of rows of factors, and of directions, with columns.
    products: usize,
    /// Exponentials of tiles.
    exponentials: usize,
    /// Rows times components with responsibility above 0.
    pairs: usize,
}

impl Sparse {
    /// Evaluates the rows of a leaf. False: the dense path is the better one (or must be taken, where a row is beyond every
    /// density); nothing was changed but working room. `sure`: skipping paid in the last pass, so no trial is made.
    #[inline(always)]
    pub fn evaluate<L: Lanes>(
        &mut self,
        l: L,
        e: &Evaluator,
        bounds: &Bounds,
        rows: &Scaled<'_>,
        labels: &[u16],
        sure: bool,
        mixed: bool,
    ) -> bool {
        let (n, weights) = (rows.n, rows.weights);
        let width = 2 * L::N;
        self.data.resize(e.d * MOST_TILE, 0.0);
        self.shifted.resize(e.d * MOST_TILE, 0.0);
        if !sure && !self.trial(l, e, bounds, rows, labels, mixed) {
            return false;
        }
        while self.sums.len() < LEAF_ROWS.div_ceil(BLOCK) {
            self.sums.push(RowSums::new());
        }
        // What a tile with its own component alone has to say is said beforehand: sum 1, nothing mixed, the same label.
        for sums in &mut self.sums[..n.div_ceil(BLOCK)] {
            sums.sum.fill(1.0);
            sums.mixed.fill(0.0);
        }
        self.labels.clear();
        self.labels.extend_from_slice(&labels[..n]);
        self.pairs.clear(e.k);
        self.work = Work::default();
        self.group(e.k, n, labels, width);
        self.turned.fill(l, rows, e.d);
        for t in 0..self.tiles.len() {
            let tile = self.tiles[t];
            self.turned.tile(l, &self.order[tile.start as usize..][..width], &mut self.data);
            if !self.tile(l, e, bounds, tile, weights, mixed) {
                return false;
            }
        }
        self.paid = self.pays(e, width, self.tiles.len(), n);
        true
    }

    /// Whether skipping pays on a few tiles spread over the leaf. Nothing is noted of their rows.
    #[inline(always)]
    fn trial<L: Lanes>(
        &mut self,
        l: L,
        e: &Evaluator,
        bounds: &Bounds,
        rows: &Scaled<'_>,
        labels: &[u16],
        mixed: bool,
    ) -> bool {
        let (n, width) = (rows.n, 2 * L::N);
        (self.work, self.trying) = (Work::default(), true);
        let mut live = 0;
        for i in 0..TRIAL {
            let first = (2 * i + 1) * n / (2 * TRIAL);
            let own = labels[first];
            self.order.clear();
            let same = labels[first..n].iter().enumerate().filter(|(_, q)| **q == own);
            self.order.extend(same.map(|(at, _)| (first + at) as u16).take(width));
            let tile = Tile { own: u32::from(own), start: 0, live: self.order.len() as u32 };
            live += self.order.len();
            self.order.resize(width, self.order[self.order.len() - 1]);
            for (i, &row) in self.order.iter().enumerate() {
                for j in 0..e.d {
                    self.data[j * width + i] = rows.value(usize::from(row), j);
                }
            }
            if !self.tile(l, e, bounds, tile, rows.weights, mixed) {
                self.trying = false;
                return false;
            }
        }
        self.trying = false;
        self.pays(e, width, TRIAL, live)
    }

    /// Places rows by label, in row order within a label, each group filled up to whole tiles.
    fn group(&mut self, k: usize, n: usize, labels: &[u16], width: usize) {
        self.counts.clear();
        self.counts.resize(k, 0);
        labels[..n].iter().for_each(|&q| self.counts[usize::from(q)] += 1);
        self.tiles.clear();
        self.next.clear();
        let mut at = 0;
        for (q, &count) in self.counts.iter().enumerate() {
            self.next.push(at);
            for done in (0..count).step_by(width) {
                self.tiles.push(Tile { own: q as u32, start: at, live: (count - done).min(width as u32) });
                at += width as u32;
            }
        }
        self.order.resize(at as usize, 0);
        for (row, &q) in labels[..n].iter().enumerate() {
            let place = &mut self.next[usize::from(q)];
            self.order[*place as usize] = row as u16;
            *place += 1;
        }
        for tile in &self.tiles {
            let places = &mut self.order[tile.start as usize..][..width];
            let live = tile.live as usize;
            let last = places[live - 1];
            places[live..].fill(last);
        }
    }

    /// Whether skipping, as `tiles` of `rows` rows went, takes fewer operations than the dense path.
    fn pays(&self, e: &Evaluator, width: usize, tiles: usize, rows: usize) -> bool {
        let (d, k, n, places) = (e.d as f64, e.k as f64, rows as f64, (tiles * width) as f64);
        let w = &self.work;
        let (factor, features) =
            if e.triangular { (d * (d + 3.0) / 2.0, (d + 1.0) * (d + 2.0) / 2.0) } else { (2.0 * d, 2.0 * d + 1.0) };
        let dense = n * k * (factor + features + 20.0);
        let skipping = width as f64 * (1.5 * w.products as f64 + 30.0 * w.exponentials as f64)
            + w.pairs as f64 * (2.5 * features + 40.0)
            + places * (60.0 + 8.0 * d + k);
        skipping < 0.8 * dense
    }

    /// One tile, its columns in `data`: candidates, log densities, exponentials. False where a row is beyond every density.
    #[inline(always)]
    fn tile<L: Lanes>(
        &mut self,
        l: L,
        e: &Evaluator,
        bounds: &Bounds,
        tile: Tile,
        weights: Option<&[f64]>,
        mixed: bool,
    ) -> bool {
        let width = 2 * L::N;
        let own = tile.own as usize;
        let x = &self.data[..e.d * width];
        let shifted = &mut self.shifted[..];
        let products = &mut self.work.products;

        let mine = columns_for(l, e, own, x, shifted);
        let mut running = Running::new(l, e, own);
        let mut lead = running.log;
        while !running.is_done(e) {
            *products += running.step(l, e, own, mine);
            if running.done() <= bounds.m {
                lead = running.log;
            }
        }
        let first = running.finish(l);
        let list = &mut self.candidates;
        list.clear();
        let about = Own::new(l, e, own, first, lead);
        about.shortlist(l, e, bounds, list);
        *products += list.len() * (bounds.direction_len + 4);
        about.direct(l, e, bounds, x, list);
        let room = list.len() * width;
        if self.logs.len() < room {
            self.logs.resize(room, 0.0);
        }
        let (mut best, mut count) = (first, 0);
        for i in 0..list.len() {
            let k = list[i] as usize;
            let (mut log, mut keep) = (first, true);
            if k != own {
                let mut running = Running::new(l, e, k);
                let x = columns_for(l, e, k, x, shifted);
                while keep && !running.is_done(e) {
                    *products += running.step(l, e, k, x);
                    keep = running.matters(l, &best);
                }
                log = running.finish(l);
            }
            list[count] = k as u32;
            for v in 0..2 {
                // A component left off holds an upper bound: it must not raise the best.
                best[v] = if keep { l.max_or(log[v], best[v]) } else { best[v] };
                l.store(log[v], &mut self.logs[count * width + v * L::N..]);
            }
            count += usize::from(keep);
        }
        list.truncate(count);
        if (0..2).any(|v| l.any_le(best[v], l.splat(FLOOR))) {
            return false;
        }
        if count == 1 {
            self.alone(l, tile, best, weights);
        } else {
            self.exponentials(l, tile, best, weights, mixed);
        }
        true
    }

    /// A tile whose own component takes its rows whole: exp(0) = 1 and its sum 1, without computing them.
    #[inline(always)]
    fn alone<L: Lanes>(&mut self, l: L, tile: Tile, best: [L::V; 2], weights: Option<&[f64]>) {
        self.work.pairs += tile.live as usize;
        if self.trying {
            return;
        }
        let mut most = [0.0; MOST_TILE];
        for v in 0..2 {
            l.store(best[v], &mut most[v * L::N..]);
        }
        let order = &self.order[tile.start as usize..][..tile.live as usize];
        for (&row, &most) in order.iter().zip(&most) {
            let row = usize::from(row);
            self.sums[row / BLOCK].most[row % BLOCK] = most;
            self.pairs.put(tile.own as usize, row, weights.map_or(1.0, |w| w[row]));
        }
    }

    /// See `posterior::exponentials` and `posterior::responsibilities`: the same operations for the candidates alone.
    #[inline(always)]
    fn exponentials<L: Lanes>(&mut self, l: L, tile: Tile, best: [L::V; 2], weights: Option<&[f64]>, mixed: bool) {
        let width = 2 * L::N;
        let count = self.candidates.len();
        let zero = l.splat(0.0);
        let (cut, low) = (l.splat(-CUT), l.splat(-40.0));
        let (mut sum, mut mix) = ([zero; 2], [zero; 2]);
        let (mut label, mut most) = ([zero; 2], [zero; 2]);
        for (log, &k) in self.logs.chunks_exact_mut(width).zip(&self.candidates) {
            let t = [l.sub(l.load(log), best[0]), l.sub(l.load(&log[L::N..]), best[1])];
            let bounded = [l.max_or(t[0], low), l.max_or(t[1], low)];
            let exp = math::exp::<L, 2>(l, bounded);
            let k = l.splat(f64::from(k));
            for v in 0..2 {
                let kept = l.keep_ge(t[v], cut, exp[v]);
                sum[v] = l.add(sum[v], kept);
                if mixed {
                    mix[v] = l.fma(kept, bounded[v], mix[v]);
                }
                label[v] = l.select_gt(kept, most[v], k, label[v]);
                most[v] = l.max_or(kept, most[v]);
                l.store(kept, &mut log[v * L::N..]);
            }
        }
        self.work.exponentials += count;
        let order = &self.order[tile.start as usize..][..width];
        let mut out = [[0.0; MOST_TILE]; 5];
        for (w, &row) in out[3].iter_mut().zip(order) {
            *w = weights.map_or(1.0, |weights| weights[usize::from(row)]);
        }
        let mut share = [zero; 2];
        for v in 0..2 {
            l.store(best[v], &mut out[0][v * L::N..]);
            l.store(sum[v], &mut out[1][v * L::N..]);
            l.store(mix[v], &mut out[2][v * L::N..]);
            l.store(label[v], &mut out[4][v * L::N..]);
            share[v] = l.div(l.load(&out[3][v * L::N..]), sum[v]);
        }
        let live = tile.live as usize;
        let noted = if self.trying { 0 } else { live };
        for (i, &row) in order.iter().enumerate().take(noted) {
            let row = usize::from(row);
            let sums = &mut self.sums[row / BLOCK];
            let place = row % BLOCK;
            sums.most[place] = out[0][i];
            sums.sum[place] = out[1][i];
            sums.mixed[place] = out[2][i];
            self.labels[row] = out[4][i] as u16;
        }
        let rows = (1u32 << live) - 1;
        for (log, &k) in self.logs.chunks_exact(width).zip(&self.candidates) {
            let mut shares = [0.0; MOST_TILE];
            let mut bits = 0;
            for v in 0..2 {
                let kept = l.load(&log[v * L::N..]);
                bits |= l.bits_gt(kept, zero) << (v * L::N);
                l.store(l.mul(kept, share[v]), &mut shares[v * L::N..]);
            }
            bits &= rows;
            self.work.pairs += bits.count_ones() as usize;
            while bits != 0 && !self.trying {
                let i = bits.trailing_zeros() as usize;
                bits &= bits - 1;
                self.pairs.put(k as usize, usize::from(order[i]), shares[i & (MOST_TILE - 1)]);
            }
        }
    }

    /// Mutable access to the block sums.
    pub fn block_mut(&mut self, b: usize) -> &mut RowSums {
        &mut self.sums[b]
    }

    /// Sum of responsibilities times row weight of each component with rows.
    pub fn shares(&self, k: usize, mut put: impl FnMut(usize, f64)) {
        for c in 0..k {
            // share * 1 + sum, the chain of the feature 1
            put(c, self.pairs.rows(c).fold(0.0, |sum, (_, share)| sum + share));
        }
    }

    /// Adds the statistics of this leaf to `sums`, features (in the order of `moments::features`) by `e.pad` components; those
    /// of some components (`e.apart`) about their means.
    #[inline(always)]
    pub fn add_moments<L: Lanes>(&mut self, l: L, e: &Evaluator, sums: &mut [f64]) {
        let wide = (sums.len() / e.pad).div_ceil(8) * 8;
        // Eight components side by side, turned to lanes at the end.
        self.found.resize(8 * wide, 0.0);
        for k0 in (0..e.k).step_by(8) {
            self.found.fill(0.0);
            for (k, found) in (k0..e.k).zip(self.found.chunks_exact_mut(wide)) {
                let mut mine = self.pairs.rows(k).peekable();
                if mine.peek().is_none() {
                    continue;
                }
                self.chunk.start(e.d, e.triangular);
                let about = e.apart[k].then(|| &e.scaled.means[k * e.d..][..e.d]);
                for (row, share) in mine {
                    self.chunk.push(self.turned.row(row), share, about);
                    if self.chunk.is_full() {
                        self.chunk.flush(l);
                    }
                }
                self.chunk.flush(l);
                self.chunk.finish(found);
            }
            let mut square = [l.splat(0.0); 8];
            for (f, sums) in sums.chunks_exact_mut(L::N * e.pad).enumerate() {
                turn_into(l, e.pad, L::N, &self.found[f * L::N..], wide, &mut square, &mut sums[k0..]);
            }
            let done = sums.len() / (L::N * e.pad) * L::N;
            let rest = &mut sums[done * e.pad..];
            if !rest.is_empty() {
                turn_into(l, e.pad, rest.len() / e.pad, &self.found[done..], wide, &mut square, &mut rest[k0..]);
            }
        }
    }
}

/// Adds `features` sums of eight components, `wide` places apart in `found`, to `sums`, `pad` places a feature.
#[inline(always)]
fn turn_into<L: Lanes>(
    l: L,
    pad: usize,
    features: usize,
    found: &[f64],
    wide: usize,
    square: &mut [L::V; 8],
    sums: &mut [f64],
) {
    for c0 in (0..8).step_by(L::N) {
        for i in 0..L::N {
            square[i] = l.load(&found[(c0 + i) * wide..]);
        }
        l.transpose(&mut square[..L::N]);
        for f in 0..features {
            let to = &mut sums[f * pad + c0..];
            l.store(l.add(l.load(to), square[f]), to);
        }
    }
}
