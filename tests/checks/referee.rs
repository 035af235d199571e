//! The fit of the main curve against an independent search of the same objective: 68 simulated data sets, each with
//! the smallest weighted sum of squares that SciPy found from 60 starts in
//! the same box (`fixtures/referee`, with its script).

use halfrise::curve::smoothed_hyperbola::evaluate;
use halfrise::curve::smoothed_ramp::ramp;
use halfrise::fit::Point;
use halfrise::fit::main_fit::{Scatter, fit};
use serde_json::Value;

use super::support::json;

/// The referee may not find a sum of squares lower by more than this, relatively.
const TOLERANCE: f64 = 1e-6;

struct DataSet {
    name: String,
    points: Vec<Point>,
    extra_variance: f64,
    cost: f64,
    best: Value,
}

fn data_sets() -> Vec<DataSet> {
    let number = |v: &Value| v.as_f64().unwrap();
    json("referee/referee.json")["sets"]
        .as_array()
        .unwrap()
        .iter()
        .map(|set| DataSet {
            name: format!("{} {}", set["kind"].as_str().unwrap(), set["seed"]),
            points: set["points"]
                .as_array()
                .unwrap()
                .iter()
                .map(|p| Point {
                    drive: number(&p[0]),
                    rate: number(&p[1]),
                    se: number(&p[2]),
                })
                .collect(),
            extra_variance: number(&set["extra_sd"]).powi(2),
            cost: number(&set["cost"]),
            best: set["best"].clone(),
        })
        .collect()
}

impl DataSet {
    fn cost_of(&self, curve: impl Fn(f64) -> f64) -> f64 {
        self.points
            .iter()
            .map(|p| (p.rate - curve(p.drive)).powi(2) / (p.se * p.se + self.extra_variance))
            .sum()
    }
}

#[test]
fn the_referee_scores_the_same_objective() {
    let mut compared = 0;
    for set in data_sets() {
        let best = |key: &str| set.best[key].as_f64();
        let (threshold, noise) = (best("threshold").unwrap(), best("noise_sd").unwrap());
        let cost = match (best("max_rate"), best("half_rise")) {
            (Some(max_rate), Some(half_rise)) => {
                set.cost_of(|d| max_rate * evaluate((d - threshold) / half_rise, noise / half_rise).h)
            }
            _ => {
                let gain = best("initial_gain").unwrap();
                set.cost_of(|d| gain * ramp(d - threshold, noise).value)
            }
        };
        assert!(
            (cost / set.cost - 1.0).abs() < 1e-8,
            "{}: {cost} against {}",
            set.name,
            set.cost
        );
        compared += 1;
    }
    assert_eq!(compared, 68);
}

/// A lower bound that is lower, or an upper bound that is higher, would give one of the two an advantage.
fn assert_same_box(set: &DataSet, limits: &Value, lower: &[f64; 4], upper: &[f64; 4]) {
    let pair = |name: &str| [0, 1].map(|i| limits[name][i].as_f64().unwrap());
    let peak = set.points.iter().map(|p| p.rate).fold(0.0, f64::max);
    let (first, last) = (set.points[0].drive, set.points[set.points.len() - 1].drive);
    let span = last - first;
    let gain = pair("gain").map(|g| g * peak / span);
    let noise = pair("noise").map(|n| (n * span).ln());
    let [below, above] = pair("threshold");
    let wanted = [
        // The program's own chart has the reciprocal of the gain.
        (lower[0], 1.0 / gain[1]),
        (upper[0], 1.0 / gain[0]),
        // And 1/max rate; its zero, the ramp, is searched by the referee on its own.
        (lower[1], 0.0),
        (upper[1], 1.0 / (pair("ceiling")[0] * peak)),
        (lower[2], first - below * span),
        (upper[2], last + above * span),
        (lower[3], noise[0]),
        (upper[3], noise[1]),
    ];
    for (ours, theirs) in wanted {
        assert!(
            (ours - theirs).abs() <= 1e-9 * theirs.abs(),
            "{}: bound {ours} against {theirs}",
            set.name
        );
    }
}

#[test]
fn the_referee_finds_no_better_fit() {
    let limits = json("referee/referee.json")["box"].clone();
    let mut worse = Vec::new();
    let mut matched = 0;
    let mut evaluations = 0;
    for set in data_sets() {
        let found = fit(&set.points, Scatter::Held(set.extra_variance)).unwrap();
        assert_same_box(&set, &limits, &found.options.lower, &found.options.upper);
        let excess = found.solution.cost() / set.cost - 1.0;
        let p = found.solution.parameters;
        let line = format!(
            "{}: {:.9} against {:.9}, {excess:+.1e}; max rate {:.5}, gain {:.5}, threshold {:.4}, noise {:.4}, at bound {:?}, iterations {}; referee {}",
            set.name,
            found.solution.cost(),
            set.cost,
            1.0 / p[1],
            p[0].exp(),
            p[2],
            p[3].exp(),
            found.solution.at_bound,
            found.solution.iterations,
            set.best
        );
        println!("{line}");
        evaluations += found.evaluations;
        if !(excess <= TOLERANCE) || !found.converged {
            worse.push(format!("{line}; converged {}", found.converged));
        } else if excess >= -TOLERANCE {
            matched += 1;
        }
    }
    println!("{evaluations} passes of the curve");
    // A referee that lags behind would make the check empty.
    assert!(worse.is_empty(), "{} worse:\n{}", worse.len(), worse.join("\n"));
    assert_eq!(matched, 68, "the referee was beaten");
}
