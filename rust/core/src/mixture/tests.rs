#![allow(clippy::unwrap_used)]

use super::*;
use crate::linalg::testing::positive_definite;
use crate::random::Stream;

/// A mixture of k components in d columns with columns of very different units.
fn made(k: usize, d: usize, shape: Shape, units: f64) -> Mixture {
    let mut stream = Stream::new(k as u64, d as u64);
    let means = (0..k * d).map(|_| units * stream.normal()).collect();
    let stored = (0..shape.matrices(k))
        .flat_map(|c| shape.structure.from_full(&positive_definite(d, c as u64, units), d))
        .collect();
    let mut weights: Vec<f64> = (0..k).map(|_| stream.uniform()).collect();
    let sum: f64 = weights.iter().sum();
    weights.iter_mut().for_each(|w| *w /= sum);
    Mixture::new(weights, means, stored, d, shape).unwrap()
}

fn shapes() -> Vec<Shape> {
    Structure::ALL.iter().flat_map(|&s| [Shape::new(s, false), Shape::new(s, true)]).collect()
}

fn one(weights: &[f64], means: &[f64], stored: &[f64], d: usize, structure: Structure) -> Result<Mixture> {
    Mixture::new(weights.to_vec(), means.to_vec(), stored.to_vec(), d, Shape::new(structure, false))
}

#[test]
fn taking_a_mixture_apart_and_together_changes_no_bit() {
    for shape in shapes() {
        for d in [1, 2, 5, 16] {
            for units in [1e-120, 1.0, 1e120] {
                let m = made(4, d, shape, units);
                let (w, means, s) = (m.weights().to_vec(), m.means().to_vec(), m.stored().to_vec());
                assert_eq!(Mixture::new(w, means, s, d, shape).unwrap(), m);
            }
        }
    }
}

#[test]
fn scaling_is_exact_for_covariances_and_for_means_about_zero() {
    for shape in shapes() {
        let d = 4;
        let m = made(3, d, shape, 1.0);
        let spread = vec![2f64.powi(-100), 8.0, 2f64.powi(60), 1.0];
        let spherical = shape.structure == Structure::Spherical;
        let spread = if spherical { vec![2f64.powi(-100); d] } else { spread };
        let scaling = Scaling::new(vec![0.0; d], spread.clone()).unwrap();
        let scaled = m.scaled(&scaling).unwrap();
        assert_eq!(scaled.shape, shape);
        assert_eq!(Mixture::from_scaled(&scaled, &scaling).unwrap(), m);
        for k in 0..3 {
            let (raw, new) = (m.covariance(k), scaled.covariance(k));
            for i in 0..d {
                for j in 0..d {
                    assert_eq!(new[i * d + j], raw[i * d + j] / spread[i] / spread[j]);
                }
                assert_eq!(scaled.mean(k)[i], m.mean(k)[i] / spread[i]);
                assert_eq!(m.variance(k, i), raw[i * d + i]);
            }
            assert!((scaled.log_weights[k] - m.weights()[k].ln()).abs() < 1e-15);
        }
    }
}

#[test]
fn spherical_under_unequal_spreads_keeps_its_density() {
    for pooled in [false, true] {
        let m = made(2, 3, Shape::new(Structure::Spherical, pooled), 1.0);
        let scaling = Scaling::new(vec![1.0, 2.0, 3.0], vec![0.5, 1.0, 16.0]).unwrap();
        let scaled = m.scaled(&scaling).unwrap();
        assert_eq!(scaled.shape, Shape::new(Structure::Diagonal, pooled));
        assert_eq!(scaled.stored_of(1)[2], m.variance(1, 2) / 256.0);
        let back = Mixture::from_scaled(&scaled, &scaling).unwrap();
        assert_eq!(back.covariance(0), m.covariance(0));
    }
}

#[test]
fn values_out_of_range_are_refused_not_returned() {
    let m = one(&[1.0], &[1e300], &[1.0], 1, Structure::Full).unwrap();
    let scaling = Scaling::new(vec![0.0], vec![1e-100]).unwrap();
    assert!(matches!(m.scaled(&scaling), Err(Error::Mixture { component: Some(0), .. })));
    let m = one(&[1.0], &[0.0], &[1e-100], 1, Structure::Diagonal).unwrap();
    let scaling = Scaling::new(vec![0.0], vec![1e139]).unwrap();
    assert!(matches!(m.scaled(&scaling), Err(Error::Mixture { component: Some(0), .. })));
    assert!(matches!(m.scaled(&Scaling::identity(2)), Err(Error::Internal { .. })));
}

#[test]
fn errors_name_the_component() {
    let at = |result: Result<Mixture>| match result {
        Err(Error::Mixture { component, what, advice }) => {
            assert!(!what.is_empty() && !advice.is_empty());
            component
        }
        other => panic!("{other:?}"),
    };
    let s = Structure::Diagonal;
    assert_eq!(at(one(&[], &[], &[], 1, s)), None);
    assert_eq!(at(one(&[1.0], &[], &[], 0, s)), None);
    assert_eq!(at(one(&[1.0], &[0.0, 1.0], &[1.0], 1, s)), None);
    assert_eq!(at(one(&[1.0], &[0.0], &[1.0, 1.0], 1, s)), None);
    assert_eq!(at(one(&[0.5, 0.6], &[0.0, 1.0], &[1.0, 1.0], 1, s)), None);
    assert_eq!(at(one(&[1.5, -0.5], &[0.0, 1.0], &[1.0, 1.0], 1, s)), Some(1));
    assert_eq!(at(one(&[0.5, f64::NAN], &[0.0, 1.0], &[1.0, 1.0], 1, s)), Some(1));
    assert_eq!(at(one(&[0.5, 0.5], &[0.0, f64::INFINITY], &[1.0, 1.0], 1, s)), Some(1));
    assert_eq!(at(one(&[0.5, 0.5], &[0.0, 1.0], &[1.0, 0.0], 1, s)), Some(1));
    assert_eq!(at(one(&[0.5, 0.5], &[0.0, 1.0], &[f64::NAN, 1.0], 1, s)), Some(0));
    let full = Structure::Full;
    assert_eq!(at(one(&[1.0], &[0.0, 0.0], &[1.0, 0.5, 0.4, 1.0], 2, full)), Some(0));
    assert_eq!(at(one(&[1.0], &[0.0, 0.0], &[1.0, 1.0, 1.0, 1.0], 2, full)), Some(0));
    assert_eq!(at(one(&[1.0], &[0.0, 0.0], &[1.0, 2.0, 2.0, 1.0], 2, full)), Some(0));
    let many = vec![1.0 / 65_536.0; 65_536];
    assert_eq!(at(one(&many, &vec![0.0; 65_536], &vec![1.0; 65_536], 1, s)), None);
}

#[test]
fn nearly_right_numbers_are_put_right() {
    let m = one(&[0.5, 0.5 + 1e-10], &[0.0, 1.0], &[1.0, 1.0], 1, Structure::Diagonal).unwrap();
    assert!((m.weights().iter().sum::<f64>() - 1.0).abs() < 1e-15);
    let m = one(&[1.0], &[0.0, 0.0], &[1.0, 0.5, 0.5 + 1e-14, 1.0], 2, Structure::Full).unwrap();
    assert_eq!(m.stored()[1], m.stored()[2]);
    let m = one(&[1.0, 0.0], &[0.0, 1.0], &[1.0, 1.0], 1, Structure::Diagonal).unwrap();
    assert_eq!(m.scaled(&Scaling::identity(1)).unwrap().log_weights[1], f64::NEG_INFINITY);
}

#[test]
fn reorder_permutes_everything() {
    for shape in shapes() {
        let m = made(4, 3, shape, 1.0);
        let order = [2, 0, 3, 1];
        let new = m.reorder(&order).unwrap();
        for (place, &old) in order.iter().enumerate() {
            assert_eq!(new.weights()[place], m.weights()[old]);
            assert_eq!(new.mean(place), m.mean(old));
            assert_eq!(new.covariance(place), m.covariance(old));
        }
        assert_eq!(new.reorder(&[1, 3, 0, 2]).unwrap(), m);
        for wrong in [&[0, 1, 2][..], &[0, 1, 2, 2], &[0, 1, 2, 4]] {
            assert!(matches!(m.reorder(wrong), Err(Error::Internal { .. })));
        }
    }
}

#[test]
fn reshape_reduces_and_widens() {
    for from in shapes() {
        let m = made(3, 4, from, 1.0);
        for to in shapes() {
            let new = m.reshape(to).unwrap();
            assert_eq!(new.shape(), to);
            assert_eq!(new.free_parameters(), to.free_parameters(3, 4));
            // the pooled trace is kept by every change of shape
            let trace = |m: &Mixture| {
                (0..3).map(|k| m.weights()[k] * (0..4).map(|j| m.variance(k, j)).sum::<f64>()).sum::<f64>()
            };
            assert!((trace(&new) / trace(&m) - 1.0).abs() < 1e-13);
            // widening is without loss, up to the rounding of a mean of equal variances
            let wider = (to.structure == Structure::Full || to.structure == from.structure) && !to.pooled;
            if wider {
                assert_eq!(
                    (0..3).map(|k| new.covariance(k)).collect::<Vec<_>>(),
                    (0..3).map(|k| m.covariance(k)).collect::<Vec<_>>()
                );
            }
        }
    }
}
