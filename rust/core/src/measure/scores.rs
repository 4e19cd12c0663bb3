//! Log-likelihood, entropy and shares of a mixture, without moments: the closing pass of a fit, and held-out rows.

use super::em::{read_evaluator, write_evaluator};
use super::{Measure, Needs, downcast};
use crate::bytes::{Reader, put_f64, put_floats, put_u64};
use crate::error::{Error, Result};
use crate::kernels::leafwise::SparseLeaf;
use crate::kernels::moments::Features;
use crate::kernels::{Block, Evaluator};
use crate::leaf::Part;
use std::any::Any;
use std::sync::Arc;

/// Tag in [`super::from_bytes`].
pub const TAG: u8 = 2;

/// See the module.
pub struct Scores {
    evaluator: Arc<Evaluator>,
    part: Part,
    sums: Vec<f64>,
    /// Rows added.
    pub rows: u64,
    /// Sum of row weights.
    pub weight: f64,
    /// Sum of row weight times log density.
    pub log_likelihood: f64,
    /// Sum of row weight times entropy of the responsibilities.
    pub entropy: f64,
}

impl Scores {
    /// Empty scores of `evaluator` over the rows of `part`.
    pub fn new(evaluator: Arc<Evaluator>, part: Part) -> Self {
        let sums = vec![0.0; evaluator.pad];
        Self { evaluator, part, sums, rows: 0, weight: 0.0, log_likelihood: 0.0, entropy: 0.0 }
    }

    /// Sum of responsibilities of each component.
    pub fn shares(&self) -> Vec<f64> {
        self.sums[..self.evaluator.k].to_vec()
    }

    /// Reads the definition and sums written by `write`.
    pub fn read(r: &mut Reader<'_>) -> Result<Self> {
        let evaluator = read_evaluator(r)?;
        let part = if r.u64()? == 0 { Part::Fit } else { Part::Held };
        let mut m = Self::new(evaluator, part);
        m.rows = r.u64()?;
        m.weight = r.f64()?;
        m.log_likelihood = r.f64()?;
        m.entropy = r.f64()?;
        let sums = r.floats()?;
        if sums.len() != m.sums.len() {
            return Err(Error::Damaged { what: "scores of another shape".into() });
        }
        m.sums = sums;
        Ok(m)
    }
}

impl Measure for Scores {
    fn tag(&self) -> u8 {
        TAG
    }

    fn needs(&self) -> Needs {
        Needs::Posterior(Arc::clone(&self.evaluator), self.part)
    }

    fn fresh(&self) -> Box<dyn Measure> {
        Box::new(Self::new(Arc::clone(&self.evaluator), self.part))
    }

    fn wants_entropy(&self) -> bool {
        true
    }

    fn add_block(&mut self, block: &mut Block<'_>) -> Result<()> {
        block.add_moments(&Features::one(), &mut self.sums);
        self.rows += block.n as u64;
        self.weight += block.weight;
        self.log_likelihood += block.log_likelihood;
        self.entropy += block.entropy();
        Ok(())
    }

    fn add_sparse(&mut self, leaf: &mut SparseLeaf<'_>) -> Result<()> {
        let sums = &mut self.sums;
        leaf.shares(|c, sum| sums[c] += sum);
        for totals in &leaf.totals {
            self.rows += totals.n as u64;
            self.weight += totals.weight;
            self.log_likelihood += totals.log_likelihood;
            self.entropy += totals.entropy;
        }
        Ok(())
    }

    fn merge(&mut self, later: Box<dyn Measure>) -> Result<()> {
        let later = downcast::<Self>(later)?;
        self.sums.iter_mut().zip(&later.sums).for_each(|(a, b)| *a += b);
        self.rows += later.rows;
        self.weight += later.weight;
        self.log_likelihood += later.log_likelihood;
        self.entropy += later.entropy;
        Ok(())
    }

    fn write(&self, out: &mut Vec<u8>) {
        write_evaluator(&self.evaluator, out);
        put_u64(out, u64::from(self.part == Part::Held));
        put_u64(out, self.rows);
        put_f64(out, self.weight);
        put_f64(out, self.log_likelihood);
        put_f64(out, self.entropy);
        put_floats(out, &self.sums);
    }

    fn as_any(&self) -> &dyn Any {
        self
    }

    fn into_any(self: Box<Self>) -> Box<dyn Any> {
        self
    }
}
