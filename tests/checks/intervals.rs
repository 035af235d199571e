//! Interval statistics: a series worked by hand, and the closed forms of gamma renewal processes against long
//! simulated trains.
//!
//! For independent gamma intervals of shape k and mean m, neighbours I and J share their sum in the proportion
//! B ~ Beta(k, k), independent of the sum S ~ Gamma(2k, m/k). From it
//!
//! ```text
//! CV = k^(-1/2)    CV2 = 4^(1-k)/(k Beta(k, k))    LV = 3/(2k+1)    LvR = LV (1 + 4 R k/(m (2k-1))), k > 1/2
//! ```
//!
//! The standard errors are those of a mean of neighbouring terms that overlap by one interval.

use halfrise::rates::{
    Response, cell_interval_cv, cv, cv2, detrended_cv, interval_rate, lv, lvr, step_rates,
};
use halfrise::settings::Analysis;
use rand::SeedableRng;
use rand_chacha::ChaCha8Rng;
use rand_distr::{Distribution, Exp, Gamma};

use super::support::assert_close;

/// Eight intervals, seconds.
const SERIES: [f64; 8] = [0.012, 0.015, 0.011, 0.020, 0.018, 0.025, 0.022, 0.030];

#[test]
fn a_series_worked_by_hand() {
    // Neighbours differ by 3, 4, 9, 2, 7, 3, 8 ms and sum to 27, 26, 31, 38, 43, 47, 52 ms; the mean is 19.125 ms.
    assert_close("CV", cv(&SERIES).unwrap(), 0.340_515_079_903_09, 1e-12);
    assert_close("CV2", cv2(&SERIES).unwrap(), 0.282_393_732_372_688_5, 1e-12);
    assert_close("LV", lv(&SERIES).unwrap(), 0.075_992_268_874_920_39, 1e-12);
    assert_close(
        "LvR",
        lvr(&SERIES, 0.005).unwrap(),
        0.121_571_428_254_610_69,
        1e-12,
    );
    let by_hand = [
        (3.0, 27.0),
        (4.0, 26.0),
        (9.0, 31.0),
        (2.0, 38.0),
        (7.0, 43.0),
        (3.0, 47.0),
        (8.0, 52.0),
    ];
    let mean = |term: &dyn Fn(f64, f64) -> f64| by_hand.iter().map(|(d, s)| term(*d, *s)).sum::<f64>() / 7.0;
    assert_close("CV2", cv2(&SERIES).unwrap(), mean(&|d, s| 2.0 * d / s), 1e-12);
    assert_close(
        "LV",
        lv(&SERIES).unwrap(),
        mean(&|d, s| 3.0 * d * d / (s * s)),
        1e-12,
    );

    let mut spikes = vec![0.5];
    for interval in SERIES {
        spikes.push(spikes[spikes.len() - 1] + interval);
    }
    assert_close(
        "rate",
        interval_rate(&spikes).unwrap(),
        52.287_581_699_346_404,
        1e-12,
    );
    // The same through the pipeline's door.
    let settings = Analysis::default();
    let refractory = settings.lvr_refractory_s;
    let step = step_rates(&[(0.45, 0.95, &spikes)], Response::Whole, 0.3, &settings).remove(0);
    assert_eq!((step.spikes, step.intervals), (9, 8));
    assert_close("rate", step.rate_hz, 52.287_581_699_346_404, 1e-12);
    assert_close(
        "SE",
        step.rate_se_hz,
        52.287_581_699_346_404 * 0.3 / 8.0_f64.sqrt(),
        1e-12,
    );
    assert_close("LvR", step.lvr.unwrap(), lvr(&SERIES, refractory).unwrap(), 1e-11);
    // Last instantaneous rate over the first: 12 ms / 30 ms.
    assert_close("adaptation", step.adaptation_ratio.unwrap(), 0.4, 1e-11);
    assert_close("shortest", step.min_interval_s.unwrap(), 0.011, 1e-11);
    assert_close("latency", step.first_spike_latency_s.unwrap(), 0.05, 1e-11);
}

#[test]
fn detrending_by_the_normal_equations() {
    // Least squares of the series in ms on 0..7: the slope is 100.5/42.
    let offsets: Vec<f64> = (0..8).map(|i| f64::from(i) - 3.5).collect();
    let ms: Vec<f64> = SERIES.iter().map(|x| x * 1e3).collect();
    let cross: f64 = offsets.iter().zip(&ms).map(|(o, x)| o * x).sum();
    let total: f64 = ms.iter().map(|x| (x - 19.125).powi(2)).sum();
    assert_close("cross products", cross, 100.5, 1e-13);
    let residual = total - cross * cross / 42.0;
    assert_close(
        "detrended",
        detrended_cv(&SERIES).unwrap(),
        (residual / 6.0).sqrt() / 19.125,
        1e-12,
    );
}

struct Shape {
    shape: f64,
    cv: f64,
    cv2: f64,
    lv: f64,
    lvr: f64,
    /// Variance of one term of CV2 and of LV.
    term: [f64; 2],
}

/// Mean interval 20 ms, R 5 ms. Figures from the closed forms in mpmath.
const SHAPES: [Shape; 4] = [
    Shape {
        shape: 1.0,
        cv: 1.0,
        cv2: 1.0,
        lv: 1.0,
        lvr: 2.0,
        term: [1.0 / 3.0, 0.8],
    },
    Shape {
        shape: 2.0,
        cv: std::f64::consts::FRAC_1_SQRT_2,
        cv2: 0.75,
        lv: 0.6,
        lvr: 1.0,
        term: [0.2375, 0.411_428_571_428_571_4],
    },
    Shape {
        shape: 4.0,
        cv: 0.5,
        cv2: 0.546875,
        lv: 1.0 / 3.0,
        lvr: 0.523_809_523_809_523_8,
        term: [0.145_372_178_819_444_45, 0.161_616_161_616_161_63],
    },
    Shape {
        shape: 9.0,
        cv: 1.0 / 3.0,
        cv2: 0.370_941_162_109_375,
        lv: 0.157_894_736_842_105_26,
        lvr: 0.241_486_068_111_455_1,
        term: [f64::NAN, f64::NAN],
    },
];

const MEAN: f64 = 0.020;
const INTERVALS: usize = 400_000;

/// Mean and standard error of the mean of `terms`, each of which may correlate with its next neighbour.
fn mean_and_error(terms: &[f64]) -> (f64, f64) {
    let n = terms.len() as f64;
    let mean = terms.iter().sum::<f64>() / n;
    let variance = terms.iter().map(|t| (t - mean).powi(2)).sum::<f64>() / n;
    let lagged = terms
        .windows(2)
        .map(|w| (w[0] - mean) * (w[1] - mean))
        .sum::<f64>()
        / n;
    (mean, ((variance + 2.0 * lagged) / n).sqrt())
}

#[track_caller]
fn within_three(what: &str, value: f64, expected: f64, error: f64) {
    let deviation = (value - expected) / error;
    println!("{what}: {value:.6} expected {expected:.6}, {deviation:+.2} SE");
    // A standard error so wide that anything passes is no check.
    assert!(error < 0.02 * expected, "{what}: SE {error}");
    assert!(
        deviation.abs() <= 3.0,
        "{what}: {value} against {expected}, {deviation} SE"
    );
}

#[test]
fn long_gamma_trains_give_the_closed_forms() {
    let mut random = ChaCha8Rng::seed_from_u64(20_260_101);
    for Shape {
        shape,
        cv: e_cv,
        cv2: e_cv2,
        lv: e_lv,
        lvr: e_lvr,
        term,
    } in SHAPES
    {
        let gamma = Gamma::new(shape, MEAN / shape).unwrap();
        let intervals: Vec<f64> = if shape == 1.0 {
            let exponential = Exp::new(1.0 / MEAN).unwrap();
            (0..INTERVALS).map(|_| exponential.sample(&mut random)).collect()
        } else {
            (0..INTERVALS).map(|_| gamma.sample(&mut random)).collect()
        };
        let n = INTERVALS as f64;
        // Delta method for SD/mean; a gamma variable has cumulants (j-1)! k in units of its scale.
        let (m2, m3, m4) = (shape, 2.0 * shape, 6.0 * shape + 3.0 * shape * shape);
        let variance = m4 / (4.0 * m2 * m2) - 0.25 - m3 / (m2 * shape) + m2 / (shape * shape);
        let cv_error = e_cv * (variance / n).sqrt();
        within_three(
            &format!("shape {shape} CV"),
            cv(&intervals).unwrap(),
            e_cv,
            cv_error,
        );
        within_three(
            &format!("shape {shape} detrended CV"),
            detrended_cv(&intervals).unwrap(),
            e_cv,
            cv_error,
        );

        let pairs = |f: &dyn Fn(f64, f64) -> f64| -> Vec<f64> {
            intervals.windows(2).map(|w| f(w[0], w[1])).collect()
        };
        let cv2_terms = pairs(&|a, b| 2.0 * (a - b).abs() / (a + b));
        let lv_terms = pairs(&|a, b| 3.0 * ((a - b) / (a + b)).powi(2));
        let lvr_terms =
            pairs(&|a, b| 3.0 * (1.0 - 4.0 * a * b / (a + b).powi(2)) * (1.0 + 4.0 * 0.005 / (a + b)));
        within_three(
            &format!("shape {shape} CV2"),
            cv2(&intervals).unwrap(),
            e_cv2,
            mean_and_error(&cv2_terms).1,
        );
        within_three(
            &format!("shape {shape} LV"),
            lv(&intervals).unwrap(),
            e_lv,
            mean_and_error(&lv_terms).1,
        );
        within_three(
            &format!("shape {shape} LvR"),
            lvr(&intervals, 0.005).unwrap(),
            e_lvr,
            mean_and_error(&lvr_terms).1,
        );
        // The variance of one term has a closed form too: 4/(2k+1) - CV2^2 and 9 [3/((2k+1)(2k+3)) - 1/(2k+1)^2].
        let of_cv2 = 4.0 / (2.0 * shape + 1.0) - e_cv2 * e_cv2;
        let odd = 2.0 * shape + 1.0;
        let of_lv = 9.0 * (3.0 / (odd * (odd + 2.0)) - 1.0 / (odd * odd));
        if term[0].is_finite() {
            assert_close("variance of a CV2 term", of_cv2, term[0], 1e-12);
            assert_close("variance of an LV term", of_lv, term[1], 1e-12);
        }
        for (terms, variance) in [(&cv2_terms, of_cv2), (&lv_terms, of_lv)] {
            let (mean, _) = mean_and_error(terms);
            let measured = terms.iter().map(|t| (t - mean).powi(2)).sum::<f64>() / n;
            assert_close("variance of a term", measured, variance, 0.02);
        }
    }
}

#[test]
fn a_dead_time_regularises() {
    // Poisson with a dead time of 5 ms, mean 20 ms; expectations by quadrature in mpmath.
    let mut random = ChaCha8Rng::seed_from_u64(5);
    let exponential = Exp::new(1.0 / 0.015).unwrap();
    let intervals: Vec<f64> = (0..INTERVALS)
        .map(|_| 0.005 + exponential.sample(&mut random))
        .collect();
    let terms = |f: &dyn Fn(f64, f64) -> f64| -> f64 {
        let terms: Vec<f64> = intervals.windows(2).map(|w| f(w[0], w[1])).collect();
        mean_and_error(&terms).1
    };
    let n = INTERVALS as f64;
    // Delta method with the central moments 1, 2, 9 of the exponential, mean 4/3 in its scale.
    let cv_error = 0.75 * ((2.0 - 2.0 * 0.75 + 0.75 * 0.75) / n).sqrt();
    within_three("CV", cv(&intervals).unwrap(), 0.75, cv_error);
    let error = terms(&|a, b| 2.0 * (a - b).abs() / (a + b));
    within_three("CV2", cv2(&intervals).unwrap(), 0.678_219_892_473_467, error);
    let error = terms(&|a, b| 3.0 * ((a - b) / (a + b)).powi(2));
    within_three("LV", lv(&intervals).unwrap(), 0.486_806_272_402_712_4, error);
    let error = terms(&|a, b| 3.0 * ((a - b) / (a + b)).powi(2) * (1.0 + 0.02 / (a + b)));
    within_three(
        "LvR",
        lvr(&intervals, 0.005).unwrap(),
        0.736_509_617_679_834_7,
        error,
    );
}

#[test]
fn rates_of_short_trains_and_the_cv_behind_their_errors() {
    // 10 intervals of shape 4 at 50 Hz: the interval rate has mean 51.2820513 and SD 8.3190472 (m k - 1 and m k - 2
    // degrees of an inverse gamma).
    let mut random = ChaCha8Rng::seed_from_u64(77);
    let gamma = Gamma::new(4.0, MEAN / 4.0).unwrap();
    let trains: Vec<Vec<f64>> = (0..40_000)
        .map(|_| {
            let mut t = 0.1;
            let mut train = vec![t];
            for _ in 0..10 {
                t += gamma.sample(&mut random);
                train.push(t);
            }
            train
        })
        .collect();
    let rates: Vec<f64> = trains.iter().map(|train| interval_rate(train).unwrap()).collect();
    let n = rates.len() as f64;
    let mean = rates.iter().sum::<f64>() / n;
    let sd = (rates.iter().map(|r| (r - mean).powi(2)).sum::<f64>() / (n - 1.0)).sqrt();
    within_three("mean rate", mean, 51.282_051_3, 8.319_047_2 / n.sqrt());
    // Kurtosis of the sample itself for the error of its SD.
    let fourth = rates.iter().map(|r| (r - mean).powi(4)).sum::<f64>() / n;
    within_three(
        "SD of the rate",
        sd,
        8.319_047_2,
        sd * ((fourth / sd.powi(4) - 1.0) / (4.0 * n)).sqrt(),
    );

    // The cell's CV is the median over its steps, the small-sample bias of a median taken out: close to 1/2, here
    // within 2 % (the correction supposes normal intervals, and gamma intervals of shape 4 are skewed).
    let steps: Vec<&[f64]> = trains.iter().map(Vec::as_slice).collect();
    let cell = cell_interval_cv(&steps);
    println!("cell CV {:.5} over {} steps", cell.cv, cell.steps);
    assert!(cell.enough && cell.steps == 40_000);
    assert!((cell.cv - 0.5).abs() < 0.02, "{}", cell.cv);
    // Uncorrected, it would be off by more than twice as much.
    let mut plain: Vec<f64> = trains
        .iter()
        .map(|train| detrended_cv(&train.windows(2).map(|w| w[1] - w[0]).collect::<Vec<_>>()).unwrap())
        .collect();
    plain.sort_by(f64::total_cmp);
    assert!((plain[20_000] - 0.5).abs() > (cell.cv - 0.5).abs());
}
