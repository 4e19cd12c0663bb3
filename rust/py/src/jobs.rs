//! `Job` and `Cache`: runs in other threads.

use crate::arrays::{self, Floats};
use crate::errors::{detached, internal, to_py};
use crate::measures::{PyMeasure, wrap};
use crate::mixture::{PyMixture, PyScaling};
use crate::reading::PyReading;
use arrow_array::RecordBatch;
use arrow_pyarrow::FromPyArrow;
use drumlin_core::job::{Cache, Job};
use drumlin_core::mixture::{Shape, Structure};
use drumlin_core::starting::StartFrom;
use drumlin_core::tries::{Settings, TriesJob};
use pyo3::prelude::*;
use std::sync::Arc;
use std::time::Duration;

enum Work {
    Run(Job),
    Tries(TriesJob),
}

/// Work under way in other threads.
#[pyclass(name = "Job", module = "drumlin._core", frozen)]
pub struct PyJob(Work);

impl PyJob {
    fn run(&self, py: Python<'_>) -> PyResult<&Job> {
        match &self.0 {
            Work::Run(job) => Ok(job),
            Work::Tries(_) => Err(internal(py, "tries take no batches and give no measures")),
        }
    }
}

#[pymethods]
impl PyJob {
    fn push(&self, py: Python<'_>, batch: &Bound<'_, PyAny>) -> PyResult<bool> {
        let job = self.run(py)?;
        let batch = RecordBatch::from_pyarrow_bound(batch)?;
        detached(py, move || {
            let rows = job.reading().read(&batch, job.next_row())?;
            let bytes = rows.bytes();
            Ok(job.push(rows, bytes))
        })
    }

    fn end(&self, py: Python<'_>) -> PyResult<()> {
        let job = self.run(py)?;
        py.detach(|| job.end());
        Ok(())
    }

    fn cancel(&self) {
        match &self.0 {
            Work::Run(job) => job.cancel(),
            Work::Tries(job) => job.cancel(),
        }
    }

    fn wait(&self, py: Python<'_>, seconds: f64) -> PyResult<bool> {
        let time = Duration::from_secs_f64(seconds.clamp(0.0, 3600.0));
        match &self.0 {
            Work::Run(job) => detached(py, || job.wait(time)),
            Work::Tries(job) => detached(py, || Ok(job.wait(time))),
        }
    }

    #[getter]
    fn rows_done(&self, py: Python<'_>) -> u64 {
        py.detach(|| match &self.0 {
            Work::Run(job) => job.rows_done(),
            Work::Tries(job) => job.rows_done(),
        })
    }

    fn result(&self, py: Python<'_>) -> PyResult<Vec<Py<PyAny>>> {
        let job = self.run(py)?;
        let sums = detached(py, || job.result())?;
        sums.into_iter().map(|m| wrap(py, m)).collect()
    }

    fn cache(&self, py: Python<'_>) -> PyResult<Option<PyCache>> {
        Ok(self.run(py)?.cache().map(PyCache))
    }

    fn tries(&self, py: Python<'_>) -> PyResult<Vec<(PyMixture, f64, usize)>> {
        match &self.0 {
            Work::Run(_) => Err(internal(py, "a run of measures has no tries")),
            Work::Tries(job) => {
                let found = job.result().map_err(|e| to_py(py, e))?;
                Ok(found.into_iter().map(|t| (PyMixture(Arc::new(t.mixture)), t.log_likelihood, t.passes)).collect())
            }
        }
    }
}

/// Decoded rows kept for later passes.
#[pyclass(name = "Cache", module = "drumlin._core", frozen)]
pub struct PyCache(Cache);

#[pymethods]
impl PyCache {
    #[getter]
    fn rows(&self) -> u64 {
        self.0.rows
    }

    #[getter]
    fn bytes(&self) -> usize {
        self.0.bytes
    }

    #[getter]
    fn whole(&self) -> bool {
        self.0.whole
    }

    fn feed(&self, measures: Vec<PyRef<'_, PyMeasure>>, threads: usize, in_flight: usize) -> PyJob {
        let measures = measures.iter().map(|m| m.fresh(self.0.reading())).collect();
        PyJob(Work::Run(self.0.feed(measures, threads, in_flight)))
    }

    fn start(&self, measures: Vec<PyRef<'_, PyMeasure>>, threads: usize) -> PyJob {
        let measures = measures.iter().map(|m| m.fresh(self.0.reading())).collect();
        PyJob(Work::Run(self.0.start(measures, threads)))
    }
}

/// See [`Job::feed`].
#[pyfunction]
#[pyo3(signature = (reading, measures, *, threads, first_row=0, keep=0, copy=true, in_flight=134_217_728))]
pub fn start_feed(
    py: Python<'_>,
    reading: &PyReading,
    measures: Vec<PyRef<'_, PyMeasure>>,
    threads: usize,
    first_row: u64,
    keep: usize,
    copy: bool,
    in_flight: usize,
) -> PyResult<PyJob> {
    let measures = measures.iter().map(|m| m.fresh(&reading.0)).collect();
    Job::feed(Arc::clone(&reading.0), measures, threads, first_row, keep, copy, in_flight)
        .map(|job| PyJob(Work::Run(job)))
        .map_err(|e| to_py(py, e))
}

/// See [`TriesJob::start`].
#[pyfunction]
#[pyo3(signature = (values, weights, scaling, *, components, structure, pooled, floor, start_from, tries, passes, seed, threads))]
pub fn start_tries(
    py: Python<'_>,
    values: Floats<'_>,
    weights: Floats<'_>,
    scaling: &PyScaling,
    components: usize,
    structure: &str,
    pooled: bool,
    floor: f64,
    start_from: &str,
    tries: usize,
    passes: usize,
    seed: u64,
    threads: usize,
) -> PyResult<PyJob> {
    let settings = Structure::parse(structure).and_then(|s| {
        Ok(Settings {
            components,
            shape: Shape::new(s, pooled),
            floor,
            start_from: StartFrom::parse(start_from)?,
            tries,
            passes,
            seed,
        })
    });
    let settings = settings.map_err(|e| to_py(py, e))?;
    let (values, weights, scaling) = (arrays::values(&values), arrays::values(&weights), Arc::clone(&scaling.0));
    detached(py, move || TriesJob::start(values, weights, scaling, settings, threads))
        .map(|job| PyJob(Work::Tries(job)))
}
