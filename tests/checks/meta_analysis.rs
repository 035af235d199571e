//! The extra SD's estimating equation is, for a constant mean, the estimator of Paule & Mandel (1982). Checked on 13
//! vaccine trials (Colditz et al. 1994) against statsmodels; `fixtures/meta_analysis` keeps data, script and result.

use halfrise::fit::extra_variance;

use super::support::{assert_close, json, numbers};

/// Mean and extra variance together, by turns, as the fit of a curve does.
fn settle(effects: &[[f64; 2]]) -> (f64, f64) {
    let errors: Vec<f64> = effects.iter().map(|e| e[1].sqrt()).collect();
    let mut variance = 0.0;
    for _ in 0..500 {
        let mean = weighted_mean(effects, variance);
        let residuals: Vec<f64> = effects.iter().map(|e| e[0] - mean).collect();
        let next = extra_variance(&residuals, &errors, (effects.len() - 1) as f64);
        let settled = (next - variance).abs() <= 1e-15 * next;
        variance = next;
        if settled {
            return (weighted_mean(effects, variance), variance);
        }
    }
    panic!("did not settle");
}

fn weighted_mean(effects: &[[f64; 2]], variance: f64) -> f64 {
    let (mut sum, mut weight) = (0.0, 0.0);
    for e in effects {
        let w = 1.0 / (e[1] + variance);
        sum += w * e[0];
        weight += w;
    }
    sum / weight
}

#[test]
fn extra_variance_of_the_trials() {
    let effects = numbers("meta_analysis/effects.csv", ["log_risk_ratio", "variance"]);
    assert_eq!(effects.len(), 13);
    let wide: Vec<[f64; 2]> = effects.iter().map(|e| [e[0], 64.0 * e[1]]).collect();
    let expected = json("meta_analysis/paule_mandel.json");
    for (name, data) in [("all", &effects[..]), ("first_seven", &effects[..7]), ("wide_errors", &wide[..])] {
        let (mean, variance) = settle(data);
        let wanted = |key: &str| expected[name][key].as_f64().unwrap();
        if wanted("extra_variance") == 0.0 {
            assert_eq!(variance, 0.0, "{name}");
        } else {
            assert_close(name, variance, wanted("extra_variance"), 1e-11);
        }
        assert_close(name, mean, wanted("mean"), 1e-11);
        let weight: f64 = data.iter().map(|e| 1.0 / (e[1] + variance)).sum();
        assert_close(name, weight.sqrt().recip(), wanted("standard_error"), 1e-11);
    }
}
