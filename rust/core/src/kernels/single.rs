//! A mixture made ready for float32, where its conditioning allows that.
//!
//! Rows arrive centred and scaled in float64 and are rounded once, so an offset of a column does no harm by itself. What
//! float32 then costs is measured by the reach of a component, in its own standard deviations:
//!
//! ```text
//! reach^2 = max_i 2 sum_j W_ij^2 (m_j^2 + v_j)
//! ```
//!
//! with W the factor of `density`, m the mean and v the variances, in scaled units. A row x of the component has
//! x_j^2 = m_j^2 + v_j on average; x_j, W_ij and each product are rounded by up to e = 2^-24 of themselves, and the
//! roundings of different columns are independent. So row i of y = W x - c is wrong by about e reach, the log density by
//! about e reach 2 |y|, both small while reach is far below 1/e. The covariance feels more: the M-step takes m m' off the
//! mean of x x', both of which carry relative errors of a few e, so the variance in the direction of row i is wrong by a
//! few e reach^2 of itself. For one uncorrelated column reach^2 = (m / sd)^2 + 1: the bound [`MOST_REACH`] is the ratio at which
//! float64 takes densities about a component's own mean. Row j alone has 2 W_jj^2 >= 1 / v_j, so a component so far in one
//! column reaches further than the bound, and float32 never meets factors that are packed about a mean. At the bound a variance is wrong by a few 1e-5 of itself, which costs the
//! log-likelihood of a row the square of that: far less than the last gain for which a fit trusts float32.

use super::evaluator::{Evaluator, FAR_RATIO, Factors};
use super::lanes::Scalar;

/// No component may reach further.
pub const MOST_REACH: f64 = FAR_RATIO;

/// What stands against float32.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Obstacle {
    /// Position of the component.
    pub component: usize,
    /// Its reach.
    pub reach: f64,
}

/// A mixture made ready; see [`Evaluator`].
pub struct Single {
    /// The largest constant, which is left out of those of the components.
    pub base: f64,
    d: usize,
    triangular: bool,
    constant: Vec<f32>,
    packed: Vec<f32>,
    packed_len: usize,
}

impl Single {
    /// Rounds the factors, unless some component reaches too far: then the worst of them is told.
    pub fn new(e: &Evaluator) -> Result<Self, Obstacle> {
        let reaches = (0..e.k).map(|component| Obstacle { component, reach: reach(e, component) });
        if let Some(worst) = reaches.filter(|one| one.reach > MOST_REACH).max_by(|a, b| a.reach.total_cmp(&b.reach)) {
            return Err(worst);
        }
        let base = e.constant.iter().copied().fold(f64::MIN, f64::max);
        let packed: Vec<f32> = (0..e.k).flat_map(|k| e.packed_of(k).iter().map(|w| *w as f32)).collect();
        Ok(Self {
            base,
            d: e.d,
            triangular: e.triangular,
            constant: e.constant.iter().map(|c| (c - base).max(f64::from(f32::FLOOR)) as f32).collect(),
            packed_len: packed.len() / e.k,
            packed,
        })
    }
}

/// See the module.
pub(super) fn reach(e: &Evaluator, k: usize) -> f64 {
    let d = e.d;
    let structure = e.scaled.shape.structure;
    let size: Vec<f64> =
        (0..d).map(|j| e.scaled.means[k * d + j].powi(2) + structure.variance(e.scaled.stored_of(k), d, j)).collect();
    let w = e.leading_factor(k, d);
    let squared = if e.triangular {
        let of_row = |row: &[f64]| row.iter().zip(&size).map(|(w, s)| 2.0 * w * w * s).sum();
        w.chunks_exact(d).map(of_row).fold(0.0, f64::max)
    } else {
        w.iter().zip(&size).map(|(w, s)| 2.0 * w * w * s).fold(0.0, f64::max)
    };
    squared.sqrt()
}

impl Factors<f32> for Single {
    #[inline(always)]
    fn dims(&self) -> usize {
        self.d
    }
    #[inline(always)]
    fn components(&self) -> usize {
        self.constant.len()
    }
    #[inline(always)]
    fn is_triangular(&self) -> bool {
        self.triangular
    }
    #[inline(always)]
    fn packed_of(&self, k: usize) -> &[f32] {
        &self.packed[k * self.packed_len..][..self.packed_len]
    }
    #[inline(always)]
    fn constant_of(&self, k: usize) -> f32 {
        self.constant[k]
    }
    #[inline(always)]
    fn about(&self, _: usize) -> Option<&[f32]> {
        None
    }
}
