//! Leaves: fixed runs of row numbers, cut from whatever batches arrive, and loaded as scaled columns.

use crate::batch::{Reading, Rows, all_finite};
use crate::error::{Error, Result};
use crate::random::hash2;
use std::sync::{Arc, Mutex, OnceLock};

/// Rows of a leaf. A fixed number: it decides the order of summation and so the bits of a model.
pub const LEAF_ROWS: usize = 3072;
/// Leaves of a task, a power of two: an aligned node of the merge tree.
pub const TASK_LEAVES: usize = 16;
/// Distance between columns of a loaded leaf; an odd number of cache lines keeps columns out of each other's way.
pub const LEAF_STRIDE: usize = LEAF_ROWS + 8;
/// Scaled values are held within this range, so that no square or sum can overflow.
pub const FAR: f64 = 3.0e144;

/// Which rows a measure sees.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Part {
    /// Rows that are fitted.
    Fit,
    /// Rows that are held out.
    Held,
}

/// A run of rows inside one batch.
pub struct Piece {
    /// The batch.
    pub rows: Arc<Rows>,
    /// First row inside the batch.
    pub start: usize,
    /// Rows of the run.
    pub len: usize,
}

/// A fixed run of row numbers, as pieces of batches in row order.
pub struct Leaf {
    /// Row number of its first row, a multiple of [`LEAF_ROWS`].
    pub first_row: u64,
    /// The rows.
    pub pieces: Vec<Piece>,
    /// Likely component of each fitted row, left by the last pass as a hint for the next: never felt in a result.
    pub hint: Mutex<Hint>,
    plain: OnceLock<bool>,
}

/// Likely components under a mixture of `k` components; empty where there are none.
#[derive(Default)]
pub struct Hint {
    /// Components of the mixture.
    pub k: usize,
    /// Position of the likely component of each row.
    pub labels: Vec<u16>,
    /// Whether the last pass skipped components in this leaf, and it paid.
    pub paid: bool,
    /// Passes since then in which skipping was refused with these labels.
    pub refused: u8,
}

impl Leaf {
    /// An empty leaf.
    pub fn new(first_row: u64) -> Self {
        Self { first_row, pieces: Vec::new(), hint: Mutex::default(), plain: OnceLock::new() }
    }

    /// Rows in the leaf, before any is removed.
    pub fn len(&self) -> usize {
        self.pieces.iter().map(|p| p.len).sum()
    }

    /// Whether the leaf has no rows.
    pub fn is_empty(&self) -> bool {
        self.len() == 0
    }

    /// Whether no value is null, NaN or infinite. Looked at once.
    pub fn is_plain(&self) -> bool {
        *self.plain.get_or_init(|| {
            self.pieces.iter().all(|p| p.rows.features.iter().all(|column| column.is_plain(p.start, p.len)))
        })
    }

    /// Column `j` of all rows as float64, null as NaN, codes left as they are. `out` has at least `len()` places.
    pub fn column(&self, j: usize, out: &mut [f64]) {
        let mut at = 0;
        for piece in &self.pieces {
            piece.rows.features[j].load(piece.start, &mut out[at..at + piece.len]);
            at += piece.len;
        }
    }
}

/// Cuts batches, which arrive in row order, into leaves.
pub struct Cutter {
    next_row: u64,
    leaf: Leaf,
    filled: usize,
}

impl Cutter {
    /// A cutter whose first row has the number `first_row`, a multiple of [`LEAF_ROWS`].
    pub fn new(first_row: u64) -> Self {
        Self { next_row: first_row, leaf: Leaf::new(first_row), filled: 0 }
    }

    /// Number of the next row to arrive.
    pub fn next_row(&self) -> u64 {
        self.next_row
    }

    /// Takes a batch; full leaves go to `emit`.
    pub fn push(&mut self, rows: Arc<Rows>, mut emit: impl FnMut(Leaf)) {
        let mut start = 0;
        while start < rows.len {
            let len = (LEAF_ROWS - self.filled).min(rows.len - start);
            self.leaf.pieces.push(Piece { rows: Arc::clone(&rows), start, len });
            self.filled += len;
            start += len;
            if self.filled == LEAF_ROWS {
                let next = Leaf::new(self.leaf.first_row + LEAF_ROWS as u64);
                emit(std::mem::replace(&mut self.leaf, next));
                self.filled = 0;
            }
        }
        self.next_row += rows.len as u64;
    }

    /// The last, partly filled leaf.
    pub fn finish(self) -> Option<Leaf> {
        (self.filled > 0).then_some(self.leaf)
    }
}

/// The complete rows of one part of a leaf, by columns.
pub struct Loaded {
    /// Number of rows.
    pub n: usize,
    /// Number of columns.
    pub d: usize,
    /// Column j at `values[j * LEAF_STRIDE..][..n]`; a multiple of 8 rows beyond `n` is finite (zero).
    pub values: Vec<f64>,
    /// Row weights, when they are not all 1.
    pub weights: Option<Vec<f64>>,
    /// Row numbers in the source.
    pub rows: Vec<u64>,
    /// Hash of the key and the values, else the row number.
    pub ids: Vec<u64>,
    flags: Vec<bool>,
    scratch: Vec<f64>,
}

impl Loaded {
    /// Room for a leaf of `d` columns.
    pub fn new(d: usize) -> Self {
        Self {
            n: 0,
            d,
            values: vec![0.0; d * LEAF_STRIDE],
            weights: None,
            rows: Vec::with_capacity(LEAF_ROWS),
            ids: Vec::with_capacity(LEAF_ROWS),
            flags: vec![false; LEAF_ROWS],
            scratch: vec![0.0; LEAF_ROWS],
        }
    }

    /// Column `j`, `n` rows.
    pub fn column(&self, j: usize) -> &[f64] {
        &self.values[j * LEAF_STRIDE..][..self.n]
    }

    /// Loads the rows of `part` that are kept, complete and of positive weight.
    ///
    /// A weight that is null, NaN, infinite or negative is an error naming the row. Rows with a gap, a code or an infinity
    /// are left out. Values stay in the units of the source.
    pub fn load(&mut self, leaf: &Leaf, reading: &Reading, part: Part) -> Result<()> {
        let total = leaf.len();
        let mut drop = false;
        for j in 0..self.d {
            let column = &mut self.values[j * LEAF_STRIDE..][..LEAF_STRIDE];
            leaf.column(j, &mut column[..total]);
            column[total..].fill(0.0);
            let codes = &reading.codes.get(j).map_or(&[][..], |c| c.as_slice());
            let column = &mut column[..total];
            for &code in codes.iter() {
                for v in column.iter_mut() {
                    if *v == code {
                        *v = f64::NAN;
                    }
                }
            }
            if !all_finite(column) {
                if !drop {
                    self.flags[..total].fill(true);
                    drop = true;
                }
                for (flag, v) in self.flags.iter_mut().zip(column.iter()) {
                    *flag &= v.is_finite();
                }
            }
        }
        self.rows.clear();
        self.ids.clear();
        self.weights = None;
        let has_held = reading.held.is_some() || reading.held_share > 0.0;
        let selects = reading.keep.is_some() || has_held || part == Part::Held;
        if selects && !drop {
            self.flags[..total].fill(true);
            drop = true;
        }
        if selects {
            let mut at = 0;
            for piece in &leaf.pieces {
                for i in piece.start..piece.start + piece.len {
                    let kept = piece.rows.keep.as_ref().is_none_or(|k| {
                        use arrow_array::Array;
                        k.is_valid(i) && k.value(i)
                    });
                    let held = has_held && reading.is_held(&piece.rows, i);
                    self.flags[at] &= kept && held == (part == Part::Held);
                    at += 1;
                }
            }
        }
        if let Some(name) = &reading.weight {
            self.load_weights(leaf);
            for (i, &w) in self.scratch[..total].iter().enumerate() {
                if !(w >= 0.0 && w.is_finite()) && (!drop || self.flags[i]) {
                    return Err(Error::Row {
                        row: leaf.first_row + i as u64,
                        name: name.clone(),
                        what: format!("a row weight of {w}"),
                        advice: "row weights must be zero or positive numbers; filter such rows with where".into(),
                    });
                }
                if w == 0.0 {
                    if !drop {
                        self.flags[..total].fill(true);
                        drop = true;
                    }
                    self.flags[i] = false;
                }
            }
            let flags = &self.flags;
            let weights: Vec<f64> = if drop {
                self.scratch[..total].iter().zip(flags).filter(|(_, f)| **f).map(|(w, _)| *w).collect()
            } else {
                self.scratch[..total].to_vec()
            };
            if weights.iter().any(|&w| w != 1.0) {
                self.weights = Some(weights);
            }
        }
        if drop {
            self.n = self.flags[..total].iter().filter(|f| **f).count();
            if self.n < total {
                for j in 0..self.d {
                    let column = &mut self.values[j * LEAF_STRIDE..][..LEAF_STRIDE];
                    let mut to = 0;
                    for i in 0..total {
                        if self.flags[i] {
                            column[to] = column[i];
                            to += 1;
                        }
                    }
                    column[to..].fill(0.0);
                }
            }
        } else {
            self.n = total;
        }
        Ok(())
    }

    fn load_weights(&mut self, leaf: &Leaf) {
        let mut at = 0;
        for piece in &leaf.pieces {
            if let Some(column) = &piece.rows.weight {
                column.load(piece.start, &mut self.scratch[at..at + piece.len]);
            }
            at += piece.len;
        }
    }

    /// Loads the row weights of a whole leaf, as [`Loaded::load`] would. False where some row must be looked at: a weight of
    /// zero, or a bad one.
    pub fn take_weights(&mut self, leaf: &Leaf, reading: &Reading) -> bool {
        self.weights = None;
        if reading.weight.is_none() {
            return true;
        }
        self.load_weights(leaf);
        let weights = &self.scratch[..leaf.len()];
        if weights.iter().any(|&w| w != 1.0) {
            self.weights = Some(weights.to_vec());
        }
        weights.iter().all(|w| *w > 0.0 && w.is_finite())
    }

    /// Fills `rows` and `ids` for the rows that [`Loaded::load`] kept.
    pub fn load_ids(&mut self, leaf: &Leaf) {
        let all = self.n == leaf.len();
        let mut at = 0;
        for piece in &leaf.pieces {
            for i in piece.start..piece.start + piece.len {
                if all || self.flags[at] {
                    let row = leaf.first_row + at as u64;
                    let place = self.rows.len();
                    self.rows.push(row);
                    // A key may name many rows: their values tell them apart.
                    self.ids.push(piece.rows.key.as_ref().map_or(row, |key| {
                        (0..self.d).fold(key[i], |id, j| hash2(id, self.values[j * LEAF_STRIDE + place].to_bits()))
                    }));
                }
                at += 1;
            }
        }
    }
}
