//! A leaf turned: row after row, so that rows can be taken in any order by whole vectors.

use super::evaluator::{BLOCK, BLOCK_STRIDE};
use super::lanes::Lanes;

/// Scaled rows; row i at `values[i * wide..][..wide]`, zero beyond the columns.
#[derive(Default)]
pub struct Turned {
    values: Vec<f64>,
    d: usize,
    /// Columns rounded up to a multiple of 8.
    pub wide: usize,
}

impl Turned {
    /// Makes room for `n` rows of `d` columns.
    pub fn start(&mut self, n: usize, d: usize) {
        (self.d, self.wide) = (d, d.div_ceil(8) * 8);
        let size = n.div_ceil(BLOCK) * BLOCK * self.wide;
        if self.values.len() < size {
            self.values.resize(size, 0.0);
        }
    }

    /// Takes the `n` rows of block `b`.
    #[inline(always)]
    pub fn take<L: Lanes>(&mut self, l: L, b: usize, block: &[f64], n: usize) {
        let (d, wide) = (self.d, self.wide);
        let zero = l.splat(0.0);
        let mut square = [zero; 8];
        let to = &mut self.values[b * BLOCK * wide..][..BLOCK * wide];
        for row in (0..n).step_by(L::N) {
            for j in (0..wide).step_by(L::N) {
                for i in 0..L::N {
                    square[i] = if j + i < d { l.load(&block[(j + i) * BLOCK_STRIDE + row..]) } else { zero };
                }
                l.transpose(&mut square[..L::N]);
                for i in 0..L::N {
                    l.store(square[i], &mut to[(row + i) * wide + j..]);
                }
            }
        }
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
