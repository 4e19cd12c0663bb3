//! The mixture: weights, means and covariances, in the columns' own units and in scaled ones.

use crate::error::{Error, Result};
use crate::linalg::natural_log;
use crate::scaling::Scaling;
pub use crate::structure::{Shape, Structure};

/// Most components that a mixture may have.
pub const MOST_COMPONENTS: usize = 65_535;

/// A mixture of k normal components in d columns, in the columns' own units. Always valid: see [`Mixture::new`].
#[derive(Debug, Clone, PartialEq)]
pub struct Mixture {
    weights: Vec<f64>,
    means: Vec<f64>,
    stored: Vec<f64>,
    shape: Shape,
    d: usize,
}

/// A mixture in scaled coordinates, (x - centre) / spread: what the kernels and the M-step work on.
///
/// Holds the same numbers as a [`Mixture`], each mean less the centre and every covariance divided by the spreads
/// (powers of two: exact).
#[derive(Debug, Clone, PartialEq)]
pub struct ScaledMixture {
    /// log weights (k), -infinity for weight 0.
    pub log_weights: Vec<f64>,
    /// Weights (k), summing to 1.
    pub weights: Vec<f64>,
    /// Means (k x d, row-major), in spreads from the centre.
    pub means: Vec<f64>,
    /// Covariances as stored by the structure, one or k of them, in spreads squared.
    pub stored: Vec<f64>,
    /// Structure, and whether pooled.
    pub shape: Shape,
    /// Number of columns.
    pub d: usize,
}

fn bad(component: Option<usize>, what: impl Into<String>, advice: &str) -> Error {
    let what = what.into();
    let what = if component.is_none() { format!("the mixture {what}") } else { what };
    Error::Mixture { what, component, advice: advice.to_owned() }
}

impl Mixture {
    /// Checks and takes a mixture.
    ///
    /// `weights` (k), `means` (k x d, row-major), `stored` the covariances as [`Structure`] stores them: k of them, or
    /// one where `shape.pooled`. Weights that sum to 1 only within 1e-9 are divided by their sum, covariances that are
    /// symmetric only within 1e-12 are made symmetric; numbers that are right already are kept to the bit.
    ///
    /// # Errors
    /// [`Error::Mixture`], naming the component and what to do: no or more than 65535 components, lengths that do not
    /// agree, values that are not finite, negative weights or weights that do not sum to 1, variances that are not
    /// positive, covariances that are not symmetric or not positive definite.
    pub fn new(mut weights: Vec<f64>, means: Vec<f64>, mut stored: Vec<f64>, d: usize, shape: Shape) -> Result<Self> {
        let k = weights.len();
        if k == 0 || k > MOST_COMPONENTS {
            return Err(bad(None, format!("has {k} components"), "give between 1 and 65535"));
        }
        if d == 0 {
            return Err(bad(None, "has no columns", "give at least one"));
        }
        let each = shape.structure.stored_len(d);
        let expected = each * shape.matrices(k);
        if means.len() != k * d || stored.len() != expected {
            return Err(bad(
                None,
                format!(
                    "has {} means and {} covariance numbers; {k} components of {d} columns need {} and {expected}",
                    means.len(),
                    stored.len(),
                    k * d
                ),
                "check the shapes of weights, means and covariances",
            ));
        }
        check_weights(&mut weights)?;
        for (place, value) in means.iter().enumerate() {
            if !value.is_finite() {
                return Err(bad(
                    Some(place / d),
                    format!("has mean {value} in column {}", place % d),
                    "give finite means",
                ));
            }
        }
        for (component, one) in stored.chunks_mut(each).enumerate() {
            let named = if shape.pooled { None } else { Some(component) };
            check_covariance(one, d, shape.structure, named)?;
        }
        Ok(Self { weights, means, stored, shape, d })
    }

    /// Number of components, k.
    #[must_use]
    pub fn components(&self) -> usize {
        self.weights.len()
    }

    /// Number of columns, d.
    #[must_use]
    pub fn dims(&self) -> usize {
        self.d
    }

    /// Structure of the covariances, and whether they are pooled.
    #[must_use]
    pub fn shape(&self) -> Shape {
        self.shape
    }

    /// Weights (k).
    #[must_use]
    pub fn weights(&self) -> &[f64] {
        &self.weights
    }

    /// Means (k x d, row-major).
    #[must_use]
    pub fn means(&self) -> &[f64] {
        &self.means
    }

    /// Covariances as the structure stores them: one where pooled, else k.
    #[must_use]
    pub fn stored(&self) -> &[f64] {
        &self.stored
    }

    /// Mean of component k (d).
    #[must_use]
    pub fn mean(&self, k: usize) -> &[f64] {
        &self.means[k * self.d..(k + 1) * self.d]
    }

    /// Covariance of component k, as stored.
    #[must_use]
    pub fn stored_of(&self, k: usize) -> &[f64] {
        stored_of(&self.stored, self.shape, self.d, k)
    }

    /// Covariance of component k (d x d, row-major).
    #[must_use]
    pub fn covariance(&self, k: usize) -> Vec<f64> {
        self.shape.structure.dense(self.stored_of(k), self.d)
    }

    /// Variance of column j in component k.
    #[must_use]
    pub fn variance(&self, k: usize, j: usize) -> f64 {
        self.shape.structure.variance(self.stored_of(k), self.d, j)
    }

    /// Free parameters: k - 1 weights, k d means and those of the covariances.
    #[must_use]
    pub fn free_parameters(&self) -> u64 {
        self.shape.free_parameters(self.components(), self.d)
    }

    /// The same mixture with component `order[i]` in place i.
    ///
    /// # Errors
    /// [`Error::Internal`] where `order` is not a permutation of the components.
    pub fn reorder(&self, order: &[usize]) -> Result<Self> {
        let k = self.components();
        let mut seen = vec![false; k];
        let fits = order.len() == k && order.iter().all(|&o| o < k && !std::mem::replace(&mut seen[o], true));
        if !fits {
            return Err(Error::Internal { what: format!("{order:?} is no order of {k} components") });
        }
        let mut stored = Vec::with_capacity(self.stored.len());
        if self.shape.pooled {
            stored.extend_from_slice(&self.stored);
        } else {
            order.iter().for_each(|&o| stored.extend_from_slice(self.stored_of(o)));
        }
        Ok(Self {
            weights: order.iter().map(|&o| self.weights[o]).collect(),
            means: order.iter().flat_map(|&o| self.mean(o).iter().copied()).collect(),
            stored,
            shape: self.shape,
            d: self.d,
        })
    }

    /// The same mixture in another shape: pooled by weight, reduced to the diagonal or to the mean variance; or, the
    /// other way, written out in a freer shape with the same densities.
    ///
    /// # Errors
    /// [`Error::Mixture`] where the result is out of the range of doubles.
    pub fn reshape(&self, shape: Shape) -> Result<Self> {
        if shape == self.shape {
            return Ok(self.clone());
        }
        let (k, d) = (self.components(), self.d);
        let convert = |one: &[f64]| match self.shape.structure {
            from if from == shape.structure => one.to_vec(),
            Structure::Full => shape.structure.from_full(one, d),
            from => {
                let variances: Vec<f64> = (0..d).map(|j| from.variance(one, d, j)).collect();
                shape.structure.from_diagonal(&variances)
            }
        };
        let mut stored = Vec::new();
        if shape.pooled && !self.shape.pooled {
            let mut pool = vec![0.0; self.shape.structure.stored_len(d)];
            for c in 0..k {
                for (sum, value) in pool.iter_mut().zip(self.stored_of(c)) {
                    *sum += self.weights[c] * value;
                }
            }
            stored = convert(&pool);
        } else {
            for c in 0..shape.matrices(k) {
                stored.extend(convert(self.stored_of(c)));
            }
        }
        Self::new(self.weights.clone(), self.means.clone(), stored, d, shape)
    }

    /// The mixture in the coordinates of `scaling`.
    ///
    /// A spherical mixture stays spherical only under one common spread ([`Scaling::common`]); under unequal spreads
    /// the very same density is returned with diagonal covariances.
    ///
    /// # Errors
    /// [`Error::Mixture`] where a scaled value is out of the range of doubles; [`Error::Internal`] where the numbers of
    /// columns differ.
    pub fn scaled(&self, scaling: &Scaling) -> Result<ScaledMixture> {
        let d = self.d;
        same_dims(d, scaling)?;
        if self.shape.structure == Structure::Spherical && !scaling.is_common() {
            let shape = Shape::new(Structure::Diagonal, self.shape.pooled);
            return self.reshape(shape)?.scaled(scaling);
        }
        let (centre, spread) = (scaling.centre(), scaling.spread());
        let inverse: Vec<f64> = spread.iter().map(|s| 1.0 / s).collect();
        let means: Vec<f64> =
            self.means.iter().enumerate().map(|(i, m)| (m - centre[i % d]) * inverse[i % d]).collect();
        let mut stored = self.stored.clone();
        let each = self.shape.structure.stored_len(d);
        for (component, one) in stored.chunks_mut(each).enumerate() {
            self.shape.structure.scale(one, &inverse);
            check_range(one, self.shape, d, component)?;
        }
        if let Some(place) = means.iter().position(|m| !m.is_finite()) {
            return Err(out_of_range(place / d));
        }
        Ok(ScaledMixture {
            log_weights: self.weights.iter().map(|w| natural_log(*w)).collect(),
            weights: self.weights.clone(),
            means,
            stored,
            shape: self.shape,
            d,
        })
    }

    /// The mixture in the columns' own units again, from the coordinates of `scaling`.
    ///
    /// A spherical mixture under unequal spreads becomes spherical with the mean of its variances.
    ///
    /// # Errors
    /// As [`Mixture::new`].
    pub fn from_scaled(scaled: &ScaledMixture, scaling: &Scaling) -> Result<Self> {
        let d = scaled.d;
        same_dims(d, scaling)?;
        let (centre, spread) = (scaling.centre(), scaling.spread());
        let means = scaled.means.iter().enumerate().map(|(i, m)| m * spread[i % d] + centre[i % d]).collect();
        let mut stored = scaled.stored.clone();
        for one in stored.chunks_mut(scaled.shape.structure.stored_len(d)) {
            scaled.shape.structure.scale(one, spread);
        }
        Self::new(scaled.weights.clone(), means, stored, d, scaled.shape)
    }
}

impl ScaledMixture {
    /// Number of components, k.
    #[must_use]
    pub fn components(&self) -> usize {
        self.weights.len()
    }

    /// Mean of component k (d), in spreads from the centre.
    #[must_use]
    pub fn mean(&self, k: usize) -> &[f64] {
        &self.means[k * self.d..(k + 1) * self.d]
    }

    /// Covariance of component k, as stored.
    #[must_use]
    pub fn stored_of(&self, k: usize) -> &[f64] {
        stored_of(&self.stored, self.shape, self.d, k)
    }

    /// Covariance of component k (d x d, row-major), in spreads squared.
    #[must_use]
    pub fn covariance(&self, k: usize) -> Vec<f64> {
        self.shape.structure.dense(self.stored_of(k), self.d)
    }
}

fn stored_of(stored: &[f64], shape: Shape, d: usize, k: usize) -> &[f64] {
    let each = shape.structure.stored_len(d);
    let place = if shape.pooled { 0 } else { k };
    &stored[place * each..(place + 1) * each]
}

fn same_dims(d: usize, scaling: &Scaling) -> Result<()> {
    if d == scaling.dims() {
        return Ok(());
    }
    Err(Error::Internal { what: format!("a mixture of {d} columns met a scaling of {}", scaling.dims()) })
}

fn check_range(one: &[f64], shape: Shape, d: usize, component: usize) -> Result<()> {
    let fits = one.iter().all(|v| v.is_finite());
    if fits && (0..d).all(|j| shape.structure.variance(one, d, j) > 0.0) {
        return Ok(());
    }
    Err(out_of_range(component))
}

fn out_of_range(component: usize) -> Error {
    bad(
        Some(component),
        "is out of range once its columns are centred and scaled",
        "check that the mixture and the rows are in the same units",
    )
}

fn check_weights(weights: &mut [f64]) -> Result<()> {
    for (component, weight) in weights.iter().enumerate() {
        if !(*weight >= 0.0 && weight.is_finite()) {
            return Err(bad(
                Some(component),
                format!("has weight {weight}"),
                "give finite weights that are not negative and sum to 1",
            ));
        }
    }
    let sum: f64 = weights.iter().sum();
    if (sum - 1.0).abs() > 1e-9 {
        return Err(bad(None, format!("has weights that sum to {sum}"), "divide the weights by their sum"));
    }
    if (sum - 1.0).abs() > 1e-15 * weights.len() as f64 {
        weights.iter_mut().for_each(|w| *w /= sum);
    }
    Ok(())
}

fn check_covariance(one: &mut [f64], d: usize, structure: Structure, component: Option<usize>) -> Result<()> {
    if let Some(value) = one.iter().find(|v| !v.is_finite()) {
        return Err(bad(component, format!("has {value} in its covariance"), "give finite covariances"));
    }
    for j in 0..d {
        let variance = structure.variance(one, d, j);
        if variance <= 0.0 {
            return Err(bad(
                component,
                format!("has variance {variance} in column {j}"),
                "give positive variances; leave constant columns out",
            ));
        }
    }
    if structure == Structure::Full {
        for i in 0..d {
            for j in 0..i {
                let (lower, upper) = (one[i * d + j], one[j * d + i]);
                if lower == upper {
                    continue;
                }
                let size = one[i * d + i].sqrt() * one[j * d + j].sqrt();
                if (lower - upper).abs() > 1e-12 * size {
                    return Err(bad(
                        component,
                        format!("has {lower} for columns {i}, {j} of its covariance but {upper} for {j}, {i}"),
                        "make the covariance symmetric: (A + A') / 2",
                    ));
                }
                let middle = 0.5 * lower + 0.5 * upper;
                one[i * d + j] = middle;
                one[j * d + i] = middle;
            }
        }
    }
    structure.check(one, d).map_err(|pivot| {
        bad(
            component,
            format!("has a covariance that is not positive definite (at column {pivot})"),
            "columns may repeat or be sums of others: leave one out, or use structure \"diagonal\"",
        )
    })
}

#[cfg(test)]
mod tests;
