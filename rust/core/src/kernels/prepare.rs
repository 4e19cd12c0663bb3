//! Rows of an array turned into the columns of a block, and a block scaled in place.

use super::evaluator::BLOCK_STRIDE;
use super::lanes::{Kernel, Lanes};
use super::tier;
use crate::scaled::scale_vector;

struct Transpose<'a, T> {
    rows: &'a [T],
    d: usize,
    x: &'a mut [f64],
}

/// The first `N` values, widened.
#[inline(always)]
pub fn widened<L: Lanes, T: Copy + Into<f64>>(l: L, from: &[T]) -> L::V {
    let from = &from[..L::N];
    let mut wide = [0.0; 8];
    for i in 0..L::N {
        wide[i] = from[i].into();
    }
    l.load(&wide)
}

impl<T: Copy + Into<f64>> Kernel for Transpose<'_, T> {
    type Out = ();
    #[inline(always)]
    fn run<L: Lanes>(self, l: L) {
        let Self { rows, d, x } = self;
        let n = rows.len() / d;
        let mut square = [l.splat(0.0); 8];
        let mut row = 0;
        // A square may reach beyond the end of its rows, into the next ones; what it finds there is not stored.
        while row + L::N <= n && (row + L::N - 1) * d + d.div_ceil(L::N) * L::N <= rows.len() {
            for c in (0..d).step_by(L::N) {
                for i in 0..L::N {
                    square[i] = widened(l, &rows[(row + i) * d + c..]);
                }
                l.transpose(&mut square[..L::N]);
                for i in 0..(d - c).min(L::N) {
                    l.store(square[i], &mut x[(c + i) * BLOCK_STRIDE + row..]);
                }
            }
            row += L::N;
        }
        for row in row..n {
            for j in 0..d {
                x[j * BLOCK_STRIDE + row] = rows[row * d + j].into();
            }
        }
    }
}

/// Writes rows of `d` values that lie one after the other as columns: value j of row i to `x[j * BLOCK_STRIDE + i]`.
pub fn transpose<T: Copy + Into<f64>>(rows: &[T], d: usize, x: &mut [f64]) {
    tier::run(Transpose { rows, d, x });
}

struct Scale<'a> {
    centre: &'a [f64],
    inverse: &'a [f64],
    n: usize,
    x: &'a mut [f64],
}

impl Kernel for Scale<'_> {
    type Out = bool;
    #[inline(always)]
    fn run<L: Lanes>(self, l: L) -> bool {
        let Self { centre, inverse, n, x } = self;
        let width = n.div_ceil(L::N) * L::N;
        // x - x is 0 for finite values and NaN otherwise, and a sum keeps a NaN.
        let mut sum = l.splat(0.0);
        for ((column, &centre), &inverse) in x.chunks_exact_mut(BLOCK_STRIDE).zip(centre).zip(inverse) {
            column[n..width].fill(centre);
            let (centre, inverse) = (l.splat(centre), l.splat(inverse));
            for to in column[..width].chunks_exact_mut(L::N) {
                let raw = l.load(to);
                sum = l.add(sum, l.sub(raw, raw));
                l.store(scale_vector(l, raw, (centre, inverse)), to);
            }
        }
        let mut sums = [0.0; 8];
        l.store(sum, &mut sums);
        sums.iter().all(|s| *s == 0.0)
    }
}

/// Centres and scales `n` rows in place, held within ±[`FAR`]; rows up to a whole vector become 0. Returns whether every
/// value was finite: if not, the block is spoilt.
pub fn scale(centre: &[f64], inverse: &[f64], n: usize, x: &mut [f64]) -> bool {
    tier::run(Scale { centre, inverse, n, x })
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::kernels::BLOCK;
    use crate::kernels::plain::alone;
    use crate::kernels::tier::Tier;
    use crate::leaf::FAR;

    #[test]
    fn every_value_of_every_shape_finds_its_place_on_every_tier() {
        let _guard = alone();
        for tier in Tier::ALL.into_iter().filter(|t| t.usable()) {
            assert!(tier::force(Some(tier)));
            for d in 1..=19 {
                for n in [0, 1, 2, 7, 8, 9, 15, 16, 17, 40, BLOCK - 1, BLOCK] {
                    let rows: Vec<f64> = (0..n * d).map(|i| i as f64 + 0.5).collect();
                    let narrow: Vec<f32> = rows.iter().map(|v| *v as f32).collect();
                    let (mut x, mut y) = (vec![-1.0; d * BLOCK_STRIDE], vec![-1.0; d * BLOCK_STRIDE]);
                    transpose(&rows, d, &mut x);
                    transpose(&narrow, d, &mut y);
                    for j in 0..d {
                        let column = &x[j * BLOCK_STRIDE..][..BLOCK_STRIDE];
                        assert!((0..n).all(|i| column[i] == rows[i * d + j]), "{} d={d} n={n}", tier.name());
                        assert!(column[n..].iter().all(|v| *v == -1.0), "{} d={d} n={n}", tier.name());
                    }
                    assert_eq!(x, y);
                }
            }
        }
        tier::force(None);
    }

    #[test]
    fn scaling_has_the_bits_of_the_formula_and_finds_what_is_not_finite() {
        let _guard = alone();
        let (centre, inverse) = ([3.0, -1e-3], [0.25, 1024.0]);
        for tier in Tier::ALL.into_iter().filter(|t| t.usable()) {
            assert!(tier::force(Some(tier)));
            for n in 1..=25 {
                let mut raw = vec![f64::NAN; 2 * BLOCK_STRIDE];
                for i in 0..n {
                    let far = [1.0, -0.0, f64::MAX, f64::MIN, 1e144][i % 5];
                    (raw[i], raw[BLOCK_STRIDE + i]) = (0.37 * i as f64, far);
                }
                let mut x = raw.clone();
                assert!(scale(&centre, &inverse, n, &mut x));
                for j in 0..2 {
                    for i in 0..n {
                        let want = ((raw[j * BLOCK_STRIDE + i] - centre[j]) * inverse[j]).clamp(-FAR, FAR);
                        assert_eq!(x[j * BLOCK_STRIDE + i].to_bits(), want.to_bits(), "{} n={n}", tier.name());
                    }
                }
                for bad in [f64::NAN, f64::INFINITY, f64::NEG_INFINITY] {
                    for at in [0, n - 1, BLOCK_STRIDE + n - 1] {
                        let mut x = raw.clone();
                        x[at] = bad;
                        assert!(!scale(&centre, &inverse, n, &mut x), "{} n={n} {bad} at {at}", tier.name());
                    }
                }
            }
        }
        tier::force(None);
    }
}
