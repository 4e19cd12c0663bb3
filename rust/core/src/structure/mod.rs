//! Structures of a covariance: one file a structure, each with the same verbs.
//!
//! | verb | meaning |
//! |---|---|
//! | `stored_len` | numbers kept for one covariance |
//! | `free_parameters` | free numbers of one covariance |
//! | `from_full`, `from_diagonal` | reduce a full covariance, or only its diagonal, by maximum likelihood |
//! | `dense` | write out the d x d matrix |
//! | `variance` | one element of the diagonal |
//! | `scale` | multiply element (i, j) by f_i f_j |
//! | `check` | positive definite? |
//! | `floor` | lift eigenvalues below a floor |
//! | `log_determinant` | log of the determinant |
//!
//! A stored covariance is a slice of `stored_len(d)` numbers: the d x d matrix (`full`), its diagonal (`diagonal`) or
//! one variance (`spherical`). Sources: Celeux & Govaert (1995) for the maximum likelihood reductions; McLachlan & Peel
//! (2000).

mod diagonal;
mod full;
mod spherical;

use crate::error::{Error, Result};

/// What a covariance may look like.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash)]
pub enum Structure {
    /// Any symmetric positive definite matrix.
    Full,
    /// A variance for every column, no correlations.
    Diagonal,
    /// One variance for all columns, in their own units.
    Spherical,
}

/// A structure, and whether all components share one covariance.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash)]
pub struct Shape {
    /// Structure of each covariance.
    pub structure: Structure,
    /// Whether one covariance serves all components.
    pub pooled: bool,
}

impl Shape {
    /// A shape of `structure`, pooled or not.
    #[must_use]
    pub const fn new(structure: Structure, pooled: bool) -> Self {
        Self { structure, pooled }
    }

    /// Number of covariances stored for k components.
    #[must_use]
    pub const fn matrices(self, components: usize) -> usize {
        if self.pooled { 1 } else { components }
    }

    /// Free parameters of a mixture: k - 1 weights, k d means, and the covariances.
    #[must_use]
    pub fn free_parameters(self, components: usize, d: usize) -> u64 {
        let (k, wide) = (components as u64, d as u64);
        k.saturating_sub(1) + k * wide + self.matrices(components) as u64 * self.structure.free_parameters(d)
    }
}

/// Calls the same verb of the module that belongs to the structure.
macro_rules! dispatch {
    ($structure:expr, $verb:ident ( $($argument:expr),* )) => {
        match $structure {
            Structure::Full => full::$verb($($argument),*),
            Structure::Diagonal => diagonal::$verb($($argument),*),
            Structure::Spherical => spherical::$verb($($argument),*),
        }
    };
}

impl Structure {
    /// All structures, the freest first.
    pub const ALL: [Self; 3] = [Self::Full, Self::Diagonal, Self::Spherical];

    /// Its name in options and files.
    #[must_use]
    pub const fn name(self) -> &'static str {
        match self {
            Self::Full => "full",
            Self::Diagonal => "diagonal",
            Self::Spherical => "spherical",
        }
    }

    /// The structure of this name.
    ///
    /// # Errors
    /// [`Error::Option`] for any other text.
    pub fn parse(name: &str) -> Result<Self> {
        Self::ALL.into_iter().find(|s| s.name() == name).ok_or_else(|| Error::Option {
            option: "structure".to_owned(),
            found: format!("\"{name}\""),
            advice: "choose \"full\", \"diagonal\" or \"spherical\"".to_owned(),
        })
    }

    /// Numbers stored for one covariance of d columns.
    #[must_use]
    pub fn stored_len(self, d: usize) -> usize {
        dispatch!(self, stored_len(d))
    }

    /// Free parameters of one covariance of d columns.
    #[must_use]
    pub fn free_parameters(self, d: usize) -> u64 {
        dispatch!(self, free_parameters(d))
    }

    /// Maximum likelihood reduction of a dense d x d covariance.
    #[must_use]
    pub fn from_full(self, dense: &[f64], d: usize) -> Vec<f64> {
        dispatch!(self, from_full(dense, d))
    }

    /// Maximum likelihood reduction of a diagonal (d variances).
    #[must_use]
    pub fn from_diagonal(self, variances: &[f64]) -> Vec<f64> {
        dispatch!(self, from_diagonal(variances))
    }

    /// The d x d matrix, row-major.
    #[must_use]
    pub fn dense(self, stored: &[f64], d: usize) -> Vec<f64> {
        dispatch!(self, dense(stored, d))
    }

    /// Variance of column j.
    #[must_use]
    pub fn variance(self, stored: &[f64], d: usize, j: usize) -> f64 {
        dispatch!(self, variance(stored, d, j))
    }

    /// Multiplies element (i, j) by f_i f_j, in two multiplications; exact for powers of two. A spherical variance is
    /// multiplied by the mean of the f_j squared, which is the reduction of the scaled matrix.
    pub fn scale(self, stored: &mut [f64], factors: &[f64]) {
        dispatch!(self, scale(stored, factors));
    }

    /// Whether the covariance is positive definite; `Err(pivot)` names the first column (or direction) where it is not.
    ///
    /// # Errors
    /// The pivot, as a plain number.
    pub fn check(self, stored: &[f64], d: usize) -> std::result::Result<(), usize> {
        dispatch!(self, check(stored, d))
    }

    /// Lifts every eigenvalue below `floor` to `floor`; tells whether there was one. A matrix with all eigenvalues
    /// above is left as it is to the bit. This is the exact maximiser under the bound, since the bound does not depend
    /// on a basis.
    pub fn floor(self, stored: &mut [f64], d: usize, floor: f64) -> bool {
        dispatch!(self, floor(stored, d, floor))
    }

    /// log determinant in nats; NaN where the covariance is not positive definite.
    #[must_use]
    pub fn log_determinant(self, stored: &[f64], d: usize) -> f64 {
        dispatch!(self, log_determinant(stored, d))
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::linalg::testing::positive_definite;

    #[test]
    fn names() {
        for structure in Structure::ALL {
            assert_eq!(Structure::parse(structure.name()), Ok(structure));
        }
        assert!(matches!(Structure::parse("tied"), Err(Error::Option { .. })));
    }

    #[test]
    fn parameter_counts() {
        // Order: full, pooled full, diagonal, pooled diagonal, spherical, pooled spherical; counted by hand.
        let table: [(usize, usize, [u64; 6]); 4] = [
            (3, 4, [44, 24, 26, 18, 17, 15]),
            (5, 10, [329, 109, 104, 64, 59, 55]),
            (10, 50, [13259, 1784, 1009, 559, 519, 510]),
            (2, 1, [5, 4, 5, 4, 5, 4]),
        ];
        for (k, d, expected) in table {
            let mut found = Vec::new();
            for structure in Structure::ALL {
                for pooled in [false, true] {
                    found.push(Shape::new(structure, pooled).free_parameters(k, d));
                }
            }
            assert_eq!(found, expected);
        }
    }

    #[test]
    fn verbs_agree_with_the_dense_matrix() {
        for d in 1..=33 {
            let a = positive_definite(d, 2, 1e-3);
            for structure in Structure::ALL {
                let stored = structure.from_full(&a, d);
                assert_eq!(stored.len(), structure.stored_len(d));
                let dense = structure.dense(&stored, d);
                assert_eq!(structure.check(&stored, d), Ok(()));
                let whole = Structure::Full.log_determinant(&dense, d);
                let found = structure.log_determinant(&stored, d);
                assert!((whole - found).abs() <= 1e-12 * whole.abs().max(1.0));
                for j in 0..d {
                    assert_eq!(structure.variance(&stored, d, j), dense[j * d + j]);
                }
                if structure != Structure::Full {
                    let variances: Vec<f64> = (0..d).map(|j| a[j * d + j]).collect();
                    assert_eq!(structure.from_diagonal(&variances), stored);
                }
                // the trace is kept by every reduction
                let trace = |m: &[f64]| (0..d).map(|j| m[j * d + j]).sum::<f64>();
                assert!((trace(&dense) / trace(&a) - 1.0).abs() < 1e-13);
                let mut scaled = stored.clone();
                structure.scale(&mut scaled, &vec![4.0; d]);
                assert!(scaled.iter().zip(&stored).all(|(x, y)| *x == 16.0 * y));
            }
        }
    }

    #[test]
    fn floors() {
        for d in 1..=33 {
            for structure in Structure::ALL {
                let mut stored = structure.from_diagonal(&(0..d).map(|j| 1e-12 + j as f64).collect::<Vec<_>>());
                let before = stored.clone();
                assert!(!structure.floor(&mut stored, d, 0.0));
                assert_eq!(stored, before);
                let singular = structure == Structure::Full && d > 1;
                if singular {
                    // rank one: u u'
                    for i in 0..d {
                        for j in 0..d {
                            stored[i * d + j] = 1.0;
                        }
                    }
                } else if structure == Structure::Spherical {
                    stored[0] = 1e-12;
                }
                assert!(structure.floor(&mut stored, d, 1e-8), "{d} {structure:?}");
                assert_eq!(structure.check(&stored, d), Ok(()));
                let (values, _) = crate::linalg::eigen_symmetric(&structure.dense(&stored, d), d);
                assert!(values[0] > 0.9e-8, "{d} {structure:?} {}", values[0]);
                if singular {
                    assert!((values[d - 1] - d as f64).abs() < 1e-9 * d as f64);
                }
                structure.floor(&mut stored, d, 1e-9);
                assert!(!structure.floor(&mut stored, d, 1e-9));
            }
        }
    }

    #[test]
    fn huge_spread_of_eigenvalues_still_ends_positive_definite() {
        let d = 5;
        let mut a = vec![0.0; d * d];
        for i in 0..d {
            for j in 0..d {
                a[i * d + j] = 1e12 * (1.0 + i as f64) * (1.0 + j as f64);
            }
        }
        assert!(Structure::Full.floor(&mut a, d, 1e-8));
        assert_eq!(Structure::Full.check(&a, d), Ok(()));
    }
}
