//! Statistics of one component over chosen rows: lanes are columns, each sum is one chain over the rows in the order given,
//! the same operations as in `moments`.

use super::lanes::Lanes;

/// Rows gathered before the sums are updated.
const CHUNK: usize = 24;

/// Gathered rows and the sums of one component.
#[derive(Default)]
pub struct Chunk {
    d: usize,
    /// Columns rounded up to a multiple of 8.
    wide: usize,
    full: bool,
    rows: usize,
    /// Whether every share so far is 1: then adding does for multiplying and adding.
    whole: bool,
    /// Row after row, `stride` apart: an odd number of cache lines, so that a chunk does not fall on few sets of the cache.
    x: Vec<f64>,
    stride: usize,
    share: [f64; CHUNK],
    one: f64,
    first: Vec<f64>,
    /// Full: row i of the lower triangle at `second[i * wide..]`; else the squares.
    second: Vec<f64>,
}

impl Chunk {
    /// Empties the sums for a component of `d` columns.
    pub fn start(&mut self, d: usize, full: bool) {
        let wide = d.div_ceil(8) * 8;
        (self.d, self.full, self.wide, self.rows, self.one, self.whole) = (d, full, wide, 0, 0.0, true);
        self.stride = wide + 8 * (1 - wide / 8 % 2);
        self.x.resize(CHUNK * self.stride, 0.0);
        self.first.clear();
        self.first.resize(wide, 0.0);
        self.second.clear();
        self.second.resize(if full { d.div_ceil(4) * 4 * wide } else { wide }, 0.0);
    }

    /// Takes a row of `wide` values, less the mean where the component is far from the centre.
    #[inline(always)]
    pub fn push(&mut self, x: &[f64], share: f64, about: Option<&[f64]>) {
        let to = &mut self.x[self.rows * self.stride..][..self.wide];
        for (to, from) in to.chunks_exact_mut(8).zip(x.chunks_exact(8)) {
            to.copy_from_slice(from);
        }
        if let Some(mean) = about {
            to.iter_mut().zip(mean).for_each(|(x, m)| *x -= m);
        }
        self.share[self.rows] = share;
        self.whole &= share == 1.0;
        self.rows += 1;
    }

    /// Whether the gathered rows must be added before another is taken.
    #[inline(always)]
    pub fn is_full(&self) -> bool {
        self.rows == CHUNK
    }

    /// Adds the gathered rows to the sums.
    #[inline(always)]
    pub fn flush<L: Lanes>(&mut self, l: L) {
        if self.whole {
            self.add::<L, true>(l);
        } else {
            self.add::<L, false>(l);
        }
        (self.rows, self.whole) = (0, true);
    }

    /// `WHOLE`: every share is 1, and 1 x + s is x + s to the bit.
    #[inline(always)]
    fn add<L: Lanes, const WHOLE: bool>(&mut self, l: L) {
        self.one = self.share[..self.rows].iter().fold(self.one, |sum, r| sum + r);
        if self.full {
            self.columns::<L, WHOLE, false>(l);
            for i0 in (0..self.d).step_by(4) {
                let end = (i0 + 4).min(self.d);
                let mut j = 0;
                while j < end {
                    if L::MANY && end - j > 3 * L::N {
                        self.tile::<L, WHOLE, 4>(l, i0, j);
                        j += 4 * L::N;
                    } else if end - j > L::N {
                        self.tile::<L, WHOLE, 2>(l, i0, j);
                        j += 2 * L::N;
                    } else {
                        self.tile::<L, WHOLE, 1>(l, i0, j);
                        j += L::N;
                    }
                }
            }
        } else {
            self.columns::<L, WHOLE, true>(l);
        }
    }

    /// Sums of the columns, and of their squares.
    #[inline(always)]
    fn columns<L: Lanes, const WHOLE: bool, const SQUARES: bool>(&mut self, l: L) {
        for j in (0..self.wide).step_by(L::N) {
            let mut acc = l.load(&self.first[j..]);
            let mut square = if SQUARES { l.load(&self.second[j..]) } else { acc };
            for (x, &r) in self.x.chunks_exact(self.stride).zip(&self.share[..self.rows]) {
                let r = l.splat(r);
                let xv = l.load(&x[j..]);
                acc = if WHOLE { l.add(acc, xv) } else { l.fma(r, xv, acc) };
                if SQUARES {
                    let xx = l.mul(xv, xv);
                    square = if WHOLE { l.add(square, xx) } else { l.fma(r, xx, square) };
                }
            }
            l.store(acc, &mut self.first[j..]);
            if SQUARES {
                l.store(square, &mut self.second[j..]);
            }
        }
    }

    /// Rows i0..i0 + 4 of the triangle, `NV` vectors of columns from j.
    #[inline(always)]
    fn tile<L: Lanes, const WHOLE: bool, const NV: usize>(&mut self, l: L, i0: usize, j: usize) {
        let wide = self.wide;
        let mut acc = [[l.splat(0.0); NV]; 4];
        for i in 0..4 {
            for v in 0..NV {
                acc[i][v] = l.load(&self.second[(i0 + i) * wide + j + v * L::N..]);
            }
        }
        for (x, &r) in self.x.chunks_exact(self.stride).zip(&self.share[..self.rows]) {
            let r = l.splat(r);
            let columns = &x[j..j + NV * L::N];
            let rows = &x[i0..i0 + 4];
            let mut xv = [r; NV];
            for v in 0..NV {
                xv[v] = l.load(&columns[v * L::N..]);
            }
            for i in 0..4 {
                let xi = l.splat(rows[i]);
                for v in 0..NV {
                    let xx = l.mul(xi, xv[v]);
                    acc[i][v] = if WHOLE { l.add(acc[i][v], xx) } else { l.fma(r, xx, acc[i][v]) };
                }
            }
        }
        for i in 0..4 {
            for v in 0..NV {
                l.store(acc[i][v], &mut self.second[(i0 + i) * wide + j + v * L::N..]);
            }
        }
    }

    /// Writes the sums to `to`, features in the order of `moments::features`.
    pub fn finish(&self, to: &mut [f64]) {
        let d = self.d;
        to[0] = self.one;
        to[1..=d].copy_from_slice(&self.first[..d]);
        let mut to = &mut to[1 + d..];
        if !self.full {
            to[..d].copy_from_slice(&self.second[..d]);
            return;
        }
        for (i, row) in self.second.chunks_exact(self.wide).take(d).enumerate() {
            let (head, tail) = to.split_at_mut(i + 1);
            head.copy_from_slice(&row[..=i]);
            to = tail;
        }
    }
}
