//! A mixture made ready for the kernels.

use super::bounds::Bounds;
use super::lanes::Scalar;
use super::math::ln_one;
use super::posterior::RowSums;
use super::single::{Obstacle, Single};
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
pub const FLOOR: f64 = <f64 as Scalar>::FLOOR;
/// A component is evaluated about its own mean when that lies this many of its standard deviations from 0.
pub(super) const FAR_RATIO: f64 = 30.0;
/// A component takes its moments about its own mean when that lies this many of its standard deviations from 0. A variance
/// taken about 0 has a relative error of up to 8e-15 times the square of this, where all rows of a leaf are of one component.
const APART_RATIO: f64 = 10.0;

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
    single: OnceLock<std::result::Result<Single, Obstacle>>,
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
            single: OnceLock::new(),
            packed,
            packed_len,
        })
    }

    /// Tables for the skipping path, made when first asked for; `None` where skipping cannot pay.
    pub fn bounds(&self) -> Option<&Bounds> {
        self.bounds.get_or_init(|| Bounds::new(self)).as_ref()
    }

    /// The same in float32, made when first asked for; what stands against it where conditioning forbids it.
    pub fn single(&self) -> std::result::Result<&Single, Obstacle> {
        self.single.get_or_init(|| Single::new(self)).as_ref().map_err(|obstacle| *obstacle)
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

    /// The points that components take their moments about, columns by `pad` components, 0 for those that are not `apart`; empty
    /// where 0 serves all of them.
    pub fn points(&self) -> &[f64] {
        &self.points
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
    pub fn mend<T: Scalar>(&self, x: &[T], n: usize, log: &mut [T], sums: &mut RowSums<T>) {
        let mut y = vec![0.0; self.d];
        for row in 0..n {
            if sums.most[row] > T::FLOOR {
                continue;
            }
            let mut best = (f64::INFINITY, 0);
            for k in 0..self.k {
                if self.scaled.weights[k] <= 0.0 {
                    continue;
                }
                for j in 0..self.d {
                    y[j] = (x[j * BLOCK_STRIDE + row].to_f64() - self.scaled.means[k * self.d + j]) * T::SMALL;
                }
                let distance = self.distance_squared(k, &mut y);
                if distance < best.0 {
                    best = (distance, k);
                }
            }
            for k in 0..self.k {
                log[k * BLOCK_STRIDE + row] = if k == best.1 { T::ONE } else { T::ZERO };
            }
            (sums.most[row], sums.sum[row], sums.mixed[row]) = (T::FLOOR, T::ONE, T::ZERO);
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

/// What the log densities are computed from.
pub trait Factors<T> {
    /// Columns.
    fn dims(&self) -> usize;
    /// Components.
    fn components(&self) -> usize;
    /// Whether factors are triangles (full covariance) or diagonals.
    fn is_triangular(&self) -> bool;
    /// Packed factor of component `k`.
    fn packed_of(&self, k: usize) -> &[T];
    /// Log weight less log normaliser of component `k`.
    fn constant_of(&self, k: usize) -> T;
    /// The mean, where the component is evaluated about it.
    fn about(&self, k: usize) -> Option<&[T]>;
}

impl Factors<f64> for Evaluator {
    #[inline(always)]
    fn dims(&self) -> usize {
        self.d
    }
    #[inline(always)]
    fn components(&self) -> usize {
        self.k
    }
    #[inline(always)]
    fn is_triangular(&self) -> bool {
        self.triangular
    }
    #[inline(always)]
    fn packed_of(&self, k: usize) -> &[f64] {
        self.packed_of(k)
    }
    #[inline(always)]
    fn constant_of(&self, k: usize) -> f64 {
        self.constant[k]
    }
    #[inline(always)]
    fn about(&self, k: usize) -> Option<&[f64]> {
        self.far[k].then(|| &self.scaled.means[k * self.d..][..self.d])
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
