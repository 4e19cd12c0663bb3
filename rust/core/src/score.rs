//! Applying a mixture to rows: component, responsibility, runner-up and log density of each, gaps kept in place.

use crate::batch::Reading;
use crate::error::{Error, Result};
use crate::kernels::scores::{self, Asked, Room};
use crate::kernels::{BLOCK, BLOCK_STRIDE, Evaluator, prepare};
use crate::leaf::FAR;
use crate::source::Source;
use std::mem::take;
use std::sync::{Arc, Mutex, PoisonError};

/// Rows that a thread takes at a time.
const PART: usize = 16 * BLOCK;
/// A thread for every so many rows: below, starting one costs more than it saves.
const THREAD_ROWS: usize = 8192;
/// Working room that a scorer keeps for the next call, per thread.
const KEPT_BYTES: usize = 4 << 20;

/// Results per row; those that were not asked for are empty. A row with a gap has -1 and NaN.
#[derive(Default)]
pub struct Scored {
    /// Id of the most likely component.
    pub component: Vec<i32>,
    /// Its responsibility.
    pub responsibility: Vec<f32>,
    /// Id of the second most likely component, -1 where there is none.
    pub runner_up: Vec<i32>,
    /// Log density in nats, in the units of the columns.
    pub log_density: Vec<f64>,
    /// Responsibilities of all components, or distances to them, row after row.
    pub all: Vec<f64>,
    /// Whether the row has a gap; empty when no row has.
    pub gap: Vec<bool>,
}

/// What to compute.
#[derive(Clone, Copy, Default)]
pub struct Wanted {
    /// What to tell of each row.
    pub asked: Asked,
    /// Fill [`Scored::all`] with Mahalanobis distances.
    pub distances: bool,
}

impl Wanted {
    /// Just these.
    pub fn of(asked: Asked) -> Self {
        Self { asked, ..Self::default() }
    }
}

/// A mixture, how its columns are read, and the ids of its components.
pub struct Scorer {
    evaluator: Arc<Evaluator>,
    reading: Reading,
    labels: Vec<f64>,
    inverse: Vec<f64>,
    kept: Mutex<Vec<Work>>,
}

/// Working room of a thread.
#[derive(Default)]
struct Work {
    x: Vec<f64>,
    distances: Vec<f64>,
    gap: Vec<bool>,
    room: Room,
}

/// Rows that are still to be scored, with the places of their results, handed out in row order.
struct Parts<'a> {
    start: usize,
    rows: usize,
    width: usize,
    rest: Out<'a>,
    error: Option<(usize, Error)>,
}

struct Out<'a> {
    component: &'a mut [i32],
    responsibility: &'a mut [f32],
    runner_up: &'a mut [i32],
    log_density: &'a mut [f64],
    all: &'a mut [f64],
    gap: &'a mut [bool],
}

/// Cuts the first `n` places off; nothing of what was not asked for.
fn cut<'a, T>(from: &mut &'a mut [T], n: usize) -> &'a mut [T] {
    let whole = take(from);
    let (head, tail) = whole.split_at_mut(n.min(whole.len()));
    *from = tail;
    head
}

impl<'a> Out<'a> {
    fn cut(&mut self, n: usize, width: usize) -> Out<'a> {
        Out {
            component: cut(&mut self.component, n),
            responsibility: cut(&mut self.responsibility, n),
            runner_up: cut(&mut self.runner_up, n),
            log_density: cut(&mut self.log_density, n),
            all: cut(&mut self.all, n * width),
            gap: cut(&mut self.gap, n),
        }
    }
}

impl<'a> Parts<'a> {
    fn next(&mut self) -> Option<(usize, usize, Out<'a>)> {
        let n = self.rows.min(PART);
        let at = self.start;
        (self.start, self.rows) = (at + n, self.rows - n);
        (n > 0).then(|| (at, n, self.rest.cut(n, self.width)))
    }

    /// Notes an error; the one of the first row stays, for parts before it are finished by those who hold them.
    fn fail(&mut self, at: usize, error: Error) {
        if self.error.as_ref().is_none_or(|(before, _)| at < *before) {
            self.error = Some((at, error));
        }
        self.rows = 0;
    }
}

impl Scorer {
    /// A scorer; `ids` has one id a component.
    pub fn new(evaluator: Arc<Evaluator>, reading: Reading, ids: Vec<i32>) -> Result<Self> {
        if ids.len() != evaluator.k || reading.columns.len() != evaluator.d {
            return Err(Error::Internal { what: "ids or columns do not fit the mixture".into() });
        }
        let labels = ids.into_iter().map(f64::from).collect();
        let inverse = evaluator.scaling.spread().iter().map(|s| 1.0 / s).collect();
        Ok(Self { evaluator, reading, labels, inverse, kept: Mutex::default() })
    }

    /// How rows are read.
    pub fn reading(&self) -> &Reading {
        &self.reading
    }

    /// The mixture made ready.
    pub fn evaluator(&self) -> &Evaluator {
        &self.evaluator
    }

    /// Scores rows on up to `threads` threads. An infinite value is an error naming row and column.
    pub fn score(&self, source: &dyn Source, threads: usize, wanted: Wanted) -> Result<Scored> {
        let (n, k, asked) = (source.rows(), self.evaluator.k, wanted.asked);
        if source.columns() != self.evaluator.d {
            let what = format!("{} columns for a mixture of {}", source.columns(), self.evaluator.d);
            return Err(Error::Internal { what });
        }
        let width = if asked.all || wanted.distances { k } else { 0 };
        let if_asked = |asked: bool| if asked { n } else { 0 };
        // Zeroed memory is not touched before a thread writes results to it.
        let mut scored = Scored {
            component: vec![0; if_asked(asked.best)],
            responsibility: vec![0.0; if_asked(asked.second)],
            runner_up: vec![0; if_asked(asked.second)],
            log_density: vec![0.0; if_asked(asked.log)],
            all: vec![0.0; n * width],
            gap: vec![false; n],
        };
        let parts = Mutex::new(Parts {
            start: 0,
            rows: n,
            width,
            rest: Out {
                component: &mut scored.component,
                responsibility: &mut scored.responsibility,
                runner_up: &mut scored.runner_up,
                log_density: &mut scored.log_density,
                all: &mut scored.all,
                gap: &mut scored.gap,
            },
            error: None,
        });
        let helpers = threads.min(n / THREAD_ROWS).saturating_sub(1);
        let (mut gaps, mut panicked) = (false, false);
        if helpers == 0 {
            gaps = self.work(source, &parts, wanted);
        } else {
            std::thread::scope(|scope| {
                let mut handles = Vec::new();
                for _ in 0..helpers {
                    let builder = std::thread::Builder::new().name("drumlin-score".into());
                    // Where no thread can be had, the others do its share.
                    handles.extend(builder.spawn_scoped(scope, || self.work(source, &parts, wanted)));
                }
                gaps = self.work(source, &parts, wanted);
                for handle in handles {
                    match handle.join() {
                        Ok(found) => gaps |= found,
                        Err(_) => panicked = true,
                    }
                }
            });
        }
        if panicked {
            return Err(Error::Internal { what: "a scoring thread panicked".into() });
        }
        if let Some((_, error)) = parts.into_inner().unwrap_or_else(PoisonError::into_inner).error {
            return Err(error);
        }
        if !gaps {
            scored.gap = Vec::new();
        }
        Ok(scored)
    }

    /// One thread's way through the parts. Returns whether it met a gap.
    fn work(&self, source: &dyn Source, parts: &Mutex<Parts<'_>>, wanted: Wanted) -> bool {
        let e = &*self.evaluator;
        let mut work = self.kept.try_lock().ok().and_then(|mut kept| kept.pop()).unwrap_or_default();
        work.room.fit(e, wanted.asked);
        work.x.resize(e.d * BLOCK_STRIDE, 0.0);
        work.gap.resize(BLOCK, false);
        if wanted.distances {
            work.distances.resize(e.k * BLOCK_STRIDE, 0.0);
        }
        let mut gaps = false;
        let next = || parts.lock().unwrap_or_else(PoisonError::into_inner).next();
        while let Some((at, rows, mut out)) = next() {
            for from in (0..rows).step_by(BLOCK) {
                let n = (rows - from).min(BLOCK);
                match self.block(source, at + from, n, wanted, &mut work, out.cut(n, e.k)) {
                    Ok(found) => gaps |= found,
                    Err(error) => {
                        parts.lock().unwrap_or_else(PoisonError::into_inner).fail(at, error);
                        break;
                    }
                }
            }
        }
        let bytes = work.room.bytes() + 8 * (work.x.len() + work.distances.len());
        if bytes <= KEPT_BYTES
            && let Ok(mut kept) = self.kept.try_lock()
        {
            kept.push(work);
        }
        gaps
    }

    /// Scores `n` rows from row `at` on. Returns whether there is a gap among them.
    fn block(
        &self,
        source: &dyn Source,
        at: usize,
        n: usize,
        wanted: Wanted,
        work: &mut Work,
        out: Out<'_>,
    ) -> Result<bool> {
        let e = &*self.evaluator;
        let Work { x, distances, gap, room } = work;
        source.load(at, n, x);
        let gaps = self.has_codes(n, x) || !prepare::scale(e.scaling.centre(), &self.inverse, n, x);
        if gaps {
            source.load(at, n, x);
            gap[..n].fill(false);
            for j in 0..e.d {
                self.scale_column(source.first_row() + at as u64, n, j, x, gap)?;
            }
            out.gap.copy_from_slice(&gap[..n]);
        }
        if wanted.asked != Asked::default() {
            scores::score(e, &self.labels, wanted.asked, x, n, room);
        }
        for (to, v) in out.component.iter_mut().zip(&room.best) {
            *to = *v as i32;
        }
        for (to, v) in out.responsibility.iter_mut().zip(&room.best_share) {
            *to = *v as f32;
        }
        for (to, v) in out.runner_up.iter_mut().zip(&room.second) {
            *to = *v as i32;
        }
        if !out.log_density.is_empty() {
            out.log_density.copy_from_slice(&room.log[..n]);
        }
        if wanted.distances {
            scores::distances(e, x, n, distances);
            for (i, row) in out.all.chunks_exact_mut(e.k).enumerate() {
                for (k, to) in row.iter_mut().enumerate() {
                    *to = distances[k * BLOCK_STRIDE + i];
                }
            }
        } else {
            for (to, from) in out.all.chunks_exact_mut(e.k).zip(room.all.chunks_exact(e.pad)) {
                to.copy_from_slice(&from[..e.k]);
            }
        }
        if gaps {
            for i in (0..n).filter(|&i| gap[i]) {
                out.component.get_mut(i).into_iter().for_each(|v| *v = -1);
                out.responsibility.get_mut(i).into_iter().for_each(|v| *v = f32::NAN);
                out.runner_up.get_mut(i).into_iter().for_each(|v| *v = -1);
                out.log_density.get_mut(i).into_iter().for_each(|v| *v = f64::NAN);
                out.all.chunks_exact_mut(e.k).skip(i).take(1).for_each(|row| row.fill(f64::NAN));
            }
        }
        Ok(gaps && gap[..n].contains(&true))
    }

    /// Whether a value of the block stands for a gap.
    fn has_codes(&self, n: usize, x: &[f64]) -> bool {
        self.reading.codes.iter().zip(x.chunks_exact(BLOCK_STRIDE)).any(|(codes, column)| {
            codes.iter().any(|code| column[..n].iter().fold(false, |found, v| found | (v == code)))
        })
    }

    /// Scales a column value by value, with an eye on gaps: a row with one is marked and has 0.
    fn scale_column(&self, first_row: u64, n: usize, j: usize, x: &mut [f64], gap: &mut [bool]) -> Result<()> {
        let codes = self.reading.codes.get(j).map_or(&[][..], |c| c.as_slice());
        let (centre, inverse) = (self.evaluator.scaling.centre()[j], self.inverse[j]);
        let column = &mut x[j * BLOCK_STRIDE..][..BLOCK_STRIDE];
        for i in 0..n {
            let v = column[i];
            if v.is_finite() && !codes.contains(&v) {
                column[i] = ((v - centre) * inverse).clamp(-FAR, FAR);
                continue;
            }
            if v.is_infinite() && !codes.contains(&v) {
                return Err(Error::Row {
                    row: first_row + i as u64,
                    name: self.reading.columns[j].clone(),
                    what: "an infinite value".into(),
                    advice: "correct it, or leave such rows out with where".into(),
                });
            }
            column[i] = 0.0;
            gap[i] = true;
        }
        column[n..].fill(0.0);
        Ok(())
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::batch::{Column, Rows};
    use crate::kernels::evaluator::FLOOR;
    use crate::kernels::plain::alone;
    use crate::kernels::tier::{self, Tier};
    use crate::mixture::{Mixture, Shape, Structure};
    use crate::random::Stream;
    use crate::scaling::Scaling;
    use crate::source::Matrix;
    use arrow_array::{Float32Array, Float64Array};

    const D: usize = 3;

    fn scorer(k: usize, codes: Vec<Vec<f64>>) -> Scorer {
        let mut stream = Stream::new(3, k as u64);
        let means = (0..k * D).map(|_| stream.normal()).collect();
        let stored = (0..k * D).map(|_| 0.3 + stream.uniform()).collect();
        let shape = Shape::new(Structure::Diagonal, false);
        let mixture = Mixture::new(vec![1.0 / k as f64; k], means, stored, D, shape).unwrap();
        let scaling = Scaling::new(vec![0.25, -1.0, 0.0], vec![0.5, 32.0, 1.0]).unwrap();
        let evaluator = Evaluator::new(Arc::new(mixture), Arc::new(scaling)).unwrap();
        let columns = vec!["a".into(), "b".into(), "c".into()];
        let ids = (0..k as i32).map(|id| 7 * (k as i32 - id)).collect();
        Scorer::new(Arc::new(evaluator), Reading { columns, codes, ..Reading::default() }, ids).unwrap()
    }

    /// Rows among which some have a gap, a code (-9), or lie beyond every density.
    fn rows(n: usize) -> Vec<f64> {
        let mut stream = Stream::new(9, 1);
        let mut values: Vec<f64> = (0..n * D).map(|_| 1.5 * stream.normal()).collect();
        for i in (0..n).step_by(97) {
            values[i * D + i % D] = [f64::NAN, 1e200, -9.0, -1e150][i / 97 % 4];
        }
        values
    }

    fn batch<T: Copy>(values: &[T], first_row: u64, column: impl Fn(Vec<T>) -> Column) -> Rows {
        let features = (0..D).map(|j| column(values.iter().skip(j).step_by(D).copied().collect())).collect();
        Rows { first_row, len: values.len() / D, features, weight: None, keep: None, held: None, key: None }
    }

    const FULL: Asked = Asked { log: true, best: true, second: true, all: true };

    /// Bits of component, responsibility, runner-up, log density, responsibilities of all, and gaps.
    fn bits(scored: &Scored) -> [Vec<u64>; 6] {
        [
            scored.component.iter().map(|v| *v as u64).collect(),
            scored.responsibility.iter().map(|v| u64::from(v.to_bits())).collect(),
            scored.runner_up.iter().map(|v| *v as u64).collect(),
            scored.log_density.iter().map(|v| v.to_bits()).collect(),
            scored.all.iter().map(|v| v.to_bits()).collect(),
            scored.gap.iter().map(|v| u64::from(*v)).collect(),
        ]
    }

    #[test]
    fn every_way_thread_count_and_tier_gives_the_same_bits() {
        let _guard = alone();
        for k in [1, 2, 11] {
            let scorer = scorer(k, vec![vec![], vec![-9.0], vec![-9.0, 5.5]]);
            for n in [0, 1, 191, 193, 40_000] {
                let values = rows(n);
                let by_columns: Vec<f64> = (0..D).flat_map(|j| values.iter().skip(j).step_by(D).copied()).collect();
                let wanted = Wanted::of(FULL);
                tier::force(Some(Tier::Portable));
                let first = scorer.score(&Matrix::new(&values, n, D, true).unwrap(), 1, wanted).unwrap();
                assert!(n < 40_000 || first.gap.iter().filter(|g| **g).count() > 150);
                assert!(n < 40_000 || first.log_density.iter().filter(|l| **l == FLOOR).count() > 30);
                for tier in Tier::ALL.into_iter().filter(|t| t.usable()) {
                    assert!(tier::force(Some(tier)));
                    for threads in [1, 2, 3] {
                        let sources: [&dyn Source; 3] = [
                            &Matrix::new(&values, n, D, true).unwrap(),
                            &Matrix::new(&by_columns, n, D, false).unwrap(),
                            &batch(&values, 0, |v| Column::F64(Float64Array::from(v))),
                        ];
                        for (way, source) in sources.into_iter().enumerate() {
                            let found = scorer.score(source, threads, wanted).unwrap();
                            let what = format!("k={k} n={n} {} threads={threads} way={way}", tier.name());
                            assert!(bits(&found) == bits(&first), "{what}");
                            let alone = |asked| scorer.score(source, threads, Wanted::of(asked)).unwrap();
                            let best = alone(Asked { best: true, ..Asked::default() });
                            assert_eq!((&best.component, &best.gap), (&first.component, &first.gap), "{what}");
                            assert!(best.log_density.is_empty() && best.runner_up.is_empty() && best.all.is_empty());
                            let log = bits(&alone(Asked { log: true, ..Asked::default() }));
                            assert_eq!(log[3], bits(&first)[3], "{what}");
                            let all = bits(&alone(Asked { all: true, ..Asked::default() }));
                            assert_eq!(all[4], bits(&first)[4], "{what}");
                        }
                    }
                }
                tier::force(None);
            }
        }
    }

    #[test]
    fn narrow_values_are_widened() {
        let _guard = alone();
        let narrow: Vec<f32> = rows(1000).iter().map(|v| v.clamp(-1e30, 1e30) as f32).collect();
        let wide: Vec<f64> = narrow.iter().map(|v| f64::from(*v)).collect();
        let by_columns: Vec<f32> = (0..D).flat_map(|j| narrow.iter().skip(j).step_by(D).copied()).collect();
        let scorer = scorer(4, vec![vec![-9.0]; D]);
        let first = scorer.score(&Matrix::new(&wide, 1000, D, true).unwrap(), 1, Wanted::of(FULL)).unwrap();
        let sources: [&dyn Source; 3] = [
            &Matrix::new(&narrow, 1000, D, true).unwrap(),
            &Matrix::new(&by_columns, 1000, D, false).unwrap(),
            &batch(&narrow, 0, |v| Column::F32(Float32Array::from(v))),
        ];
        for source in sources {
            assert!(bits(&scorer.score(source, 1, Wanted::of(FULL)).unwrap()) == bits(&first));
        }
    }

    #[test]
    fn a_gap_has_no_answer_and_rows_beside_it_keep_theirs() {
        let _guard = alone();
        let scorer = scorer(3, vec![vec![-9.0], vec![], vec![]]);
        let values = [0.1, 0.2, 0.3, -9.0, 0.2, 0.3, 0.1, f64::NAN, 0.3, -0.5, -9.0, 0.0];
        let found = scorer.score(&Matrix::new(&values, 4, D, true).unwrap(), 1, Wanted::of(FULL)).unwrap();
        assert_eq!(found.gap, [false, true, true, false]);
        let plain = [0.1, 0.2, 0.3, -0.5, -9.0, 0.0];
        let want = scorer.score(&Matrix::new(&plain, 2, D, true).unwrap(), 1, Wanted::of(FULL)).unwrap();
        assert!(want.gap.is_empty());
        for (i, j) in [(0, 0), (3, 1)] {
            assert_eq!(found.component[i], want.component[j]);
            assert_eq!(found.log_density[i].to_bits(), want.log_density[j].to_bits());
            assert_eq!(found.all[3 * i..][..3], want.all[3 * j..][..3]);
        }
        for i in [1, 2] {
            assert_eq!((found.component[i], found.runner_up[i]), (-1, -1));
            assert!(found.log_density[i].is_nan() && found.responsibility[i].is_nan());
            assert!(found.all[3 * i..][..3].iter().all(|v| v.is_nan()));
        }
    }

    #[test]
    fn the_first_infinite_row_is_named_whatever_the_threads() {
        let _guard = alone();
        let scorer = scorer(2, Vec::new());
        let n = 60_000;
        let mut values = rows(n);
        for row in [23_456, 23_999, 31_000, 59_999] {
            values[row * D + 1] = f64::NEG_INFINITY;
        }
        let batch = batch(&values, 1_000_000, |v| Column::F64(Float64Array::from(v)));
        for threads in [1, 2, 4] {
            for _ in 0..20 {
                match scorer.score(&batch, threads, Wanted::of(FULL)).err() {
                    Some(Error::Row { row, name, .. }) => assert_eq!((row, name.as_str()), (1_023_456, "b")),
                    other => panic!("{other:?}"),
                }
            }
        }
    }
}
