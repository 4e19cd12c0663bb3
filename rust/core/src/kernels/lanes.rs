//! The lane layer: a few vector operations, one implementation an instruction set. The only unsafe code of the crate.
//!
//! Every operation acts on each lane alone and rounds as the scalar one does (fused multiply-add everywhere), and no
//! kernel adds across lanes. So a value has the same bits on every tier. Tokens prove that the processor has the
//! instructions: `Avx2` and `Avx512` can only be made by `detect`.

/// Work that is compiled once for each instruction set.
pub trait Kernel {
    /// What it returns.
    type Out;
    /// The body; must be marked `#[inline(always)]`.
    fn run<L: Lanes>(self, lanes: L) -> Self::Out;
}

/// Vector operations on float64 lanes.
pub trait Lanes: Copy {
    /// Number of lanes.
    const N: usize;
    /// A vector.
    type V: Copy;
    /// Runs `kernel` compiled for this instruction set.
    fn call<K: Kernel>(self, kernel: K) -> K::Out;
    /// All lanes `x`.
    fn splat(self, x: f64) -> Self::V;
    /// The first `N` values.
    fn load(self, from: &[f64]) -> Self::V;
    /// Stores to the first `N` places.
    fn store(self, v: Self::V, to: &mut [f64]);
    /// Asks for the cache line `ahead` values behind the first of `from`, which need not exist
    fn prefetch(self, from: &[f64], ahead: usize);
    /// a + b
    fn add(self, a: Self::V, b: Self::V) -> Self::V;
    /// a - b
    fn sub(self, a: Self::V, b: Self::V) -> Self::V;
    /// a b
    fn mul(self, a: Self::V, b: Self::V) -> Self::V;
    /// a / b
    fn div(self, a: Self::V, b: Self::V) -> Self::V;
    /// a b + c, rounded once
    fn fma(self, a: Self::V, b: Self::V, c: Self::V) -> Self::V;
    /// c - a b, rounded once
    fn fnma(self, a: Self::V, b: Self::V, c: Self::V) -> Self::V;
    /// The larger; `b` where `a` is NaN
    fn max_or(self, a: Self::V, b: Self::V) -> Self::V;
    /// `x` where a > b, else `y`
    fn select_gt(self, a: Self::V, b: Self::V, x: Self::V, y: Self::V) -> Self::V;
    /// `x` where a >= b, else 0
    fn keep_ge(self, a: Self::V, b: Self::V, x: Self::V) -> Self::V;
    /// Whether a >= b in any lane
    fn any_ge(self, a: Self::V, b: Self::V) -> bool;
    /// Whether a <= b in any lane
    fn any_le(self, a: Self::V, b: Self::V) -> bool;
    /// Bit i is set where a > b in lane i
    fn bits_gt(self, a: Self::V, b: Self::V) -> u32;
    /// p 2^n, where the low bits of `t` hold the integer n (see [`super::math::ROUND`]) and the result is normal
    fn scale(self, p: Self::V, t: Self::V) -> Self::V;
    /// Mantissa in [1, 2) and exponent of a positive normal number
    fn split(self, x: Self::V) -> (Self::V, Self::V);
    /// Transposes an N x N square; `square` has N vectors
    fn transpose(self, square: &mut [Self::V]);
}

const MANTISSA: u64 = (1 << 52) - 1;
const ONE: u64 = 0x3ff0_0000_0000_0000;
const TWO52: u64 = 0x4330_0000_0000_0000;
const BIAS: f64 = 4503599627370496.0 + 1023.0;

/// Any processor; slow where it has no fused multiply-add.
#[derive(Clone, Copy)]
pub struct Portable;

macro_rules! each {
    ($f:expr) => {{
        let f = $f;
        [f(0), f(1), f(2), f(3)]
    }};
}

impl Lanes for Portable {
    const N: usize = 4;
    type V = [f64; 4];
    #[inline(always)]
    fn call<K: Kernel>(self, kernel: K) -> K::Out {
        kernel.run(self)
    }
    #[inline(always)]
    fn splat(self, x: f64) -> [f64; 4] {
        [x; 4]
    }
    #[inline(always)]
    fn load(self, s: &[f64]) -> [f64; 4] {
        [s[0], s[1], s[2], s[3]]
    }
    #[inline(always)]
    fn store(self, v: [f64; 4], to: &mut [f64]) {
        to[..4].copy_from_slice(&v);
    }
    #[inline(always)]
    fn prefetch(self, _: &[f64], _: usize) {}
    #[inline(always)]
    fn add(self, a: [f64; 4], b: [f64; 4]) -> [f64; 4] {
        each!(|i: usize| a[i] + b[i])
    }
    #[inline(always)]
    fn sub(self, a: [f64; 4], b: [f64; 4]) -> [f64; 4] {
        each!(|i: usize| a[i] - b[i])
    }
    #[inline(always)]
    fn mul(self, a: [f64; 4], b: [f64; 4]) -> [f64; 4] {
        each!(|i: usize| a[i] * b[i])
    }
    #[inline(always)]
    fn div(self, a: [f64; 4], b: [f64; 4]) -> [f64; 4] {
        each!(|i: usize| a[i] / b[i])
    }
    #[inline(always)]
    fn fma(self, a: [f64; 4], b: [f64; 4], c: [f64; 4]) -> [f64; 4] {
        each!(|i: usize| a[i].mul_add(b[i], c[i]))
    }
    #[inline(always)]
    fn fnma(self, a: [f64; 4], b: [f64; 4], c: [f64; 4]) -> [f64; 4] {
        each!(|i: usize| (-a[i]).mul_add(b[i], c[i]))
    }
    #[inline(always)]
    fn max_or(self, a: [f64; 4], b: [f64; 4]) -> [f64; 4] {
        each!(|i: usize| if a[i] > b[i] { a[i] } else { b[i] })
    }
    #[inline(always)]
    fn select_gt(self, a: [f64; 4], b: [f64; 4], x: [f64; 4], y: [f64; 4]) -> [f64; 4] {
        each!(|i: usize| if a[i] > b[i] { x[i] } else { y[i] })
    }
    #[inline(always)]
    fn keep_ge(self, a: [f64; 4], b: [f64; 4], x: [f64; 4]) -> [f64; 4] {
        each!(|i: usize| if a[i] >= b[i] { x[i] } else { 0.0 })
    }
    #[inline(always)]
    fn any_ge(self, a: [f64; 4], b: [f64; 4]) -> bool {
        (0..4).any(|i| a[i] >= b[i])
    }
    #[inline(always)]
    fn any_le(self, a: [f64; 4], b: [f64; 4]) -> bool {
        (0..4).any(|i| a[i] <= b[i])
    }
    #[inline(always)]
    fn bits_gt(self, a: [f64; 4], b: [f64; 4]) -> u32 {
        (0..4).fold(0, |bits, i| bits | (u32::from(a[i] > b[i]) << i))
    }
    #[inline(always)]
    fn scale(self, p: [f64; 4], t: [f64; 4]) -> [f64; 4] {
        each!(|i: usize| f64::from_bits(p[i].to_bits().wrapping_add(t[i].to_bits() << 52)))
    }
    #[inline(always)]
    fn split(self, x: [f64; 4]) -> ([f64; 4], [f64; 4]) {
        (
            each!(|i: usize| f64::from_bits((x[i].to_bits() & MANTISSA) | ONE)),
            each!(|i: usize| f64::from_bits((x[i].to_bits() >> 52) | TWO52) - BIAS),
        )
    }
    #[inline(always)]
    fn transpose(self, q: &mut [[f64; 4]]) {
        for i in 0..4 {
            for j in 0..i {
                let swap = q[i][j];
                q[i][j] = q[j][i];
                q[j][i] = swap;
            }
        }
    }
}

#[cfg(target_arch = "x86_64")]
pub use x86::{Avx2, Avx512};

#[cfg(target_arch = "x86_64")]
mod x86 {
    use super::{BIAS, Kernel, Lanes, MANTISSA, ONE, TWO52};
    use std::arch::x86_64::*;

    /// x86-64 with AVX2 and FMA.
    #[derive(Clone, Copy)]
    pub struct Avx2(());

    impl Avx2 {
        /// The token, where the processor has the instructions.
        pub fn detect() -> Option<Self> {
            (is_x86_feature_detected!("avx2") && is_x86_feature_detected!("fma")).then_some(Self(()))
        }
    }

    #[target_feature(enable = "avx2,fma")]
    fn call_avx2<K: Kernel>(token: Avx2, kernel: K) -> K::Out {
        kernel.run(token)
    }

    /// x86-64 with AVX-512 F and DQ.
    #[derive(Clone, Copy)]
    pub struct Avx512(());

    impl Avx512 {
        /// The token, where the processor has the instructions.
        pub fn detect() -> Option<Self> {
            (is_x86_feature_detected!("avx512f")
                && is_x86_feature_detected!("avx512dq")
                && is_x86_feature_detected!("avx512vl")
                && is_x86_feature_detected!("fma"))
            .then_some(Self(()))
        }
    }

    #[target_feature(enable = "avx2,fma,avx512f,avx512dq,avx512vl")]
    fn call_avx512<K: Kernel>(token: Avx512, kernel: K) -> K::Out {
        kernel.run(token)
    }

    macro_rules! op {
        ($body:expr) => {
            // SAFETY: the token proves that the processor has the instructions; no memory is touched.
            unsafe { $body }
        };
    }

    impl Lanes for Avx2 {
        const N: usize = 4;
        type V = __m256d;
        #[inline(always)]
        fn call<K: Kernel>(self, kernel: K) -> K::Out {
            // SAFETY: the token proves that the processor has AVX2 and FMA.
            unsafe { call_avx2(self, kernel) }
        }
        #[inline(always)]
        fn splat(self, x: f64) -> __m256d {
            op!(_mm256_set1_pd(x))
        }
        #[inline(always)]
        fn load(self, s: &[f64]) -> __m256d {
            let s = &s[..4];
            // SAFETY: four values are readable behind `s`; no alignment is asked for.
            unsafe { _mm256_loadu_pd(s.as_ptr()) }
        }
        #[inline(always)]
        fn store(self, v: __m256d, to: &mut [f64]) {
            let to = &mut to[..4];
            // SAFETY: four values are writable behind `to`; no alignment is asked for.
            unsafe { _mm256_storeu_pd(to.as_mut_ptr(), v) }
        }
        #[inline(always)]
        fn prefetch(self, from: &[f64], ahead: usize) {
            // SAFETY: a prefetch is a hint: it reads nothing and cannot fault, wherever the address points.
            unsafe { _mm_prefetch::<_MM_HINT_T0>(from.as_ptr().wrapping_add(ahead).cast()) }
        }
        #[inline(always)]
        fn add(self, a: __m256d, b: __m256d) -> __m256d {
            op!(_mm256_add_pd(a, b))
        }
        #[inline(always)]
        fn sub(self, a: __m256d, b: __m256d) -> __m256d {
            op!(_mm256_sub_pd(a, b))
        }
        #[inline(always)]
        fn mul(self, a: __m256d, b: __m256d) -> __m256d {
            op!(_mm256_mul_pd(a, b))
        }
        #[inline(always)]
        fn div(self, a: __m256d, b: __m256d) -> __m256d {
            op!(_mm256_div_pd(a, b))
        }
        #[inline(always)]
        fn fma(self, a: __m256d, b: __m256d, c: __m256d) -> __m256d {
            op!(_mm256_fmadd_pd(a, b, c))
        }
        #[inline(always)]
        fn fnma(self, a: __m256d, b: __m256d, c: __m256d) -> __m256d {
            op!(_mm256_fnmadd_pd(a, b, c))
        }
        #[inline(always)]
        fn max_or(self, a: __m256d, b: __m256d) -> __m256d {
            op!(_mm256_max_pd(a, b))
        }
        #[inline(always)]
        fn select_gt(self, a: __m256d, b: __m256d, x: __m256d, y: __m256d) -> __m256d {
            op!(_mm256_blendv_pd(y, x, _mm256_cmp_pd::<_CMP_GT_OQ>(a, b)))
        }
        #[inline(always)]
        fn keep_ge(self, a: __m256d, b: __m256d, x: __m256d) -> __m256d {
            op!(_mm256_and_pd(x, _mm256_cmp_pd::<_CMP_GE_OQ>(a, b)))
        }
        #[inline(always)]
        fn any_ge(self, a: __m256d, b: __m256d) -> bool {
            op!(_mm256_movemask_pd(_mm256_cmp_pd::<_CMP_GE_OQ>(a, b)) != 0)
        }
        #[inline(always)]
        fn any_le(self, a: __m256d, b: __m256d) -> bool {
            op!(_mm256_movemask_pd(_mm256_cmp_pd::<_CMP_LE_OQ>(a, b)) != 0)
        }
        #[inline(always)]
        fn bits_gt(self, a: __m256d, b: __m256d) -> u32 {
            op!(_mm256_movemask_pd(_mm256_cmp_pd::<_CMP_GT_OQ>(a, b)) as u32)
        }
        #[inline(always)]
        fn scale(self, p: __m256d, t: __m256d) -> __m256d {
            op!(_mm256_castsi256_pd(_mm256_add_epi64(
                _mm256_castpd_si256(p),
                _mm256_slli_epi64::<52>(_mm256_castpd_si256(t))
            )))
        }
        #[inline(always)]
        fn split(self, x: __m256d) -> (__m256d, __m256d) {
            op!({
                let bits = _mm256_castpd_si256(x);
                let m = _mm256_or_si256(
                    _mm256_and_si256(bits, _mm256_set1_epi64x(MANTISSA as i64)),
                    _mm256_set1_epi64x(ONE as i64),
                );
                let e = _mm256_or_si256(_mm256_srli_epi64::<52>(bits), _mm256_set1_epi64x(TWO52 as i64));
                (_mm256_castsi256_pd(m), _mm256_sub_pd(_mm256_castsi256_pd(e), _mm256_set1_pd(BIAS)))
            })
        }
        #[inline(always)]
        fn transpose(self, q: &mut [__m256d]) {
            op!({
                let (a, b) = (_mm256_unpacklo_pd(q[0], q[1]), _mm256_unpackhi_pd(q[0], q[1]));
                let (c, d) = (_mm256_unpacklo_pd(q[2], q[3]), _mm256_unpackhi_pd(q[2], q[3]));
                q[0] = _mm256_permute2f128_pd::<0x20>(a, c);
                q[1] = _mm256_permute2f128_pd::<0x20>(b, d);
                q[2] = _mm256_permute2f128_pd::<0x31>(a, c);
                q[3] = _mm256_permute2f128_pd::<0x31>(b, d);
            })
        }
    }

    impl Lanes for Avx512 {
        const N: usize = 8;
        type V = __m512d;
        #[inline(always)]
        fn call<K: Kernel>(self, kernel: K) -> K::Out {
            // SAFETY: the token proves that the processor has AVX-512 F, DQ and VL.
            unsafe { call_avx512(self, kernel) }
        }
        #[inline(always)]
        fn splat(self, x: f64) -> __m512d {
            op!(_mm512_set1_pd(x))
        }
        #[inline(always)]
        fn load(self, s: &[f64]) -> __m512d {
            let s = &s[..8];
            // SAFETY: eight values are readable behind `s`; no alignment is asked for.
            unsafe { _mm512_loadu_pd(s.as_ptr()) }
        }
        #[inline(always)]
        fn store(self, v: __m512d, to: &mut [f64]) {
            let to = &mut to[..8];
            // SAFETY: eight values are writable behind `to`; no alignment is asked for.
            unsafe { _mm512_storeu_pd(to.as_mut_ptr(), v) }
        }
        #[inline(always)]
        fn prefetch(self, from: &[f64], ahead: usize) {
            // SAFETY: a prefetch is a hint: it reads nothing and cannot fault, wherever the address points.
            unsafe { _mm_prefetch::<_MM_HINT_T0>(from.as_ptr().wrapping_add(ahead).cast()) }
        }
        #[inline(always)]
        fn add(self, a: __m512d, b: __m512d) -> __m512d {
            op!(_mm512_add_pd(a, b))
        }
        #[inline(always)]
        fn sub(self, a: __m512d, b: __m512d) -> __m512d {
            op!(_mm512_sub_pd(a, b))
        }
        #[inline(always)]
        fn mul(self, a: __m512d, b: __m512d) -> __m512d {
            op!(_mm512_mul_pd(a, b))
        }
        #[inline(always)]
        fn div(self, a: __m512d, b: __m512d) -> __m512d {
            op!(_mm512_div_pd(a, b))
        }
        #[inline(always)]
        fn fma(self, a: __m512d, b: __m512d, c: __m512d) -> __m512d {
            op!(_mm512_fmadd_pd(a, b, c))
        }
        #[inline(always)]
        fn fnma(self, a: __m512d, b: __m512d, c: __m512d) -> __m512d {
            op!(_mm512_fnmadd_pd(a, b, c))
        }
        #[inline(always)]
        fn max_or(self, a: __m512d, b: __m512d) -> __m512d {
            op!(_mm512_max_pd(a, b))
        }
        #[inline(always)]
        fn select_gt(self, a: __m512d, b: __m512d, x: __m512d, y: __m512d) -> __m512d {
            op!(_mm512_mask_blend_pd(_mm512_cmp_pd_mask::<_CMP_GT_OQ>(a, b), y, x))
        }
        #[inline(always)]
        fn keep_ge(self, a: __m512d, b: __m512d, x: __m512d) -> __m512d {
            op!(_mm512_maskz_mov_pd(_mm512_cmp_pd_mask::<_CMP_GE_OQ>(a, b), x))
        }
        #[inline(always)]
        fn any_ge(self, a: __m512d, b: __m512d) -> bool {
            op!(_mm512_cmp_pd_mask::<_CMP_GE_OQ>(a, b) != 0)
        }
        #[inline(always)]
        fn any_le(self, a: __m512d, b: __m512d) -> bool {
            op!(_mm512_cmp_pd_mask::<_CMP_LE_OQ>(a, b) != 0)
        }
        #[inline(always)]
        fn bits_gt(self, a: __m512d, b: __m512d) -> u32 {
            op!(u32::from(_mm512_cmp_pd_mask::<_CMP_GT_OQ>(a, b)))
        }
        #[inline(always)]
        fn scale(self, p: __m512d, t: __m512d) -> __m512d {
            op!(_mm512_castsi512_pd(_mm512_add_epi64(
                _mm512_castpd_si512(p),
                _mm512_slli_epi64::<52>(_mm512_castpd_si512(t))
            )))
        }
        #[inline(always)]
        fn split(self, x: __m512d) -> (__m512d, __m512d) {
            op!({
                let bits = _mm512_castpd_si512(x);
                let m = _mm512_or_si512(
                    _mm512_and_si512(bits, _mm512_set1_epi64(MANTISSA as i64)),
                    _mm512_set1_epi64(ONE as i64),
                );
                let e = _mm512_or_si512(_mm512_srli_epi64::<52>(bits), _mm512_set1_epi64(TWO52 as i64));
                (_mm512_castsi512_pd(m), _mm512_sub_pd(_mm512_castsi512_pd(e), _mm512_set1_pd(BIAS)))
            })
        }
        #[inline(always)]
        fn transpose(self, q: &mut [__m512d]) {
            op!({
                let mut t = [_mm512_setzero_pd(); 8];
                for i in 0..4 {
                    t[2 * i] = _mm512_unpacklo_pd(q[2 * i], q[2 * i + 1]);
                    t[2 * i + 1] = _mm512_unpackhi_pd(q[2 * i], q[2 * i + 1]);
                }
                let mut u = [_mm512_setzero_pd(); 8];
                for h in 0..2 {
                    for p in 0..2 {
                        let (a, b) = (t[4 * h + p], t[4 * h + 2 + p]);
                        u[4 * h + p] = _mm512_shuffle_f64x2::<0x88>(a, b);
                        u[4 * h + 2 + p] = _mm512_shuffle_f64x2::<0xdd>(a, b);
                    }
                }
                // u[4h + p] holds lanes 0 and 2 of the pairs, u[4h + 2 + p] lanes 1 and 3, of rows 4h..4h + 4.
                for p in 0..2 {
                    q[p] = _mm512_shuffle_f64x2::<0x88>(u[p], u[4 + p]);
                    q[4 + p] = _mm512_shuffle_f64x2::<0xdd>(u[p], u[4 + p]);
                    q[2 + p] = _mm512_shuffle_f64x2::<0x88>(u[2 + p], u[6 + p]);
                    q[6 + p] = _mm512_shuffle_f64x2::<0xdd>(u[2 + p], u[6 + p]);
                }
            })
        }
    }
}
