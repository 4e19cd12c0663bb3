//! Kernels: everything that is done for each row and component.
//!
//! `lanes` is the vector layer, `math` exp and ln, `density` the log densities, `posterior` log-sum-exp and
//! responsibilities, `moments` (and `apart`) the statistics, `sparse` (with `bounds`, `candidates`, `turned`, `pairs` and
//! `gathered`, driven by `leafwise`) the path that skips components, `evaluator` a mixture made ready, `single` the same in
//! float32, `block` the rows they work on (in `aligned` room), `scores` what scoring tells of each row, `prepare` the way of
//! arrays into scaled blocks, `tier` the choice of the instruction set, `plain` and `plain_single` the scalar oracles of all.

pub mod aligned;
pub mod apart;
pub mod block;
pub mod bounds;
pub mod candidates;
pub mod density;
pub mod evaluator;
pub mod gathered;
pub mod lanes;
pub mod leafwise;
pub mod math;
pub mod moments;
pub mod pairs;
#[cfg(test)]
pub(crate) mod plain;
#[cfg(test)]
mod plain_single;
pub mod posterior;
pub mod prepare;
pub mod scores;
pub mod single;
pub mod sparse;
pub mod tier;
pub mod turned;

pub use block::{Block, Scratch};
pub use evaluator::{BLOCK, BLOCK_STRIDE, Evaluator};
