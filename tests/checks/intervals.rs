//! Interval statistics: a series small enough to check by hand, closed forms for gamma renewal processes, and long
//! simulated trains against them.
//!
//! With b = x_1/(x_1 + x_2), Beta(k, k), and the sum independent of it, a gamma process of shape k and mean m has
//! CV = 1/sqrt(k), E CV2 = 4^(1-k)/(k B(k, k)), E LV = 3/(2k+1), E LvR = E LV (1 + 4 R k/(m (2k-1))): one for a
//! Poisson process (Holt et al. 1996; Shinomoto, Shima & Tanji 2003; Shinomoto et al. 2009).

use halfrise::rates::{cell_interval_cv, cv, cv2, detrended_cv, interval_rate, lv, lvr};
use rand::SeedableRng;
use rand_chacha::ChaCha8Rng;
use rand_distr::{Distribution, Gamma};

use super::support::assert_close;

const REFRACTORY_S: f64 = 0.005;
const MEAN_S: f64 = 0.02;

#[test]
fn eight_intervals_by_hand() {
    let x = [12.0, 15.0, 11.0, 20.0, 18.0, 25.0, 22.0, 30.0].map(|ms| ms / 1000.0);
    assert_close("CV", cv(&x).unwrap(), 0.340_515_079_903_09, 1e-12);
    assert_close("CV2", cv2(&x).unwrap(), 0.282_393_732_372_688_5, 1e-12);
    assert_close("LV", lv(&x).unwrap(), 0.075_992_268_874_920_39, 1e-12);
    assert_close("LvR", lvr(&x, REFRACTORY_S).unwrap(), 0.121_571_428_254_610_69, 1e-12);
    let mut t = vec![0.4];
    for x in x {
        t.push(t[t.len() - 1] + x);
    }
    assert_close("rate", interval_rate(&t).unwrap(), 52.287_581_699_346_404, 1e-12);
}

/// Shape; expected CV, CV2, LV and LvR at a mean of 20 ms and R = 5 ms.
const GAMMA: [(f64, [f64; 4]); 5] = [
    (1.0, [1.0, 1.0, 1.0, 2.0]),
    (2.0, [0.707_106_781_186_547_6, 0.75, 0.6, 1.0]),
    (2.5, [0.632_455_532_033_675_9, 0.679_061_090_525_420_1, 0.5, 0.8125]),
    (4.0, [0.5, 0.546_875, 0.333_333_333_333_333_3, 0.523_809_523_809_523_8]),
    (9.0, [0.333_333_333_333_333_3, 0.370_941_162_109_375, 0.157_894_736_842_105_25, 0.241_486_068_111_455_1]),
];

fn train(shape: f64, count: usize, random: &mut ChaCha8Rng) -> Vec<f64> {
    let gamma = Gamma::new(shape, MEAN_S / shape).unwrap();
    (0..count).map(|_| gamma.sample(random)).collect()
}

fn within(what: &str, shape: f64, value: f64, expected: f64, standard_error: f64) {
    let distance = (value - expected).abs() / standard_error;
    println!("shape {shape}: {what} {value:.6} expected {expected:.6}, {distance:.2} standard errors");
    assert!(distance < 3.0, "shape {shape}: {what} {value} expected {expected} +- {standard_error}");
}

#[test]
fn independent_pairs_of_gamma_intervals() {
    // One term a pair, pairs independent: the variance of the mean is that of one term, known in closed form.
    const PAIRS: usize = 200_000;
    let mut random = ChaCha8Rng::seed_from_u64(1);
    for (k, [_, cv2_expected, lv_expected, lvr_expected]) in GAMMA {
        let (mut sums, n) = ([0.0; 3], PAIRS as f64);
        for pair in train(k, 2 * PAIRS, &mut random).chunks(2) {
            sums[0] += cv2(pair).unwrap();
            sums[1] += lv(pair).unwrap();
            sums[2] += lvr(pair, REFRACTORY_S).unwrap();
        }
        // Moments of (2b - 1)^2: 1/(2k+1) and 3/((2k+1)(2k+3)).
        let (second, fourth) = (1.0 / (2.0 * k + 1.0), 3.0 / ((2.0 * k + 1.0) * (2.0 * k + 3.0)));
        let cv2_variance = 4.0 * second - cv2_expected * cv2_expected;
        let lv_variance = 9.0 * (fourth - second * second);
        within("CV2", k, sums[0] / n, cv2_expected, (cv2_variance / n).sqrt());
        within("LV", k, sums[1] / n, lv_expected, (lv_variance / n).sqrt());
        // 1/sum has a variance only for k > 1.
        if k > 1.0 {
            let (r, rate) = (4.0 * REFRACTORY_S, k / MEAN_S);
            let first = rate / (2.0 * k - 1.0);
            let squared = rate * rate / ((2.0 * k - 1.0) * (2.0 * k - 2.0));
            let lvr_square = 9.0 * fourth * (1.0 + 2.0 * r * first + r * r * squared);
            let lvr_variance = lvr_square - lvr_expected * lvr_expected;
            within("LvR", k, sums[2] / n, lvr_expected, (lvr_variance / n).sqrt());
        }
    }
}

#[test]
fn long_trains_of_gamma_intervals() {
    // Neighbouring terms share an interval, so the error of a mean is taken from 200 blocks of the train.
    const BLOCKS: usize = 200;
    const BLOCK: usize = 2000;
    let mut random = ChaCha8Rng::seed_from_u64(2);
    for (k, expected) in GAMMA {
        let x = train(k, BLOCKS * BLOCK, &mut random);
        let whole = [cv(&x), cv2(&x), lv(&x), lvr(&x, REFRACTORY_S)].map(Option::unwrap);
        let mut spread = [[0.0; 2]; 4];
        for block in x.chunks(BLOCK) {
            let values = [cv(block), cv2(block), lv(block), lvr(block, REFRACTORY_S)].map(Option::unwrap);
            for (sums, value) in spread.iter_mut().zip(values) {
                sums[0] += value;
                sums[1] += value * value;
            }
        }
        for (i, what) in ["CV", "CV2", "LV", "LvR"].into_iter().enumerate() {
            // The LvR of a Poisson process has no variance.
            if what == "LvR" && k <= 1.0 {
                continue;
            }
            let n = BLOCKS as f64;
            let mean = spread[i][0] / n;
            let variance = (spread[i][1] - n * mean * mean) / (n - 1.0);
            within(what, k, whole[i], expected[i], (variance / n).sqrt());
        }
        // The delta method for the CV of a gamma sample: its relative variance is (k+1)/(2 k n).
        let standard_error = ((k + 1.0) / (2.0 * k * x.len() as f64)).sqrt();
        within("CV, known error", k, whole[0], expected[0], expected[0] * standard_error);
        within("detrended CV", k, detrended_cv(&x).unwrap(), expected[0], expected[0] * standard_error);
    }
}

#[test]
fn a_dead_time_shows_as_the_closed_form_says() {
    // Poisson with a dead time of 5 ms and a mean of 20 ms; expectations by quadrature (mpmath).
    let mut random = ChaCha8Rng::seed_from_u64(3);
    let gamma = Gamma::new(1.0, 0.015).unwrap();
    let x: Vec<f64> = (0..400_000).map(|_| 0.005 + gamma.sample(&mut random)).collect();
    let n = x.len() as f64;
    // A single term of each lies between 0 and 2 or 3; their SDs are below 0.5, 0.7 and 0.9, and sharing an interval
    // with both neighbours at most triples the variance.
    let error = |deviation: f64| deviation * (3.0 / n).sqrt();
    within("CV", 1.0, cv(&x).unwrap(), 0.75, 0.75 / n.sqrt());
    within("CV2", 1.0, cv2(&x).unwrap(), 0.678_219_892_473_467, error(0.5));
    within("LV", 1.0, lv(&x).unwrap(), 0.486_806_272_402_712_4, error(0.7));
    within("LvR", 1.0, lvr(&x, REFRACTORY_S).unwrap(), 0.736_509_617_679_834_7, error(0.9));
}

#[test]
fn moments_of_the_interval_rate() {
    // Ten gamma intervals of shape 4 at 50 Hz: mean nu a/(a-1), variance nu^2 a^2/((a-1)^2 (a-2)) with a = 40.
    const SERIES: usize = 100_000;
    let mut random = ChaCha8Rng::seed_from_u64(4);
    let (mut sum, mut squares) = (0.0, 0.0);
    for x in train(4.0, 10 * SERIES, &mut random).chunks(10) {
        let mut t = vec![1.5];
        for x in x {
            t.push(t[t.len() - 1] + x);
        }
        let rate = interval_rate(&t).unwrap();
        sum += rate;
        squares += rate * rate;
    }
    let n = SERIES as f64;
    let (mean, deviation) = (51.282_051_282_051_285, 8.319_047_237_475_003);
    within("interval rate", 4.0, sum / n, mean, deviation / n.sqrt());
    let found = ((squares - sum * sum / n) / (n - 1.0)).sqrt();
    // SD of a sample SD of nearly normal values, with room for the skew.
    within("its SD", 4.0, found, deviation, 1.3 * deviation / (2.0 * n).sqrt());
}

#[test]
fn the_cell_cv_is_centred_on_the_truth() {
    // Steps of 6 to 60 intervals: each step's detrended CV lies low as often as high once corrected.
    let mut random = ChaCha8Rng::seed_from_u64(5);
    for (k, [expected, ..]) in GAMMA.into_iter().filter(|(k, _)| *k >= 4.0) {
        for intervals in [6, 12, 60] {
            let steps: Vec<Vec<f64>> = (0..4001)
                .map(|_| {
                    let mut t = vec![0.0];
                    for x in train(k, intervals, &mut random) {
                        t.push(t[t.len() - 1] + x);
                    }
                    t
                })
                .collect();
            let slices: Vec<&[f64]> = steps.iter().map(Vec::as_slice).collect();
            let found = cell_interval_cv(&slices);
            println!("shape {k}, {intervals} intervals: cell CV {:.4} against {expected:.4}", found.cv);
            assert!(found.enough && found.steps == 4001);
            // Gamma intervals are not normal; the median is right to a few per cent all the same.
            assert!((found.cv / expected - 1.0).abs() < 0.06, "{} {expected}", found.cv);
        }
    }
}
