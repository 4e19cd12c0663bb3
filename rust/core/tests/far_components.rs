//! Covariances of tight components far from the centre keep their digits: the sums of a pass, and the M-step after it,
//! against sums of the same responsibilities in twice the digits.

#![allow(clippy::expect_used)] // helpers of tests

use arrow_array::Float64Array;
use drumlin_core::batch::{Column, Reading, Rows};
use drumlin_core::job::Cache;
use drumlin_core::kernels::{BLOCK, BLOCK_STRIDE, Block, Evaluator, Scratch};
use drumlin_core::leaf::{Cutter, Loaded, Part};
use drumlin_core::maximise::maximise;
use drumlin_core::measure::em::EmStatistics;
use drumlin_core::mixture::{Mixture, Shape, Structure};
use drumlin_core::random::Stream;
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
    /// The old mean lies this many standard deviations from the new one.
    moved: f64,
    seed: u64,
}

fn build(p: &Plan, scaling: Scaling) -> Case {
    let (d, k) = (p.d, p.scales.len());
    let mut stream = Stream::new(p.seed, d as u64);
    let mut means = Vec::new();
    for distance in &p.distances {
        for _ in 0..d {
            let sign = if stream.uniform() < 0.5 { -1.0 } else { 1.0 };
            means.push(sign * distance * (1.0 + 0.01 * stream.uniform()));
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
        let v = s * s * 1.2;
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

/// Worst error of a new mean, in its standard deviations, and of a new covariance, relative to the product of the two
/// standard deviations; by component.
fn errors(c: &Case, raw: bool) -> Vec<(f64, f64, bool)> {
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
    let mut loaded = Loaded::new(d);
    let (mut blocks, mut scratch) = (Vec::new(), Scratch::new(&e));
    let (mut x, mut r) = (vec![Vec::new(); d], vec![Vec::new(); e.k]);
    for leaf in &leaves {
        loaded.load(leaf, &reading, Part::Fit).expect("loads");
        loaded.scale(&e.scaling, &mut blocks);
        for start in (0..loaded.n).step_by(BLOCK) {
            let block = &blocks[start / BLOCK * d * BLOCK_STRIDE..][..d * BLOCK_STRIDE];
            let rows = (loaded.n - start).min(BLOCK);
            let seen = Block::evaluate(&e, block, rows, None, false, &mut scratch);
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
        let mut worst = (0.0f64, 0.0f64, e.far[k]);
        let got = found.covariance(k);
        for a in 0..d {
            worst.0 = worst.0.max((Twofold::of(found.mean(k)[a]).minus(mean[a])).0.abs() / deviation[a]);
            for b in 0..=a {
                let off = Twofold::of(got[a * d + b]).minus(covariance[a * d + b]).0.abs();
                worst.1 = worst.1.max(off / (deviation[a] * deviation[b]));
            }
        }
        out.push(worst);
    }
    out
}

#[test]
fn explore() {
    for structure in [Structure::Full, Structure::Diagonal, Structure::Spherical] {
        for d in [1, 2, 3, 8] {
            for correlation in [0.0, 0.9] {
                if correlation > 0.0 && (structure != Structure::Full || d == 1) {
                    continue;
                }
                for moved in [0.0, 0.3] {
                    for alone in [true, false] {
                        for p in 1..=7 {
                            let s = 10f64.powi(-p);
                            let plan = if alone {
                                Plan {
                                    d,
                                    structure,
                                    rows: 7000,
                                    scales: vec![s],
                                    distances: vec![3.1],
                                    correlation,
                                    moved,
                                    seed: p as u64,
                                }
                            } else {
                                Plan {
                                    d,
                                    structure,
                                    rows: 7000,
                                    scales: vec![1.0, s, s, 0.1 * s.max(1e-5), 0.3],
                                    distances: vec![0.0, 3.1, 2.9, 3.3, 1.0],
                                    correlation,
                                    moved,
                                    seed: p as u64,
                                }
                            };
                            let got = errors(&build(&plan, Scaling::identity(d)), false);
                            let show: Vec<String> = got
                                .iter()
                                .map(|g| format!("{:.0e}/{:.0e}{}", g.0, g.1, if g.2 { "*" } else { "" }))
                                .collect();
                            println!(
                                "{structure:?} d={d} rho={correlation} moved={moved} alone={alone} 1e-{p}: {}",
                                show.join("  ")
                            );
                        }
                    }
                }
            }
        }
    }
}

#[test]
fn ratios() {
    for n in [300, 1000, 3072, 9216] {
        for ratio in [4.0, 8.0, 12.0, 16.0, 20.0, 24.0, 29.0] {
            let mut worst = 0.0f64;
            let mut mean = 0.0;
            let mut wm = 0.0f64;
            for seed in 0..20 {
                let plan = Plan {
                    d: 3,
                    structure: Structure::Full,
                    rows: n,
                    scales: vec![3.0 / ratio],
                    distances: vec![3.0],
                    correlation: 0.0,
                    moved: 0.0,
                    seed,
                };
                for g in errors(&build(&plan, Scaling::identity(3)), false) {
                    assert!(!g.2);
                    worst = worst.max(g.1);
                    mean += g.1 / 20.0;
                    wm = wm.max(g.0);
                }
            }
            println!("n={n} ratio={ratio}: worst {worst:.2e} mean {mean:.2e}; means {wm:.1e}");
        }
    }
}

#[test]
fn moves() {
    for moved in [1.0, 3.0, 10.0, 30.0, 100.0] {
        let mut worst = 0.0f64;
        for seed in 0..10 {
            let plan = Plan {
                d: 3,
                structure: Structure::Full,
                rows: 3072,
                scales: vec![1e-3],
                distances: vec![3.0],
                correlation: 0.0,
                moved,
                seed,
            };
            for g in errors(&build(&plan, Scaling::identity(3)), false) {
                worst = worst.max(g.1);
            }
        }
        println!("moved={moved}: worst {worst:.2e}");
    }
}

#[test]
fn raw() {
    for (centre, spread) in [(0.0, 1.0), (3.7, 4.0), (0.1, 1.0), (-57.3, 16.0), (1000.123, 1.0), (1e6 + 0.3, 1.0)] {
        for p in 1..=7 {
            let s = 10f64.powi(-p);
            let mut worst = (0.0f64, 0.0f64);
            for seed in 0..5 {
                let plan = Plan {
                    d: 3,
                    structure: Structure::Full,
                    rows: 3072,
                    scales: vec![s],
                    distances: vec![3.0],
                    correlation: 0.0,
                    moved: 0.0,
                    seed,
                };
                let c = build(&plan, Scaling::new(vec![centre; 3], vec![spread; 3]).expect("scaling"));
                for g in errors(&c, true) {
                    worst.1 = worst.1.max(g.1);
                }
                for g in errors(&c, false) {
                    worst.0 = worst.0.max(g.1);
                }
            }
            println!("centre={centre} spread={spread} 1e-{p}: scaled {:.1e} raw {:.1e}", worst.0, worst.1);
        }
    }
}
