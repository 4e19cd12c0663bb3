//! Where the rows to score lie: in a batch, or in an array in memory that is read where it is.

use crate::batch::Rows;
use crate::kernels::{BLOCK_STRIDE, prepare};

/// Rows that are copied out block by block.
pub trait Source: Sync {
    /// Rows.
    fn rows(&self) -> usize;
    /// Columns.
    fn columns(&self) -> usize;
    /// Number of the first row, for messages.
    fn first_row(&self) -> u64;
    /// Copies rows `at..at + n` as float64, column j to `x[j * BLOCK_STRIDE..][..n]`; null becomes NaN.
    fn load(&self, at: usize, n: usize, x: &mut [f64]);
}

impl Source for Rows {
    fn rows(&self) -> usize {
        self.len
    }

    fn columns(&self) -> usize {
        self.features.len()
    }

    fn first_row(&self) -> u64 {
        self.first_row
    }

    fn load(&self, at: usize, n: usize, x: &mut [f64]) {
        for (column, to) in self.features.iter().zip(x.chunks_exact_mut(BLOCK_STRIDE)) {
            column.load(at, &mut to[..n]);
        }
    }
}

/// An array without holes, row after row or column after column.
pub struct Matrix<'a, T> {
    values: &'a [T],
    rows: usize,
    columns: usize,
    by_rows: bool,
}

impl<'a, T> Matrix<'a, T> {
    /// `None` where `values` has another length than rows times columns.
    pub fn new(values: &'a [T], rows: usize, columns: usize, by_rows: bool) -> Option<Self> {
        (rows.checked_mul(columns) == Some(values.len())).then_some(Self { values, rows, columns, by_rows })
    }
}

impl<T: Copy + Into<f64> + Sync> Source for Matrix<'_, T> {
    fn rows(&self) -> usize {
        self.rows
    }

    fn columns(&self) -> usize {
        self.columns
    }

    fn first_row(&self) -> u64 {
        0
    }

    fn load(&self, at: usize, n: usize, x: &mut [f64]) {
        if self.by_rows {
            prepare::transpose(&self.values[at * self.columns..(at + n) * self.columns], self.columns, x);
            return;
        }
        for (column, to) in self.values.chunks_exact(self.rows).zip(x.chunks_exact_mut(BLOCK_STRIDE)) {
            for (to, from) in to.iter_mut().zip(&column[at..at + n]) {
                *to = (*from).into();
            }
        }
    }
}
