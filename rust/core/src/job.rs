//! Work in threads: tasks of leaves go out through a queue, their sums come back and merge in task order.
//!
//! Threads are made for each run and end with it, so a forked child starts with none. Whoever waits can give up at any
//! time: threads look at the cancel mark before each leaf.

use crate::batch::{Reading, Rows};
use crate::drive::{Plan, Worker};
use crate::error::{Error, Result};
use crate::kernels::sparse::Sparse;
use crate::leaf::{Cutter, LEAF_ROWS, Leaf, TASK_LEAVES};
use crate::together::together;
use crate::tree::{Sums, Tree};
use std::collections::{BTreeMap, VecDeque};
use std::panic::{AssertUnwindSafe, catch_unwind};
use std::sync::atomic::{AtomicBool, AtomicU64, Ordering};
use std::sync::{Arc, Condvar, Mutex, MutexGuard, PoisonError};
use std::time::Duration;

struct Task {
    index: usize,
    leaves: Vec<Arc<Leaf>>,
    bytes: usize,
}

#[derive(Default)]
struct State {
    queue: VecDeque<Task>,
    waiting_bytes: usize,
    given: usize,
    merged: usize,
    pending: BTreeMap<usize, Sums>,
    /// Taken out by the thread that merges, so that the others need not wait.
    tree: Option<Tree>,
    ended: bool,
    cancelled: bool,
    error: Option<Error>,
}

impl State {
    fn stopped(&self) -> bool {
        self.cancelled || self.error.is_some()
    }

    fn finished(&self) -> bool {
        self.stopped() || (self.ended && self.merged == self.given)
    }
}

struct Shared {
    state: Mutex<State>,
    /// Tasks came, or room for more of them.
    changed: Condvar,
    /// The run is over.
    over: Condvar,
    stop: AtomicBool,
    rows_done: AtomicU64,
    plan: Plan,
    reading: Arc<Reading>,
    rooms: Rooms,
}

/// Working room that threads leave for the next run over the same rows.
type Rooms = Arc<Mutex<Vec<Sparse>>>;

impl Shared {
    fn lock(&self) -> MutexGuard<'_, State> {
        self.state.lock().unwrap_or_else(PoisonError::into_inner)
    }

    fn fail(&self, error: Error) {
        let mut state = self.lock();
        state.error.get_or_insert(error);
        state.queue.clear();
        self.stop.store(true, Ordering::Relaxed);
        self.changed.notify_all();
        self.over.notify_all();
    }

    fn work(&self) {
        match catch_unwind(AssertUnwindSafe(|| self.tasks())) {
            Ok(Ok(())) => {}
            Ok(Err(error)) => self.fail(error),
            Err(_) => self.fail(Error::Internal { what: "a worker thread panicked".into() }),
        }
    }

    fn tasks(&self) -> Result<()> {
        let room = self.rooms.lock().unwrap_or_else(PoisonError::into_inner).pop().unwrap_or_default();
        let mut worker = Worker::new(&self.plan, self.reading.columns.len(), room);
        let mut tree = Tree::new();
        while let Some(task) = self.next() {
            for leaf in &task.leaves {
                if self.stop.load(Ordering::Relaxed) {
                    return Ok(());
                }
                let mut sums = tree.spare.pop().unwrap_or_else(|| self.plan.fresh());
                worker.add(&self.plan, &self.reading, leaf, &mut sums)?;
                tree.push(sums)?;
                self.rows_done.fetch_add(leaf.len() as u64, Ordering::Relaxed);
            }
            let sums = tree.finish()?.unwrap_or_else(|| self.plan.fresh());
            let (index, bytes) = (task.index, task.bytes);
            drop(task);
            let mut state = self.lock();
            state.pending.insert(index, sums);
            if bytes > 0 {
                state.waiting_bytes -= bytes;
                self.changed.notify_all();
            }
            self.merge(state, &mut tree.spare)?;
            tree.spare.truncate(8);
        }
        self.rooms.lock().unwrap_or_else(PoisonError::into_inner).push(worker.into_room());
        Ok(())
    }

    /// Merges what is next in order, unless another thread is at it: that one will find what was put down meanwhile.
    fn merge<'a>(&'a self, mut state: MutexGuard<'a, State>, spare: &mut Vec<Sums>) -> Result<()> {
        let Some(mut tree) = state.tree.take() else { return Ok(()) };
        while let Some(sums) = {
            let next = state.merged;
            state.pending.remove(&next)
        } {
            drop(state);
            tree.push(sums)?;
            state = self.lock();
            state.merged += 1;
        }
        spare.append(&mut tree.spare);
        state.tree = Some(tree);
        if state.finished() {
            self.over.notify_all();
        }
        Ok(())
    }

    fn next(&self) -> Option<Task> {
        let mut state = self.lock();
        loop {
            if state.stopped() {
                return None;
            }
            if let Some(task) = state.queue.pop_front() {
                return Some(task);
            }
            if state.ended {
                return None;
            }
            state = self.changed.wait(state).unwrap_or_else(PoisonError::into_inner);
        }
    }
}

struct Feed {
    cutter: Option<Cutter>,
    leaves: Vec<Arc<Leaf>>,
    bytes: usize,
    kept: Vec<Arc<Leaf>>,
    kept_bytes: usize,
    /// The most bytes to keep; 0 once the next task would have been too much.
    keep: usize,
    /// Whether rows to keep are copied out of their batches.
    copy: bool,
    in_flight: usize,
}

impl Feed {
    fn new(first_row: u64, keep: usize, copy: bool, in_flight: usize) -> Self {
        let cutter = Some(Cutter::new(first_row));
        Self { cutter, leaves: Vec::new(), bytes: 0, kept: Vec::new(), kept_bytes: 0, keep, copy, in_flight }
    }
}

/// A run of measures over rows.
pub struct Job {
    shared: Arc<Shared>,
    feed: Mutex<Feed>,
}

impl Job {
    fn start(reading: Arc<Reading>, measures: Sums, threads: usize, rooms: Rooms, feed: Feed) -> Self {
        let shared = Arc::new(Shared {
            state: Mutex::new(State { tree: Some(Tree::new()), ..State::default() }),
            changed: Condvar::new(),
            over: Condvar::new(),
            stop: AtomicBool::new(false),
            rows_done: AtomicU64::new(0),
            plan: Plan::new(measures),
            reading,
            rooms,
        });
        for _ in 0..threads.max(1) {
            let shared = Arc::clone(&shared);
            std::thread::spawn(move || shared.work());
        }
        Self { shared, feed: Mutex::new(feed) }
    }

    /// A run over batches to come; `first_row` is the number of the first row. The first leaves, of batches of at most
    /// `keep` bytes, stay for a [`Cache`]; with `copy` out of their batches, which is wanted unless those are in memory
    /// anyway. While more than `in_flight` bytes wait, `push` blocks.
    pub fn feed(
        reading: Arc<Reading>,
        measures: Sums,
        threads: usize,
        first_row: u64,
        keep: usize,
        copy: bool,
        in_flight: usize,
    ) -> Result<Self> {
        if !first_row.is_multiple_of(LEAF_ROWS as u64) {
            return Err(Error::Internal { what: format!("row {first_row} does not begin a leaf") });
        }
        let feed = Feed::new(first_row, keep, copy, in_flight);
        Ok(Self::start(reading, measures, threads, Rooms::default(), feed))
    }

    fn lock_feed(&self) -> MutexGuard<'_, Feed> {
        self.feed.lock().unwrap_or_else(PoisonError::into_inner)
    }

    /// Number of the next row to be pushed.
    pub fn next_row(&self) -> u64 {
        self.lock_feed().cutter.as_ref().map_or(0, Cutter::next_row)
    }

    /// How the batches are read.
    pub fn reading(&self) -> &Reading {
        &self.shared.reading
    }

    /// Takes the next batch. False when the job was cancelled or has failed: no more is wanted.
    pub fn push(&self, rows: Rows, bytes: usize) -> bool {
        let mut feed = self.lock_feed();
        let mut full = Vec::new();
        match &mut feed.cutter {
            Some(cutter) => cutter.push(Arc::new(rows), |leaf| full.push(Arc::new(leaf))),
            None => return false,
        }
        feed.bytes += bytes;
        for leaf in full {
            feed.leaves.push(leaf);
            if feed.leaves.len() == TASK_LEAVES {
                self.give(&mut feed);
            }
        }
        let mut state = self.shared.lock();
        while state.waiting_bytes > feed.in_flight && !state.stopped() {
            state = self.shared.changed.wait(state).unwrap_or_else(PoisonError::into_inner);
        }
        !state.stopped()
    }

    fn give(&self, feed: &mut Feed) {
        let mut leaves = std::mem::take(&mut feed.leaves);
        let bytes = std::mem::take(&mut feed.bytes);
        if feed.keep > 0 && feed.kept_bytes + bytes <= feed.keep {
            if feed.copy {
                leaves = together(&leaves).unwrap_or(leaves);
            }
            feed.kept.extend(leaves.iter().cloned());
            feed.kept_bytes += bytes;
        } else {
            feed.keep = 0; // what is kept are the first rows, without a gap
        }
        let mut state = self.shared.lock();
        let index = state.given;
        state.given += 1;
        state.waiting_bytes += bytes;
        state.queue.push_back(Task { index, leaves, bytes });
        self.shared.changed.notify_all();
    }

    /// No more batches will come.
    pub fn end(&self) {
        let mut feed = self.lock_feed();
        if let Some(leaf) = feed.cutter.take().and_then(Cutter::finish) {
            feed.leaves.push(Arc::new(leaf));
        }
        if !feed.leaves.is_empty() {
            self.give(&mut feed);
        }
        self.shared.lock().ended = true;
        self.shared.changed.notify_all();
        self.shared.over.notify_all();
    }

    /// Gives up; threads end after their leaf.
    pub fn cancel(&self) {
        let mut state = self.shared.lock();
        state.cancelled = true;
        state.queue.clear();
        self.shared.stop.store(true, Ordering::Relaxed);
        self.shared.changed.notify_all();
        self.shared.over.notify_all();
    }

    /// Waits at most `time`. True when the run is over; an error of the run is returned here.
    pub fn wait(&self, time: Duration) -> Result<bool> {
        let state = self.shared.lock();
        let (state, _) =
            self.shared.over.wait_timeout_while(state, time, |s| !s.finished()).unwrap_or_else(PoisonError::into_inner);
        match &state.error {
            Some(error) => Err(error.clone()),
            None => Ok(state.finished()),
        }
    }

    /// Rows of the leaves that are done.
    pub fn rows_done(&self) -> u64 {
        self.shared.rows_done.load(Ordering::Relaxed)
    }

    /// The finished measures, in the order given. Only once, and only after [`Job::wait`] returned true.
    pub fn result(&self) -> Result<Sums> {
        let mut state = self.shared.lock();
        if state.stopped() || !state.finished() {
            return Err(Error::Internal { what: "the run has not finished".into() });
        }
        let whole = state.tree.take().unwrap_or_default().finish()?;
        Ok(whole.unwrap_or_else(|| self.shared.plan.fresh()))
    }

    /// The leaves that a finished run has kept. `None` when there are none.
    pub fn cache(&self) -> Option<Cache> {
        let mut feed = self.lock_feed();
        let leaves = std::mem::take(&mut feed.kept);
        let rows = leaves.iter().map(|l| l.len() as u64).sum();
        (!leaves.is_empty()).then(|| Cache {
            reading: Arc::clone(&self.shared.reading),
            leaves,
            rows,
            bytes: feed.kept_bytes,
            whole: feed.keep > 0,
            rooms: Rooms::default(),
        })
    }
}

impl Drop for Job {
    fn drop(&mut self) {
        self.cancel();
    }
}

/// Decoded rows kept for later passes.
pub struct Cache {
    reading: Arc<Reading>,
    leaves: Vec<Arc<Leaf>>,
    /// Rows kept, before any is removed.
    pub rows: u64,
    /// Bytes of the batches they came in.
    pub bytes: usize,
    /// Whether these are all rows. Otherwise they are the first ones, up to the end of a task.
    pub whole: bool,
    rooms: Rooms,
}

impl Cache {
    /// A cache of given leaves.
    pub fn new(reading: Arc<Reading>, leaves: Vec<Arc<Leaf>>) -> Self {
        let rows = leaves.iter().map(|l| l.len() as u64).sum();
        Self { reading, leaves, rows, bytes: 0, whole: true, rooms: Rooms::default() }
    }

    /// How the rows are read.
    pub fn reading(&self) -> &Arc<Reading> {
        &self.reading
    }

    /// The leaves.
    pub fn leaves(&self) -> &[Arc<Leaf>] {
        &self.leaves
    }

    /// A run over the rows kept.
    pub fn start(&self, measures: Sums, threads: usize) -> Job {
        // Few leaves go out one by one, so that all threads have work; the tree is the same either way.
        let size = if self.leaves.len() >= 8 * TASK_LEAVES * threads { TASK_LEAVES } else { 1 };
        let job = self.run(measures, threads, size, usize::MAX);
        job.end();
        job
    }

    /// A run over the rows kept, and then over batches to come: those after the last row that is kept.
    pub fn feed(&self, measures: Sums, threads: usize, in_flight: usize) -> Job {
        self.run(measures, threads, TASK_LEAVES, in_flight)
    }

    fn run(&self, measures: Sums, threads: usize, size: usize, in_flight: usize) -> Job {
        let first = self.leaves.first().map_or(0, |leaf| leaf.first_row);
        let feed = Feed::new(first + self.rows, 0, false, in_flight);
        let job = Job::start(Arc::clone(&self.reading), measures, threads, Arc::clone(&self.rooms), feed);
        let mut state = job.shared.lock();
        for leaves in self.leaves.chunks(size) {
            let index = state.given;
            state.given += 1;
            state.queue.push_back(Task { index, leaves: leaves.to_vec(), bytes: 0 });
        }
        drop(state);
        job.shared.changed.notify_all();
        job
    }
}
