//! Passes over generated rows in memory, for counting instructions and for looking at hot spots.
//!
//!     cargo run --release -p drumlin-core --example pass -- ROWS COLUMNS COMPONENTS SPACING full|diagonal TIER PASSES THREADS [single]
//!
//! With `single` the columns are float32 and the passes too; `float32` leaves the passes in float64.

use arrow_array::{Float32Array, Float64Array};
use drumlin_core::batch::{Column, Reading, Rows};
use drumlin_core::job::Cache;
use drumlin_core::kernels::Evaluator;
use drumlin_core::kernels::tier::{self, Tier};
use drumlin_core::leaf::Cutter;
use drumlin_core::measure::em::EmStatistics;
use drumlin_core::mixture::{Mixture, Shape, Structure};
use drumlin_core::random::Stream;
use drumlin_core::scaling::Scaling;
use std::sync::Arc;
use std::time::{Duration, Instant};

fn main() -> Result<(), Box<dyn std::error::Error>> {
    let mut args = std::env::args().skip(1);
    let mut next = |default: &str| args.next().unwrap_or_else(|| default.into());
    let n: usize = next("24576").parse()?;
    let d: usize = next("8").parse()?;
    let k: usize = next("16").parse()?;
    let spacing: f64 = next("0.7").parse()?;
    let full = next("full") == "full";
    let wanted = next("auto");
    let passes: usize = next("2").parse()?;
    let threads: usize = next("1").parse()?;
    let precision = next("double");
    tier::force(Tier::ALL.into_iter().find(|t| t.name() == wanted));

    let mut stream = Stream::new(1, 0);
    let means: Vec<f64> = (0..k * d).map(|_| spacing * stream.normal()).collect();
    let structure = if full { Structure::Full } else { Structure::Diagonal };
    let stored = vec![1.0; k * d];
    let shape = Shape::new(structure, false);
    let stored = if full {
        (0..k * d * d).map(|i| if (i % (d * d)).is_multiple_of(d + 1) { 1.0 } else { 0.02 }).collect()
    } else {
        stored
    };
    let mixture = Mixture::new(vec![1.0 / k as f64; k], means.clone(), stored, d, shape)?;
    let mut columns = vec![Vec::with_capacity(n); d];
    for _ in 0..n {
        let c = stream.below(k as u64) as usize;
        for (j, column) in columns.iter_mut().enumerate() {
            column.push(means[c * d + j] + stream.normal());
        }
    }
    let column = |c: Vec<f64>| match precision.as_str() {
        "double" => Column::F64(Float64Array::from(c)),
        _ => Column::F32(Float32Array::from(c.into_iter().map(|x| x as f32).collect::<Vec<_>>())),
    };
    let features = columns.into_iter().map(column).collect();
    let rows = Rows { first_row: 0, len: n, features, weight: None, keep: None, held: None, key: None };
    let mut leaves = Vec::new();
    let mut cutter = Cutter::new(0);
    cutter.push(Arc::new(rows), |leaf| leaves.push(Arc::new(leaf)));
    leaves.extend(cutter.finish().map(Arc::new));
    let reading = Reading {
        columns: (0..d).map(|j| format!("x{j}")).collect(),
        codes: vec![Vec::new(); d],
        ..Reading::default()
    };
    let cache = Cache::new(Arc::new(reading), leaves);
    let evaluator = Arc::new(Evaluator::new(Arc::new(mixture), Arc::new(Scaling::identity(d)))?);
    for pass in 0..passes {
        let start = Instant::now();
        let measure = EmStatistics::of_precision(Arc::clone(&evaluator), precision == "single");
        if measure.single != (precision == "single") {
            return Err("the mixture forbids float32".into());
        }
        let job = cache.start(vec![Box::new(measure)], threads);
        while !job.wait(Duration::from_secs(1))? {}
        let sums = job.result()?;
        let statistics = sums[0].as_any().downcast_ref::<EmStatistics>().ok_or("no statistics")?;
        println!("pass {pass}: {:.5} s, log-likelihood {:?}", start.elapsed().as_secs_f64(), statistics.log_likelihood);
    }
    Ok(())
}
