//! Measures of fit against statsmodels, SciPy, plain counting (`fixtures/goodness`) and the figures printed in the
//! NIST/SEMATECH e-Handbook; and the distribution of lack-of-fit p where the curve is right.

use halfrise::assess::Goodness;
use halfrise::assess::goodness::{FittedCurve, goodness, runs_p};
use halfrise::fit::main_fit::{self, Scatter};
use halfrise::fit::objective::{Chart, evaluate};
use halfrise::fit::{Point, fit_hyperbola};
use rand::{RngExt, SeedableRng};
use rand_chacha::ChaCha8Rng;
use rand_distr::{Distribution, StandardNormal};

use super::support::{assert_close, csv, json, numbers};

fn measured(points: &[Point], fitted: &[f64], parameters: usize, extra_variance: f64) -> Goodness {
    goodness(&FittedCurve {
        curve: "check",
        parameters,
        points,
        fitted,
        loo_rmse_hz: None,
        extra_variance,
        converged: true,
        evaluations: 1,
    })
}

fn agrees(name: &str, found: &Goodness, tolerance: f64) {
    let expected = &json("goodness/goodness.json")[name];
    for (key, value) in [
        ("log_likelihood", found.log_likelihood),
        ("aicc", found.aicc),
        ("bic", found.bic),
        ("rmse", found.rmse_hz),
        ("lack_of_fit_f", found.lack_of_fit_f),
        ("lack_of_fit_p", found.lack_of_fit_p),
    ] {
        let expected = expected[key].as_f64().unwrap();
        // Differences of large sums: the p of the straight line, 5.5e-19, is known to no more digits.
        assert_close(&format!("{name} {key}"), value.unwrap(), expected, tolerance);
    }
}

/// Standard errors that add nothing to the residual variance.
const NONE: f64 = 1e-9;

#[test]
fn load_cell_by_statsmodels_and_in_print() {
    let mut rows = numbers("load_cell/load_cell.csv", ["load", "deflection"]);
    rows.sort_by(|a, b| a[0].total_cmp(&b[0]));
    let points: Vec<Point> = rows
        .iter()
        .map(|[load, deflection]| Point {
            drive: *load,
            rate: *deflection,
            se: NONE,
        })
        .collect();
    let all = json("goodness/goodness.json");
    let mut printed = Vec::new();
    for (name, parameters) in [("load_cell_line", 2), ("load_cell_quadratic", 3)] {
        let coefficients: Vec<f64> = all[name]["coefficients_per_1e6"]
            .as_array()
            .unwrap()
            .iter()
            .map(|c| c.as_f64().unwrap())
            .collect();
        let fitted: Vec<f64> = points
            .iter()
            .map(|p| {
                coefficients
                    .iter()
                    .rev()
                    .fold(0.0, |sum, c| sum * (p.drive / 1e6) + c)
            })
            .collect();
        let found = measured(&points, &fitted, parameters, 1e-6);
        agrees(name, &found, 1e-6);
        assert_close("r2", found.r2.unwrap(), all[name]["r2"].as_f64().unwrap(), 1e-12);
        printed.push(found.lack_of_fit_f.unwrap());
    }
    // Handbook 4.6.1.5 prints 214.7464 (computed there in single precision), 4.6.1.8 prints 0.8107.
    assert_close("printed F, straight line", printed[0], 214.7464, 1e-5);
    assert_eq!(format!("{:.4}", printed[1]), "0.8107");
}

#[test]
fn silent_levels_change_no_lack_of_fit() {
    let points: Vec<Point> = (0..24)
        .map(|i| Point {
            drive: f64::from(i / 3),
            rate: f64::from(10 + i / 3 * 5 + i * i % 7),
            se: 1.0,
        })
        .collect();
    let fitted: Vec<f64> = points.iter().map(|p| 12.5 + 5.1 * p.drive).collect();
    let silent = |drive: f64| Point {
        drive,
        rate: 0.0,
        se: 0.5,
    };
    let mut more = vec![silent(-2.0), silent(-2.0), silent(-1.0), silent(-1.0)];
    more.extend(&points);
    let mut more_fitted = vec![0.0, 0.0, 0.1, 0.1];
    more_fitted.extend(&fitted);
    let alone = measured(&points, &fitted, 4, 2.0);
    let with = measured(&more, &more_fitted, 4, 2.0);
    assert!(alone.lack_of_fit_p.is_some());
    assert_eq!(
        (with.lack_of_fit_f, with.lack_of_fit_p),
        (alone.lack_of_fit_f, alone.lack_of_fit_p)
    );
    // Where the curve fires and the cell does not, that is misfit.
    more_fitted[..2].fill(8.0);
    assert!(measured(&more, &more_fitted, 4, 2.0).lack_of_fit_f > alone.lack_of_fit_f);
}

#[test]
fn puromycin_by_scipy() {
    let (_, rows) = csv("puromycin/puromycin.csv");
    for state in ["treated", "untreated"] {
        let points: Vec<Point> = rows
            .iter()
            .filter(|row| row[0] == state)
            .map(|row| Point {
                drive: row[1].parse().unwrap(),
                rate: row[2].parse().unwrap(),
                se: 1.0,
            })
            .collect();
        let fit = fit_hyperbola(&points, Some(0.0)).unwrap();
        let exact: Vec<Point> = points.iter().map(|p| Point { se: NONE, ..*p }).collect();
        let fitted: Vec<f64> = points
            .iter()
            .map(|p| fit.max_rate * p.drive / (fit.half_rise + p.drive))
            .collect();
        agrees(
            &format!("puromycin_{state}"),
            &measured(&exact, &fitted, 2, 1.0),
            1e-7,
        );
    }
}

fn residuals(signs: &str) -> Vec<f64> {
    signs.chars().map(|c| if c == '+' { 1.0 } else { -1.0 }).collect()
}

#[test]
fn runs_test_by_counting_and_by_statsmodels() {
    let all = json("goodness/goodness.json");
    for case in all["runs_exact"].as_array().unwrap() {
        let signs = case["signs"].as_str().unwrap();
        let p = runs_p(&residuals(signs)).unwrap();
        assert_close(signs, p, case["p"].as_f64().unwrap(), 1e-11);
    }
    for case in all["runs_long"].as_array().unwrap() {
        let p = runs_p(&residuals(case["signs"].as_str().unwrap())).unwrap();
        let expected = case["p"].as_f64().unwrap();
        println!("{p} {expected}");
        // The exact p holds the observed number of runs whole, the normal one half of it: 0.02 at most here.
        assert!(
            (p - expected).abs() <= 0.05 * expected + 0.04 * (1.0 - expected),
            "{p} {expected}"
        );
    }
}

/// A cell of the model itself: 12 to 24 drives, 2 to 5 repeats, its own standard errors and extra SD.
fn cell(seed: u64) -> Vec<Point> {
    let mut rng = ChaCha8Rng::seed_from_u64(seed);
    let mut between = |low: f64, high: f64| low * (high / low).powf(rng.random::<f64>());
    let [max_rate, half_rise, threshold] = [between(40.0, 200.0), between(50.0, 400.0), between(50.0, 250.0)];
    let reached = between(0.5, 0.95);
    let top = threshold + half_rise * reached / (1.0 - reached);
    let (levels, repeats) = (between(12.0, 24.0) as usize, between(2.0, 6.0) as usize);
    let noise = between(0.7, 2.0) * top / levels as f64;
    let extra = between(0.3, 3.0);
    let drives: Vec<f64> = (0..levels * repeats)
        .map(|i| top * (i / repeats) as f64 / (levels - 1) as f64)
        .collect();
    let parameters = [half_rise / max_rate, 1.0 / max_rate, threshold, noise.ln()];
    let mut points = Vec::new();
    evaluate(Chart::Ceiling, &parameters, &drives, |i, rate, _| {
        let se = 0.5 + 0.03 * rate * (0.7 + 0.6 * rng.random::<f64>());
        let normal: f64 = StandardNormal.sample(&mut rng);
        points.push(Point {
            drive: drives[i],
            rate: rate + normal * se.hypot(extra),
            se,
        });
    });
    points
}

/// p of the Kolmogorov-Smirnov test of uniformity (asymptotic, with the correction of Stephens 1970).
fn uniform(values: &mut [f64]) -> f64 {
    values.sort_by(f64::total_cmp);
    let n = values.len() as f64;
    let distance = values
        .iter()
        .enumerate()
        .map(|(i, v)| (v - i as f64 / n).max((i as f64 + 1.0) / n - v))
        .fold(0.0, f64::max);
    let x = distance * (n.sqrt() + 0.12 + 0.11 / n.sqrt());
    let tail = |k: f64| (-1.0_f64).powf(k - 1.0) * (-2.0 * k * k * x * x).exp();
    2.0 * (1..=100).map(|k| tail(f64::from(k))).sum::<f64>()
}

#[test]
fn lack_of_fit_p_is_uniform_where_the_curve_is_right() {
    let mut values: Vec<f64> = (0..1000)
        .filter_map(|seed| {
            let points = cell(seed);
            let fit = main_fit::fit(&points, Scatter::Estimated)?;
            let mut at_level = vec![0.0; fit.levels.drives.len()];
            evaluate(
                Chart::Ceiling,
                &fit.solution.parameters,
                &fit.levels.drives,
                |i, rate, _| at_level[i] = rate,
            );
            let fitted: Vec<f64> = fit.levels.level_of_point().map(|l| at_level[l]).collect();
            let p = measured(&points, &fitted, 4, fit.extra_variance).lack_of_fit_p;
            fit.converged.then_some(p).flatten()
        })
        .collect();
    assert!(values.len() >= 995, "{} of 1000 cells converged", values.len());
    let p = uniform(&mut values);
    let below = |limit: f64| values.iter().filter(|v| **v < limit).count();
    println!(
        "KS p {p:.3}; {} below 0.01, {} below 0.05, {} below 0.5",
        below(0.01),
        below(0.05),
        below(0.5)
    );
    assert!(p > 0.01, "{p}");
}
