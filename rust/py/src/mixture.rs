//! `Mixture` and `Scaling`: values with getters.

use crate::arrays::{self, Floats};
use crate::errors::{detached, to_py};
use drumlin_core::Error;
use drumlin_core::mixture::{Mixture, Shape, Structure};
use drumlin_core::random::Stream;
use drumlin_core::scaling::Scaling;
use numpy::{PyArray1, PyArrayDyn};
use pyo3::prelude::*;
use std::sync::Arc;

/// Rows and the positions of their components.
type Drawn<'py> = (Bound<'py, PyArrayDyn<f64>>, Bound<'py, PyArray1<i32>>);

/// Centre and spread per column.
#[pyclass(name = "Scaling", module = "drumlin._core", frozen)]
pub struct PyScaling(pub Arc<Scaling>);

#[pymethods]
impl PyScaling {
    #[new]
    fn new(py: Python<'_>, centre: Floats<'_>, spread: Floats<'_>) -> PyResult<Self> {
        let made = Scaling::new(arrays::values(&centre), arrays::values(&spread));
        made.map(|s| Self(Arc::new(s))).map_err(|e| to_py(py, e))
    }

    #[getter]
    fn centre<'py>(&self, py: Python<'py>) -> Bound<'py, PyArray1<f64>> {
        arrays::vector(py, self.0.centre().to_vec())
    }

    #[getter]
    fn spread<'py>(&self, py: Python<'py>) -> Bound<'py, PyArray1<f64>> {
        arrays::vector(py, self.0.spread().to_vec())
    }
}

/// See [`Scaling::robust`].
#[pyfunction]
pub fn robust_scaling(
    py: Python<'_>,
    values: Floats<'_>,
    weights: Floats<'_>,
    least: Floats<'_>,
    most: Floats<'_>,
) -> PyResult<PyScaling> {
    let (v, w, l, m) =
        (arrays::values(&values), arrays::values(&weights), arrays::values(&least), arrays::values(&most));
    detached(py, move || Scaling::robust(&v, &w, &l, &m)).map(|s| PyScaling(Arc::new(s)))
}

/// A mixture in the units of the columns.
#[pyclass(name = "Mixture", module = "drumlin._core", frozen)]
pub struct PyMixture(pub Arc<Mixture>);

impl PyMixture {
    fn shape_of(py: Python<'_>, structure: &str, pooled: bool) -> PyResult<Shape> {
        Structure::parse(structure).map(|s| Shape::new(s, pooled)).map_err(|e| to_py(py, e))
    }
}

/// Covariances as given (dense, diagonal or single numbers; with or without the axis of components) to those stored.
fn stored(values: Vec<f64>, given: &[usize], k: usize, d: usize, shape: Shape) -> Result<Vec<f64>, Error> {
    let wrong =
        |advice: String| Error::Mixture { what: format!("covariances of shape {given:?}"), component: None, advice };
    let count = shape.matrices(k);
    let each = shape.structure.stored_len(d);
    let dense_shapes: &[&[usize]] = &[&[count, d, d], if shape.pooled { &[d, d] } else { &[count, d, d] }];
    let minimal: Vec<Vec<usize>> = match shape.structure {
        Structure::Full => vec![],
        Structure::Diagonal => vec![vec![count, d], if shape.pooled { vec![d] } else { vec![count, d] }],
        Structure::Spherical => vec![vec![count], if shape.pooled { vec![] } else { vec![count] }],
    };
    if minimal.iter().any(|s| s == given) && values.len() == count * each {
        return Ok(values);
    }
    let mut values = values;
    if shape.pooled && given == [k, d, d] && k > 1 {
        let (first, rest) = values.split_at(d * d);
        if rest.chunks(d * d).any(|c| c != first) {
            return Err(wrong("a pooled mixture has one covariance for all components".into()));
        }
        values.truncate(d * d);
    } else if !dense_shapes.contains(&given) {
        return Err(wrong(format!("give ({count}, {d}, {d})")));
    }
    let mut out = Vec::with_capacity(count * each);
    for (component, dense) in values.chunks(d * d).enumerate() {
        let one = shape.structure.from_full(dense, d);
        let back = shape.structure.dense(&one, d);
        let off = dense.iter().zip(&back).any(|(a, b)| (a - b).abs() > 1e-12 * b.abs().max(back[0].abs()));
        if shape.structure != Structure::Full && off {
            return Err(Error::Mixture {
                what: "the covariance is not of the structure asked for".into(),
                component: Some(component),
                advice: "give structure=\"full\", or set what the structure leaves out to zero".into(),
            });
        }
        out.extend(one);
    }
    Ok(out)
}

#[pymethods]
impl PyMixture {
    #[new]
    #[pyo3(signature = (weights, means, covariances, structure = "full", pooled = false))]
    fn new(
        py: Python<'_>,
        weights: Floats<'_>,
        means: Floats<'_>,
        covariances: Floats<'_>,
        structure: &str,
        pooled: bool,
    ) -> PyResult<Self> {
        let shape = Self::shape_of(py, structure, pooled)?;
        let given = arrays::shape(&means);
        let (weights, means) = (arrays::values(&weights), arrays::values(&means));
        let k = weights.len();
        let made = (|| {
            if given.len() != 2 || given[0] != k || given[1] == 0 {
                return Err(Error::Mixture {
                    what: format!("means of shape {given:?} for {k} weights"),
                    component: None,
                    advice: "give one row of means a component".into(),
                });
            }
            let d = given[1];
            let stored = stored(arrays::values(&covariances), &arrays::shape(&covariances), k, d, shape)?;
            Mixture::new(weights, means, stored, d, shape)
        })();
        made.map(|m| Self(Arc::new(m))).map_err(|e| to_py(py, e))
    }

    #[getter]
    fn weights<'py>(&self, py: Python<'py>) -> Bound<'py, PyArray1<f64>> {
        arrays::vector(py, self.0.weights().to_vec())
    }

    #[getter]
    fn means<'py>(&self, py: Python<'py>) -> PyResult<Bound<'py, PyArrayDyn<f64>>> {
        arrays::array(py, self.0.means().to_vec(), &[self.0.components(), self.0.dims()])
    }

    #[getter]
    fn covariances<'py>(&self, py: Python<'py>) -> PyResult<Bound<'py, PyArrayDyn<f64>>> {
        let (k, d) = (self.0.components(), self.0.dims());
        arrays::array(py, (0..k).flat_map(|c| self.0.covariance(c)).collect(), &[k, d, d])
    }

    #[getter]
    fn stored<'py>(&self, py: Python<'py>) -> PyResult<Bound<'py, PyArrayDyn<f64>>> {
        let (count, d) = (self.0.shape().matrices(self.0.components()), self.0.dims());
        let shape = match self.0.shape().structure {
            Structure::Full => vec![count, d, d],
            Structure::Diagonal => vec![count, d],
            Structure::Spherical => vec![count],
        };
        arrays::array(py, self.0.stored().to_vec(), &shape)
    }

    #[getter]
    fn structure(&self) -> &'static str {
        self.0.shape().structure.name()
    }

    #[getter]
    fn pooled(&self) -> bool {
        self.0.shape().pooled
    }

    #[getter]
    fn components(&self) -> usize {
        self.0.components()
    }

    #[getter]
    fn dimensions(&self) -> usize {
        self.0.dims()
    }

    #[getter]
    fn free_parameters(&self) -> u64 {
        self.0.free_parameters()
    }

    fn reorder(&self, py: Python<'_>, order: Vec<usize>) -> PyResult<Self> {
        self.0.reorder(&order).map(|m| Self(Arc::new(m))).map_err(|e| to_py(py, e))
    }

    fn reshape(&self, py: Python<'_>, structure: &str, pooled: bool) -> PyResult<Self> {
        let shape = Self::shape_of(py, structure, pooled)?;
        self.0.reshape(shape).map(|m| Self(Arc::new(m))).map_err(|e| to_py(py, e))
    }

    fn draw<'py>(&self, py: Python<'py>, rows: usize, seed: u64) -> PyResult<Drawn<'py>> {
        let mixture = Arc::clone(&self.0);
        let (values, labels) = detached(py, move || mixture.draw(rows, &mut Stream::new(seed, 0)))?;
        Ok((arrays::array(py, values, &[rows, self.0.dims()])?, arrays::vector(py, labels)))
    }
}
