//! Passes over generated rows in memory, for timing and for looking at hot spots.
//!
//!     cargo run --release -p drumlin-core --example pass -- ROWS COLUMNS COMPONENTS SPACING full|diagonal TIER PASSES THREADS [single]
//!
//! With `single` the columns are float32 and the passes too; `float32` leaves the passes in float64.

mod generated;

use drumlin_core::job::Cache;
use drumlin_core::kernels::tier::{self, Tier};
use drumlin_core::measure::em::EmStatistics;
use generated::{Generated, generate};
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

    let Generated { reading, leaves, evaluator } = generate(n, d, k, spacing, full, precision != "double")?;
    let cache = Cache::new(Arc::new(reading), leaves);
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
