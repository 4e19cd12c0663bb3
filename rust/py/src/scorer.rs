//! `Scorer` and `Stopping`.

use crate::arrays::{self, Strided};
use crate::errors::{detached, internal};
use crate::mixture::{PyMixture, PyScaling};
use crate::reading::PyReading;
use arrow_array::{Array, ArrayRef, FixedSizeListArray, Float32Array, Float64Array, Int32Array, RecordBatch};
use arrow_buffer::NullBuffer;
use arrow_pyarrow::{FromPyArrow, ToPyArrow};
use arrow_schema::{DataType, Field, Schema};
use drumlin_core::Error;
use drumlin_core::kernels::Evaluator;
use drumlin_core::kernels::scores::Asked;
use drumlin_core::score::{Scored, Scorer, Wanted};
use drumlin_core::source::Source;
use drumlin_core::stopping::Stopping;
use numpy::PyReadonlyArray2;
use pyo3::prelude::*;
use std::sync::{Arc, Mutex, PoisonError};

/// Applies a mixture to rows.
#[pyclass(name = "Scorer", module = "drumlin._core", frozen)]
pub struct PyScorer(Scorer);

fn fault(what: impl std::fmt::Display) -> Error {
    Error::Internal { what: what.to_string() }
}

fn to_batch(scored: Scored, k: usize, all: bool) -> Result<RecordBatch, Error> {
    let rows = scored.component.len();
    let nulls = (!scored.gap.is_empty()).then(|| NullBuffer::from_iter(scored.gap.iter().map(|gap| !gap)));
    let no_second = if k > 1 { nulls.clone() } else { (rows > 0).then(|| NullBuffer::new_null(rows)) };
    let mut fields = vec![
        Field::new("component", DataType::Int32, true),
        Field::new("responsibility", DataType::Float32, true),
        Field::new("runner_up", DataType::Int32, true),
        Field::new("log_density", DataType::Float64, true),
    ];
    let mut columns: Vec<ArrayRef> = vec![
        Arc::new(Int32Array::new(scored.component.into(), nulls.clone())),
        Arc::new(Float32Array::new(scored.responsibility.into(), nulls.clone())),
        Arc::new(Int32Array::new(scored.runner_up.into(), no_second)),
        Arc::new(Float64Array::new(scored.log_density.into(), nulls.clone())),
    ];
    if all {
        let item = Arc::new(Field::new("item", DataType::Float32, true));
        let values: Vec<f32> = scored.all.iter().map(|&v| v as f32).collect();
        let width = i32::try_from(k).map_err(fault)?;
        let list =
            FixedSizeListArray::try_new(item, width, Arc::new(Float32Array::from(values)), nulls).map_err(fault)?;
        fields.push(Field::new("responsibilities", list.data_type().clone(), true));
        columns.push(Arc::new(list));
    }
    RecordBatch::try_new(Arc::new(Schema::new(fields)), columns).map_err(fault)
}

impl PyScorer {
    /// One answer for all rows, as an array.
    fn answer<'py>(
        &self,
        py: Python<'py>,
        source: &dyn Source,
        what: &str,
        threads: usize,
    ) -> PyResult<Bound<'py, PyAny>> {
        let none = Wanted::default();
        let wanted = match what {
            "log_density" => Wanted::of(Asked { log: true, ..none.asked }),
            "assign" => Wanted::of(Asked { best: true, ..none.asked }),
            "responsibilities" => Wanted::of(Asked { all: true, ..none.asked }),
            "distance" => Wanted { distances: true, ..none },
            other => return Err(internal(py, &format!("a scorer does not know {other:?}"))),
        };
        let scored = detached(py, || self.0.score(source, threads, wanted))?;
        Ok(match what {
            "log_density" => arrays::vector(py, scored.log_density).into_any(),
            "assign" => arrays::vector(py, scored.component).into_any(),
            _ => arrays::array(py, scored.all, &[source.rows(), self.0.evaluator().k])?.into_any(),
        })
    }
}

#[pymethods]
impl PyScorer {
    #[new]
    fn new(
        py: Python<'_>,
        mixture: &PyMixture,
        scaling: &PyScaling,
        reading: &PyReading,
        ids: Vec<i32>,
    ) -> PyResult<Self> {
        let (m, s, r) = (Arc::clone(&mixture.0), Arc::clone(&scaling.0), (*reading.0).clone());
        detached(py, move || Scorer::new(Arc::new(Evaluator::new(m, s)?), r, ids)).map(Self)
    }

    #[pyo3(signature = (batch, *, first_row, threads, responsibilities = false))]
    fn score<'py>(
        &self,
        py: Python<'py>,
        batch: &Bound<'_, PyAny>,
        first_row: u64,
        threads: usize,
        responsibilities: bool,
    ) -> PyResult<Bound<'py, PyAny>> {
        let batch = RecordBatch::from_pyarrow_bound(batch)?;
        let out = detached(py, || {
            let rows = self.0.reading().read(&batch, first_row)?;
            let wanted = Wanted::of(Asked { log: true, best: true, second: true, all: responsibilities });
            to_batch(self.0.score(&rows, threads, wanted)?, self.0.evaluator().k, responsibilities)
        })?;
        out.to_pyarrow(py)
    }

    fn score_array<'py>(
        &self,
        py: Python<'py>,
        rows: &Bound<'py, PyAny>,
        what: &str,
        threads: usize,
    ) -> PyResult<Bound<'py, PyAny>> {
        if let Ok(array) = rows.extract::<PyReadonlyArray2<'py, f64>>() {
            self.answer(py, &*Strided(array.as_array()).source(), what, threads)
        } else if let Ok(array) = rows.extract::<PyReadonlyArray2<'py, f32>>() {
            self.answer(py, &*Strided(array.as_array()).source(), what, threads)
        } else {
            Err(internal(py, "score_array takes a 2-D array of float64 or float32"))
        }
    }

    #[pyo3(signature = (batch, what, *, first_row, threads))]
    fn score_batch<'py>(
        &self,
        py: Python<'py>,
        batch: &Bound<'_, PyAny>,
        what: &str,
        first_row: u64,
        threads: usize,
    ) -> PyResult<Bound<'py, PyAny>> {
        let batch = RecordBatch::from_pyarrow_bound(batch)?;
        let rows = detached(py, || self.0.reading().read(&batch, first_row))?;
        self.answer(py, &rows, what, threads)
    }
}

/// Judges after each pass how much is still to come.
#[pyclass(name = "Stopping", module = "drumlin._core", frozen)]
pub struct PyStopping(Mutex<Stopping>);

#[pymethods]
impl PyStopping {
    #[new]
    fn new(tolerance: f64, least_share: f64, scaling: &PyScaling) -> Self {
        Self(Mutex::new(Stopping::new(tolerance, least_share, (*scaling.0).clone())))
    }

    fn add(
        &self,
        log_likelihood: f64,
        weight: f64,
        before: &PyMixture,
        after: &PyMixture,
    ) -> (Option<f64>, usize, bool) {
        let mut stopping = self.0.lock().unwrap_or_else(PoisonError::into_inner);
        let verdict = stopping.add(log_likelihood, weight, &before.0, &after.0);
        (verdict.remaining, verdict.moving, verdict.stop)
    }
}
