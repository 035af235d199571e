//! Bootstrap of the main fit: the spread of the parameters over data that could have been recorded instead.
//!
//! Two ways to draw them:
//!
//! - **parametric**: every rate is drawn from N(f, e^2 + w^2), f the fitted curve, e its standard error, w the extra
//!   SD. It takes the model at its word.
//! - **cases**: at a level with m > 1 steps, m steps are drawn with replacement from those recorded there, each with
//!   its own standard error, and their deviations from the level's mean are stretched by sqrt(m/(m-1)), since m draws
//!   about a mean of m have only (m-1)/m of the variance (Rao & Wu 1988, *JASA* 83:231). The drives stay as they were
//!   chosen, and so does the part of a level's deviation that all its repeats share. A level with one step says
//!   nothing about its scatter: it keeps its step and draws the residual as `parametric` does.
//!
//! Every resample is fitted with an extra variance of its own; where the fit was made with a held one, so are these.
//! Quantiles are taken of ln gain, 1/max rate, threshold, ln noise SD and 1/half-rise, in which an open ceiling is the
//! ordinary value 0 and becomes an infinite bound. The acceleration of BCa comes from leaving out one point at a time.
//!
//! What to expect, from simulated cells of 20 to 80 steps (95 % nominal): `parametric` percentile intervals covered the
//! truth in 94 to 96 % of all cells; BCa in 94 to 95 % of those whose levels lie close enough to show the noise and
//! that reach half of their max rate, but in 90 to 92 % of all, since its corrections presume an estimate that no bound
//! holds. `cases` covered 88 to 92 % with eight repeats a level and less with fewer, each level's scatter being known
//! from its own repeats alone: prefer `parametric` unless there are many.
//!
//! Random numbers are those of ChaCha8, keyed by a hash of run seed, cell and response, one stream a resample: the
//! result depends neither on the number of threads nor on the order of the work, and the first resamples of a longer
//! run are those of a shorter one.

use rand::{RngExt, SeedableRng};
use rand_chacha::ChaCha8Rng;
use rand_distr::{Distribution, StandardNormal};
use serde::{Deserialize, Serialize};
use statrs::distribution::{ContinuousCDF, Normal};

use super::bootstrap_interval::{ReplicateInterval, acceleration, intervals};
use super::estimates::t_quantile;
use super::main_fit::{self, MainFit, Scatter};
use super::objective::{Chart, Point, evaluate};
use super::resample_fit::{Refit, ResampleFit, Sample, points_of};

/// How the rates of a resample are drawn.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Hash, Serialize, Deserialize)]
#[serde(rename_all = "lowercase")]
pub enum BootstrapKind {
    /// From the fitted curve and the variances of the points.
    #[default]
    Parametric,
    /// From the steps recorded at the same level, where there is more than one.
    Cases,
}

/// What to draw.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
#[serde(default, deny_unknown_fields)]
pub struct BootstrapSettings {
    /// How rates are drawn.
    pub kind: BootstrapKind,
    /// Number of resamples; 0 is no bootstrap.
    pub resamples: usize,
    /// Seed of the run.
    pub seed: u64,
}

impl Default for BootstrapSettings {
    fn default() -> Self {
        Self {
            kind: BootstrapKind::Parametric,
            resamples: 0,
            seed: 1,
        }
    }
}

/// 95 % intervals of one parameter, in its reported unit. An open bound is infinite.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct BootstrapInterval {
    /// Percentile interval.
    pub percentile: [f64; 2],
    /// BCa interval (Efron 1987); `None` where its corrections are not defined, as for the max rate of a cell whose
    /// best curve is the ramp with whichever point left out.
    pub bca: Option<[f64; 2]>,
}

/// What the resamples of one fit say.
#[derive(Clone, Debug, PartialEq)]
pub struct Bootstrap {
    /// Max rate, Hz.
    pub max_rate: BootstrapInterval,
    /// Half-rise, drive units.
    pub half_rise: BootstrapInterval,
    /// Threshold, drive units.
    pub threshold: BootstrapInterval,
    /// Noise SD, drive units; a lower bound of 0 where the replicates rest on the bound of the search.
    pub noise_sd: BootstrapInterval,
    /// Initial gain, Hz per drive unit.
    pub initial_gain: BootstrapInterval,
    /// Resamples drawn.
    pub resamples: usize,
    /// Resamples whose fit did not converge; they are not among the replicates.
    pub failed: usize,
    /// Resamples whose short search did not arrive and that were fitted from all starts.
    pub searched_again: usize,
    /// Resamples whose best curve has no ceiling at all.
    pub without_ceiling: usize,
    /// Points that could not be left out for the acceleration, because the rest did not determine a curve.
    pub jackknife_failed: usize,
    /// Passes of the curve over the levels.
    pub passes: u64,
}

/// Resamples `points`, sorted by drive, to which `fit` was fitted with `scatter`, and fits each anew.
///
/// `cell` and `response` name the random numbers. `None` without resamples, for a fit that did not converge, or
/// where more than half of the resamples could not be fitted.
pub fn bootstrap(
    points: &[Point],
    scatter: Scatter,
    fit: &MainFit,
    settings: &BootstrapSettings,
    cell: &str,
    response: &str,
) -> Option<Bootstrap> {
    if !fit.converged || settings.resamples == 0 {
        return None;
    }
    let key = stream_key(settings.seed, cell, response);
    let drawer = Drawer::new(points, fit, settings.kind);
    let mut refits = Refits {
        points,
        scatter,
        quick: ResampleFit::new(fit, scatter, ROUGH),
        searched_again: 0,
        more_passes: 0,
    };
    let mut sample = Sample::default();
    let mut replicates: [Vec<f64>; 5] = std::array::from_fn(|_| Vec::with_capacity(settings.resamples));
    let mut failed = 0;
    for index in 0..settings.resamples {
        let mut rng = ChaCha8Rng::from_seed(key);
        rng.set_stream(index as u64);
        drawer.draw(&mut rng, refits.quick.level_of_point(), &mut sample);
        match refits.fit(&sample) {
            Some(refit) => keep(&mut replicates, &refit),
            None => failed += 1,
        }
    }
    let searched_again = refits.searched_again;
    if 2 * failed > settings.resamples {
        return None;
    }
    let (jackknife, jackknife_failed) = leave_out(points, &mut refits);
    let without_ceiling = replicates[1].iter().filter(|c| **c <= 0.0).count();
    let at = replicate(&fit.solution.parameters);
    let tails = student_tails(fit.degrees);
    let mut found = [ReplicateInterval {
        percentile: [0.0; 2],
        bca: None,
    }; 5];
    for i in 0..5 {
        found[i] = intervals(at[i], &mut replicates[i], acceleration(&jackknife[i]), tails)?;
    }
    let noise_free = fit.options.lower[3];
    let noise = |value: f64| if value <= noise_free { 0.0 } else { value.exp() };
    Some(Bootstrap {
        initial_gain: reported(&found[0], inverse, true),
        max_rate: reported(&found[1], inverse, true),
        threshold: reported(&found[2], |value| value, false),
        noise_sd: reported(&found[3], noise, false),
        half_rise: reported(&found[4], inverse, true),
        resamples: settings.resamples,
        failed,
        searched_again,
        without_ceiling,
        jackknife_failed,
        passes: refits.quick.passes + refits.more_passes,
    })
}

/// The curve to 1e-4 is enough: that is a hundredth of the standard error of a rate known to one per cent. A test
/// compares the intervals with those of the full evaluation.
const ROUGH: bool = true;

/// Levels of the normal distribution that lie as many SDs out as the 95 % quantiles of Student's t do. The replicates
/// scatter as the *estimated* variance says and know nothing of its own uncertainty, for which the profile intervals
/// use t as well (expanded percentiles: Hesterberg 2015, *Am. Stat.* 69:371).
fn student_tails(degrees: f64) -> [f64; 2] {
    let t = t_quantile(degrees);
    let normal = Normal::standard();
    [normal.cdf(-t), normal.cdf(t)]
}

/// 1/value; a ceiling or half-rise at infinity where the value is 0.
fn inverse(value: f64) -> f64 {
    if value > 0.0 { 1.0 / value } else { f64::INFINITY }
}

fn reported(found: &ReplicateInterval, to: impl Fn(f64) -> f64, falling: bool) -> BootstrapInterval {
    let pair = |[low, high]: [f64; 2]| {
        if falling {
            [to(high), to(low)]
        } else {
            [to(low), to(high)]
        }
    };
    BootstrapInterval {
        percentile: pair(found.percentile),
        bca: found.bca.map(pair),
    }
}

/// 1/gain, 1/max rate, threshold, ln noise SD and 1/half-rise.
fn replicate(&[inverse_gain, ceiling, threshold, ln_noise]: &[f64; 4]) -> [f64; 5] {
    [inverse_gain, ceiling, threshold, ln_noise, ceiling / inverse_gain]
}

fn keep(replicates: &mut [Vec<f64>; 5], refit: &Refit) {
    for (list, value) in replicates.iter_mut().zip(replicate(&refit.parameters)) {
        list.push(value);
    }
}

/// Parameters with each point left out in turn, and how many points that failed for.
fn leave_out(points: &[Point], refits: &mut Refits<'_>) -> ([Vec<f64>; 5], usize) {
    let mut sample = Sample {
        rates: points.iter().map(|p| p.rate).collect(),
        variances: points.iter().map(|p| p.se * p.se).collect(),
    };
    let mut values: [Vec<f64>; 5] = std::array::from_fn(|_| Vec::with_capacity(points.len()));
    let mut failed = 0;
    for index in 0..points.len() {
        let variance = std::mem::replace(&mut sample.variances[index], f64::INFINITY);
        match refits.fit(&sample) {
            Some(refit) => keep(&mut values, &refit),
            None => failed += 1,
        }
        sample.variances[index] = variance;
    }
    (values, failed)
}

/// The short search and, where it does not arrive, the long one.
struct Refits<'a> {
    points: &'a [Point],
    scatter: Scatter,
    quick: ResampleFit<'a>,
    searched_again: usize,
    more_passes: u64,
}

impl Refits<'_> {
    fn fit(&mut self, sample: &Sample) -> Option<Refit> {
        if let Some(refit) = self.quick.fit(sample) {
            return Some(refit);
        }
        self.searched_again += 1;
        let full = main_fit::fit(&points_of(self.points, sample), self.scatter)?;
        self.more_passes += full.evaluations;
        full.converged.then_some(Refit {
            parameters: full.solution.parameters,
            variance: full.extra_variance,
        })
    }
}

/// Draws resamples.
struct Drawer {
    kind: BootstrapKind,
    fitted: Vec<f64>,
    /// sqrt(e^2 + w^2) of each point.
    spreads: Vec<f64>,
    rates: Vec<f64>,
    variances: Vec<f64>,
    /// Plain mean of each level.
    means: Vec<f64>,
}

impl Drawer {
    fn new(points: &[Point], fit: &MainFit, kind: BootstrapKind) -> Self {
        let mut at_level = vec![0.0; fit.levels.drives.len()];
        evaluate(
            Chart::Ceiling,
            &fit.solution.parameters,
            &fit.levels.drives,
            |i, rate, _| at_level[i] = rate,
        );
        let mut means = vec![0.0; fit.levels.drives.len()];
        let mut counts = vec![0.0; fit.levels.drives.len()];
        for (level, point) in fit.levels.level_of_point().zip(points) {
            means[level] += point.rate;
            counts[level] += 1.0;
        }
        for (mean, count) in means.iter_mut().zip(&counts) {
            *mean /= count;
        }
        Self {
            kind,
            fitted: fit.levels.level_of_point().map(|l| at_level[l]).collect(),
            spreads: points
                .iter()
                .map(|p| (p.se * p.se + fit.extra_variance).sqrt())
                .collect(),
            rates: points.iter().map(|p| p.rate).collect(),
            variances: points.iter().map(|p| p.se * p.se).collect(),
            means,
        }
    }

    fn draw(&self, rng: &mut ChaCha8Rng, level_of_point: &[usize], sample: &mut Sample) {
        sample.rates.clear();
        sample.variances.clear();
        for level in level_of_point.chunk_by(|a, b| a == b) {
            let first = sample.rates.len();
            let count = level.len();
            if self.kind == BootstrapKind::Cases && count > 1 {
                let mean = self.means[level[0]];
                let stretch = (count as f64 / (count as f64 - 1.0)).sqrt();
                for _ in 0..count {
                    let drawn = first + rng.random_range(0..count);
                    sample.rates.push(mean + stretch * (self.rates[drawn] - mean));
                    sample.variances.push(self.variances[drawn]);
                }
            } else {
                for point in first..first + count {
                    let normal: f64 = StandardNormal.sample(rng);
                    sample
                        .rates
                        .push(self.fitted[point] + self.spreads[point] * normal);
                    sample.variances.push(self.variances[point]);
                }
            }
        }
    }
}

/// Key of the random numbers of one cell and response: four 64-bit FNV-1a hashes (Fowler, Noll & Vo) of the same
/// text, each after a byte of its own. Names are told apart by a zero byte after each, which no name can hold in its
/// UTF-8 text unless it is that character itself.
fn stream_key(seed: u64, cell: &str, response: &str) -> [u8; 32] {
    let mut key = [0; 32];
    for (part, chunk) in key.chunks_exact_mut(8).enumerate() {
        let mut hash: u64 = 0xcbf2_9ce4_8422_2325;
        let mut take = |byte: u8| {
            hash ^= u64::from(byte);
            hash = hash.wrapping_mul(0x0000_0100_0000_01b3);
        };
        take(part as u8);
        seed.to_le_bytes().into_iter().for_each(&mut take);
        cell.bytes().for_each(&mut take);
        take(0);
        response.bytes().for_each(&mut take);
        take(0);
        chunk.copy_from_slice(&hash.to_le_bytes());
    }
    key
}

#[cfg(test)]
mod tests;
