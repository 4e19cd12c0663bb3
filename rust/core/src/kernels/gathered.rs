//! Statistics of one component over chosen rows: lanes are columns, each sum is one chain over the rows in the order given,
//! the same operations as in `moments`.

use super::lanes::Lanes;

/// Rows gathered before the sums are updated.
pub const CHUNK: usize = 32;

/// Gathered rows and the sums of one component.
#[derive(Default)]
pub struct Chunk {
    d: usize,
    /// Columns rounded up to whole vectors.
    wide: usize,
    full: bool,
    rows: usize,
    /// Row after row.
    x: Vec<f64>,
    share: Vec<f64>,
    one: f64,
    first: Vec<f64>,
    /// Full: row i of the lower triangle at `second[i * wide..]`; else the squares.
    second: Vec<f64>,
}

impl Chunk {
    /// Empties the sums for a component of `d` columns; vectors have `lanes` lanes.
    pub fn start(&mut self, d: usize, full: bool, lanes: usize) {
        let wide = d.div_ceil(2 * lanes) * 2 * lanes;
        (self.d, self.full, self.wide, self.rows, self.one) = (d, full, wide, 0, 0.0);
        self.x.clear();
        self.x.resize(CHUNK * wide, 0.0);
        self.share.resize(CHUNK, 0.0);
        self.first.clear();
        self.first.resize(wide, 0.0);
        self.second.clear();
        self.second.resize(if full { d.div_ceil(4) * 4 * wide } else { wide }, 0.0);
    }

    /// Takes a row: column j at `x[j * stride]`, less the mean where the component is far from the centre.
    #[inline(always)]
    pub fn push(&mut self, x: &[f64], stride: usize, share: f64, about: Option<&[f64]>) {
        let to = &mut self.x[self.rows * self.wide..][..self.d];
        for (to, from) in to.iter_mut().zip(x.iter().step_by(stride)) {
            *to = *from;
        }
        if let Some(mean) = about {
            to.iter_mut().zip(mean).for_each(|(x, m)| *x -= m);
        }
        self.share[self.rows] = share;
        self.rows += 1;
    }

    /// Adds the gathered rows to the sums.
    #[inline(always)]
    pub fn flush<L: Lanes>(&mut self, l: L) {
        let (n, wide) = (std::mem::take(&mut self.rows), self.wide);
        let share = &self.share[..n];
        self.one = share.iter().fold(self.one, |sum, r| sum + r);
        for j in (0..self.d).step_by(2 * L::N) {
            let mut acc = [l.load(&self.first[j..]), l.load(&self.first[j + L::N..])];
            let mut square = [l.load(&self.second[j..]), l.load(&self.second[j + L::N..])];
            for (x, &r) in self.x.chunks_exact(wide).zip(share) {
                let r = l.splat(r);
                for v in 0..2 {
                    let xv = l.load(&x[j + v * L::N..]);
                    acc[v] = l.fma(r, xv, acc[v]);
                    if !self.full {
                        square[v] = l.fma(r, l.mul(xv, xv), square[v]);
                    }
                }
            }
            for v in 0..2 {
                l.store(acc[v], &mut self.first[j + v * L::N..]);
                if !self.full {
                    l.store(square[v], &mut self.second[j + v * L::N..]);
                }
            }
        }
        if self.full {
            for i0 in (0..self.d).step_by(4) {
                let end = (i0 + 4).min(self.d);
                let mut j = 0;
                while j < end {
                    if end - j > L::N {
                        self.tile::<L, 2>(l, i0, j, n);
                        j += 2 * L::N;
                    } else {
                        self.tile::<L, 1>(l, i0, j, n);
                        j += L::N;
                    }
                }
            }
        }
    }

    /// Rows i0..i0 + 4 of the triangle, `NV` vectors of columns from j.
    #[inline(always)]
    fn tile<L: Lanes, const NV: usize>(&mut self, l: L, i0: usize, j: usize, n: usize) {
        let wide = self.wide;
        let mut acc = [[l.splat(0.0); NV]; 4];
        for i in 0..4 {
            for v in 0..NV {
                acc[i][v] = l.load(&self.second[(i0 + i) * wide + j + v * L::N..]);
            }
        }
        for (x, &r) in self.x.chunks_exact(wide).zip(&self.share[..n]) {
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
                    acc[i][v] = l.fma(r, l.mul(xi, xv[v]), acc[i][v]);
                }
            }
        }
        for i in 0..4 {
            for v in 0..NV {
                l.store(acc[i][v], &mut self.second[(i0 + i) * wide + j + v * L::N..]);
            }
        }
    }

    /// Hands out the sums, features in the order of `moments::features`.
    pub fn finish(&mut self, mut put: impl FnMut(usize, f64)) {
        put(0, self.one);
        let d = self.d;
        self.first[..d].iter().enumerate().for_each(|(j, &s)| put(1 + j, s));
        let mut feature = 1 + d;
        if self.full {
            for i in 0..d {
                for &s in &self.second[i * self.wide..][..=i] {
                    put(feature, s);
                    feature += 1;
                }
            }
        } else {
            self.second[..d].iter().for_each(|&s| {
                put(feature, s);
                feature += 1;
            });
        }
    }
}
