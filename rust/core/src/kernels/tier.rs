//! The instruction set, chosen once at run time; tests may force one.

use super::lanes::{AnyKernel, Kernel, Lanes, Portable, PortableSingle, Scalar, SingleLanes};
#[cfg(target_arch = "x86_64")]
use super::lanes::{Avx2, Avx512};
use std::sync::atomic::{AtomicU8, Ordering};

/// Instruction sets, slowest first.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Tier {
    /// Any processor.
    Portable,
    /// x86-64 with AVX2 and FMA.
    Avx2,
    /// x86-64 with AVX-512 F, DQ and VL.
    Avx512,
}

impl Tier {
    /// All of them.
    pub const ALL: [Self; 3] = [Self::Portable, Self::Avx2, Self::Avx512];

    /// The name by which a test forces it.
    pub fn name(self) -> &'static str {
        match self {
            Self::Portable => "portable",
            Self::Avx2 => "avx2",
            Self::Avx512 => "avx512",
        }
    }

    /// Whether this processor has it.
    pub fn usable(self) -> bool {
        match self {
            Self::Portable => true,
            #[cfg(target_arch = "x86_64")]
            Self::Avx2 => Avx2::detect().is_some(),
            #[cfg(target_arch = "x86_64")]
            Self::Avx512 => Avx512::detect().is_some(),
            #[cfg(not(target_arch = "x86_64"))]
            _ => false,
        }
    }
}

const AUTOMATIC: u8 = 255;
static CHOICE: AtomicU8 = AtomicU8::new(AUTOMATIC);
static FORCED: AtomicU8 = AtomicU8::new(AUTOMATIC);

/// The tier in use.
pub fn current() -> Tier {
    let forced = FORCED.load(Ordering::Relaxed);
    let chosen = if forced == AUTOMATIC { CHOICE.load(Ordering::Relaxed) } else { forced };
    if chosen == AUTOMATIC {
        let best = usable()[0];
        CHOICE.store(best as u8, Ordering::Relaxed);
        return best;
    }
    Tier::ALL[usize::from(chosen)]
}

/// The tiers that this processor has, fastest first.
pub fn usable() -> Vec<Tier> {
    Tier::ALL.into_iter().rev().filter(|t| t.usable()).collect()
}

/// Forces a tier for the whole process (`None`: automatic again). False when this processor lacks it.
pub fn force(tier: Option<Tier>) -> bool {
    match tier {
        None => FORCED.store(AUTOMATIC, Ordering::Relaxed),
        Some(t) if t.usable() => FORCED.store(t as u8, Ordering::Relaxed),
        Some(_) => return false,
    }
    true
}

/// Runs `kernel` on the tier in use.
pub fn run<K: Kernel>(kernel: K) -> K::Out {
    run_on(current(), kernel)
}

/// Runs `kernel` on `tier`, or the portable one where the processor lacks it.
pub fn run_on<K: Kernel>(tier: Tier, kernel: K) -> K::Out {
    match tier {
        #[cfg(target_arch = "x86_64")]
        Tier::Avx2 => match Avx2::detect() {
            Some(lanes) => lanes.call(kernel),
            None => Portable.call(kernel),
        },
        #[cfg(target_arch = "x86_64")]
        Tier::Avx512 => match Avx512::detect() {
            Some(lanes) => lanes.call(kernel),
            None => Portable.call(kernel),
        },
        _ => Portable.call(kernel),
    }
}

/// A precision that kernels run in.
pub trait Precision: Scalar {
    /// Runs `kernel` on the tier in use.
    fn run<K: AnyKernel<Self>>(kernel: K) -> K::Out;
}

struct Double<K>(K);

impl<K: AnyKernel<f64>> Kernel for Double<K> {
    type Out = K::Out;
    #[inline(always)]
    fn run<L: Lanes>(self, l: L) -> K::Out {
        self.0.run(l)
    }
}

impl Precision for f64 {
    fn run<K: AnyKernel<Self>>(kernel: K) -> K::Out {
        run(Double(kernel))
    }
}

impl Precision for f32 {
    fn run<K: AnyKernel<Self>>(kernel: K) -> K::Out {
        match current() {
            #[cfg(target_arch = "x86_64")]
            Tier::Avx2 => match Avx2::detect() {
                Some(lanes) => lanes.single().call(kernel),
                None => PortableSingle.call(kernel),
            },
            #[cfg(target_arch = "x86_64")]
            Tier::Avx512 => match Avx512::detect() {
                Some(lanes) => lanes.single().call(kernel),
                None => PortableSingle.call(kernel),
            },
            _ => PortableSingle.call(kernel),
        }
    }
}
