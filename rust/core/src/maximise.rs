//! The M-step: from the sums of a pass to the mixture that they are best explained by.
//!
//! With N_k = sum w tau and moments about a reference a_k: mean = a_k + first / N_k, S_k = second / N_k - delta delta'
//! with delta = first / N_k, P = sum N_k S_k / W. The covariance is S_k or P, whole, its diagonal, or its trace / d:
//! exact maximisers of the expected log-likelihood for all six shapes (Dempster, Laird & Rubin 1977; Celeux & Govaert
//! 1995). A floor on the eigenvalues is met by clipping them, the exact maximiser under that bound.

use crate::error::{Error, Result};
use crate::linalg::{natural_log, packed, packed_len, unpack_symmetric};
use crate::mixture::{Mixture, ScaledMixture};
use crate::scaling::Scaling;
use crate::structure::{Shape, Structure};

/// A component with less than this share of all weight is removed: a thousand-millionth of a row in a million rows.
const LEAST_SHARE: f64 = 1e-15;

/// Sums of one pass over the rows, in scaled coordinates, for k components in d columns.
#[derive(Debug, Clone, PartialEq)]
pub struct Moments {
    /// Number of columns.
    pub d: usize,
    /// Whether `second` holds products of all pairs of columns, or squares only.
    pub shape_full: bool,
    /// N_k: sums of row weight times responsibility (k).
    pub weight: Vec<f64>,
    /// Sums of weight times responsibility times (x - about) (k x d).
    pub first: Vec<f64>,
    /// The same of (x - about)(x - about)': lower triangles packed by rows (k x d(d+1)/2); or squares only (k x d).
    pub second: Vec<f64>,
    /// The reference that each component's moments are taken about (k x d).
    pub about: Vec<f64>,
}

/// A new mixture in scaled coordinates, and what happened to the components.
#[derive(Debug, Clone, PartialEq)]
pub struct Maximised {
    /// The new mixture.
    pub mixture: ScaledMixture,
    /// Old positions of the components that stayed, in order.
    pub kept: Vec<usize>,
    /// New positions of the components whose covariance was lifted to the floor (all of them where it is pooled).
    pub floored: Vec<usize>,
    /// A sentence for each component that was removed.
    pub notes: Vec<String>,
}

/// A new mixture in the columns' own units; otherwise as [`Maximised`].
#[derive(Debug, Clone, PartialEq)]
pub struct Updated {
    /// The new mixture.
    pub mixture: Mixture,
    /// Old positions of the components that stayed, in order.
    pub kept: Vec<usize>,
    /// New positions of the components whose covariance was lifted to the floor (all of them where it is pooled).
    pub floored: Vec<usize>,
    /// A sentence for each component that was removed.
    pub notes: Vec<String>,
}

impl Moments {
    /// Number of components, k.
    #[must_use]
    pub fn components(&self) -> usize {
        self.weight.len()
    }

    /// Numbers in `second` for one component.
    #[must_use]
    pub fn second_len(&self) -> usize {
        if self.shape_full { packed_len(self.d) } else { self.d }
    }

    /// The same sums in coordinates where column j is multiplied by `ratio[j]` (d); exact for powers of two.
    #[must_use]
    pub fn rescaled(&self, ratio: &[f64]) -> Self {
        let d = self.d;
        let by_column = |values: &[f64]| -> Vec<f64> {
            values.iter().enumerate().map(|(place, value)| value * ratio[place % d]).collect()
        };
        let mut second = self.second.clone();
        for one in second.chunks_mut(self.second_len()) {
            if self.shape_full {
                for i in 0..d {
                    for j in 0..=i {
                        one[packed(i, j)] = one[packed(i, j)] * ratio[i] * ratio[j];
                    }
                }
            } else {
                for j in 0..d {
                    one[j] = one[j] * ratio[j] * ratio[j];
                }
            }
        }
        Self {
            d,
            shape_full: self.shape_full,
            weight: self.weight.clone(),
            first: by_column(&self.first),
            second,
            about: by_column(&self.about),
        }
    }

    fn check(&self, shape: Shape) -> Result<()> {
        let (k, d) = (self.components(), self.d);
        let fits = d > 0
            && self.first.len() == k * d
            && self.about.len() == k * d
            && self.second.len() == k * self.second_len()
            && (self.shape_full || shape.structure != Structure::Full);
        if fits {
            return Ok(());
        }
        Err(Error::Internal {
            what: format!("moments of {k} components in {d} columns do not serve structure {}", shape.structure.name()),
        })
    }

    /// Why component k cannot stay, if so.
    fn fault(&self, k: usize, total: f64) -> Option<&'static str> {
        let (d, each, weight) = (self.d, self.second_len(), self.weight[k]);
        let inverse = 1.0 / weight;
        let fine = |sums: &[f64]| sums.iter().all(|s| (s * inverse).is_finite());
        if weight.is_nan() || weight <= 1e-300 || weight < LEAST_SHARE * total {
            return Some("had no rows left");
        }
        let finite = weight.is_finite()
            && fine(&self.first[k * d..(k + 1) * d])
            && fine(&self.second[k * each..(k + 1) * each])
            && self.about[k * d..(k + 1) * d].iter().all(|a| a.is_finite());
        if finite { None } else { Some("had sums beyond the range of numbers") }
    }
}

/// The M-step in scaled coordinates.
///
/// `floor` is the least eigenvalue (in spreads squared) that a covariance may have, 0 for none. Components without rows
/// (less than 1e-15 of all weight) or with sums that are not finite are removed and the weights of the others divided
/// by their sum. Cost: k d^2, and k d^3 for full covariances.
///
/// # Errors
/// [`Error::NotPositiveDefinite`] (old position of the component) where a covariance is singular and `floor` is 0;
/// [`Error::Data`] where no component is left; [`Error::Internal`] where the sums do not fit the shape.
pub fn maximise(m: &Moments, shape: Shape, floor: f64) -> Result<Maximised> {
    m.check(shape)?;
    let d = m.d;
    let sum_of = |values: &mut dyn Iterator<Item = f64>| values.fold(0.0, |a, b| a + b);
    let all = sum_of(&mut m.weight.iter().copied().filter(|w| w.is_finite()));
    let mut kept = Vec::new();
    let mut notes = Vec::new();
    for k in 0..m.components() {
        match m.fault(k, all) {
            None => kept.push(k),
            Some(fault) => notes.push(format!("component at position {k} {fault} and was removed")),
        }
    }
    if kept.is_empty() {
        return Err(Error::Data {
            what: "no component has any rows".to_owned(),
            advice: "start from a mixture that overlaps the rows, in the same units".to_owned(),
        });
    }
    let total = sum_of(&mut kept.iter().map(|&k| m.weight[k]));
    let mut weights = Vec::with_capacity(kept.len());
    let mut means = Vec::with_capacity(kept.len() * d);
    let mut stored = Vec::new();
    let mut floored = Vec::new();
    let each = m.second_len();
    let mut pool = vec![0.0; each];
    let mut moment = vec![0.0; each];
    let mut delta = vec![0.0; d];
    for (place, &k) in kept.iter().enumerate() {
        let weight = m.weight[k];
        weights.push(weight / total);
        for j in 0..d {
            delta[j] = m.first[k * d + j] / weight;
            means.push(m.about[k * d + j] + delta[j]);
        }
        central_moment(m, k, &delta, &mut moment);
        if shape.pooled {
            let share = weight / total;
            pool.iter_mut().zip(&moment).for_each(|(p, s)| *p += share * s);
        } else {
            let (covariance, lifted) = finish(m, &moment, shape, floor, k)?;
            stored.extend(covariance);
            if lifted {
                floored.push(place);
            }
        }
    }
    if shape.pooled {
        let (covariance, lifted) = finish(m, &pool, shape, floor, kept[0])?;
        stored.extend(covariance);
        if lifted {
            floored.extend(0..kept.len());
        }
    }
    let log_weights = weights.iter().map(|w| natural_log(*w)).collect();
    Ok(Maximised { mixture: ScaledMixture { log_weights, weights, means, stored, shape, d }, kept, floored, notes })
}

/// The M-step from sums in the coordinates of `scaling` to a mixture in the columns' own units.
///
/// A spherical covariance has one variance in the columns' own units, so the sums are brought (exactly) to one common
/// spread first, which `floor` then refers to.
///
/// # Errors
/// As [`maximise`] and [`Mixture::new`].
pub fn maximise_in_units(m: &Moments, scaling: &Scaling, shape: Shape, floor: f64) -> Result<Updated> {
    if scaling.dims() != m.d {
        return Err(Error::Internal {
            what: format!("moments of {} columns met a scaling of {}", m.d, scaling.dims()),
        });
    }
    let (found, used) = if shape.structure == Structure::Spherical && !scaling.is_common() {
        let common = scaling.common();
        let ratio: Vec<f64> = scaling.spread().iter().zip(common.spread()).map(|(old, new)| old / new).collect();
        (maximise(&m.rescaled(&ratio), shape, floor)?, common)
    } else {
        (maximise(m, shape, floor)?, scaling.clone())
    };
    let mixture = Mixture::from_scaled(&found.mixture, &used)?;
    Ok(Updated { mixture, kept: found.kept, floored: found.floored, notes: found.notes })
}

/// Second moments of component k about its new mean, per unit of weight.
fn central_moment(m: &Moments, k: usize, delta: &[f64], moment: &mut [f64]) {
    let (d, each, weight) = (m.d, m.second_len(), m.weight[k]);
    let second = &m.second[k * each..(k + 1) * each];
    if m.shape_full {
        for i in 0..d {
            for j in 0..=i {
                moment[packed(i, j)] = second[packed(i, j)] / weight - delta[i] * delta[j];
            }
        }
    } else {
        for j in 0..d {
            moment[j] = second[j] / weight - delta[j] * delta[j];
        }
    }
}

/// Reduces a moment to the structure and sees to the floor; tells whether the floor was felt.
fn finish(m: &Moments, moment: &[f64], shape: Shape, floor: f64, component: usize) -> Result<(Vec<f64>, bool)> {
    let d = m.d;
    let mut covariance = if !m.shape_full {
        shape.structure.from_diagonal(moment)
    } else if shape.structure == Structure::Full {
        unpack_symmetric(moment, d)
    } else {
        let variances: Vec<f64> = (0..d).map(|j| moment[packed(j, j)]).collect();
        shape.structure.from_diagonal(&variances)
    };
    let lifted = shape.structure.floor(&mut covariance, d, floor);
    match shape.structure.check(&covariance, d) {
        Ok(()) => Ok((covariance, lifted)),
        Err(pivot) => Err(Error::NotPositiveDefinite { component, pivot }),
    }
}

#[cfg(test)]
#[allow(clippy::unwrap_used)]
mod tests {
    use super::*;
    use crate::random::Stream;

    const SHAPES: [Shape; 6] = [
        Shape::new(Structure::Full, false),
        Shape::new(Structure::Full, true),
        Shape::new(Structure::Diagonal, false),
        Shape::new(Structure::Diagonal, true),
        Shape::new(Structure::Spherical, false),
        Shape::new(Structure::Spherical, true),
    ];

    /// Rows, row weights and responsibilities made up at random.
    struct Case {
        rows: Vec<f64>,
        weights: Vec<f64>,
        tau: Vec<f64>,
        k: usize,
        d: usize,
    }

    fn case(n: usize, k: usize, d: usize, seed: u64) -> Case {
        let mut stream = Stream::new(seed, d as u64);
        let rows = (0..n * d).map(|i| stream.normal() * (1.0 + (i % d) as f64)).collect();
        let weights = (0..n).map(|_| stream.uniform() * 3.0).collect();
        let mut tau: Vec<f64> = (0..n * k).map(|_| stream.uniform()).collect();
        for row in tau.chunks_mut(k) {
            let sum: f64 = row.iter().sum();
            row.iter_mut().for_each(|t| *t /= sum);
        }
        Case { rows, weights, tau, k, d }
    }

    fn moments(c: &Case, full: bool, about: f64) -> Moments {
        let (k, d) = (c.k, c.d);
        let each = if full { packed_len(d) } else { d };
        let mut m = Moments {
            d,
            shape_full: full,
            weight: vec![0.0; k],
            first: vec![0.0; k * d],
            second: vec![0.0; k * each],
            about: vec![about; k * d],
        };
        for (i, row) in c.rows.chunks(d).enumerate() {
            let y: Vec<f64> = row.iter().map(|x| x - about).collect();
            for a in 0..k {
                let r = c.weights[i] * c.tau[i * k + a];
                m.weight[a] += r;
                for p in 0..d {
                    m.first[a * d + p] += r * y[p];
                    if full {
                        for q in 0..=p {
                            m.second[a * each + packed(p, q)] += r * y[p] * y[q];
                        }
                    } else {
                        m.second[a * each + p] += r * y[p] * y[p];
                    }
                }
            }
        }
        m
    }

    #[test]
    fn invariants_hold_for_every_shape() {
        for d in [1, 2, 3, 7] {
            let c = case(300, 3, d, 8);
            let w: f64 = c.weights.iter().sum();
            let mean: Vec<f64> =
                (0..d).map(|j| c.rows.chunks(d).zip(&c.weights).map(|(x, w)| w * x[j]).sum::<f64>() / w).collect();
            let covariance = |p: usize, q: usize| {
                c.rows.chunks(d).zip(&c.weights).map(|(x, w)| w * (x[p] - mean[p]) * (x[q] - mean[q])).sum::<f64>() / w
            };
            for shape in SHAPES {
                for full in [true, false] {
                    if !full && shape.structure == Structure::Full {
                        continue;
                    }
                    let found = maximise(&moments(&c, full, 0.5), shape, 0.0).unwrap();
                    assert_eq!(found.kept, vec![0, 1, 2]);
                    assert!(found.floored.is_empty() && found.notes.is_empty());
                    let new = &found.mixture;
                    let mut total = vec![0.0; d * d];
                    let mut centre = vec![0.0; d];
                    for a in 0..3 {
                        let (dense, mu) = (new.covariance(a), new.mean(a));
                        for p in 0..d {
                            centre[p] += new.weights[a] * mu[p];
                            for q in 0..d {
                                total[p * d + q] +=
                                    new.weights[a] * (dense[p * d + q] + (mu[p] - mean[p]) * (mu[q] - mean[q]));
                            }
                        }
                    }
                    for p in 0..d {
                        assert!((centre[p] - mean[p]).abs() < 1e-13);
                    }
                    match shape.structure {
                        Structure::Full => {
                            for p in 0..d {
                                for q in 0..d {
                                    assert!((total[p * d + q] - covariance(p, q)).abs() < 1e-11);
                                }
                            }
                        }
                        Structure::Diagonal => {
                            for p in 0..d {
                                assert!((total[p * d + p] - covariance(p, p)).abs() < 1e-11);
                            }
                        }
                        Structure::Spherical => {
                            let a: f64 = (0..d).map(|p| total[p * d + p]).sum();
                            let b: f64 = (0..d).map(|p| covariance(p, p)).sum();
                            assert!((a - b).abs() < 1e-10);
                        }
                    }
                }
            }
        }
    }

    #[test]
    fn reference_and_row_weights_do_not_matter() {
        let mut c = case(200, 2, 3, 5);
        for shape in SHAPES {
            let a = maximise(&moments(&c, true, 0.0), shape, 1e-8).unwrap().mixture;
            let b = maximise(&moments(&c, true, 2.0), shape, 1e-8).unwrap().mixture;
            let pairs = a.means.iter().zip(&b.means).chain(a.stored.iter().zip(&b.stored));
            assert!(pairs.into_iter().all(|(x, y)| (x - y).abs() < 1e-12));
        }
        let before = maximise(&moments(&c, true, 0.0), SHAPES[0], 0.0).unwrap().mixture;
        c.weights.iter_mut().for_each(|w| *w *= 1e-40);
        let after = maximise(&moments(&c, true, 0.0), SHAPES[0], 0.0).unwrap().mixture;
        assert!(before.stored.iter().zip(&after.stored).all(|(x, y)| (x - y).abs() < 1e-12));
    }

    #[test]
    fn bad_components_are_removed() {
        let c = case(100, 3, 2, 6);
        let mut m = moments(&c, true, 0.0);
        m.weight[1] = 0.0;
        let found = maximise(&m, SHAPES[0], 1e-8).unwrap();
        assert_eq!(found.kept, vec![0, 2]);
        assert_eq!(found.notes, vec!["component at position 1 had no rows left and was removed"]);
        assert!((found.mixture.weights.iter().sum::<f64>() - 1.0).abs() < 1e-15);
        m.second[0] = f64::INFINITY;
        let found = maximise(&m, SHAPES[1], 1e-8).unwrap();
        assert_eq!(found.kept, vec![2]);
        m.weight[2] = f64::NAN;
        assert!(matches!(maximise(&m, SHAPES[0], 1e-8), Err(Error::Data { .. })));
        assert!(matches!(maximise(&moments(&c, false, 0.0), SHAPES[0], 0.0), Err(Error::Internal { .. })));
    }

    #[test]
    fn singular_covariances_are_floored_or_named() {
        let mut c = case(100, 2, 3, 7);
        for row in c.rows.chunks_mut(3) {
            row[2] = row[0] + row[1];
        }
        let m = moments(&c, true, 0.0);
        for shape in [SHAPES[0], SHAPES[1]] {
            let found = maximise(&m, shape, 1e-6).unwrap();
            assert_eq!(found.floored, vec![0, 1]);
            for a in 0..2 {
                let (values, _) = crate::linalg::eigen_symmetric(&found.mixture.covariance(a), 3);
                assert!((values[0] / 1e-6 - 1.0).abs() < 1e-6, "{values:?}");
            }
        }
        c.rows.chunks_mut(3).for_each(|row| row[1] = 4.0);
        let m = moments(&c, true, 4.0);
        let expected = Err(Error::NotPositiveDefinite { component: 0, pivot: 1 });
        assert_eq!(maximise(&m, SHAPES[0], 0.0), expected);
        assert_eq!(maximise(&m, SHAPES[2], 0.0), expected);
        assert!(maximise(&m, SHAPES[4], 0.0).is_ok());
        assert_eq!(maximise(&m, SHAPES[2], 1e-8).unwrap().mixture.stored[1], 1e-8);
    }

    #[test]
    fn spherical_in_the_columns_own_units() {
        let c = case(200, 2, 3, 9);
        let scaling = Scaling::new(vec![10.0, 20.0, 30.0], vec![1.0, 8.0, 0.25]).unwrap();
        for shape in SHAPES {
            let found = maximise_in_units(&moments(&c, true, 0.0), &scaling, shape, 0.0).unwrap();
            let mut raw = case(200, 2, 3, 9);
            for (place, x) in raw.rows.iter_mut().enumerate() {
                *x = *x * scaling.spread()[place % 3] + scaling.centre()[place % 3];
            }
            let plain = maximise_in_units(&moments(&raw, true, 15.0), &Scaling::identity(3), shape, 0.0).unwrap();
            let pairs = found.mixture.means().iter().zip(plain.mixture.means());
            let both = pairs.chain(found.mixture.stored().iter().zip(plain.mixture.stored()));
            assert!(both.into_iter().all(|(x, y)| (x - y).abs() < 1e-11 * y.abs().max(1.0)), "{shape:?}");
        }
    }
}
