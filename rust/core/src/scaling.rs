//! Centre and spread of the columns: the coordinates in which all the mathematics is done.
//!
//! A row x becomes (x - centre) / spread. Spreads are powers of two, so the division is exact, and a covariance goes to
//! scaled coordinates and back without losing a bit. Floors and shifts are measured in spreads.

use crate::error::{Error, Result};

/// Least spread that a column may have.
pub const LEAST_SPREAD: f64 = 1e-140;
/// Largest spread that a column may have.
pub const MOST_SPREAD: f64 = 1e140;

/// Centre and spread of every column, both of length d, in the columns' own units.
#[derive(Debug, Clone, PartialEq)]
pub struct Scaling {
    centre: Vec<f64>,
    spread: Vec<f64>,
}

impl Scaling {
    /// Takes centres and spreads as they are, each spread rounded to the nearest power of two (by ratio).
    ///
    /// # Errors
    /// [`Error::Column`] where a centre is not finite or a spread lies outside 1e-140..1e140; [`Error::Internal`] where
    /// the lengths differ.
    pub fn new(centre: Vec<f64>, spread: Vec<f64>) -> Result<Self> {
        if centre.len() != spread.len() {
            return Err(Error::Internal {
                what: format!("a scaling has {} centres but {} spreads", centre.len(), spread.len()),
            });
        }
        for (column, (&c, &s)) in centre.iter().zip(&spread).enumerate() {
            if !c.is_finite() {
                return Err(Error::Column {
                    column,
                    what: format!("its centre is {c}"),
                    advice: "give a finite centre".to_owned(),
                });
            }
            if !(LEAST_SPREAD..=MOST_SPREAD).contains(&s) {
                return Err(Error::Column {
                    column,
                    what: format!("its spread is {s:e}, outside 1e-140 to 1e140"),
                    advice: "express the column in another unit, or leave it out".to_owned(),
                });
            }
        }
        let spread = spread.into_iter().map(nearest_power_of_two).collect();
        Ok(Self { centre, spread })
    }

    /// The scaling that changes nothing: centre 0, spread 1 for `d` columns.
    #[must_use]
    pub fn identity(d: usize) -> Self {
        Self { centre: vec![0.0; d], spread: vec![1.0; d] }
    }

    /// Robust centre and spread from a sample.
    ///
    /// `values` (n x d, raw units), `weights` (n), `least` and `most` (d) the ends of each column over all rows. The
    /// centre is the weighted median. The spread is the quartile range / 1.349, which is the standard deviation of a
    /// normal column; where that is zero, wider ranges are tried (5..95 %, 1..99 %, 0.1..99.9 %), then an eighth of
    /// least..most; a constant column gets a millionth of its magnitude, or 1 where it is zero. Values that are not
    /// finite and weights that are not positive are passed over. Cost: one sort per column.
    ///
    /// # Errors
    /// [`Error::Column`] where a spread lies outside 1e-140..1e140; [`Error::Internal`] where lengths do not agree.
    pub fn robust(values: &[f64], weights: &[f64], least: &[f64], most: &[f64]) -> Result<Self> {
        let (n, d) = (weights.len(), least.len());
        if most.len() != d || values.len() != n * d {
            return Err(Error::Internal {
                what: format!("{} values do not make {n} rows of {d} columns", values.len()),
            });
        }
        let mut centre = Vec::with_capacity(d);
        let mut spread = Vec::with_capacity(d);
        let mut pairs: Vec<(f64, f64)> = Vec::with_capacity(n);
        for j in 0..d {
            pairs.clear();
            pairs.extend(
                (0..n)
                    .map(|i| (values[i * d + j], weights[i]))
                    .filter(|(x, w)| x.is_finite() && w.is_finite() && *w > 0.0),
            );
            pairs.sort_by(|a, b| a.0.total_cmp(&b.0));
            let (c, s) = column_scale(&pairs, least[j], most[j]);
            centre.push(c);
            spread.push(s);
        }
        Self::new(centre, spread)
    }

    /// Number of columns, d.
    #[must_use]
    pub fn dims(&self) -> usize {
        self.centre.len()
    }

    /// Centres (d), in the columns' units.
    #[must_use]
    pub fn centre(&self) -> &[f64] {
        &self.centre
    }

    /// Spreads (d), in the columns' units, each a power of two.
    #[must_use]
    pub fn spread(&self) -> &[f64] {
        &self.spread
    }

    /// The same centres with one spread for all columns: the power of two nearest to the root mean square spread.
    ///
    /// A spherical covariance has one variance in the columns' own units; only under a common spread is it spherical in
    /// scaled coordinates too.
    #[must_use]
    pub fn common(&self) -> Self {
        let top = self.spread.iter().fold(0.0f64, |m, &s| m.max(s));
        if top == 0.0 {
            return self.clone();
        }
        let mut sum = 0.0;
        for &s in &self.spread {
            sum += (s / top) * (s / top);
        }
        let one = nearest_power_of_two(top * (sum / self.spread.len() as f64).sqrt());
        Self { centre: self.centre.clone(), spread: vec![one; self.spread.len()] }
    }

    /// Whether all columns share one spread.
    #[must_use]
    pub fn is_common(&self) -> bool {
        self.spread.windows(2).all(|pair| pair[0] == pair[1])
    }
}

/// Centre and spread of one column from its sorted (value, weight) pairs.
fn column_scale(pairs: &[(f64, f64)], least: f64, most: f64) -> (f64, f64) {
    let total: f64 = pairs.iter().map(|p| p.1).sum();
    let centre = match quantile(pairs, total, 0.5) {
        Some(median) => median,
        None if least.is_finite() && most.is_finite() => 0.5 * least + 0.5 * most,
        None => 0.0,
    };
    for (share, sigmas) in [(0.25, 1.349), (0.05, 3.29), (0.01, 4.65), (0.001, 6.18)] {
        if let (Some(low), Some(high)) = (quantile(pairs, total, share), quantile(pairs, total, 1.0 - share)) {
            // halved first: the ends may be 1e308 on either side of zero
            let half = 0.5 * high - 0.5 * low;
            if half > 0.0 {
                return (centre, half / (0.5 * sigmas));
            }
        }
    }
    let half = 0.5 * most - 0.5 * least;
    if half > 0.0 {
        return (centre, half / 4.0);
    }
    let magnitude = centre.abs() * 2f64.powi(-20);
    (centre, if centre == 0.0 { 1.0 } else { magnitude.max(2.0 * LEAST_SPREAD) })
}

/// The smallest value below or at which at least `share` of the weight lies; `None` without rows.
///
/// A row of weight 2 counts as the row twice. Just at a step (half the rows below) the mean of the two neighbours would
/// be usual; the lower one is taken so that the centre is always a value that occurs.
fn quantile(pairs: &[(f64, f64)], total: f64, share: f64) -> Option<f64> {
    let aim = share * total;
    let mut below = 0.0;
    for &(value, weight) in pairs {
        below += weight;
        if below >= aim {
            return Some(value);
        }
    }
    pairs.last().map(|p| p.0)
}

/// The power of two nearest to `x` by ratio; `x` must be a positive normal number.
#[must_use]
pub fn nearest_power_of_two(x: f64) -> f64 {
    let bits = x.to_bits();
    let power = f64::from_bits(bits & 0x7FF0_0000_0000_0000);
    if x / power >= std::f64::consts::SQRT_2 { power * 2.0 } else { power }
}

#[cfg(test)]
#[allow(clippy::unwrap_used)]
mod tests {
    use super::*;
    use crate::random::Stream;

    fn one_column(values: &[f64]) -> Result<Scaling> {
        let least = values.iter().copied().fold(f64::INFINITY, f64::min);
        let most = values.iter().copied().fold(f64::NEG_INFINITY, f64::max);
        Scaling::robust(values, &vec![1.0; values.len()], &[least], &[most])
    }

    #[test]
    fn powers_of_two() {
        for (x, p) in [(1.0, 1.0), (1.4, 1.0), (1.42, 2.0), (3.0, 4.0), (0.7, 0.5), (0.75, 1.0)] {
            assert_eq!(nearest_power_of_two(x), p);
        }
        for e in -465..=465 {
            assert_eq!(nearest_power_of_two(2f64.powi(e)), 2f64.powi(e));
        }
    }

    #[test]
    fn normal_sample_and_wild_rows() {
        let mut stream = Stream::new(4, 4);
        let mut values: Vec<f64> = (0..20_000).map(|_| 100.0 + 3.9 * stream.normal()).collect();
        let clean = one_column(&values).unwrap();
        assert!((clean.centre()[0] - 100.0).abs() < 0.2);
        assert_eq!(clean.spread()[0], 4.0);
        for value in values.iter_mut().take(20) {
            *value = 4e6;
        }
        let wild = one_column(&values).unwrap();
        assert_eq!(wild.spread(), clean.spread());
        assert!((wild.centre()[0] - clean.centre()[0]).abs() < 0.02);
    }

    #[test]
    fn tied_and_constant_columns() {
        let mut values = vec![0.0; 1000];
        values[..60].fill(10.0);
        assert!(one_column(&values).unwrap().spread()[0] > 1.0, "falls back to 5..95 %");
        values.fill(0.0);
        values[0] = 8.0;
        assert_eq!(one_column(&values).unwrap().spread()[0], 1.0, "falls back to least..most");
        assert_eq!(one_column(&[0.0; 10]).unwrap().spread()[0], 1.0);
        assert_eq!(one_column(&[1024.0; 10]).unwrap().spread()[0], 2f64.powi(-10));
        assert!(one_column(&[1e-200; 10]).unwrap().spread()[0] >= LEAST_SPREAD);
        assert!(one_column(&[]).is_ok());
    }

    #[test]
    fn extremes_are_refused_by_number() {
        assert!(matches!(one_column(&[-1.7e308, 0.0, 1.7e308, 1.0]), Err(Error::Column { column: 0, .. })));
        let values: Vec<f64> = (0..100).map(|i| f64::from(i) * 1e-143).collect();
        assert!(matches!(one_column(&values), Err(Error::Column { column: 0, .. })));
        for scale in [1e-138, 1e138] {
            let values: Vec<f64> = (0..100).map(|i| f64::from(i % 10) * scale).collect();
            assert!(one_column(&values).is_ok());
        }
        assert!(Scaling::new(vec![f64::NAN], vec![1.0]).is_err());
        assert!(Scaling::new(vec![0.0], vec![f64::NAN]).is_err());
        assert!(Scaling::new(vec![0.0], vec![]).is_err());
    }

    #[test]
    fn weights_count_rows() {
        let (values, weights) = ([1.0, 2.0, 3.0, 10.0], [1.0, 5.0, 2.0, 0.0]);
        let twice = [1.0, 2.0, 2.0, 2.0, 2.0, 2.0, 3.0, 3.0];
        let a = Scaling::robust(&values, &weights, &[1.0], &[3.0]).unwrap();
        let b = Scaling::robust(&twice, &[1.0; 8], &[1.0], &[3.0]).unwrap();
        assert_eq!(a, b);
        assert_eq!(a.centre()[0], 2.0);
    }

    #[test]
    fn one_spread_for_all() {
        let scaling = Scaling::new(vec![1.0, 2.0], vec![1.0, 1024.0]).unwrap();
        assert!(!scaling.is_common());
        assert_eq!(scaling.common().spread(), &[1024.0, 1024.0]);
        assert!(scaling.common().is_common());
    }
}
