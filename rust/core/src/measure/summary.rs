//! What is in the columns: counts, gaps, extremes and moments, and how many rows can be fitted.
//!
//! Moments of a leaf take two sweeps about its mean; leaves are merged by the pairwise rule of Chan, Golub and LeVeque
//! (1983, "Algorithms for computing the sample variance"). Sums that leave the range of float64 stay at its end.

use crate::batch::Reading;
use crate::bytes::{Reader, put_u64};
use crate::error::{Error, Result};
use crate::leaf::{LEAF_ROWS, Leaf};
use crate::measure::{Measure, Needs, Seen, downcast};
use arrow_array::Array;
use std::any::Any;
use std::sync::Arc;

mod totals;

use totals::lanes;
pub use totals::{ColumnTotals, RowTotals};

/// Tag of the bytes.
pub const TAG: u8 = 4;

/// Counts, gaps, extremes and moments of each column, and of the rows as a whole. See the module.
///
/// How rows are read is no part of the bytes: [`ColumnSummary::with_reading`] must come before the first leaf.
pub struct ColumnSummary {
    columns: Vec<ColumnTotals>,
    rows: RowTotals,
    reading: Option<Arc<Reading>>,
}

impl ColumnSummary {
    /// An empty summary of `columns` columns.
    pub fn new(columns: usize) -> Self {
        Self { columns: vec![ColumnTotals::default(); columns], rows: RowTotals::default(), reading: None }
    }

    /// The same summary, told how rows are read; [`Measure::fresh`] passes it on.
    pub fn with_reading(mut self, reading: Arc<Reading>) -> Self {
        self.reading = Some(reading);
        self
    }

    /// Totals of each column.
    pub fn columns(&self) -> &[ColumnTotals] {
        &self.columns
    }

    /// Totals of the rows.
    pub fn rows(&self) -> &RowTotals {
        &self.rows
    }

    fn add(&mut self, leaf: &Leaf, reading: &Reading) -> Result<()> {
        let total = leaf.len();
        if reading.columns.len() != self.columns.len() || total > LEAF_ROWS {
            return Err(Error::Internal { what: "a column summary was shown rows of another reading".into() });
        }
        let mut rows = RowTotals { rows: total as u64, ..RowTotals::default() };
        let (kept, weights) = kept_rows(leaf, reading, &mut rows)?;
        rows.kept = kept.as_ref().map_or(total as u64, |k| k.iter().map(|f| u64::from(*f)).sum());
        let mut complete: Flags = None;
        let mut values = [0.0; LEAF_ROWS];
        for (j, totals) in self.columns.iter_mut().enumerate() {
            let values = &mut values[..total];
            leaf.column(j, values);
            let codes = reading.codes.get(j).map_or(&[][..], |c| c.as_slice());
            // Zero times a value is zero when it is finite and NaN otherwise.
            let plain = lanes(values, 0.0, |s, v| s + v * 0.0) == 0.0
                && !codes.iter().any(|code| values.iter().fold(false, |found, v| found | (v == code)));
            let found = if plain {
                match &kept {
                    Some(kept) => ColumnTotals::of(compact(values, kept)),
                    None => ColumnTotals::of(values),
                }
            } else {
                let complete = complete.get_or_insert_with(|| kept.clone().unwrap_or_else(|| vec![true; total]));
                sort_out(leaf, j, values, codes, kept.as_deref(), complete)
            };
            totals.merge(&found);
        }
        let complete = complete.as_deref().or(kept.as_deref());
        count_rows(leaf, reading, complete, weights.as_deref(), &mut rows);
        self.rows.merge(&rows);
        Ok(())
    }

    /// Reads the totals.
    pub fn read(reader: &mut Reader<'_>) -> Result<Self> {
        let columns = reader.length(ColumnTotals::WIDTH)?;
        let columns = (0..columns).map(|_| ColumnTotals::read(reader)).collect::<Result<Vec<_>>>()?;
        Ok(Self { columns, rows: RowTotals::read(reader)?, reading: None })
    }
}

/// A flag for each row of a leaf; none when all rows have it.
type Flags = Option<Vec<bool>>;

/// Which rows the filter keeps with a weight above zero, and the row weights.
fn kept_rows(leaf: &Leaf, reading: &Reading, rows: &mut RowTotals) -> Result<(Flags, Option<Vec<f64>>)> {
    let total = leaf.len();
    let mut kept = reading.keep.is_some().then(|| {
        let flags = leaf.pieces.iter().flat_map(|p| {
            let keep = p.rows.keep.as_ref();
            (p.start..p.start + p.len).map(move |i| keep.is_none_or(|k| k.is_valid(i) && k.value(i)))
        });
        flags.collect::<Vec<bool>>()
    });
    let Some(name) = &reading.weight else { return Ok((kept, None)) };
    let mut weights = vec![1.0; total];
    let mut at = 0;
    for piece in &leaf.pieces {
        if let Some(column) = &piece.rows.weight {
            column.load(piece.start, &mut weights[at..at + piece.len]);
        }
        at += piece.len;
    }
    for (i, &w) in weights.iter().enumerate() {
        if (w > 0.0 && w.is_finite()) || kept.as_ref().is_some_and(|k| !k[i]) {
            continue;
        }
        if w != 0.0 {
            return Err(Error::Row {
                row: leaf.first_row + i as u64,
                name: name.clone(),
                what: format!("a row weight of {w}"),
                advice: "row weights must be zero or positive numbers; filter such rows with where".into(),
            });
        }
        rows.zero_weights += 1;
        kept.get_or_insert_with(|| vec![true; total])[i] = false;
    }
    Ok((kept, Some(weights)))
}

/// Moves the kept values to the front.
fn compact<'a>(values: &'a mut [f64], kept: &[bool]) -> &'a mut [f64] {
    let mut to = 0;
    for (i, &flag) in kept.iter().enumerate() {
        values[to] = values[i];
        to += usize::from(flag);
    }
    &mut values[..to]
}

/// Counts what is not a usable value in the kept rows, and takes the totals of the rest. `values` is overwritten.
fn sort_out(
    leaf: &Leaf,
    j: usize,
    values: &mut [f64],
    codes: &[f64],
    kept: Option<&[bool]>,
    complete: &mut [bool],
) -> ColumnTotals {
    let mut found = ColumnTotals::default();
    let (mut to, mut at) = (0, 0);
    for piece in &leaf.pieces {
        let column = &piece.rows.features[j];
        for i in piece.start..piece.start + piece.len {
            let (v, here) = (values[at], at);
            at += 1;
            if kept.is_some_and(|k| !k[here]) {
                continue;
            }
            let code = codes.contains(&v);
            if v.is_finite() && !code {
                values[to] = v;
                to += 1;
                continue;
            }
            complete[here] = false;
            let row = leaf.first_row + here as u64;
            if v.is_infinite() && !code {
                found.infinite += 1;
                found.first_infinite = found.first_infinite.or(Some(row));
                continue;
            }
            found.first_gap = found.first_gap.or(Some(row));
            let counter = match (code, column.is_null(i)) {
                (true, _) => &mut found.codes,
                (false, true) => &mut found.nulls,
                (false, false) => &mut found.nans,
            };
            *counter += 1;
        }
    }
    let mut totals = ColumnTotals::of(&values[..to]);
    totals.merge(&found);
    totals
}

/// Fills in the counts of complete and held-out rows, and the weight; `complete` none: all rows are.
fn count_rows(
    leaf: &Leaf,
    reading: &Reading,
    complete: Option<&[bool]>,
    weights: Option<&[f64]>,
    rows: &mut RowTotals,
) {
    rows.complete = complete.map_or(rows.rows, |c| c.iter().map(|f| u64::from(*f)).sum());
    rows.incomplete = rows.kept - rows.complete;
    let has_held = reading.held.is_some() || reading.held_share > 0.0;
    if !has_held && weights.is_none() {
        rows.weight = rows.complete as f64;
        return;
    }
    let mut at = 0;
    for piece in &leaf.pieces {
        for i in piece.start..piece.start + piece.len {
            if complete.is_none_or(|c| c[at]) {
                if has_held && reading.is_held(&piece.rows, i) {
                    rows.held += 1;
                } else {
                    rows.weight += weights.map_or(1.0, |w| w[at]);
                }
            }
            at += 1;
        }
    }
    rows.weight = rows.weight.min(f64::MAX);
}

impl Measure for ColumnSummary {
    fn tag(&self) -> u8 {
        TAG
    }

    fn needs(&self) -> Needs {
        Needs::Raw
    }

    fn fresh(&self) -> Box<dyn Measure> {
        Box::new(Self { reading: self.reading.clone(), ..Self::new(self.columns.len()) })
    }

    fn add_leaf(&mut self, seen: Seen<'_>) -> Result<()> {
        match (seen, self.reading.clone()) {
            (Seen::Raw(leaf), Some(reading)) => self.add(leaf, &reading),
            _ => Err(Error::Internal { what: "a column summary needs raw rows and a reading".into() }),
        }
    }

    fn merge(&mut self, later: Box<dyn Measure>) -> Result<()> {
        let later = downcast::<Self>(later)?;
        if later.columns.len() != self.columns.len() {
            return Err(Error::Internal { what: "column summaries of two definitions met".into() });
        }
        self.columns.iter_mut().zip(&later.columns).for_each(|(a, b)| a.merge(b));
        self.rows.merge(&later.rows);
        Ok(())
    }

    fn write(&self, out: &mut Vec<u8>) {
        put_u64(out, self.columns.len() as u64);
        self.columns.iter().for_each(|c| c.write(out));
        self.rows.write(out);
    }

    fn as_any(&self) -> &dyn Any {
        self
    }

    fn into_any(self: Box<Self>) -> Box<dyn Any> {
        self
    }
}

#[cfg(test)]
mod tests;
