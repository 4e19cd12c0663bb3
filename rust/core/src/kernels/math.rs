//! exp and ln of our own, so that no bit depends on a platform's mathematics library.
//!
//! exp: range reduction by ln 2 in two parts (Cody & Waite 1980), then 1 + r + r^2 q(r) with q of degree 9 (float32: 4)
//! interpolated at Chebyshev nodes in 60 digits; relative error of the polynomial 1.6e-17 (float32: 1.1e-8), of the
//! function below 1 ulp of its type.
//! ln: x = m 2^e with m in [sqrt(1/2), sqrt 2], ln m = 2 atanh f with f = (m - 1)/(m + 1), polynomial in f^2 of degree 7
//! (error 6e-19), error of the function below 2 ulp, and below 3e-17 where |ln x| < 0.1.

use super::lanes::{AnyLanes, Lanes, Scalar};

/// The numbers of exp.
pub trait Exponential: Scalar {
    /// Adding and subtracting this rounds to the nearest integer and leaves it in the low bits.
    const ROUND: Self;
    /// log2 e
    const LOG2_E: Self;
    /// ln 2 in few digits, so that its products with small integers are exact.
    const LN2_HIGH: Self;
    /// The rest of ln 2.
    const LN2_LOW: Self;
    /// q
    const Q: &'static [Self];
}

impl Exponential for f64 {
    const ROUND: f64 = 6755399441055744.0;
    const LOG2_E: f64 = std::f64::consts::LOG2_E;
    const LN2_HIGH: f64 = 0.6931471803691238;
    const LN2_LOW: f64 = 1.9082149292705877e-10;
    const Q: &'static [f64] = &[
        0.5000000000000001,
        0.16666666666666669,
        0.04166666666662413,
        0.008333333333330062,
        0.0013888888917213717,
        0.00019841269863053618,
        2.4801521295954376e-05,
        2.7557268459997064e-06,
        2.7620088445409746e-07,
        2.510038549551032e-08,
    ];
}

impl Exponential for f32 {
    const ROUND: f32 = 12582912.0;
    const LOG2_E: f32 = std::f32::consts::LOG2_E;
    const LN2_HIGH: f32 = 355.0 / 512.0;
    const LN2_LOW: f32 = -0.00021219444;
    const Q: &'static [f32] = &[0.5, 0.16666576, 0.041666556, 0.008363185, 0.0013926191];
}

const LN: [f64; 8] = [
    0.6666666666666666,
    0.4000000000000088,
    0.2857142857080285,
    0.22222222391887064,
    0.18181795621632782,
    0.15386240708969665,
    0.13268746195596595,
    0.13086907887965027,
];

/// exp of `NV` vectors in lock step; every lane in [-700, 700], in float32 [-80, 80].
#[inline(always)]
pub fn exp<L: AnyLanes, const NV: usize>(l: L, x: [L::V; NV]) -> [L::V; NV] {
    let (log2e, round) = (l.splat(L::T::LOG2_E), l.splat(L::T::ROUND));
    let (high, low) = (l.splat(L::T::LN2_HIGH), l.splat(L::T::LN2_LOW));
    let mut t = x;
    let mut r = x;
    for v in 0..NV {
        t[v] = l.fma(x[v], log2e, round);
        let n = l.sub(t[v], round);
        r[v] = l.fnma(n, low, l.fnma(n, high, x[v]));
    }
    let degree = L::T::Q.len() - 1;
    let mut q = [l.splat(L::T::Q[degree]); NV];
    for c in (0..degree).rev() {
        let c = l.splat(L::T::Q[c]);
        for v in 0..NV {
            q[v] = l.fma(q[v], r[v], c);
        }
    }
    let one = l.splat(L::T::ONE);
    for v in 0..NV {
        // 1 + (r + r^2 q): the small terms first
        let p = l.add(one, l.fma(l.mul(r[v], r[v]), q[v], r[v]));
        q[v] = l.scale(p, t[v]);
    }
    q
}

/// ln of positive normal numbers.
#[inline(always)]
pub fn ln<L: Lanes>(l: L, x: L::V) -> L::V {
    let one = l.splat(1.0);
    let root = l.splat(std::f64::consts::SQRT_2);
    let (m, e) = l.split(x);
    let m2 = l.select_gt(m, root, l.mul(m, l.splat(0.5)), m);
    let e = l.select_gt(m, root, l.add(e, one), e);
    let f = l.div(l.sub(m2, one), l.add(m2, one));
    let s = l.mul(f, f);
    let mut q = l.splat(LN[7]);
    for c in (0..7).rev() {
        q = l.fma(q, s, l.splat(LN[c]));
    }
    // 2 f + f s q, with e ln 2 in two parts
    let small = l.fma(l.mul(f, s), q, l.mul(e, l.splat(f64::LN2_LOW)));
    l.add(l.fma(e, l.splat(f64::LN2_HIGH), small), l.add(f, f))
}

/// ln of one positive number (subnormals too), for tables and constants.
pub fn ln_one(x: f64) -> f64 {
    let portable = super::lanes::Portable;
    if x < f64::MIN_POSITIVE {
        return ln(portable, [x * 2f64.powi(54); 4])[0] - 54.0 * std::f64::consts::LN_2;
    }
    ln(portable, [x; 4])[0]
}

/// exp of one number in [-700, 700].
pub fn exp_one(x: f64) -> f64 {
    exp(super::lanes::Portable, [[x; 4]])[0][0]
}

#[cfg(test)]
mod tests {
    use super::super::lanes::PortableSingle;
    use super::*;

    fn ulps(a: f64, b: f64) -> f64 {
        (a - b).abs() / (b.abs() * f64::EPSILON)
    }

    #[test]
    fn exp_is_within_one_ulp_of_the_system() {
        let mut worst: f64 = 0.0;
        for i in 0..400_000 {
            let x = -40.0 + 80.0 * (f64::from(i) / 400_000.0);
            worst = worst.max(ulps(exp_one(x), x.exp()));
        }
        assert!(worst < 1.1, "{worst}");
        assert_eq!(exp_one(0.0), 1.0);
    }

    #[test]
    fn single_exp_is_within_one_ulp_of_the_system() {
        let mut worst: f64 = 0.0;
        for i in 0..400_000 {
            let x = -40.0 + 80.0 * (i as f32 / 400_000.0);
            let (found, wanted) = (exp(PortableSingle, [[x; 8]])[0][0], f64::from(x).exp());
            worst = worst.max((f64::from(found) - wanted).abs() / (wanted * f64::from(f32::EPSILON)));
        }
        assert!(worst < 1.0, "{worst}");
        assert_eq!(exp(PortableSingle, [[0.0; 8]])[0][0], 1.0);
    }

    #[test]
    fn ln_is_within_two_ulps_of_the_system() {
        let mut worst: f64 = 0.0;
        for i in 1..400_000 {
            for x in [f64::from(i) * 1e-5, 1.0 + f64::from(i), 2f64.powi(i % 1000) * 1.3] {
                let y = x.ln();
                if y.abs() > 0.1 {
                    worst = worst.max(ulps(ln_one(x), y));
                } else {
                    assert!((ln_one(x) - y).abs() < 3e-17, "{x}");
                }
            }
        }
        assert!(worst < 2.0, "{worst}");
        assert_eq!(ln_one(1.0), 0.0);
        assert!((ln_one(5e-324) - 5e-324f64.ln()).abs() < 1e-12);
    }
}
