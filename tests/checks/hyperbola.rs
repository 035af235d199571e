//! The noise-free hyperbola against certified and published fits: Misra1d of the NIST Statistical Reference Datasets,
//! which is this function at threshold 0, and the puromycin velocities of Bates & Watts (1988).

use halfrise::fit::Point;
use halfrise::fit::hyperbola_fit::{Errors, HyperbolaFit, Parameter, fit_hyperbola};

use super::support::{assert_close, csv, digits, json};

fn point(drive: f64, rate: f64) -> Point {
    Point { drive, rate, se: 1.0 }
}

#[test]
fn misra1d_gives_the_certified_figures() {
    let problems = json("nist_strd/nist_strd.json");
    let record = problems
        .as_array()
        .unwrap()
        .iter()
        .find(|p| p["name"] == "Misra1d")
        .unwrap();
    let points: Vec<Point> = record["data"]
        .as_array()
        .unwrap()
        .iter()
        .map(|row| point(row[1].as_f64().unwrap(), row[0].as_f64().unwrap()))
        .collect();
    assert_eq!(points.len(), 14);
    let fit = fit_hyperbola(&points, Some(0.0)).unwrap();
    assert!(fit.solution.converged);
    assert!(digits(fit.max_rate, 4.3736970754E+02) >= 9.0, "{}", fit.max_rate);
    assert!(
        digits(1.0 / fit.half_rise, 3.0227324449E-04) >= 9.0,
        "{}",
        1.0 / fit.half_rise
    );
    assert!(
        digits(fit.solution.cost(), 5.6419295283E-02) >= 9.0,
        "{}",
        fit.solution.cost()
    );
    assert!(
        digits(fit.residual_sd, 6.8568272111E-02) >= 9.0,
        "{}",
        fit.residual_sd
    );
    let [max_rate, half_rise, threshold] = fit.standard_errors(Errors::Relative).unwrap();
    // Certified 3.6489174345E+00 for b1 and 2.9334354479E-06 for b2 = 1/half-rise.
    assert!(digits(max_rate, 3.6489174345E+00) >= 9.0, "{max_rate}");
    assert!(
        digits(half_rise / fit.half_rise.powi(2), 2.9334354479E-06) >= 9.0,
        "{half_rise}"
    );
    assert_eq!((threshold, fit.threshold), (0.0, 0.0));
    // The data end at 19 % of the max rate, yet its interval closes.
    let [low, high] = fit
        .interval(Parameter::MaxRate, Errors::Relative)
        .map(Option::unwrap);
    assert!(
        429.0 < low && low < fit.max_rate && fit.max_rate < high && high < 446.0,
        "{low} {high}"
    );
}

fn puromycin(state: &str) -> HyperbolaFit {
    let (header, rows) = csv("puromycin/puromycin.csv");
    assert_eq!(header, ["state", "concentration_ppm", "rate"]);
    let points: Vec<Point> = rows
        .iter()
        .filter(|row| row[0] == state)
        .map(|row| point(row[1].parse().unwrap(), row[2].parse().unwrap()))
        .collect();
    fit_hyperbola(&points, Some(0.0)).unwrap()
}

/// Value as printed: equal when rounded to as many decimals.
#[track_caller]
fn printed(value: f64, expected: &str) {
    let decimals = expected.split('.').nth(1).map_or(0, str::len);
    assert_eq!(format!("{value:.decimals$}"), expected);
}

#[test]
fn puromycin_gives_the_published_estimates() {
    // Printed by the saved example output of R's data set (nls).
    let fit = puromycin("treated");
    let [max_rate, half_rise, _] = fit.standard_errors(Errors::Relative).unwrap();
    printed(fit.max_rate, "212.7");
    printed(fit.half_rise, "0.06412");
    printed(max_rate, "6.947");
    printed(half_rise, "0.008281");
    printed(fit.residual_sd, "10.93");
    printed(fit.solution.cost(), "1195.449");
    printed(fit.correlation().unwrap(), "0.7651");
    assert_eq!(fit.degrees, 10.0);
    let fit = puromycin("untreated");
    let [max_rate, half_rise, _] = fit.standard_errors(Errors::Relative).unwrap();
    printed(fit.max_rate, "160.3");
    printed(fit.half_rise, "0.04771");
    printed(max_rate, "6.480");
    printed(half_rise, "0.007782");
    printed(fit.residual_sd, "9.773");
    printed(fit.solution.cost(), "859.604");
    assert_eq!(fit.degrees, 9.0);
}

#[test]
fn puromycin_agrees_with_a_solution_at_many_digits() {
    // Our own solutions in mpmath; scipy's curve_fit agrees to 9 digits.
    for (state, expected) in [
        (
            "treated",
            [
                212.683743142536,
                0.0641212816815671,
                6.94715516004,
                0.00828094949848,
                10.9336581912888,
                0.765083701787,
            ],
        ),
        (
            "untreated",
            [
                160.280046182714,
                0.0477081845059544,
                6.48024550485,
                0.00778187524206,
                9.77300302863496,
                0.776827083804,
            ],
        ),
    ] {
        let fit = puromycin(state);
        let [max_rate, half_rise, _] = fit.standard_errors(Errors::Relative).unwrap();
        let correlation = fit.correlation().unwrap();
        let found = [
            fit.max_rate,
            fit.half_rise,
            max_rate,
            half_rise,
            fit.residual_sd,
            correlation,
        ];
        for (value, expected) in found.into_iter().zip(expected) {
            assert_close(state, value, expected, 1e-9);
        }
        // The points' errors, all 1, taken at their word.
        let [unscaled, ..] = fit.standard_errors(Errors::Absolute).unwrap();
        assert_close(state, unscaled * fit.residual_sd, max_rate, 1e-12);
    }
}

#[test]
fn puromycin_profiles_end_where_others_end() {
    // Exact roots of the profile t, computed apart from this project; R's confint, which interpolates a spline through
    // the profile, prints 197.302, 229.290, 0.046925, 0.086160 and 145.637, 176.544, 0.031375, 0.070061.
    for (state, max_rate, half_rise) in [
        ("treated", [197.301933, 229.289055], [0.0469203, 0.0861569]),
        ("untreated", [145.636679, 176.543756], [0.0313669, 0.0700571]),
    ] {
        let fit = puromycin(state);
        for (parameter, expected) in [(Parameter::MaxRate, max_rate), (Parameter::HalfRise, half_rise)] {
            let found = fit.interval(parameter, Errors::Relative).map(Option::unwrap);
            for (value, expected) in found.into_iter().zip(expected) {
                assert_close(&format!("{state} {parameter:?}"), value, expected, 3e-5);
            }
        }
    }
}
