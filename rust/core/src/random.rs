//! Hashes and random numbers that depend on nothing but their arguments.
//!
//! Everything here is a pure function of a seed and a counter, so that a number drawn for a row depends on the row and
//! not on the thread, the batch or the order of reading. None of it is meant for secrets.
//!
//! Sources: the mixing function is that of SplitMix64 (Steele, Lea & Flood 2014, "Fast splittable pseudorandom number
//! generators"; constants of Stafford's variant 13); numbers below a bound follow Lemire (2019, "Fast random integer
//! generation in an interval"); the normal quantile is algorithm AS 241, PPND16 (Wichura 1988, Applied Statistics 37).

use crate::linalg::natural_log;

/// Step of the counter: the odd number nearest to 2^64 divided by the golden ratio.
pub const STEP: u64 = 0x9E37_79B9_7F4A_7C15;

/// Mixes 64 bits so that each bit of the answer depends on every bit of `value`.
///
/// A bijection, with `mix64(0) = 0`. It is the finaliser of SplitMix64: the generator's i-th output from seed `s` is
/// `mix64(s + i * STEP)`.
#[inline]
#[must_use]
pub fn mix64(value: u64) -> u64 {
    let mut z = value;
    z = (z ^ (z >> 30)).wrapping_mul(0xBF58_476D_1CE4_E5B9);
    z = (z ^ (z >> 27)).wrapping_mul(0x94D0_49BB_1331_11EB);
    z ^ (z >> 31)
}

/// Hash of one 64-bit value under a seed, for example of a row number.
///
/// For one seed this is a bijection of `value`: two rows never share a hash. Consecutive values give a SplitMix64
/// sequence that starts at the mixed seed.
#[inline]
#[must_use]
pub fn hash2(seed: u64, value: u64) -> u64 {
    let start = mix64(seed.wrapping_add(STEP));
    mix64(start.wrapping_add(value.wrapping_mul(STEP)))
}

/// Hash of a run of bytes under a seed, for example of a text key.
///
/// Bytes are taken eight at a time, least significant first on every platform, then the length, so that texts that
/// differ only in trailing zero bytes stay apart.
#[must_use]
pub fn hash_bytes(seed: u64, bytes: &[u8]) -> u64 {
    let mut state = mix64(seed.wrapping_add(STEP));
    for chunk in bytes.chunks(8) {
        let mut word = [0u8; 8];
        word[..chunk.len()].copy_from_slice(chunk);
        state = mix64((state ^ u64::from_le_bytes(word)).wrapping_add(STEP));
    }
    mix64((state ^ bytes.len() as u64).wrapping_add(STEP))
}

/// Maps 64 random bits to a number in (0, 1]: 53 bits, never 0, so that its logarithm is finite.
#[inline]
#[must_use]
pub fn unit_open(bits: u64) -> f64 {
    ((bits >> 11) + 1) as f64 * (1.0 / 9_007_199_254_740_992.0)
}

/// A stream of random numbers: SplitMix64 counted from a mixed (seed, stream) pair.
///
/// Streams of different numbers under one seed are independent for all practical ends.
#[derive(Debug, Clone)]
pub struct Stream {
    key: u64,
    counter: u64,
}

impl Stream {
    /// The stream of number `stream` under `seed`, at its beginning.
    #[must_use]
    pub fn new(seed: u64, stream: u64) -> Self {
        Self { key: hash2(seed, stream), counter: 0 }
    }

    /// The next 64 random bits.
    pub fn next_u64(&mut self) -> u64 {
        self.counter = self.counter.wrapping_add(1);
        mix64(self.key.wrapping_add(self.counter.wrapping_mul(STEP)))
    }

    /// A uniform number in (0, 1].
    pub fn uniform(&mut self) -> f64 {
        unit_open(self.next_u64())
    }

    /// A uniform whole number in 0..n, without bias; 0 where n is 0.
    pub fn below(&mut self, n: u64) -> u64 {
        if n == 0 {
            return 0;
        }
        let refuse_below = n.wrapping_neg() % n;
        loop {
            let product = u128::from(self.next_u64()) * u128::from(n);
            if product as u64 >= refuse_below {
                return (product >> 64) as u64;
            }
        }
    }

    /// A standard normal number, by the inverse of the distribution function.
    pub fn normal(&mut self) -> f64 {
        let p = ((self.next_u64() >> 12) as f64 + 0.5) * (1.0 / 4_503_599_627_370_496.0);
        normal_quantile(p)
    }
}

/// Coefficients of AS 241 for |p - 1/2| <= 0.425: numerator, denominator, lowest power first.
const MIDDLE: ([f64; 8], [f64; 8]) = (
    [
        3.387_132_872_796_366_5e0,
        1.331_416_678_917_843_8e2,
        1.971_590_950_306_551_3e3,
        1.373_169_376_550_946e4,
        4.592_195_393_154_987e4,
        6.726_577_092_700_87e4,
        3.343_057_558_358_813e4,
        2.509_080_928_730_122_7e3,
    ],
    [
        1.0,
        4.231_333_070_160_091e1,
        6.871_870_074_920_579e2,
        5.394_196_021_424_751e3,
        2.121_379_430_158_659_7e4,
        3.930_789_580_009_271e4,
        2.872_908_573_572_194_3e4,
        5.226_495_278_852_854e3,
    ],
);

/// Coefficients of AS 241 for sqrt(-log tail) <= 5.
const SHOULDER: ([f64; 8], [f64; 8]) = (
    [
        1.423_437_110_749_683_5e0,
        4.630_337_846_156_546e0,
        5.769_497_221_460_691e0,
        3.647_848_324_763_204_5e0,
        1.270_458_252_452_368_4e0,
        2.417_807_251_774_506e-1,
        2.272_384_498_926_918_4e-2,
        7.745_450_142_783_414e-4,
    ],
    [
        1.0,
        2.053_191_626_637_759e0,
        1.676_384_830_183_803_8e0,
        6.897_673_349_851e-1,
        1.481_039_764_274_800_8e-1,
        1.519_866_656_361_645_7e-2,
        5.475_938_084_995_345e-4,
        1.050_750_071_644_416_9e-9,
    ],
);

/// Coefficients of AS 241 for sqrt(-log tail) > 5.
const TAIL: ([f64; 8], [f64; 8]) = (
    [
        6.657_904_643_501_103e0,
        5.463_784_911_164_114e0,
        1.784_826_539_917_291_3e0,
        2.965_605_718_285_048_7e-1,
        2.653_218_952_657_612_4e-2,
        1.242_660_947_388_078_4e-3,
        2.711_555_568_743_487_6e-5,
        2.010_334_399_292_288_1e-7,
    ],
    [
        1.0,
        5.998_322_065_558_88e-1,
        1.369_298_809_227_358e-1,
        1.487_536_129_085_061_5e-2,
        7.868_691_311_456_133e-4,
        1.846_318_317_510_054_8e-5,
        1.421_511_758_316_446e-7,
        2.044_263_103_389_939_8e-15,
    ],
);

fn ratio(coefficients: &([f64; 8], [f64; 8]), x: f64) -> f64 {
    let mut above = 0.0;
    let mut below = 0.0;
    for power in (0..8).rev() {
        above = above * x + coefficients.0[power];
        below = below * x + coefficients.1[power];
    }
    above / below
}

/// The standard normal quantile of `p`, to about 1 part in 10^15 (AS 241, PPND16).
///
/// -infinity at 0, infinity at 1, NaN outside 0..=1. Uses the crate's own logarithm, so its bits are the same on every
/// platform.
#[must_use]
pub fn normal_quantile(p: f64) -> f64 {
    if p.is_nan() || !(0.0..=1.0).contains(&p) {
        return f64::NAN;
    }
    let q = p - 0.5;
    if q.abs() <= 0.425 {
        return q * ratio(&MIDDLE, 0.180_625 - q * q);
    }
    let tail = if q < 0.0 { p } else { 1.0 - p };
    if tail <= 0.0 {
        return if q < 0.0 { f64::NEG_INFINITY } else { f64::INFINITY };
    }
    let root = (-natural_log(tail)).sqrt();
    let size = if root <= 5.0 { ratio(&SHOULDER, root - 1.6) } else { ratio(&TAIL, root - 5.0) };
    if q < 0.0 { -size } else { size }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn splitmix64_known_answers() {
        // First outputs of SplitMix64 seeded with 0, as printed with the reference programme of its authors.
        assert_eq!(mix64(STEP), 0xE220_A839_7B1D_CDAF);
        assert_eq!(mix64(STEP.wrapping_mul(2)), 0x6E78_9E6A_A1B9_65F4);
        assert_eq!(mix64(STEP.wrapping_mul(3)), 0x06C4_5D18_8009_454F);
    }

    #[test]
    fn hashes_tell_neighbours_apart() {
        let mut seen = std::collections::HashSet::new();
        for value in 0..10_000u64 {
            assert!(seen.insert(hash2(7, value)));
        }
        assert_ne!(hash2(0, 1), hash2(1, 0));
        assert_ne!(hash_bytes(1, b"a"), hash_bytes(1, b"a\0"));
        assert_ne!(hash_bytes(1, b""), hash_bytes(2, b""));
        assert_ne!(hash_bytes(1, b"parcel-0001"), hash_bytes(1, b"parcel-0002"));
    }

    #[test]
    fn unit_interval_ends() {
        assert_eq!(unit_open(u64::MAX), 1.0);
        assert!(unit_open(0) > 0.0);
    }

    #[test]
    fn bounded_numbers_are_even() {
        let mut stream = Stream::new(3, 1);
        let mut counts = [0u32; 7];
        for _ in 0..70_000 {
            counts[stream.below(7) as usize] += 1;
        }
        assert!(counts.iter().all(|&c| (9_500..10_500).contains(&c)), "{counts:?}");
        assert_eq!(stream.below(0), 0);
        assert_eq!(stream.below(1), 0);
    }

    #[test]
    fn normal_quantiles_agree_with_tables() {
        // 0.975 and 0.995 from any table; the far tails from Wichura (1988), who prints -0.6744897501960817 for 0.25,
        // -3.090232306167814 for 0.001 and -9.262340089798408 for 1e-20.
        for (p, expected) in [
            (0.5, 0.0),
            (0.25, -0.674_489_750_196_081_7),
            (0.001, -3.090_232_306_167_813_5),
            (1e-20, -9.262_340_089_798_408),
            (0.975, 1.959_963_984_540_054),
            (0.995, 2.575_829_303_548_901),
        ] {
            let found = normal_quantile(p);
            assert!((found - expected).abs() <= 2e-15 * f64::max(1.0, expected.abs()), "{p}: {found}");
        }
        assert_eq!(normal_quantile(0.0), f64::NEG_INFINITY);
        assert_eq!(normal_quantile(1.0), f64::INFINITY);
        assert!(normal_quantile(1.5).is_nan() && normal_quantile(f64::NAN).is_nan());
    }

    #[test]
    fn normal_numbers_have_the_right_moments() {
        let mut stream = Stream::new(11, 2);
        let n = 200_000;
        let (mut first, mut second, mut fourth) = (0.0, 0.0, 0.0);
        for _ in 0..n {
            let z = stream.normal();
            first += z;
            second += z * z;
            fourth += z * z * z * z;
        }
        let n = f64::from(n);
        assert!((first / n).abs() < 0.01 && (second / n - 1.0).abs() < 0.015 && (fourth / n - 3.0).abs() < 0.1);
    }
}
