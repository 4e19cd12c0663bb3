//! `pack` and `unpack`: the container of model files.

use crate::arrays;
use crate::errors::{internal, to_py};
use drumlin_core::container::{self, Tensor, TensorData};
use numpy::PyReadonlyArrayDyn;
use pyo3::prelude::*;
use pyo3::types::{PyBytes, PyDict};

/// One JSON string and named arrays to bytes.
#[pyfunction]
pub fn pack<'py>(py: Python<'py>, meta: &str, tensors: &Bound<'py, PyDict>) -> PyResult<Bound<'py, PyBytes>> {
    let mut list = Vec::new();
    for (name, value) in tensors.iter() {
        let name: String = name.extract()?;
        macro_rules! attempt {
            ($($native:ty => $kind:ident),+) => {
                $(if let Ok(array) = value.extract::<PyReadonlyArrayDyn<'py, $native>>() {
                    let data = TensorData::$kind(arrays::values(&array));
                    list.push((name, Tensor { shape: arrays::shape(&array), data }));
                    continue;
                })+
            };
        }
        attempt!(f64 => F64, i64 => I64, i32 => I32, u64 => U64);
        return Err(internal(py, &format!("array {name:?} has a type that the file does not hold")));
    }
    container::pack(meta, &list).map(|bytes| PyBytes::new(py, &bytes)).map_err(|e| to_py(py, e))
}

/// Bytes to the JSON string and the arrays; checks the whole container.
#[pyfunction]
pub fn unpack<'py>(py: Python<'py>, data: &[u8]) -> PyResult<(String, Bound<'py, PyDict>)> {
    let (meta, list) = container::unpack(data).map_err(|e| to_py(py, e))?;
    let tensors = PyDict::new(py);
    for (name, tensor) in list {
        let Tensor { shape, data } = tensor;
        match data {
            TensorData::F64(v) => tensors.set_item(name, arrays::array(py, v, &shape)?)?,
            TensorData::I64(v) => tensors.set_item(name, arrays::array(py, v, &shape)?)?,
            TensorData::I32(v) => tensors.set_item(name, arrays::array(py, v, &shape)?)?,
            TensorData::U64(v) => tensors.set_item(name, arrays::array(py, v, &shape)?)?,
        }
    }
    Ok((meta, tensors))
}
