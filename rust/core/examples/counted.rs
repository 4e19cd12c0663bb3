//! One pass whose instructions are counted: everything else happens outside of `counted_pass`.
//!
//!     valgrind --tool=callgrind --toggle-collect='*::counted_pass*' --callgrind-out-file=/dev/null \
//!       target/release/examples/counted ROWS COLUMNS COMPONENTS SPACING full|diagonal TIER HINTS
//!
//! HINTS, the likely components that the skipping path starts from: `none`, as in a first pass; `left`, those of a pass
//! before; `wrong`, drawn at random; `dense`: none, and blocks are evaluated one by one, without any choice of path.
//! The tables of the bounds, made once a pass, are made before.

mod generated;

use drumlin_core::batch::Reading;
use drumlin_core::drive::{Plan, Worker};
use drumlin_core::kernels::sparse::Sparse;
use drumlin_core::kernels::tier::{self, Tier};
use drumlin_core::kernels::{BLOCK, BLOCK_STRIDE, Block, Scratch};
use drumlin_core::leaf::Leaf;
use drumlin_core::measure::Measure;
use drumlin_core::measure::em::EmStatistics;
use drumlin_core::random::Stream;
use drumlin_core::scaled::{Origin, Scaled};
use drumlin_core::tree::Sums;
use generated::{Generated, generate};
use std::sync::{Arc, PoisonError};

/// A pass in one thread.
trait Pass {
    fn run(&mut self, leaves: &[Arc<Leaf>]) -> drumlin_core::Result<()>;
}

/// The marker: the instructions spent in here are the ones that count.
#[inline(never)]
fn counted_pass(pass: &mut dyn Pass, leaves: &[Arc<Leaf>]) -> drumlin_core::Result<()> {
    pass.run(leaves)
}

struct Driven<'a> {
    plan: &'a Plan,
    reading: &'a Reading,
    worker: Worker,
    sums: Sums,
}

impl Pass for Driven<'_> {
    fn run(&mut self, leaves: &[Arc<Leaf>]) -> drumlin_core::Result<()> {
        leaves.iter().try_for_each(|leaf| self.worker.add(self.plan, self.reading, leaf, &mut self.sums))
    }
}

struct Dense {
    block: Vec<f64>,
    scratch: Scratch,
    sums: EmStatistics,
}

impl Pass for Dense {
    fn run(&mut self, leaves: &[Arc<Leaf>]) -> drumlin_core::Result<()> {
        let evaluator = Arc::clone(self.sums.evaluator());
        for leaf in leaves {
            let rows = Scaled::new(Origin::Plain(leaf), leaf.len(), None, &evaluator.scaling);
            for b in 0..leaf.len().div_ceil(BLOCK) {
                let n = rows.block(b, &mut self.block);
                let mut block = Block::evaluate(&evaluator, &self.block, n, None, false, &mut self.scratch);
                self.sums.add_block(&mut block)?;
            }
        }
        Ok(())
    }
}

fn main() -> Result<(), Box<dyn std::error::Error>> {
    let args: Vec<String> = std::env::args().skip(1).collect();
    let [n, d, k, spacing, structure, wanted, hints] = args.as_slice() else {
        return Err("ROWS COLUMNS COMPONENTS SPACING full|diagonal TIER none|left|wrong|dense".into());
    };
    let tier = Tier::ALL.into_iter().find(|t| t.name() == wanted);
    if tier.is_none() || !tier::force(tier) {
        return Err(format!("this processor has no tier {wanted}").into());
    }
    let (n, d, k): (usize, usize, usize) = (n.parse()?, d.parse()?, k.parse()?);
    let Generated { reading, leaves, evaluator } = generate(n, d, k, spacing.parse()?, structure == "full", false)?;

    evaluator.bounds();
    if hints == "dense" {
        let (block, scratch) = (vec![0.0; d * BLOCK_STRIDE], Scratch::new(&evaluator));
        counted_pass(&mut Dense { block, scratch, sums: EmStatistics::new(evaluator) }, &leaves)?;
        return Ok(());
    }
    let plan = Plan::new(vec![Box::new(EmStatistics::new(evaluator))]);
    let mut pass =
        Driven { plan: &plan, reading: &reading, worker: Worker::new(&plan, d, Sparse::default()), sums: plan.fresh() };
    let mut stream = Stream::new(2, 0);
    match hints.as_str() {
        "none" => {}
        "left" => pass.run(&leaves)?,
        "wrong" => {
            for leaf in &leaves {
                let mut hint = leaf.hint.lock().unwrap_or_else(PoisonError::into_inner);
                hint.k = k;
                hint.labels = (0..leaf.len()).map(|_| stream.below(k as u64) as u16).collect();
            }
        }
        other => return Err(format!("HINTS is {other}, not none, left, wrong or dense").into()),
    }
    let hinted = |leaf: &&Arc<Leaf>| !leaf.hint.lock().unwrap_or_else(PoisonError::into_inner).labels.is_empty();
    println!("{} of {} leaves have hints", leaves.iter().filter(hinted).count(), leaves.len());
    counted_pass(&mut pass, &leaves)?;
    Ok(())
}
