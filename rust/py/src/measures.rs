//! The measures as Python values.

use crate::arrays;
use crate::errors::{detached, internal, to_py};
use crate::mixture::{PyMixture, PyScaling};
use drumlin_core::batch::Reading;
use drumlin_core::kernels::Evaluator;
use drumlin_core::leaf::Part;
use drumlin_core::maximise::maximise_in_units;
use drumlin_core::measure::em::EmStatistics;
use drumlin_core::measure::sample::{Sample, SampleRows};
use drumlin_core::measure::scores::Scores;
use drumlin_core::measure::summary::ColumnSummary;
use drumlin_core::measure::{self, Measure};
use drumlin_core::mixture::{Shape, Structure};
use drumlin_core::tree::{Sums, Tree};
use numpy::{PyArray1, PyArrayDyn};
use pyo3::prelude::*;
use pyo3::types::{PyBytes, PyDict};
use std::sync::{Arc, Mutex, OnceLock, PoisonError};

/// A mergeable sum over rows: the base of the four kinds.
#[pyclass(name = "Measure", module = "drumlin._core", frozen, subclass)]
pub struct PyMeasure(Box<dyn Measure>);

impl PyMeasure {
    fn get<T: 'static>(&self, py: Python<'_>) -> PyResult<&T> {
        self.0.as_any().downcast_ref::<T>().ok_or_else(|| internal(py, "a measure of another kind"))
    }

    /// An empty measure of the same definition, told how rows are read.
    pub fn fresh(&self, reading: &Arc<Reading>) -> Box<dyn Measure> {
        let any = self.0.as_any();
        if let Some(summary) = any.downcast_ref::<ColumnSummary>() {
            return Box::new(ColumnSummary::new(summary.columns().len()).with_reading(Arc::clone(reading)));
        }
        if let Some(sample) = any.downcast_ref::<Sample>() {
            return Box::new(sample.for_one_run());
        }
        self.0.fresh()
    }
}

#[pymethods]
impl PyMeasure {
    fn to_bytes<'py>(&self, py: Python<'py>) -> Bound<'py, PyBytes> {
        PyBytes::new(py, &measure::to_bytes(&*self.0))
    }

    #[staticmethod]
    fn from_bytes(py: Python<'_>, data: &[u8]) -> PyResult<Py<PyAny>> {
        let owned = data.to_vec();
        let made = detached(py, move || measure::from_bytes(&owned))?;
        wrap(py, made)
    }
}

/// A measure as the Python class of its kind.
pub fn wrap(py: Python<'_>, made: Box<dyn Measure>) -> PyResult<Py<PyAny>> {
    let tag = made.tag();
    let base = PyClassInitializer::from(PyMeasure(made));
    Ok(match tag {
        measure::em::TAG => Bound::new(py, base.add_subclass(PyEmStatistics))?.into_any().unbind(),
        measure::scores::TAG => Bound::new(py, base.add_subclass(PyScores))?.into_any().unbind(),
        measure::sample::TAG => Bound::new(py, base.add_subclass(PySample(OnceLock::new())))?.into_any().unbind(),
        _ => Bound::new(py, base.add_subclass(PyColumnSummary))?.into_any().unbind(),
    })
}

fn evaluator(py: Python<'_>, mixture: &PyMixture, scaling: &PyScaling) -> PyResult<Arc<Evaluator>> {
    let (m, s) = (Arc::clone(&mixture.0), Arc::clone(&scaling.0));
    detached(py, move || Evaluator::new(m, s)).map(Arc::new)
}

/// Sufficient statistics of one EM pass.
#[pyclass(name = "EmStatistics", module = "drumlin._core", frozen, extends = PyMeasure)]
pub struct PyEmStatistics;

#[pymethods]
impl PyEmStatistics {
    #[new]
    #[pyo3(signature = (mixture, scaling, single = false))]
    fn new(
        py: Python<'_>,
        mixture: &PyMixture,
        scaling: &PyScaling,
        single: bool,
    ) -> PyResult<PyClassInitializer<Self>> {
        let evaluator = evaluator(py, mixture, scaling)?;
        let made = EmStatistics::of_precision(evaluator, single);
        Ok(PyClassInitializer::from(PyMeasure(Box::new(made))).add_subclass(Self))
    }

    #[getter]
    fn single(slf: PyRef<'_, Self>) -> PyResult<bool> {
        Ok(slf.as_super().get::<EmStatistics>(slf.py())?.single)
    }

    #[getter]
    fn obstacle(slf: PyRef<'_, Self>) -> PyResult<Option<(usize, f64)>> {
        let statistics = slf.as_super().get::<EmStatistics>(slf.py())?;
        Ok(statistics.evaluator().single().err().map(|obstacle| (obstacle.component, obstacle.reach)))
    }

    #[getter]
    fn rows(slf: PyRef<'_, Self>) -> PyResult<u64> {
        Ok(slf.as_super().get::<EmStatistics>(slf.py())?.rows)
    }

    #[getter]
    fn weight(slf: PyRef<'_, Self>) -> PyResult<f64> {
        Ok(slf.as_super().get::<EmStatistics>(slf.py())?.weight)
    }

    #[getter]
    fn log_likelihood(slf: PyRef<'_, Self>) -> PyResult<f64> {
        Ok(slf.as_super().get::<EmStatistics>(slf.py())?.log_likelihood)
    }

    #[getter]
    fn shares<'py>(slf: PyRef<'py, Self>) -> PyResult<Bound<'py, PyArray1<f64>>> {
        let py = slf.py();
        Ok(arrays::vector(py, slf.as_super().get::<EmStatistics>(py)?.shares()))
    }

    fn maximise(
        slf: PyRef<'_, Self>,
        structure: &str,
        pooled: bool,
        floor: f64,
    ) -> PyResult<(PyMixture, Vec<usize>, Vec<String>)> {
        let py = slf.py();
        let shape = Structure::parse(structure).map(|s| Shape::new(s, pooled)).map_err(|e| to_py(py, e))?;
        let statistics = slf.as_super().get::<EmStatistics>(py)?;
        let (moments, scaling) = (statistics.moments(), Arc::clone(&statistics.evaluator().scaling));
        let done = detached(py, move || maximise_in_units(&moments, &scaling, shape, floor))?;
        Ok((PyMixture(Arc::new(done.mixture)), done.kept, done.notes))
    }
}

/// Log-likelihood and entropy.
#[pyclass(name = "Scores", module = "drumlin._core", frozen, extends = PyMeasure)]
pub struct PyScores;

#[pymethods]
impl PyScores {
    #[new]
    #[pyo3(signature = (mixture, scaling, part = "fit"))]
    fn new(py: Python<'_>, mixture: &PyMixture, scaling: &PyScaling, part: &str) -> PyResult<PyClassInitializer<Self>> {
        let part = match part {
            "fit" => Part::Fit,
            "held" => Part::Held,
            _ => return Err(internal(py, "a part is \"fit\" or \"held\"")),
        };
        let made = Scores::new(evaluator(py, mixture, scaling)?, part);
        Ok(PyClassInitializer::from(PyMeasure(Box::new(made))).add_subclass(Self))
    }

    #[getter]
    fn rows(slf: PyRef<'_, Self>) -> PyResult<u64> {
        Ok(slf.as_super().get::<Scores>(slf.py())?.rows)
    }

    #[getter]
    fn weight(slf: PyRef<'_, Self>) -> PyResult<f64> {
        Ok(slf.as_super().get::<Scores>(slf.py())?.weight)
    }

    #[getter]
    fn log_likelihood(slf: PyRef<'_, Self>) -> PyResult<f64> {
        Ok(slf.as_super().get::<Scores>(slf.py())?.log_likelihood)
    }

    #[getter]
    fn entropy(slf: PyRef<'_, Self>) -> PyResult<f64> {
        Ok(slf.as_super().get::<Scores>(slf.py())?.entropy)
    }

    #[getter]
    fn shares<'py>(slf: PyRef<'py, Self>) -> PyResult<Bound<'py, PyArray1<f64>>> {
        let py = slf.py();
        Ok(arrays::vector(py, slf.as_super().get::<Scores>(py)?.shares()))
    }
}

/// A sample of rows.
#[pyclass(name = "Sample", module = "drumlin._core", frozen, extends = PyMeasure)]
pub struct PySample(OnceLock<SampleRows>);

impl PySample {
    fn finished<'a>(slf: &'a PyRef<'_, Self>) -> PyResult<&'a SampleRows> {
        let sample = slf.as_super().get::<Sample>(slf.py())?;
        Ok(slf.0.get_or_init(|| sample.finish()))
    }
}

#[pymethods]
impl PySample {
    #[new]
    fn new(columns: usize, size: usize, seed: u64) -> PyClassInitializer<Self> {
        let made = Sample::new(columns, size, seed);
        PyClassInitializer::from(PyMeasure(Box::new(made))).add_subclass(Self(OnceLock::new()))
    }

    #[getter]
    fn values<'py>(slf: PyRef<'py, Self>) -> PyResult<Bound<'py, PyArrayDyn<f64>>> {
        let rows = Self::finished(&slf)?;
        arrays::array(slf.py(), rows.values.clone(), &[rows.weights.len(), rows.columns])
    }

    #[getter]
    fn weights<'py>(slf: PyRef<'py, Self>) -> PyResult<Bound<'py, PyArray1<f64>>> {
        let weights = Self::finished(&slf)?.weights.clone();
        Ok(arrays::vector(slf.py(), weights))
    }

    #[getter]
    fn rows<'py>(slf: PyRef<'py, Self>) -> PyResult<Bound<'py, PyArray1<u64>>> {
        let rows = Self::finished(&slf)?.rows.clone();
        Ok(arrays::vector(slf.py(), rows))
    }
}

/// Counts, gaps, extremes and moments of each column.
#[pyclass(name = "ColumnSummary", module = "drumlin._core", frozen, extends = PyMeasure)]
pub struct PyColumnSummary;

#[pymethods]
impl PyColumnSummary {
    #[new]
    fn new(columns: usize) -> PyClassInitializer<Self> {
        PyClassInitializer::from(PyMeasure(Box::new(ColumnSummary::new(columns)))).add_subclass(Self)
    }

    fn table<'py>(slf: PyRef<'py, Self>) -> PyResult<Bound<'py, PyDict>> {
        let py = slf.py();
        let summary = slf.as_super().get::<ColumnSummary>(py)?;
        let (columns, rows) = (summary.columns(), summary.rows());
        let table = PyDict::new(py);
        macro_rules! lists {
            ($($name:literal => $value:expr),+ $(,)?) => {
                $(table.set_item($name, columns.iter().map($value).collect::<Vec<_>>())?;)+
            };
        }
        let place = |row: Option<u64>| row.map_or(-1, |r| r as i64);
        lists! {
            "nulls" => |c| c.nulls,
            "nans" => |c| c.nans,
            "infinite" => |c| c.infinite,
            "codes" => |c| c.codes,
            "first_infinite_row" => |c| place(c.first_infinite),
            "first_gap_row" => |c| place(c.first_gap),
            "present" => |c| c.present,
            "least" => |c| c.least,
            "least_count" => |c| c.least_count,
            "most" => |c| c.most,
            "most_count" => |c| c.most_count,
            "mean" => |c| c.mean,
            "variance" => |c| c.variance(),
        }
        table.set_item("rows", rows.rows)?;
        table.set_item("kept", rows.kept)?;
        table.set_item("complete", rows.complete)?;
        table.set_item("incomplete", rows.incomplete)?;
        table.set_item("zero_weights", rows.zero_weights)?;
        table.set_item("held", rows.held)?;
        table.set_item("weight", rows.weight)?;
        Ok(table)
    }
}

/// Merges results of tasks in task order.
#[pyclass(name = "Tree", module = "drumlin._core", frozen)]
pub struct PyTree(Mutex<Tree>);

#[pymethods]
impl PyTree {
    #[new]
    fn new() -> Self {
        Self(Mutex::new(Tree::new()))
    }

    fn push(&self, py: Python<'_>, measures: Vec<PyRef<'_, PyMeasure>>) -> PyResult<()> {
        // Measures are values: what goes into the tree is a copy by way of the bytes.
        let copies: Result<Sums, _> = measures.iter().map(|m| measure::from_bytes(&measure::to_bytes(&*m.0))).collect();
        copies
            .and_then(|sums| self.0.lock().unwrap_or_else(PoisonError::into_inner).push(sums))
            .map_err(|e| to_py(py, e))
    }

    fn finish(&self, py: Python<'_>) -> PyResult<Vec<Py<PyAny>>> {
        let mut tree = std::mem::take(&mut *self.0.lock().unwrap_or_else(PoisonError::into_inner));
        let sums = tree.finish().map_err(|e| to_py(py, e))?.unwrap_or_default();
        sums.into_iter().map(|m| wrap(py, m)).collect()
    }
}
