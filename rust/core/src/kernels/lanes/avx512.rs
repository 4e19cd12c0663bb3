//! Lanes of x86-64 with AVX-512 F, DQ and VL.

use super::{
    AnyKernel, AnyLanes, Avx2Single, BIAS, Kernel, Lanes, MANTISSA, ONE, SINGLE_CHAIN, SingleLanes, Square, TWO52,
    add_up,
};
use std::arch::x86_64::*;

/// float64.
#[derive(Clone, Copy)]
pub struct Avx512(());

/// float32.
#[derive(Clone, Copy)]
pub struct Avx512Single(());

impl Avx512 {
    /// The token, where the processor has the instructions.
    pub fn detect() -> Option<Self> {
        (is_x86_feature_detected!("avx512f")
            && is_x86_feature_detected!("avx512dq")
            && is_x86_feature_detected!("avx512vl")
            && is_x86_feature_detected!("avx2")
            && is_x86_feature_detected!("fma"))
        .then_some(Self(()))
    }

    /// The same instructions on float32.
    pub fn single(self) -> Avx512Single {
        Avx512Single(())
    }
}

#[target_feature(enable = "avx2,fma,avx512f,avx512dq,avx512vl")]
fn call<K: Kernel>(token: Avx512, kernel: K) -> K::Out {
    kernel.run(token)
}

#[target_feature(enable = "avx2,fma,avx512f,avx512dq,avx512vl")]
fn call_single<K: AnyKernel<f32>>(token: Avx512Single, kernel: K) -> K::Out {
    kernel.run(token)
}

impl AnyLanes for Avx512 {
    arithmetic!(
        f64,
        __m512d,
        8,
        _mm512_set1_pd,
        _mm512_loadu_pd,
        _mm512_storeu_pd,
        _mm512_add_pd,
        _mm512_sub_pd,
        _mm512_mul_pd,
        _mm512_div_pd,
        _mm512_fmadd_pd,
        _mm512_fnmadd_pd,
        _mm512_max_pd
    );
    const CHAIN: usize = usize::MAX;
    const MANY: bool = true;
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
    fn scale(self, p: __m512d, t: __m512d) -> __m512d {
        op!(_mm512_castsi512_pd(_mm512_add_epi64(
            _mm512_castpd_si512(p),
            _mm512_slli_epi64::<52>(_mm512_castpd_si512(t))
        )))
    }
    #[inline(always)]
    fn begin(self, sums: &[f64]) -> __m512d {
        self.load(sums)
    }
    #[inline(always)]
    fn end(self, v: __m512d, _unit: f64, sums: &mut [f64]) {
        self.store(v, sums);
    }
}

impl Square for Avx512 {
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

impl Lanes for Avx512 {
    #[inline(always)]
    fn call<K: Kernel>(self, kernel: K) -> K::Out {
        // SAFETY: the token proves that the processor has AVX-512 F, DQ and VL.
        unsafe { call(self, kernel) }
    }
    #[inline(always)]
    fn select_gt(self, a: __m512d, b: __m512d, x: __m512d, y: __m512d) -> __m512d {
        op!(_mm512_mask_blend_pd(_mm512_cmp_pd_mask::<_CMP_GT_OQ>(a, b), y, x))
    }
    #[inline(always)]
    fn bits_gt(self, a: __m512d, b: __m512d) -> u32 {
        op!(u32::from(_mm512_cmp_pd_mask::<_CMP_GT_OQ>(a, b)))
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
}

impl AnyLanes for Avx512Single {
    arithmetic!(
        f32,
        __m512,
        16,
        _mm512_set1_ps,
        _mm512_loadu_ps,
        _mm512_storeu_ps,
        _mm512_add_ps,
        _mm512_sub_ps,
        _mm512_mul_ps,
        _mm512_div_ps,
        _mm512_fmadd_ps,
        _mm512_fnmadd_ps,
        _mm512_max_ps
    );
    const CHAIN: usize = SINGLE_CHAIN;
    const MANY: bool = true;
    type Narrow = Avx2Single;
    type Double = Avx512;
    #[inline(always)]
    fn narrow(self) -> Avx2Single {
        Avx2Single(())
    }
    #[inline(always)]
    fn double(self) -> Avx512 {
        Avx512(())
    }
    #[inline(always)]
    fn keep_ge(self, a: __m512, b: __m512, x: __m512) -> __m512 {
        op!(_mm512_maskz_mov_ps(_mm512_cmp_ps_mask::<_CMP_GE_OQ>(a, b), x))
    }
    #[inline(always)]
    fn any_ge(self, a: __m512, b: __m512) -> bool {
        op!(_mm512_cmp_ps_mask::<_CMP_GE_OQ>(a, b) != 0)
    }
    #[inline(always)]
    fn any_le(self, a: __m512, b: __m512) -> bool {
        op!(_mm512_cmp_ps_mask::<_CMP_LE_OQ>(a, b) != 0)
    }
    #[inline(always)]
    fn scale(self, p: __m512, t: __m512) -> __m512 {
        op!(_mm512_castsi512_ps(_mm512_add_epi32(
            _mm512_castps_si512(p),
            _mm512_slli_epi32::<23>(_mm512_castps_si512(t))
        )))
    }
    #[inline(always)]
    fn begin(self, _sums: &[f64]) -> __m512 {
        self.splat(0.0)
    }
    #[inline(always)]
    fn end(self, v: __m512, unit: f64, sums: &mut [f64]) {
        add_up(self, v, unit, sums);
    }
}

impl SingleLanes for Avx512Single {
    #[inline(always)]
    fn call<K: AnyKernel<f32>>(self, kernel: K) -> K::Out {
        // SAFETY: the token proves that the processor has AVX-512 F, DQ and VL.
        unsafe { call_single(self, kernel) }
    }
}
