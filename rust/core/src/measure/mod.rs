//! Measures: mergeable sums over rows. One file a measure, the same verbs in each.
//!
//! A measure is a value. `fresh` gives an empty one of the same definition, `add_leaf` takes the rows of one leaf,
//! `merge` takes the measure of the rows that follow, `to_bytes` and [`from_bytes`] carry it to other processes.
//! Nothing else may add up numbers across leaves: the merge tree of `tree` then gives the same bits on any number of
//! threads or processes.

pub mod em;
pub mod sample;
pub mod scores;
pub mod summary;

use crate::bytes::Reader;
use crate::error::{Error, Result};
use crate::kernels::leafwise::SparseLeaf;
use crate::kernels::{Block, Evaluator};
use crate::leaf::{Leaf, Loaded, Part};
use crate::scaling::Scaling;
use std::any::Any;
use std::sync::Arc;

/// What a measure must be shown of a leaf.
pub enum Needs {
    /// The leaf as it was read, with gaps and removed rows.
    Raw,
    /// The complete rows of one part, in the units of the source.
    Values(Part),
    /// Posterior sums of one mixture over the complete rows of one part, block by block.
    Posterior(Arc<Evaluator>, Part),
    /// The same in float32, over the rows that are fitted.
    Single(Arc<Evaluator>),
}

/// What a measure is shown of a leaf.
pub enum Seen<'a> {
    /// See [`Needs::Raw`].
    Raw(&'a Leaf),
    /// See [`Needs::Values`].
    Values(&'a Loaded),
}

/// A mergeable sum over rows.
pub trait Measure: Send + Sync {
    /// One of the tags in [`from_bytes`].
    fn tag(&self) -> u8;
    /// What `add_leaf` must be shown.
    fn needs(&self) -> Needs;
    /// An empty measure of the same definition.
    fn fresh(&self) -> Box<dyn Measure>;
    /// Whether `add_block` reads the entropy.
    fn wants_entropy(&self) -> bool {
        false
    }
    /// Adds the rows of one leaf. Not called for posterior measures, see [`em`] and [`scores`].
    fn add_leaf(&mut self, _seen: Seen<'_>) -> Result<()> {
        Err(Error::Internal { what: "this measure is fed by blocks".into() })
    }
    /// Adds one evaluated block. Called only for measures that need the posterior.
    fn add_block(&mut self, _block: &mut Block<'_>) -> Result<()> {
        Err(Error::Internal { what: "this measure is fed by leaves".into() })
    }
    /// Adds one block evaluated in float32. Called only for measures that need that.
    fn add_single(&mut self, _block: &mut Block<'_, f32>) -> Result<()> {
        Err(Error::Internal { what: "this measure is fed in float64".into() })
    }
    /// Adds one leaf that the skipping path evaluated; the bits are those of `add_block` over its blocks.
    fn add_sparse(&mut self, _leaf: &mut SparseLeaf<'_>) -> Result<()> {
        Err(Error::Internal { what: "this measure is fed by leaves".into() })
    }
    /// Adds the sums of the rows that follow; `later` has the same definition.
    fn merge(&mut self, later: Box<dyn Measure>) -> Result<()>;
    /// As `merge`; gives `later` back empty where its room is worth using again.
    fn absorb(&mut self, later: Box<dyn Measure>) -> Result<Option<Box<dyn Measure>>> {
        self.merge(later).map(|()| None)
    }
    /// Definition and sums as bytes, without the tag.
    fn write(&self, out: &mut Vec<u8>);
    /// For reading the concrete type back.
    fn as_any(&self) -> &dyn Any;
    /// For taking the concrete type out of a box.
    fn into_any(self: Box<Self>) -> Box<dyn Any>;
}

/// A measure of the concrete type `T` out of a box; an internal error when it is another.
pub fn downcast<T: Measure + 'static>(measure: Box<dyn Measure>) -> Result<Box<T>> {
    measure.into_any().downcast::<T>().map_err(|_| Error::Internal { what: "measures of two kinds met".into() })
}

/// Tag, definition and sums as bytes (little endian).
pub fn to_bytes(measure: &dyn Measure) -> Vec<u8> {
    let mut out = vec![measure.tag()];
    measure.write(&mut out);
    out
}

/// Reads what [`to_bytes`] wrote; anything else is [`Error::Damaged`].
pub fn from_bytes(data: &[u8]) -> Result<Box<dyn Measure>> {
    let mut reader = Reader::new(data);
    let measure: Box<dyn Measure> = match reader.u8()? {
        em::TAG => Box::new(em::EmStatistics::read(&mut reader)?),
        scores::TAG => Box::new(scores::Scores::read(&mut reader)?),
        sample::TAG => Box::new(sample::Sample::read(&mut reader)?),
        summary::TAG => Box::new(summary::ColumnSummary::read(&mut reader)?),
        other => return Err(Error::Damaged { what: format!("no measure has tag {other}") }),
    };
    reader.finish()?;
    Ok(measure)
}

/// Whether two scalings are equal to the bit.
pub(crate) fn same_scaling(a: &Scaling, b: &Scaling) -> bool {
    a.centre() == b.centre() && a.spread() == b.spread()
}
