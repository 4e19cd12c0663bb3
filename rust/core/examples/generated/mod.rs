//! Rows drawn from a mixture by their own random stream, as leaves in memory, and the mixture made ready.

use arrow_array::{Float32Array, Float64Array};
use drumlin_core::batch::{Column, Reading, Rows};
use drumlin_core::kernels::Evaluator;
use drumlin_core::leaf::{Cutter, Leaf};
use drumlin_core::mixture::{Mixture, Shape, Structure};
use drumlin_core::random::Stream;
use drumlin_core::scaling::Scaling;
use std::error::Error;
use std::sync::Arc;

/// See the module.
pub struct Generated {
    pub reading: Reading,
    pub leaves: Vec<Arc<Leaf>>,
    pub evaluator: Arc<Evaluator>,
}

/// `n` rows of `d` columns from `k` components whose means lie `spacing` standard deviations from 0 in each column; float32 if
/// `narrow`.
pub fn generate(
    n: usize,
    d: usize,
    k: usize,
    spacing: f64,
    full: bool,
    narrow: bool,
) -> Result<Generated, Box<dyn Error>> {
    let mut stream = Stream::new(1, 0);
    let means: Vec<f64> = (0..k * d).map(|_| spacing * stream.normal()).collect();
    let structure = if full { Structure::Full } else { Structure::Diagonal };
    let stored = if full {
        (0..k * d * d).map(|i| if (i % (d * d)).is_multiple_of(d + 1) { 1.0 } else { 0.02 }).collect()
    } else {
        vec![1.0; k * d]
    };
    let mixture = Mixture::new(vec![1.0 / k as f64; k], means.clone(), stored, d, Shape::new(structure, false))?;
    let mut columns = vec![Vec::with_capacity(n); d];
    for _ in 0..n {
        let c = stream.below(k as u64) as usize;
        for (j, column) in columns.iter_mut().enumerate() {
            column.push(means[c * d + j] + stream.normal());
        }
    }
    let column = |c: Vec<f64>| {
        if narrow {
            Column::F32(Float32Array::from(c.into_iter().map(|x| x as f32).collect::<Vec<_>>()))
        } else {
            Column::F64(Float64Array::from(c))
        }
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
    let evaluator = Arc::new(Evaluator::new(Arc::new(mixture), Arc::new(Scaling::identity(d)))?);
    Ok(Generated { reading, leaves, evaluator })
}
