//! What the columns of a sample look like: quantiles, distinct and repeated values, correlations.

use crate::error::{Error, Result};

/// The quantiles that are taken of each column.
pub const QUANTILES: [f64; 7] = [0.0, 0.01, 0.25, 0.5, 0.75, 0.99, 1.0];
/// Least share of the rows at which a value counts as repeated.
const REPEATED_SHARE: f64 = 0.005;
/// Most repeated values that are named of a column.
const REPEATED_COUNT: usize = 8;

/// The columns of a sample. A value that is NaN or infinite is a gap, and a row of weight zero is absent.
#[derive(Clone, Debug, PartialEq)]
pub struct SampleProfile {
    /// Number of columns.
    pub columns: usize,
    /// Per column the weighted quantiles at [`QUANTILES`], 7 values; NaN where the column has no values.
    pub quantiles: Vec<f64>,
    /// Per column the number of distinct values in the sample.
    pub distinct: Vec<u64>,
    /// Per column whether all of its values (at least one) are whole numbers.
    pub integers: Vec<bool>,
    /// Per column the values that come twice or more and make up at least 0.005 of the weight of the present values,
    /// with that share: at most 8, the most frequent first, ties by value.
    pub repeated: Vec<Vec<(f64, f64)>>,
    /// Weighted correlations, `columns` by `columns`, over the rows where both values are present; NaN where one of
    /// the two does not vary there.
    pub correlations: Vec<f64>,
}

/// Profiles a sample of rows: `values` row after row with `d` columns each, one weight per row.
///
/// Sorts each column and visits each pair of columns once: time `n d (log n + d)`, memory about that of `values` twice.
/// Lengths that do not agree are an internal error, a weight that is negative or not finite is a data error.
pub fn sample_profile(values: &[f64], weights: &[f64], d: usize) -> Result<SampleProfile> {
    let n = weights.len();
    if n.checked_mul(d) != Some(values.len()) {
        return Err(Error::Internal { what: "a sample's values and weights differ in length".into() });
    }
    if let Some(i) = weights.iter().position(|w| !(*w >= 0.0 && w.is_finite())) {
        return Err(Error::Data {
            what: format!("sample row {i} has a weight of {}", weights[i]),
            advice: "weights must be zero or positive numbers".into(),
        });
    }
    // Relative weights, so that no sum overflows.
    let most = weights.iter().fold(0.0f64, |m, w| m.max(*w));
    let used: Vec<usize> = (0..n).filter(|&i| weights[i] > 0.0).collect();
    let weights: Vec<f64> = used.iter().map(|&i| weights[i] / most).collect();
    let mut profile = SampleProfile {
        columns: d,
        quantiles: Vec::with_capacity(d * QUANTILES.len()),
        distinct: Vec::with_capacity(d),
        integers: Vec::with_capacity(d),
        repeated: Vec::with_capacity(d),
        correlations: vec![f64::NAN; d * d],
    };
    let mut centred = Vec::with_capacity(d);
    for j in 0..d {
        let column: Vec<f64> = used.iter().map(|&i| values[i * d + j]).collect();
        let mut sorted: Vec<(f64, f64)> =
            column.iter().zip(&weights).filter(|(v, _)| v.is_finite()).map(|(v, w)| (*v + 0.0, *w)).collect();
        sorted.sort_unstable_by(|a, b| a.0.total_cmp(&b.0).then(a.1.total_cmp(&b.1)));
        let quantiles = QUANTILES.map(|p| quantile(&sorted, p));
        profile.quantiles.extend(quantiles);
        profile.integers.push(!sorted.is_empty() && sorted.iter().all(|(v, _)| v.trunc() == *v));
        let (distinct, repeated) = repeats(&sorted);
        profile.distinct.push(distinct);
        profile.repeated.push(repeated);
        centred.push(Centred::new(column, &weights, &quantiles));
    }
    for a in 0..d {
        for b in 0..=a {
            let r =
                if a == b { centred[a].self_correlation() } else { correlation(&centred[a], &centred[b], &weights) };
            profile.correlations[a * d + b] = r;
            profile.correlations[b * d + a] = r;
        }
    }
    Ok(profile)
}

/// The least value up to which the share `p` of the weight lies; the middle of two where the share ends between them.
fn quantile(sorted: &[(f64, f64)], p: f64) -> f64 {
    let (Some(first), Some(last)) = (sorted.first(), sorted.last()) else { return f64::NAN };
    if p <= 0.0 {
        return first.0;
    }
    let goal = p * sorted.iter().map(|s| s.1).sum::<f64>();
    let mut sum = 0.0;
    for (i, &(value, weight)) in sorted.iter().enumerate() {
        sum += weight;
        if sum >= goal {
            let next = sorted.get(i + 1).map_or(value, |s| s.0);
            return if sum == goal { 0.5 * value + 0.5 * next } else { value };
        }
    }
    last.0
}

/// Number of distinct values, and the repeated ones with their shares.
fn repeats(sorted: &[(f64, f64)]) -> (u64, Vec<(f64, f64)>) {
    let total: f64 = sorted.iter().map(|s| s.1).sum();
    let (mut distinct, mut repeated) = (0, Vec::new());
    for run in sorted.chunk_by(|a, b| a.0 == b.0) {
        distinct += 1;
        let share = run.iter().map(|s| s.1).sum::<f64>() / total;
        if run.len() > 1 && share >= REPEATED_SHARE {
            repeated.push((run[0].0, share));
        }
    }
    repeated.sort_by(|a, b| b.1.total_cmp(&a.1).then(a.0.total_cmp(&b.0)));
    repeated.truncate(REPEATED_COUNT);
    (distinct, repeated)
}

/// A column less its median and then its mean, scaled into about ±1; gaps are 0.
struct Centred {
    values: Vec<f64>,
    /// Which rows have a value; none: all of them.
    present: Option<Vec<bool>>,
    /// Weighted sum of squares.
    squares: f64,
    varies: bool,
}

impl Centred {
    fn new(mut values: Vec<f64>, weights: &[f64], quantiles: &[f64; 7]) -> Self {
        let (least, median, most) = (quantiles[0], quantiles[3], quantiles[6]);
        let present: Vec<bool> = values.iter().map(|v| v.is_finite()).collect();
        // Halves, so that no difference overflows.
        let reach = (0.5 * most - 0.5 * median).max(0.5 * median - 0.5 * least);
        let varies = reach > 0.0;
        let (mut sum, mut total) = (0.0, 0.0);
        for ((v, here), w) in values.iter_mut().zip(&present).zip(weights) {
            *v = if *here && varies { (0.5 * *v - 0.5 * median) / reach } else { 0.0 };
            if *here {
                sum += w * *v;
                total += w;
            }
        }
        let mean = if varies { sum / total } else { 0.0 };
        let mut squares = 0.0;
        for ((v, here), w) in values.iter_mut().zip(&present).zip(weights) {
            if *here {
                *v -= mean;
                squares += w * *v * *v;
            }
        }
        let present = present.contains(&false).then_some(present);
        Self { values, present, squares, varies }
    }

    fn self_correlation(&self) -> f64 {
        if self.varies { 1.0 } else { f64::NAN }
    }
}

/// Weighted correlation over the rows where both are present.
fn correlation(a: &Centred, b: &Centred, weights: &[f64]) -> f64 {
    if !a.varies || !b.varies {
        return f64::NAN;
    }
    if a.present.is_none() && b.present.is_none() {
        let product: f64 = weights.iter().zip(&a.values).zip(&b.values).map(|((w, x), y)| w * x * y).sum();
        return bounded(product, a.squares, b.squares);
    }
    let here = |c: &Centred, i: usize| c.present.as_ref().is_none_or(|p| p[i]);
    let pairs: Vec<(f64, f64, f64)> = (0..weights.len())
        .filter(|&i| here(a, i) && here(b, i))
        .map(|i| (weights[i], a.values[i], b.values[i]))
        .collect();
    let Some(&(_, x0, y0)) = pairs.first() else { return f64::NAN };
    // A column that is constant over these rows must not get a variance from rounding.
    if pairs.iter().all(|p| p.1 == x0) || pairs.iter().all(|p| p.2 == y0) {
        return f64::NAN;
    }
    let (mut total, mut x_mean, mut y_mean) = (0.0, 0.0, 0.0);
    for (w, x, y) in &pairs {
        total += w;
        x_mean += w * (x - x0);
        y_mean += w * (y - y0);
    }
    let (x_mean, y_mean) = (x0 + x_mean / total, y0 + y_mean / total);
    let (mut xx, mut yy, mut xy) = (0.0, 0.0, 0.0);
    for (w, x, y) in &pairs {
        let (x, y) = (x - x_mean, y - y_mean);
        xx += w * x * x;
        yy += w * y * y;
        xy += w * x * y;
    }
    bounded(xy, xx, yy)
}

/// The correlation from its three sums, within ±1; NaN where a variance is too small to be seen.
fn bounded(xy: f64, xx: f64, yy: f64) -> f64 {
    let r = xy / (xx.sqrt() * yy.sqrt());
    if r.is_finite() { r.clamp(-1.0, 1.0) } else { f64::NAN }
}

#[cfg(test)]
mod tests {
    use super::*;

    const GAP: f64 = f64::NAN;

    fn one(values: &[f64], weights: &[f64]) -> SampleProfile {
        sample_profile(values, weights, 1).unwrap()
    }

    #[test]
    fn quantiles_by_weight() {
        let found = one(&[3.0, 1.0, 2.0, 4.0], &[1.0; 4]);
        assert_eq!(found.quantiles, [1.0, 1.0, 1.5, 2.5, 3.5, 4.0, 4.0]);
        // A weight of two equals the row twice, zero equals absent, a gap is not counted.
        let found = one(&[5.0, 1.0, 9.0, GAP, 7.0], &[2.0, 1.0, 1.0, 8.0, 0.0]);
        let twice = one(&[5.0, 5.0, 1.0, 9.0], &[3.0; 4]);
        assert_eq!(found.quantiles, twice.quantiles);
        assert_eq!(found.quantiles[3], 5.0);
        assert!(one(&[GAP, f64::INFINITY], &[1.0; 2]).quantiles.iter().all(|q| q.is_nan()));
        assert!(one(&[], &[]).quantiles[0].is_nan());
        let wide = one(&[f64::MAX, -f64::MAX], &[f64::MAX; 2]);
        assert_eq!((wide.quantiles[0], wide.quantiles[3], wide.quantiles[6]), (-f64::MAX, 0.0, f64::MAX));
    }

    #[test]
    fn distinct_integers_and_repeats() {
        let mut values: Vec<f64> = (0..900).map(|i| i as f64 + 0.5).collect();
        values.extend([-9999.0; 60]);
        values.extend([0.0; 39]);
        values.push(-0.0);
        let found = one(&values, &vec![2.0; 1000]);
        assert_eq!((found.distinct[0], found.integers[0]), (902, false));
        assert_eq!(found.repeated[0], [(-9999.0, 0.06), (0.0, 0.04)]);
        let whole: Vec<f64> = (0..1000).map(|i| (i % 20) as f64).collect();
        let found = one(&whole, &vec![1.0; 1000]);
        assert_eq!((found.distinct[0], found.integers[0], found.repeated[0].len()), (20, true, 8));
        assert_eq!(found.repeated[0][7], (7.0, 0.05));
        let none = one(&[GAP], &[1.0]);
        assert_eq!((none.distinct[0], none.integers[0], none.repeated[0].len()), (0, false, 0));
        assert!(one(&[1.0, 2.0], &[1.0; 2]).repeated[0].is_empty());
    }

    #[test]
    fn correlations_over_pairs() {
        // Columns: x, -3 x + 1e12, x with gaps, constant.
        let mut values = Vec::new();
        for i in 0..200 {
            let x = ((i * 37) % 101) as f64;
            values.extend([x, 1e12 - 3.0 * x, if i % 3 == 0 { GAP } else { x * 1e300 }, 0.1]);
        }
        let found = sample_profile(&values, &vec![1.5; 200], 4).unwrap();
        let r = |a: usize, b: usize| found.correlations[a * 4 + b];
        assert!((r(0, 1) + 1.0).abs() < 1e-9 && (r(0, 2) - 1.0).abs() < 1e-9 && (r(1, 2) + 1.0).abs() < 1e-9);
        assert!(r(0, 0) == 1.0 && r(2, 2) == 1.0);
        assert!((0..4).all(|j| r(3, j).is_nan() && r(j, 3).is_nan()));
        // A plain formula with uneven weights.
        let (x, y, w) = ([1.0, 2.0, 4.0, 7.0], [2.0, 1.0, 5.0, 3.0], [1.0, 2.0, 3.0, 4.0]);
        let values: Vec<f64> = x.iter().zip(&y).flat_map(|(a, b)| [*a, *b]).collect();
        let mean = |v: &[f64]| v.iter().zip(&w).map(|(v, w)| v * w).sum::<f64>() / 10.0;
        let product = |a: &[f64], b: &[f64]| {
            let (p, q) = (mean(a), mean(b));
            a.iter().zip(b).zip(&w).map(|((a, b), w)| w * (a - p) * (b - q)).sum::<f64>()
        };
        let wanted = product(&x, &y) / (product(&x, &x) * product(&y, &y)).sqrt();
        let found = sample_profile(&values, &w, 2).unwrap();
        assert!((found.correlations[1] - wanted).abs() < 1e-14);
        // The same with a gap in each column beside these rows.
        let values = [values, vec![GAP, 1e300, -1e300, GAP]].concat();
        let found = sample_profile(&values, &[1.0, 2.0, 3.0, 4.0, 5.0, 6.0], 2).unwrap();
        assert!(found.correlations[1].is_nan() || found.correlations[1].abs() <= 1.0);
        // Constant where both are present.
        let found = sample_profile(&[1.0, GAP, 0.1, 3.0, 0.1, 5.0], &[1.0; 3], 2).unwrap();
        assert!(found.correlations[1].is_nan());
    }

    #[test]
    fn wrong_input_is_an_error() {
        assert!(sample_profile(&[1.0], &[1.0, 1.0], 1).is_err());
        assert!(sample_profile(&[1.0], &[GAP], 1).is_err());
        assert!(sample_profile(&[1.0], &[-1.0], 1).is_err());
        assert!(sample_profile(&[], &[], 0).unwrap().correlations.is_empty());
        assert_eq!(sample_profile(&[1.0], &[0.0], 1).unwrap().distinct, [0]);
    }
}
