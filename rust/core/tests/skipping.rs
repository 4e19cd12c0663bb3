//! The skipping path has the bits of the dense one, whatever the hints, on data made to mislead its bounds, and all tiers
//! have the same. One test only: a tier is forced for the whole process.

#![allow(clippy::expect_used)] // helpers of tests

use arrow_array::Float64Array;
use drumlin_core::batch::{Column, Reading, Rows};
use drumlin_core::job::Cache;
use drumlin_core::kernels::Evaluator;
use drumlin_core::kernels::tier::{self, Tier};
use drumlin_core::leaf::{Cutter, Leaf, Part};
use drumlin_core::measure::em::EmStatistics;
use drumlin_core::measure::scores::Scores;
use drumlin_core::measure::to_bytes;
use drumlin_core::mixture::{Mixture, Shape, Structure};
use drumlin_core::random::Stream;
use drumlin_core::scaling::Scaling;
use std::sync::Arc;
use std::time::Duration;

struct Case {
    name: &'static str,
    d: usize,
    k: usize,
    structure: Structure,
    means: Vec<f64>,
    scales: Vec<f64>,
    tilt: f64,
}

fn case(name: &'static str, d: usize, k: usize, structure: Structure, spacing: f64, tilt: f64) -> Case {
    let mut stream = Stream::new(11, (d * 100 + k) as u64);
    let means = (0..k * d).map(|_| spacing * stream.normal()).collect();
    Case { name, d, k, structure, means, scales: vec![1.0; k], tilt }
}

fn mixture(c: &Case) -> Mixture {
    let (d, k) = (c.d, c.k);
    let mut stored = Vec::new();
    for scale in &c.scales {
        let v = scale * scale;
        match c.structure {
            Structure::Full => {
                stored.extend((0..d * d).map(|i| if (i).is_multiple_of(d + 1) { v } else { c.tilt * v }));
            }
            _ => stored.extend(vec![v; d]),
        }
    }
    Mixture::new(vec![1.0 / k as f64; k], c.means.clone(), stored, d, Shape::new(c.structure, false)).expect("valid")
}

fn leaves(c: &Case, n: usize, weighted: bool) -> (Vec<Arc<Leaf>>, Reading) {
    let mut stream = Stream::new(5, n as u64);
    let mut columns = vec![Vec::with_capacity(n); c.d];
    for _ in 0..n {
        let q = stream.below(c.k as u64) as usize;
        let shared = stream.normal() * c.tilt.max(0.0).sqrt();
        for (j, column) in columns.iter_mut().enumerate() {
            let own = stream.normal() * (1.0 - c.tilt.max(0.0)).sqrt();
            column.push(c.means[q * c.d + j] + c.scales[q] * (own + shared));
        }
    }
    let weights: Vec<f64> = (0..n).map(|_| stream.uniform() * 2.0).collect();
    let rows = Rows {
        first_row: 0,
        len: n,
        features: columns.into_iter().map(|v| Column::F64(Float64Array::from(v))).collect(),
        weight: weighted.then(|| Column::F64(Float64Array::from(weights))),
        keep: None,
        held: None,
        key: None,
    };
    let mut out = Vec::new();
    let mut cutter = Cutter::new(0);
    cutter.push(Arc::new(rows), |leaf| out.push(Arc::new(leaf)));
    out.extend(cutter.finish().map(Arc::new));
    let reading = Reading {
        columns: (0..c.d).map(|j| j.to_string()).collect(),
        codes: vec![Vec::new(); c.d],
        weight: weighted.then(|| "w".into()),
        ..Reading::default()
    };
    (out, reading)
}

fn run(cache: &Cache, e: &Arc<Evaluator>) -> Vec<Vec<u8>> {
    let em = EmStatistics::new(Arc::clone(e));
    let scores = Scores::new(Arc::clone(e), Part::Fit);
    let job = cache.start(vec![Box::new(em), Box::new(scores)], 2);
    while !job.wait(Duration::from_secs(1)).expect("runs") {}
    job.result().expect("finished").iter().map(|m| to_bytes(&**m)).collect()
}

#[test]
fn bits_do_not_depend_on_hints() {
    let mut cases = vec![
        case("apart", 8, 16, Structure::Full, 6.0, 0.1),
        case("apart, odd sizes", 7, 11, Structure::Full, 6.0, 0.1),
        case("wide", 18, 5, Structure::Full, 4.0, 0.0),
        case("near-singular", 6, 9, Structure::Full, 4.0, 1.0 - 1e-9),
        case("overlapping", 5, 6, Structure::Full, 0.3, 0.0),
        case("diagonal", 33, 20, Structure::Diagonal, 4.0, 0.0),
        case("one component", 5, 1, Structure::Full, 1.0, 0.0),
    ];
    let mut nested = case("nested", 6, 8, Structure::Full, 0.0, 0.2);
    nested.scales = (0..8).map(|i| 10f64.powi(i - 4)).collect();
    cases.push(nested);
    let mut equal = case("many equal", 5, 12, Structure::Full, 3.0, 0.0);
    for q in 6..12 {
        equal.means.copy_within(0..5, q * 5);
    }
    cases.push(equal);
    let mut far = case("tight and far", 4, 6, Structure::Full, 40.0, 0.0);
    far.scales = vec![1e-3; 6];
    cases.push(far);
    for c in &cases {
        for weighted in [false, true] {
            let mut portable = None;
            for tier in Tier::ALL.into_iter().filter(|t| t.usable()) {
                assert!(tier::force(Some(tier)));
                let dense = compare(c, weighted, tier);
                assert!(*portable.get_or_insert_with(|| dense.clone()) == dense, "{} on tier {}", c.name, tier.name());
            }
        }
    }
    tier::force(None);
}

/// A pass without hints, one with hints, one with wrong hints, on the tier in use: returns the bytes that all of them have.
fn compare(c: &Case, weighted: bool, tier: Tier) -> Vec<Vec<u8>> {
    let what = format!("{} on tier {}", c.name, tier.name());
    let (rows, reading) = leaves(c, 7000, weighted);
    let e = Arc::new(Evaluator::new(Arc::new(mixture(c)), Arc::new(Scaling::identity(c.d))).expect("factors"));
    let cache = Cache::new(Arc::new(reading), rows);
    let dense = run(&cache, &e);
    let hinted = cache.leaves().iter().any(|l| !l.hint.lock().expect("lock").labels.is_empty());
    assert!(hinted || !c.name.starts_with("apart"), "{what}");
    assert!(run(&cache, &e) == dense, "{what} after one pass");
    // Hints that are wrong may cost time, never a bit.
    let mut stream = Stream::new(1, 9);
    for leaf in cache.leaves() {
        let mut hint = leaf.hint.lock().expect("lock");
        hint.k = c.k;
        hint.labels = (0..leaf.len()).map(|_| stream.below(c.k as u64) as u16).collect();
    }
    assert!(run(&cache, &e) == dense, "{what} with wrong hints");
    dense
}
