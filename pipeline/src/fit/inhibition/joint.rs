//! The weighted sum of squares over all inhibition levels.

use std::ops::Range;

use super::InhibitionPoint;
use super::form::{Law, Local};
use crate::curve::smoothed_hyperbola::vectorised;
use crate::fit::objective::{Chart, Each, EachDrive, Levels, Point};
use crate::fit::solver::{LeastSquares, NormalSums};

/// The points of one inhibition level.
#[derive(Clone, Debug)]
pub(super) struct Group {
    pub(super) g_inh: f64,
    pub(super) points: Range<usize>,
    pub(super) levels: Levels,
}

/// Points sorted by inhibition, then excitation, gathered by both.
#[derive(Clone, Debug)]
pub(super) struct Joint {
    pub(super) groups: Vec<Group>,
}

impl Joint {
    /// `sorted` by (g_inh, g_exc); `as_points` are the same with g_exc for drive.
    pub(super) fn new(sorted: &[InhibitionPoint], as_points: &[Point], extra_variance: f64) -> Self {
        let mut groups: Vec<Group> = Vec::new();
        let mut start = 0;
        while let Some(first) = sorted.get(start) {
            let count = sorted[start..]
                .iter()
                .take_while(|p| p.g_inh == first.g_inh)
                .count();
            let points = start..start + count;
            groups.push(Group {
                g_inh: first.g_inh,
                levels: Levels::new(&as_points[points.clone()], extra_variance),
                points,
            });
            start += count;
        }
        Self { groups }
    }

    pub(super) fn reweigh(&mut self, as_points: &[Point], extra_variance: f64) {
        for group in &mut self.groups {
            group
                .levels
                .reweigh(&as_points[group.points.clone()], extra_variance);
        }
    }
}

/// The objective of one form in one chart.
#[derive(Clone, Copy, Debug)]
pub(super) struct Objective<'a> {
    pub(super) joint: &'a Joint,
    pub(super) law: &'a Law,
    pub(super) chart: Chart,
    pub(super) rough: bool,
}

impl<const P: usize> LeastSquares<P> for Objective<'_> {
    fn accumulate(&self, parameters: &[f64; P], sums: &mut NormalSums<P>) {
        for group in &self.joint.groups {
            let l = &group.levels;
            let local = self.law.local(self.chart, parameters, group.g_inh);
            sums.cost += l.within;
            vectorised(EachDrive {
                chart: self.chart,
                rough: self.rough,
                parameters: &local.parameters,
                drives: &l.drives,
                each: Accumulate {
                    rates: &l.rates,
                    root_weights: &l.root_weights,
                    local: &local,
                    sums,
                },
            });
        }
    }
}

struct Accumulate<'a, const P: usize> {
    rates: &'a [f64],
    root_weights: &'a [f64],
    local: &'a Local<P>,
    sums: &'a mut NormalSums<P>,
}

impl<const P: usize> Each for Accumulate<'_, P> {
    #[inline(always)]
    fn each(&mut self, index: usize, rate: f64, derivatives: &[f64; 4]) {
        let w = self.root_weights[index];
        self.sums.add(
            w * (self.rates[index] - rate),
            &chained(self.local, derivatives).map(|d| w * d),
        );
    }
}

/// Derivatives by the form's parameters from those by the local curve's.
#[inline(always)]
fn chained<const P: usize>(local: &Local<P>, derivatives: &[f64; 4]) -> [f64; P] {
    std::array::from_fn(|k| {
        let mut sum = 0.0;
        for (d, by) in derivatives.iter().zip(&local.by) {
            sum += d * by[k];
        }
        sum
    })
}

struct Store<'a, F, const P: usize> {
    local: &'a Local<P>,
    each: F,
}

impl<F: FnMut(usize, f64, &[f64; P]), const P: usize> Each for Store<'_, F, P> {
    #[inline(always)]
    fn each(&mut self, index: usize, rate: f64, derivatives: &[f64; 4]) {
        (self.each)(index, rate, &chained(self.local, derivatives));
    }
}

/// Calls `each(index, rate in Hz, derivatives by the form's parameters)` for every drive at one inhibition level.
pub(super) fn evaluate<const P: usize>(
    law: &Law,
    chart: Chart,
    parameters: &[f64; P],
    g_inh: f64,
    drives: &[f64],
    each: impl FnMut(usize, f64, &[f64; P]),
) {
    let local = law.local(chart, parameters, g_inh);
    vectorised(EachDrive {
        chart,
        rough: false,
        parameters: &local.parameters,
        drives,
        each: Store { local: &local, each },
    });
}

#[cfg(test)]
mod tests {
    #![allow(clippy::unwrap_used)]
    use super::super::membrane::Membrane;
    use super::*;

    fn check<const P: usize>(law: &Law, chart: Chart, parameters: [f64; P]) {
        let drives = [4.0, 9.0, 15.0, 40.0];
        let steps = [1e-6, 1e-7, 1e-4, 1e-6, 1e-6];
        for g_inh in [0.0, 6.0, 20.0] {
            let mut at = [[0.0; P]; 4];
            evaluate(law, chart, &parameters, g_inh, &drives, |i, _, d| at[i] = *d);
            for k in 0..P {
                let (mut high, mut low) = (parameters, parameters);
                high[k] += steps[k];
                low[k] -= steps[k];
                let (mut up, mut down) = ([0.0; 4], [0.0; 4]);
                evaluate(law, chart, &high, g_inh, &drives, |i, f, _| up[i] = f);
                evaluate(law, chart, &low, g_inh, &drives, |i, f, _| down[i] = f);
                for i in 0..4 {
                    let slope = (up[i] - down[i]) / (2.0 * steps[k]);
                    assert!(
                        (slope - at[i][k]).abs() < 1e-3 * at[i][k].abs().max(1e-3),
                        "{law:?} {chart:?} g_inh {g_inh} parameter {k} drive {}: {slope} {}",
                        drives[i],
                        at[i][k]
                    );
                }
            }
        }
    }

    #[test]
    fn derivatives_of_every_form_match_differences_in_both_charts() {
        let membrane = Membrane::new(10.0, -70.0, 0.0, -75.0).unwrap();
        let noise = 1.5_f64.ln();
        for chart in [Chart::Ceiling, Chart::HalfRise] {
            for second in [0.01, 0.04] {
                check(&Law::Relation(membrane), chart, [0.12, second, -50.0, noise]);
                check(&Law::FreeSlope, chart, [0.12, second, 4.0, noise, 0.6]);
                check(
                    &Law::Divisive(membrane),
                    chart,
                    [0.12, second, -50.0, noise, 0.05],
                );
            }
        }
    }
}
