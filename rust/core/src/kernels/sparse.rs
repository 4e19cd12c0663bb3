//! The skipping path: a leaf whose rows each matter to few components. Same bits as the dense path.
//!
//! Rows are grouped by their likely component (a label of an earlier pass: a screen only) into tiles. A tile evaluates its
//! own component first, drops what the bounds of `bounds` exclude, and leaves off a component as soon as its running log
//! density, which can only fall, is more than 37 nats below the best so far on every row. What is evaluated to the end goes
//! through the operations of `density` and `posterior` in the same order; what is not would have been exactly 0 there. The
//! statistics then take each component's rows in row order, as the dense chains do.

use super::bounds::Bounds;
use super::density::rows;
use super::evaluator::{BLOCK, BLOCK_STRIDE, CUT, Evaluator, FLOOR};
use super::gathered;
use super::lanes::Lanes;
use super::math;
use super::posterior::RowSums;
use crate::leaf::LEAF_ROWS;

/// Rows of a tile: two vectors on every tier, so at most this many.
const MOST_TILE: usize = 16;
/// Tiles evaluated before it is judged whether skipping pays.
const TRIAL: usize = 3;

/// A leaf on the skipping path: working room and results.
#[derive(Default)]
pub struct Sparse {
    /// Row (within the loaded leaf) at each place; a tile's spare places repeat its last row.
    order: Vec<u16>,
    /// Places that are rows, not spares.
    live: Vec<bool>,
    tiles: Vec<Tile>,
    data: Vec<f64>,
    shifted: Vec<f64>,
    candidates: Vec<u32>,
    logs: Vec<f64>,
    pairs: Vec<Pair>,
    by_row: Vec<Pair>,
    starts: Vec<u32>,
    sums: Vec<RowSums>,
    chunk: gathered::Chunk,
    /// Likely component of each row after this pass.
    pub labels: Vec<u16>,
    work: Work,
}

struct Tile {
    own: u32,
    start: usize,
}

/// One row of one component with responsibility above 0.
#[derive(Clone, Copy, Default)]
struct Pair {
    component: u16,
    place: u16,
    /// Responsibility times row weight.
    share: f64,
}

/// What was done, in counted operations.
#[derive(Clone, Copy, Default, Debug)]
struct Work {
    /// Tiles evaluated.
    tiles: usize,
    /// Products of rows of factors with columns.
    products: usize,
    /// Rows times components with responsibility above 0.
    pairs: usize,
}

impl Sparse {
    /// Evaluates a leaf of `n` rows in `blocks`. False: the dense path is the better one (or must be taken, where a row is
    /// beyond every density); nothing was changed but working room.
    #[inline(always)]
    pub fn evaluate<L: Lanes>(
        &mut self,
        l: L,
        e: &Evaluator,
        bounds: &Bounds,
        blocks: &[f64],
        n: usize,
        weights: Option<&[f64]>,
        labels: &[u16],
        mixed: bool,
    ) -> bool {
        let width = 2 * L::N;
        self.group(e.k, n, labels, width);
        let count = self.tiles.len();
        self.data.resize(count * e.d * width, 0.0);
        self.shifted.resize(e.d * MOST_TILE, 0.0);
        while self.sums.len() < LEAF_ROWS.div_ceil(BLOCK) {
            self.sums.push(RowSums::new());
        }
        self.labels.clear();
        self.labels.resize(n, 0);
        self.pairs.clear();
        self.work = Work::default();
        let trial = TRIAL.min(count);
        let all = 0..count;
        // The trial takes tiles spread over the groups; each tile's results stand at its own rows, so the order is free.
        for i in 0..trial {
            let t = (2 * i + 1) * count / (2 * trial);
            self.gather(e.d, blocks, t..t + 1, width);
            if !self.tile(l, e, bounds, t, weights, mixed) {
                return false;
            }
        }
        if !self.pays(e, trial * width) {
            return false;
        }
        self.pairs.clear();
        self.work = Work::default();
        self.gather(e.d, blocks, all.clone(), width);
        for t in all {
            if !self.tile(l, e, bounds, t, weights, mixed) {
                return false;
            }
        }
        true
    }

    /// Places rows by label, in row order within a label, each group filled up to whole tiles.
    fn group(&mut self, k: usize, n: usize, labels: &[u16], width: usize) {
        let mut counts = vec![0usize; k];
        labels[..n].iter().for_each(|&q| counts[usize::from(q)] += 1);
        self.tiles.clear();
        let mut starts = vec![0usize; k];
        let mut at = 0;
        for q in 0..k {
            starts[q] = at;
            for _ in 0..counts[q].div_ceil(width) {
                self.tiles.push(Tile { own: q as u32, start: at });
                at += width;
            }
        }
        self.order.clear();
        self.order.resize(at, 0);
        self.live.clear();
        self.live.resize(at, false);
        let mut next = starts.clone();
        for (row, &q) in labels[..n].iter().enumerate() {
            let place = &mut next[usize::from(q)];
            self.order[*place] = row as u16;
            self.live[*place] = true;
            *place += 1;
        }
        for q in 0..k {
            if counts[q] > 0 {
                let last = self.order[next[q] - 1];
                let end = starts[q] + counts[q].div_ceil(width) * width;
                self.order[next[q]..end].fill(last);
            }
        }
    }

    /// Copies the columns of some tiles from the blocks: tile t, column j at `data[(t * d + j) * width..]`.
    fn gather(&mut self, d: usize, blocks: &[f64], tiles: std::ops::Range<usize>, width: usize) {
        let places = tiles.start * width..tiles.end * width;
        let offsets: Vec<usize> = self.order[places]
            .iter()
            .map(|&row| usize::from(row) / BLOCK * d * BLOCK_STRIDE + usize::from(row) % BLOCK)
            .collect();
        for j in 0..d {
            let column = &blocks[j * BLOCK_STRIDE..];
            for (t, offsets) in tiles.clone().zip(offsets.chunks_exact(width)) {
                let to = &mut self.data[(t * d + j) * width..][..width];
                for (x, &at) in to.iter_mut().zip(offsets) {
                    *x = column[at];
                }
            }
        }
    }

    /// Whether skipping, as the tiles so far went, takes fewer operations than the dense path.
    fn pays(&self, e: &Evaluator, rows: usize) -> bool {
        let (d, k, n) = (e.d as f64, e.k as f64, rows as f64);
        let w = &self.work;
        let width = n / w.tiles as f64;
        let (factor, features) =
            if e.triangular { (d * (d + 3.0) / 2.0, (d + 1.0) * (d + 2.0) / 2.0) } else { (2.0 * d, 2.0 * d + 1.0) };
        let dense = n * k * (factor + features + 20.0);
        let skipping =
            1.2 * w.products as f64 * width + w.pairs as f64 * (2.4 * features + 40.0) + n * (120.0 + 12.0 * d + k);
        skipping < 0.9 * dense
    }

    /// One tile: candidates, log densities, exponentials. False where a row is beyond every density.
    #[inline(always)]
    fn tile<L: Lanes>(
        &mut self,
        l: L,
        e: &Evaluator,
        bounds: &Bounds,
        t: usize,
        weights: Option<&[f64]>,
        mixed: bool,
    ) -> bool {
        let width = 2 * L::N;
        let Tile { own, start } = self.tiles[t];
        let own = own as usize;
        let none = [l.splat(f64::NEG_INFINITY); 2];
        self.logs.resize(2 * width, 0.0);
        let x = &self.data[t * e.d * width..][..e.d * width];
        let mut lead = none;
        let Some(first) = one(l, e, own, x, none, &mut self.shifted, bounds.m, &mut lead, &mut self.work) else {
            return false;
        };
        let mut best = first;
        self.candidates.clear();
        shortlist(l, e, bounds, own, first, lead, &mut self.candidates);
        self.logs.clear();
        let mut at = 0;
        for i in 0..self.candidates.len() {
            let k = self.candidates[i] as usize;
            let found = if k == own {
                Some(first)
            } else {
                one(l, e, k, x, best, &mut self.shifted, 0, &mut lead, &mut self.work)
            };
            let Some(log) = found else { continue };
            self.candidates[at] = k as u32;
            at += 1;
            let place = self.logs.len();
            self.logs.resize(place + width, 0.0);
            for v in 0..2 {
                best[v] = l.max_or(log[v], best[v]);
                l.store(log[v], &mut self.logs[place + v * L::N..]);
            }
        }
        self.candidates.truncate(at);
        self.work.tiles += 1;
        self.exponentials(l, start, best, weights, mixed)
    }

    /// See `posterior::exponentials` and `posterior::responsibilities`: the same operations for the candidates alone.
    #[inline(always)]
    fn exponentials<L: Lanes>(
        &mut self,
        l: L,
        start: usize,
        best: [L::V; 2],
        weights: Option<&[f64]>,
        mixed: bool,
    ) -> bool {
        let width = 2 * L::N;
        if (0..2).any(|v| l.any_le(best[v], l.splat(FLOOR))) {
            return false;
        }
        let zero = l.splat(0.0);
        let (cut, low) = (l.splat(-CUT), l.splat(-40.0));
        let (mut sum, mut mix) = ([zero; 2], [zero; 2]);
        for log in self.logs.chunks_exact_mut(width) {
            let t = [l.sub(l.load(log), best[0]), l.sub(l.load(&log[L::N..]), best[1])];
            let bounded = [l.max_or(t[0], low), l.max_or(t[1], low)];
            let exp = math::exp::<L, 2>(l, bounded);
            for v in 0..2 {
                let kept = l.keep_ge(t[v], cut, exp[v]);
                sum[v] = l.add(sum[v], kept);
                if mixed {
                    mix[v] = l.fma(kept, bounded[v], mix[v]);
                }
                l.store(kept, &mut log[v * L::N..]);
            }
        }
        let mut out = [[0.0; MOST_TILE]; 4];
        let order = &self.order[start..start + width];
        for (w, &row) in out[3].iter_mut().zip(order) {
            *w = weights.map_or(1.0, |weights| weights[usize::from(row)]);
        }
        for v in 0..2 {
            l.store(best[v], &mut out[0][v * L::N..]);
            l.store(sum[v], &mut out[1][v * L::N..]);
            l.store(mix[v], &mut out[2][v * L::N..]);
            let share = l.div(l.load(&out[3][v * L::N..]), sum[v]);
            l.store(share, &mut out[3][v * L::N..]);
        }
        for i in 0..width {
            if !self.live[start + i] {
                continue;
            }
            let row = usize::from(order[i]);
            let sums = &mut self.sums[row / BLOCK];
            let place = row % BLOCK;
            sums.most[place] = out[0][i];
            sums.sum[place] = out[1][i];
            sums.mixed[place] = out[2][i];
            let mut label = (0.0, 0);
            for (log, &k) in self.logs.chunks_exact(width).zip(&self.candidates) {
                if log[i] > 0.0 {
                    self.pairs.push(Pair { component: k as u16, place: (start + i) as u16, share: log[i] * out[3][i] });
                    if log[i] > label.0 {
                        label = (log[i], k);
                    }
                }
            }
            self.labels[row] = label.1 as u16;
        }
        self.work.pairs = self.pairs.len();
        true
    }

    /// Brings the pairs into the order of components, and of rows within a component: two counting sorts, rows first.
    pub fn sort(&mut self, k: usize) {
        let order = &self.order;
        let row = |p: &Pair| usize::from(order[usize::from(p.place)]);
        counting_sort(&self.pairs, &mut self.by_row, &mut self.starts, LEAF_ROWS, row);
        counting_sort(&self.by_row, &mut self.pairs, &mut self.starts, k, |p| usize::from(p.component));
    }

    /// Mutable access to the block sums.
    pub fn block_mut(&mut self, b: usize) -> &mut RowSums {
        &mut self.sums[b]
    }

    /// Adds all components: `put(component, feature, sum)` receives every sum over this leaf, features in the order of
    /// `moments::features`. With `first_only` only the sum of responsibilities.
    #[inline(always)]
    pub fn add_moments<L: Lanes>(
        &mut self,
        l: L,
        e: &Evaluator,
        first_only: bool,
        mut put: impl FnMut(usize, usize, f64),
    ) {
        let width = 2 * L::N;
        let mut from = 0;
        while from < self.pairs.len() {
            let k = usize::from(self.pairs[from].component);
            let count = self.pairs[from..].iter().take_while(|p| usize::from(p.component) == k).count();
            let mine = &self.pairs[from..from + count];
            from += count;
            if first_only {
                // share * 1 + sum, the chain of the feature 1
                put(k, 0, mine.iter().fold(0.0, |sum, p| sum + p.share));
                continue;
            }
            self.chunk.start(e.d, e.triangular, L::N);
            let about = e.apart[k].then(|| &e.scaled.means[k * e.d..][..e.d]);
            for part in mine.chunks(gathered::CHUNK) {
                for p in part {
                    let place = usize::from(p.place);
                    let x = &self.data[place / width * e.d * width + place % width..];
                    self.chunk.push(x, width, p.share, about);
                }
                self.chunk.flush(l);
            }
            self.chunk.finish(|feature, sum| put(k, feature, sum));
        }
    }
}

/// Stable counting sort of `from` into `to` by a key below `keys`.
fn counting_sort(from: &[Pair], to: &mut Vec<Pair>, starts: &mut Vec<u32>, keys: usize, key: impl Fn(&Pair) -> usize) {
    starts.clear();
    starts.resize(keys + 1, 0);
    from.iter().for_each(|p| starts[key(p) + 1] += 1);
    for i in 0..keys {
        starts[i + 1] += starts[i];
    }
    to.clear();
    to.resize(from.len(), Pair::default());
    for p in from {
        let at = &mut starts[key(p)];
        to[*at as usize] = *p;
        *at += 1;
    }
}

/// Components that the bounds do not exclude on the whole tile, ascending; the own component is always among them.
#[inline(always)]
fn shortlist<L: Lanes>(
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

/// Log densities of component `k` on a tile; `None` once every row is more than 37 nats below `best`. With `m` above 0,
/// `lead` receives the running value after the first m rows of the factor.
#[inline(always)]
fn one<L: Lanes>(
    l: L,
    e: &Evaluator,
    k: usize,
    x: &[f64],
    best: [L::V; 2],
    shifted: &mut [f64],
    m: usize,
    lead: &mut [L::V; 2],
    work: &mut Work,
) -> Option<[L::V; 2]> {
    let d = e.d;
    let x = if e.far[k] {
        for j in 0..d {
            let mean = l.splat(e.scaled.means[k * d + j]);
            for v in 0..2 {
                let at = j * 2 * L::N + v * L::N;
                l.store(l.sub(l.load(&x[at..]), mean), &mut shifted[at..]);
            }
        }
        &*shifted
    } else {
        x
    };
    let mut acc = [l.splat(e.constant[k]); 2];
    let cut = l.splat(-CUT);
    let hopeless = |acc: &[L::V; 2]| (0..2).all(|v| !l.any_ge(l.sub(acc[v], best[v]), cut));
    let packed = e.packed_of(k);
    if e.triangular {
        let mut rest = packed;
        let mut i0 = 0;
        while i0 < d {
            let r = (d - i0).min(4);
            let (tile, after) = rest.split_at(r + r * i0 + r * (r + 1) / 2);
            match (r, L::N) {
                (4, 8) => rows::<L, 2, 4, 16>(l, tile, i0, x, &mut acc),
                (4, _) => rows::<L, 2, 4, 8>(l, tile, i0, x, &mut acc),
                (3, 8) => rows::<L, 2, 3, 16>(l, tile, i0, x, &mut acc),
                (3, _) => rows::<L, 2, 3, 8>(l, tile, i0, x, &mut acc),
                (2, 8) => rows::<L, 2, 2, 16>(l, tile, i0, x, &mut acc),
                (2, _) => rows::<L, 2, 2, 8>(l, tile, i0, x, &mut acc),
                (_, 8) => rows::<L, 2, 1, 16>(l, tile, i0, x, &mut acc),
                (_, _) => rows::<L, 2, 1, 8>(l, tile, i0, x, &mut acc),
            }
            rest = after;
            i0 += r;
            work.products += tile.len();
            if i0 == m || (i0 > m && i0 - r < m) {
                *lead = acc;
            }
            if i0 < d && hopeless(&acc) {
                return None;
            }
        }
    } else {
        for j in 0..d {
            let (a, b) = (l.splat(packed[2 * j]), l.splat(packed[2 * j + 1]));
            for v in 0..2 {
                let y = l.fma(a, l.load(&x[j * 2 * L::N + v * L::N..]), b);
                acc[v] = l.fnma(y, y, acc[v]);
            }
            if j + 1 == m {
                *lead = acc;
            }
            if j % 8 == 7 && hopeless(&acc) {
                work.products += 2 * (j + 1);
                return None;
            }
        }
        work.products += 2 * d;
    }
    if hopeless(&acc) {
        return None;
    }
    let floor = l.splat(FLOOR);
    Some([l.max_or(acc[0], floor), l.max_or(acc[1], floor)])
}
