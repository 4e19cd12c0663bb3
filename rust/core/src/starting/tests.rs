#![allow(clippy::unwrap_used)]

use super::*;
use crate::linalg::eigen_symmetric;

const FULL: Shape = Shape::new(Structure::Full, false);

/// n rows round each of the centres (2 columns), standard deviation 0.3.
fn hills(centres: &[[f64; 2]], n: usize, seed: u64) -> Vec<f64> {
    let mut stream = Stream::new(seed, 0);
    let mut values = Vec::new();
    for _ in 0..n {
        for centre in centres {
            values.extend(centre.iter().map(|c| c + 0.3 * stream.normal()));
        }
    }
    values
}

const FIVE: [[f64; 2]; 5] = [[0.0, 0.0], [4.0, 0.0], [0.0, 4.0], [4.0, 4.0], [-4.0, 2.0]];

fn shapes() -> Vec<Shape> {
    Structure::ALL.iter().flat_map(|&s| [Shape::new(s, false), Shape::new(s, true)]).collect()
}

#[test]
fn clear_groups_are_found_in_every_shape_and_attempt() {
    let values = hills(&FIVE, 200, 1);
    let weights = vec![1.0; values.len() / 2];
    for shape in shapes() {
        for attempt in 0..8 {
            let (found, notes) =
                start(&values, &weights, 2, 5, shape, StartFrom::KMeansPlusPlus, 1e-8, 3, attempt).unwrap();
            assert!(notes.is_empty());
            assert_eq!((found.components(), found.shape, found.d), (5, shape, 2));
            for centre in FIVE {
                let best = (0..5).map(|k| distance(found.mean(k), &centre)).fold(f64::INFINITY, f64::min);
                assert!(best < 0.05, "{shape:?} {attempt} {centre:?} {best}");
            }
            assert!(found.weights.iter().all(|w| (w - 0.2).abs() < 1e-3));
            assert!(found.covariance(4).iter().all(|v| v.is_finite()));
            assert!((found.covariance(0)[0].sqrt() - 0.3).abs() < 0.03);
        }
    }
}

#[test]
fn random_rows_are_distinct_rows() {
    let values = hills(&FIVE, 20, 2);
    let weights = vec![1.0; 100];
    for shape in shapes() {
        let (found, notes) = start(&values, &weights, 2, 7, shape, StartFrom::RandomRows, 1e-8, 1, 1).unwrap();
        assert!(notes.is_empty());
        assert_eq!(distinct_rows(&found.means, 2, 100), 7);
        for k in 0..7 {
            assert!(values.chunks(2).any(|row| row == found.mean(k)));
            assert_eq!(found.weights[k], 1.0 / 7.0);
            let (eigen, _) = eigen_symmetric(&found.covariance(k), 2);
            assert!(eigen[0] > 1.0, "the covariance of all rows");
        }
    }
}

#[test]
fn repeatable_and_different_by_attempt() {
    let values = hills(&FIVE, 50, 4);
    let weights = vec![1.0; 250];
    for how in StartFrom::ALL {
        let go = |seed, attempt| start(&values, &weights, 2, 3, FULL, how, 1e-8, seed, attempt).unwrap().0;
        assert_eq!(go(1, 0), go(1, 0));
        assert_ne!(go(1, 0).means, go(1, 2).means);
        assert_ne!(go(1, 0).means, go(2, 0).means);
    }
}

#[test]
fn too_few_distinct_rows_end_with_a_note() {
    let values = [1.0, 2.0, 1.0, 2.0, 5.0, 6.0, 1.0, 2.0];
    for how in StartFrom::ALL {
        for shape in shapes() {
            for attempt in 0..2 {
                let (found, notes) = start(&values, &[1.0; 4], 2, 3, shape, how, 0.0, 0, attempt).unwrap();
                assert_eq!((found.components(), notes.len()), (2, 1));
                assert!(found.covariance(1)[0] > 0.0);
                let (found, _) = start(&values[..4], &[1.0; 2], 2, 3, shape, how, 0.0, 0, attempt).unwrap();
                assert_eq!(found.mean(0), &values[..2]);
            }
        }
    }
}

#[test]
fn zero_weights_and_bad_rows_are_absent() {
    let mut values = hills(&FIVE[..2], 50, 5);
    let mut weights = vec![1.0; 100];
    let clean = start(&values, &weights, 2, 2, FULL, StartFrom::KMeansPlusPlus, 1e-8, 6, 0).unwrap();
    values.extend([100.0, 100.0, f64::NAN, 0.0, 3.0, f64::INFINITY]);
    weights.extend([0.0, 1.0, 1.0]);
    let again = start(&values, &weights, 2, 2, FULL, StartFrom::KMeansPlusPlus, 1e-8, 6, 0).unwrap();
    assert_eq!(clean, again);
    let none = start(&[1.0, 2.0], &[0.0], 2, 1, FULL, StartFrom::RandomRows, 1e-8, 6, 0);
    assert!(matches!(none, Err(Error::Data { .. })));
    assert!(matches!(
        start(&values, &weights, 2, 0, FULL, StartFrom::RandomRows, 0.0, 0, 0),
        Err(Error::Option { .. })
    ));
    assert!(matches!(
        start(&values, &[1.0], 2, 1, FULL, StartFrom::RandomRows, 0.0, 0, 0),
        Err(Error::Internal { .. })
    ));
}

#[test]
fn a_few_wild_rows_do_not_take_the_centres() {
    let mut values = hills(&FIVE, 400, 7);
    for i in 0..4 {
        // four wild rows, 1e6 spreads out in four directions
        values[i * 100] = if i % 2 == 0 { 1e6 } else { -1e6 };
        values[i * 100 + 1] = if i / 2 == 0 { 1e6 } else { -1e6 };
    }
    let weights = vec![1.0; values.len() / 2];
    for attempt in [0, 2, 4, 6] {
        let (found, _) = start(&values, &weights, 2, 6, FULL, StartFrom::KMeansPlusPlus, 1e-8, 8, attempt).unwrap();
        let variances = found.covariance(0);
        assert!(variances[0] < 10.0 && variances[3] < 10.0, "{variances:?}");
        let near = (0..6).filter(|&k| found.mean(k).iter().all(|x| x.abs() < 10.0)).count();
        assert!(near >= 2, "{attempt} {:?}", found.means);
    }
}

#[test]
fn long_parallel_groups_are_told_apart_on_whitened_coordinates() {
    let mut stream = Stream::new(10, 0);
    let mut values = Vec::new();
    for i in 0..2000 {
        let along = 3.0 * stream.normal();
        values.extend([along, along + 0.05 * stream.normal() + if i % 2 == 0 { 0.5 } else { -0.5 }]);
    }
    let (found, _) = start(&values, &[1.0; 2000], 2, 2, FULL, StartFrom::KMeansPlusPlus, 1e-8, 1, 1).unwrap();
    let gap = (found.means[1] - found.means[0]) - (found.means[3] - found.means[2]);
    assert!(gap.abs() > 0.3, "{:?}", found.means);
}

#[test]
fn row_weights_count_rows() {
    // seeding draws by weight: a row of weight zero is never a centre, a heavy row nearly always
    let values: Vec<f64> = (0..100).map(f64::from).collect();
    let mut weights = vec![1e-9; 100];
    weights[37] = 1.0;
    let (found, _) = start(&values, &weights, 1, 1, FULL, StartFrom::RandomRows, 1e-8, 2, 0).unwrap();
    assert_eq!(found.means, vec![37.0]);
}

#[test]
fn distinct_rows_are_counted_up_to_a_bound() {
    let values = [0.0, 1.0, -0.0, 1.0, 2.0, 1.0, 3.0, 3.0];
    assert_eq!(distinct_rows(&values, 2, 10), 3);
    assert_eq!(distinct_rows(&values, 2, 2), 2);
    assert_eq!(distinct_rows(&values, 1, 100), 4);
    assert_eq!(distinct_rows(&[], 2, 10), 0);
}

#[test]
fn guard_is_continuous_and_monotone() {
    assert_eq!(guarded(-3.0), -3.0);
    assert!((guarded(GUARD * (1.0 + 1e-12)) - GUARD).abs() < 1e-10);
    assert!(guarded(1e6) > guarded(1e5) && guarded(-1e300) < guarded(-1e6) && guarded(f64::MAX) < 6000.0);
}

#[test]
fn extreme_values_stay_finite() {
    for scale in [1e-150, 1e150] {
        let values: Vec<f64> = hills(&FIVE, 20, 11).iter().map(|x| x * scale).collect();
        for how in StartFrom::ALL {
            for attempt in 0..2 {
                if let Ok((found, _)) = start(&values, &[1.0; 100], 2, 4, FULL, how, 1e-8, 1, attempt) {
                    assert!(found.means.iter().chain(&found.stored).all(|x| x.is_finite()));
                }
            }
        }
    }
}
