//! drumlin-core: Gaussian mixtures over Arrow record batches, without Python.
//!
//! Data goes: `batch` (Arrow to typed columns) -> `leaf` (fixed runs of row numbers, scaled) -> `kernels` (blocks:
//! log densities, responsibilities, statistics) -> `measure` (mergeable sums) -> `tree` (one order of merging) ->
//! `maximise` (new mixture). `job` runs this in threads; `starting` makes first mixtures, `stopping` judges passes.

pub mod batch;
pub mod bytes;
pub mod container;
pub mod drawing;
pub mod drive;
pub mod error;
pub mod job;
pub mod kernels;
pub mod leaf;
pub mod linalg;
pub mod maximise;
pub mod measure;
pub mod mixture;
pub mod profile;
pub mod random;
pub mod scaled;
pub mod scaling;
pub mod score;
pub mod source;
pub mod starting;
pub mod stopping;
pub mod structure;
mod together;
pub mod tree;
pub mod tries;

pub use error::{Error, Result};
