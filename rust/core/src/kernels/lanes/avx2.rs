//! Lanes of x86-64 with AVX2 and FMA.

use super::{
    AnyKernel, AnyLanes, BIAS, Kernel, Lanes, MANTISSA, ONE, SINGLE_CHAIN, SingleLanes, Square, TWO52, add_up,
};
use std::arch::x86_64::*;

/// float64.
#[derive(Clone, Copy)]
pub struct Avx2(pub(super) ());

/// float32.
#[derive(Clone, Copy)]
pub struct Avx2Single(pub(super) ());

impl Avx2 {
    /// The token, where the processor has the instructions.
    pub fn detect() -> Option<Self> {
        (is_x86_feature_detected!("avx2") && is_x86_feature_detected!("fma")).then_some(Self(()))
    }

    /// The same instructions on float32.
    pub fn single(self) -> Avx2Single {
        Avx2Single(())
    }
}

#[target_feature(enable = "avx2,fma")]
fn call<K: Kernel>(token: Avx2, kernel: K) -> K::Out {
    kernel.run(token)
}

#[target_feature(enable = "avx2,fma")]
fn call_single<K: AnyKernel<f32>>(token: Avx2Single, kernel: K) -> K::Out {
    kernel.run(token)
}

impl AnyLanes for Avx2 {
    arithmetic!(
        f64,
        __m256d,
        4,
        _mm256_set1_pd,
        _mm256_loadu_pd,
        _mm256_storeu_pd,
        _mm256_add_pd,
        _mm256_sub_pd,
        _mm256_mul_pd,
        _mm256_div_pd,
        _mm256_fmadd_pd,
        _mm256_fnmadd_pd,
        _mm256_max_pd
    );
    const CHAIN: usize = usize::MAX;
    const MANY: bool = false;
    type Narrow = Self;
    type Double = Self;
    #[inline(always)]
    fn narrow(self) -> Self {
        self
    }
    #[inline(always)]
    fn double(self) -> Self {
        self
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
    fn scale(self, p: __m256d, t: __m256d) -> __m256d {
        op!(_mm256_castsi256_pd(_mm256_add_epi64(
            _mm256_castpd_si256(p),
            _mm256_slli_epi64::<52>(_mm256_castpd_si256(t))
        )))
    }
    #[inline(always)]
    fn begin(self, sums: &[f64]) -> __m256d {
        self.load(sums)
    }
    #[inline(always)]
    fn end(self, v: __m256d, _unit: f64, sums: &mut [f64]) {
        self.store(v, sums);
    }
}

impl Square for Avx2 {
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

impl Lanes for Avx2 {
    #[inline(always)]
    fn call<K: Kernel>(self, kernel: K) -> K::Out {
        // SAFETY: the token proves that the processor has AVX2 and FMA.
        unsafe { call(self, kernel) }
    }
    #[inline(always)]
    fn select_gt(self, a: __m256d, b: __m256d, x: __m256d, y: __m256d) -> __m256d {
        op!(_mm256_blendv_pd(y, x, _mm256_cmp_pd::<_CMP_GT_OQ>(a, b)))
    }
    #[inline(always)]
    fn bits_gt(self, a: __m256d, b: __m256d) -> u32 {
        op!(_mm256_movemask_pd(_mm256_cmp_pd::<_CMP_GT_OQ>(a, b)) as u32)
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
}

impl AnyLanes for Avx2Single {
    arithmetic!(
        f32,
        __m256,
        8,
        _mm256_set1_ps,
        _mm256_loadu_ps,
        _mm256_storeu_ps,
        _mm256_add_ps,
        _mm256_sub_ps,
        _mm256_mul_ps,
        _mm256_div_ps,
        _mm256_fmadd_ps,
        _mm256_fnmadd_ps,
        _mm256_max_ps
    );
    const CHAIN: usize = SINGLE_CHAIN;
    const MANY: bool = false;
    type Narrow = Self;
    type Double = Avx2;
    #[inline(always)]
    fn narrow(self) -> Self {
        self
    }
    #[inline(always)]
    fn double(self) -> Avx2 {
        Avx2(())
    }
    #[inline(always)]
    fn keep_ge(self, a: __m256, b: __m256, x: __m256) -> __m256 {
        op!(_mm256_and_ps(x, _mm256_cmp_ps::<_CMP_GE_OQ>(a, b)))
    }
    #[inline(always)]
    fn any_ge(self, a: __m256, b: __m256) -> bool {
        op!(_mm256_movemask_ps(_mm256_cmp_ps::<_CMP_GE_OQ>(a, b)) != 0)
    }
    #[inline(always)]
    fn any_le(self, a: __m256, b: __m256) -> bool {
        op!(_mm256_movemask_ps(_mm256_cmp_ps::<_CMP_LE_OQ>(a, b)) != 0)
    }
    #[inline(always)]
    fn scale(self, p: __m256, t: __m256) -> __m256 {
        op!(_mm256_castsi256_ps(_mm256_add_epi32(
            _mm256_castps_si256(p),
            _mm256_slli_epi32::<23>(_mm256_castps_si256(t))
        )))
    }
    #[inline(always)]
    fn begin(self, _sums: &[f64]) -> __m256 {
        self.splat(0.0)
    }
    #[inline(always)]
    fn end(self, v: __m256, unit: f64, sums: &mut [f64]) {
        add_up(self, v, unit, sums);
    }
}

impl Square for Avx2Single {
    #[inline(always)]
    fn transpose(self, q: &mut [__m256]) {
        op!({
            // Pairs, then quadruples within each half, then the halves.
            let mut t = [_mm256_setzero_ps(); 8];
            for i in 0..4 {
                t[2 * i] = _mm256_unpacklo_ps(q[2 * i], q[2 * i + 1]);
                t[2 * i + 1] = _mm256_unpackhi_ps(q[2 * i], q[2 * i + 1]);
            }
            let mut u = [_mm256_setzero_ps(); 8];
            for h in 0..2 {
                for p in 0..2 {
                    let (a, b) = (t[4 * h + p], t[4 * h + 2 + p]);
                    u[4 * h + 2 * p] = _mm256_shuffle_ps::<0x44>(a, b);
                    u[4 * h + 2 * p + 1] = _mm256_shuffle_ps::<0xee>(a, b);
                }
            }
            for i in 0..4 {
                q[i] = _mm256_permute2f128_ps::<0x20>(u[i], u[4 + i]);
                q[4 + i] = _mm256_permute2f128_ps::<0x31>(u[i], u[4 + i]);
            }
        })
    }
}

impl SingleLanes for Avx2Single {
    #[inline(always)]
    fn call<K: AnyKernel<f32>>(self, kernel: K) -> K::Out {
        // SAFETY: the token proves that the processor has AVX2 and FMA.
        unsafe { call_single(self, kernel) }
    }
}
