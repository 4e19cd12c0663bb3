//! Applying a mixture to rows: component, responsibility, runner-up and log density of each, gaps kept in place.

use crate::batch::{Column, Reading, Rows};
use crate::error::{Error, Result};
use crate::kernels::scores::{self, RowScores};
use crate::kernels::{BLOCK, BLOCK_STRIDE, Block, Evaluator, Scratch};
use std::sync::Arc;

/// Rows that one thread scores at a time.
const CHUNK: usize = 4 * BLOCK;

/// Results per row. `component` and `runner_up` are ids, -1 where there is none; a row with a gap has -1 and NaN.
#[derive(Default)]
pub struct Scored {
    /// Id of the most likely component.
    pub component: Vec<i32>,
    /// Its responsibility.
    pub responsibility: Vec<f32>,
    /// Id of the second most likely component.
    pub runner_up: Vec<i32>,
    /// Log density in nats, in the units of the columns.
    pub log_density: Vec<f64>,
    /// Responsibilities of all components, row after row; only when asked for.
    pub all: Vec<f64>,
    /// Whether the row has no gap.
    pub complete: Vec<bool>,
}

/// What to compute beside component, responsibility, runner-up and log density.
#[derive(Clone, Copy, Default)]
pub struct Wanted {
    /// Fill [`Scored::all`].
    pub all: bool,
    /// Fill [`Scored::all`] with Mahalanobis distances instead.
    pub distances: bool,
    /// A gap is an error naming row and column.
    pub refuse_gaps: bool,
}

/// A mixture, how its columns are read, and the ids of its components.
pub struct Scorer {
    evaluator: Arc<Evaluator>,
    reading: Reading,
    ids: Vec<i32>,
}

struct Out<'a> {
    component: &'a mut [i32],
    responsibility: &'a mut [f32],
    runner_up: &'a mut [i32],
    log_density: &'a mut [f64],
    all: &'a mut [f64],
    complete: &'a mut [bool],
}

impl Scorer {
    /// A scorer; `ids` has one id a component.
    pub fn new(evaluator: Arc<Evaluator>, reading: Reading, ids: Vec<i32>) -> Result<Self> {
        if ids.len() != evaluator.k || reading.columns.len() != evaluator.d {
            return Err(Error::Internal { what: "ids or columns do not fit the mixture".into() });
        }
        Ok(Self { evaluator, reading, ids })
    }

    /// How rows are read.
    pub fn reading(&self) -> &Reading {
        &self.reading
    }

    /// The mixture made ready.
    pub fn evaluator(&self) -> &Evaluator {
        &self.evaluator
    }

    /// Scores a batch on up to `threads` threads. An infinite value is an error naming row and column.
    pub fn score(&self, rows: &Rows, threads: usize, wanted: Wanted) -> Result<Scored> {
        let (n, k) = (rows.len, self.evaluator.k);
        let mut scored = Scored {
            component: vec![-1; n],
            responsibility: vec![f32::NAN; n],
            runner_up: vec![-1; n],
            log_density: vec![f64::NAN; n],
            all: if wanted.all || wanted.distances { vec![f64::NAN; n * k] } else { Vec::new() },
            complete: vec![true; n],
        };
        let width = if scored.all.is_empty() { 0 } else { k };
        let mut parts = Vec::with_capacity(n.div_ceil(CHUNK));
        let mut all = scored.all.as_mut_slice();
        for ((((c, r), u), l), f) in scored
            .component
            .chunks_mut(CHUNK)
            .zip(scored.responsibility.chunks_mut(CHUNK))
            .zip(scored.runner_up.chunks_mut(CHUNK))
            .zip(scored.log_density.chunks_mut(CHUNK))
            .zip(scored.complete.chunks_mut(CHUNK))
        {
            let (head, tail) = all.split_at_mut(c.len() * width);
            all = tail;
            parts.push(Out { component: c, responsibility: r, runner_up: u, log_density: l, all: head, complete: f });
        }
        let threads = threads.clamp(1, parts.len().div_ceil(16).max(1));
        if threads == 1 {
            self.run(rows, 0, parts, wanted)?;
            return Ok(scored);
        }
        let each = parts.len().div_ceil(threads);
        let mut results = Vec::new();
        std::thread::scope(|scope| {
            let mut handles = Vec::new();
            let mut start = 0;
            while !parts.is_empty() {
                let rest = parts.split_off(each.min(parts.len()));
                let mine = std::mem::replace(&mut parts, rest);
                let count = mine.len();
                handles.push(scope.spawn(move || self.run(rows, start, mine, wanted)));
                start += count * CHUNK;
            }
            results = handles.into_iter().map(|h| h.join()).collect();
        });
        for result in results {
            result.map_err(|_| Error::Internal { what: "a scoring thread panicked".into() })??;
        }
        Ok(scored)
    }

    fn run(&self, rows: &Rows, start: usize, parts: Vec<Out<'_>>, wanted: Wanted) -> Result<()> {
        let e = &*self.evaluator;
        let mut scratch = Scratch::new(e);
        let mut x = vec![0.0; e.d * BLOCK_STRIDE];
        let mut raw = [0.0; BLOCK];
        let mut found = RowScores::new();
        let mut distances = vec![0.0; if wanted.distances { e.k * BLOCK_STRIDE } else { 0 }];
        let mut at = start;
        for part in parts {
            let size = part.component.len();
            for from in (0..size).step_by(BLOCK) {
                let n = (size - from).min(BLOCK);
                let complete = &mut part.complete[from..from + n];
                for j in 0..e.d {
                    let raw = &mut raw[..n];
                    rows.features[j].load(at, raw);
                    self.scale_column(rows, at, j, raw, complete, wanted.refuse_gaps, &mut x)?;
                }
                scores::score(e, &x, n, &mut scratch, &mut found);
                let keep = &part.complete[from..from + n];
                for i in (0..n).filter(|&i| keep[i]) {
                    part.component[from + i] = self.ids[found.best[i] as usize];
                    part.responsibility[from + i] = found.best_share[i] as f32;
                    part.runner_up[from + i] =
                        if found.second[i] >= 0.0 { self.ids[found.second[i] as usize] } else { -1 };
                    part.log_density[from + i] = found.log[i];
                }
                if wanted.distances {
                    scores::distances(e, &x, n, &mut distances);
                    for i in (0..n).filter(|&i| keep[i]) {
                        for k in 0..e.k {
                            part.all[(from + i) * e.k + k] = distances[k * BLOCK_STRIDE + i];
                        }
                    }
                } else if wanted.all {
                    let block = Block::evaluate(e, &x, n, None, false, &mut scratch);
                    let r = block.weighted_responsibilities();
                    for i in (0..n).filter(|&i| keep[i]) {
                        part.all[(from + i) * e.k..][..e.k].copy_from_slice(&r[i * e.pad..][..e.k]);
                    }
                }
                at += n;
            }
        }
        Ok(())
    }

    fn scale_column(
        &self,
        rows: &Rows,
        at: usize,
        j: usize,
        raw: &mut [f64],
        complete: &mut [bool],
        refuse: bool,
        x: &mut [f64],
    ) -> Result<()> {
        let n = raw.len();
        let codes = self.reading.codes.get(j).map_or(&[][..], |c| c.as_slice());
        let scaling = &self.evaluator.scaling;
        let (centre, inverse) = (scaling.centre()[j], 1.0 / scaling.spread()[j]);
        let to = &mut x[j * BLOCK_STRIDE..][..BLOCK_STRIDE];
        for i in 0..n {
            let v = raw[i];
            if v.is_finite() && !codes.contains(&v) {
                to[i] = ((v - centre) * inverse).clamp(-crate::leaf::FAR, crate::leaf::FAR);
                continue;
            }
            let row = rows.first_row + (at + i) as u64;
            let name = &self.reading.columns[j];
            if v.is_infinite() && !codes.contains(&v) {
                return Err(Error::Row {
                    row,
                    name: name.clone(),
                    what: "an infinite value".into(),
                    advice: "name it in missing_codes, or leave such rows out with where".into(),
                });
            }
            if refuse {
                return Err(Error::Row {
                    row,
                    name: name.clone(),
                    what: "a gap (null, NaN or missing code)".into(),
                    advice: "use missing=\"complete-rows\" to leave such rows without a group".into(),
                });
            }
            to[i] = 0.0;
            complete[i] = false;
        }
        to[n..].fill(0.0);
        Ok(())
    }
}

/// Rows of plain columns, for scoring arrays.
pub fn rows_of(columns: Vec<Column>, first_row: u64) -> Rows {
    let len = columns.first().map_or(0, Column::len);
    Rows { first_row, len, features: columns, weight: None, keep: None, held: None, key: None }
}
