//! The scalar oracle of the float32 kernels: each number by the plainest code in the documented order of operations. Every
//! tier must give the same bits.

use super::block::{Block, Scratch};
use super::evaluator::{BLOCK, BLOCK_STRIDE, CUT, Evaluator};
use super::lanes::{PortableSingle, SINGLE_CHAIN, Scalar};
use super::math::{exp, ln_one};
use super::moments::{Feature, features};
use super::plain::{alone, mixture};
use super::single::MOST_REACH;
use super::tier::{self, Tier};
use crate::linalg::{cholesky, invert_lower};
use crate::mixture::{Mixture, Shape, Structure};
use crate::random::Stream;
use crate::scaling::Scaling;
use std::sync::Arc;

/// Log density of one row and component less `base`, in the order of `density`.
fn log_density(e: &Evaluator, base: f64, k: usize, row: &[f32]) -> f32 {
    let d = e.d;
    let mean = &e.scaled.means[k * d..][..d];
    let mut l = (e.constant[k] - base) as f32;
    let half = std::f64::consts::FRAC_1_SQRT_2;
    if e.triangular {
        let mut a = e.scaled.covariance(k);
        cholesky(&mut a, d).unwrap();
        let w: Vec<f64> = invert_lower(&a, d).iter().map(|v| v * half).collect();
        for i in 0..d {
            let c: f64 = (0..=i).map(|j| w[i * d + j] * mean[j]).sum();
            let mut y = (0.0 - c) as f32;
            for j in 0..=i {
                y = (w[i * d + j] as f32).mul_add(row[j], y);
            }
            l = (-y).mul_add(y, l);
        }
    } else {
        for j in 0..d {
            let w = half / e.scaled.shape.structure.variance(e.scaled.stored_of(k), d, j).sqrt();
            let y = (w as f32).mul_add(row[j], -(w * mean[j]) as f32);
            l = (-y).mul_add(y, l);
        }
    }
    if l > f32::FLOOR { l } else { f32::FLOOR }
}

/// Statistics and log-likelihood of a block, row by row; the sums begin at `before`.
fn plain(
    e: &Evaluator,
    base: f64,
    rows: &[Vec<f32>],
    weights: Option<&[f64]>,
    list: &[Feature],
    before: f64,
) -> (Vec<f64>, f64) {
    let mut chains = [vec![0.0f32; list.len() * e.pad], vec![0.0f32; list.len() * e.pad]];
    let mut total = 0.0;
    let most = weights.map_or(1.0, |w| w.iter().copied().fold(0.0, f64::max));
    let unit = 2f64.powi(most.log2().floor() as i32);
    for (i, row) in rows.iter().enumerate() {
        let l: Vec<f32> = (0..e.k).map(|k| log_density(e, base, k, row)).collect();
        let most = l.iter().fold(f32::FLOOR, |m, &v| if v > m { v } else { m });
        let of = |v: f32| if v - most >= -CUT as f32 { exp(PortableSingle, [[v - most; 8]])[0][0] } else { 0.0 };
        let exps: Vec<f32> = l.iter().map(|v| of(*v)).collect();
        let sum = exps.iter().fold(0.0, |s, v| s + v);
        let weight = weights.map_or(1.0, |w| w[i]);
        let share = (weight / unit) as f32 / sum;
        for (f, feature) in list.iter().enumerate() {
            let phi = match *feature {
                Feature::One => 1.0,
                Feature::Column(a) => row[a as usize],
                Feature::Product(a, b) => row[a as usize] * row[b as usize],
            };
            for k in 0..e.k {
                let chain = &mut chains[i / SINGLE_CHAIN][f * e.pad + k];
                *chain = (exps[k] * share).mul_add(phi, *chain);
            }
        }
        total += weight * (f64::from(most) + ln_one(f64::from(sum)) + base);
    }
    let second = rows.len() > SINGLE_CHAIN;
    let sum = |(a, b): (&f32, &f32)| {
        let first = before + f64::from(*a) * unit;
        if second { first + f64::from(*b) * unit } else { first }
    };
    (chains[0].iter().zip(&chains[1]).map(sum).collect(), total)
}

fn compare(d: usize, k: usize, n: usize, structure: Structure, spread: f64, heaviest: Option<f64>) {
    let mut stream = Stream::new(9, (d * 1000 + k) as u64);
    let m = mixture(d, k, structure, spread, 0.0, &mut stream);
    let e = Evaluator::new(Arc::new(m), Arc::new(Scaling::identity(d))).unwrap();
    let single = e.single().unwrap();
    let rows: Vec<Vec<f32>> = (0..n)
        .map(|i| (0..d).map(|j| (e.scaled.means[(i % k) * d + j] + 1.5 * stream.normal()) as f32).collect())
        .collect();
    let mut x = vec![0.0f32; d * BLOCK_STRIDE];
    for (i, row) in rows.iter().enumerate() {
        (0..d).for_each(|j| x[j * BLOCK_STRIDE + i] = row[j]);
    }
    let weights: Option<Vec<f64>> = heaviest.map(|most| (0..n).map(|_| most * (1.0 - stream.uniform())).collect());
    let weights = weights.as_deref();
    let features = features(d, structure == Structure::Full);
    let before = heaviest.unwrap_or(1.0);
    let (wanted, total) = plain(&e, single.base, &rows, weights, &features.list, before);
    let mut first: Option<f64> = None;
    for tier in Tier::ALL.into_iter().filter(|t| t.usable()) {
        assert!(tier::force(Some(tier)));
        let mut scratch = Scratch::new(&e);
        // Float64 sums that a block is added to.
        let mut sums = vec![before; features.list.len() * e.pad];
        let mut block = Block::evaluate_single(&e, single, &x, n, weights, &mut scratch);
        block.add_moments(&features, &mut sums);
        let what = format!("{} d={d} k={k} n={n} {structure:?} {spread} {heaviest:?}", tier.name());
        for f in 0..features.list.len() {
            for c in 0..k {
                let place = f * e.pad + c;
                assert_eq!(sums[place].to_bits(), wanted[place].to_bits(), "{what} f={f} k={c}");
            }
        }
        let likelihood = block.log_likelihood;
        assert!((likelihood - total).abs() <= 1e-12 * total.abs().max(1.0), "{what} {likelihood} {total}");
        assert_eq!(*first.get_or_insert(likelihood), likelihood, "{what}");
    }
    tier::force(None);
}

#[test]
fn all_tails_of_columns_components_and_rows_have_equal_bits_in_single() {
    let _guard = alone();
    for structure in [Structure::Full, Structure::Diagonal, Structure::Spherical] {
        for d in 1..=18 {
            let (k, n) = (1 + d * 7 % 20, 1 + d * 37 % BLOCK);
            compare(d, k, n, structure, 1.0, (d % 2 == 0).then_some(3.0));
        }
        for k in 1..=33 {
            compare(3, k, 61, structure, 2.0, (k % 2 == 0).then_some(3.0));
        }
        for n in 1..=40 {
            compare(2, 5, n, structure, 0.5, None);
        }
        compare(33, 17, BLOCK, structure, 1.0, Some(1.0));
        // Row weights beyond the range of float32.
        compare(2, 3, 100, structure, 1.0, Some(1e200));
        compare(2, 3, 100, structure, 1.0, Some(1e-200));
    }
}

#[test]
fn single_rows_beyond_every_density_go_to_the_nearest_component() {
    let _guard = alone();
    let shape = Shape::new(Structure::Full, false);
    let stored = vec![1.0, 0.0, 0.0, 1.0, 1.0, 0.0, 0.0, 1.0];
    let m = Mixture::new(vec![0.5, 0.5], vec![-1.0, 0.0, 1.0, 0.0], stored, 2, shape).unwrap();
    let e = Evaluator::new(Arc::new(m), Arc::new(Scaling::identity(2))).unwrap();
    let far = crate::scaled::SINGLE_FAR as f32;
    let mut x = vec![0.0f32; 2 * BLOCK_STRIDE];
    (x[0], x[1], x[2]) = (far, -far, 0.9 * far);
    x[BLOCK_STRIDE] = -far;
    for tier in Tier::ALL.into_iter().filter(|t| t.usable()) {
        assert!(tier::force(Some(tier)));
        let mut scratch = Scratch::new(&e);
        let mut block = Block::evaluate_single(&e, e.single().unwrap(), &x, 3, None, &mut scratch);
        assert!(block.log_likelihood.is_finite());
        let features = features(2, true);
        let mut sums = vec![0.0; features.list.len() * e.pad];
        block.add_moments(&features, &mut sums);
        assert!(sums.iter().all(|s| s.is_finite()));
        let r = block.weighted_responsibilities();
        assert_eq!(&r[..2], &[0.0, 1.0]);
        assert_eq!(&r[e.pad..e.pad + 2], &[1.0, 0.0]);
    }
    tier::force(None);
}

/// One component at `mean` with standard deviation `sd` in column 0 and correlation `rho` with column 1, beside a plain one.
fn pair(mean: f64, sd: f64, rho: f64) -> Evaluator {
    let stored = vec![1.0, 0.0, 0.0, 1.0, sd * sd, rho * sd, rho * sd, 1.0];
    let shape = Shape::new(Structure::Full, false);
    let m = Mixture::new(vec![0.5, 0.5], vec![0.0, 0.0, mean, 0.0], stored, 2, shape).unwrap();
    Evaluator::new(Arc::new(m), Arc::new(Scaling::identity(2))).unwrap()
}

#[test]
fn reach_is_that_of_the_formula_and_forbids_float32() {
    // Uncorrelated: (m / sd)^2 + 1. The factor's second row has 1/(1 - rho^2) (x2 - rho x1 / sd)^2.
    for (mean, sd, rho) in [(0.0f64, 1.0f64, 0.0f64), (2.9, 0.1, 0.0), (0.0, 1.0, 0.9), (2.0, 0.5, -0.99)] {
        let first = (mean / sd).powi(2) + 1.0;
        let second = (rho * rho * first + 1.0) / (1.0 - rho * rho);
        let reach = first.max(second).sqrt();
        let found = super::single::reach(&pair(mean, sd, rho), 1);
        assert!((found / reach - 1.0).abs() < 1e-9, "{found} {reach}");
        assert!(pair(mean, sd, rho).single().is_ok());
    }
    for (mean, sd, rho) in [(40.0, 1.0, 0.0), (1.0, 0.01, 0.0), (0.0, 1e-4, 0.0), (0.0, 1.0, 0.9999), (5.0, 0.5, 0.99)]
    {
        let e = pair(mean, sd, rho);
        let obstacle = e.single().err();
        let allowed = mean == 0.0 && rho == 0.0;
        assert_eq!(obstacle.is_none(), allowed, "{mean} {sd} {rho}");
        if let Some(obstacle) = obstacle {
            assert_eq!(obstacle.component, 1);
            assert!(obstacle.reach > MOST_REACH);
        }
    }
}

#[test]
fn float32_never_meets_a_component_that_is_evaluated_about_its_mean() {
    let mut seen = [0, 0];
    for i in 0..400 {
        let ratio = 29.0 + 0.01 * f64::from(i);
        for rho in [0.0, 0.5] {
            let e = pair(ratio * 0.25, 0.25, rho);
            assert!(!(e.far[1] && e.single().is_ok()), "{ratio} {rho}");
            seen[usize::from(e.single().is_ok())] += 1;
        }
    }
    assert!(seen[0] > 0 && seen[1] > 0);
}
