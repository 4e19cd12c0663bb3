//! The numbers of a column summary: totals of a column, totals of the rows, how they are taken and merged.

use crate::bytes::{Reader, put_f64, put_u64};
use crate::error::{Error, Result};
use std::cmp::Ordering;

/// Values above this are scaled down before they are summed.
const LARGE: f64 = 1e150;

/// One column over the rows that the filter keeps and whose weight is not zero; row weights play no other part.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct ColumnTotals {
    /// Rows without a value.
    pub nulls: u64,
    /// Values that are not a number.
    pub nans: u64,
    /// Infinite values.
    pub infinite: u64,
    /// Values that stand for a gap.
    pub codes: u64,
    /// Row number of the first infinity.
    pub first_infinite: Option<u64>,
    /// Row number of the first gap: null, NaN or code.
    pub first_gap: Option<u64>,
    /// Finite values that are no codes.
    pub present: u64,
    /// Least of the present values; 0 while there are none.
    pub least: f64,
    /// How often the least value comes.
    pub least_count: u64,
    /// Greatest of the present values; 0 while there are none.
    pub most: f64,
    /// How often the greatest value comes.
    pub most_count: u64,
    /// Mean of the present values; 0 while there are none.
    pub mean: f64,
    /// What rounding took from the mean, so that merging at a huge offset keeps the digits of the variance.
    mean_rest: f64,
    /// Sum of squared deviations from the mean, at most the greatest float.
    squares: f64,
}

/// Rows as a whole.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct RowTotals {
    /// Rows before any filter.
    pub rows: u64,
    /// Rows that the filter keeps and whose weight is not zero; `complete` and `incomplete` add up to it.
    pub kept: u64,
    /// Kept rows with a finite value in every column, held out or not.
    pub complete: u64,
    /// Kept rows with a gap or an infinity.
    pub incomplete: u64,
    /// Rows that the filter keeps, with a row weight of zero.
    pub zero_weights: u64,
    /// Complete rows that are held out.
    pub held: u64,
    /// Summed weight of the complete rows that are not held out.
    pub weight: f64,
}

impl ColumnTotals {
    /// Variance of the present values about their mean (divided by their number); 0 while there are none.
    pub fn variance(&self) -> f64 {
        if self.squares == f64::MAX { f64::MAX } else { self.squares / self.present.max(1) as f64 }
    }

    /// The totals of `values`, all of them finite.
    pub(super) fn of(values: &[f64]) -> Self {
        if values.is_empty() {
            return Self::default();
        }
        // Adding zero turns -0 into 0, so that the order of the two does not show.
        let least = lanes(values, f64::INFINITY, |s, v| if v < s { v } else { s }) + 0.0;
        let most = lanes(values, f64::NEG_INFINITY, |s, v| if v > s { v } else { s }) + 0.0;
        let count = |x: f64| values.iter().map(|&v| u64::from(v == x)).sum::<u64>();
        let (mean, mean_rest, squares) = moments(values, least, most);
        Self {
            present: values.len() as u64,
            least,
            least_count: count(least),
            most,
            most_count: count(most),
            mean,
            mean_rest,
            squares,
            ..Self::default()
        }
    }

    /// Adds the totals of the rows that follow.
    pub(super) fn merge(&mut self, later: &Self) {
        self.nulls += later.nulls;
        self.nans += later.nans;
        self.infinite += later.infinite;
        self.codes += later.codes;
        let first = |a: Option<u64>, b: Option<u64>| a.into_iter().chain(b).min();
        self.first_infinite = first(self.first_infinite, later.first_infinite);
        self.first_gap = first(self.first_gap, later.first_gap);
        if later.present == 0 {
            return;
        }
        if self.present == 0 {
            let Self { nulls, nans, infinite, codes, first_infinite, first_gap, .. } = *self;
            *self = Self { nulls, nans, infinite, codes, first_infinite, first_gap, ..*later };
            return;
        }
        (self.least, self.least_count) = match self.least.total_cmp(&later.least) {
            Ordering::Less => (self.least, self.least_count),
            Ordering::Equal => (self.least, self.least_count + later.least_count),
            Ordering::Greater => (later.least, later.least_count),
        };
        (self.most, self.most_count) = match self.most.total_cmp(&later.most) {
            Ordering::Greater => (self.most, self.most_count),
            Ordering::Equal => (self.most, self.most_count + later.most_count),
            Ordering::Less => (later.most, later.most_count),
        };
        let (n, m) = (self.present as f64, later.present as f64);
        let share = m / (n + m);
        let apart = (later.mean - self.mean) + (later.mean_rest - self.mean_rest);
        (self.mean, self.mean_rest) = if self.mean.abs().max(later.mean.abs()) < LARGE {
            two_sum(self.mean, self.mean_rest + apart * share)
        } else {
            (self.mean * (1.0 - share) + later.mean * share, 0.0)
        };
        self.squares = (self.squares + later.squares + apart * (n * share) * apart).min(f64::MAX);
        self.present += later.present;
    }
}

/// Folds in eight lanes, which are then folded in order: one fixed order of operations, and room for vectors.
pub(super) fn lanes(values: &[f64], start: f64, step: impl Fn(f64, f64) -> f64) -> f64 {
    let mut sums = [start; 8];
    let (chunks, rest) = values.as_chunks::<8>();
    for chunk in chunks {
        for (s, v) in sums.iter_mut().zip(chunk) {
            *s = step(*s, *v);
        }
    }
    for (s, v) in sums.iter_mut().zip(rest) {
        *s = step(*s, *v);
    }
    // A lane is folded like a value only for sums, least and greatest, where both are the same operation.
    sums.iter().skip(1).fold(sums[0], |s, v| step(s, *v))
}

/// Sum of `f` over the values, in lanes.
fn sum(values: &[f64], f: impl Fn(f64) -> f64) -> f64 {
    let mut sums = [0.0; 8];
    let (chunks, rest) = values.as_chunks::<8>();
    for chunk in chunks {
        for (s, v) in sums.iter_mut().zip(chunk) {
            *s += f(*v);
        }
    }
    for (s, v) in sums.iter_mut().zip(rest) {
        *s += f(*v);
    }
    sums.iter().sum()
}

/// Sum of two numbers and what rounding took from it (Knuth 1969, The Art of Computer Programming 2, 4.2.2).
fn two_sum(a: f64, b: f64) -> (f64, f64) {
    let sum = a + b;
    let from_b = sum - a;
    (sum, (a - (sum - from_b)) + (b - from_b))
}

/// Mean, what rounding took from it, and the sum of squared deviations, of at least one finite value between `least`
/// and `most`.
fn moments(values: &[f64], least: f64, most: f64) -> (f64, f64, f64) {
    let n = values.len() as f64;
    if least == most {
        return (least, 0.0, 0.0);
    }
    // A power of two, so that scaling does not round.
    let unit = if most.max(-least) > LARGE { 2f64.powi(-600) } else { 1.0 };
    let (least, most, start) = (least * unit, most * unit, values[0] * unit);
    // Kept between the extremes, which rounding may leave.
    let near = (start + sum(values, |v| v * unit - start) / n).clamp(least, most);
    let drift = sum(values, |v| v * unit - near);
    let squares = sum(values, |v| (v * unit - near) * (v * unit - near)) - drift * (drift / n);
    let squares = (squares.max(0.0) / unit / unit).min(f64::MAX);
    let (mean, rest) = two_sum(near, drift / n);
    if unit == 1.0 { (mean, rest, squares) } else { (mean.clamp(least, most) / unit, 0.0, squares) }
}

impl RowTotals {
    pub(super) fn merge(&mut self, later: &Self) {
        self.rows += later.rows;
        self.kept += later.kept;
        self.complete += later.complete;
        self.incomplete += later.incomplete;
        self.zero_weights += later.zero_weights;
        self.held += later.held;
        self.weight = (self.weight + later.weight).min(f64::MAX);
    }

    pub(super) fn write(&self, out: &mut Vec<u8>) {
        let Self { rows, kept, complete, incomplete, zero_weights, held, weight } = *self;
        for count in [rows, kept, complete, incomplete, zero_weights, held] {
            put_u64(out, count);
        }
        put_f64(out, weight);
    }

    pub(super) fn read(reader: &mut Reader<'_>) -> Result<Self> {
        let mut count = || small(reader.u64()?);
        let (rows, kept, complete, incomplete) = (count()?, count()?, count()?, count()?);
        let (zero_weights, held) = (count()?, count()?);
        let weight = finite(reader.f64()?)?;
        Ok(Self { rows, kept, complete, incomplete, zero_weights, held, weight })
    }
}

impl ColumnTotals {
    /// Bytes of one column.
    pub(super) const WIDTH: usize = 14 * 8;

    pub(super) fn write(&self, out: &mut Vec<u8>) {
        for count in [self.nulls, self.nans, self.infinite, self.codes] {
            put_u64(out, count);
        }
        // No row has the greatest number, so it can stand for none.
        put_u64(out, self.first_infinite.unwrap_or(u64::MAX));
        put_u64(out, self.first_gap.unwrap_or(u64::MAX));
        for count in [self.present, self.least_count, self.most_count] {
            put_u64(out, count);
        }
        for value in [self.least, self.most, self.mean, self.mean_rest, self.squares] {
            put_f64(out, value);
        }
    }

    pub(super) fn read(reader: &mut Reader<'_>) -> Result<Self> {
        let mut count = || small(reader.u64()?);
        let (nulls, nans, infinite, codes) = (count()?, count()?, count()?, count()?);
        let mut row = || reader.u64().map(|row| (row != u64::MAX).then_some(row));
        let (first_infinite, first_gap) = (row()?, row()?);
        let mut count = || small(reader.u64()?);
        let (present, least_count, most_count) = (count()?, count()?, count()?);
        let mut value = || finite(reader.f64()?);
        let (least, most, mean, mean_rest, squares) = (value()?, value()?, value()?, value()?, value()?);
        if squares < 0.0 {
            return Err(Error::Damaged { what: "column summary: a sum of squares below zero".into() });
        }
        Ok(Self {
            nulls,
            nans,
            infinite,
            codes,
            first_infinite,
            first_gap,
            present,
            least,
            least_count,
            most,
            most_count,
            mean,
            mean_rest,
            squares,
        })
    }
}

/// A count that no sum of two can overflow.
fn small(count: u64) -> Result<u64> {
    if count < 1 << 56 {
        Ok(count)
    } else {
        Err(Error::Damaged { what: format!("column summary: an impossible count of {count}") })
    }
}

fn finite(value: f64) -> Result<f64> {
    if value.is_finite() {
        Ok(value)
    } else {
        Err(Error::Damaged { what: "column summary: a total is not a finite number".into() })
    }
}
