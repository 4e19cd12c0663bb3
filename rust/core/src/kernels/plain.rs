//! The scalar oracle: each number by the plainest code in the documented order of operations. Every tier must give the
//! same bits.

use super::block::{Block, Scratch};
use super::evaluator::{BLOCK, BLOCK_STRIDE, CUT, Evaluator, FLOOR};
use super::math::{exp_one, ln_one};
use super::moments::{Feature, features};
use super::scores::{Asked, Room, score};
use super::tier::{self, Tier};
use crate::linalg::{cholesky, invert_lower};
use crate::mixture::{Mixture, Shape, Structure};
use crate::random::Stream;
use crate::scaling::Scaling;
use std::sync::{Arc, Mutex, MutexGuard, PoisonError};

/// Forcing a tier is for the whole process: one test at a time.
static ALONE: Mutex<()> = Mutex::new(());

pub(crate) fn alone() -> MutexGuard<'static, ()> {
    ALONE.lock().unwrap_or_else(PoisonError::into_inner)
}

pub(super) fn mixture(
    d: usize,
    k: usize,
    structure: Structure,
    spread: f64,
    offset: f64,
    stream: &mut Stream,
) -> Mixture {
    let mut weights: Vec<f64> = (0..k).map(|_| 0.2 + stream.uniform()).collect();
    let total: f64 = weights.iter().sum();
    weights.iter_mut().for_each(|w| *w /= total);
    let means = (0..k * d).map(|_| offset + spread * stream.normal()).collect();
    let mut stored = Vec::new();
    for _ in 0..k {
        match structure {
            Structure::Full => {
                let a: Vec<f64> =
                    (0..d * d).map(|i| stream.normal() * 0.3 + f64::from(u8::from(i % (d + 1) == 0))).collect();
                for i in 0..d {
                    for j in 0..d {
                        let extra = if i == j { 0.1 } else { 0.0 };
                        stored.push((0..d).map(|c| a[i * d + c] * a[j * d + c]).sum::<f64>() + extra);
                    }
                }
            }
            Structure::Diagonal => stored.extend((0..d).map(|_| 0.2 + stream.uniform())),
            Structure::Spherical => stored.push(0.2 + stream.uniform()),
        }
    }
    Mixture::new(weights, means, stored, d, Shape::new(structure, false)).unwrap()
}

/// Log density of one row and component, in the order of `density`.
fn log_density(e: &Evaluator, k: usize, row: &[f64]) -> f64 {
    let d = e.d;
    let mean = &e.scaled.means[k * d..][..d];
    let shifted: Vec<f64> = row.iter().zip(mean).map(|(x, m)| if e.far[k] { x - m } else { *x }).collect();
    let mut l = e.constant[k];
    let half = std::f64::consts::FRAC_1_SQRT_2;
    if e.triangular {
        let mut a = e.scaled.covariance(k);
        cholesky(&mut a, d).unwrap();
        let w: Vec<f64> = invert_lower(&a, d).iter().map(|v| v * half).collect();
        for i in 0..d {
            let c: f64 = if e.far[k] { 0.0 } else { (0..=i).map(|j| w[i * d + j] * mean[j]).sum() };
            let mut y = 0.0 - c;
            for j in 0..=i {
                y = w[i * d + j].mul_add(shifted[j], y);
            }
            l = (-y).mul_add(y, l);
        }
    } else {
        for j in 0..d {
            let w = half / e.scaled.shape.structure.variance(e.scaled.stored_of(k), d, j).sqrt();
            let y = w.mul_add(shifted[j], if e.far[k] { 0.0 } else { -(w * mean[j]) });
            l = (-y).mul_add(y, l);
        }
    }
    if l > FLOOR { l } else { FLOOR }
}

struct Plain {
    sums: Vec<f64>,
    log: Vec<f64>,
    best: Vec<usize>,
}

/// Posterior and statistics of a block, row by row.
fn plain(e: &Evaluator, rows: &[Vec<f64>], weights: Option<&[f64]>, list: &[Feature]) -> Plain {
    let mut out = Plain { sums: vec![0.0; list.len() * e.pad], log: Vec::new(), best: Vec::new() };
    for (i, row) in rows.iter().enumerate() {
        let l: Vec<f64> = (0..e.k).map(|k| log_density(e, k, row)).collect();
        let most = l.iter().fold(FLOOR, |m, &v| if v > m { v } else { m });
        let exps: Vec<f64> = l.iter().map(|v| if v - most >= -CUT { exp_one(v - most) } else { 0.0 }).collect();
        let sum = exps.iter().fold(0.0, |s, v| s + v);
        let share = weights.map_or(1.0, |w| w[i]) / sum;
        for k in 0..e.k {
            let mean = &e.scaled.means[k * e.d..][..e.d];
            let y: Vec<f64> = row.iter().zip(mean).map(|(x, m)| if e.apart[k] { x - m } else { *x }).collect();
            let r = exps[k] * share;
            for (f, feature) in list.iter().enumerate() {
                let phi = match *feature {
                    Feature::One => 1.0,
                    Feature::Column(a) => y[a as usize],
                    Feature::Product(a, b) => y[a as usize] * y[b as usize],
                };
                out.sums[f * e.pad + k] = r.mul_add(phi, out.sums[f * e.pad + k]);
            }
        }
        out.log.push(most + ln_one(sum));
        out.best.push((0..e.k).rev().max_by(|&a, &b| exps[a].total_cmp(&exps[b])).unwrap());
    }
    out
}

/// Every tier against the scalar oracle; returns how many components take their moments about their mean.
fn compare(d: usize, k: usize, n: usize, structure: Structure, spread: f64, offset: f64, weighted: bool) -> usize {
    let mut stream = Stream::new(7, (d * 1000 + k) as u64);
    let m = mixture(d, k, structure, spread, offset, &mut stream);
    let e = Evaluator::new(Arc::new(m), Arc::new(Scaling::identity(d))).unwrap();
    let rows: Vec<Vec<f64>> =
        (0..n).map(|i| (0..d).map(|j| e.scaled.means[(i % k) * d + j] + 1.5 * stream.normal()).collect()).collect();
    let mut x = vec![0.0; d * BLOCK_STRIDE];
    for (i, row) in rows.iter().enumerate() {
        (0..d).for_each(|j| x[j * BLOCK_STRIDE + i] = row[j]);
    }
    let weights: Vec<f64> = (0..n).map(|_| stream.uniform() * 3.0).collect();
    let weights = weighted.then_some(weights.as_slice());
    let features = features(d, structure == Structure::Full);
    let wanted = plain(&e, &rows, weights, &features.list);
    let total: f64 = wanted.log.iter().enumerate().map(|(i, l)| l * weights.map_or(1.0, |w| w[i])).sum();
    let mut first: Option<f64> = None;
    let mut seen = 0;
    for tier in Tier::ALL.into_iter().filter(|t| t.usable()) {
        assert!(tier::force(Some(tier)));
        let mut scratch = Scratch::new(&e);
        let mut sums = vec![0.0; features.list.len() * e.pad];
        let mut block = Block::evaluate(&e, &x, n, weights, true, &mut scratch);
        block.add_moments(&features, &mut sums);
        let likelihood = block.log_likelihood;
        let entropy = block.entropy();
        assert!(entropy >= -1e-9 && entropy.is_finite());
        let what = format!("{} d={d} k={k} n={n} {structure:?} {spread} {offset} {weighted}", tier.name());
        for f in 0..features.list.len() {
            for c in 0..k {
                assert_eq!(sums[f * e.pad + c].to_bits(), wanted.sums[f * e.pad + c].to_bits(), "{what} f={f} k={c}");
            }
        }
        assert!((likelihood - total).abs() <= 1e-12 * total.abs().max(1.0), "{what} {likelihood} {total}");
        assert_eq!(*first.get_or_insert(likelihood), likelihood, "{what}");
        let labels: Vec<f64> = (0..k).map(|c| c as f64).collect();
        let mut scores = Room::default();
        let asked = Asked { log: true, best: true, second: true, all: false };
        scores.fit(&e, asked);
        score(&e, &labels, asked, &x, n, &mut scores);
        for i in 0..n {
            assert_eq!(scores.log[i].to_bits(), wanted.log[i].to_bits(), "{what} row {i}");
            assert_eq!(scores.best[i] as usize, wanted.best[i], "{what} row {i}");
            assert!(k == 1 || (scores.second[i] >= 0.0 && scores.second[i] != scores.best[i]), "{what} row {i}");
        }
        seen += 1;
    }
    tier::force(None);
    assert!(seen > 0);
    e.apart.iter().filter(|f| **f).count()
}

#[test]
fn all_tails_of_columns_components_and_rows_have_equal_bits() {
    let _guard = alone();
    for structure in [Structure::Full, Structure::Diagonal, Structure::Spherical] {
        for d in 1..=18 {
            let (k, n) = (1 + d * 7 % 20, 1 + d * 37 % BLOCK);
            compare(d, k, n, structure, 1.0, 0.0, d % 2 == 0);
        }
        for k in 1..=20 {
            compare(3, k, 61, structure, 2.0, 0.0, k % 2 == 0);
        }
        for n in 1..=40 {
            compare(2, 5, n, structure, 0.5, 0.0, false);
        }
        compare(33, 17, BLOCK, structure, 4.0, 0.0, true);
        compare(5, 9, BLOCK, structure, 100.0, 0.0, false);
    }
}

#[test]
fn far_components_have_equal_bits() {
    let _guard = alone();
    for structure in [Structure::Full, Structure::Diagonal, Structure::Spherical] {
        // all of them far from the centre, and far and near ones side by side in every vector
        assert_eq!(compare(4, 3, 100, structure, 3.0, 1e5, false), 3);
        for (d, k, n, spread) in
            [(1, 20, BLOCK, 11.0), (2, 13, 61, 8.7), (3, 19, 24, 7.5), (11, 17, 25, 5.7), (18, 20, 7, 5.0)]
        {
            let far = compare(d, k, n, structure, spread, 0.0, d % 2 == 1);
            assert!(far > 0 && far < k, "{far} of {k} {structure:?}");
        }
    }
}

#[test]
fn rows_beyond_every_density_go_to_the_nearest_component() {
    let _guard = alone();
    let shape = Shape::new(Structure::Full, false);
    let stored = vec![1.0, 0.0, 0.0, 1.0, 1.0, 0.0, 0.0, 1.0];
    let m = Mixture::new(vec![0.5, 0.5], vec![-1.0, 0.0, 1.0, 0.0], stored, 2, shape).unwrap();
    let e = Evaluator::new(Arc::new(m), Arc::new(Scaling::identity(2))).unwrap();
    let mut x = vec![0.0; 2 * BLOCK_STRIDE];
    (x[0], x[1], x[2]) = (3e144, -3e144, 1e140);
    for tier in Tier::ALL.into_iter().filter(|t| t.usable()) {
        assert!(tier::force(Some(tier)));
        let mut scratch = Scratch::new(&e);
        let block = Block::evaluate(&e, &x, 3, None, true, &mut scratch);
        assert!(block.log_likelihood.is_finite() && block.entropy().abs() < 3.0);
        let r = block.weighted_responsibilities();
        for i in 0..3 {
            assert_eq!(r[i * e.pad..][..2].iter().sum::<f64>(), 1.0);
        }
    }
    tier::force(None);
}
