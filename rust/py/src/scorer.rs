//! `Scorer` and `Stopping`.

use crate::arrays;
use crate::errors::{detached, internal};
use crate::mixture::{PyMixture, PyScaling};
use crate::reading::PyReading;
use arrow_array::{ArrayRef, FixedSizeListArray, Float32Array, Float64Array, Int32Array, RecordBatch};
use arrow_pyarrow::{FromPyArrow, ToPyArrow};
use arrow_schema::{DataType, Field, Schema};
use drumlin_core::Error;
use drumlin_core::batch::Column;
use drumlin_core::kernels::Evaluator;
use drumlin_core::score::{Scored, Scorer, Wanted, rows_of};
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
    let ids = |values: Vec<i32>| -> ArrayRef {
        if values.iter().all(|&v| v >= 0) {
            Arc::new(Int32Array::from(values))
        } else {
            Arc::new(values.into_iter().map(|v| (v >= 0).then_some(v)).collect::<Int32Array>())
        }
    };
    let complete = scored.complete.iter().all(|&c| c);
    let keep = scored.complete;
    let nulls = (!complete).then(|| arrow_buffer_nulls(&keep));
    let mut fields = vec![
        Field::new("component", DataType::Int32, true),
        Field::new("responsibility", DataType::Float32, true),
        Field::new("runner_up", DataType::Int32, true),
        Field::new("log_density", DataType::Float64, true),
    ];
    let mut columns: Vec<ArrayRef> = vec![
        ids(scored.component),
        Arc::new(Float32Array::new(scored.responsibility.into(), nulls.clone())),
        ids(scored.runner_up),
        Arc::new(Float64Array::new(scored.log_density.into(), nulls.clone())),
    ];
    if all {
        let item = Arc::new(Field::new("item", DataType::Float32, true));
        let values: Vec<f32> = scored.all.iter().map(|&v| v as f32).collect();
        let width = i32::try_from(k).map_err(fault)?;
        let list =
            FixedSizeListArray::try_new(item, width, Arc::new(Float32Array::from(values)), nulls).map_err(fault)?;
        fields.push(Field::new("responsibilities", list.data_type_of(), true));
        columns.push(Arc::new(list));
    }
    RecordBatch::try_new(Arc::new(Schema::new(fields)), columns).map_err(fault)
}

trait DataTypeOf {
    fn data_type_of(&self) -> DataType;
}

impl DataTypeOf for FixedSizeListArray {
    fn data_type_of(&self) -> DataType {
        use arrow_array::Array;
        self.data_type().clone()
    }
}

fn arrow_buffer_nulls(keep: &[bool]) -> arrow_buffer::NullBuffer {
    arrow_buffer::NullBuffer::from(keep.to_vec())
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

    #[pyo3(signature = (batch, *, first_row, threads, refuse_gaps, responsibilities = false))]
    fn score<'py>(
        &self,
        py: Python<'py>,
        batch: &Bound<'_, PyAny>,
        first_row: u64,
        threads: usize,
        refuse_gaps: bool,
        responsibilities: bool,
    ) -> PyResult<Bound<'py, PyAny>> {
        let batch = RecordBatch::from_pyarrow_bound(batch)?;
        let out = detached(py, || {
            let rows = self.0.reading().read(&batch, first_row)?;
            let wanted = Wanted { all: responsibilities, distances: false, refuse_gaps };
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
        let columns: Vec<Column> = if let Ok(array) = rows.extract::<PyReadonlyArray2<'py, f64>>() {
            let view = array.as_array();
            view.columns()
                .into_iter()
                .map(|c| Column::F64(Float64Array::from(c.iter().copied().collect::<Vec<f64>>())))
                .collect()
        } else if let Ok(array) = rows.extract::<PyReadonlyArray2<'py, f32>>() {
            let view = array.as_array();
            view.columns()
                .into_iter()
                .map(|c| Column::F32(Float32Array::from(c.iter().copied().collect::<Vec<f32>>())))
                .collect()
        } else {
            return Err(internal(py, "score_array takes a 2-D array of float64 or float32"));
        };
        let (k, d) = (self.0.evaluator().k, self.0.evaluator().d);
        if columns.len() != d {
            return Err(internal(py, &format!("{} columns for a mixture of {d}", columns.len())));
        }
        let wanted = Wanted { all: what == "responsibilities", distances: what == "distance", refuse_gaps: false };
        let rows = rows_of(columns, 0);
        let n = rows.len;
        let scored = detached(py, || self.0.score(&rows, threads, wanted))?;
        Ok(match what {
            "log_density" => arrays::vector(py, scored.log_density).into_any(),
            "assign" => arrays::vector(py, scored.component).into_any(),
            "responsibilities" | "distance" => arrays::array(py, scored.all, &[n, k])?.into_any(),
            other => return Err(internal(py, &format!("score_array does not know {other:?}"))),
        })
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
