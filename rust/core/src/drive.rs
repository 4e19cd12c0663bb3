//! One thread's way through leaves: what the measures need is loaded once, evaluated once a mixture, and shown to all.

use crate::batch::Reading;
use crate::error::Result;
use crate::kernels::leafwise::SparseLeaf;
use crate::kernels::sparse::Sparse;
use crate::kernels::{BLOCK, BLOCK_STRIDE, Block, Evaluator, Scratch};
use crate::leaf::{Leaf, Loaded, Part};
use crate::measure::{Needs, Seen};
use crate::tree::Sums;
use std::sync::{Arc, PoisonError};

enum Group {
    Raw(Vec<usize>),
    Values(Part, Vec<usize>),
    Posterior { evaluator: Arc<Evaluator>, part: Part, mixed: bool, measures: Vec<usize> },
}

/// Which measures share which work.
pub struct Plan {
    groups: Vec<Group>,
    prototypes: Sums,
}

impl Plan {
    /// Groups measures by what they need; measures of the same mixture and part share one E-step.
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
                }),
            }
        }
        Self { groups, prototypes }
    }

    /// Empty measures in the order they were given.
    pub fn fresh(&self) -> Sums {
        self.prototypes.iter().map(|m| m.fresh()).collect()
    }
}

/// Working room of one thread for one plan.
pub struct Worker {
    fit: Loaded,
    held: Loaded,
    blocks: Vec<f64>,
    labels: Vec<u16>,
    sparse: Sparse,
    scratch: Vec<Option<Scratch>>,
}

impl Worker {
    /// Room for leaves of `d` columns.
    pub fn new(plan: &Plan, d: usize) -> Self {
        let room = plan
            .groups
            .iter()
            .map(|group| match group {
                Group::Posterior { evaluator, .. } => Some(Scratch::new(evaluator)),
                _ => None,
            })
            .collect();
        Self {
            fit: Loaded::new(d),
            held: Loaded::new(d),
            blocks: Vec::new(),
            labels: Vec::new(),
            sparse: Sparse::default(),
            scratch: room,
        }
    }

    /// Adds one leaf to `sums`, which came from [`Plan::fresh`].
    pub fn add(&mut self, plan: &Plan, reading: &Reading, leaf: &Leaf, sums: &mut Sums) -> Result<()> {
        let mut loaded = [false; 2];
        for (group, scratch) in plan.groups.iter().zip(&mut self.scratch) {
            let part = match group {
                Group::Raw(list) => {
                    list.iter().try_for_each(|&i| sums[i].add_leaf(Seen::Raw(leaf)))?;
                    continue;
                }
                Group::Values(part, _) | Group::Posterior { part, .. } => *part,
            };
            let rows = if part == Part::Fit { &mut self.fit } else { &mut self.held };
            let done = &mut loaded[usize::from(part == Part::Held)];
            if !*done {
                rows.load(leaf, reading, part)?;
                *done = true;
            }
            match (group, scratch) {
                (Group::Values(_, list), _) => {
                    if rows.rows.is_empty() {
                        rows.load_ids(leaf);
                    }
                    list.iter().try_for_each(|&i| sums[i].add_leaf(Seen::Values(rows)))?;
                }
                (Group::Posterior { evaluator, mixed, measures, .. }, Some(scratch)) => {
                    rows.scale(&evaluator.scaling, &mut self.blocks);
                    if part == Part::Fit
                        && skipped(
                            rows,
                            &self.blocks,
                            &mut self.labels,
                            &mut self.sparse,
                            evaluator,
                            *mixed,
                            measures,
                            leaf,
                            sums,
                        )?
                    {
                        continue;
                    }
                    let size = rows.d * BLOCK_STRIDE;
                    let mut labelled = false;
                    for start in (0..rows.n).step_by(BLOCK) {
                        let x = &self.blocks[start / BLOCK * size..][..size];
                        let n = (rows.n - start).min(BLOCK);
                        let weights = rows.weights.as_ref().map(|w| &w[start..start + n]);
                        let mut block = Block::evaluate(evaluator, x, n, weights, *mixed, scratch);
                        measures.iter().try_for_each(|&i| sums[i].add_block(&mut block))?;
                        if start == 0 {
                            labelled = part == Part::Fit && worth_labels(evaluator, &block);
                            self.labels.clear();
                            self.labels.resize(if labelled { rows.n } else { 0 }, 0);
                        }
                        if labelled {
                            block.label(&mut self.labels[start..start + n]);
                        }
                    }
                    if part == Part::Fit {
                        keep_hint(leaf, evaluator.k, &self.labels);
                    }
                }
                _ => {}
            }
        }
        Ok(())
    }
}

/// The skipping path, where an earlier pass left likely components. False: nothing was added.
fn skipped(
    rows: &Loaded,
    blocks: &[f64],
    labels: &mut Vec<u16>,
    sparse: &mut Sparse,
    evaluator: &Evaluator,
    mixed: bool,
    measures: &[usize],
    leaf: &Leaf,
    sums: &mut Sums,
) -> Result<bool> {
    labels.clear();
    {
        let hint = leaf.hint.lock().unwrap_or_else(PoisonError::into_inner);
        if hint.k == evaluator.k {
            labels.extend_from_slice(&hint.labels);
        }
    }
    if labels.len() != rows.n || rows.n == 0 {
        return Ok(false);
    }
    let weights = rows.weights.as_deref();
    let found = SparseLeaf::evaluate(evaluator, blocks, rows.n, weights, labels, mixed, sparse);
    let Some(mut found) = found else { return Ok(false) };
    measures.iter().try_for_each(|&i| sums[i].add_sparse(&mut found))?;
    keep_hint(leaf, evaluator.k, found.labels());
    Ok(true)
}

fn keep_hint(leaf: &Leaf, k: usize, labels: &[u16]) {
    let mut hint = leaf.hint.lock().unwrap_or_else(PoisonError::into_inner);
    hint.k = k;
    hint.labels.clear();
    hint.labels.extend_from_slice(labels);
}

/// Whether so few components matter to the rows of a block that the next pass may skip.
fn worth_labels(e: &Evaluator, block: &Block<'_>) -> bool {
    e.k > 1 && e.d >= 4 && 2 * block.pairs() < block.n * e.k
}
