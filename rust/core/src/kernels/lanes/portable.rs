//! Lanes for any processor, in arrays; slow where it has no fused multiply-add.

use super::{
    AnyKernel, AnyLanes, BIAS, Kernel, Lanes, MANTISSA, ONE, SINGLE_CHAIN, SingleLanes, Square, TWO52, add_up,
};

/// float64.
#[derive(Clone, Copy)]
pub struct Portable;

/// float32.
#[derive(Clone, Copy)]
pub struct PortableSingle;

macro_rules! arithmetic {
    ($t:ty, $n:literal, $mantissa:literal, $($i:literal)+) => {
        type T = $t;
        type V = [$t; $n];
        const N: usize = $n;
        const MANY: bool = false;
        const SCALAR: bool = true;
        type Narrow = Self;
        type Double = Portable;
        #[inline(always)]
        fn narrow(self) -> Self {
            self
        }
        #[inline(always)]
        fn double(self) -> Portable {
            Portable
        }
        #[inline(always)]
        fn splat(self, x: $t) -> [$t; $n] {
            [x; $n]
        }
        #[inline(always)]
        fn load(self, s: &[$t]) -> [$t; $n] {
            [$(s[$i]),+]
        }
        #[inline(always)]
        fn store(self, v: [$t; $n], to: &mut [$t]) {
            to[..$n].copy_from_slice(&v);
        }
        #[inline(always)]
        fn prefetch<P>(self, _: &[P], _: usize) {}
        #[inline(always)]
        fn add(self, a: [$t; $n], b: [$t; $n]) -> [$t; $n] {
            [$(a[$i] + b[$i]),+]
        }
        #[inline(always)]
        fn sub(self, a: [$t; $n], b: [$t; $n]) -> [$t; $n] {
            [$(a[$i] - b[$i]),+]
        }
        #[inline(always)]
        fn mul(self, a: [$t; $n], b: [$t; $n]) -> [$t; $n] {
            [$(a[$i] * b[$i]),+]
        }
        #[inline(always)]
        fn div(self, a: [$t; $n], b: [$t; $n]) -> [$t; $n] {
            [$(a[$i] / b[$i]),+]
        }
        #[inline(always)]
        fn fma(self, a: [$t; $n], b: [$t; $n], c: [$t; $n]) -> [$t; $n] {
            [$(a[$i].mul_add(b[$i], c[$i])),+]
        }
        #[inline(always)]
        fn fnma(self, a: [$t; $n], b: [$t; $n], c: [$t; $n]) -> [$t; $n] {
            [$((-a[$i]).mul_add(b[$i], c[$i])),+]
        }
        #[inline(always)]
        fn max_or(self, a: [$t; $n], b: [$t; $n]) -> [$t; $n] {
            [$(if a[$i] > b[$i] { a[$i] } else { b[$i] }),+]
        }
        #[inline(always)]
        fn keep_ge(self, a: [$t; $n], b: [$t; $n], x: [$t; $n]) -> [$t; $n] {
            [$(if a[$i] >= b[$i] { x[$i] } else { 0.0 }),+]
        }
        #[inline(always)]
        fn any_ge(self, a: [$t; $n], b: [$t; $n]) -> bool {
            (0..$n).any(|i| a[i] >= b[i])
        }
        #[inline(always)]
        fn any_le(self, a: [$t; $n], b: [$t; $n]) -> bool {
            (0..$n).any(|i| a[i] <= b[i])
        }
        #[inline(always)]
        fn scale(self, p: [$t; $n], t: [$t; $n]) -> [$t; $n] {
            [$(<$t>::from_bits(p[$i].to_bits().wrapping_add(t[$i].to_bits() << $mantissa))),+]
        }
    };
}

impl AnyLanes for Portable {
    const CHAIN: usize = usize::MAX;
    arithmetic!(f64, 4, 52, 0 1 2 3);
    #[inline(always)]
    fn begin(self, sums: &[f64]) -> [f64; 4] {
        self.load(sums)
    }
    #[inline(always)]
    fn end(self, v: [f64; 4], _unit: f64, sums: &mut [f64]) {
        self.store(v, sums);
    }
}

impl AnyLanes for PortableSingle {
    const CHAIN: usize = SINGLE_CHAIN;
    arithmetic!(f32, 8, 23, 0 1 2 3 4 5 6 7);
    #[inline(always)]
    fn begin(self, _sums: &[f64]) -> [f32; 8] {
        [0.0; 8]
    }
    #[inline(always)]
    fn end(self, v: [f32; 8], unit: f64, sums: &mut [f64]) {
        add_up(self, v, unit, sums);
    }
}

macro_rules! square {
    ($lanes:ty, $t:ty, $n:literal) => {
        impl Square for $lanes {
            #[inline(always)]
            fn transpose(self, q: &mut [[$t; $n]]) {
                for i in 0..$n {
                    for j in 0..i {
                        let swap = q[i][j];
                        q[i][j] = q[j][i];
                        q[j][i] = swap;
                    }
                }
            }
        }
    };
}

square!(Portable, f64, 4);
square!(PortableSingle, f32, 8);

impl Lanes for Portable {
    #[inline(always)]
    fn call<K: Kernel>(self, kernel: K) -> K::Out {
        kernel.run(self)
    }
    #[inline(always)]
    fn select_gt(self, a: [f64; 4], b: [f64; 4], x: [f64; 4], y: [f64; 4]) -> [f64; 4] {
        let pick = |i: usize| if a[i] > b[i] { x[i] } else { y[i] };
        [pick(0), pick(1), pick(2), pick(3)]
    }
    #[inline(always)]
    fn bits_gt(self, a: [f64; 4], b: [f64; 4]) -> u32 {
        (0..4).fold(0, |bits, i| bits | (u32::from(a[i] > b[i]) << i))
    }
    #[inline(always)]
    fn split(self, x: [f64; 4]) -> ([f64; 4], [f64; 4]) {
        let m = |i: usize| f64::from_bits((x[i].to_bits() & MANTISSA) | ONE);
        let e = |i: usize| f64::from_bits((x[i].to_bits() >> 52) | TWO52) - BIAS;
        ([m(0), m(1), m(2), m(3)], [e(0), e(1), e(2), e(3)])
    }
}

impl SingleLanes for PortableSingle {
    #[inline(always)]
    fn call<K: AnyKernel<f32>>(self, kernel: K) -> K::Out {
        kernel.run(self)
    }
}
