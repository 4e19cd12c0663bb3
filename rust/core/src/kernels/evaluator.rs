//! A mixture made ready for the kernels, and the block of rows that they work on.

use super::bounds::Bounds;
use super::density::densities;
use super::lanes::{Kernel, Lanes};
use super::math::ln_one;
use super::moments::{self, About, Feature, PANEL, Panel};
use super::posterior::{self, RowSums};
use super::tier;
use crate::error::{Error, Result};
use crate::linalg::{cholesky, invert_lower};
use crate::mixture::{Mixture, ScaledMixture, Structure};
use crate::scaling::Scaling;
use std::sync::{Arc, OnceLock};

/// Rows of a block.
pub const BLOCK: usize = 192;
/// Distance between the columns of a block: an odd number of cache lines.
pub const BLOCK_STRIDE: usize = BLOCK + 8;
/// A component more than this many nats below the best of a row has responsibility exactly 0.
pub const CUT: f64 = 37.0;
/// Log densities are never below this, so that sums over rows stay finite.
pub const FLOOR: f64 = -1.0e290;
/// A component is evaluated about its own mean when that lies this many of its standard deviations from 0.
const FAR_RATIO: f64 = 30.0;
/// A component takes its moments about its own mean when that lies this many of its standard deviations from 0. A variance
/// taken about 0 has a relative error of up to 8e-15 times the square of this, where all rows of a leaf are of one component.
const APART_RATIO: f64 = 8.0;

/// A mixture made ready: factors packed in the order of use.
pub struct Evaluator {
    /// The mixture, in the units of the columns.
    pub mixture: Arc<Mixture>,
    /// Centre and spread of the columns.
    pub scaling: Arc<Scaling>,
    /// The mixture in scaled units.
    pub scaled: ScaledMixture,
    /// Columns.
    pub d: usize,
    /// Components.
    pub k: usize,
    /// Components rounded up to a multiple of 8.
    pub pad: usize,
    /// Whether factors are triangles (full covariance) or diagonals.
    pub triangular: bool,
    /// Per component: log weight less log normaliser, in the units of the columns.
    pub constant: Vec<f64>,
    /// The same with -infinity up to `pad`.
    pub constant_padded: Vec<f64>,
    /// Components that are evaluated about their own mean.
    pub far: Vec<bool>,
    /// Components that take their moments about their own mean; the far ones are among them.
    pub apart: Vec<bool>,
    /// Their means, columns by `pad` components, 0 for the others; empty where there are none.
    points: Vec<f64>,
    bounds: OnceLock<Option<Bounds>>,
    packed: Vec<f64>,
    packed_len: usize,
}

impl Evaluator {
    /// Factors every covariance. Fails with the component and pivot where there is no factor.
    pub fn new(mixture: Arc<Mixture>, scaling: Arc<Scaling>) -> Result<Self> {
        let (k, d) = (mixture.components(), mixture.dims());
        if scaling.dims() != d {
            return Err(Error::Internal { what: format!("scaling of {} columns for {d}", scaling.dims()) });
        }
        let scaled = mixture.scaled(&scaling)?;
        let triangular = scaled.shape.structure == Structure::Full;
        let packed_len = if triangular { d + d * (d + 1) / 2 } else { 2 * d };
        let mut packed = Vec::with_capacity(k * packed_len);
        let mut constant = Vec::with_capacity(k);
        let mut far = Vec::with_capacity(k);
        let mut apart = Vec::with_capacity(k);
        let half = std::f64::consts::FRAC_1_SQRT_2;
        let units: f64 = scaling.spread().iter().map(|&s| ln_one(s)).sum();
        let base = -0.5 * d as f64 * ln_one(2.0 * std::f64::consts::PI) - units;
        let structure = scaled.shape.structure;
        let variance = |c: usize, j: usize| structure.variance(scaled.stored_of(c), d, j);
        let mut pooled: Option<(Vec<f64>, f64)> = None;
        for c in 0..k {
            let mean = &scaled.means[c * d..][..d];
            let beyond = |ratio: f64| (0..d).any(|j| mean[j].abs() > ratio * variance(c, j).sqrt());
            let is_far = beyond(FAR_RATIO);
            apart.push(beyond(APART_RATIO));
            let (w, log_det) = match &pooled {
                Some(shared) => shared.clone(),
                None => {
                    let factor = if triangular {
                        let mut a = scaled.covariance(c);
                        cholesky(&mut a, d).map_err(|pivot| Error::NotPositiveDefinite { component: c, pivot })?;
                        let log_det: f64 = (0..d).map(|i| ln_one(a[i * d + i])).sum();
                        let mut w = invert_lower(&a, d);
                        w.iter_mut().for_each(|v| *v *= half);
                        (w, log_det)
                    } else {
                        let sd: Vec<f64> = (0..d).map(|j| variance(c, j).sqrt()).collect();
                        let log_det = sd.iter().map(|&s| ln_one(s)).sum();
                        (sd.iter().map(|s| half / s).collect(), log_det)
                    };
                    if scaled.shape.pooled {
                        pooled = Some(factor.clone());
                    }
                    factor
                }
            };
            let weight = scaled.weights[c];
            constant.push(if weight > 0.0 { ln_one(weight) + base - log_det } else { FLOOR });
            far.push(is_far);
            if triangular {
                pack_triangle(&w, mean, d, is_far, &mut packed);
            } else {
                for j in 0..d {
                    packed.push(w[j]);
                    packed.push(if is_far { 0.0 } else { -(w[j] * mean[j]) });
                }
            }
        }
        let pad = k.div_ceil(8) * 8;
        let mut constant_padded = constant.clone();
        constant_padded.resize(pad, f64::NEG_INFINITY);
        let mut points = Vec::new();
        if apart.contains(&true) {
            points.resize(d * pad, 0.0);
            for c in (0..k).filter(|c| apart[*c]) {
                (0..d).for_each(|j| points[j * pad + c] = scaled.means[c * d + j]);
            }
        }
        Ok(Self {
            mixture,
            scaling,
            scaled,
            d,
            k,
            pad,
            triangular,
            constant,
            constant_padded,
            far,
            apart,
            points,
            bounds: OnceLock::new(),
            packed,
            packed_len,
        })
    }

    /// Tables for the skipping path, made when first asked for; `None` where skipping cannot pay.
    pub fn bounds(&self) -> Option<&Bounds> {
        self.bounds.get_or_init(|| Bounds::new(self)).as_ref()
    }

    /// The first m rows of W: m by m where triangular, else m scales.
    pub fn leading_factor(&self, k: usize, m: usize) -> Vec<f64> {
        let packed = self.packed_of(k);
        if !self.triangular {
            return (0..m).map(|j| packed[2 * j]).collect();
        }
        let mut w = vec![0.0; m * m];
        let (mut at, mut i0) = (0, 0);
        while i0 < m {
            let rows = (self.d - i0).min(4);
            at += rows;
            for j in 0..i0 + rows {
                for i in i0.max(j)..i0 + rows {
                    if i < m {
                        w[i * m + j] = packed[at];
                    }
                    at += 1;
                }
            }
            i0 += rows;
        }
        w
    }

    /// What the moments of some components are taken about; `None` where 0 serves all of them.
    fn about(&self) -> Option<About<'_>> {
        (!self.points.is_empty()).then_some(About { apart: &self.apart, points: &self.points })
    }

    /// Packed factor of component `k`.
    #[inline(always)]
    pub fn packed_of(&self, k: usize) -> &[f64] {
        &self.packed[k * self.packed_len..][..self.packed_len]
    }

    /// Whether two evaluators give the same numbers.
    pub fn same(&self, other: &Self) -> bool {
        std::ptr::eq(self, other)
            || (crate::measure::same_scaling(&self.scaling, &other.scaling) && *self.mixture == *other.mixture)
    }

    /// Rows so far away that every density is at the floor: the nearest component (by the distance of the row scaled
    /// down, in the metric of each component) takes the whole row, at the floor.
    pub fn mend(&self, x: &[f64], n: usize, log: &mut [f64], sums: &mut RowSums) {
        let small = 2f64.powi(-600);
        let mut y = vec![0.0; self.d];
        for row in 0..n {
            if sums.most[row] > FLOOR {
                continue;
            }
            let mut best = (f64::INFINITY, 0);
            for k in 0..self.k {
                if self.scaled.weights[k] <= 0.0 {
                    continue;
                }
                for j in 0..self.d {
                    y[j] = (x[j * BLOCK_STRIDE + row] - self.scaled.means[k * self.d + j]) * small;
                }
                let distance = self.distance_squared(k, &mut y);
                if distance < best.0 {
                    best = (distance, k);
                }
            }
            for k in 0..self.k {
                log[k * BLOCK_STRIDE + row] = if k == best.1 { 1.0 } else { 0.0 };
            }
            (sums.most[row], sums.sum[row], sums.mixed[row]) = (FLOOR, 1.0, 0.0);
        }
    }

    /// Half the squared Mahalanobis distance of `y`, the row less the mean of `k`, in scaled units.
    pub(super) fn distance_squared(&self, k: usize, y: &mut [f64]) -> f64 {
        let d = self.d;
        let packed = self.packed_of(k);
        if !self.triangular {
            return (0..d).map(|j| (packed[2 * j] * y[j]).powi(2)).sum();
        }
        let (mut total, mut at, mut i0) = (0.0, 0, 0);
        while i0 < d {
            let rows = (d - i0).min(4);
            at += rows;
            let mut sums = [0.0; 4];
            for v in y.iter().take(i0) {
                for s in sums.iter_mut().take(rows) {
                    *s += packed[at] * v;
                    at += 1;
                }
            }
            for j in 0..rows {
                for s in sums.iter_mut().take(rows).skip(j) {
                    *s += packed[at] * y[i0 + j];
                    at += 1;
                }
            }
            total += sums.iter().map(|s| s * s).sum::<f64>();
            i0 += rows;
        }
        total
    }
}

/// Tiles of up to four rows: -c, the columns left of the tile, the triangle by columns.
fn pack_triangle(w: &[f64], mean: &[f64], d: usize, far: bool, packed: &mut Vec<f64>) {
    let mut i0 = 0;
    while i0 < d {
        let rows = (d - i0).min(4);
        for i in i0..i0 + rows {
            let c: f64 = if far { 0.0 } else { (0..=i).map(|j| w[i * d + j] * mean[j]).sum() };
            packed.push(0.0 - c);
        }
        for j in 0..i0 {
            packed.extend((i0..i0 + rows).map(|i| w[i * d + j]));
        }
        for j in i0..i0 + rows {
            packed.extend((j..i0 + rows).map(|i| w[i * d + j]));
        }
        i0 += rows;
    }
}

/// Working room of one thread.
pub struct Scratch {
    pub(super) log: Vec<f64>,
    r: Vec<f64>,
    share: Vec<f64>,
    pub(super) shifted: Vec<f64>,
    room: Vec<f64>,
    pub(super) sums: RowSums,
    panel: Box<Panel>,
}

impl Scratch {
    /// Room for any block of `evaluator`.
    pub fn new(evaluator: &Evaluator) -> Self {
        Self {
            log: vec![0.0; evaluator.k * BLOCK_STRIDE],
            r: vec![0.0; evaluator.pad * BLOCK_STRIDE],
            share: vec![0.0; BLOCK_STRIDE],
            shifted: vec![0.0; evaluator.d * BLOCK_STRIDE],
            room: Vec::new(),
            sums: RowSums::new(),
            panel: Box::new([[0.0; BLOCK]; PANEL]),
        }
    }
}

/// One evaluated block: responsibilities and sums, shown to the measures of its mixture.
pub struct Block<'a> {
    /// The mixture.
    pub evaluator: &'a Evaluator,
    /// Rows.
    pub n: usize,
    /// Scaled columns, column j at `x[j * BLOCK_STRIDE..]`.
    pub x: &'a [f64],
    /// Row weights, when they are not all 1.
    pub weights: Option<&'a [f64]>,
    /// Sum of row weight times log density.
    pub log_likelihood: f64,
    /// Sum of row weights.
    pub weight: f64,
    scratch: &'a mut Scratch,
}

struct Posterior<'a> {
    e: &'a Evaluator,
    x: &'a [f64],
    n: usize,
    weights: Option<&'a [f64]>,
    mixed: bool,
    scratch: &'a mut Scratch,
}

impl Kernel for Posterior<'_> {
    type Out = f64;
    #[inline(always)]
    fn run<L: Lanes>(self, l: L) -> f64 {
        let Self { e, x, n, weights, mixed, scratch: s } = self;
        densities(l, e, x, n, &mut s.shifted, &mut s.log);
        if posterior::exponentials(l, e.k, n, mixed, &mut s.log, &mut s.sums) {
            e.mend(x, n, &mut s.log, &mut s.sums);
        }
        if mixed {
            posterior::entropies(l, n, &mut s.sums);
        }
        posterior::responsibilities(l, e.k, e.pad, n, weights, &s.log, &s.sums, &mut s.share, &mut s.r);
        posterior::log_likelihood(l, n, weights, &s.sums, &mut s.share)
    }
}

struct Moments<'a> {
    e: &'a Evaluator,
    list: &'a [Feature],
    n: usize,
    x: &'a [f64],
    r: &'a [f64],
    panel: &'a mut Panel,
    room: &'a mut Vec<f64>,
    sums: &'a mut [f64],
}

impl Kernel for Moments<'_> {
    type Out = ();
    #[inline(always)]
    fn run<L: Lanes>(self, l: L) {
        let Self { e, list, n, x, r, panel, room, sums } = self;
        moments::add(l, list, e.k, e.pad, n, x, r, e.about(), panel, room, sums);
    }
}

impl<'a> Block<'a> {
    /// Evaluates `n` rows. `mixed` asks for what [`Block::entropy`] needs.
    pub fn evaluate(
        evaluator: &'a Evaluator,
        x: &'a [f64],
        n: usize,
        weights: Option<&'a [f64]>,
        mixed: bool,
        scratch: &'a mut Scratch,
    ) -> Self {
        let log_likelihood = tier::run(Posterior { e: evaluator, x, n, weights, mixed, scratch: &mut *scratch });
        let weight = posterior::weight(n, weights);
        Self { evaluator, n, x, weights, log_likelihood, weight, scratch }
    }

    /// Adds responsibility times feature to `sums` (features by `evaluator.pad` components); the features of some
    /// components (`evaluator.apart`) are taken about their means.
    pub fn add_moments(&mut self, list: &[Feature], sums: &mut [f64]) {
        let s = &mut *self.scratch;
        let (r, panel, room) = (&s.r, &mut *s.panel, &mut s.room);
        tier::run(Moments { e: self.evaluator, list, n: self.n, x: self.x, r, panel, room, sums });
    }

    /// Sum over rows of row weight times the entropy of the responsibilities; evaluated with `mixed` only.
    pub fn entropy(&self) -> f64 {
        posterior::entropy(self.n, self.weights, &self.scratch.sums)
    }

    /// The most likely component of each row.
    pub fn label(&self, labels: &mut [u16]) {
        for (row, label) in labels.iter_mut().enumerate().take(self.n) {
            let shares = &self.scratch.r[row * self.evaluator.pad..][..self.evaluator.k];
            let mut best = (0.0, 0);
            for (k, &r) in shares.iter().enumerate() {
                if r > best.0 {
                    best = (r, k);
                }
            }
            *label = best.1 as u16;
        }
    }

    /// Entries with responsibility above 0.
    pub fn pairs(&self) -> usize {
        self.scratch.r[..self.n * self.evaluator.pad].iter().filter(|r| **r > 0.0).count()
    }

    /// Responsibilities times row weight: `pad` places a row.
    pub fn weighted_responsibilities(&self) -> &[f64] {
        &self.scratch.r
    }
}
