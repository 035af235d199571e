//! One cell on its way: rates, fit, rivals, verdict, flags.

use crate::assess::flags::{Evidence, raise};
use crate::assess::goodness::{FittedCurve, goodness, not_fitted, set_weights};
use crate::assess::repeats::repeats;
use crate::assess::verdict::{decline, peak_rate};
use crate::assess::{
    Ceiling, CellResult, CurvePoint, Goodness, ResponseResult, RivalCurve, Severity, Status,
};
use crate::curve::Curve;
use crate::fit::main_fit::{self, MainFit, Scatter, spread};
use crate::fit::objective::{Chart, evaluate};
use crate::fit::{
    BootstrapSettings, Estimates, Point, RivalFit, bootstrap, estimates, fit_rival, leave_one_level_out,
    robust, t_quantile,
};
use crate::rates::{CellCv, Response, StepRate, cell_interval_cv, fit_se, step_rates};
use crate::recording::CellRecording;
use crate::settings::Analysis;
use crate::steps::meet;

/// Fewest steps that a four-parameter curve is fitted to.
const FEWEST_STEPS: usize = 6;
/// Fewest distinct drives.
const FEWEST_LEVELS: usize = 4;

/// Rates and, unless `rates_only`, fits and verdicts of one cell.
pub fn analyse_cell(cell: &CellRecording, settings: &Analysis, rates_only: bool) -> CellResult {
    let met = meet(cell);
    let spans: Vec<(f64, f64, &[f64])> = cell
        .steps
        .iter()
        .zip(&met.of_step)
        .map(|(step, spikes)| (step.onset_s, step.offset_s, *spikes))
        .collect();
    let cell_cv = cell_interval_cv(&met.of_step);
    let responses = settings
        .responses
        .iter()
        .map(|response| {
            let rates = step_rates(&spans, *response, cell_cv.cv, settings);
            let case = Case {
                cell,
                spikes: &met.of_step,
                outside: met.outside,
                cell_cv,
                settings,
            };
            case.response(*response, rates, rates_only)
        })
        .collect();
    CellResult {
        id: cell.id.clone(),
        group: cell.group.clone(),
        drive_kind: cell.drive_kind,
        carried: cell.carried.clone(),
        sweep_names: cell.sweeps.iter().map(|s| s.name.clone()).collect(),
        steps: cell.steps.clone(),
        spikes_outside: met.outside,
        responses,
    }
}

/// One cell on its way through fit and assessment.
struct Case<'a> {
    cell: &'a CellRecording,
    spikes: &'a [&'a [f64]],
    outside: usize,
    cell_cv: CellCv,
    settings: &'a Analysis,
}

impl Case<'_> {
    fn response(&self, response: Response, mut rates: Vec<StepRate>, rates_only: bool) -> ResponseResult {
        let (settings, steps) = (self.settings, &self.cell.steps);
        // Steps in order of drive; repeats keep the order of the protocol.
        let mut order: Vec<usize> = (0..steps.len()).collect();
        order.sort_by(|a, b| steps[*a].drive.total_cmp(&steps[*b].drive));
        let mut points: Vec<Point> = order
            .iter()
            .map(|i| Point {
                drive: steps[*i].drive,
                rate: rates[*i].rate_hz,
                se: fit_se(&rates[*i]),
            })
            .collect();
        let peak = peak_rate(&points);
        let with_intervals = rates.iter().filter(|r| r.intervals > 0).count();
        let declining = decline(&points, settings);
        if let Some(decline) = &declining {
            let keep = points.partition_point(|p| p.drive <= decline.peak_drive);
            points.truncate(keep);
            order.truncate(keep);
        }
        for i in &order {
            rates[*i].used = true;
        }
        let levels = points.chunk_by(|a, b| a.drive == b.drive).count();
        let spikes = rates.iter().map(|r| r.spikes).sum();
        let mut result = ResponseResult {
            response,
            status: Status::Fitted,
            reason: String::new(),
            steps: points.len(),
            levels,
            spikes,
            drive_min: points.first().map(|p| p.drive),
            drive_max: points.last().map(|p| p.drive),
            peak_rate_hz: peak,
            max_rate: Default::default(),
            half_rise: Default::default(),
            threshold: Default::default(),
            noise_sd: Default::default(),
            initial_gain: Default::default(),
            reached: None,
            extra_sd_hz: None,
            interval_cv: (self.cell_cv.steps > 0).then_some(self.cell_cv.cv),
            ceiling: None,
            usable: false,
            flags: Vec::new(),
            covariance: None,
            goodness: Vec::new(),
            bootstrap: None,
            repeats: None,
            curve: Vec::new(),
            rivals: Vec::new(),
            rates: Vec::new(),
        };
        let mut found: Option<Fitted> = None;
        if let Some(refusal) = &self.cell.refusal {
            result.status = Status::Refused;
            result.reason = refusal.sentence.clone();
        } else if steps.is_empty() {
            result.status = Status::NoSteps;
            result.reason = "no protocol step of this cell could be used".into();
        } else if with_intervals < settings.min_interval_steps {
            result.status = Status::Silent;
            result.ceiling = Some(Ceiling::Silent);
            result.reason = format!(
                "{with_intervals} steps hold two spikes or more; {} are needed for a curve",
                settings.min_interval_steps
            );
        } else if points.len() < FEWEST_STEPS || levels < FEWEST_LEVELS {
            result.status = Status::TooFewLevels;
            result.reason = format!(
                "{} steps at {levels} drives{}; a curve of four parameters needs {FEWEST_STEPS} steps at \
                 {FEWEST_LEVELS} drives",
                points.len(),
                if declining.is_some() {
                    " up to the peak"
                } else {
                    ""
                }
            );
        } else if !rates_only {
            match self.fit(&points) {
                Ok(mut fitted) => {
                    self.take_fit(&mut result, &order, &mut rates, &points, &mut fitted);
                    found = Some(fitted);
                }
                Err((status, reason)) => {
                    result.status = status;
                    result.ceiling = (status == Status::Silent).then_some(Ceiling::Silent);
                    result.reason = reason.into();
                }
            }
        }
        if declining.is_some() && matches!(result.status, Status::Fitted | Status::TooFewLevels) {
            result.ceiling = Some(Ceiling::Declining);
        }
        let fitted = result.status == Status::Fitted && found.is_some();
        if result.status != Status::Fitted {
            for rate in &mut rates {
                rate.used = false;
            }
        }
        if !rates_only && !matches!(result.status, Status::Refused | Status::NoSteps) {
            let down_weighted = found.as_ref().map_or(Vec::new(), |f| f.down_weighted(&order));
            let evidence = Evidence {
                response,
                drive_unit: self.cell.drive_kind.unit(),
                steps,
                step_spikes: self.spikes,
                rates: &rates,
                spikes_outside: self.outside,
                cell_cv: self.cell_cv,
                status: result.status,
                ceiling: result.ceiling,
                estimates: found.as_ref().map(|f| &f.estimates).filter(|_| fitted),
                levels,
                goodness: if fitted { &result.goodness } else { &[] },
                repeats: result.repeats,
                duplicate_spikes: self.cell.duplicate_spikes,
                down_weighted: &down_weighted,
                settings,
            };
            result.flags = raise(&evidence);
        }
        result.usable = fitted
            && matches!(result.ceiling, Some(Ceiling::Resolved | Ceiling::Loose))
            && result.flags.iter().all(|f| f.severity != Severity::Reject);
        result.rates = rates;
        result
    }

    /// The fit itself, plain or robust.
    fn fit(&self, points: &[Point]) -> Result<Fitted, (Status, &'static str)> {
        let settings = self.settings;
        let silent = (Status::Silent, "no step below the falling part holds a rate");
        let (kept, of_point, scatter, factors) = if settings.robust {
            let robust = robust(points).ok_or(silent)?;
            if !robust.converged {
                return Err((
                    Status::NotConverged,
                    "the weights of the robust fit did not settle; the plain fit may do",
                ));
            }
            let (kept, of_point) = robust.reweighted(points);
            let scatter = Scatter::Held(robust.extra_variance);
            (kept, of_point, scatter, robust.factors)
        } else {
            let factors = vec![1.0; points.len()];
            (
                points.to_vec(),
                (0..points.len()).collect(),
                Scatter::Estimated,
                factors,
            )
        };
        let mut fit = main_fit::fit(&kept, scatter).ok_or(silent)?;
        let estimates = estimates(&kept, scatter, &mut fit, settings.profiles);
        Ok(Fitted {
            points: kept,
            of_point,
            scatter,
            factors,
            fit,
            estimates,
        })
    }

    fn take_fit(
        &self,
        result: &mut ResponseResult,
        order: &[usize],
        rates: &mut [StepRate],
        points: &[Point],
        fitted: &mut Fitted,
    ) {
        let (settings, fit) = (self.settings, &fitted.fit);
        let drives: Vec<f64> = points.iter().map(|p| p.drive).collect();
        if !fit.converged {
            let main = RivalFit::of_main(&fitted.points, fit);
            result.goodness = vec![measure(fitted, &main, false)];
            result.status = Status::NotConverged;
            result.reason = "the search for the best curve did not settle".into();
            return;
        }
        result.curve = self.curve(fit);
        self.compare(result, fitted);
        result.reason = "fitted".into();
        let e = &fitted.estimates;
        (result.max_rate, result.half_rise, result.threshold) = (e.max_rate, e.half_rise, e.threshold);
        (result.noise_sd, result.initial_gain, result.covariance) =
            (e.noise_sd, e.initial_gain, e.covariance);
        result.extra_sd_hz = Some(fit.extra_variance.sqrt());
        result.ceiling = Some(self.ceiling(fit, e));
        let mut curve = vec![0.0; points.len()];
        evaluate(Chart::Ceiling, &fit.solution.parameters, &drives, |i, rate, _| {
            curve[i] = rate
        });
        for (at, step) in order.iter().enumerate() {
            let (point, rate) = (&points[at], &mut rates[*step]);
            rate.fitted_hz = Some(curve[at]);
            rate.residual_hz = Some(point.rate - curve[at]);
            rate.weight = Some(fitted.factors[at] / (point.se * point.se + fit.extra_variance));
            rate.used = fitted.factors[at] > 0.0;
        }
        if let (Some(top), Some(max)) = (curve.last(), e.max_rate.value) {
            result.reached = Some(top / max);
        }
        let presented: Vec<usize> = fitted.of_point.iter().map(|p| order[*p]).collect();
        result.repeats = repeats(&fitted.points, &presented, fit.extra_variance);
        result.bootstrap = bootstrap(
            &fitted.points,
            fitted.scatter,
            fit,
            &BootstrapSettings {
                kind: settings.bootstrap_kind,
                resamples: settings.bootstrap,
                seed: settings.seed,
            },
            &self.cell.id.0,
            result.response.name(),
        );
    }

    /// Every rate function asked for, measured on the same points with the same weights.
    fn compare(&self, result: &mut ResponseResult, fitted: &Fitted) {
        let settings = self.settings;
        let grid: Vec<f64> = result.curve.iter().map(|p| p.drive).collect();
        for curve in Curve::ALL {
            let asked = settings.curves.contains(&curve);
            if !asked && curve != Curve::SmoothedHyperbola {
                continue;
            }
            let rival = match curve {
                Curve::SmoothedHyperbola => Ok(RivalFit::of_main(&fitted.points, &fitted.fit)),
                // The same weights as the main fit's.
                _ => fit_rival(curve, &fitted.points, Scatter::Held(fitted.fit.extra_variance)),
            };
            let rival = match rival {
                Ok(rival) => rival,
                Err(why) => {
                    let steps = fitted.points.len();
                    let mut row = not_fitted(curve, steps, &why.to_string());
                    row.evaluations = why.evaluations();
                    result.goodness.push(row);
                    continue;
                }
            };
            result
                .goodness
                .push(measure(fitted, &rival, settings.leave_one_out));
            if settings.draw_rivals && curve != Curve::SmoothedHyperbola {
                result.rivals.push(RivalCurve {
                    curve: curve.name(),
                    rates_hz: grid.iter().map(|drive| rival.rate_at(*drive)).collect(),
                });
            }
        }
        set_weights(&mut result.goodness);
    }

    fn ceiling(&self, fit: &MainFit, e: &Estimates) -> Ceiling {
        if e.ceiling_open || e.max_rate.hi == Some(f64::INFINITY) {
            return Ceiling::Open;
        }
        let ratio = match (e.max_rate.lo, e.max_rate.hi, e.max_rate.value, e.max_rate.se) {
            (Some(lo), Some(hi), _, _) => hi / lo,
            // Without profiles: the interval of ln max rate by the delta method.
            (_, _, Some(max), Some(se)) if !self.settings.profiles => {
                (2.0 * t_quantile(fit.degrees) * se / max).exp()
            }
            // A bound that could not be found is no reason for trust.
            _ => f64::INFINITY,
        };
        if ratio > self.settings.loose_ratio {
            Ceiling::Loose
        } else {
            Ceiling::Resolved
        }
    }

    /// The fitted curve and its 95 % band (delta method) on an even grid over all drives of the cell.
    fn curve(&self, fit: &MainFit) -> Vec<CurvePoint> {
        let drives = || self.cell.steps.iter().map(|s| s.drive);
        let lowest = drives().fold(f64::INFINITY, f64::min);
        let highest = drives().fold(f64::NEG_INFINITY, f64::max);
        let count = self.settings.curve_points;
        let grid: Vec<f64> = (0..count)
            .map(|i| {
                let part = i as f64 / (count - 1) as f64;
                lowest * (1.0 - part) + highest * part
            })
            .collect();
        let covariance = fit.band_covariance();
        let t = t_quantile(fit.degrees);
        let mut curve = Vec::with_capacity(count);
        evaluate(
            Chart::Ceiling,
            &fit.solution.parameters,
            &grid,
            |i, rate, derivatives| {
                let half = covariance.map(|c| t * spread(&c, derivatives).sqrt());
                curve.push(CurvePoint {
                    drive: grid[i],
                    rate_hz: rate,
                    lo_hz: half.map(|h| (rate - h).max(0.0)),
                    hi_hz: half.map(|h| rate + h),
                });
            },
        );
        curve
    }
}

/// A fit with what it was made from.
struct Fitted {
    /// The points as the fit saw them, without those that a robust fit leaves out.
    points: Vec<Point>,
    /// Their places among all points.
    of_point: Vec<usize>,
    scatter: Scatter,
    /// Weight factor of every point.
    factors: Vec<f64>,
    fit: MainFit,
    estimates: Estimates,
}

/// A robust fit names the steps whose weight it has cut to less than this part.
const DOWN_WEIGHTED: f64 = 0.5;

impl Fitted {
    /// Steps of less than half of their plain weight, in the order of the protocol.
    fn down_weighted(&self, order: &[usize]) -> Vec<usize> {
        let mut steps: Vec<usize> = order
            .iter()
            .zip(&self.factors)
            .filter(|(_, factor)| **factor < DOWN_WEIGHTED)
            .map(|(step, _)| *step)
            .collect();
        steps.sort_unstable();
        steps
    }
}

/// Goodness of one rate function on the points of the fit.
fn measure(fitted: &Fitted, curve: &RivalFit, leave_out: bool) -> Goodness {
    let left_out = (leave_out && curve.converged).then(|| leave_one_level_out(curve, &fitted.points));
    let (loo_rmse_hz, evaluations) = match &left_out {
        Some(Ok(left)) => (Some(left.rmse_hz), left.evaluations),
        _ => (None, 0),
    };
    let mut measured = goodness(&FittedCurve {
        curve: curve.curve.name(),
        parameters: curve.curve.parameters(),
        points: &fitted.points,
        fitted: &curve.fitted,
        extra_variance: fitted.fit.extra_variance,
        loo_rmse_hz,
        converged: curve.converged,
        evaluations: curve.evaluations + evaluations,
    });
    if let Some(Err(why)) = left_out {
        measured.reason = format!("fitted; not predicted without each level: {why}");
    }
    measured
}
