//! Rows drawn from a mixture.

use crate::error::{Error, Result};
use crate::linalg::cholesky;
use crate::mixture::Mixture;
use crate::random::Stream;

impl Mixture {
    /// Draws `rows` rows: values (rows by d, row after row) and the position of the component of each.
    ///
    /// A component is drawn by inverting the cumulative weights, the row as mean + L z with L the Cholesky factor and z
    /// standard normals by inversion.
    ///
    /// # Errors
    /// [`Error::NotPositiveDefinite`] where a covariance has no factor.
    pub fn draw(&self, rows: usize, stream: &mut Stream) -> Result<(Vec<f64>, Vec<i32>)> {
        let (k, d) = (self.components(), self.dims());
        let mut factors = Vec::with_capacity(k);
        for component in 0..k {
            let mut a = self.covariance(component);
            // Factored in units of the standard deviations, so that no square leaves the range of doubles.
            let sd: Vec<f64> = (0..d).map(|j| a[j * d + j].sqrt()).collect();
            for i in 0..d {
                for j in 0..d {
                    a[i * d + j] = a[i * d + j] / sd[i] / sd[j];
                }
            }
            cholesky(&mut a, d).map_err(|pivot| Error::NotPositiveDefinite { component, pivot })?;
            factors.push((a, sd));
        }
        let mut values = Vec::with_capacity(rows * d);
        let mut labels = Vec::with_capacity(rows);
        let mut z = vec![0.0; d];
        for _ in 0..rows {
            let mut left = stream.uniform();
            let mut chosen = k - 1;
            for (component, &weight) in self.weights().iter().enumerate() {
                if left < weight {
                    chosen = component;
                    break;
                }
                left -= weight;
            }
            while self.weights()[chosen] <= 0.0 && chosen > 0 {
                chosen -= 1;
            }
            z.iter_mut().for_each(|v| *v = stream.normal());
            let (l, sd) = &factors[chosen];
            let mean = self.mean(chosen);
            for i in 0..d {
                let sum: f64 = (0..=i).map(|j| l[i * d + j] * z[j]).sum();
                values.push(mean[i] + sd[i] * sum);
            }
            labels.push(chosen as i32);
        }
        Ok((values, labels))
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::mixture::{Shape, Structure};

    #[test]
    fn shares_means_and_covariances_come_back() {
        let shape = Shape::new(Structure::Full, false);
        let stored = vec![1.0, 0.8, 0.8, 4.0, 0.25, 0.0, 0.0, 1.0];
        let m = Mixture::new(vec![0.25, 0.75], vec![0.0, 0.0, 50.0, -3.0], stored, 2, shape).unwrap();
        let n = 40_000;
        let (values, labels) = m.draw(n, &mut Stream::new(3, 0)).unwrap();
        let first: Vec<usize> = (0..n).filter(|&i| labels[i] == 0).collect();
        let share = first.len() as f64 / n as f64;
        assert!((share - 0.25).abs() < 0.011, "{share}"); // 5 standard errors
        let cov: f64 = first.iter().map(|&i| values[2 * i] * values[2 * i + 1]).sum::<f64>() / first.len() as f64;
        assert!((cov - 0.8).abs() < 0.12, "{cov}");
        assert_eq!(m.draw(5, &mut Stream::new(3, 0)).unwrap(), m.draw(5, &mut Stream::new(3, 0)).unwrap());
    }
}
