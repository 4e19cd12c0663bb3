//! A leaf turned: row after row, so that rows can be taken in any order by whole vectors.

use super::lanes::Lanes;
use crate::scaled::Scaled;

/// Scaled rows; row i at `values[i * wide..][..wide]`, zero beyond the columns.
#[derive(Default)]
pub struct Turned {
    values: Vec<f64>,
    d: usize,
    /// Columns rounded up to a multiple of 8.
    pub wide: usize,
}

impl Turned {
    /// Scales and turns the rows of a leaf of `d` columns.
    #[inline(always)]
    pub fn fill<L: Lanes>(&mut self, l: L, rows: &Scaled<'_>, d: usize) {
        (self.d, self.wide) = (d, d.div_ceil(8) * 8);
        if self.values.len() < rows.n * self.wide {
            self.values.resize(rows.n * self.wide, 0.0);
        }
        rows.turn(l, &mut self.values, self.wide);
    }

    /// Row `i`.
    #[inline(always)]
    pub fn row(&self, i: usize) -> &[f64] {
        &self.values[i * self.wide..][..self.wide]
    }

    /// Copies rows to a tile: column j of row `order[i]` to `to[j * order.len() + i]`.
    #[inline(always)]
    pub fn tile<L: Lanes>(&self, l: L, order: &[u16], to: &mut [f64]) {
        let (width, d) = (order.len(), self.d);
        let mut square = [l.splat(0.0); 8];
        for j in (0..d).step_by(L::N) {
            let columns = (d - j).min(L::N);
            for i0 in (0..width).step_by(L::N) {
                for i in 0..L::N {
                    square[i] = l.load(&self.values[usize::from(order[i0 + i]) * self.wide + j..]);
                }
                l.transpose(&mut square[..L::N]);
                for (c, v) in square.iter().enumerate().take(columns) {
                    l.store(*v, &mut to[(j + c) * width + i0..]);
                }
            }
        }
    }
}
