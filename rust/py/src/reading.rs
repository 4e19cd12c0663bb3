//! `Reading`: which columns play which part.

use drumlin_core::batch::Reading;
use pyo3::prelude::*;
use std::collections::HashMap;
use std::sync::Arc;

/// How pushed batches are read.
#[pyclass(name = "Reading", module = "drumlin._core", frozen)]
pub struct PyReading(pub Arc<Reading>);

#[pymethods]
impl PyReading {
    #[new]
    #[pyo3(signature = (columns, *, weight=None, keep=None, held=None, held_share=0.0, held_seed=0, key=None, codes=None))]
    fn new(
        columns: Vec<String>,
        weight: Option<String>,
        keep: Option<String>,
        held: Option<String>,
        held_share: f64,
        held_seed: u64,
        key: Option<Vec<String>>,
        codes: Option<HashMap<String, Vec<f64>>>,
    ) -> Self {
        let codes = codes.unwrap_or_default();
        let codes = columns.iter().map(|c| codes.get(c).cloned().unwrap_or_default()).collect();
        let key = key.unwrap_or_default();
        Self(Arc::new(Reading { columns, codes, weight, keep, held, held_share, held_seed, key }))
    }
}
