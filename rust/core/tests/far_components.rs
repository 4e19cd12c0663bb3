//! Covariances of tight components far from the centre keep their digits: the sums of a pass, and the M-step after it,
//! against sums of the same responsibilities in twice the digits.

#![allow(clippy::expect_used)] // helpers of tests

use arrow_array::Float64Array;
use drumlin_core::batch::{Column, Reading, Rows};
use drumlin_core::job::Cache;
use drumlin_core::kernels::{BLOCK, BLOCK_STRIDE, Block, Evaluator, Scratch};
use drumlin_core::leaf::Cutter;
use drumlin_core::maximise::maximise;
use drumlin_core::measure::em::EmStatistics;
use drumlin_core::mixture::{Mixture, Shape, Structure};
use drumlin_core::random::Stream;
use drumlin_core::scaled::{Origin, Scaled};
use drumlin_core::scaling::Scaling;
use std::sync::Arc;
use std::time::Duration;

/// A number as an unevaluated sum of two, about 32 digits (T. J. Dekker, 1971).
#[derive(Clone, Copy, Debug)]
struct Twofold(f64, f64);

fn two_sum(a: f64, b: f64) -> Twofold {
    let s = a + b;
    let t = s - a;
    Twofold(s, (a - (s - t)) + (b - t))
}

impl Twofold {
    fn plus(self, o: Self) -> Self {
        let s = two_sum(self.0, o.0);
        let t = two_sum(self.1, o.1);
        let u = two_sum(s.0, s.1 + t.0);
        two_sum(u.0, u.1 + t.1)
    }
    fn minus(self, o: Self) -> Self {
        self.plus(Self(-o.0, -o.1))
    }
    fn times(self, o: Self) -> Self {
        let p = self.0 * o.0;
        let e = self.0.mul_add(o.0, -p);
        two_sum(p, e + (self.0 * o.1 + self.1 * o.0))
    }
    fn over(self, o: Self) -> Self {
        let q = self.0 / o.0;
        let rest = self.minus(o.times(Self(q, 0.0)));
        let q2 = rest.0 / o.0;
        let rest = rest.minus(o.times(Self(q2, 0.0)));
        two_sum(q, q2).plus(Self(rest.0 / o.0, 0.0))
    }
    fn of(x: f64) -> Self {
        Self(x, 0.0)
    }
}

fn sum(values: impl Iterator<Item = Twofold>) -> Twofold {
    values.fold(Twofold::of(0.0), Twofold::plus)
}

/// Rows and the mixture of the pass before.
struct Case {
    d: usize,
    structure: Structure,
    scaling: Scaling,
    /// By columns, in the units of the table.
    columns: Vec<Vec<f64>>,
    old: Mixture,
}

/// Where the true components lie, in spreads: one of spread 1 unless `alone`, and tight ones.
struct Plan {
    d: usize,
    structure: Structure,
    rows: usize,
    /// Standard deviation of each component.
    scales: Vec<f64>,
    /// Its mean lies this many spreads from the centre in each column, with changing signs.
    distances: Vec<f64>,
    correlation: f64,
    /// The old mean lies this many standard deviations from the true one, and the old variances are so many times theirs.
    moved: f64,
    inflate: f64,
    /// Distances differ by up to this share between columns; signs differ too, unless it is 0.
    jitter: f64,
    seed: u64,
}

const ALONE: Plan = Plan {
    d: 3,
    structure: Structure::Full,
    rows: 0,
    scales: Vec::new(),
    distances: Vec::new(),
    correlation: 0.0,
    moved: 0.0,
    inflate: 1.2,
    jitter: 0.01,
    seed: 0,
};

/// Errors of one component.
struct Errors {
    /// Of its mean, in its standard deviations, beyond the half unit in the last place that a float64 mean has.
    mean: f64,
    /// Of its covariance, relative to the product of the two standard deviations.
    covariance: f64,
    /// Whether it was summed about its old mean.
    far: bool,
}

fn build(p: &Plan, scaling: Scaling) -> Case {
    let (d, k) = (p.d, p.scales.len());
    let mut stream = Stream::new(p.seed, d as u64);
    let mut means = Vec::new();
    for distance in &p.distances {
        for _ in 0..d {
            let sign = if p.jitter > 0.0 && stream.uniform() < 0.5 { -1.0 } else { 1.0 };
            means.push(sign * distance * (1.0 + p.jitter * stream.uniform()));
        }
    }
    let mut columns = vec![Vec::with_capacity(p.rows); d];
    let (own, shared) = ((1.0 - p.correlation).sqrt(), p.correlation.sqrt());
    for i in 0..p.rows {
        let c = i % k;
        let common = stream.normal() * shared;
        for (j, column) in columns.iter_mut().enumerate() {
            let x = means[c * d + j] + p.scales[c] * (own * stream.normal() + common);
            column.push(scaling.centre()[j] + scaling.spread()[j] * x);
        }
    }
    let mut stored = Vec::new();
    for s in &p.scales {
        let v = s * s * p.inflate;
        match p.structure {
            Structure::Full => stored.extend((0..d * d).map(|i| if i % (d + 1) == 0 { v } else { p.correlation * v })),
            Structure::Diagonal => stored.extend(vec![v; d]),
            Structure::Spherical => stored.push(v),
        }
    }
    let old = (0..k * d).map(|i| means[i] + p.moved * p.scales[i / d]).collect();
    let shape = Shape::new(p.structure, false);
    let scaled = drumlin_core::mixture::ScaledMixture {
        log_weights: vec![(1.0 / k as f64).ln(); k],
        weights: vec![1.0 / k as f64; k],
        means: old,
        stored,
        shape,
        d,
    };
    let old = Mixture::from_scaled(&scaled, &scaling).expect("valid");
    Case { d, structure: p.structure, scaling, columns, old }
}

/// The pass and the M-step on the rows against the same in twice the digits: by component. `raw`: the rows as they stand in
/// the table, else as the kernels see them, centred and scaled (and so rounded).
fn errors(c: &Case, raw: bool) -> Vec<Errors> {
    let d = c.d;
    let n = c.columns[0].len();
    let e = Arc::new(Evaluator::new(Arc::new(c.old.clone()), Arc::new(c.scaling.clone())).expect("factors"));
    let features = c.columns.iter().map(|v| Column::F64(Float64Array::from(v.clone()))).collect();
    let rows = Rows { first_row: 0, len: n, features, weight: None, keep: None, held: None, key: None };
    let mut leaves = Vec::new();
    let mut cutter = Cutter::new(0);
    cutter.push(Arc::new(rows), |leaf| leaves.push(Arc::new(leaf)));
    leaves.extend(cutter.finish().map(Arc::new));
    let columns = (0..d).map(|j| j.to_string()).collect();
    let reading = Arc::new(Reading { columns, codes: vec![Vec::new(); d], ..Reading::default() });

    // The rows as the kernels see them, and their responsibilities.
    let (mut block, mut scratch) = (vec![0.0; d * BLOCK_STRIDE], Scratch::new(&e));
    let (mut x, mut r) = (vec![Vec::new(); d], vec![Vec::new(); e.k]);
    for leaf in &leaves {
        let scaled = Scaled::new(Origin::Plain(leaf), leaf.len(), None, &e.scaling);
        for b in 0..leaf.len().div_ceil(BLOCK) {
            let rows = scaled.block(b, &mut block);
            let seen = Block::evaluate(&e, &block, rows, None, false, &mut scratch);
            for i in 0..rows {
                (0..d).for_each(|j| x[j].push(block[j * BLOCK_STRIDE + i]));
                (0..e.k).for_each(|k| r[k].push(seen.weighted_responsibilities()[i * e.pad + k]));
            }
        }
    }
    let exact = |j: usize, i: usize| {
        if raw {
            let shift = Twofold::of(c.columns[j][i]).minus(Twofold::of(c.scaling.centre()[j]));
            shift.times(Twofold::of(1.0 / c.scaling.spread()[j]))
        } else {
            Twofold::of(x[j][i])
        }
    };

    let cache = Cache::new(reading, leaves);
    let job = cache.start(vec![Box::new(EmStatistics::new(Arc::clone(&e)))], 1);
    while !job.wait(Duration::from_secs(1)).expect("runs") {}
    let sums = job.result().expect("finished");
    let statistics = sums[0].as_any().downcast_ref::<EmStatistics>().expect("statistics");
    let found =
        maximise(&statistics.moments(), Shape::new(c.structure, false), 0.0).expect("positive definite").mixture;

    let mut out = Vec::new();
    for k in 0..e.k {
        let total = sum(r[k].iter().map(|r| Twofold::of(*r)));
        let weighed = |value: &dyn Fn(usize) -> Twofold| {
            let live = (0..n).filter(|i| r[k][*i] > 0.0);
            sum(live.map(|i| Twofold::of(r[k][i]).times(value(i)))).over(total)
        };
        let mean: Vec<Twofold> = (0..d).map(|j| weighed(&|i| exact(j, i))).collect();
        let from_mean = |j: usize, i: usize| exact(j, i).minus(mean[j]);
        let mut covariance = vec![Twofold::of(0.0); d * d];
        for a in 0..d {
            for b in 0..=a {
                if c.structure == Structure::Full || a == b {
                    covariance[a * d + b] = weighed(&|i| from_mean(a, i).times(from_mean(b, i)));
                }
            }
        }
        if c.structure == Structure::Spherical {
            let trace = sum((0..d).map(|j| covariance[j * d + j]));
            (0..d).for_each(|j| covariance[j * d + j] = trace.over(Twofold::of(d as f64)));
        }
        let deviation: Vec<f64> = (0..d).map(|j| covariance[j * d + j].0.sqrt()).collect();
        let mut worst = Errors { mean: 0.0, covariance: 0.0, far: e.apart[k] };
        let got = found.covariance(k);
        for a in 0..d {
            let off = Twofold::of(found.mean(k)[a]).minus(mean[a]).0.abs() - 0.5 * f64::EPSILON * mean[a].0.abs();
            worst.mean = worst.mean.max(off / deviation[a]);
            for b in 0..=a {
                let off = Twofold::of(got[a * d + b]).minus(covariance[a * d + b]).0.abs();
                worst.covariance = worst.covariance.max(off / (deviation[a] * deviation[b]));
            }
        }
        out.push(worst);
    }
    out
}

/// Far components lose no digits; near ones as many as the square of their distance in standard deviations, below 1e-12.
fn check(c: &Case, raw: bool, what: &str) -> (usize, f64) {
    let found = errors(c, raw);
    let mut worst = 0.0f64;
    for (k, e) in found.iter().enumerate() {
        let allowed = if e.far { 3e-14 } else { 1e-12 };
        assert!(e.covariance < allowed, "{what}, component {k} (far: {}): {:.2e}", e.far, e.covariance);
        assert!(e.mean < 1e-13, "{what}, mean of component {k}: {:.2e}", e.mean);
        worst = worst.max(e.covariance);
    }
    (found.iter().filter(|e| e.far).count(), worst)
}

#[test]
fn tight_components_keep_their_digits() {
    for structure in [Structure::Full, Structure::Diagonal, Structure::Spherical] {
        for d in [1, 2, 3, 8] {
            for (correlation, moved) in [(0.0, 0.0), (0.0, 0.3), (0.9, 0.3)] {
                if correlation > 0.0 && (structure != Structure::Full || d == 1) {
                    continue;
                }
                for power in 1..=7 {
                    let s = 10f64.powi(-power);
                    let what = format!("{structure:?} d={d} correlation={correlation} moved={moved} 1e-{power}");
                    let mut plan = Plan { d, structure, rows: 4000, correlation, moved, seed: power as u64, ..ALONE };
                    (plan.scales, plan.distances) = (vec![s], vec![3.1]);
                    let identity = Scaling::identity(d);
                    assert_eq!(check(&build(&plan, identity.clone()), false, &what).0, 1, "{what}");
                    plan.scales = vec![1.0, s, s, 0.3, 0.1 * s];
                    plan.distances = vec![0.0, 3.1, -2.9, 1.0, 3.3];
                    assert_eq!(check(&build(&plan, identity), false, &format!("{what}, mixed")).0, 3, "{what}");
                }
            }
        }
    }
}

#[test]
fn just_below_and_above_the_switch() {
    for (sds, far) in [(9.8, 0), (10.2, 1), (29.0, 1)] {
        let mut worst = 0.0f64;
        for seed in 0..30 {
            // one full leaf, all of it one component: the longest chains, and no averaging over leaves
            let scales = vec![3.0 / sds];
            let plan = Plan { rows: 3072, scales, distances: vec![3.0], seed, jitter: 0.0, inflate: 1.0, ..ALONE };
            let (count, error) = check(&build(&plan, Scaling::identity(3)), false, &format!("{sds} {seed}"));
            assert_eq!(count, far);
            worst = worst.max(error);
        }
        assert!(far == 1 || worst > 1e-13, "the switch is set without need: {worst:.2e}");
    }
}

#[test]
fn an_old_mean_that_lies_apart_costs_the_square_of_its_distance() {
    for moved in [1.0, 3.0, 8.0, 30.0, 1000.0] {
        for seed in 0..10 {
            let plan = Plan { rows: 3072, scales: vec![1e-3], distances: vec![3.0], moved, seed, ..ALONE };
            let e = &errors(&build(&plan, Scaling::identity(3)), false)[0];
            assert!(e.far && e.covariance < 2e-14 * (1.0 + moved * moved), "{moved}: {:.2e}", e.covariance);
        }
    }
}

#[test]
fn rounding_of_the_centred_rows() {
    let mut stream = Stream::new(3, 3);
    for power in 1..=7 {
        let s = 10f64.powi(-power);
        let plan = |distance| Plan { rows: 3072, scales: vec![s], distances: vec![distance], jitter: 0.0, ..ALONE };
        // Against the rows as they stand in the table: centring them takes nothing away where they have no more digits
        // than the centre, as everywhere but near zero.
        for (centre, spread) in [(0.0, 1.0), (3.7, 4.0), (-57.3, 16.0), (1e6 + 0.3, 1.0)] {
            let scaling = Scaling::new(vec![centre; 3], vec![spread; 3]).expect("scaling");
            let e = &errors(&build(&plan(3.0), scaling), true)[0];
            assert!(e.covariance < 3e-14, "{centre} {spread} 1e-{power}: {:.2e}", e.covariance);
        }
        // A tight component at zero, the centre elsewhere: each row is rounded to the digits of the centre.
        let scaling = Scaling::new(vec![10.0 / 3.0; 3], vec![1.0; 3]).expect("scaling");
        let mut c = build(&plan(-10.0 / 3.0), scaling);
        for column in &mut c.columns {
            column.iter_mut().for_each(|x| *x = s * stream.normal());
        }
        let e = &errors(&c, false)[0];
        assert!(e.covariance < 3e-14, "1e-{power}: {:.2e}", e.covariance);
        let e = &errors(&c, true)[0];
        let rounding = f64::EPSILON * (10.0 / 3.0) / s / f64::from(3072).sqrt();
        assert!(e.covariance < 3e-14 + rounding, "1e-{power}: {:.2e}", e.covariance);
    }
}
