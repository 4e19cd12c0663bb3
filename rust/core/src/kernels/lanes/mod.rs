//! The lane layer: a few vector operations, one implementation an instruction set and precision. The only unsafe code of
//! the crate.
//!
//! Every operation acts on each lane alone and rounds as the scalar one does (fused multiply-add everywhere), and no
//! kernel adds across lanes. So a value has the same bits on every tier. Tokens prove that the processor has the
//! instructions: those of `avx2` and `avx512` can only be made by `detect`.

mod portable;
pub use portable::{Portable, PortableSingle};

/// An operation of the processor.
#[cfg(target_arch = "x86_64")]
macro_rules! op {
    ($body:expr) => {
        // SAFETY: the token proves that the processor has the instructions; no memory is touched.
        unsafe { $body }
    };
}

/// What all x86 implementations say alike, each by its own intrinsics.
#[cfg(target_arch = "x86_64")]
macro_rules! arithmetic {
    ($t:ty, $v:ty, $n:literal, $set1:ident, $load:ident, $store:ident, $add:ident, $sub:ident, $mul:ident, $div:ident,
     $fmadd:ident, $fnmadd:ident, $max:ident) => {
        type T = $t;
        type V = $v;
        const N: usize = $n;
        #[inline(always)]
        fn splat(self, x: $t) -> $v {
            op!($set1(x))
        }
        #[inline(always)]
        fn load(self, s: &[$t]) -> $v {
            let s = &s[..$n];
            // SAFETY: N values are readable behind `s`; no alignment is asked for.
            unsafe { $load(s.as_ptr()) }
        }
        #[inline(always)]
        fn store(self, v: $v, to: &mut [$t]) {
            let to = &mut to[..$n];
            // SAFETY: N values are writable behind `to`; no alignment is asked for.
            unsafe { $store(to.as_mut_ptr(), v) }
        }
        #[inline(always)]
        fn prefetch<P>(self, from: &[P], ahead: usize) {
            // SAFETY: a prefetch is a hint: it reads nothing and cannot fault, wherever the address points.
            unsafe { _mm_prefetch::<_MM_HINT_T0>(from.as_ptr().wrapping_add(ahead).cast()) }
        }
        #[inline(always)]
        fn add(self, a: $v, b: $v) -> $v {
            op!($add(a, b))
        }
        #[inline(always)]
        fn sub(self, a: $v, b: $v) -> $v {
            op!($sub(a, b))
        }
        #[inline(always)]
        fn mul(self, a: $v, b: $v) -> $v {
            op!($mul(a, b))
        }
        #[inline(always)]
        fn div(self, a: $v, b: $v) -> $v {
            op!($div(a, b))
        }
        #[inline(always)]
        fn fma(self, a: $v, b: $v, c: $v) -> $v {
            op!($fmadd(a, b, c))
        }
        #[inline(always)]
        fn fnma(self, a: $v, b: $v, c: $v) -> $v {
            op!($fnmadd(a, b, c))
        }
        #[inline(always)]
        fn max_or(self, a: $v, b: $v) -> $v {
            op!($max(a, b))
        }
    };
}

#[cfg(target_arch = "x86_64")]
mod avx2;
#[cfg(target_arch = "x86_64")]
mod avx512;
#[cfg(target_arch = "x86_64")]
pub use avx2::{Avx2, Avx2Single};
#[cfg(target_arch = "x86_64")]
pub use avx512::{Avx512, Avx512Single};

/// Work in float64 that is compiled once for each instruction set.
pub trait Kernel {
    /// What it returns.
    type Out;
    /// The body; must be marked `#[inline(always)]`.
    fn run<L: Lanes>(self, lanes: L) -> Self::Out;
}

/// Work in either precision that is compiled once for each instruction set.
pub trait AnyKernel<T: Scalar> {
    /// What it returns.
    type Out;
    /// The body; must be marked `#[inline(always)]`.
    fn run<L: AnyLanes<T = T>>(self, lanes: L) -> Self::Out;
}

/// float64 or float32.
pub trait Scalar: Copy + PartialOrd + 'static + sealed::Sealed {
    /// 0
    const ZERO: Self;
    /// 1
    const ONE: Self;
    /// Log densities are never below this, so that sums over rows stay finite.
    const FLOOR: Self;
    /// Brings the distances of the farthest rows to numbers whose squares float64 holds.
    const SMALL: f64;
    /// The nearest value.
    fn from_f64(x: f64) -> Self;
    /// The value.
    fn to_f64(self) -> f64;
}

mod sealed {
    pub trait Sealed {}
    impl Sealed for f64 {}
    impl Sealed for f32 {}
}

impl Scalar for f64 {
    const ZERO: Self = 0.0;
    const ONE: Self = 1.0;
    const FLOOR: Self = -1.0e290;
    const SMALL: f64 = f64::from_bits((1023 - 600) << 52);
    #[inline(always)]
    fn from_f64(x: f64) -> Self {
        x
    }
    #[inline(always)]
    fn to_f64(self) -> f64 {
        self
    }
}

impl Scalar for f32 {
    const ZERO: Self = 0.0;
    const ONE: Self = 1.0;
    const FLOOR: Self = -1.0e28;
    const SMALL: f64 = 1.0;
    #[inline(always)]
    fn from_f64(x: f64) -> Self {
        x as f32
    }
    #[inline(always)]
    fn to_f64(self) -> f64 {
        f64::from(self)
    }
}

/// Vector operations on lanes of either precision.
pub trait AnyLanes: Copy {
    /// What a lane holds.
    type T: super::math::Exponential;
    /// A vector.
    type V: Copy;
    /// Number of lanes.
    const N: usize;
    /// Rows of a chain of additions over a block, see [`AnyLanes::begin`]
    const CHAIN: usize;
    /// Whether there are thirty-two registers rather than sixteen.
    const MANY: bool;
    /// Whether an operation is a run of scalar ones: wide tiles would only be much code.
    const SCALAR: bool = false;
    /// Lanes of the same precision, at most eight of them.
    type Narrow: Square<T = Self::T>;
    /// float64 lanes of the same instruction set.
    type Double: Lanes;
    /// See [`AnyLanes::Narrow`].
    fn narrow(self) -> Self::Narrow;
    /// See [`AnyLanes::Double`].
    fn double(self) -> Self::Double;
    /// All lanes `x`.
    fn splat(self, x: Self::T) -> Self::V;
    /// The first `N` values.
    fn load(self, from: &[Self::T]) -> Self::V;
    /// Stores to the first `N` places.
    fn store(self, v: Self::V, to: &mut [Self::T]);
    /// Asks for the cache line `ahead` values behind the first of `from`, which need not exist
    fn prefetch<P>(self, from: &[P], ahead: usize);
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
    /// `x` where a >= b, else 0
    fn keep_ge(self, a: Self::V, b: Self::V, x: Self::V) -> Self::V;
    /// Whether a >= b in any lane
    fn any_ge(self, a: Self::V, b: Self::V) -> bool;
    /// Whether a <= b in any lane
    fn any_le(self, a: Self::V, b: Self::V) -> bool;
    /// p 2^n, where the low bits of `t` hold the integer n (see [`super::math`]) and the result is normal
    fn scale(self, p: Self::V, t: Self::V) -> Self::V;
    /// What a chain of additions over a block starts from: the first `N` of `sums` in float64, 0 in float32
    fn begin(self, sums: &[f64]) -> Self::V;
    /// The end of such a chain: float64 becomes the first `N` of `sums`, float32 is added to them times `unit`
    fn end(self, v: Self::V, unit: f64, sums: &mut [f64]);
}

/// Lanes that fill squares.
pub trait Square: AnyLanes {
    /// Transposes an N x N square; `square` has N vectors
    fn transpose(self, square: &mut [Self::V]);
}

/// Vector operations on float64 lanes.
pub trait Lanes: Square<T = f64> {
    /// Runs `kernel` compiled for this instruction set.
    fn call<K: Kernel>(self, kernel: K) -> K::Out;
    /// `x` where a > b, else `y`
    fn select_gt(self, a: Self::V, b: Self::V, x: Self::V, y: Self::V) -> Self::V;
    /// Bit i is set where a > b in lane i
    fn bits_gt(self, a: Self::V, b: Self::V) -> u32;
    /// Mantissa in [1, 2) and exponent of a positive normal number
    fn split(self, x: Self::V) -> (Self::V, Self::V);
}

/// Vector operations on float32 lanes.
pub trait SingleLanes: AnyLanes<T = f32> {
    /// Runs `kernel` compiled for this instruction set.
    fn call<K: AnyKernel<f32>>(self, kernel: K) -> K::Out;
}

/// Half a block: fewer roundings a chain, and two of them to work on.
pub(super) const SINGLE_CHAIN: usize = super::evaluator::BLOCK / 2;
const MANTISSA: u64 = (1 << 52) - 1;
const ONE: u64 = 0x3ff0_0000_0000_0000;
const TWO52: u64 = 0x4330_0000_0000_0000;
const BIAS: f64 = 4503599627370496.0 + 1023.0;

/// The end of a float32 chain: widened, scaled and added up in float64.
#[inline(always)]
fn add_up<L: SingleLanes>(l: L, v: L::V, unit: f64, sums: &mut [f64]) {
    let mut out = [0.0f32; 16];
    l.store(v, &mut out);
    for (sum, x) in sums[..L::N].iter_mut().zip(out) {
        *sum += f64::from(x) * unit;
    }
}
