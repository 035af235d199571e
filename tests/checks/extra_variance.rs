//! The extra variance between steps. For a constant mean it is the estimator of Paule & Mandel (1982): against
//! statsmodels on the 13 BCG trials of Colditz et al. (1994), see `fixtures/paule_mandel`.

use halfrise::fit::extra_variance;

use super::support::{assert_close, json, numbers};

/// Additive variance, weighted mean and its standard error, mean and variance found in turn.
fn between(effects: &[f64], errors: &[f64]) -> (f64, f64, f64) {
    let mut variance = 0.0;
    for _ in 0..500 {
        let mean = mean(effects, errors, variance).0;
        let residuals: Vec<f64> = effects.iter().map(|y| y - mean).collect();
        let next = extra_variance(&residuals, errors, (effects.len() - 1) as f64);
        let done = (next - variance).abs() <= 1e-15 * next;
        variance = next;
        if done {
            let (mean, error) = self::mean(effects, errors, variance);
            return (variance, mean, error);
        }
    }
    panic!("mean and variance do not settle");
}

fn mean(effects: &[f64], errors: &[f64], variance: f64) -> (f64, f64) {
    let (mut total, mut sum) = (0.0, 0.0);
    for (y, e) in effects.iter().zip(errors) {
        let weight = 1.0 / (e * e + variance);
        total += weight;
        sum += weight * y;
    }
    (sum / total, total.sqrt().recip())
}

fn trials() -> (Vec<f64>, Vec<f64>) {
    let columns = ["treated_cases", "treated_other", "control_cases", "control_other"];
    numbers("paule_mandel/trials.csv", columns)
        .into_iter()
        .map(|[a, b, c, d]| {
            let effect = (a / (a + b)).ln() - (c / (c + d)).ln();
            let variance = 1.0 / a - 1.0 / (a + b) + 1.0 / c - 1.0 / (c + d);
            (effect, variance.sqrt())
        })
        .unzip()
}

#[test]
fn thirteen_trials_agree_with_statsmodels() {
    let (effects, errors) = trials();
    assert_eq!(effects.len(), 13);
    let listed = numbers("paule_mandel/effects.csv", ["log_risk_ratio", "variance"]);
    for (([effect, variance], y), e) in listed.iter().zip(&effects).zip(&errors) {
        assert_close("effect", *y, *effect, 1e-13);
        assert_close("variance", e * e, *variance, 1e-13);
    }
    let expected = json("paule_mandel/paule_mandel.json");
    let wide: Vec<f64> = errors.iter().map(|e| 8.0 * e).collect();
    for (name, effects, errors) in [
        ("all", &effects[..], &errors[..]),
        ("first_seven", &effects[..7], &errors[..7]),
        ("wide_errors", &effects[..], &wide[..]),
    ] {
        let number = |key: &str| expected[name][key].as_f64().unwrap();
        let (variance, mean, error) = between(effects, errors);
        println!("{name}: {variance} {mean} {error}");
        if number("extra_variance") == 0.0 {
            assert_eq!(variance, 0.0);
        } else {
            assert_close(name, variance, number("extra_variance"), 1e-10);
        }
        assert_close(name, mean, number("mean"), 1e-11);
        assert_close(name, error, number("standard_error"), 1e-11);
    }
}

#[test]
fn the_known_mean_without_extra_variance() {
    // Fixed-effect mean and standard error of the same trials, printed by several programs: -0.4303 (0.0405).
    let (effects, errors) = trials();
    let (mean, error) = mean(&effects, &errors, 0.0);
    assert_eq!(format!("{mean:.8} {error:.8}"), "-0.43028516 0.04049875");
    // Cochran's Q = 152.2330 on 12 degrees of freedom.
    let q: f64 = effects
        .iter()
        .zip(&errors)
        .map(|(y, e)| ((y - mean) / e).powi(2))
        .sum();
    assert_eq!(format!("{q:.8}"), "152.23300808");
}
