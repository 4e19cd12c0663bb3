//! Working room that begins with a cache line, so that no vector lies across two of them.

use super::lanes::Scalar;
use std::ops::{Deref, DerefMut};

/// Bytes of a cache line.
const LINE: usize = 64;

/// A run of numbers that begins with a cache line.
pub struct Aligned<T> {
    values: Vec<T>,
    start: usize,
}

impl<T: Scalar> Aligned<T> {
    /// `len` zeros.
    pub fn new(len: usize) -> Self {
        let spare = LINE / size_of::<T>();
        let values = vec![T::ZERO; len + spare];
        // Values stay where they are, wherever the vector itself moves.
        let start = values.as_ptr().align_offset(LINE).min(spare);
        Self { values, start }
    }
}

impl<T> Deref for Aligned<T> {
    type Target = [T];
    #[inline(always)]
    fn deref(&self) -> &[T] {
        &self.values[self.start..]
    }
}

impl<T> DerefMut for Aligned<T> {
    #[inline(always)]
    fn deref_mut(&mut self) -> &mut [T] {
        &mut self.values[self.start..]
    }
}
