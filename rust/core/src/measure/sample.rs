//! A random sample of fixed size, drawn by hashed priority.
//!
//! Priority sampling (Duffield, Lund and Thorup 2007, "Priority sampling for estimation of arbitrary subset sums"):
//! a row of weight w draws u, uniform in (0, 1], from a hash of its id, and has the priority q = w / u. The `size`
//! rows of largest priority are the sample; with tau the next largest, max(w, tau) is an unbiased estimate of how
//! many rows a sampled row stands for. Nothing depends on the order of the rows or of the merges: the state is a set.

use crate::bytes::{Reader, put_floats, put_integers, put_u64};
use crate::error::{Error, Result};
use crate::leaf::{LEAF_STRIDE, Loaded, Part};
use crate::measure::{Measure, Needs, Seen, downcast};
use crate::random::hash2;
use std::any::Any;
use std::cmp::Ordering;
use std::sync::Arc;
use std::sync::atomic::{AtomicU64, Ordering as Memory};

/// Tag of the bytes.
pub const TAG: u8 = 3;

/// Fewest rows gathered between two prunings.
const SLACK: usize = 1024;

/// A row in the running.
#[derive(Clone, Copy)]
struct Entry {
    priority: f64,
    id: u64,
    row: u64,
    weight: f64,
    /// Its values stand at `values[slot * columns..]`.
    slot: usize,
}

/// Largest priority first; ties by id, then by row number.
fn order(a: &Entry, b: &Entry) -> Ordering {
    b.priority.total_cmp(&a.priority).then(a.id.cmp(&b.id)).then(a.row.cmp(&b.row))
}

/// The priority of a row: weight / u with u uniform in (0, 1].
#[inline]
fn priority(seed: u64, id: u64, weight: f64) -> f64 {
    let u = ((hash2(seed, id) >> 11) + 1) as f64 * (1.0 / (1u64 << 53) as f64);
    (weight / u).min(f64::MAX)
}

/// At most `size` complete rows of the fitted part, in the units of the source. See the module.
pub struct Sample {
    columns: usize,
    size: usize,
    seed: u64,
    entries: Vec<Entry>,
    values: Vec<f64>,
    /// No row below this priority can be among the `size + 1` largest.
    floor: f64,
    /// The same bound, over all samples of one run.
    shared: Option<Arc<AtomicU64>>,
}

/// The rows of a finished sample, largest priority first.
#[derive(Clone, Debug, PartialEq)]
pub struct SampleRows {
    /// Number of columns.
    pub columns: usize,
    /// Row after row, `columns` values each.
    pub values: Vec<f64>,
    /// How many rows of the source each row stands for; the row weights when every row is in the sample.
    pub weights: Vec<f64>,
    /// Row numbers in the source.
    pub rows: Vec<u64>,
    /// The largest priority that was left out, 0 when every row is in the sample.
    pub threshold: f64,
}

impl Sample {
    /// An empty sample of at most `size` rows of `columns` columns.
    pub fn new(columns: usize, size: usize, seed: u64) -> Self {
        Self { columns, size, seed, entries: Vec::new(), values: Vec::new(), floor: 0.0, shared: None }
    }

    /// An empty sample of the same definition, to be the prototype of one run over one set of rows: it and all that
    /// [`Measure::fresh`] makes of it tell each other which priorities are out of reach, so that hopeless rows are
    /// refused early on every thread (about ten times faster where each leaf has its own sample). The merged result is
    /// the same with and without, but a part is complete only after all parts of the run have been merged.
    pub fn for_one_run(&self) -> Self {
        Self { shared: Some(Arc::new(AtomicU64::new(0))), ..Self::new(self.columns, self.size, self.seed) }
    }

    /// Number of columns.
    pub fn columns(&self) -> usize {
        self.columns
    }

    /// Most rows in the finished sample.
    pub fn size(&self) -> usize {
        self.size
    }

    /// The rows, with unbiased weights.
    pub fn finish(&self) -> SampleRows {
        let best = self.best();
        let threshold = best.get(self.size).map_or(0.0, |e| e.priority);
        let best = &best[..best.len().min(self.size)];
        SampleRows {
            columns: self.columns,
            values: self.gather(best),
            weights: best.iter().map(|e| e.weight.max(threshold)).collect(),
            rows: best.iter().map(|e| e.row).collect(),
            threshold,
        }
    }

    /// Rows that are kept: the sample and the one that sets the threshold.
    fn kept(&self) -> usize {
        self.size.saturating_add(1)
    }

    /// The kept entries in order.
    fn best(&self) -> Vec<Entry> {
        let mut entries = self.entries.clone();
        entries.sort_unstable_by(order);
        entries.truncate(self.kept());
        entries
    }

    fn gather(&self, entries: &[Entry]) -> Vec<f64> {
        let d = self.columns;
        entries.iter().flat_map(|e| &self.values[e.slot * d..][..d]).copied().collect()
    }

    /// The highest bound known.
    fn bound(&self) -> f64 {
        // Priorities are positive, so their bits are in the order of their values.
        let shared = self.shared.as_ref().map_or(0.0, |s| f64::from_bits(s.load(Memory::Relaxed)));
        shared.max(self.floor)
    }

    /// Whether it is time to prune.
    fn is_full(&self) -> bool {
        self.entries.len() >= self.kept().saturating_add(self.kept().max(SLACK))
    }

    /// Keeps the `size + 1` entries of largest priority.
    fn prune(&mut self) {
        let (kept, d) = (self.kept(), self.columns);
        if self.entries.len() <= kept {
            return;
        }
        let (_, last, _) = self.entries.select_nth_unstable_by(kept - 1, order);
        self.floor = last.priority;
        self.entries.truncate(kept);
        self.entries.sort_unstable_by_key(|e| e.slot);
        for (to, entry) in self.entries.iter_mut().enumerate() {
            if entry.slot != to {
                self.values.copy_within(entry.slot * d..(entry.slot + 1) * d, to * d);
                entry.slot = to;
            }
        }
        self.values.truncate(kept * d);
        if let Some(shared) = &self.shared {
            shared.fetch_max(self.floor.to_bits(), Memory::Relaxed);
        }
    }

    fn add(&mut self, loaded: &Loaded) -> Result<()> {
        let n = loaded.n;
        if loaded.d != self.columns || loaded.ids.len() != n || loaded.rows.len() != n {
            return Err(Error::Internal { what: "a sample was shown a leaf without ids, or of other columns".into() });
        }
        let mut bound = self.bound();
        for i in 0..n {
            let weight = loaded.weights.as_ref().map_or(1.0, |w| w[i]);
            let id = loaded.ids[i];
            let priority = priority(self.seed, id, weight);
            if priority < bound {
                continue;
            }
            self.entries.push(Entry { priority, id, row: loaded.rows[i], weight, slot: self.entries.len() });
            self.values
                .extend(loaded.values.get(i..).unwrap_or_default().iter().step_by(LEAF_STRIDE).take(self.columns));
            if self.is_full() {
                self.prune();
                bound = self.bound();
            }
        }
        Ok(())
    }

    /// Reads definition and rows.
    pub fn read(reader: &mut Reader<'_>) -> Result<Self> {
        let damaged = |what: &str| Error::Damaged { what: format!("sample: {what}") };
        let columns = usize::try_from(reader.u64()?).map_err(|_| damaged("too many columns"))?;
        let size = usize::try_from(reader.u64()?).map_err(|_| damaged("too many rows"))?;
        let seed = reader.u64()?;
        let (ids, rows) = (reader.integers()?, reader.integers()?);
        let (weights, values) = (reader.floats()?, reader.floats()?);
        let n = ids.len();
        let mut sample = Self::new(columns, size, seed);
        if n > sample.kept() || rows.len() != n || weights.len() != n || n.checked_mul(columns) != Some(values.len()) {
            return Err(damaged("the lengths of its parts do not agree"));
        }
        if !weights.iter().all(|w| *w > 0.0 && w.is_finite()) || !values.iter().all(|v| v.is_finite()) {
            return Err(damaged("a weight or a value is not a usable number"));
        }
        sample.entries = (0..n)
            .map(|i| Entry {
                priority: priority(seed, ids[i], weights[i]),
                id: ids[i],
                row: rows[i],
                weight: weights[i],
                slot: i,
            })
            .collect();
        sample.values = values;
        Ok(sample)
    }
}

impl Measure for Sample {
    fn tag(&self) -> u8 {
        TAG
    }

    fn needs(&self) -> Needs {
        Needs::Values(Part::Fit)
    }

    fn fresh(&self) -> Box<dyn Measure> {
        Box::new(Self { shared: self.shared.clone(), ..Self::new(self.columns, self.size, self.seed) })
    }

    fn add_leaf(&mut self, seen: Seen<'_>) -> Result<()> {
        match seen {
            Seen::Values(loaded) => self.add(loaded),
            Seen::Raw(_) => Err(Error::Internal { what: "a sample needs loaded rows".into() }),
        }
    }

    fn merge(&mut self, later: Box<dyn Measure>) -> Result<()> {
        let mut later = downcast::<Self>(later)?;
        if (later.columns, later.size, later.seed) != (self.columns, self.size, self.seed) {
            return Err(Error::Internal { what: "samples of two definitions met".into() });
        }
        if later.entries.len() > self.entries.len() {
            std::mem::swap(&mut self.entries, &mut later.entries);
            std::mem::swap(&mut self.values, &mut later.values);
        }
        self.floor = self.floor.max(later.floor);
        let (mut bound, d) = (self.bound(), self.columns);
        for entry in &later.entries {
            if entry.priority < bound {
                continue;
            }
            self.entries.push(Entry { slot: self.entries.len(), ..*entry });
            self.values.extend_from_slice(&later.values[entry.slot * d..][..d]);
            if self.is_full() {
                self.prune();
                bound = self.bound();
            }
        }
        Ok(())
    }

    fn write(&self, out: &mut Vec<u8>) {
        let best = self.best();
        put_u64(out, self.columns as u64);
        put_u64(out, self.size as u64);
        put_u64(out, self.seed);
        put_integers(out, &best.iter().map(|e| e.id).collect::<Vec<_>>());
        put_integers(out, &best.iter().map(|e| e.row).collect::<Vec<_>>());
        put_floats(out, &best.iter().map(|e| e.weight).collect::<Vec<_>>());
        put_floats(out, &self.gather(&best));
    }

    fn as_any(&self) -> &dyn Any {
        self
    }

    fn into_any(self: Box<Self>) -> Box<dyn Any> {
        self
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::measure::{from_bytes, to_bytes};

    /// Rows `from..to` of an invented table: three columns made of the row number, ids as given.
    fn leaf(from: u64, to: u64, weight: Option<fn(u64) -> f64>, id: fn(u64) -> u64) -> Loaded {
        let mut loaded = Loaded::new(3);
        loaded.n = (to - from) as usize;
        loaded.rows = (from..to).collect();
        loaded.ids = (from..to).map(id).collect();
        loaded.weights = weight.map(|w| (from..to).map(w).collect());
        for (i, row) in (from..to).enumerate() {
            for j in 0..3 {
                loaded.values[j * LEAF_STRIDE + i] = row as f64 * 10.0 + j as f64;
            }
        }
        loaded
    }

    fn same(row: u64) -> u64 {
        row
    }

    fn add(sample: &mut dyn Measure, loaded: &Loaded) {
        sample.add_leaf(Seen::Values(loaded)).unwrap();
    }

    fn finish(measure: &dyn Measure) -> SampleRows {
        measure.as_any().downcast_ref::<Sample>().unwrap().finish()
    }

    fn uneven(row: u64) -> f64 {
        0.5 + (row % 7) as f64 * if row.is_multiple_of(501) { 1000.0 } else { 1.0 }
    }

    #[test]
    fn matches_a_plain_sort() {
        let mut sample = Sample::new(3, 100, 9);
        for k in 0..20 {
            add(&mut sample, &leaf(k * 1000, (k + 1) * 1000, Some(uneven), same));
        }
        let mut all: Vec<(f64, u64)> = (0..20_000).map(|r| (priority(9, r, uneven(r)), r)).collect();
        all.sort_by(|a, b| b.0.total_cmp(&a.0).then(a.1.cmp(&b.1)));
        let found = sample.finish();
        assert_eq!(found.threshold, all[100].0);
        assert_eq!(found.rows, all[..100].iter().map(|p| p.1).collect::<Vec<_>>());
        for (i, &row) in found.rows.iter().enumerate() {
            assert_eq!(found.weights[i], uneven(row).max(found.threshold));
            assert_eq!(found.values[i * 3..][..3], [0.0, 1.0, 2.0].map(|j| row as f64 * 10.0 + j));
        }
    }

    #[test]
    fn any_order_of_rows_and_merges_gives_the_same_bytes() {
        for id in [same as fn(u64) -> u64, |row| row / 3, |_| 5] {
            let leaves: Vec<Loaded> = (0..12).map(|k| leaf(k * 700, (k + 1) * 700, Some(uneven), id)).collect();
            let mut one = Sample::new(3, 300, 1);
            leaves.iter().for_each(|l| add(&mut one, l));
            for shared in [false, true] {
                let plain = Sample::new(3, 300, 1);
                let start = if shared { plain.for_one_run() } else { plain };
                let mut parts: Vec<Box<dyn Measure>> = Vec::new();
                for k in [7, 3, 11, 0, 5, 1, 2, 10, 4, 9, 8, 6] {
                    let mut part = start.fresh();
                    add(part.as_mut(), &leaves[k]);
                    parts.push(part);
                    if k % 2 == 0 && parts.len() > 1 {
                        let mut last = parts.pop().unwrap();
                        last.merge(parts.remove(0)).unwrap();
                        parts.push(from_bytes(&to_bytes(last.as_ref())).unwrap());
                    }
                }
                let mut merged = parts.pop().unwrap();
                parts.into_iter().for_each(|p| merged.merge(p).unwrap());
                assert_eq!(finish(merged.as_ref()), one.finish());
                assert_eq!(to_bytes(merged.as_ref()), to_bytes(&one));
            }
        }
    }

    #[test]
    fn weights_are_unbiased_and_exact_when_all_rows_fit() {
        let mut small = Sample::new(3, 10, 2);
        add(&mut small, &leaf(0, 10, Some(uneven), same));
        let rows = small.finish();
        assert_eq!(rows.threshold, 0.0);
        assert!(rows.rows.iter().zip(&rows.weights).all(|(&r, &w)| w == uneven(r)));
        let (mut total, mut odd, tries) = (0.0, 0.0, 400);
        for seed in 0..tries {
            let mut sample = Sample::new(3, 60, seed);
            add(&mut sample, &leaf(0, 2000, None, same));
            let rows = sample.finish();
            assert_eq!(rows.rows.len(), 60);
            total += rows.weights.iter().sum::<f64>() / tries as f64;
            odd += rows.rows.iter().zip(&rows.weights).filter(|(r, _)| *r % 2 == 1).map(|(_, w)| w).sum::<f64>()
                / tries as f64;
        }
        assert!((total / 2000.0 - 1.0).abs() < 0.03, "{total}");
        assert!((odd / 1000.0 - 1.0).abs() < 0.04, "{odd}");
    }

    #[test]
    fn extremes_of_size_and_weight() {
        for size in [0, 1, usize::MAX] {
            let mut sample = Sample::new(3, size, 0);
            add(&mut sample, &leaf(0, 50, Some(|_| 1e308), same));
            let rows = sample.finish();
            assert_eq!(rows.rows.len(), size.min(50));
            assert!(rows.weights.iter().all(|w| w.is_finite()));
            assert_eq!(finish(from_bytes(&to_bytes(&sample)).unwrap().as_ref()), rows);
        }
        let mut other: Box<dyn Measure> = Box::new(Sample::new(3, 5, 1));
        assert!(other.merge(Box::new(Sample::new(3, 6, 1))).is_err());
        assert!(Sample::new(2, 5, 1).add_leaf(Seen::Values(&leaf(0, 5, None, same))).is_err());
    }

    #[test]
    fn cut_or_changed_bytes_never_panic() {
        let mut sample = Sample::new(3, 5, 0);
        add(&mut sample, &leaf(0, 20, None, same));
        let bytes = to_bytes(&sample);
        for n in 0..bytes.len() {
            assert!(matches!(from_bytes(&bytes[..n]), Err(Error::Damaged { .. })));
        }
        for i in 0..bytes.len() {
            for value in [0, 1, 0x7f, 0xff, bytes[i] ^ 0x80] {
                let mut wrong = bytes.clone();
                wrong[i] = value;
                if let Ok(read) = from_bytes(&wrong) {
                    to_bytes(read.as_ref());
                }
            }
        }
    }
}
