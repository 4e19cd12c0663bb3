//! One thread's way through leaves: what the measures need is loaded once, evaluated once a mixture, and shown to all.

use crate::batch::Reading;
use crate::error::{Error, Result};
use crate::kernels::aligned::Aligned;
use crate::kernels::leafwise::SparseLeaf;
use crate::kernels::sparse::Sparse;
use crate::kernels::tier::Precision;
use crate::kernels::{BLOCK, BLOCK_STRIDE, Block, Evaluator, Scratch};
use crate::leaf::{Leaf, Loaded, Part};
use crate::measure::{Needs, Seen};
use crate::scaled::{Origin, Scaled};
use crate::tree::Sums;
use std::sync::{Arc, PoisonError};

/// Refusals after which labels are made anew.
const REFUSALS: u8 = 8;

enum Group {
    Raw(Vec<usize>),
    Values(Part, Vec<usize>),
    Posterior { evaluator: Arc<Evaluator>, part: Part, mixed: bool, measures: Vec<usize> },
    Single { evaluator: Arc<Evaluator>, measures: Vec<usize> },
}

/// Which measures share which work.
pub struct Plan {
    groups: Vec<Group>,
    prototypes: Sums,
}

impl Plan {
    /// Groups measures by what they need; measures of the same mixture, part and precision share one E-step.
    pub fn new(prototypes: Sums) -> Self {
        let mut groups: Vec<Group> = Vec::new();
        for (i, measure) in prototypes.iter().enumerate() {
            let needs = measure.needs();
            let found = groups.iter_mut().find_map(|group| match (group, &needs) {
                (Group::Raw(list), Needs::Raw) => Some(list),
                (Group::Values(part, list), Needs::Values(wanted)) if part == wanted => Some(list),
                (Group::Posterior { evaluator, part, mixed, measures }, Needs::Posterior(wanted, p))
                    if part == p && evaluator.same(wanted) =>
                {
                    *mixed |= measure.wants_entropy();
                    Some(measures)
                }
                (Group::Single { evaluator, measures }, Needs::Single(wanted)) if evaluator.same(wanted) => {
                    Some(measures)
                }
                _ => None,
            });
            match found {
                Some(list) => list.push(i),
                None => groups.push(match needs {
                    Needs::Raw => Group::Raw(vec![i]),
                    Needs::Values(part) => Group::Values(part, vec![i]),
                    Needs::Posterior(evaluator, part) => {
                        Group::Posterior { evaluator, part, mixed: measure.wants_entropy(), measures: vec![i] }
                    }
                    Needs::Single(evaluator) => Group::Single { evaluator, measures: vec![i] },
                }),
            }
        }
        Self { groups, prototypes }
    }

    /// Whether the fitted rows are wanted as blocks, and not by value.
    fn wants_blocks_only(&self) -> bool {
        let by_value = |group: &Group| matches!(group, Group::Values(Part::Fit, _));
        let in_blocks =
            |group: &Group| matches!(group, Group::Posterior { part: Part::Fit, .. } | Group::Single { .. });
        self.groups.iter().any(in_blocks) && !self.groups.iter().any(by_value)
    }

    /// Empty measures in the order they were given.
    pub fn fresh(&self) -> Sums {
        self.prototypes.iter().map(|m| m.fresh()).collect()
    }
}

/// Room for the blocks of one group.
enum Room {
    None,
    Double(Scratch),
    Single(Scratch<f32>),
}

/// Working room of one thread for one plan.
pub struct Worker {
    fit: Loaded,
    held: Loaded,
    block: Aligned<f64>,
    single_block: Aligned<f32>,
    labels: Vec<u16>,
    sparse: Sparse,
    rooms: Vec<Room>,
}

impl Worker {
    /// Room for leaves of `d` columns; `sparse` is room of an earlier run, or empty.
    pub fn new(plan: &Plan, d: usize, sparse: Sparse) -> Self {
        let rooms = plan
            .groups
            .iter()
            .map(|group| match group {
                Group::Posterior { evaluator, .. } => Room::Double(Scratch::new(evaluator)),
                Group::Single { evaluator, .. } => Room::Single(Scratch::new(evaluator)),
                _ => Room::None,
            })
            .collect();
        Self {
            fit: Loaded::new(d),
            held: Loaded::new(d),
            block: Aligned::new(d * BLOCK_STRIDE),
            single_block: Aligned::new(d * BLOCK_STRIDE),
            labels: Vec::new(),
            sparse,
            rooms,
        }
    }

    /// The room for the skipping path, for the next run.
    pub fn into_room(self) -> Sparse {
        self.sparse
    }

    /// Adds one leaf to `sums`, which came from [`Plan::fresh`].
    pub fn add(&mut self, plan: &Plan, reading: &Reading, leaf: &Leaf, sums: &mut Sums) -> Result<()> {
        let mut loaded = [false; 2];
        let plain =
            plan.wants_blocks_only() && reading.takes_all() && leaf.is_plain() && self.fit.take_weights(leaf, reading);
        for (group, room) in plan.groups.iter().zip(&mut self.rooms) {
            let part = match group {
                Group::Raw(list) => {
                    list.iter().try_for_each(|&i| sums[i].add_leaf(Seen::Raw(leaf)))?;
                    continue;
                }
                Group::Values(part, _) | Group::Posterior { part, .. } => *part,
                Group::Single { .. } => Part::Fit,
            };
            let rows = if part == Part::Fit { &mut self.fit } else { &mut self.held };
            let done = &mut loaded[usize::from(part == Part::Held)];
            let plain = plain && part == Part::Fit;
            if !*done && !plain {
                rows.load(leaf, reading, part)?;
                *done = true;
            }
            match (group, room) {
                (Group::Values(_, list), _) => {
                    if rows.rows.is_empty() {
                        rows.load_ids(leaf);
                    }
                    list.iter().try_for_each(|&i| sums[i].add_leaf(Seen::Values(rows)))?;
                }
                (Group::Posterior { evaluator, mixed, measures, .. }, Room::Double(scratch)) => {
                    let scaled = scaled(plain, leaf, rows, evaluator);
                    let n = scaled.n;
                    let fitted = part == Part::Fit;
                    self.labels.clear();
                    let sure = fitted && take_hint(leaf, evaluator.k, n, &mut self.labels);
                    let mut stale = true;
                    if !self.labels.is_empty() {
                        let (labels, sparse) = (&self.labels, &mut self.sparse);
                        if let Some(mut found) = SparseLeaf::evaluate(evaluator, &scaled, labels, sure, *mixed, sparse)
                        {
                            measures.iter().try_for_each(|&i| sums[i].add_sparse(&mut found))?;
                            keep_hint(leaf, evaluator.k, found.labels(), found.paid());
                            continue;
                        }
                        self.labels.clear();
                        stale = refuse(leaf);
                    }
                    for b in 0..n.div_ceil(BLOCK) {
                        let n = scaled.block(b, &mut self.block);
                        let weights = scaled.weights_of(b * BLOCK, n);
                        let mut block = Block::evaluate(evaluator, &self.block, n, weights, *mixed, scratch);
                        measures.iter().try_for_each(|&i| sums[i].add_block(&mut block))?;
                        if b == 0 && fitted && stale && worth_labels(evaluator, &block) {
                            self.labels.resize(scaled.n, 0);
                        }
                        if !self.labels.is_empty() {
                            block.label(&mut self.labels[b * BLOCK..][..n]);
                        }
                    }
                    if fitted && stale {
                        keep_hint(leaf, evaluator.k, &self.labels, false);
                    }
                }
                (Group::Single { evaluator, measures }, Room::Single(scratch)) => {
                    let Ok(single) = evaluator.single() else {
                        return Err(Error::Internal { what: "this mixture cannot be evaluated in float32".into() });
                    };
                    let scaled = scaled(plain, leaf, rows, evaluator);
                    self.labels.clear();
                    take_hint(leaf, evaluator.k, scaled.n, &mut self.labels);
                    // There is no skipping in float32; a hint is left, once, for the passes in float64 that follow.
                    let hinted = !self.labels.is_empty();
                    self.labels.clear();
                    for b in 0..scaled.n.div_ceil(BLOCK) {
                        let n = scaled.block(b, &mut self.single_block);
                        let weights = scaled.weights_of(b * BLOCK, n);
                        let x = &self.single_block;
                        let mut block = Block::evaluate_single(evaluator, single, x, n, weights, scratch);
                        measures.iter().try_for_each(|&i| sums[i].add_single(&mut block))?;
                        if b == 0 && !hinted && worth_labels(evaluator, &block) {
                            self.labels.resize(scaled.n, 0);
                        }
                        if !self.labels.is_empty() {
                            block.label(&mut self.labels[b * BLOCK..][..n]);
                        }
                    }
                    if !hinted {
                        keep_hint(leaf, evaluator.k, &self.labels, false);
                    }
                }
                _ => {}
            }
        }
        Ok(())
    }
}

/// The rows of a leaf, straight from the batches where that is the same.
fn scaled<'a>(plain: bool, leaf: &'a Leaf, rows: &'a Loaded, evaluator: &'a Evaluator) -> Scaled<'a> {
    let (origin, n) = if plain { (Origin::Plain(leaf), leaf.len()) } else { (Origin::Loaded(rows), rows.n) };
    Scaled::new(origin, n, rows.weights.as_deref(), &evaluator.scaling)
}

/// Likely components that an earlier pass left, if they are of so many components and rows. Returns whether skipping paid.
fn take_hint(leaf: &Leaf, k: usize, n: usize, labels: &mut Vec<u16>) -> bool {
    let hint = leaf.hint.lock().unwrap_or_else(PoisonError::into_inner);
    let fits = hint.k == k && hint.labels.len() == n;
    if fits {
        labels.extend_from_slice(&hint.labels);
    }
    fits && hint.paid
}

/// Notes that skipping was refused. Returns whether the labels have been kept for so many passes that they should be made
/// anew; until then making them would only cost.
fn refuse(leaf: &Leaf) -> bool {
    let mut hint = leaf.hint.lock().unwrap_or_else(PoisonError::into_inner);
    hint.paid = false;
    hint.refused += 1;
    hint.refused >= REFUSALS
}

fn keep_hint(leaf: &Leaf, k: usize, labels: &[u16], paid: bool) {
    let mut hint = leaf.hint.lock().unwrap_or_else(PoisonError::into_inner);
    (hint.k, hint.paid, hint.refused) = (k, paid, 0);
    hint.labels.clear();
    hint.labels.extend_from_slice(labels);
}

/// Whether so few components matter to the rows of a block that the next pass may skip.
fn worth_labels<T: Precision>(e: &Evaluator, block: &Block<'_, T>) -> bool {
    e.k > 1 && e.d >= 4 && 2 * block.pairs() < block.n * e.k
}
