//! When to stop: how much log-likelihood is still to be gained, and who still moves.
//!
//! A small last gain is not convergence. Gains of EM shrink by a nearly constant rate a, so after the last gain g about
//! g a / (1 - a) is still to come (Aitken's rule; Boehning, Dietz, Schaub, Schlattmann & Lindsay 1994). Near a maximum
//! the log-likelihood is quadratic, so the parameters themselves converge at the rate sqrt(a), and a mean that has just
//! moved by s has about s sqrt(a) / (1 - sqrt(a)) before it.

use crate::mixture::Mixture;
use crate::scaling::Scaling;

/// Rates are believed up to this; a mixture that gains more and more has far to go.
const MOST_RATE: f64 = 0.99999;
/// A change of the log-likelihood below this share of itself is rounding.
const ROUNDING: f64 = 1e-14;
/// A component still moves while its mean has more than this many spreads to go.
const STILL: f64 = 0.01;

/// The state of the rule between passes.
#[derive(Debug, Clone)]
pub struct Stopping {
    tolerance: f64,
    least_share: f64,
    scaling: Scaling,
    last: Option<f64>,
    gain: Option<f64>,
    rates: Vec<f64>,
    components: usize,
}

/// What is known after a pass.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Verdict {
    /// Estimated gain still to come, in nats per row; `None` while fewer than three passes are known.
    pub remaining: Option<f64>,
    /// Components whose mean is estimated to move by more than 0.01 spreads yet.
    pub moving: usize,
    /// Whether to stop.
    pub stop: bool,
}

impl Stopping {
    /// A rule that stops below `tolerance` nats per row of estimated gain, with no component of at least `least_share`
    /// weight on the move; moves are measured in the spreads of `scaling`. A tolerance of 0 never stops.
    #[must_use]
    pub fn new(tolerance: f64, least_share: f64, scaling: Scaling) -> Self {
        Self { tolerance, least_share, scaling, last: None, gain: None, rates: Vec::new(), components: 0 }
    }

    /// Takes one EM pass: `total` log-likelihood of `before` (nats, not per row), the `weight` of all rows, and the
    /// mixture `after` the M-step. Where the number of components has changed the history starts anew.
    pub fn add(&mut self, total: f64, weight: f64, before: &Mixture, after: &Mixture) -> Verdict {
        let k = after.components();
        let changed = before.components() != k || (self.components != 0 && self.components != before.components());
        self.components = k;
        if changed || before.dims() != after.dims() || after.dims() != self.scaling.dims() {
            (self.last, self.gain) = (None, None);
            self.rates.clear();
            return Verdict { remaining: None, moving: k, stop: false };
        }
        let level = total / weight;
        let (last, earlier) = (self.last.replace(level), self.gain);
        let Some(last) = last else {
            return Verdict { remaining: None, moving: k, stop: false };
        };
        let gain = level - last;
        self.gain = Some(gain);
        let flat = gain.abs() <= ROUNDING * level.abs().max(1.0);
        if let (Some(earlier), false) = (earlier, flat) {
            let rate = if earlier > 0.0 { gain / earlier } else { MOST_RATE };
            self.rates.push(if rate.is_finite() { rate.clamp(0.0, MOST_RATE) } else { MOST_RATE });
            if self.rates.len() > 2 {
                self.rates.remove(0);
            }
        }
        // the slower of the last two rates: one lucky gain must not end the search
        let rate = self.rates.iter().copied().reduce(f64::max);
        let remaining = match (flat, rate) {
            (true, _) => Some(0.0),
            (false, Some(rate)) => Some(gain.max(0.0) * rate / (1.0 - rate)),
            (false, None) => None,
        };
        let root = rate.unwrap_or(MOST_RATE).sqrt();
        let moving = self.moving(before, after, root / (1.0 - root));
        let known = flat || self.rates.len() > 1;
        let small = remaining.is_some_and(|gain| gain < self.tolerance);
        Verdict { remaining, moving, stop: self.tolerance > 0.0 && known && small && moving == 0 }
    }

    fn moving(&self, before: &Mixture, after: &Mixture, ahead: f64) -> usize {
        let spread = self.scaling.spread();
        let moves = |k: usize| {
            let pairs = before.mean(k).iter().zip(after.mean(k)).zip(spread);
            pairs.map(|((old, new), s)| ((new - old) / s).abs()).fold(0.0, f64::max)
        };
        // `!(<=)` rather than `>`: a move that is no number counts as one
        let far = |k: &usize| (moves(*k) * ahead).partial_cmp(&STILL).is_none_or(|o| o.is_gt());
        (0..after.components()).filter(|&k| after.weights()[k] >= self.least_share).filter(far).count()
    }
}

#[cfg(test)]
#[allow(clippy::unwrap_used)]
mod tests {
    use super::*;
    use crate::structure::{Shape, Structure};

    fn at(mean: f64) -> Mixture {
        let shape = Shape::new(Structure::Spherical, false);
        Mixture::new(vec![0.5, 0.5], vec![mean, 3.0], vec![1.0, 1.0], 1, shape).unwrap()
    }

    fn rule(tolerance: f64) -> Stopping {
        Stopping::new(tolerance, 0.0, Scaling::identity(1))
    }

    #[test]
    fn geometric_gains_are_seen_through() {
        // l_t = -1 - 0.9^t: after pass t exactly 0.9^t is left
        let mut stopping = rule(1e-6);
        for t in 0..400 {
            let left = 0.9f64.powi(t);
            let step = 0.9f64.sqrt().powi(t);
            let verdict = stopping.add(1000.0 * (-1.0 - left), 1000.0, &at(step), &at(step * 0.9f64.sqrt()));
            if t < 2 {
                assert_eq!(verdict.remaining, None);
            } else {
                let found = verdict.remaining.unwrap();
                assert!((found / left - 1.0).abs() < 1e-2 || left < 1e-10, "{t} {found} {left}");
            }
            if verdict.stop {
                assert!((1e-7..1e-6).contains(&left), "{left}");
                return;
            }
        }
        panic!("never stopped");
    }

    #[test]
    fn movement_holds_the_stop_back() {
        // gains that shrink by 0.81 while a mean still has 0.9^t / 0.1 to go; the estimate is step * 0.9 / 0.1
        let mut stopping = rule(1.0);
        let mut stopped_at = None;
        for t in 0..200 {
            let (here, next) = (0.9f64.powi(t), 0.9f64.powi(t + 1));
            let verdict = stopping.add(-1.0 - 1e-3 * 0.81f64.powi(t), 1.0, &at(here), &at(next));
            if verdict.stop {
                stopped_at = Some(next);
                break;
            }
        }
        let left = stopped_at.unwrap();
        assert!((0.008..0.0101).contains(&left), "{left}");
    }

    #[test]
    fn flat_likelihood_and_still_means_stop_at_once() {
        let mut stopping = rule(1e-6);
        assert!(!stopping.add(-5.0, 1.0, &at(0.0), &at(1.0)).stop);
        assert!(!stopping.add(-4.0, 1.0, &at(1.0), &at(1.0)).stop);
        let verdict = stopping.add(-4.0, 1.0, &at(1.0), &at(1.0));
        assert_eq!(verdict, Verdict { remaining: Some(0.0), moving: 0, stop: true });
    }

    #[test]
    fn growing_gains_do_not_stop() {
        let mut stopping = rule(1e-3);
        for t in 0..12 {
            let verdict = stopping.add(1e-9 * 1.5f64.powi(t), 1.0, &at(0.0), &at(0.0));
            assert!(!verdict.stop || t < 3 || verdict.remaining.unwrap() < 1e-3);
        }
        assert!(stopping.add(1e-3, 1.0, &at(0.0), &at(0.0)).remaining.unwrap() > 1.0);
    }

    #[test]
    fn zero_tolerance_and_removed_components() {
        let mut stopping = rule(0.0);
        for _ in 0..5 {
            assert!(!stopping.add(-1.0, 1.0, &at(0.0), &at(0.0)).stop);
        }
        let mut stopping = rule(1e-3);
        for _ in 0..3 {
            stopping.add(-1.0, 1.0, &at(0.0), &at(0.0));
        }
        let shape = Shape::new(Structure::Spherical, false);
        let one = Mixture::new(vec![1.0], vec![0.0], vec![1.0], 1, shape).unwrap();
        let verdict = stopping.add(-1.0, 1.0, &at(0.0), &one);
        assert_eq!(verdict, Verdict { remaining: None, moving: 1, stop: false });
        assert!(!stopping.add(-0.9, 1.0, &one, &one).stop);
    }

    #[test]
    fn small_components_are_not_waited_for() {
        let shape = Shape::new(Structure::Spherical, false);
        let with = |m: f64| Mixture::new(vec![0.999, 0.001], vec![0.0, m], vec![1.0, 1.0], 1, shape).unwrap();
        let mut stopping = Stopping::new(1e-6, 0.01, Scaling::identity(1));
        for t in 0..3 {
            let verdict = stopping.add(-1.0, 1.0, &with(f64::from(t)), &with(f64::from(t) + 1.0));
            assert_eq!(verdict.stop, t > 0);
        }
    }
}
