//! Trains of leaky integrate-and-fire cells through the program's reading, steps and rates.
//!
//! Without noise the rate is f = 1/(t_ref + tau ln((R I + E_L - V_r)/(R I + E_L - V_th))) (Stein 1967; Dayan & Abbott
//! 2001, chapter 5). With white noise, tau dV = (mu - V) dt + sigma sqrt(tau) dW, rate and CV are integrals (Siegert
//! 1951; Ricciardi 1977; Brunel 2000); their values below were computed with mpmath, rates by two forms that agree to
//! 1e-18.

use halfrise::rates::{RateFrom, Response, StepRate, cell_interval_cv, cv, interval_rate, step_rates};
use halfrise::recording::{ReadOptions, read};
use halfrise::settings::Analysis;
use halfrise::steps::meet;
use rand::{RngExt, SeedableRng};
use rand_chacha::ChaCha8Rng;
use rand_distr::{Distribution, StandardNormal};

use super::support::assert_close;

/// Writes a recording set of one cell, a sweep of one step a row, and takes it through the program: the rates of
/// every response, step by step. `drive_column` names the drive with its unit; spikes and steps are in ms.
fn through_the_program(
    drive_column: &str,
    drives: &[f64],
    duration_ms: f64,
    spikes_ms: &[Vec<f64>],
) -> (Vec<f64>, [Vec<StepRate>; 3]) {
    let folder = tempfile::tempdir().unwrap();
    let mut protocol = format!("cell,sweep,onset_ms,offset_ms,{drive_column}\n");
    let mut spikes = "cell,sweep,time_ms\n".to_owned();
    for (sweep, (drive, times)) in drives.iter().zip(spikes_ms).enumerate() {
        protocol += &format!("lif,{sweep},100,{},{drive}\n", 100.0 + duration_ms);
        for t in times {
            spikes += &format!("lif,{sweep},{}\n", 100.0 + t);
        }
    }
    std::fs::write(folder.path().join("protocol.csv"), protocol).unwrap();
    std::fs::write(folder.path().join("spikes.csv"), spikes).unwrap();
    let set = read(folder.path(), &ReadOptions::default()).unwrap();
    assert!(set.refused.is_empty(), "{:?}", set.refused);
    assert_eq!(set.cells.len(), 1);
    let cell = &set.cells[0];
    let met = meet(cell);
    assert_eq!(met.outside, 0);
    let interval_cv = cell_interval_cv(&met.of_step);
    let steps: Vec<(f64, f64, &[f64])> =
        cell.steps.iter().zip(&met.of_step).map(|(s, spikes)| (s.onset_s, s.offset_s, *spikes)).collect();
    let settings = Analysis::default();
    let rates = [Response::Whole, Response::Steady, Response::Onset]
        .map(|response| step_rates(&steps, response, interval_cv.cv, &settings));
    (cell.steps.iter().map(|s| s.drive).collect(), rates)
}

/// Spike times of a clock-like cell that starts at reset: the first spike lacks the refractory time before it.
fn clock(rate_hz: f64, refractory_ms: f64, duration_ms: f64) -> Vec<f64> {
    if rate_hz <= 0.0 {
        return Vec::new();
    }
    let period = 1000.0 / rate_hz;
    (0..).map(|i| period - refractory_ms + f64::from(i) * period).take_while(|t| *t < duration_ms).collect()
}

fn assert_rates(formula: &[f64], rates: &[Vec<StepRate>; 3]) {
    for of_response in rates {
        assert_eq!(of_response.len(), formula.len());
        for (rate, expected) in of_response.iter().zip(formula) {
            if *expected == 0.0 {
                assert_eq!((rate.rate_hz, rate.rate_from), (0.0, RateFrom::Silent));
            } else {
                assert_eq!(rate.rate_from, RateFrom::Intervals);
                assert_close(rate.response.name(), rate.rate_hz, *expected, 1e-9);
                assert!(rate.rate_se_hz > 0.0 && rate.cv.is_none_or(|cv| cv < 1e-9));
            }
        }
    }
}

#[test]
fn current_steps_give_the_closed_form() {
    // tau 10 ms, R 10 MOhm, E_L = V_r = -65 mV, V_th = -50 mV: rheobase 1.5 nA. Rates in Hz from mpmath.
    let current_na = [1.5, 1.51, 1.6, 2.0, 3.0, 5.0, 10.0];
    let tables = [
        (
            0.0,
            [
                0.0,
                19.931_118_704_250_334,
                36.067_376_022_224_08,
                72.134_752_044_448_16,
                144.269_504_088_896_33,
                280.367_325_205_712_9,
                615.312_938_062_203_6,
            ],
        ),
        (
            2.0,
            [
                0.0,
                19.167_076_163_782_81,
                33.640_711_630_182_12,
                63.040_002_190_641_395,
                111.963_629_485_239_48,
                179.638_047_461_690_66,
                275.847_664_392_415_65,
            ],
        ),
    ];
    for (refractory_ms, table) in tables {
        let formula = current_na.map(|i| {
            let reach = 10.0 * i;
            if reach <= 15.0 { 0.0 } else { 1000.0 / (refractory_ms + 10.0 * (reach / (reach - 15.0_f64)).ln()) }
        });
        for (a, b) in formula.iter().zip(table) {
            assert!((a - b).abs() <= 1e-12 * b, "{a} {b}");
        }
        let spikes: Vec<Vec<f64>> = formula.iter().map(|f| clock(*f, refractory_ms, 1000.0)).collect();
        let (drives, rates) = through_the_program("current_nA", &current_na, 1000.0, &spikes);
        for (drive, na) in drives.iter().zip(current_na) {
            assert_close("drive in pA", *drive, 1000.0 * na, 1e-12);
        }
        assert_rates(&formula, &rates);
    }
}

#[test]
fn conductance_steps_give_the_closed_form() {
    // C 200 pF, g_L 10 nS, E_L -70, V_th -50, V_r -60, E_E 0 mV, t_ref 2 ms; effective threshold 4 nS.
    let conductance_ns = [3.9, 4.1, 5.0, 8.0, 16.0, 40.0, 100.0, 400.0, 2000.0];
    let table = [
        0.0, 20.0559364, 48.8187693, 109.5085167, 209.6764947, 335.5153201, 421.0247729, 478.0564486,
        495.4768662,
    ];
    let formula = conductance_ns.map(|g: f64| {
        let total = g + 10.0;
        let rest: f64 = -700.0 / total;
        if rest <= -50.0 { 0.0 } else { 1000.0 / (2.0 + 200.0 / total * ((rest + 60.0) / (rest + 50.0)).ln()) }
    });
    for (a, b) in formula.iter().zip(table) {
        assert!((a - b).abs() < 6e-8, "{a} {b}");
    }
    let spikes: Vec<Vec<f64>> = formula.iter().map(|f| clock(*f, 2.0, 800.0)).collect();
    let (drives, rates) = through_the_program("g_exc_nS", &conductance_ns, 800.0, &spikes);
    assert_eq!(drives, conductance_ns);
    assert_rates(&formula, &rates);
}

/// Intervals (ms) of the noisy cell: tau 20, t_ref 2 ms, threshold 20, reset 10 mV. The membrane is stepped exactly
/// (Ornstein-Uhlenbeck); crossings between two values below threshold have the probability of a Brownian bridge, and
/// fall anywhere within their step.
fn noisy_intervals(mu: f64, sigma: f64, count: usize, step: f64, random: &mut ChaCha8Rng) -> Vec<f64> {
    let (tau, refractory, threshold, reset) = (20.0, 2.0, 20.0, 10.0);
    let decay = (-step / tau as f64).exp();
    let kick = sigma * (0.5 * (1.0 - decay * decay)).sqrt();
    let bridge = -2.0 / (sigma * sigma * step / tau);
    let mut intervals = Vec::with_capacity(count);
    while intervals.len() < count {
        let (mut v, mut steps) = (reset, 0_u64);
        let part = loop {
            let x: f64 = StandardNormal.sample(random);
            let next = mu + (v - mu) * decay + kick * x;
            let crossed = next >= threshold || {
                let exponent = bridge * (threshold - v) * (threshold - next);
                exponent > -40.0 && random.random::<f64>() < exponent.exp()
            };
            if crossed {
                break random.random::<f64>();
            }
            v = next;
            steps += 1;
        };
        intervals.push(refractory + (steps as f64 + part) * step);
    }
    intervals
}

#[test]
fn noisy_cells_fire_at_the_rate_of_siegert() {
    // mu, sigma (mV); rate (Hz); CV.
    let table = [
        (15.0, 5.0, 9.460_799_805_759_127, 0.814_757_211_659_449_6),
        (20.0, 5.0, 27.340_567_353_077_265, 0.582_635_839_932_714_5),
        (25.0, 5.0, 47.217_443_304_138_136, 0.436_354_414_380_231_4),
        (25.0, 2.0, 42.849_613_799_210_15, 0.208_308_510_653_129_9),
    ];
    let mut random = ChaCha8Rng::seed_from_u64(20);
    for (mu, sigma, rate, expected_cv) in table {
        const COUNT: usize = 20_000;
        let intervals = noisy_intervals(mu, sigma, COUNT, 0.05, &mut random);
        let mut spikes = vec![0.0];
        for x in &intervals {
            spikes.push(spikes[spikes.len() - 1] + x / 1000.0);
        }
        // A renewal process: the mean interval has relative error CV/sqrt(n). The error of the CV is taken from
        // blocks of the train.
        let found = interval_rate(&spikes).unwrap();
        let error = rate * expected_cv / (COUNT as f64).sqrt();
        let blocks: Vec<f64> = intervals.chunks(COUNT / 100).map(|b| cv(b).unwrap()).collect();
        let mean = blocks.iter().sum::<f64>() / 100.0;
        let cv_error = (blocks.iter().map(|b| (b - mean).powi(2)).sum::<f64>() / 99.0 / 100.0).sqrt();
        let found_cv = cv(&intervals).unwrap();
        println!(
            "mu {mu}, sigma {sigma}: rate {found:.4} ({:.2} SE), CV {found_cv:.4} ({:.2} SE)",
            (found - rate) / error,
            (found_cv - expected_cv) / cv_error
        );
        assert!((found - rate).abs() < 3.0 * error, "mu {mu}, sigma {sigma}: {found} against {rate} +- {error}");
        assert!((found_cv - expected_cv).abs() < 3.0 * cv_error, "mu {mu}: {found_cv} against {expected_cv}");
    }
}
