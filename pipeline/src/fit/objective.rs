//! The weighted sum of squares that the fit minimises, and the two charts in which it is searched.
//!
//! In terms of max rate R and half-rise K the curve is badly conditioned for cells that hardly bend: R and K grow
//! together. With g = K/R, the reciprocal of the initial gain, and c = 1/R it is well behaved: without noise
//! 1/f = c + g/(drive - threshold), a straight line. The smoothed ramp is the ordinary boundary point c = 0, and a
//! curve that rises as fast as its noise lets it lies at the other boundary, g = 0:
//!
//! ```text
//! chart Ceiling:  (g, c, threshold, ln noise_sd)      df/dc     = -R^2 excess,  df/dg = -R bend/g
//! chart HalfRise: (g, 1/K, threshold, ln noise_sd)    df/d(1/K) = g df/dc,      df/dg = -f/g
//! ```
//!
//! with `bend` and `excess` of [`crate::curve::smoothed_hyperbola`]. The second chart serves the profile of the
//! half-rise.

use super::solver::{LeastSquares, NormalSums};
use crate::curve::smoothed_hyperbola::{Kernel, Pass, vectorised};
use crate::curve::smoothed_ramp::ramp;

/// One rate to fit: drive (pA or nS), rate and its standard error (Hz).
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Point {
    /// Drive.
    pub drive: f64,
    /// Rate, Hz.
    pub rate: f64,
    /// Standard error of the rate from interval noise, Hz.
    pub se: f64,
}

/// Points gathered by drive. Repeats of a level share the curve's value, so the search needs one evaluation a level.
#[derive(Clone, Debug, Default)]
pub struct Levels {
    /// Distinct drives, ascending.
    pub drives: Vec<f64>,
    /// Weighted mean rate of each level, Hz.
    pub rates: Vec<f64>,
    /// Square root of each level's summed weight, 1/Hz.
    pub root_weights: Vec<f64>,
    /// Weighted sum of squares within levels, which no curve can lower.
    pub within: f64,
    ends: Vec<usize>,
}

impl Levels {
    /// Groups `points`, which must be sorted by drive, with weights 1/(se^2 + `extra_variance`).
    pub fn new(points: &[Point], extra_variance: f64) -> Self {
        let mut levels = Self::default();
        for (i, point) in points.iter().enumerate() {
            if levels.drives.last() == Some(&point.drive) {
                if let Some(end) = levels.ends.last_mut() {
                    *end = i + 1;
                }
            } else {
                levels.drives.push(point.drive);
                levels.ends.push(i + 1);
            }
        }
        levels.rates = vec![0.0; levels.drives.len()];
        levels.root_weights = vec![0.0; levels.drives.len()];
        levels.reweigh(points, extra_variance);
        levels
    }

    /// Takes a new extra variance into the means and weights.
    pub fn reweigh(&mut self, points: &[Point], extra_variance: f64) {
        let mut start = 0;
        self.within = 0.0;
        for (level, end) in self.ends.iter().enumerate() {
            let (mut weight, mut sum) = (0.0, 0.0);
            for p in &points[start..*end] {
                let w = 1.0 / (p.se * p.se + extra_variance);
                weight += w;
                sum += w * p.rate;
            }
            let mean = sum / weight;
            if end - start > 1 {
                for p in &points[start..*end] {
                    self.within += (p.rate - mean) * (p.rate - mean) / (p.se * p.se + extra_variance);
                }
            }
            self.rates[level] = mean;
            self.root_weights[level] = weight.sqrt();
            start = *end;
        }
    }

    /// The level of each point, in the order of the points.
    pub fn level_of_point(&self) -> impl Iterator<Item = usize> + '_ {
        let mut start = 0;
        self.ends.iter().enumerate().flat_map(move |(level, end)| {
            let count = end - start;
            start = *end;
            std::iter::repeat_n(level, count)
        })
    }
}

/// Which four numbers the search moves.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Chart {
    /// (1/initial gain, 1/max rate, threshold, ln noise SD).
    Ceiling,
    /// (1/initial gain, 1/half-rise, threshold, ln noise SD).
    HalfRise,
}

/// The objective over levels, in one chart.
#[derive(Clone, Copy, Debug)]
pub struct Objective<'a> {
    /// Levels with their weights.
    pub levels: &'a Levels,
    /// Meaning of the parameters.
    pub chart: Chart,
    /// Evaluate the curve with few nodes, to choose among starts.
    pub rough: bool,
}

impl LeastSquares<4> for Objective<'_> {
    fn accumulate(&self, parameters: &[f64; 4], sums: &mut NormalSums<4>) {
        let l = self.levels;
        sums.cost = l.within;
        vectorised(EachDrive {
            chart: self.chart,
            rough: self.rough,
            parameters,
            drives: &l.drives,
            each: Accumulate {
                rates: &l.rates,
                root_weights: &l.root_weights,
                sums,
            },
        });
        // A noise SD far below the spacing of the drives changes nothing and would leave the curvature singular, so that
        // no step could be judged. Cost and gradient, and with them the minimum, are untouched.
        let gain = sums.curvature[0][0] * parameters[0] * parameters[0];
        sums.curvature[3][3] += NOISE_CURVATURE * gain;
    }
}

/// Least curvature of ln noise SD, as a fraction of that of ln gain.
const NOISE_CURVATURE: f64 = 1e-13;

/// What to do with the curve at each drive.
pub(super) trait Each {
    fn each(&mut self, index: usize, rate: f64, derivatives: &[f64; 4]);
}

struct Accumulate<'a> {
    rates: &'a [f64],
    root_weights: &'a [f64],
    sums: &'a mut NormalSums<4>,
}

impl Each for Accumulate<'_> {
    #[inline(always)]
    fn each(&mut self, index: usize, rate: f64, derivatives: &[f64; 4]) {
        let w = self.root_weights[index];
        self.sums
            .add(w * (self.rates[index] - rate), &derivatives.map(|d| w * d));
    }
}

/// A pass of the curve over drives.
pub(super) struct EachDrive<'a, E> {
    pub(super) chart: Chart,
    pub(super) rough: bool,
    pub(super) parameters: &'a [f64; 4],
    pub(super) drives: &'a [f64],
    pub(super) each: E,
}

impl<E: Each> Pass for EachDrive<'_, E> {
    type Output = ();

    #[inline(always)]
    fn run(mut self) {
        let [inverse_gain, second, threshold, ln_noise] = *self.parameters;
        let (gain, noise) = (1.0 / inverse_gain, ln_noise.exp());
        let (ceiling, by_second) = match self.chart {
            Chart::Ceiling => (second, 1.0),
            Chart::HalfRise => (second * inverse_gain, inverse_gain),
        };
        let half_rise_chart = self.chart == Chart::HalfRise;
        if ceiling > 0.0 {
            let max_rate = 1.0 / ceiling;
            let per_half_rise = gain * ceiling;
            let s = noise * per_half_rise;
            let kernel = if self.rough {
                Kernel::rough(s)
            } else {
                Kernel::new(s)
            };
            for (i, drive) in self.drives.iter().enumerate() {
                let f = kernel.at((drive - threshold) * per_half_rise);
                let rate = max_rate * f.h;
                let by_inverse_gain = -gain * if half_rise_chart { rate } else { max_rate * f.bend };
                let by_ceiling = -max_rate * max_rate * f.excess * by_second;
                self.each.each(
                    i,
                    rate,
                    &[by_inverse_gain, by_ceiling, -gain * f.dh_dz, max_rate * f.dh_dlns],
                );
            }
        } else {
            for (i, drive) in self.drives.iter().enumerate() {
                let r = ramp(drive - threshold, noise);
                let by_ceiling = -gain * gain * r.square * by_second;
                let rate = gain * r.value;
                self.each.each(
                    i,
                    rate,
                    &[-gain * rate, by_ceiling, -gain * r.above, gain * r.spread],
                );
            }
        }
    }
}

struct Store<'a, F>(&'a mut F);

impl<F: FnMut(usize, f64, &[f64; 4])> Each for Store<'_, F> {
    #[inline(always)]
    fn each(&mut self, index: usize, rate: f64, derivatives: &[f64; 4]) {
        (self.0)(index, rate, derivatives);
    }
}

/// Calls `each(index, rate in Hz, derivatives by the chart's parameters)` for every drive.
pub fn evaluate(
    chart: Chart,
    parameters: &[f64; 4],
    drives: &[f64],
    mut each: impl FnMut(usize, f64, &[f64; 4]),
) {
    vectorised(EachDrive {
        chart,
        rough: false,
        parameters,
        drives,
        each: Store(&mut each),
    });
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn derivatives_match_differences_in_both_charts_and_at_the_ramp() {
        let drives = [20.0, 90.0, 130.0, 260.0, 800.0];
        for chart in [Chart::Ceiling, Chart::HalfRise] {
            for second in [0.0, 1e-9, 0.01, 0.03] {
                let p = [2.5, second, 110.0, (25.0_f64).ln()];
                let mut at = [[0.0; 4]; 5];
                evaluate(chart, &p, &drives, |i, _, d| at[i] = *d);
                for k in 0..4 {
                    let step = [1e-6, 1e-7, 1e-4, 1e-6][k];
                    let (mut up, mut down) = ([0.0; 5], [0.0; 5]);
                    let (mut pu, mut pd) = (p, p);
                    pu[k] += step;
                    // At the boundary there is only one side.
                    let width = if k == 1 && second < step { step } else { 2.0 * step };
                    if width > step {
                        pd[k] -= step;
                    }
                    evaluate(chart, &pu, &drives, |i, f, _| up[i] = f);
                    evaluate(chart, &pd, &drives, |i, f, _| down[i] = f);
                    for i in 0..5 {
                        let slope = (up[i] - down[i]) / width;
                        let scale = at[i][k].abs().max(1e-3);
                        assert!(
                            (slope - at[i][k]).abs() < 2e-3 * scale,
                            "{chart:?} {second} {k} {i}: {slope} {}",
                            at[i][k]
                        );
                    }
                }
            }
        }
    }

    #[test]
    fn grouping_repeats_changes_no_cost() {
        let points: Vec<Point> = (0..24)
            .map(|i| Point {
                drive: f64::from(i / 3) * 50.0,
                rate: f64::from(i * i % 17),
                se: 0.5 + f64::from(i % 4),
            })
            .collect();
        let p = [1.0 / 0.3, 0.02, 70.0, (30.0_f64).ln()];
        let levels = Levels::new(&points, 2.0);
        let mut sums = NormalSums::default();
        Objective {
            levels: &levels,
            chart: Chart::Ceiling,
            rough: false,
        }
        .accumulate(&p, &mut sums);
        let mut direct = 0.0;
        let drives: Vec<f64> = points.iter().map(|p| p.drive).collect();
        evaluate(Chart::Ceiling, &p, &drives, |i, f, _| {
            direct += (points[i].rate - f).powi(2) / (points[i].se.powi(2) + 2.0);
        });
        assert!((sums.cost / direct - 1.0).abs() < 1e-12);
        let of_point: Vec<usize> = levels.level_of_point().collect();
        assert_eq!(of_point, (0..24).map(|i| i / 3).collect::<Vec<_>>());
    }
}
