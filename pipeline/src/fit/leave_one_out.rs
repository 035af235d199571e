//! Every level predicted by the curve fitted without it.
//!
//! The refits start from the full fit moved by the Gauss-Newton step that takes the level away, with the extra
//! variance held at the full fit's, and are searched to their minimum; a threshold with a kink may move to other gaps.

use super::gaps::{Cost, Rival, descend};
use super::objective::{Chart, Levels, Objective, Point, evaluate};
use super::rival_fit::{RivalFit, options, scale_points};
use super::solver::{LeastSquares, NormalSums, SolverOptions, cholesky_solve, minimise};
use crate::curve::Curve;
use crate::curve::hill::Hill;
use crate::curve::hyperbola::GainCeiling;
use crate::curve::logistic::Logistic;
use crate::curve::ramp::Ramp;
use crate::curve::refractory_integrator::RefractoryIntegrator;
use crate::curve::smoothed_ramp::SmoothedRamp;
use crate::curve::square_root::SquareRoot;

/// A refit has converged once the rest of the decrease of its weighted sum of squares is below this fraction of it: a
/// shift of the prediction far below its standard error.
const DECREASE: f64 = 1e-6;

/// Why there is no prediction error.
#[derive(Clone, Copy, Debug, PartialEq, thiserror::Error)]
pub enum NotPredicted {
    /// Without a level no more levels than parameters are left, less one.
    #[error("without one of its {levels} levels too few are left for {parameters} parameters")]
    TooFewLevels {
        /// Levels.
        levels: usize,
        /// Parameters.
        parameters: usize,
    },
    /// A refit found no minimum.
    #[error("the fit without the level at drive {drive} did not settle")]
    NotSettled {
        /// Drive of the level left out.
        drive: f64,
    },
    /// No rate above zero is left without a level.
    #[error("no rate above zero is left without the level at drive {drive}")]
    NoRate {
        /// Drive of the level left out.
        drive: f64,
    },
    /// The full fit did not settle either.
    #[error("the fit itself did not settle")]
    NoFit,
}

/// Prediction errors of the points and what they cost.
#[derive(Clone, Debug, PartialEq)]
pub struct LeftOut {
    /// Root mean square over the points of rate minus the prediction from all other levels, Hz.
    pub rmse_hz: f64,
    /// The prediction for each point, Hz.
    pub predicted: Vec<f64>,
    /// Passes of the curve over the levels.
    pub evaluations: u64,
}

/// Leaves out every level of `fit` in turn. `points` are those it was fitted to.
///
/// # Errors
/// When one of the refits has no answer; the error says which and why.
pub fn leave_one_level_out(fit: &RivalFit, points: &[Point]) -> Result<LeftOut, NotPredicted> {
    if !fit.converged {
        return Err(NotPredicted::NoFit);
    }
    match fit.curve {
        Curve::SmoothedHyperbola => main_curve(fit, points),
        Curve::Hyperbola => rival::<3, GainCeiling>(fit, points),
        Curve::SmoothedRamp => rival::<3, SmoothedRamp>(fit, points),
        Curve::Ramp => rival::<2, Ramp>(fit, points),
        Curve::Logistic => rival::<3, Logistic>(fit, points),
        Curve::Hill => rival::<4, Hill>(fit, points),
        Curve::RefractoryIntegrator => rival::<3, RefractoryIntegrator>(fit, points),
        Curve::SquareRoot => rival::<2, SquareRoot>(fit, points),
    }
}

fn rival<const P: usize, R: Rival<P>>(fit: &RivalFit, points: &[Point]) -> Result<LeftOut, NotPredicted> {
    let units = fit.units;
    let scaled = scale_points(points, units);
    let mut levels = Levels::new(&scaled, fit.extra_variance / (units.rate * units.rate));
    let search = SolverOptions {
        decrease_tolerance: DECREASE,
        initial_damping: 1e-7,
        ..options::<P, R>(&levels)
    };
    let full: [f64; P] = std::array::from_fn(|i| fit.chart[i]);
    let held: [bool; P] = std::array::from_fn(|i| fit.held[i]);
    let curve = R::new(&full);
    let derivatives: Vec<[f64; P]> = levels.drives.iter().map(|d| curve.at(*d).derivatives).collect();
    let rates: Vec<f64> = levels.drives.iter().map(|d| curve.at(*d).rate).collect();
    let mut others: Vec<f64> = Vec::with_capacity(levels.drives.len());
    let all = levels.drives.clone();
    each_level(
        points,
        &mut levels,
        &full,
        &held,
        &rates,
        &derivatives,
        units.rate,
        |levels, k, start, evaluations| {
            // The level left out makes no kink; the limits of the search stay those of the full fit.
            others.clear();
            others.extend(all.iter().enumerate().filter(|(i, _)| *i != k).map(|(_, d)| *d));
            let drives: &[f64] = if k + 1 == all.len() { &all } else { &others };
            let found = descend(&Cost::<R>::new(levels), drives, start, &search, evaluations);
            found
                .converged
                .then(|| R::new(&found.parameters).at(levels.drives[k]).rate)
        },
    )
}

/// The main objective with a least curvature for ln noise SD, which far below the spacing of the drives changes nothing
/// and would leave the curvature singular; cost and gradient are untouched.
struct Supported<'a>(Objective<'a>);

impl LeastSquares<4> for Supported<'_> {
    fn accumulate(&self, parameters: &[f64; 4], sums: &mut NormalSums<4>) {
        self.0.accumulate(parameters, sums);
        // That of the logarithm of the gain is the scale.
        sums.curvature[3][3] += 1e-13 * sums.curvature[0][0] * parameters[0] * parameters[0];
    }
}

fn main_curve(fit: &RivalFit, points: &[Point]) -> Result<LeftOut, NotPredicted> {
    let Some(main_options) = fit.main else {
        return Err(NotPredicted::NoFit);
    };
    let search = SolverOptions {
        decrease_tolerance: DECREASE,
        initial_damping: 1e-7,
        ..main_options
    };
    let mut levels = Levels::new(points, fit.extra_variance);
    let (mut rates, mut derivatives) = (Vec::new(), Vec::new());
    evaluate(Chart::Ceiling, &fit.chart, &levels.drives, |_, f, d| {
        rates.push(f);
        derivatives.push(*d);
    });
    each_level(
        points,
        &mut levels,
        &fit.chart,
        &fit.held,
        &rates,
        &derivatives,
        1.0,
        |levels, k, start, evaluations| {
            let problem = Supported(Objective {
                levels,
                chart: Chart::Ceiling,
                rough: false,
            });
            let found = minimise(&problem, start, &search);
            *evaluations += found.evaluations + 1;
            let mut rate = f64::NAN;
            evaluate(
                Chart::Ceiling,
                &found.parameters,
                &[levels.drives[k]],
                |_, f, _| rate = f,
            );
            found.converged.then_some(rate)
        },
    )
}

/// Takes each level's weight away in turn and asks `refit` for the rate there, in units of `unit` Hz.
#[allow(clippy::too_many_arguments)]
fn each_level<const P: usize>(
    points: &[Point],
    levels: &mut Levels,
    full: &[f64; P],
    held: &[bool; P],
    rates: &[f64],
    derivatives: &[[f64; P]],
    unit: f64,
    mut refit: impl FnMut(&Levels, usize, [f64; P], &mut u64) -> Option<f64>,
) -> Result<LeftOut, NotPredicted> {
    let count = levels.drives.len();
    if count <= P {
        return Err(NotPredicted::TooFewLevels {
            levels: count,
            parameters: P,
        });
    }
    let mut all = NormalSums::default();
    for i in 0..count {
        let w = levels.root_weights[i];
        all.add(w * (levels.rates[i] - rates[i]), &derivatives[i].map(|d| w * d));
    }
    let (within, mut evaluations) = (levels.within, 1);
    let drives: Vec<f64> = points
        .chunk_by(|a, b| a.drive == b.drive)
        .map(|level| level[0].drive)
        .collect();
    let mut predicted_level = vec![0.0; count];
    for k in 0..count {
        let weight = levels.root_weights[k];
        let drive = drives.get(k).copied().unwrap_or(levels.drives[k] * unit);
        if !(0..count).any(|i| i != k && levels.rates[i] > 0.0) {
            return Err(NotPredicted::NoRate { drive });
        }
        levels.root_weights[k] = 0.0;
        levels.within = 0.0;
        let start = without(
            &all,
            full,
            held,
            weight,
            levels.rates[k] - rates[k],
            &derivatives[k],
        );
        let found = refit(levels, k, start, &mut evaluations).or_else(|| {
            // The step may have led astray; the full fit itself is a start as well.
            refit(levels, k, *full, &mut evaluations)
        });
        levels.root_weights[k] = weight;
        predicted_level[k] = match found {
            Some(rate) if rate.is_finite() => rate * unit,
            _ => return Err(NotPredicted::NotSettled { drive }),
        };
    }
    levels.within = within;
    let predicted: Vec<f64> = levels.level_of_point().map(|l| predicted_level[l]).collect();
    let squares: f64 = points
        .iter()
        .zip(&predicted)
        .map(|(p, f)| (p.rate - f).powi(2))
        .sum();
    Ok(LeftOut {
        rmse_hz: (squares / points.len() as f64).sqrt(),
        predicted,
        evaluations,
    })
}

/// The full fit moved by the Gauss-Newton step of the sums without one level; the full fit itself where that has none
/// or leads far.
fn without<const P: usize>(
    all: &NormalSums<P>,
    full: &[f64; P],
    held: &[bool; P],
    weight: f64,
    residual: f64,
    derivatives: &[f64; P],
) -> [f64; P] {
    let mut a = all.curvature;
    let mut g = all.gradient;
    for i in 0..P {
        g[i] -= weight * weight * derivatives[i] * residual;
        for j in 0..=i {
            a[i][j] -= weight * weight * derivatives[i] * derivatives[j];
        }
    }
    for i in 0..P {
        if held[i] {
            g[i] = 0.0;
            for j in 0..P {
                a[i][j] = 0.0;
                a[j][i] = 0.0;
            }
            a[i][i] = 1.0;
        }
    }
    match cholesky_solve(&a, &g) {
        // The charts' own curvature bends a step this long.
        Some(step) if (0..P).all(|i| step[i].abs() < 0.5 * full[i].abs().max(0.5)) => {
            std::array::from_fn(|i| full[i] + step[i])
        }
        _ => *full,
    }
}

#[cfg(test)]
mod tests {
    #![allow(clippy::unwrap_used)]
    use super::super::main_fit::Scatter;
    use super::super::rival_fit::fit_rival;
    use super::*;

    fn points() -> Vec<Point> {
        (0..22)
            .map(|i| {
                let drive = f64::from(i / 2) * 40.0;
                let clean = if drive > 90.0 {
                    120.0 * (drive - 90.0) / (drive + 60.0)
                } else {
                    0.0
                };
                let rate = clean
                    + if clean > 0.0 {
                        1.5 * f64::from(i * 7 % 5 - 2)
                    } else {
                        0.0
                    };
                Point {
                    drive,
                    rate,
                    se: 0.4 + 0.1 * f64::from(i % 3),
                }
            })
            .collect()
    }

    #[test]
    fn agrees_with_fits_from_scratch() {
        let points = points();
        for curve in Curve::ALL {
            let fit = fit_rival(curve, &points, Scatter::Estimated).unwrap();
            let left_out = leave_one_level_out(&fit, &points).unwrap();
            let mut squares = 0.0;
            let mut compared = 0;
            for level in points.chunk_by(|a, b| a.drive == b.drive) {
                let others: Vec<Point> = points
                    .iter()
                    .filter(|p| p.drive != level[0].drive)
                    .copied()
                    .collect();
                let refit = fit_rival(curve, &others, Scatter::Held(fit.extra_variance)).unwrap();
                let predicted = refit.rate_at(level[0].drive);
                squares += level.iter().map(|p| (p.rate - predicted).powi(2)).sum::<f64>();
                let index = points.iter().position(|p| p.drive == level[0].drive).unwrap();
                // An outer level may be predicted from another local minimum when everything is searched anew.
                compared +=
                    usize::from((left_out.predicted[index] - predicted).abs() < 0.02 * (1.0 + predicted));
            }
            let scratch = (squares / points.len() as f64).sqrt();
            assert!(
                compared >= 10,
                "{curve}: {compared} of 11 levels; {} against {scratch}",
                left_out.rmse_hz
            );
            let residual: f64 = points
                .iter()
                .zip(&fit.fitted)
                .map(|(p, f)| (p.rate - f).powi(2))
                .sum();
            assert!(
                left_out.rmse_hz > (residual / points.len() as f64).sqrt(),
                "{curve}"
            );
            assert_eq!(left_out.predicted.len(), points.len());
        }
    }

    #[test]
    fn says_why_there_is_none() {
        let all = points();
        let two: Vec<Point> = all
            .iter()
            .filter(|p| p.drive == 160.0 || p.drive == 320.0)
            .copied()
            .collect();
        let fit = fit_rival(Curve::Ramp, &two, Scatter::Held(1.0)).unwrap();
        let reason = leave_one_level_out(&fit, &two).unwrap_err();
        assert_eq!(
            reason,
            NotPredicted::TooFewLevels {
                levels: 2,
                parameters: 2
            }
        );
        let lone: Vec<Point> = all
            .iter()
            .filter(|p| p.drive <= 120.0)
            .map(|p| Point {
                rate: if p.drive < 120.0 { 0.0 } else { 20.0 },
                ..*p
            })
            .collect();
        let fit = fit_rival(Curve::Ramp, &lone, Scatter::Held(1.0)).unwrap();
        assert_eq!(
            leave_one_level_out(&fit, &lone).unwrap_err(),
            NotPredicted::NoRate { drive: 120.0 }
        );
    }
}
