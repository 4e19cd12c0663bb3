//! drumlin._core: conversion between Python and drumlin-core. No mathematics here.

mod arrays;
mod errors;
mod file;
mod jobs;
mod measures;
mod mixture;
mod reading;
mod scorer;

use drumlin_core::kernels::tier::{self, Tier};
use drumlin_core::profile;
use numpy::PyArray1;
use pyo3::prelude::*;
use pyo3::types::PyDict;
use std::collections::BTreeMap;

/// How this binary was built.
#[pyfunction]
fn build_info() -> BTreeMap<&'static str, String> {
    BTreeMap::from([
        ("version", env!("CARGO_PKG_VERSION").to_string()),
        ("profile", if cfg!(debug_assertions) { "debug" } else { "release" }.to_string()),
        ("processor", std::env::consts::ARCH.to_string()),
    ])
}

/// The instruction set in use.
#[pyfunction]
fn kernel_tier() -> &'static str {
    tier::current().name()
}

/// Those this processor has, fastest first.
#[pyfunction]
fn kernel_tiers() -> Vec<&'static str> {
    tier::usable().into_iter().map(Tier::name).collect()
}

/// Forces one for the whole process, for tests.
#[pyfunction]
fn force_kernel_tier(py: Python<'_>, name: Option<&str>) -> PyResult<()> {
    let found = name.map(|n| Tier::ALL.into_iter().find(|t| t.name() == n));
    match found {
        Some(None) => Err(errors::internal(py, "no such instruction set")),
        Some(Some(t)) if !tier::force(Some(t)) => Err(errors::internal(py, "this processor lacks the instruction set")),
        None => {
            tier::force(None);
            Ok(())
        }
        _ => Ok(()),
    }
}

/// See [`profile::sample_profile`].
#[pyfunction]
fn sample_profile<'py>(
    py: Python<'py>,
    values: arrays::Floats<'py>,
    weights: arrays::Floats<'py>,
) -> PyResult<Bound<'py, PyDict>> {
    let d = arrays::shape(&values).get(1).copied().unwrap_or(0);
    let (v, w) = (arrays::values(&values), arrays::values(&weights));
    let found = errors::detached(py, move || profile::sample_profile(&v, &w, d))?;
    let table = PyDict::new(py);
    table.set_item("quantiles", arrays::array(py, found.quantiles, &[d, 7])?)?;
    table.set_item("distinct", found.distinct)?;
    table.set_item("integers", found.integers)?;
    table.set_item("repeated", found.repeated)?;
    table.set_item("correlations", arrays::array(py, found.correlations, &[d, d])?)?;
    Ok(table)
}

/// The compiled core of drumlin.
#[pymodule]
fn _core(module: &Bound<'_, PyModule>) -> PyResult<()> {
    // NumPy's own functions are looked up now: the look-up panics where an interrupt comes in its middle.
    drop(PyArray1::<f64>::zeros(module.py(), 0, false));
    module.add("SINGLE_RANGE", drumlin_core::scaled::SINGLE_FAR)?;
    module.add("LEAF_ROWS", drumlin_core::leaf::LEAF_ROWS)?;
    module.add("TASK_LEAVES", drumlin_core::leaf::TASK_LEAVES)?;
    module.add("MOST_COMPONENTS", drumlin_core::mixture::MOST_COMPONENTS)?;
    module.add_function(wrap_pyfunction!(build_info, module)?)?;
    module.add_function(wrap_pyfunction!(kernel_tier, module)?)?;
    module.add_function(wrap_pyfunction!(kernel_tiers, module)?)?;
    module.add_function(wrap_pyfunction!(force_kernel_tier, module)?)?;
    module.add_function(wrap_pyfunction!(sample_profile, module)?)?;
    module.add_function(wrap_pyfunction!(file::pack, module)?)?;
    module.add_function(wrap_pyfunction!(file::unpack, module)?)?;
    module.add_function(wrap_pyfunction!(mixture::robust_scaling, module)?)?;
    module.add_function(wrap_pyfunction!(jobs::start_feed, module)?)?;
    module.add_function(wrap_pyfunction!(jobs::start_tries, module)?)?;
    module.add_class::<mixture::PyScaling>()?;
    module.add_class::<mixture::PyMixture>()?;
    module.add_class::<reading::PyReading>()?;
    module.add_class::<measures::PyMeasure>()?;
    module.add_class::<measures::PyEmStatistics>()?;
    module.add_class::<measures::PyScores>()?;
    module.add_class::<measures::PySample>()?;
    module.add_class::<measures::PyColumnSummary>()?;
    module.add_class::<measures::PyTree>()?;
    module.add_class::<jobs::PyJob>()?;
    module.add_class::<jobs::PyCache>()?;
    module.add_class::<scorer::PyScorer>()?;
    module.add_class::<scorer::PyStopping>()?;
    Ok(())
}
