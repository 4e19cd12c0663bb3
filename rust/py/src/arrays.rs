//! NumPy arrays in and out.

use crate::errors::internal;
use drumlin_core::kernels::BLOCK_STRIDE;
use drumlin_core::source::{Matrix, Source};
use numpy::ndarray::{ArrayView2, s};
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

/// The rows of an array with any strides, read where they are.
pub struct Strided<'a, T>(pub ArrayView2<'a, T>);

impl<'a, T: Copy + Into<f64> + Sync> Strided<'a, T> {
    /// The quickest way to read it: rows or columns that lie one after the other need no strides.
    pub fn source(self) -> Box<dyn Source + 'a> {
        let (rows, columns) = self.0.dim();
        let by_rows = self.0.to_slice().and_then(|values| Matrix::new(values, rows, columns, true));
        let by_columns =
            || self.0.reversed_axes().to_slice().and_then(|values| Matrix::new(values, rows, columns, false));
        match by_rows.or_else(by_columns) {
            Some(matrix) => Box::new(matrix),
            None => Box::new(self),
        }
    }
}

impl<T: Copy + Into<f64> + Sync> Source for Strided<'_, T> {
    fn rows(&self) -> usize {
        self.0.nrows()
    }

    fn columns(&self) -> usize {
        self.0.ncols()
    }

    fn first_row(&self) -> u64 {
        0
    }

    fn load(&self, at: usize, n: usize, x: &mut [f64]) {
        for (j, to) in x.chunks_exact_mut(BLOCK_STRIDE).enumerate() {
            for (to, from) in to.iter_mut().zip(self.0.slice(s![at..at + n, j])) {
                *to = (*from).into();
            }
        }
    }
}
