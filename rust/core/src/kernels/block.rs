//! A block of rows evaluated under a mixture, in float64 or float32.

use super::aligned::Aligned;
use super::apart::{self, Differences};
use super::density::densities;
use super::evaluator::{BLOCK, BLOCK_STRIDE, Evaluator, Factors};
use super::lanes::{AnyKernel, AnyLanes, Kernel, Lanes, Scalar};
use super::moments::{self, Feature, Features, PANEL, Panel};
use super::posterior::{self, RowSums};
use super::single::Single;
use super::tier::{self, Precision};

/// Working room of one thread.
pub struct Scratch<T = f64> {
    pub(super) log: Aligned<T>,
    r: Aligned<T>,
    share: Aligned<T>,
    pub(super) shifted: Aligned<T>,
    room: Differences,
    pub(super) sums: RowSums<T>,
    logs: Vec<f64>,
    panel: Box<Panel<T>>,
}

impl<T: Scalar> Scratch<T> {
    /// Room for any block of `evaluator`.
    pub fn new(evaluator: &Evaluator) -> Self {
        Self {
            log: Aligned::new(evaluator.k * BLOCK_STRIDE),
            r: Aligned::new(evaluator.pad * BLOCK_STRIDE),
            share: Aligned::new(BLOCK_STRIDE),
            shifted: Aligned::new(evaluator.d * BLOCK_STRIDE),
            room: Vec::new(),
            sums: RowSums::new(),
            logs: vec![0.0; BLOCK_STRIDE],
            panel: Box::new([[T::ZERO; BLOCK]; PANEL]),
        }
    }
}

/// One evaluated block: responsibilities and sums, shown to the measures of its mixture.
pub struct Block<'a, T = f64> {
    /// The mixture.
    pub evaluator: &'a Evaluator,
    /// Rows.
    pub n: usize,
    /// Scaled columns, column j at `x[j * BLOCK_STRIDE..]`.
    pub x: &'a [T],
    /// Row weights, when they are not all 1.
    pub weights: Option<&'a [f64]>,
    /// Sum of row weight times log density.
    pub log_likelihood: f64,
    /// Sum of row weights.
    pub weight: f64,
    /// What responsibilities times row weight were divided by.
    unit: f64,
    scratch: &'a mut Scratch<T>,
}

struct Posterior<'a, T, F> {
    e: &'a Evaluator,
    factors: &'a F,
    x: &'a [T],
    n: usize,
    weights: Option<&'a [f64]>,
    scale: f64,
    mixed: bool,
    scratch: &'a mut Scratch<T>,
}

impl<T: Scalar, F: Factors<T>> AnyKernel<T> for Posterior<'_, T, F> {
    type Out = f64;
    #[inline(always)]
    fn run<L: AnyLanes<T = T>>(self, l: L) -> f64 {
        let Self { e, factors, x, n, weights, scale, mixed, scratch: s } = self;
        densities(l, factors, x, n, &mut s.shifted, &mut s.log);
        if posterior::exponentials(l, e.k, n, mixed, &mut s.log, &mut s.sums) {
            e.mend(x, n, &mut s.log, &mut s.sums);
        }
        posterior::responsibilities(l, e.k, e.pad, n, weights, scale, &s.log, &s.sums, &mut s.share, &mut s.r);
        posterior::log_likelihood(l, n, weights, &s.sums, &mut s.logs)
    }
}

struct Entropies<'a>(usize, &'a mut RowSums);

impl Kernel for Entropies<'_> {
    type Out = ();
    #[inline(always)]
    fn run<L: Lanes>(self, l: L) {
        posterior::entropies(l, self.0, self.1);
    }
}

struct Moments<'a, T> {
    features: &'a Features,
    k: usize,
    d: usize,
    pad: usize,
    n: usize,
    x: &'a [T],
    r: &'a [T],
    unit: f64,
    skip: &'a [bool],
    panel: &'a mut Panel<T>,
    sums: &'a mut [f64],
}

impl<T: Scalar> AnyKernel<T> for Moments<'_, T> {
    type Out = ();
    #[inline(always)]
    fn run<L: AnyLanes<T = T>>(self, l: L) {
        let Self { features, k, d, pad, n, x, r, unit, skip, panel, sums } = self;
        moments::add(l, features, k, d, pad, n, x, r, unit, skip, panel, sums);
    }
}

struct Label<'a> {
    k: usize,
    n: usize,
    exponentials: &'a [f64],
    best: &'a mut [f64],
}

impl Kernel for Label<'_> {
    type Out = ();
    #[inline(always)]
    fn run<L: Lanes>(self, l: L) {
        let Self { k, n, exponentials, best } = self;
        for row in (0..n).step_by(L::N) {
            let mut most = l.load(&exponentials[row..]);
            let mut label = l.splat(0.0);
            for (c, line) in exponentials.chunks_exact(BLOCK_STRIDE).enumerate().take(k).skip(1) {
                let e = l.load(&line[row..]);
                label = l.select_gt(e, most, l.splat(c as f64), label);
                most = l.max_or(e, most);
            }
            l.store(label, &mut best[row..]);
        }
    }
}

struct Apart<'a> {
    e: &'a Evaluator,
    list: &'a [Feature],
    n: usize,
    x: &'a [f64],
    r: &'a [f64],
    room: &'a mut Differences,
    sums: &'a mut [f64],
}

impl Kernel for Apart<'_> {
    type Out = ();
    #[inline(always)]
    fn run<L: Lanes>(self, l: L) {
        let Self { e, list, n, x, r, room, sums } = self;
        apart::add(l, list, &e.apart, e.pad, n, x, r, e.points(), room, sums);
    }
}

impl<'a> Block<'a> {
    /// Evaluates `n` rows. `mixed` asks for what [`Block::entropy`] needs.
    pub fn evaluate(
        evaluator: &'a Evaluator,
        x: &'a [f64],
        n: usize,
        weights: Option<&'a [f64]>,
        mixed: bool,
        scratch: &'a mut Scratch,
    ) -> Self {
        let block = Self::new(evaluator, evaluator, x, n, weights, 1.0, mixed, scratch);
        if mixed {
            tier::run(Entropies(n, &mut block.scratch.sums));
        }
        block
    }

    /// Adds responsibility times feature to `sums` (features by `evaluator.pad` components); the features of some components
    /// (`evaluator.apart`) are taken about their means.
    pub fn add_moments(&mut self, features: &Features, sums: &mut [f64]) {
        let (e, n, x) = (self.evaluator, self.n, self.x);
        if e.points().is_empty() {
            self.moments(features, &[], sums);
            return;
        }
        self.moments(features, &e.apart, sums);
        let s = &mut *self.scratch;
        tier::run(Apart { e, list: &features.list, n, x, r: &s.r, room: &mut s.room, sums });
    }

    /// The most likely component of each row.
    pub fn label(&mut self, labels: &mut [u16]) {
        let s = &mut *self.scratch;
        tier::run(Label { k: self.evaluator.k, n: self.n, exponentials: &s.log, best: &mut s.share });
        labels.iter_mut().zip(s.share.iter()).take(self.n).for_each(|(label, best)| *label = *best as u16);
    }

    /// Sum over rows of row weight times the entropy of the responsibilities; evaluated with `mixed` only.
    pub fn entropy(&self) -> f64 {
        posterior::entropy(self.n, self.weights, &self.scratch.sums)
    }
}

impl<'a> Block<'a, f32> {
    /// Evaluates `n` rows in float32.
    ///
    /// Row weights are divided by the power of two below the largest of the block, so that any of them fit; densities are
    /// taken relative to the largest constant of the components, which the sum in float64 gets back.
    pub fn evaluate_single(
        evaluator: &'a Evaluator,
        single: &Single,
        x: &'a [f32],
        n: usize,
        weights: Option<&'a [f64]>,
        scratch: &'a mut Scratch<f32>,
    ) -> Self {
        let most = weights.map_or(1.0, |w| w[..n].iter().fold(f64::MIN_POSITIVE, |a, &b| if b > a { b } else { a }));
        let unit = f64::from_bits(most.to_bits() & (0x7ff << 52));
        let mut block = Self::new(evaluator, single, x, n, weights, unit, false, scratch);
        block.log_likelihood += single.base * block.weight;
        block
    }

    /// The most likely component of each row.
    pub fn label(&self, labels: &mut [u16]) {
        for (row, label) in labels.iter_mut().enumerate().take(self.n) {
            let shares = &self.scratch.r[row * self.evaluator.pad..][..self.evaluator.k];
            let mut best = (0.0, 0);
            for (k, &r) in shares.iter().enumerate() {
                if r > best.0 {
                    best = (r, k);
                }
            }
            *label = best.1 as u16;
        }
    }

    /// Adds responsibility times feature to `sums` (features by `evaluator.pad` components).
    pub fn add_moments(&mut self, features: &Features, sums: &mut [f64]) {
        self.moments(features, &[], sums);
    }
}

impl<'a, T: Precision> Block<'a, T> {
    fn new<F: Factors<T>>(
        evaluator: &'a Evaluator,
        factors: &F,
        x: &'a [T],
        n: usize,
        weights: Option<&'a [f64]>,
        unit: f64,
        mixed: bool,
        scratch: &'a mut Scratch<T>,
    ) -> Self {
        let (e, scale) = (evaluator, 1.0 / unit);
        let log_likelihood = T::run(Posterior { e, factors, x, n, weights, scale, mixed, scratch: &mut *scratch });
        let weight = posterior::weight(n, weights);
        Self { evaluator, n, x, weights, log_likelihood, weight, unit, scratch }
    }

    fn moments(&mut self, features: &Features, skip: &[bool], sums: &mut [f64]) {
        let Self { evaluator: e, n, x, unit, .. } = *self;
        let s = &mut *self.scratch;
        T::run(Moments { features, k: e.k, d: e.d, pad: e.pad, n, x, r: &s.r, unit, skip, panel: &mut s.panel, sums });
    }

    /// Entries with responsibility above 0.
    pub fn pairs(&self) -> usize {
        self.scratch.r[..self.n * self.evaluator.pad].iter().filter(|r| **r > T::ZERO).count()
    }

    /// Responsibilities times row weight (in float32 divided by a unit of the block): `pad` places a row.
    pub fn weighted_responsibilities(&self) -> &[T] {
        &self.scratch.r
    }
}
