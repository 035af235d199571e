#![allow(clippy::unwrap_used, clippy::panic)]
use rand::SeedableRng;
use rand_chacha::ChaCha8Rng;
use rand_distr::{Distribution, StandardNormal};

use super::*;
use crate::curve::smoothed_hyperbola;

pub(crate) const CONSTANTS: CellConstants = CellConstants {
    g_leak_ns: Some(10.0),
    e_leak_mv: Some(-70.0),
    e_exc_mv: Some(0.0),
    e_inh_mv: Some(-75.0),
    v_threshold_mv: None,
    capacitance_pf: None,
};
pub(crate) const INHIBITION: [f64; 4] = [0.0, 6.0, 12.0, 20.0];

/// What generates rates: max rate, half-rise, V_t, noise SD, change of the threshold per nS beyond the relation, b.
#[derive(Clone, Copy)]
pub(crate) struct Truth {
    pub(crate) max_rate: f64,
    pub(crate) half_rise: f64,
    pub(crate) v_t: f64,
    pub(crate) noise: f64,
    pub(crate) more_slope: f64,
    pub(crate) b: f64,
}

pub(crate) const TRUTH: Truth = Truth {
    max_rate: 90.0,
    half_rise: 14.0,
    v_t: -48.0,
    noise: 2.0,
    more_slope: 0.0,
    b: 0.0,
};

pub(crate) fn simulate(truth: Truth, scatter: f64, seed: u64, inhibition: &[f64]) -> Vec<InhibitionPoint> {
    let membrane = Membrane::from_constants(&CONSTANTS).unwrap();
    let mut rng = ChaCha8Rng::seed_from_u64(seed);
    let mut points = Vec::new();
    for &g_inh in inhibition {
        let threshold = membrane.threshold_at(g_inh, truth.v_t) + truth.more_slope * g_inh;
        let half_rise = truth.half_rise * (1.0 + truth.b * g_inh);
        for i in 0..16 {
            let g_exc = f64::from(i) * 4.0;
            let rate = truth.max_rate
                * smoothed_hyperbola::evaluate((g_exc - threshold) / half_rise, truth.noise / half_rise).h;
            let se = (0.02 * rate).hypot(0.3);
            let z: f64 = StandardNormal.sample(&mut rng);
            points.push(InhibitionPoint {
                g_exc,
                g_inh,
                rate: (rate + scatter * se * z).max(0.0),
                se,
            });
        }
    }
    points
}

fn assert_near(what: &str, estimate: &Estimate, truth: f64, tolerance: f64) {
    let value = estimate.value.unwrap();
    assert!(
        (value - truth).abs() <= tolerance,
        "{what}: {value} against {truth}"
    );
}

use crate::fit::Estimate;

#[test]
fn finds_the_parameters_that_made_exact_rates() {
    for truth in [
        TRUTH,
        Truth {
            max_rate: 45.0,
            half_rise: 5.0,
            v_t: -58.0,
            noise: 0.8,
            ..TRUTH
        },
        Truth {
            v_t: -35.0,
            noise: 5.0,
            ..TRUTH
        },
    ] {
        // Not quite exact: a sum of squares of zero has no digits to converge in.
        let fit = fit_inhibition(&simulate(truth, 1e-5, 1, &INHIBITION), &CONSTANTS, false);
        let m = Membrane::from_constants(&CONSTANTS).unwrap();
        for form in Form::ALL {
            let found = fit.of(form).as_ref().unwrap();
            assert!(found.converged, "{form:?}");
            let e = &found.estimates;
            assert_near("max rate", &e.max_rate, truth.max_rate, 1e-4 * truth.max_rate);
            assert_near("half-rise", &e.half_rise, truth.half_rise, 1e-3 * truth.half_rise);
            assert_near("threshold", &e.threshold, m.threshold_at(0.0, truth.v_t), 1e-3);
            assert_near("noise", &e.noise_sd, truth.noise, 1e-3 * truth.noise);
            assert_near("slope", &e.slope, m.per_inhibition_at(truth.v_t), 1e-4);
            if form != Form::FreeSlope {
                assert_near("V_t", &e.v_threshold, truth.v_t, 1e-3);
            }
        }
        assert_near("b", &fit.divisive.as_ref().unwrap().estimates.divisive, 0.0, 1e-6);
    }
}

#[test]
fn finds_a_slope_and_a_division_of_their_own() {
    let m = Membrane::from_constants(&CONSTANTS).unwrap();
    let sloped = Truth {
        more_slope: 0.4,
        ..TRUTH
    };
    let fit = fit_inhibition(&simulate(sloped, 0.0, 1, &INHIBITION), &CONSTANTS, false);
    let slope = m.per_inhibition_at(TRUTH.v_t) + 0.4;
    assert_near("slope", &fit.free_slope.unwrap().estimates.slope, slope, 1e-4);
    let divided = Truth { b: 0.06, ..TRUTH };
    let fit = fit_inhibition(&simulate(divided, 0.0, 1, &INHIBITION), &CONSTANTS, false);
    let e = fit.divisive.unwrap().estimates;
    assert_near("b", &e.divisive, 0.06, 1e-4);
    assert_near("V_t", &e.v_threshold, TRUTH.v_t, 1e-3);
    assert_near("half-rise", &e.half_rise, TRUTH.half_rise, 1e-2);
}

#[test]
fn intervals_hold_their_estimate_and_cover_the_truth() {
    let m = Membrane::from_constants(&CONSTANTS).unwrap();
    let truths = [
        TRUTH.max_rate,
        TRUTH.half_rise,
        m.threshold_at(0.0, TRUTH.v_t),
        TRUTH.noise,
        TRUTH.max_rate / TRUTH.half_rise,
        TRUTH.v_t,
        m.per_inhibition_at(TRUTH.v_t),
    ];
    let (mut covered, mut asked) = ([0; 7], 0);
    for seed in 0..60 {
        let fit = fit_inhibition(&simulate(TRUTH, 1.0, seed, &INHIBITION), &CONSTANTS, true);
        let free = fit.free_slope.unwrap().estimates;
        let e = fit.relation.unwrap().estimates;
        asked += 1;
        let all = [
            e.max_rate,
            e.half_rise,
            e.threshold,
            e.noise_sd,
            e.initial_gain,
            e.v_threshold,
            free.slope,
        ];
        for (i, (estimate, truth)) in all.iter().zip(truths).enumerate() {
            let (lo, hi) = (estimate.lo.unwrap(), estimate.hi.unwrap());
            let value = estimate.value.unwrap();
            assert!(lo < value && value < hi, "{i}: {lo} {value} {hi}");
            covered[i] += usize::from(lo <= truth && truth <= hi);
            // Here the problem is nearly linear: half the interval is about two standard errors.
            let ratio = (hi - lo) / (2.0 * 2.0 * estimate.se.unwrap());
            assert!((0.7..1.6).contains(&ratio), "{i}: {ratio}");
        }
    }
    // 95 % of 60 is 57; 51 or fewer has a probability below 1 %.
    assert!(covered.iter().all(|c| *c >= 52), "{covered:?} of {asked}");
}

#[test]
fn the_covariance_belongs_to_the_reported_parameters() {
    let fit = fit_inhibition(&simulate(TRUTH, 1.0, 3, &INHIBITION), &CONSTANTS, false);
    for form in [Form::Relation, Form::FreeSlope] {
        let found = fit.of(form).as_ref().unwrap();
        let (e, p) = (&found.estimates, form.parameters());
        let c = e.covariance.as_ref().unwrap();
        assert_eq!(c.len(), p * p);
        let pairs = [
            (c[0].sqrt() * e.max_rate.value.unwrap(), e.max_rate.se),
            (c[p + 1].sqrt() * e.half_rise.value.unwrap(), e.half_rise.se),
            (c[2 * (p + 1)].sqrt(), e.threshold.se),
            (c[3 * (p + 1)].sqrt() * e.noise_sd.value.unwrap(), e.noise_sd.se),
        ];
        for (from_covariance, se) in pairs {
            assert!((from_covariance / se.unwrap() - 1.0).abs() < 1e-9);
        }
        // ln gain = ln R - ln K.
        let gain = (c[0] + c[p + 1] - 2.0 * c[1]).sqrt() * e.initial_gain.value.unwrap();
        assert!((gain / e.initial_gain.se.unwrap() - 1.0).abs() < 1e-6);
        // Every parameter is worth one: leverages of all levels sum to the number of parameters.
        assert!((found.leverage.iter().sum::<f64>() - p as f64).abs() < 1e-6);
    }
}

#[test]
fn without_constants_the_free_slope_is_fitted_and_the_rest_says_what_is_missing() {
    let points = simulate(TRUTH, 1.0, 2, &INHIBITION);
    let constants = CellConstants {
        e_exc_mv: None,
        e_inh_mv: None,
        ..CONSTANTS
    };
    let fit = fit_inhibition(&points, &constants, true);
    let e = fit.free_slope.as_ref().unwrap().estimates.clone();
    assert!(e.slope.value.is_some() && e.slope.lo.is_some() && e.v_threshold.value.is_none());
    for form in [Form::Relation, Form::Divisive] {
        let text = fit.of(form).as_ref().unwrap_err().to_string();
        assert!(text.starts_with("e_exc, e_inh not known"), "{text}");
    }
    let wrong = CellConstants {
        e_inh_mv: Some(3.0),
        ..CONSTANTS
    };
    let fit = fit_inhibition(&points, &wrong, false);
    assert!(fit.free_slope.is_ok());
    let text = fit.relation.unwrap_err().to_string();
    assert!(text.contains("e_inh = 3 mV is not below e_exc = 0 mV"), "{text}");
}

#[test]
fn a_line_leaves_the_ceiling_open() {
    let truth = Truth {
        max_rate: 40_000.0,
        half_rise: 10_000.0,
        ..TRUTH
    };
    let fit = fit_inhibition(&simulate(truth, 1.0, 5, &INHIBITION), &CONSTANTS, true);
    for form in Form::ALL {
        let e = &fit.of(form).as_ref().unwrap().estimates;
        assert!(e.ceiling_open && e.max_rate.value.is_none(), "{form:?}");
        assert_eq!(
            (e.max_rate.hi, e.half_rise.hi),
            (Some(f64::INFINITY), Some(f64::INFINITY))
        );
        assert!(e.max_rate.lo.unwrap() > 200.0 && e.initial_gain.value.is_some());
    }
    let v = fit.relation.unwrap().estimates.v_threshold;
    assert!(v.lo.unwrap() < truth.v_t && truth.v_t < v.hi.unwrap());
}

#[test]
fn questions_without_an_answer_are_answered_in_words() {
    let good = simulate(TRUTH, 1.0, 4, &INHIBITION);
    let reason = |points: &[InhibitionPoint], form: Form| {
        fit_inhibition(points, &CONSTANTS, true)
            .of(form)
            .as_ref()
            .err()
            .map(ToString::to_string)
    };
    // One level of inhibition: the threshold alone gives V_t, and nothing tests the relation.
    let one = simulate(TRUTH, 1.0, 4, &[6.0]);
    assert_eq!(reason(&one, Form::Relation), None);
    for form in [Form::FreeSlope, Form::Divisive] {
        assert!(
            reason(&one, form)
                .unwrap()
                .contains("only 1 of 1 levels of g_inh")
        );
    }
    let silent: Vec<_> = good.iter().map(|p| InhibitionPoint { rate: 0.0, ..*p }).collect();
    let hushed: Vec<_> = good
        .iter()
        .map(|p| InhibitionPoint {
            rate: if p.g_inh > 0.0 { 0.0 } else { p.rate },
            ..*p
        })
        .collect();
    assert!(reason(&hushed, Form::FreeSlope).unwrap().contains("only 1 of 4"));
    let few = [good[5], good[9], good[25], good[30]];
    let repeats: Vec<_> = std::iter::repeat_n(good[12], 9).chain([good[40]]).collect();
    for form in Form::ALL {
        assert!(
            reason(&silent, form)
                .unwrap()
                .contains("no rate above 0 Hz on any of 64 steps")
        );
        assert!(
            reason(&[], form)
                .unwrap()
                .contains("no rate above 0 Hz on any of 0")
        );
        assert!(reason(&few, form).unwrap().contains("4 steps are too few"));
        assert!(reason(&repeats, form).unwrap().contains("2 distinct pairs"));
    }
    for (i, bad) in [f64::NAN, f64::INFINITY, -1.0].into_iter().enumerate() {
        let mut points = good.clone();
        points[7].g_inh = bad;
        assert!(
            reason(&points, Form::FreeSlope)
                .unwrap()
                .starts_with("point 8: g_inh = ")
        );
        let mut points = good.clone();
        points[2].g_exc = bad;
        assert!(
            reason(&points, Form::FreeSlope)
                .unwrap()
                .starts_with("point 3: g_exc = ")
        );
        let mut points = good.clone();
        points[7].rate = bad;
        assert!(reason(&points, Form::FreeSlope).unwrap().contains("0 Hz or more"));
        let mut points = good.clone();
        points[7].se = [0.0, f64::NAN, -2.0][i];
        assert!(reason(&points, Form::Relation).unwrap().contains("above 0 Hz"));
    }
}

#[test]
fn the_order_of_the_points_changes_nothing() {
    let points = simulate(TRUTH, 1.0, 6, &INHIBITION);
    let mut turned = points.clone();
    turned.reverse();
    let (a, b) = (
        fit_inhibition(&points, &CONSTANTS, true),
        fit_inhibition(&turned, &CONSTANTS, true),
    );
    for form in Form::ALL {
        let (a, b) = (a.of(form).as_ref().unwrap(), b.of(form).as_ref().unwrap());
        assert_eq!(a.estimates, b.estimates);
        assert_eq!(a.fitted, b.fitted);
    }
    assert_eq!(b.order.first(), Some(&63));
    // The curve at a point is its fitted rate.
    let relation = a.relation.unwrap();
    let first = relation.rates(points[0].g_inh, &[points[9].g_exc]);
    assert!((first[0].rate / relation.fitted[9] - 1.0).abs() < 1e-12);
    assert!(first[0].se.is_some_and(|se| se > 0.0 && se < 2.0));
}

#[test]
fn no_input_panics_or_gives_what_is_not_a_number() {
    use rand::RngExt;
    let mut rng = ChaCha8Rng::seed_from_u64(11);
    let odd = [0.0, 1e-300, 1e-9, 1e-3, 1.0, 1e3, 1e9, 1e300];
    let mut fitted = 0;
    for case in 0..250 {
        // From tame to absurd.
        let absurd = f64::from(case % 5) * 0.05;
        let mut pick = |low: f64, high: f64| -> f64 {
            if rng.random::<f64>() < absurd {
                odd[(rng.random::<f64>() * 8.0) as usize] * if rng.random::<f64>() < 0.2 { -1.0 } else { 1.0 }
            } else {
                low + (high - low) * rng.random::<f64>()
            }
        };
        let constants = CellConstants {
            g_leak_ns: Some(pick(0.5, 30.0)),
            e_leak_mv: Some(pick(-95.0, -40.0)),
            e_exc_mv: Some(pick(-30.0, 20.0)),
            e_inh_mv: Some(pick(-95.0, -40.0)),
            ..CellConstants::default()
        };
        let count = pick(0.0, 30.0).clamp(0.0, 40.0) as usize;
        let points: Vec<InhibitionPoint> = (0..count)
            .map(|_| InhibitionPoint {
                g_exc: pick(0.0, 12.0).floor().max(0.0),
                g_inh: pick(0.0, 3.0).floor().max(0.0),
                rate: pick(-20.0, 80.0).max(0.0),
                se: pick(0.1, 3.0).abs().max(1e-300),
            })
            .collect();
        let fit = fit_inhibition(&points, &constants, case % 3 == 0);
        for form in Form::ALL {
            let Ok(found) = fit.of(form) else { continue };
            if !found.converged {
                continue;
            }
            fitted += 1;
            let e = &found.estimates;
            for estimate in [
                e.max_rate,
                e.half_rise,
                e.threshold,
                e.noise_sd,
                e.initial_gain,
                e.v_threshold,
                e.slope,
                e.divisive,
            ] {
                let all = [estimate.value, estimate.se, estimate.lo, estimate.hi];
                assert!(all.iter().flatten().all(|x| !x.is_nan()), "{case} {form:?} {e:?}");
                let [lo, hi] = [estimate.lo, estimate.hi];
                if let (Some(lo), Some(value), Some(hi)) = (lo, estimate.value, hi) {
                    assert!(lo <= value && value <= hi, "{case} {form:?} {e:?}");
                }
            }
        }
    }
    assert!(fitted > 100, "{fitted}");
}
