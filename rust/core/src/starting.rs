//! Starting values for a try, from a sample of the rows.
//!
//! `k-means++`: greedy seeding by squared distance (Arthur & Vassilvitskii 2007, with 2 + floor(log k) candidates a
//! centre) and a few steps of Lloyd's rule; weights are the shares of the clusters, and every component begins with the
//! pooled covariance within clusters, since single clusters may be singular. `random-rows`: k distinct rows drawn by
//! weight, equal weights, the covariance of all rows.
//!
//! Distances are taken on guarded coordinates: within 8 spreads as they are, beyond that on a logarithmic scale, so
//! that a few wild rows cannot claim every centre; and the rows farthest from their centre (2 % of the weight) are left
//! out of the first means and covariances. Every second try with full covariances seeds on whitened coordinates, which
//! finds long, thin, parallel groups.

use std::collections::HashSet;

use crate::error::{Error, Result};
use crate::linalg::{cholesky, natural_log, packed, packed_len, solve_lower};
use crate::maximise::{Moments, maximise};
use crate::mixture::ScaledMixture;
use crate::random::{Stream, hash_bytes};
use crate::structure::{Shape, Structure};

/// Steps of Lloyd's rule after the seeding.
const LLOYD_STEPS: usize = 4;
/// Coordinates beyond this many spreads are put on a logarithmic scale.
const GUARD: f64 = 8.0;
/// Share of the weight, the closest to their centres, that the first covariances are taken from.
const TRUSTED: f64 = 0.98;
/// Least eigenvalue of the first covariances, in spreads squared, also where the floor is off.
const LEAST_VARIANCE: f64 = 1e-10;

/// How the first means are found.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash)]
pub enum StartFrom {
    /// Greedy k-means++ and a few steps of Lloyd's rule.
    KMeansPlusPlus,
    /// Distinct rows drawn by weight.
    RandomRows,
}

impl StartFrom {
    /// Both ways, the usual one first.
    pub const ALL: [Self; 2] = [Self::KMeansPlusPlus, Self::RandomRows];

    /// Its name in options.
    #[must_use]
    pub const fn name(self) -> &'static str {
        match self {
            Self::KMeansPlusPlus => "k-means++",
            Self::RandomRows => "random-rows",
        }
    }

    /// The way of this name.
    ///
    /// # Errors
    /// [`Error::Option`] for any other text.
    pub fn parse(name: &str) -> Result<Self> {
        Self::ALL.into_iter().find(|s| s.name() == name).ok_or_else(|| Error::Option {
            option: "start_from".to_owned(),
            found: format!("\"{name}\""),
            advice: "choose \"k-means++\" or \"random-rows\"".to_owned(),
        })
    }
}

/// Rows at work: those of positive weight and finite values, in guarded coordinates.
struct Sample<'a> {
    values: Vec<&'a [f64]>,
    weights: Vec<f64>,
    guarded: Vec<f64>,
    d: usize,
}

/// Starting values for try number `attempt` under `seed`.
///
/// `values` (n x d, row-major, scaled coordinates), `weights` (n). The same arguments give the same bits. Where fewer
/// distinct rows than `k` are found the mixture has that many components and a note says so. Cost: about
/// (k log k + 4 k) n d for k-means++; one sort of the rows for random rows; n d^2 once.
///
/// # Errors
/// [`Error::Data`] where no row has a positive weight and finite values; [`Error::Option`] for k = 0;
/// [`Error::Internal`] where the lengths do not agree.
pub fn start(
    values: &[f64],
    weights: &[f64],
    d: usize,
    k: usize,
    shape: Shape,
    how: StartFrom,
    floor: f64,
    seed: u64,
    attempt: u64,
) -> Result<(ScaledMixture, Vec<String>)> {
    if k == 0 {
        return Err(Error::Option {
            option: "components".to_owned(),
            found: "0".to_owned(),
            advice: "ask for at least 1".to_owned(),
        });
    }
    let mut sample = Sample::new(values, weights, d)?;
    let mut stream = Stream::new(seed, attempt);
    let (labels, asked) = match how {
        StartFrom::KMeansPlusPlus => {
            if shape.structure == Structure::Full && attempt % 2 == 1 {
                sample.whiten();
            }
            let mut centres = sample.seed(k, &mut stream);
            for _ in 0..LLOYD_STEPS {
                if !sample.lloyd(&mut centres) {
                    break;
                }
            }
            (sample.nearest(&centres), None)
        }
        StartFrom::RandomRows => {
            let rows = sample.random_rows(k, &mut stream);
            let means: Vec<f64> = rows.iter().flat_map(|&i| sample.values[i].iter().copied()).collect();
            (vec![(0, 0.0); sample.weights.len()], Some(means))
        }
    };
    let clusters = labels.iter().map(|l| l.0).max().unwrap_or(0) + 1;
    let mut mixture = sample.first_mixture(&labels, clusters, shape, floor)?;
    if let Some(means) = asked {
        let found = means.len() / d;
        let share = 1.0 / found as f64;
        let one = mixture.stored_of(0).to_vec();
        mixture.weights = vec![share; found];
        mixture.log_weights = vec![natural_log(share); found];
        mixture.means = means;
        mixture.stored = one.repeat(shape.matrices(found));
    }
    let found = mixture.components();
    let mut notes = Vec::new();
    if found < k {
        notes.push(format!("{k} components were asked for, but the sample has {found} distinct places to start from"));
    }
    Ok((mixture, notes))
}

/// Number of distinct rows in `values` (n x d), counted up to `at_most`.
///
/// 0 and -0 are one value. Rows are told apart by 64-bit hashes.
#[must_use]
pub fn distinct_rows(values: &[f64], d: usize, at_most: usize) -> usize {
    let mut seen = HashSet::new();
    if d == 0 || at_most == 0 {
        return 0;
    }
    for row in values.chunks_exact(d) {
        seen.insert(row_hash(row));
        if seen.len() >= at_most {
            break;
        }
    }
    seen.len()
}

fn row_hash(row: &[f64]) -> u64 {
    let mut hash = 0;
    for value in row {
        // adding 0 turns -0 into 0
        hash = hash_bytes(hash, &(value + 0.0).to_le_bytes());
    }
    hash
}

/// x within `GUARD`, logarithmic beyond, with one slope at the joint.
fn guarded(x: f64) -> f64 {
    if x.abs() <= GUARD { x } else { (GUARD + GUARD * natural_log(x.abs() / GUARD)).copysign(x) }
}

fn distance(a: &[f64], b: &[f64]) -> f64 {
    let mut sum = 0.0;
    for (x, y) in a.iter().zip(b) {
        sum += (x - y) * (x - y);
    }
    sum
}

impl<'a> Sample<'a> {
    fn new(values: &'a [f64], weights: &[f64], d: usize) -> Result<Self> {
        if d == 0 || values.len() != weights.len() * d {
            return Err(Error::Internal {
                what: format!("{} values do not make {} rows of {d} columns", values.len(), weights.len()),
            });
        }
        let mut sample = Self { values: Vec::new(), weights: Vec::new(), guarded: Vec::new(), d };
        for (row, &weight) in values.chunks_exact(d).zip(weights) {
            if weight > 0.0 && weight.is_finite() && row.iter().all(|x| x.is_finite()) {
                sample.values.push(row);
                sample.weights.push(weight);
                sample.guarded.extend(row.iter().map(|x| guarded(*x)));
            }
        }
        if sample.weights.is_empty() {
            return Err(Error::Data {
                what: "no row of the sample can be started from".to_owned(),
                advice: "give rows with positive weights and finite values in all columns".to_owned(),
            });
        }
        Ok(sample)
    }

    fn row(&self, i: usize) -> &[f64] {
        &self.guarded[i * self.d..(i + 1) * self.d]
    }

    /// Puts the guarded coordinates into units of their own covariance; leaves them where that is singular.
    fn whiten(&mut self) {
        let d = self.d;
        let total: f64 = self.weights.iter().sum();
        let mut mean = vec![0.0; d];
        for (row, w) in self.guarded.chunks_exact(d).zip(&self.weights) {
            mean.iter_mut().zip(row).for_each(|(m, x)| *m += w / total * x);
        }
        let mut factor = vec![0.0; d * d];
        for (row, w) in self.guarded.chunks_exact(d).zip(&self.weights) {
            for i in 0..d {
                let left = w / total * (row[i] - mean[i]);
                for j in 0..=i {
                    factor[i * d + j] += left * (row[j] - mean[j]);
                }
            }
        }
        for i in 0..d {
            factor[i * d + i] += LEAST_VARIANCE;
        }
        if cholesky(&mut factor, d).is_ok() {
            for row in self.guarded.chunks_exact_mut(d) {
                row.iter_mut().zip(&mean).for_each(|(x, m)| *x -= m);
                solve_lower(&factor, d, row);
            }
        }
    }

    /// Greedy k-means++ on the guarded coordinates: up to k centres, at distinct rows (rows x d).
    fn seed(&self, k: usize, stream: &mut Stream) -> Vec<f64> {
        let n = self.weights.len();
        let candidates = 2 + natural_log(k as f64) as usize;
        let mut cumulated = vec![0.0; n];
        let Some(first) = draw(&self.weights, &mut cumulated, stream) else {
            return self.row(0).to_vec();
        };
        let mut centres = self.row(first).to_vec();
        let mut closest: Vec<f64> = (0..n).map(|i| distance(self.row(i), self.row(first))).collect();
        let mut mass = vec![0.0; n];
        let (mut best, mut trial) = (vec![0.0; n], vec![0.0; n]);
        while centres.len() < k * self.d {
            for i in 0..n {
                mass[i] = self.weights[i] * closest[i];
            }
            let mut chosen = None;
            let mut least = f64::INFINITY;
            let total = running_sum(&mass, &mut cumulated);
            for _ in 0..candidates {
                let Some(candidate) = pick(&mass, &cumulated, total, stream) else { break };
                let mut cost = 0.0;
                for i in 0..n {
                    trial[i] = closest[i].min(distance(self.row(i), self.row(candidate)));
                    cost += self.weights[i] * trial[i];
                }
                if chosen.is_none() || cost < least {
                    (chosen, least) = (Some(candidate), cost);
                    std::mem::swap(&mut best, &mut trial);
                }
            }
            // nothing left that is apart from a centre: fewer distinct rows than k
            let Some(chosen) = chosen else { break };
            centres.extend_from_slice(self.row(chosen));
            std::mem::swap(&mut closest, &mut best);
        }
        centres
    }

    /// Nearest centre of every row, and the squared distance to it; of equals the first.
    fn nearest(&self, centres: &[f64]) -> Vec<(usize, f64)> {
        self.guarded
            .chunks_exact(self.d)
            .map(|row| {
                let mut best = (0, f64::INFINITY);
                for (place, centre) in centres.chunks_exact(self.d).enumerate() {
                    let apart = distance(row, centre);
                    if apart < best.1 {
                        best = (place, apart);
                    }
                }
                best
            })
            .collect()
    }

    /// One step of Lloyd's rule; tells whether a centre moved. A centre without rows stays.
    fn lloyd(&self, centres: &mut [f64]) -> bool {
        let d = self.d;
        let mut sums = vec![0.0; centres.len()];
        let mut mass = vec![0.0; centres.len() / d];
        for (i, (label, _)) in self.nearest(centres).into_iter().enumerate() {
            mass[label] += self.weights[i];
            let sum = &mut sums[label * d..(label + 1) * d];
            sum.iter_mut().zip(self.row(i)).for_each(|(s, x)| *s += self.weights[i] * x);
        }
        let mut moved = false;
        for (place, centre) in centres.iter_mut().enumerate() {
            if mass[place / d] > 0.0 {
                let mean = sums[place] / mass[place / d];
                moved |= mean != *centre;
                *centre = mean;
            }
        }
        moved
    }

    /// Up to k rows of distinct values, drawn by weight without replacement (Efraimidis & Spirakis 2006).
    fn random_rows(&self, k: usize, stream: &mut Stream) -> Vec<usize> {
        let mut order: Vec<(f64, usize)> =
            self.weights.iter().enumerate().map(|(i, w)| (-natural_log(stream.uniform()) / w, i)).collect();
        order.sort_by(|a, b| a.0.total_cmp(&b.0).then(a.1.cmp(&b.1)));
        let mut seen = HashSet::new();
        let distinct = order.into_iter().map(|(_, i)| i).filter(|&i| seen.insert(row_hash(self.values[i])));
        distinct.take(k).collect()
    }

    /// Shares and means of the clusters with the pooled covariance within them, from the trusted rows.
    fn first_mixture(
        &self,
        labels: &[(usize, f64)],
        clusters: usize,
        shape: Shape,
        floor: f64,
    ) -> Result<ScaledMixture> {
        let d = self.d;
        let about = self.centres_of(labels, clusters);
        let trusted = self.trusted(labels, clusters, &about);
        let full = shape.structure == Structure::Full;
        let each = if full { packed_len(d) } else { d };
        let mut share = vec![0.0; clusters];
        let mut m = Moments {
            d,
            shape_full: full,
            weight: vec![0.0; clusters],
            first: vec![0.0; clusters * d],
            second: vec![0.0; clusters * each],
            about,
        };
        let mut y = vec![0.0; d];
        for (i, &(label, _)) in labels.iter().enumerate() {
            share[label] += self.weights[i];
            if !trusted[i] {
                continue;
            }
            let w = self.weights[i];
            m.weight[label] += w;
            let second = &mut m.second[label * each..(label + 1) * each];
            for p in 0..d {
                y[p] = self.values[i][p] - m.about[label * d + p];
                m.first[label * d + p] += w * y[p];
                if full {
                    for q in 0..=p {
                        second[packed(p, q)] += w * y[p] * y[q];
                    }
                } else {
                    second[p] += w * y[p] * y[p];
                }
            }
        }
        let pooled = maximise(&m, Shape::new(shape.structure, true), floor.max(LEAST_VARIANCE))?;
        let mut mixture = pooled.mixture;
        // shares count every row of a cluster, trusted or not
        let total: f64 = pooled.kept.iter().map(|&c| share[c]).sum();
        mixture.weights = pooled.kept.iter().map(|&c| share[c] / total).collect();
        mixture.log_weights = mixture.weights.iter().map(|w| natural_log(*w)).collect();
        mixture.stored = mixture.stored.repeat(shape.matrices(pooled.kept.len()));
        mixture.shape = shape;
        Ok(mixture)
    }

    /// Row closest to the middle of each cluster, as the reference for its moments (clusters x d, scaled coordinates).
    fn centres_of(&self, labels: &[(usize, f64)], clusters: usize) -> Vec<f64> {
        let d = self.d;
        let mut best = vec![f64::INFINITY; clusters];
        let mut about = vec![0.0; clusters * d];
        for (i, &(label, apart)) in labels.iter().enumerate() {
            let apart = if clusters == 1 { distance(self.row(i), &vec![0.0; d]) } else { apart };
            if apart < best[label] {
                best[label] = apart;
                about[label * d..(label + 1) * d].copy_from_slice(self.values[i]);
            }
        }
        about
    }

    /// Marks the closest rows of the sample that make up 98 % of its weight, and the closest row of every cluster.
    fn trusted(&self, labels: &[(usize, f64)], clusters: usize, about: &[f64]) -> Vec<bool> {
        let d = self.d;
        let far: Vec<f64> = (0..labels.len())
            .map(|i| {
                let label = labels[i].0;
                let reference: Vec<f64> = about[label * d..(label + 1) * d].iter().map(|x| guarded(*x)).collect();
                let row: Vec<f64> = self.values[i].iter().map(|x| guarded(*x)).collect();
                distance(&row, &reference)
            })
            .collect();
        let mut order: Vec<usize> = (0..labels.len()).collect();
        order.sort_by(|&a, &b| far[a].total_cmp(&far[b]).then(a.cmp(&b)));
        let aim = TRUSTED * self.weights.iter().sum::<f64>();
        let mut trusted = vec![false; labels.len()];
        let mut met = vec![false; clusters];
        let mut mass = 0.0;
        for i in order {
            let first = !std::mem::replace(&mut met[labels[i].0], true);
            trusted[i] = first || mass < aim;
            mass += self.weights[i];
        }
        trusted
    }
}

/// Running sums of `mass` into `cumulated`; returns the total.
fn running_sum(mass: &[f64], cumulated: &mut [f64]) -> f64 {
    let mut sum = 0.0;
    for (place, value) in cumulated.iter_mut().zip(mass) {
        sum += value;
        *place = sum;
    }
    sum
}

/// A position drawn in proportion to `mass`, whose running sums are `cumulated`; `None` where all mass is zero.
fn pick(mass: &[f64], cumulated: &[f64], total: f64, stream: &mut Stream) -> Option<usize> {
    if !(total > 0.0 && total.is_finite()) {
        return None;
    }
    let aim = total * stream.uniform();
    let place = cumulated.partition_point(|sum| *sum < aim).min(mass.len() - 1);
    if mass[place] > 0.0 { Some(place) } else { mass.iter().position(|m| *m > 0.0) }
}

fn draw(mass: &[f64], cumulated: &mut [f64], stream: &mut Stream) -> Option<usize> {
    let total = running_sum(mass, cumulated);
    pick(mass, cumulated, total, stream)
}

#[cfg(test)]
mod tests;
