//! Spike trains of the leaky integrate-and-fire cell, whose rate is known: without noise in closed form (Stein 1967;
//! Dayan & Abbott 2001, chapter 5), with white noise by Siegert (1951) and Ricciardi (1977).

use halfrise::rates::{RateFrom, Response, cell_interval_cv, cv, interval_rate, step_rates};
use halfrise::settings::Analysis;
use rand::{RngExt, SeedableRng};
use rand_chacha::ChaCha8Rng;
use rand_distr::{Distribution, StandardNormal};

use super::support::assert_close;

/// Membrane of the noise-free cell: tau 10 ms, resistance 10 MOhm, rest and reset -65 mV, threshold -50 mV.
fn closed_form(current_na: f64, refractory_s: f64) -> f64 {
    let drive = 10.0 * current_na;
    if drive <= 15.0 {
        return 0.0;
    }
    1.0 / (refractory_s + 0.010 * (drive / (drive - 15.0)).ln())
}

/// Spikes of a step: charging from rest at the onset, then a spike a period.
fn train(current_na: f64, refractory_s: f64, onset: f64, offset: f64) -> Vec<f64> {
    let drive = 10.0 * current_na;
    if drive <= 15.0 {
        return Vec::new();
    }
    let charging = 0.010 * (drive / (drive - 15.0)).ln();
    (0..)
        .map(|i| onset + charging + f64::from(i) * (charging + refractory_s))
        .take_while(|t| *t < offset)
        .collect()
}

#[test]
fn rates_of_noise_free_trains_equal_the_formula() {
    // Figures at 16 digits from mpmath, rheobase 1.5 nA.
    let currents = [1.5, 1.51, 1.6, 2.0, 3.0, 5.0, 10.0];
    let without = [
        0.0,
        19.931_118_704_250_334,
        36.067_376_022_224_08,
        72.134_752_044_448_16,
        144.269_504_088_896_33,
        280.367_325_205_712_9,
        615.312_938_062_203_6,
    ];
    let with = [
        0.0,
        19.167_076_163_782_81,
        33.640_711_630_182_12,
        63.040_002_190_641_395,
        111.963_629_485_239_48,
        179.638_047_461_690_66,
        275.847_664_392_415_65,
    ];
    let settings = Analysis::default();
    for (refractory, expected) in [(0.0, without), (0.002, with)] {
        let (onset, offset) = (12.5, 14.0);
        let trains: Vec<Vec<f64>> = currents
            .iter()
            .map(|i| train(*i, refractory, onset, offset))
            .collect();
        let steps: Vec<(f64, f64, &[f64])> = trains
            .iter()
            .map(|train| (onset, offset, train.as_slice()))
            .collect();
        let cell = cell_interval_cv(&trains.iter().map(Vec::as_slice).collect::<Vec<_>>());
        assert!(cell.cv < 1e-9 && cell.enough && cell.steps == 6);
        for response in [Response::Whole, Response::Steady, Response::Onset] {
            let rates = step_rates(&steps, response, cell.cv, &settings);
            assert_eq!((rates[0].rate_hz, rates[0].rate_from), (0.0, RateFrom::Silent));
            for ((rate, current), expected) in rates.iter().zip(currents).zip(expected).skip(1) {
                assert_close("formula", closed_form(current, refractory), expected, 1e-12);
                assert_eq!(rate.rate_from, RateFrom::Intervals);
                assert_close(
                    &format!("{response:?} {current} nA"),
                    rate.rate_hz,
                    expected,
                    1e-9,
                );
                assert!(rate.cv.is_none_or(|cv| cv < 1e-9));
                assert!(rate.rate_se_hz > 0.0 && rate.rate_se_hz < 0.5);
            }
        }
    }
}

/// Noisy cell: tau 20 ms, refractory 2 ms, threshold 20 mV, reset 10 mV; tau dV = (mu - V) dt + sigma sqrt(tau) dW.
const TAU: f64 = 0.020;
const REFRACTORY: f64 = 0.002;
const THRESHOLD: f64 = 20.0;
const RESET: f64 = 10.0;

/// Tail integral erfcx(x) = e^(x^2) erfc(x) is what both integrals need; here e^(x^2)(1 + erf x) by quadrature over
/// its own definition, 2/sqrt(pi) int_0^inf e^(-v^2 + 2 v x) dv, which is smooth for every x.
fn scaled_erfc_of_negative(x: f64) -> f64 {
    // Trapezoid over a smooth peak at v = x, or a half peak: Simpson on [0, max(x, 0) + 7].
    let top = x.max(0.0) + 7.0;
    let panels = 6400;
    let width = top / f64::from(panels);
    let value = |v: f64| (-v * v + 2.0 * v * x).exp();
    let mut sum = value(0.0) + value(top);
    for i in 1..panels {
        sum += value(f64::from(i) * width) * if i % 2 == 1 { 4.0 } else { 2.0 };
    }
    2.0 / std::f64::consts::PI.sqrt() * sum * width / 3.0
}

/// Siegert's rate, Hz.
fn siegert(mu: f64, sigma: f64) -> f64 {
    let (from, to) = ((RESET - mu) / sigma, (THRESHOLD - mu) / sigma);
    let panels = 400;
    let width = (to - from) / f64::from(panels);
    let mut sum = scaled_erfc_of_negative(from) + scaled_erfc_of_negative(to);
    for i in 1..panels {
        sum += scaled_erfc_of_negative(from + f64::from(i) * width) * if i % 2 == 1 { 4.0 } else { 2.0 };
    }
    1.0 / (REFRACTORY + TAU * std::f64::consts::PI.sqrt() * sum * width / 3.0)
}

/// A train of `count` intervals. Between grid points the membrane is an Ornstein-Uhlenbeck bridge; a change of time
/// and scale makes it a Brownian bridge and the threshold a curve that is straight to second order of the step, whose
/// crossing probability is exp(-2 ab/variance).
fn simulate(mu: f64, sigma: f64, count: usize, random: &mut ChaCha8Rng) -> Vec<f64> {
    let step = 1e-4;
    let decay = (-step / TAU).exp();
    let spread = sigma / 2.0_f64.sqrt() * (1.0 - decay * decay).sqrt();
    // In X = (V - mu) e^(t/tau), a Brownian motion in the time sigma^2 (e^(2t/tau) - 1)/2.
    let elapsed = 0.5 * sigma * sigma * ((2.0 * step / TAU).exp() - 1.0);
    let mut t = 0.0;
    let mut spikes = vec![t];
    while spikes.len() <= count {
        t += REFRACTORY;
        let mut v = RESET;
        loop {
            let normal: f64 = StandardNormal.sample(random);
            let next = mu + (v - mu) * decay + spread * normal;
            let crossed = if next >= THRESHOLD {
                true
            } else {
                let (before, after) = (THRESHOLD - v, (THRESHOLD - next) / decay);
                let exponent = 2.0 * before * after / elapsed;
                // Beyond 40 the chance is nil and no random number is spent.
                exponent < 40.0 && random.random::<f64>() < (-exponent).exp()
            };
            if crossed {
                // Somewhere in the step.
                t += step * random.random::<f64>();
                break;
            }
            t += step;
            v = next;
        }
        spikes.push(t);
    }
    spikes
}

#[test]
fn rates_and_cvs_of_noisy_trains_are_siegerts() {
    let mut random = ChaCha8Rng::seed_from_u64(1951);
    // (mu, sigma) in mV, rate in Hz and interval CV at 13 digits from mpmath.
    for (mu, sigma, rate, interval_cv) in [
        (15.0, 5.0, 9.460_799_805_759_127, 0.814_757_211_659_449_6),
        (20.0, 5.0, 27.340_567_353_077_265, 0.582_635_839_932_714_5),
        (25.0, 5.0, 47.217_443_304_138_136, 0.436_354_414_380_231_4),
        (25.0, 2.0, 42.849_613_799_210_15, 0.208_308_510_653_129_9),
    ] {
        assert_close("Siegert's integral", siegert(mu, sigma), rate, 1e-9);
        let spikes = simulate(mu, sigma, 120_000, &mut random);
        let found = interval_rate(&spikes).unwrap();
        let intervals: Vec<f64> = spikes.windows(2).map(|w| w[1] - w[0]).collect();
        let n = intervals.len() as f64;
        let error = rate * interval_cv / n.sqrt();
        let deviation = (found - rate) / error;
        let found_cv = cv(&intervals).unwrap();
        // Error of a CV by the delta method, central moments from the sample.
        let mean = intervals.iter().sum::<f64>() / n;
        let moment = |power| {
            intervals
                .iter()
                .map(|x| (x / mean - 1.0).powi(power))
                .sum::<f64>()
                / n
        };
        let (m2, m3, m4) = (moment(2), moment(3), moment(4));
        let cv_error = m2.sqrt() * (((m4 / (m2 * m2) - 1.0) / 4.0 - m3 / m2 + m2) / n).sqrt();
        let cv_deviation = (found_cv - interval_cv) / cv_error;
        println!(
            "mu {mu} sigma {sigma}: rate {found:.4} of {rate:.4} ({deviation:+.2} SE), \
             CV {found_cv:.5} of {interval_cv:.5} ({cv_deviation:+.2} SE)"
        );
        assert!(error < 0.01 * rate && cv_error < 0.02 * interval_cv);
        assert!(
            deviation.abs() <= 3.0,
            "rate {found} against {rate}: {deviation} SE"
        );
        assert!(
            cv_deviation.abs() <= 3.0,
            "CV {found_cv} against {interval_cv}: {cv_deviation} SE"
        );
    }
}

#[test]
fn steps_of_noisy_trains_have_honest_errors() {
    // Steps of half a second at 47.2 Hz: rates scatter about Siegert's with the standard errors that they carry.
    let mut random = ChaCha8Rng::seed_from_u64(1977);
    let (mu, sigma, rate) = (25.0, 5.0, 47.217_443_304_138_136);
    let spikes = simulate(mu, sigma, 30_000, &mut random);
    // One long stationary train cut into steps of 0.5 s with the spikes that fall in.
    let steps: Vec<(f64, f64, &[f64])> = (0..1200)
        .map(|i| {
            let (onset, offset) = (0.5 * f64::from(i), 0.5 * f64::from(i + 1));
            let from = spikes.partition_point(|t| *t < onset);
            let to = spikes.partition_point(|t| *t < offset);
            (onset, offset, &spikes[from..to])
        })
        .collect();
    let cell = cell_interval_cv(&steps.iter().map(|s| s.2).collect::<Vec<_>>());
    // Few intervals a step: a median of small samples, not the long-run 0.436 exactly.
    assert!((cell.cv - 0.436).abs() < 0.02, "{}", cell.cv);
    let rates = step_rates(&steps, Response::Whole, cell.cv, &Analysis::default());
    let n = rates.len() as f64;
    let mean = rates.iter().map(|r| r.rate_hz).sum::<f64>() / n;
    let sd = (rates.iter().map(|r| (r.rate_hz - mean).powi(2)).sum::<f64>() / (n - 1.0)).sqrt();
    let typical = (rates.iter().map(|r| r.rate_se_hz.powi(2)).sum::<f64>() / n).sqrt();
    println!("mean {mean:.3} of {rate:.3}, SD {sd:.3}, standard errors {typical:.3}");
    assert!((mean - rate).abs() < 0.03 * rate, "{mean}");
    assert!(
        (typical / sd - 1.0).abs() < 0.1,
        "SD {sd}, standard errors {typical}"
    );
}
