//! Core errors to the exceptions of `drumlin.errors`: one total match.

use drumlin_core::Error;
use pyo3::exceptions::PyRuntimeError;
use pyo3::prelude::*;
use pyo3::types::PyDict;
use std::panic::{AssertUnwindSafe, catch_unwind};

fn raise(py: Python<'_>, class: &str, message: String, facts: &Bound<'_, PyDict>) -> PyErr {
    let made = py
        .import("drumlin.errors")
        .and_then(|module| module.getattr(class))
        .and_then(|class| class.call((message.as_str(),), Some(facts)));
    match made {
        Ok(error) => PyErr::from_value(error),
        Err(_) => PyRuntimeError::new_err(message),
    }
}

/// The exception for an error of the core.
pub fn to_py(py: Python<'_>, error: Error) -> PyErr {
    let message = error.to_string();
    let facts = PyDict::new(py);
    let set = |name: &str, value: Bound<'_, PyAny>| facts.set_item(name, value);
    let filled = (|| -> PyResult<&str> {
        Ok(match &error {
            Error::Mixture { component, .. } => {
                if let Some(k) = component {
                    set("component", k.into_pyobject(py)?.into_any())?;
                }
                "MixtureError"
            }
            Error::NotPositiveDefinite { component, pivot } => {
                set("component", component.into_pyobject(py)?.into_any())?;
                set("pivot", pivot.into_pyobject(py)?.into_any())?;
                "MixtureError"
            }
            Error::Column { column, .. } => {
                set("column", column.into_pyobject(py)?.into_any())?;
                "DataError"
            }
            Error::Schema { name, .. } => {
                set("column", name.into_pyobject(py)?.into_any())?;
                "SchemaError"
            }
            Error::Row { row, name, .. } => {
                set("row", row.into_pyobject(py)?.into_any())?;
                set("column", name.into_pyobject(py)?.into_any())?;
                "DataError"
            }
            Error::Option { option, .. } => {
                set("option", option.into_pyobject(py)?.into_any())?;
                "OptionError"
            }
            Error::Data { .. } => "DataError",
            Error::Damaged { .. } => "DamagedFileError",
            Error::Internal { .. } => "InternalError",
        })
    })();
    match filled {
        Ok(class) => raise(py, class, message, &facts),
        Err(error) => error,
    }
}

/// Runs `work` without the interpreter lock; errors and panics become exceptions.
pub fn detached<T: Send>(py: Python<'_>, work: impl FnOnce() -> Result<T, Error> + Send) -> PyResult<T> {
    let outcome = py.detach(|| catch_unwind(AssertUnwindSafe(work)));
    outcome
        .unwrap_or_else(|_| Err(Error::Internal { what: "the core panicked".into() }))
        .map_err(|error| to_py(py, error))
}

/// An exception of `drumlin.errors` for a fault in how Python called the core.
pub fn internal(py: Python<'_>, what: &str) -> PyErr {
    to_py(py, Error::Internal { what: what.into() })
}
