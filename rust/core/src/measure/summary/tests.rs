use super::*;
use crate::leaf::Cutter;
use crate::measure::{from_bytes, to_bytes};
use arrow_array::{ArrayRef, BooleanArray, Float32Array, Float64Array, RecordBatch};

/// A table of two columns `a` and `b`, a row weight, a filter and a mark of held-out rows.
struct Table {
    a: Vec<Option<f64>>,
    b: Vec<f32>,
    weight: Vec<f64>,
    keep: Vec<Option<bool>>,
    held: Vec<Option<bool>>,
}

impl Table {
    fn new(n: usize) -> Self {
        let wave = |i: usize| 1e9 + ((i * 7919) % 1009) as f64 / 64.0;
        Self {
            a: (0..n).map(|i| Some(wave(i))).collect(),
            b: (0..n).map(|i| (i % 13) as f32).collect(),
            weight: vec![1.0; n],
            keep: vec![Some(true); n],
            held: vec![Some(false); n],
        }
    }

    /// A table with everything in it.
    fn mixed(n: usize) -> Self {
        let mut table = Self::new(n);
        for i in 0..n {
            match i % 97 {
                3 => table.a[i] = None,
                5 => table.a[i] = Some(f64::NAN),
                7 => table.a[i] = Some(-9999.0),
                11 => table.b[i] = f32::INFINITY,
                _ => {}
            }
            table.weight[i] = (i % 5) as f64;
            table.keep[i] = [Some(true), Some(false), None, Some(true), Some(true), Some(true)][i % 6];
            table.held[i] = [None, Some(true), Some(false), Some(false)][i % 4];
        }
        table
    }

    fn leaves(&self, reading: &Reading, batch_rows: usize) -> Vec<Leaf> {
        let columns: Vec<(&str, ArrayRef)> = vec![
            ("a", Arc::new(Float64Array::from(self.a.clone()))),
            ("b", Arc::new(Float32Array::from(self.b.clone()))),
            ("weight", Arc::new(Float64Array::from(self.weight.clone()))),
            ("keep", Arc::new(BooleanArray::from(self.keep.clone()))),
            ("held", Arc::new(BooleanArray::from(self.held.clone()))),
        ];
        let batch = RecordBatch::try_from_iter_with_nullable(columns.into_iter().map(|(n, c)| (n, c, true))).unwrap();
        let (mut cutter, mut leaves, mut at) = (Cutter::new(0), Vec::new(), 0);
        while at < self.a.len() {
            let part = batch.slice(at, batch_rows.min(self.a.len() - at));
            let rows = reading.read(&part, at as u64).unwrap();
            cutter.push(Arc::new(rows), |leaf| leaves.push(leaf));
            at += part.num_rows();
        }
        leaves.extend(cutter.finish());
        leaves
    }
}

fn plain() -> Reading {
    Reading { columns: vec!["a".into(), "b".into()], codes: vec![vec![-9999.0], vec![]], ..Reading::default() }
}

fn everything() -> Reading {
    let name = |n: &str| Some(n.to_string());
    Reading { weight: name("weight"), keep: name("keep"), held: name("held"), ..plain() }
}

fn run(leaves: &[Leaf], reading: &Reading) -> Result<ColumnSummary> {
    let mut summary = ColumnSummary::new(2).with_reading(Arc::new(reading.clone()));
    for leaf in leaves {
        let mut part = summary.fresh();
        part.add_leaf(Seen::Raw(leaf))?;
        summary.merge(part)?;
    }
    Ok(summary)
}

fn close(found: f64, wanted: f64) {
    assert!((found - wanted).abs() <= 1e-12 * wanted.abs(), "{found} {wanted}");
}

#[test]
fn plain_rows_at_a_huge_offset() {
    let table = Table::new(10_000);
    let summary = run(&table.leaves(&plain(), 777), &plain()).unwrap();
    let a = summary.columns()[0];
    let fractions: Vec<f64> = table.a.iter().map(|v| v.unwrap() - 1e9).collect();
    let mean = fractions.iter().sum::<f64>() / 1e4;
    let variance = fractions.iter().map(|v| (v - mean) * (v - mean)).sum::<f64>() / 1e4;
    assert!((a.mean - 1e9 - mean).abs() < 1e-6);
    assert!((a.variance() / variance - 1.0).abs() < 1e-12);
    assert_eq!((a.present, a.nulls, a.nans, a.codes, a.infinite), (10_000, 0, 0, 0, 0));
    assert_eq!((a.first_gap, a.first_infinite), (None, None));
    let b = summary.columns()[1];
    assert_eq!((b.least, b.least_count, b.most, b.most_count), (0.0, 770, 12.0, 769));
    let rows = *summary.rows();
    assert_eq!((rows.rows, rows.kept, rows.complete, rows.incomplete), (10_000, 10_000, 10_000, 0));
    assert_eq!((rows.zero_weights, rows.held, rows.weight), (0, 0, 10_000.0));
}

#[test]
fn counts_match_a_plain_loop_and_batches_do_not_matter() {
    let table = Table::mixed(9_000);
    let summary = run(&table.leaves(&everything(), 9_000), &everything()).unwrap();
    let mut rows = RowTotals { rows: 9_000, ..RowTotals::default() };
    let (mut a, mut b) = (ColumnTotals::default(), ColumnTotals::default());
    let mut sums = [0.0; 2];
    for i in 0..9_000 {
        if table.keep[i] != Some(true) {
            continue;
        }
        if table.weight[i] == 0.0 {
            rows.zero_weights += 1;
            continue;
        }
        rows.kept += 1;
        let gap = match table.a[i] {
            None => Some(&mut a.nulls),
            Some(v) if v.is_nan() => Some(&mut a.nans),
            Some(-9999.0) => Some(&mut a.codes),
            Some(v) => {
                a.present += 1;
                sums[0] += v - 1e9;
                None
            }
        };
        let mut complete = true;
        if let Some(count) = gap {
            *count += 1;
            a.first_gap = a.first_gap.or(Some(i as u64));
            complete = false;
        }
        if table.b[i].is_infinite() {
            b.infinite += 1;
            b.first_infinite = b.first_infinite.or(Some(i as u64));
            complete = false;
        } else {
            b.present += 1;
            sums[1] += f64::from(table.b[i]);
        }
        if !complete {
            rows.incomplete += 1;
            continue;
        }
        rows.complete += 1;
        if table.held[i] == Some(true) {
            rows.held += 1;
        } else {
            rows.weight += table.weight[i];
        }
    }
    assert_eq!(*summary.rows(), rows);
    for (found, wanted) in summary.columns().iter().zip([a, b]) {
        assert_eq!((found.nulls, found.nans, found.codes), (wanted.nulls, wanted.nans, wanted.codes));
        assert_eq!((found.infinite, found.present), (wanted.infinite, wanted.present));
        assert_eq!((found.first_gap, found.first_infinite), (wanted.first_gap, wanted.first_infinite));
    }
    assert!((summary.columns()[0].mean - 1e9 - sums[0] / a.present as f64).abs() < 1e-6);
    close(summary.columns()[1].mean, sums[1] / b.present as f64);
    for batch_rows in [1, 100, 3072, 5000] {
        let again = run(&table.leaves(&everything(), batch_rows), &everything()).unwrap();
        assert_eq!(to_bytes(&again), to_bytes(&summary));
    }
}

#[test]
fn merged_equals_single() {
    let values: Vec<f64> = (0..3000).map(|i| ((i * 37) % 1001) as f64 - 1e6).collect();
    let single = ColumnTotals::of(&values);
    for cut in [0, 1, 8, 1500, 2999, 3000] {
        let mut merged = ColumnTotals::of(&values[..cut]);
        merged.merge(&ColumnTotals::of(&values[cut..]));
        close(merged.mean, single.mean);
        close(merged.variance(), single.variance());
        assert_eq!((merged.least, merged.least_count), (single.least, single.least_count));
        assert_eq!((merged.most, merged.most_count), (single.most, single.most_count));
        assert_eq!(merged.present, single.present);
    }
}

#[test]
fn extreme_values_stay_finite() {
    let max = f64::MAX;
    for values in [[max, -max, max], [max, max, max], [1e308, 1e307, -1e308], [1e200, 1.0, 2.0], [-0.0, 0.0, 5e-324]] {
        let mut all = ColumnTotals::of(&values);
        for other in [[-max; 3], [1.0; 3], values] {
            all.merge(&ColumnTotals::of(&other));
            assert!(all.mean.is_finite() && all.mean.abs() <= max, "{values:?}");
            assert!(all.variance().is_finite() && all.variance() >= 0.0);
        }
    }
    let near = ColumnTotals::of(&[1e160, 3e160]);
    close(near.mean, 2e160);
    assert_eq!(near.variance(), f64::MAX);
    let near = ColumnTotals::of(&[1e152, 3e152]);
    close(near.variance(), 1e304);
    let zeros = ColumnTotals::of(&[0.0, -0.0]);
    assert!(zeros.least_count == 2 && zeros.least.is_sign_positive());
    // A constant has no variance, whatever its digits.
    let constant = ColumnTotals::of(&[0.1; 1000]);
    assert_eq!((constant.mean, constant.variance()), (0.1, 0.0));
}

#[test]
fn weights_that_cannot_be_used_name_the_row() {
    for wrong in [f64::NAN, -1.0, f64::INFINITY] {
        let mut table = Table::new(5000);
        table.weight[4000] = wrong;
        let reading = Reading { weight: Some("weight".into()), ..plain() };
        let error = run(&table.leaves(&reading, 1000), &reading).err().unwrap();
        assert!(matches!(error, Error::Row { row: 4000, .. }), "{error}");
        table.keep[4000] = None;
        let reading = everything();
        assert_eq!(run(&table.leaves(&reading, 1000), &reading).unwrap().rows().kept, 4999);
    }
}

#[test]
fn bytes_round_trip_and_never_panic() {
    let table = Table::mixed(4000);
    let summary = run(&table.leaves(&everything(), 500), &everything()).unwrap();
    let bytes = to_bytes(&summary);
    let mut back = from_bytes(&bytes).unwrap();
    assert_eq!(to_bytes(back.as_ref()), bytes);
    back.merge(from_bytes(&bytes).unwrap()).unwrap();
    assert!(back.merge(Box::new(ColumnSummary::new(3))).is_err());
    for n in 0..bytes.len() {
        assert!(matches!(from_bytes(&bytes[..n]), Err(Error::Damaged { .. })));
    }
    for i in 0..bytes.len() {
        for value in [0, 0x7f, 0xff, bytes[i] ^ 0x40] {
            let mut wrong = bytes.clone();
            wrong[i] = value;
            if let Ok(mut read) = from_bytes(&wrong) {
                let _ = read.merge(from_bytes(&bytes).unwrap());
            }
        }
    }
    let raw = &table.leaves(&everything(), 500)[0];
    assert!(ColumnSummary::new(2).add_leaf(Seen::Raw(raw)).is_err());
}
