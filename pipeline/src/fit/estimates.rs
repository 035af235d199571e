//! Values, standard errors and profile intervals of the parameters as they are reported.

use std::sync::Mutex;

use statrs::distribution::{ContinuousCDF, StudentsT};

use super::main_fit::{MainFit, Scatter, refit_from};
use super::objective::{Chart, Objective, Point};
use super::profile::{Side, SideSearch};
use super::solver::{LeastSquares, NormalSums, Solution, SolverOptions};

/// One estimated quantity: value, standard error, 95 % interval. `None` is not estimated; a bound may be infinite.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct Estimate {
    /// Best value.
    pub value: Option<f64>,
    /// Standard error by the delta method.
    pub se: Option<f64>,
    /// Lower 95 % bound (profile likelihood).
    pub lo: Option<f64>,
    /// Upper 95 % bound (profile likelihood).
    pub hi: Option<f64>,
}

/// The reported parameters of one fit.
#[derive(Clone, Debug, PartialEq)]
pub struct Estimates {
    /// Max rate, Hz.
    pub max_rate: Estimate,
    /// Half-rise, drive units.
    pub half_rise: Estimate,
    /// Threshold, drive units.
    pub threshold: Estimate,
    /// Noise SD, drive units.
    pub noise_sd: Estimate,
    /// Initial gain, Hz per drive unit.
    pub initial_gain: Estimate,
    /// Covariance, row-major, of (ln max rate, ln half-rise, threshold, ln noise SD); `None` where not all four are
    /// determined.
    pub covariance: Option<[f64; 16]>,
    /// The smoothed ramp is within the limit: max rate has no upper bound.
    pub ceiling_open: bool,
    /// Names of the parameters that rest on a bound of the search.
    pub at_bound: Vec<&'static str>,
}

/// Two-sided 95 % quantile of Student's t with `degrees` degrees of freedom.
pub fn t_quantile(degrees: f64) -> f64 {
    // The quantile is found by search, which costs more than a fit; sets ask for the same few again and again.
    static KNOWN: Mutex<Vec<(u64, f64)>> = Mutex::new(Vec::new());
    let key = degrees.to_bits();
    if let Ok(known) = KNOWN.lock()
        && let Some((_, value)) = known.iter().find(|(k, _)| *k == key)
    {
        return *value;
    }
    let value = StudentsT::new(0.0, 1.0, degrees).map_or(f64::NAN, |t| t.inverse_cdf(0.975));
    if let Ok(mut known) = KNOWN.lock()
        && known.len() < 512
    {
        known.push((key, value));
    }
    value
}

/// Rounds of starting again from a better minimum that a profile ran into.
const RESTARTS: usize = 4;

/// Estimates and, if asked for, profile intervals. The fit itself is improved when a profile meets a better minimum.
pub fn estimates(points: &[Point], scatter: Scatter, fit: &mut MainFit, profiles: bool) -> Estimates {
    for _ in 0..RESTARTS {
        match attempt(fit, profiles) {
            Ok(estimates) => return estimates,
            Err(better) => refit_from(points, scatter, fit, better),
        }
    }
    // The profiles disagree with the minimum again and again: values without intervals, and said not to have converged.
    fit.converged = false;
    attempt(fit, false).unwrap_or_else(|_| unknown())
}

fn unknown() -> Estimates {
    Estimates {
        max_rate: Estimate::default(),
        half_rise: Estimate::default(),
        threshold: Estimate::default(),
        noise_sd: Estimate::default(),
        initial_gain: Estimate::default(),
        covariance: None,
        ceiling_open: false,
        at_bound: Vec::new(),
    }
}

/// One pass over all profiles; `Err` carries a better point in the chart `Ceiling`.
fn attempt(fit: &mut MainFit, profiles: bool) -> Result<Estimates, [f64; 4]> {
    let [inverse_gain, ceiling, threshold, ln_noise] = fit.solution.parameters;
    let gain = 1.0 / inverse_gain;
    let t = t_quantile(fit.degrees);
    let limit = t * t;
    let cost = fit.solution.cost();
    let rise = fit.ramp.cost() - cost;
    if rise < -1e-7 * cost - 1e-12 {
        return Err(fit.ramp.parameters);
    }
    let ceiling_open = fit.is_ramp() || rise <= limit;
    let (lower, upper, at) = (&fit.options.lower, &fit.options.upper, fit.solution.parameters);
    let mut at_bound = Vec::new();
    for (i, name) in ["initial_gain", "max_rate", "threshold", "noise_sd"]
        .into_iter()
        .enumerate()
    {
        // A ceiling at infinity is an answer, not a bound of the search.
        if at[i] >= upper[i] || (at[i] <= lower[i] && i != 1) {
            at_bound.push(name);
        }
    }
    let noise_free = at[3] <= lower[3];

    let covariance = fit.covariance();
    let se = |index: usize| covariance.map(|c| c[index][index].sqrt()).filter(|se| *se > 0.0);
    let mut estimates = unknown();
    estimates.ceiling_open = ceiling_open;
    estimates.initial_gain.value = Some(gain);
    estimates.initial_gain.se = se(0).map(|se| gain * gain * se);
    estimates.threshold.value = Some(threshold);
    estimates.threshold.se = se(2);
    if !noise_free {
        estimates.noise_sd.value = Some(ln_noise.exp());
        estimates.noise_sd.se = se(3).map(|se| ln_noise.exp() * se);
    }
    if !ceiling_open {
        estimates.max_rate.value = Some(1.0 / ceiling);
        estimates.half_rise.value = Some(1.0 / (ceiling * gain));
        if let Some(c) = covariance {
            // (ln R, ln K, threshold, ln noise) = (-ln c, ln g - ln c, threshold, ln noise).
            let mut to = [[0.0; 4]; 4];
            to[0][1] = -1.0 / ceiling;
            to[1][0] = gain;
            to[1][1] = -1.0 / ceiling;
            to[2][2] = 1.0;
            to[3][3] = 1.0;
            let mut reported = [0.0; 16];
            for i in 0..4 {
                for j in 0..4 {
                    for k in 0..4 {
                        for l in 0..4 {
                            reported[4 * i + j] += to[i][k] * c[k][l] * to[j][l];
                        }
                    }
                }
            }
            estimates.max_rate.se = Some(reported[0].sqrt() / ceiling).filter(|se| *se > 0.0);
            estimates.half_rise.se = Some(reported[5].sqrt() / (ceiling * gain)).filter(|se| *se > 0.0);
            if !fit.solution.at_bound.contains(&true) {
                estimates.covariance = Some(reported);
            }
        }
    }
    estimates.at_bound = at_bound;
    if !profiles {
        return Ok(estimates);
    }

    let objective = Objective {
        levels: &fit.levels,
        chart: Chart::Ceiling,
        rough: false,
    };
    let mut profiles = Profiles {
        drives: &fit.levels.drives,
        limit,
        evaluations: 0,
    };
    let (best, options) = (&fit.solution, &fit.options);
    let mut side = |index, direction| profiles.side(&objective, best, options, index, direction);
    estimates.initial_gain.lo = side(0, 1.0)?.map(|g| 1.0 / g);
    // Open downwards: the curve may rise as a step.
    estimates.initial_gain.hi = side(0, -1.0)?.map(|g| if g > 0.0 { 1.0 / g } else { f64::INFINITY });
    estimates.threshold.lo = side(2, -1.0)?;
    estimates.threshold.hi = side(2, 1.0)?;
    // Open downwards on the log scale: the data do not exclude a noise-free cell.
    estimates.noise_sd.lo = side(3, -1.0)?.map(f64::exp);
    estimates.noise_sd.hi = side(3, 1.0)?.map(f64::exp);
    // 1/max rate: its upper bound is the lower bound of max rate.
    estimates.max_rate.lo = side(1, 1.0)?.map(|c| 1.0 / c);
    estimates.max_rate.hi = if ceiling_open {
        Some(f64::INFINITY)
    } else {
        side(1, -1.0)?.map(|c| if c > 0.0 { 1.0 / c } else { f64::INFINITY })
    };

    let by_half_rise = Objective {
        levels: &fit.levels,
        chart: Chart::HalfRise,
        rough: false,
    };
    let (best, options) = in_half_rise_chart(fit, &by_half_rise);
    let back = |point: [f64; 4]| [point[0], point[1] * point[0], point[2], point[3]];
    let mut side = |direction| {
        profiles
            .side(&by_half_rise, &best, &options, 1, direction)
            .map_err(back)
    };
    estimates.half_rise.lo = side(1.0)?.map(|k| 1.0 / k);
    estimates.half_rise.hi = if ceiling_open {
        Some(f64::INFINITY)
    } else {
        side(-1.0)?.map(|k| if k > 0.0 { 1.0 / k } else { f64::INFINITY })
    };
    let evaluations = profiles.evaluations;
    fit.evaluations += evaluations;
    Ok(estimates)
}

/// The profiles of one fit.
struct Profiles<'a> {
    drives: &'a [f64],
    limit: f64,
    evaluations: u64,
}

impl Profiles<'_> {
    /// One end: its value, infinite where open, `None` where it could not be found; `Err` is a better minimum.
    fn side(
        &mut self,
        objective: &Objective<'_>,
        best: &Solution<4>,
        options: &SolverOptions<4>,
        index: usize,
        direction: f64,
    ) -> Result<Option<f64>, [f64; 4]> {
        let search = SideSearch {
            problem: objective,
            best,
            options,
            index,
            direction,
            limit: self.limit,
        };
        let mut found = search.follow(&mut self.evaluations);
        // A noise SD that no level feels has lost its slope: a wider one may reach further.
        if let Side::Closed(end) = found
            && index != 3
        {
            let felt = (FELT * gap_at(self.drives, end[2])).ln();
            if end[3] < felt {
                let mut wider = end;
                wider[3] = felt;
                found = search.follow_from(end, wider, &mut self.evaluations);
            }
        }
        match found {
            Side::Closed(end) => Ok(Some(end[index])),
            Side::Open => Ok(Some(direction * f64::INFINITY)),
            Side::Lost => Ok(None),
            Side::Better(point) => Err(point),
        }
    }
}

/// Noise SD that the nearest level still feels, as a fraction of the gap between levels.
const FELT: f64 = 0.5;

/// Gap between the two levels on either side of `threshold`, or the outermost gap.
fn gap_at(drives: &[f64], threshold: f64) -> f64 {
    let above = drives.partition_point(|d| *d < threshold);
    let high = above.clamp(1, drives.len() - 1);
    drives[high] - drives[high - 1]
}

/// The same minimum seen in the chart of the half-rise.
fn in_half_rise_chart(fit: &MainFit, objective: &Objective<'_>) -> (Solution<4>, SolverOptions<4>) {
    let mut best = fit.solution;
    best.parameters[1] /= best.parameters[0];
    best.sums = NormalSums::default();
    objective.accumulate(&best.parameters, &mut best.sums);
    best.sums.curvature = best.sums.symmetric();
    let mut options = fit.options;
    let (lowest, highest) = (fit.levels.drives.first(), fit.levels.drives.last());
    let range = highest.zip(lowest).map_or(1.0, |(high, low)| high - low);
    options.upper[1] = (1e3 / range).max(best.parameters[1]);
    options.stride[1] = 2.0 / range;
    best.at_bound[1] = best.parameters[1] <= 0.0;
    (best, options)
}
