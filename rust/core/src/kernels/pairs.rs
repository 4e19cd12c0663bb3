//! Which rows of a leaf matter to which component, and how much: found in any order, handed out in row order.

use crate::leaf::LEAF_ROWS;

const WORDS: usize = LEAF_ROWS / 64;

/// One bit and one share for each row and component of a leaf.
#[derive(Default)]
pub struct Pairs {
    bits: Vec<u64>,
    shares: Vec<f64>,
}

impl Pairs {
    /// Forgets all pairs and makes room for `k` components.
    pub fn clear(&mut self, k: usize) {
        self.bits.clear();
        self.bits.resize(k * WORDS, 0);
        if self.shares.len() < k * LEAF_ROWS {
            self.shares.resize(k * LEAF_ROWS, 0.0);
        }
    }

    /// Notes that `row` has `share` (responsibility times row weight) in component `k`.
    #[inline(always)]
    pub fn put(&mut self, k: usize, row: usize, share: f64) {
        self.bits[k * WORDS + row / 64] |= 1 << (row % 64);
        self.shares[k * LEAF_ROWS + row] = share;
    }

    /// Rows of component `k` with their shares, in row order.
    #[inline(always)]
    pub fn rows(&self, k: usize) -> impl Iterator<Item = (usize, f64)> {
        let shares = &self.shares[k * LEAF_ROWS..][..LEAF_ROWS];
        self.bits[k * WORDS..][..WORDS].iter().enumerate().flat_map(move |(w, &bits)| {
            let mut left = bits;
            std::iter::from_fn(move || {
                if left == 0 {
                    return None;
                }
                let row = w * 64 + left.trailing_zeros() as usize;
                left &= left - 1;
                Some((row, shares[row]))
            })
        })
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn pairs_come_back_in_row_order() {
        let mut pairs = Pairs::default();
        pairs.clear(2);
        for (k, row) in [(1, 70), (0, 5), (1, 3), (1, 63), (1, 64), (1, LEAF_ROWS - 1)] {
            pairs.put(k, row, row as f64 / 2.0);
        }
        assert_eq!(pairs.rows(0).collect::<Vec<_>>(), [(5, 2.5)]);
        let rows: Vec<usize> = pairs.rows(1).map(|(row, _)| row).collect();
        assert_eq!(rows, [3, 63, 64, 70, LEAF_ROWS - 1]);
        pairs.clear(2);
        assert_eq!(pairs.rows(1).count(), 0);
    }
}
