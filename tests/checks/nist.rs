//! The solver on the 27 nonlinear regression problems of the NIST Statistical Reference Datasets
//! (<https://www.itl.nist.gov/div898/strd/nls/nls_main.shtml>): data, both published starts and certified values in
//! `fixtures/nist_strd`. Each model is written once, over dual numbers, so that the derivatives are exact.
//!
//! Accuracy is the log relative error (digits in common with the certified figure, which has 11).

use std::f64::consts::PI;
use std::sync::LazyLock;

use halfrise::fit::main_fit::covariance;
use halfrise::fit::solver::{LeastSquares, NormalSums, Solution, SolverOptions, minimise};
use num_dual::{Dual64, DualNum};
use serde_json::Value;

use super::support::{digits, json};

/// Digits demanded of every parameter and of the residual sum of squares.
const PARAMETER_DIGITS: f64 = 6.0;
/// Digits demanded of every standard deviation.
const DEVIATION_DIGITS: f64 = 5.0;

static PROBLEMS: LazyLock<Value> = LazyLock::new(|| json("nist_strd/nist_strd.json"));

/// The far start of MGH10 lies some 7600 steps along a bent valley from its minimum (measured, for first dampings from
/// 1e-5 to 100); nothing else needs more than 600.
const MAX_ITERATIONS: u64 = 10_000;

/// Where a search begins and how cautiously.
#[derive(Clone, Copy)]
struct From {
    /// 1, far, or 2, near.
    start: usize,
    /// First damping.
    initial_damping: f64,
}

/// The damping that every search has unless told otherwise.
const USUAL: f64 = 1e-3;

struct Problem<const P: usize> {
    model: fn([Dual64; P], &[f64]) -> Dual64,
    response: Vec<f64>,
    predictors: Vec<Vec<f64>>,
}

impl<const P: usize> LeastSquares<P> for Problem<P> {
    fn accumulate(&self, parameters: &[f64; P], sums: &mut NormalSums<P>) {
        for (y, x) in self.response.iter().zip(&self.predictors) {
            let mut value = 0.0;
            let derivatives: [f64; P] = std::array::from_fn(|k| {
                let seeded = std::array::from_fn(|i| Dual64::new(parameters[i], f64::from(u8::from(i == k))));
                let f = (self.model)(seeded, x);
                value = f.re;
                f.eps
            });
            sums.add(y - value, &derivatives);
        }
    }
}

struct Outcome {
    name: &'static str,
    start: usize,
    parameter_digits: f64,
    deviation_digits: f64,
    rss_digits: f64,
    rss: f64,
    certified_rss: f64,
    converged: bool,
    iterations: u64,
}

impl Outcome {
    fn solved(&self) -> bool {
        let rss = if self.name == "Lanczos1" {
            // The certified sum of squares, 1.43e-25, is what rounding the data to 14 digits leaves; double
            // precision cannot resolve it. Anything below 1e-20 is 20 digits below the data.
            self.rss < 1e-20
        } else {
            self.rss_digits >= PARAMETER_DIGITS
        };
        // With the residuals at the rounding floor the SDs, which scale with them, mean nothing either.
        let deviation = self.name == "Lanczos1" || self.deviation_digits >= DEVIATION_DIGITS;
        self.converged && self.parameter_digits >= PARAMETER_DIGITS && rss && deviation
    }

    fn line(&self) -> String {
        format!(
            "{:9} start {}: parameters {:4.1} SDs {:4.1} RSS {:4.1} digits, RSS {:e} (certified {:e}), {} iterations, converged {}",
            self.name,
            self.start,
            self.parameter_digits,
            self.deviation_digits,
            self.rss_digits,
            self.rss,
            self.certified_rss,
            self.iterations,
            self.converged
        )
    }
}

fn least(values: impl Iterator<Item = f64>) -> f64 {
    values.fold(f64::INFINITY, |a, b| if a <= b { a } else { b })
}

fn solve<const P: usize>(
    name: &'static str,
    from_start: From,
    model: fn([Dual64; P], &[f64]) -> Dual64,
) -> Outcome {
    let From {
        start,
        initial_damping,
    } = from_start;
    let options = SolverOptions {
        initial_damping,
        max_iterations: MAX_ITERATIONS,
        ..SolverOptions::default()
    };
    let record = PROBLEMS
        .as_array()
        .unwrap()
        .iter()
        .find(|p| p["name"] == name)
        .unwrap();
    let parameters = record["parameters"].as_array().unwrap();
    assert_eq!(parameters.len(), P, "{name}");
    let number = |v: &Value| v.as_f64().unwrap();
    let from: [f64; P] = std::array::from_fn(|i| number(&parameters[i][format!("start{start}")]));
    let rows: Vec<Vec<f64>> = record["data"]
        .as_array()
        .unwrap()
        .iter()
        .map(|row| row.as_array().unwrap().iter().map(number).collect())
        .collect();
    let degrees = number(&record["dof"]);
    assert_eq!(rows.len() - P, degrees as usize, "{name}");
    let problem = Problem {
        model,
        // Nelson's model is one of log y.
        response: rows
            .iter()
            .map(|r| if name == "Nelson" { r[0].ln() } else { r[0] })
            .collect(),
        predictors: rows.iter().map(|r| r[1..].to_vec()).collect(),
    };
    let found: Solution<P> = minimise(&problem, from, &options);
    let variance = found.cost() / degrees;
    let deviations = covariance(&found).map_or([f64::NAN; P], |c| {
        std::array::from_fn(|i| (variance * c[i][i]).sqrt())
    });
    let certified_rss = number(&record["rss"]);
    Outcome {
        name,
        start,
        parameter_digits: least(
            (0..P).map(|i| digits(found.parameters[i], number(&parameters[i]["certified"]))),
        ),
        deviation_digits: least((0..P).map(|i| digits(deviations[i], number(&parameters[i]["sd"])))),
        rss_digits: digits(found.cost(), certified_rss),
        rss: found.cost(),
        certified_rss,
        converged: found.converged,
        iterations: found.iterations,
    }
}

fn number(value: f64) -> Dual64 {
    Dual64::from_re(value)
}

fn exponential_rise(b: [Dual64; 2], x: &[f64]) -> Dual64 {
    b[0] * (-(-b[1] * x[0]).exp() + 1.0)
}

fn exponential_over_line(b: [Dual64; 3], x: &[f64]) -> Dual64 {
    (-b[0] * x[0]).exp() / (b[1] + b[2] * x[0])
}

fn decay_with_two_peaks(b: [Dual64; 8], x: &[f64]) -> Dual64 {
    let peak = |height: Dual64, centre: Dual64, width: Dual64| {
        let distance = (number(x[0]) - centre) / width;
        height * (-(distance * distance)).exp()
    };
    b[0] * (-b[1] * x[0]).exp() + peak(b[2], b[3], b[4]) + peak(b[5], b[6], b[7])
}

fn cubic_over_cubic(b: [Dual64; 7], x: &[f64]) -> Dual64 {
    let x = x[0];
    let above = b[0] + (b[1] + (b[2] + b[3] * x) * x) * x;
    let below = (b[4] + (b[5] + b[6] * x) * x) * x + 1.0;
    above / below
}

fn three_exponentials(b: [Dual64; 6], x: &[f64]) -> Dual64 {
    b[0] * (-b[1] * x[0]).exp() + b[2] * (-b[3] * x[0]).exp() + b[4] * (-b[5] * x[0]).exp()
}

fn annual_and_two_cycles(b: [Dual64; 9], x: &[f64]) -> Dual64 {
    let turn = 2.0 * PI * x[0];
    let cycle = |period: Dual64, cosine: Dual64, sine: Dual64| {
        let angle = number(turn) / period;
        cosine * angle.cos() + sine * angle.sin()
    };
    b[0] + cycle(number(12.0), b[1], b[2]) + cycle(b[3], b[4], b[5]) + cycle(b[6], b[7], b[8])
}

fn solve_all(start: From) -> Vec<Outcome> {
    vec![
        solve("Bennett5", start, |b: [_; 3], x| {
            b[0] * ((b[1] + x[0]).ln() / -b[2]).exp()
        }),
        solve("BoxBOD", start, exponential_rise),
        solve("Chwirut1", start, exponential_over_line),
        solve("Chwirut2", start, exponential_over_line),
        solve("DanWood", start, |b: [_; 2], x| b[0] * (b[1] * x[0].ln()).exp()),
        solve("ENSO", start, annual_and_two_cycles),
        solve("Eckerle4", start, |b: [_; 3], x| {
            let distance = (number(x[0]) - b[2]) / b[1];
            b[0] / b[1] * (distance * distance * -0.5).exp()
        }),
        solve("Gauss1", start, decay_with_two_peaks),
        solve("Gauss2", start, decay_with_two_peaks),
        solve("Gauss3", start, decay_with_two_peaks),
        solve("Hahn1", start, cubic_over_cubic),
        solve("Kirby2", start, |b: [_; 5], x| {
            let x = x[0];
            (b[0] + (b[1] + b[2] * x) * x) / ((b[3] + b[4] * x) * x + 1.0)
        }),
        solve("Lanczos1", start, three_exponentials),
        solve("Lanczos2", start, three_exponentials),
        solve("Lanczos3", start, three_exponentials),
        solve("MGH09", start, |b: [_; 4], x| {
            let x = x[0];
            b[0] * (b[1] * x + x * x) / (b[2] * x + b[3] + x * x)
        }),
        solve("MGH10", start, |b: [_; 3], x| b[0] * (b[1] / (b[2] + x[0])).exp()),
        solve("MGH17", start, |b: [_; 5], x| {
            b[0] + b[1] * (-b[3] * x[0]).exp() + b[2] * (-b[4] * x[0]).exp()
        }),
        solve("Misra1a", start, exponential_rise),
        solve("Misra1b", start, |b: [_; 2], x| {
            b[0] * (-(b[1] * (x[0] / 2.0) + 1.0).powi(-2) + 1.0)
        }),
        solve("Misra1c", start, |b: [_; 2], x| {
            b[0] * (-(b[1] * (2.0 * x[0]) + 1.0).sqrt().recip() + 1.0)
        }),
        solve("Misra1d", start, |b: [_; 2], x| {
            b[0] * b[1] * x[0] / (b[1] * x[0] + 1.0)
        }),
        solve("Nelson", start, |b: [_; 3], x| {
            b[0] - b[1] * x[0] * (-b[2] * x[1]).exp()
        }),
        solve("Rat42", start, |b: [_; 3], x| {
            b[0] / ((b[1] - b[2] * x[0]).exp() + 1.0)
        }),
        solve("Rat43", start, |b: [_; 4], x| {
            b[0] / (((b[1] - b[2] * x[0]).exp() + 1.0).ln() / b[3]).exp()
        }),
        solve("Roszman1", start, |b: [_; 4], x| {
            b[0] - b[1] * x[0] - (b[2] / (-b[3] + x[0])).atan() / PI
        }),
        solve("Thurber", start, cubic_over_cubic),
    ]
}

/// Names of the problems not solved, with every outcome printed (shown by `--nocapture` and on failure).
fn unsolved(outcomes: &[Outcome]) -> Vec<&'static str> {
    assert_eq!(outcomes.len(), 27);
    for outcome in outcomes {
        println!("{}{}", if outcome.solved() { "  " } else { "! " }, outcome.line());
    }
    outcomes.iter().filter(|o| !o.solved()).map(|o| o.name).collect()
}

#[test]
fn every_problem_is_solved_from_the_near_start() {
    assert_eq!(SolverOptions::<1>::default().initial_damping, USUAL);
    assert_eq!(
        unsolved(&solve_all(From {
            start: 2,
            initial_damping: USUAL
        })),
        Vec::<&str>::new()
    );
}

#[test]
fn every_problem_but_one_is_solved_from_the_far_start() {
    let outcomes = solve_all(From {
        start: 1,
        initial_damping: USUAL,
    });
    // BoxBOD from (1, 1): the first steps throw b2 to where exp(-b2 x) is nothing at every x, a plateau on which the
    // gradient by b2 vanishes (RSS 9771.5, the scatter about the mean, against 1168.0). A first damping of 100 avoids
    // it, see the next test. What matters here is that the solver does not call the plateau a minimum.
    assert_eq!(unsolved(&outcomes), ["BoxBOD"]);
    assert!(outcomes.iter().all(|o| o.converged == o.solved()));
}

#[test]
fn small_first_steps_reach_every_minimum_from_the_far_start() {
    let outcomes = solve_all(From {
        start: 1,
        initial_damping: 100.0,
    });
    // Eckerle4 is the same curve with the signs of b1 and b2 both turned, and this search ends at that twin of the
    // certified minimum: same sum of squares, same SDs.
    assert_eq!(unsolved(&outcomes), ["Eckerle4"]);
    let twin = outcomes.iter().find(|o| o.name == "Eckerle4").unwrap();
    assert!(twin.converged && twin.rss_digits > 10.0 && twin.deviation_digits > 10.0);
}

#[test]
fn the_certified_values_are_the_published_ones() {
    // Spot checks against a copying error, figures as printed by NIST. Roszman1's b1 has been altered in some copies.
    let find = |name: &str| {
        PROBLEMS
            .as_array()
            .unwrap()
            .iter()
            .find(|p| p["name"] == name)
            .unwrap()
    };
    assert_eq!(find("Roszman1")["parameters"][0]["certified"], 0.20196866396);
    assert_eq!(find("Misra1d")["parameters"][0]["certified"], 437.36970754);
    assert_eq!(find("Rat43")["dof"], 11);
}
