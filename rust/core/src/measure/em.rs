//! Sufficient statistics of one EM pass: per component the sums of r, r x and r x x' about a fixed point, with the
//! log-likelihood of the mixture that entered (METHODS: Dempster, Laird & Rubin 1977).
//!
//! The fixed point is the centre of the columns, or the component's old mean where that lies far from the centre
//! (relative to the component's own standard deviation), so that the subtraction of means loses no digits.
//!
//! A pass in float32 evaluates rows and sums up blocks in float32; the sums are float64 all the same.

use super::{Measure, Needs, downcast};
use crate::bytes::{Reader, put_f64, put_floats, put_u64};
use crate::error::{Error, Result};
use crate::kernels::leafwise::SparseLeaf;
use crate::kernels::moments::{Features, features};
use crate::kernels::{Block, Evaluator};
use crate::leaf::Part;
use crate::maximise::Moments;
use crate::mixture::{Mixture, Shape, Structure};
use crate::scaling::Scaling;
use std::any::Any;
use std::sync::Arc;

/// Tag in [`super::from_bytes`].
pub const TAG: u8 = 1;

/// See the module.
pub struct EmStatistics {
    /// Whether rows are evaluated in float32.
    pub single: bool,
    evaluator: Arc<Evaluator>,
    features: Arc<Features>,
    sums: Vec<f64>,
    /// Rows added.
    pub rows: u64,
    /// Sum of row weights.
    pub weight: f64,
    /// Sum of row weight times log density.
    pub log_likelihood: f64,
}

impl EmStatistics {
    /// Empty statistics of a pass under `evaluator`.
    pub fn new(evaluator: Arc<Evaluator>) -> Self {
        let features = Arc::new(features(evaluator.d, evaluator.triangular));
        Self::empty(evaluator, features, false)
    }

    /// The same; in float32 if `single` and the mixture's conditioning allows it (see [`Evaluator::single`]).
    pub fn of_precision(evaluator: Arc<Evaluator>, single: bool) -> Self {
        let single = single && evaluator.single().is_ok();
        Self { single, ..Self::new(evaluator) }
    }

    fn empty(evaluator: Arc<Evaluator>, features: Arc<Features>, single: bool) -> Self {
        let sums = vec![0.0; features.list.len() * evaluator.pad];
        Self { single, evaluator, features, sums, rows: 0, weight: 0.0, log_likelihood: 0.0 }
    }

    /// The mixture under which the sums were taken.
    pub fn evaluator(&self) -> &Arc<Evaluator> {
        &self.evaluator
    }

    /// Sum of responsibilities of each component.
    pub fn shares(&self) -> Vec<f64> {
        self.sums[..self.evaluator.k].to_vec()
    }

    /// The sums by component, for the M-step.
    pub fn moments(&self) -> Moments {
        let e = &self.evaluator;
        let (k, d) = (e.k, e.d);
        let products = self.features.list.len() - 1 - d;
        let mut m = Moments {
            d,
            shape_full: e.triangular,
            weight: self.shares(),
            first: Vec::with_capacity(k * d),
            second: Vec::with_capacity(k * products),
            about: vec![0.0; k * d],
        };
        for c in 0..k {
            let value = |f: usize| self.sums[f * e.pad + c];
            m.first.extend((1..=d).map(value));
            m.second.extend((1 + d..self.features.list.len()).map(value));
            if e.apart[c] && !self.single {
                m.about[c * d..][..d].copy_from_slice(&e.scaled.means[c * d..][..d]);
            }
        }
        m
    }

    /// Reads the definition and sums written by `write`.
    pub fn read(r: &mut Reader<'_>) -> Result<Self> {
        let evaluator = read_evaluator(r)?;
        let single = r.u64()? != 0;
        let mut m = Self::of_precision(evaluator, single);
        if m.single != single {
            return Err(Error::Damaged { what: "float32 statistics of a mixture that forbids them".into() });
        }
        m.rows = r.u64()?;
        m.weight = r.f64()?;
        m.log_likelihood = r.f64()?;
        let sums = r.floats()?;
        if sums.len() != m.sums.len() {
            return Err(Error::Damaged { what: "statistics of another shape".into() });
        }
        m.sums = sums;
        Ok(m)
    }
}

/// Writes mixture and scaling.
pub(super) fn write_evaluator(e: &Evaluator, out: &mut Vec<u8>) {
    let m = &e.mixture;
    put_u64(out, m.dims() as u64);
    put_u64(out, m.shape().structure as u64);
    put_u64(out, u64::from(m.shape().pooled));
    for values in [m.weights(), m.means(), m.stored(), e.scaling.centre(), e.scaling.spread()] {
        put_floats(out, values);
    }
}

/// Reads mixture and scaling, and checks both.
pub(super) fn read_evaluator(r: &mut Reader<'_>) -> Result<Arc<Evaluator>> {
    let d = r.u64()? as usize;
    let structure = match r.u64()? {
        s if s == Structure::Full as u64 => Structure::Full,
        s if s == Structure::Diagonal as u64 => Structure::Diagonal,
        s if s == Structure::Spherical as u64 => Structure::Spherical,
        other => return Err(Error::Damaged { what: format!("structure number {other}") }),
    };
    let shape = Shape { structure, pooled: r.u64()? != 0 };
    let (weights, means, stored) = (r.floats()?, r.floats()?, r.floats()?);
    let mixture = Mixture::new(weights, means, stored, d, shape)?;
    let scaling = Scaling::new(r.floats()?, r.floats()?)?;
    if scaling.dims() != d {
        return Err(Error::Damaged { what: "scaling of another width".into() });
    }
    Ok(Arc::new(Evaluator::new(Arc::new(mixture), Arc::new(scaling))?))
}

impl Measure for EmStatistics {
    fn tag(&self) -> u8 {
        TAG
    }

    fn needs(&self) -> Needs {
        let evaluator = Arc::clone(&self.evaluator);
        if self.single { Needs::Single(evaluator) } else { Needs::Posterior(evaluator, Part::Fit) }
    }

    fn fresh(&self) -> Box<dyn Measure> {
        Box::new(Self::empty(Arc::clone(&self.evaluator), Arc::clone(&self.features), self.single))
    }

    fn add_block(&mut self, block: &mut Block<'_>) -> Result<()> {
        block.add_moments(&self.features, &mut self.sums);
        self.rows += block.n as u64;
        self.weight += block.weight;
        self.log_likelihood += block.log_likelihood;
        Ok(())
    }

    fn add_single(&mut self, block: &mut Block<'_, f32>) -> Result<()> {
        block.add_moments(&self.features, &mut self.sums);
        self.rows += block.n as u64;
        self.weight += block.weight;
        self.log_likelihood += block.log_likelihood;
        Ok(())
    }

    fn add_sparse(&mut self, leaf: &mut SparseLeaf<'_>) -> Result<()> {
        leaf.add_moments(&mut self.sums);
        for totals in &leaf.totals {
            self.rows += totals.n as u64;
            self.weight += totals.weight;
            self.log_likelihood += totals.log_likelihood;
        }
        Ok(())
    }

    fn merge(&mut self, later: Box<dyn Measure>) -> Result<()> {
        self.absorb(later).map(|_| ())
    }

    fn absorb(&mut self, later: Box<dyn Measure>) -> Result<Option<Box<dyn Measure>>> {
        let mut later = downcast::<Self>(later)?;
        if later.sums.len() != self.sums.len() || later.single != self.single {
            return Err(Error::Internal { what: "statistics of two mixtures met".into() });
        }
        add(&mut self.sums, &later.sums);
        self.rows += later.rows;
        self.weight += later.weight;
        self.log_likelihood += later.log_likelihood;
        later.sums.fill(0.0);
        (later.rows, later.weight, later.log_likelihood) = (0, 0.0, 0.0);
        Ok(Some(later))
    }

    fn write(&self, out: &mut Vec<u8>) {
        write_evaluator(&self.evaluator, out);
        put_u64(out, u64::from(self.single));
        put_u64(out, self.rows);
        put_f64(out, self.weight);
        put_f64(out, self.log_likelihood);
        put_floats(out, &self.sums);
    }

    fn as_any(&self) -> &dyn Any {
        self
    }

    fn into_any(self: Box<Self>) -> Box<dyn Any> {
        self
    }
}

fn add(a: &mut [f64], b: &[f64]) {
    a.iter_mut().zip(b).for_each(|(a, b)| *a += b);
}
