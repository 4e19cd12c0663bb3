//! Several tries on a sample: each makes its own start and takes short EM runs; the best goes on to all rows
//! (Biernacki, Celeux & Govaert 2003). A try runs in one thread, so results do not depend on their number.

use crate::batch::{Column, Reading, Rows};
use crate::drive::{Plan, Worker};
use crate::error::{Error, Result};
use crate::kernels::Evaluator;
use crate::kernels::sparse::Sparse;
use crate::leaf::{Cutter, Leaf};
use crate::maximise::maximise_in_units;
use crate::measure::downcast;
use crate::measure::em::EmStatistics;
use crate::mixture::{Mixture, Shape};
use crate::scaling::Scaling;
use crate::starting::{StartFrom, start};
use crate::tree::Tree;
use arrow_array::Float64Array;
use std::panic::{AssertUnwindSafe, catch_unwind};
use std::sync::atomic::{AtomicBool, AtomicU64, AtomicUsize, Ordering};
use std::sync::{Arc, Condvar, Mutex, PoisonError};
use std::time::Duration;

/// How tries are made.
#[derive(Clone)]
pub struct Settings {
    /// Number of components.
    pub components: usize,
    /// Structure, pooled or not.
    pub shape: Shape,
    /// Least variance in any direction, in spreads squared.
    pub floor: f64,
    /// How a start is made.
    pub start_from: StartFrom,
    /// Number of tries.
    pub tries: usize,
    /// EM passes of each.
    pub passes: usize,
    /// Seed of the starts.
    pub seed: u64,
}

/// A finished try.
#[derive(Clone)]
pub struct Try {
    /// Where it came to.
    pub mixture: Mixture,
    /// Log-likelihood per row of the sample under the mixture that entered the last pass.
    pub log_likelihood: f64,
    /// Passes taken.
    pub passes: usize,
}

/// Gain per row and pass below which a try stops.
const ENOUGH: f64 = 1e-6;

struct Shared {
    scaled: Vec<f64>,
    weights: Vec<f64>,
    leaves: Vec<Leaf>,
    reading: Reading,
    scaling: Arc<Scaling>,
    settings: Settings,
    next: AtomicUsize,
    rows_done: AtomicU64,
    cancelled: AtomicBool,
    state: Mutex<(Vec<Option<Result<Try>>>, usize)>,
    changed: Condvar,
}

/// Tries under way in threads.
pub struct TriesJob {
    shared: Arc<Shared>,
}

impl TriesJob {
    /// Starts tries on a sample: `values` n by d (row after row, units of the columns), `weights` n.
    pub fn start(
        values: Vec<f64>,
        weights: Vec<f64>,
        scaling: Arc<Scaling>,
        settings: Settings,
        threads: usize,
    ) -> Result<Self> {
        let d = scaling.dims();
        let n = weights.len();
        if n == 0 || values.len() != n * d {
            return Err(Error::Data {
                what: "the sample has no rows".into(),
                advice: "no row is complete and kept; look at the gaps and the filter".into(),
            });
        }
        let columns: Vec<Column> = (0..d)
            .map(|j| Column::F64(Float64Array::from_iter_values(values.iter().skip(j).step_by(d).copied())))
            .collect();
        let rows = Rows {
            first_row: 0,
            len: n,
            features: columns,
            weight: Some(Column::F64(Float64Array::from(weights.clone()))),
            keep: None,
            held: None,
            key: None,
        };
        let mut leaves = Vec::new();
        let mut cutter = Cutter::new(0);
        cutter.push(Arc::new(rows), |leaf| leaves.push(leaf));
        leaves.extend(cutter.finish());
        let reading = Reading {
            columns: (0..d).map(|j| j.to_string()).collect(),
            codes: vec![Vec::new(); d],
            weight: Some("weight".into()),
            ..Reading::default()
        };
        let scaled =
            values.iter().enumerate().map(|(i, v)| (v - scaling.centre()[i % d]) / scaling.spread()[i % d]).collect();
        let tries = settings.tries.max(1);
        let shared = Arc::new(Shared {
            scaled,
            weights,
            leaves,
            reading,
            scaling,
            settings,
            next: AtomicUsize::new(0),
            rows_done: AtomicU64::new(0),
            cancelled: AtomicBool::new(false),
            state: Mutex::new(((0..tries).map(|_| None).collect(), 0)),
            changed: Condvar::new(),
        });
        for _ in 0..threads.clamp(1, tries) {
            let shared = Arc::clone(&shared);
            std::thread::spawn(move || shared.work());
        }
        Ok(Self { shared })
    }

    /// Waits at most `time`; true when all tries are over.
    pub fn wait(&self, time: Duration) -> bool {
        let state = self.shared.state.lock().unwrap_or_else(PoisonError::into_inner);
        let all = state.0.len();
        let (state, _) =
            self.shared.changed.wait_timeout_while(state, time, |s| s.1 < all).unwrap_or_else(PoisonError::into_inner);
        state.1 == all
    }

    /// Gives up after the pass under way.
    pub fn cancel(&self) {
        self.shared.cancelled.store(true, Ordering::Relaxed);
    }

    /// Rows times passes done.
    pub fn rows_done(&self) -> u64 {
        self.shared.rows_done.load(Ordering::Relaxed)
    }

    /// The tries that succeeded, in their order; the first error when none did.
    pub fn result(&self) -> Result<Vec<Try>> {
        let state = self.shared.state.lock().unwrap_or_else(PoisonError::into_inner);
        let mut good = Vec::new();
        let mut error = None;
        for outcome in state.0.iter().flatten() {
            match outcome {
                Ok(one) => good.push(one.clone()),
                Err(e) => {
                    error.get_or_insert_with(|| e.clone());
                }
            }
        }
        match (good.is_empty(), error) {
            (true, Some(error)) => Err(error),
            (true, None) => Err(Error::Internal { what: "the tries have not finished".into() }),
            _ => Ok(good),
        }
    }
}

impl Drop for TriesJob {
    fn drop(&mut self) {
        self.cancel();
    }
}

impl Shared {
    fn work(&self) {
        loop {
            let index = self.next.fetch_add(1, Ordering::Relaxed);
            if index >= self.settings.tries.max(1) {
                return;
            }
            let outcome = catch_unwind(AssertUnwindSafe(|| self.one(index as u64)))
                .unwrap_or_else(|_| Err(Error::Internal { what: "a try panicked".into() }));
            let mut state = self.state.lock().unwrap_or_else(PoisonError::into_inner);
            state.0[index] = Some(outcome);
            state.1 += 1;
            self.changed.notify_all();
        }
    }

    fn one(&self, attempt: u64) -> Result<Try> {
        let s = &self.settings;
        let d = self.scaling.dims();
        let (begin, _) =
            start(&self.scaled, &self.weights, d, s.components, s.shape, s.start_from, s.floor, s.seed, attempt)?;
        let mut mixture = Mixture::from_scaled(&begin, &self.scaling)?;
        let mut before = f64::NEG_INFINITY;
        let mut passes = 0;
        loop {
            if self.cancelled.load(Ordering::Relaxed) {
                return Err(Error::Internal { what: "cancelled".into() });
            }
            let evaluator = Arc::new(Evaluator::new(Arc::new(mixture.clone()), Arc::clone(&self.scaling))?);
            let plan = Plan::new(vec![Box::new(EmStatistics::new(evaluator))]);
            let mut worker = Worker::new(&plan, d, Sparse::default());
            let mut tree = Tree::new();
            for leaf in &self.leaves {
                let mut sums = tree.spare.pop().unwrap_or_else(|| plan.fresh());
                worker.add(&plan, &self.reading, leaf, &mut sums)?;
                tree.push(sums)?;
                self.rows_done.fetch_add(leaf.len() as u64, Ordering::Relaxed);
            }
            let mut sums = tree.finish()?.unwrap_or_else(|| plan.fresh());
            let Some(sum) = sums.pop() else {
                return Err(Error::Internal { what: "a pass gave no statistics".into() });
            };
            let statistics = downcast::<EmStatistics>(sum)?;
            let log_likelihood = statistics.log_likelihood / statistics.weight;
            passes += 1;
            if passes > s.passes || log_likelihood - before < ENOUGH {
                return Ok(Try { mixture, log_likelihood, passes });
            }
            before = log_likelihood;
            mixture = maximise_in_units(&statistics.moments(), &self.scaling, s.shape, s.floor)?.mixture;
        }
    }
}
