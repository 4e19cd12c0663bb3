//! Rows that stay in memory, copied together: the batches they came in, and the reader's memory with them, are free again.

use crate::batch::{Column, Rows};
use crate::leaf::{Leaf, Piece};
use arrow_array::types::ArrowPrimitiveType;
use arrow_array::{Array, BooleanArray, PrimitiveArray};
use arrow_buffer::{BooleanBufferBuilder, NullBuffer, NullBufferBuilder, ScalarBuffer};
use std::sync::Arc;

/// The same leaves over one batch of their own. `None` where the batches hold columns of different kinds.
pub fn together(leaves: &[Arc<Leaf>]) -> Option<Vec<Arc<Leaf>>> {
    let pieces: Vec<&Piece> = leaves.iter().flat_map(|leaf| &leaf.pieces).collect();
    let first = pieces.first()?;
    let features = (0..first.rows.features.len())
        .map(|j| column(&pieces, |rows| rows.features.get(j)))
        .collect::<Option<Vec<_>>>()?;
    let weight = match first.rows.weight {
        Some(_) => Some(column(&pieces, |rows| rows.weight.as_ref())?),
        None => None,
    };
    let flags = |of: fn(&Rows) -> Option<&BooleanArray>| -> Option<Option<BooleanArray>> {
        if of(&first.rows).is_none() { Some(None) } else { Some(Some(marks(&pieces, of)?)) }
    };
    let keep = flags(|rows| rows.keep.as_ref())?;
    let held = flags(|rows| rows.held.as_ref())?;
    let key = match first.rows.key {
        Some(_) => {
            let mut all = Vec::with_capacity(pieces.iter().map(|p| p.len).sum());
            for p in &pieces {
                all.extend_from_slice(&p.rows.key.as_ref()?[p.start..p.start + p.len]);
            }
            Some(all)
        }
        None => None,
    };
    let len = pieces.iter().map(|p| p.len).sum();
    let rows = Arc::new(Rows { first_row: leaves.first()?.first_row, len, features, weight, keep, held, key });
    let mut start = 0;
    Some(
        leaves
            .iter()
            .map(|leaf| {
                let len = leaf.len();
                let mut own = Leaf::new(leaf.first_row);
                own.pieces.push(Piece { rows: Arc::clone(&rows), start, len });
                start += len;
                Arc::new(own)
            })
            .collect(),
    )
}

fn column<'a>(pieces: &[&'a Piece], of: impl Fn(&'a Rows) -> Option<&'a Column>) -> Option<Column> {
    let all = pieces.iter().map(|p| Some((of(&p.rows)?, p.start, p.len))).collect::<Option<Vec<_>>>()?;
    let f64s = |widened: bool| -> Option<PrimitiveArray<_>> {
        let arrays = all.iter().map(|(column, start, len)| match column {
            Column::F64(a) if !widened => Some((a, *start, *len)),
            Column::Widened(a) if widened => Some((a, *start, *len)),
            _ => None,
        });
        Some(joined(&arrays.collect::<Option<Vec<_>>>()?))
    };
    Some(match all.first()?.0 {
        Column::F64(_) => Column::F64(f64s(false)?),
        Column::Widened(_) => Column::Widened(f64s(true)?),
        Column::F32(_) => {
            let arrays = all.iter().map(|(column, start, len)| match column {
                Column::F32(a) => Some((a, *start, *len)),
                _ => None,
            });
            Column::F32(joined(&arrays.collect::<Option<Vec<_>>>()?))
        }
    })
}

fn joined<T: ArrowPrimitiveType>(parts: &[(&PrimitiveArray<T>, usize, usize)]) -> PrimitiveArray<T> {
    let len = parts.iter().map(|p| p.2).sum();
    let mut values: Vec<T::Native> = Vec::with_capacity(len);
    let mut nulls = NullBufferBuilder::new(len);
    for (array, start, n) in parts {
        values.extend_from_slice(&array.values()[*start..start + n]);
        append(&mut nulls, array.nulls(), *start, *n);
    }
    PrimitiveArray::new(ScalarBuffer::from(values), nulls.finish())
}

fn append(to: &mut NullBufferBuilder, nulls: Option<&NullBuffer>, start: usize, n: usize) {
    match nulls {
        Some(nulls) => to.append_buffer(&nulls.slice(start, n)),
        None => to.append_n_non_nulls(n),
    }
}

fn marks(pieces: &[&Piece], of: fn(&Rows) -> Option<&BooleanArray>) -> Option<BooleanArray> {
    let len = pieces.iter().map(|p| p.len).sum();
    let (mut values, mut nulls) = (BooleanBufferBuilder::new(len), NullBufferBuilder::new(len));
    for p in pieces {
        let array = of(&p.rows)?;
        values.append_buffer(&array.values().slice(p.start, p.len));
        append(&mut nulls, array.nulls(), p.start, p.len);
    }
    Some(BooleanArray::new(values.finish(), nulls.finish()))
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::leaf::{Cutter, LEAF_ROWS};
    use arrow_array::{Float32Array, Float64Array};

    /// Batches of uneven sizes with gaps here and there; everything that a batch may carry.
    fn leaves(sizes: &[usize]) -> Vec<Arc<Leaf>> {
        let mut cutter = Cutter::new(0);
        let (mut out, mut next) = (Vec::new(), 0usize);
        for &len in sizes {
            let at = next..next + len;
            let gap = |i: usize, every: usize| !i.is_multiple_of(every);
            let rows = Rows {
                first_row: next as u64,
                len,
                features: vec![
                    Column::F64(at.clone().map(|i| i as f64).collect::<Vec<_>>().into()),
                    Column::F32(at.clone().map(|i| gap(i, 7).then_some(i as f32)).collect::<Float32Array>()),
                    Column::Widened(at.clone().map(|i| gap(i, 1000).then_some(-(i as f64))).collect::<Float64Array>()),
                ],
                weight: Some(Column::F64(at.clone().map(|i| (i % 3) as f64).collect::<Vec<_>>().into())),
                keep: Some(at.clone().map(|i| gap(i, 11).then_some(i % 2 == 0)).collect()),
                held: Some(at.clone().map(|i| Some(i % 5 == 0)).collect()),
                key: Some(at.map(|i| i as u64 * 3).collect()),
            };
            next += len;
            cutter.push(Arc::new(rows), |leaf| out.push(Arc::new(leaf)));
        }
        out.extend(cutter.finish().map(Arc::new));
        out
    }

    #[test]
    fn what_is_copied_together_is_the_same() {
        let apart = leaves(&[1, 5000, 777, 4096, 2]);
        let joined = together(&apart).expect("columns of the same kinds");
        assert_eq!(joined.len(), apart.len());
        for (a, b) in apart.iter().zip(&joined) {
            assert_eq!((a.first_row, a.len(), b.pieces.len()), (b.first_row, b.len(), 1));
            let bits = |leaf: &Leaf, j: usize| {
                let mut out = vec![0.0; leaf.len()];
                leaf.column(j, &mut out);
                out.iter().map(|v| v.to_bits()).collect::<Vec<_>>()
            };
            (0..3).for_each(|j| assert_eq!(bits(a, j), bits(b, j), "column {j}"));
            let told = |leaf: &Leaf| {
                let mut out = Vec::new();
                for p in &leaf.pieces {
                    for i in p.start..p.start + p.len {
                        let (rows, mark) =
                            (&p.rows, |m: &Option<BooleanArray>| m.as_ref().map(|m| m.is_valid(i).then(|| m.value(i))));
                        let weight = rows.weight.as_ref().map(|w| w.value(i).to_bits());
                        out.push((weight, mark(&rows.keep), mark(&rows.held), rows.key.as_ref().map(|k| k[i])));
                    }
                }
                out
            };
            assert_eq!(told(a), told(b));
        }
        assert_eq!(joined[0].pieces[0].rows.len, 9876);
        assert_eq!(joined[1].pieces[0].start, LEAF_ROWS);
    }

    #[test]
    fn columns_of_different_kinds_stay_as_they_are() {
        let mut all = leaves(&[10]);
        let rows = Rows {
            first_row: 10,
            len: 1,
            features: vec![Column::F32(Float32Array::from(vec![1.0])); 3],
            weight: None,
            keep: None,
            held: None,
            key: None,
        };
        let mut other = Leaf::new(LEAF_ROWS as u64);
        other.pieces.push(Piece { rows: Arc::new(rows), start: 0, len: 1 });
        all.push(Arc::new(other));
        assert!(together(&all).is_none());
    }
}
