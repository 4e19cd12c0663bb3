//! NumPy arrays in and out.

use crate::errors::internal;
use numpy::{
    Element, IntoPyArray, PyArray, PyArray1, PyArrayDyn, PyArrayMethods, PyReadonlyArrayDyn, PyUntypedArrayMethods,
};
use pyo3::prelude::*;

/// Float64 arrays of any number of axes.
pub type Floats<'py> = PyReadonlyArrayDyn<'py, f64>;

/// Values in row-major order, whatever the strides.
pub fn values<T: Element + Copy>(array: &PyReadonlyArrayDyn<'_, T>) -> Vec<T> {
    match array.as_slice() {
        Ok(slice) => slice.to_vec(),
        Err(_) => array.as_array().iter().copied().collect(),
    }
}

/// A new array of the given shape.
pub fn array<'py, T: Element>(py: Python<'py>, values: Vec<T>, shape: &[usize]) -> PyResult<Bound<'py, PyArrayDyn<T>>> {
    PyArray1::from_vec(py, values).reshape(shape.to_vec()).map_err(|_| internal(py, "an array of another shape"))
}

/// A new array of one axis.
pub fn vector<T: Element>(py: Python<'_>, values: Vec<T>) -> Bound<'_, PyArray<T, numpy::Ix1>> {
    values.into_pyarray(py)
}

/// The shape of an array.
pub fn shape<T: Element>(array: &PyReadonlyArrayDyn<'_, T>) -> Vec<usize> {
    array.shape().to_vec()
}
