//! The smoothed hyperbola against 591 points computed at 30 digits (`fixtures/smoothed_hyperbola`), its limits, and
//! gradients in physical units.

#![allow(clippy::excessive_precision)]
use halfrise::curve::hyperbola::hyperbola;
use halfrise::curve::smoothed_hyperbola::{Kernel, Pass, Slope, Smoothed, evaluate, vectorised};
use halfrise::curve::smoothed_ramp::ramp;
use halfrise::fit::objective::{self, Chart};

use super::support::{assert_close, csv};

/// Digits demanded of the referee and of the fast evaluation.
const REFEREE: f64 = 1e-13;
const FAST: f64 = 1e-11;
/// The same of its part `excess`, the second moment, in which the cut of the tail weighs more.
const FAST_EXCESS: f64 = 1e-11;
/// The ramp.
/// w = -3.6.
const RAMP: f64 = 1e-12;

struct Reference {
    z: f64,
    s: f64,
    h: f64,
    dh_dz: f64,
    dh_ds: f64,
    d2h_dz2: f64,
    bend: f64,
    excess: f64,
}

/// Difference of two positive decimals of 30 digits, as written, to all the digits that it has.
fn difference(a: &str, b: &str) -> f64 {
    let parse = |text: &str| -> (i128, i32) {
        let (mantissa, exponent) = text.split_once('e').unwrap();
        let (whole, fraction) = mantissa.split_once('.').unwrap();
        let exponent: i32 = exponent.parse().unwrap();
        (
            format!("{whole}{fraction}").parse().unwrap(),
            exponent - fraction.len() as i32,
        )
    };
    let ((a, a_exponent), (b, b_exponent)) = (parse(a), parse(b));
    // a >= b; the smaller number loses the digits that the larger one does not have.
    let shift = u32::try_from(a_exponent - b_exponent).unwrap();
    let b = if shift < 38 { b / 10_i128.pow(shift) } else { 0 };
    format!("{}e{a_exponent}", a - b).parse().unwrap()
}

fn reference() -> Vec<Reference> {
    let (header, rows) = csv("smoothed_hyperbola/smoothed_hyperbola.csv");
    assert_eq!(header, ["z", "s", "h", "dh_dz", "dh_ds", "d2h_dz2"]);
    let (hessian_header, hessian) = csv("smoothed_hyperbola/smoothed_hyperbola_hessian.csv");
    assert_eq!(hessian_header[..5], ["z", "s", "d2h_dzds", "d2h_ds2", "E_u_g1"]);
    assert_eq!((rows.len(), hessian.len()), (591, 591));
    let number = |text: &str| -> f64 { text.parse().unwrap() };
    rows.iter()
        .zip(&hessian)
        .map(|(row, more)| {
            assert_eq!(row[..2], more[..2]);
            Reference {
                z: number(&row[0]),
                s: number(&row[1]),
                h: number(&row[2]),
                dh_dz: number(&row[3]),
                dh_ds: number(&row[4]),
                d2h_dz2: number(&row[5]),
                bend: number(&more[4]),
                excess: difference(&row[2], &more[4]),
            }
        })
        .collect()
}

/// Density of N(z, s^2) at zero.
fn density_at_zero(z: f64, s: f64) -> f64 {
    (-0.5 * (z / s).powi(2)).exp() / (s * (2.0 * std::f64::consts::PI).sqrt())
}

/// Worst relative error of one quantity over the table.
#[derive(Default)]
struct Worst {
    error: f64,
    place: (f64, f64),
    rows: usize,
    failed: Vec<(f64, f64, f64)>,
}

impl Worst {
    fn add(&mut self, at: &Reference, value: f64, expected: f64, scale: f64, limit: f64) {
        let error = (value - expected).abs() / scale;
        self.rows += 1;
        // A NaN is worse than anything.
        if !(error <= self.error) {
            self.error = error;
            self.place = (at.z, at.s);
        }
        if !(error <= limit) {
            self.failed.push((at.z, at.s, error));
        }
    }

    #[track_caller]
    fn check(&self, what: &str, least_rows: usize) {
        let Self {
            error,
            place: (z, s),
            rows,
            failed,
        } = self;
        println!("{what}: worst {error:.2e} at z {z} s {s}, {rows} rows");
        assert!(*rows >= least_rows, "{what}: only {rows} rows compared");
        assert!(failed.is_empty(), "{what}: (z, s, error) {failed:?}");
    }
}

#[test]
fn the_referee_agrees_with_30_digits() {
    let mut worst: [Worst; 6] = Default::default();
    for at in &reference() {
        if !(at.h > 1e-300 && (at.z / at.s > -37.0)) {
            continue;
        }
        let Smoothed {
            h,
            dh_dz,
            dh_ds,
            d2h_dz2,
            bend,
            excess,
        } = evaluate(at.z, at.s);
        worst[0].add(at, h, at.h, at.h, REFEREE);
        worst[1].add(at, dh_dz, at.dh_dz, at.dh_dz, REFEREE);
        worst[2].add(at, bend, at.bend, at.bend, REFEREE);
        worst[3].add(at, excess, at.excess, at.excess, REFEREE);
        // The second derivative changes sign: relative to the density it is a difference of.
        let scale = at.d2h_dz2.abs().max(1e-3 * density_at_zero(at.z, at.s));
        worst[4].add(at, d2h_dz2, at.d2h_dz2, scale, 1e-12);
        worst[5].add(at, dh_ds, at.dh_ds, at.s * scale, 1e-12);
    }
    let names = ["h", "dh/dz", "bend", "excess", "d2h/dz2", "dh/ds"];
    for (worst, name) in worst.iter().zip(names) {
        worst.check(&format!("referee {name}"), 591);
    }
}

#[test]
fn the_derivative_by_the_noise_keeps_its_digits_where_it_does_not_vanish() {
    let mut worst = Worst::default();
    for at in &reference() {
        // Away from its sign change.
        if at.h > 1e-300 && at.d2h_dz2.abs() > 0.05 * density_at_zero(at.z, at.s) {
            worst.add(at, evaluate(at.z, at.s).dh_ds, at.dh_ds, at.dh_ds.abs(), REFEREE);
        }
    }
    worst.check("referee dh/ds", 400);
}

/// The fast evaluation as the fit runs it.
struct At<'a> {
    kernel: Kernel,
    z: &'a [f64],
    into: &'a mut [Slope],
}

impl Pass for At<'_> {
    type Output = ();

    #[inline(always)]
    fn run(self) {
        for (z, into) in self.z.iter().zip(self.into) {
            *into = self.kernel.at(*z);
        }
    }
}

fn fast(z: f64, s: f64) -> Slope {
    let mut slope = [Slope::default()];
    vectorised(At {
        kernel: Kernel::new(s),
        z: &[z],
        into: &mut slope,
    });
    slope[0]
}

#[test]
fn the_fast_evaluation_agrees_with_30_digits() {
    let mut worst: [Worst; 5] = Default::default();
    for at in &reference() {
        if !(at.h > 1e-300 && at.z / at.s > -37.0) {
            continue;
        }
        let Slope {
            h,
            dh_dz,
            bend,
            excess,
            dh_dlns,
        } = fast(at.z, at.s);
        worst[0].add(at, h, at.h, at.h, FAST);
        worst[1].add(at, dh_dz, at.dh_dz, at.dh_dz, FAST);
        worst[2].add(at, bend, at.bend, at.bend, FAST);
        worst[3].add(at, excess, at.excess, at.excess, FAST_EXCESS);
        // A difference of two terms, as good as the larger of them.
        let scale = at.bend.max((at.z * at.dh_dz).abs());
        worst[4].add(at, dh_dlns, at.s * at.dh_ds, scale, FAST);
    }
    let names = ["h", "dh/dz", "bend", "excess", "dh/dln s"];
    // All of them are printed before the first failure ends the test.
    for (worst, name) in worst.iter().zip(names) {
        println!("{name}: {:.2e} at {:?}", worst.error, worst.place);
    }
    for (worst, name) in worst.iter().zip(names) {
        worst.check(&format!("fast {name}"), 591);
    }
}

#[test]
fn the_fast_evaluation_agrees_with_the_referee_between_the_points() {
    // A lattice that shares no point with the table and crosses every switch between rules.
    let z: Vec<f64> = (0..4000)
        .map(|i| -12.0 + 0.0037 * f64::from(i) * (1.0 + 0.003 * f64::from(i)))
        .collect();
    let mut slopes = vec![Slope::default(); z.len()];
    let (mut worst, mut place, mut compared) = (0.0_f64, (0.0, 0.0), 0);
    for i in 0..57 {
        let s = 1e-4 * 10_f64.powf(0.1 * f64::from(i) + 0.013);
        vectorised(At {
            kernel: Kernel::new(s),
            z: &z,
            into: &mut slopes,
        });
        for (z, fast) in z.iter().zip(&slopes) {
            let full = evaluate(*z, s);
            if !(full.h > 1e-300 && z / s > -37.0) {
                continue;
            }
            compared += 1;
            for (a, b, limit) in [
                (fast.h, full.h, FAST),
                (fast.dh_dz, full.dh_dz, FAST),
                (fast.bend, full.bend, FAST),
                (fast.excess, full.excess, FAST_EXCESS),
            ] {
                // As a part of what is allowed.
                let error = ((a - b) / b).abs() / limit;
                if !(error <= worst) {
                    worst = error;
                    place = (*z, s);
                }
            }
        }
    }
    println!("fast against referee: worst {worst:.2} of what is allowed at {place:?}, {compared} points");
    assert!(compared > 150_000);
    assert!(worst <= 1.0, "{worst} times what is allowed at {place:?}");
}

#[test]
fn without_noise_it_is_the_hyperbola() {
    let of_hyperbola = |z: f64| hyperbola(z, &[0.0, 0.0, 0.0]);
    for z in [1e-3, 0.1, 0.75, 3.0, 50.0, 1e4] {
        let noise_free = evaluate(z, 0.0);
        let plain = of_hyperbola(z);
        assert_close("h", noise_free.h, plain.rate, 1e-15);
        assert_close("dh/dz", noise_free.dh_dz, -plain.derivatives[2], 1e-15);
        assert_close("bend", noise_free.bend, -plain.derivatives[1], 1e-15);
        // Value and derivatives arrive there continuously, the differences falling with s^2.
        for part in [1e-3, 1e-5, 1e-7] {
            let s = part * z;
            let near = evaluate(z, s);
            let kernel = fast(z, s);
            let allowed = 10.0 * part * part + 1e-14;
            for (what, value, quick, limit) in [
                ("h", near.h, kernel.h, noise_free.h),
                ("dh/dz", near.dh_dz, kernel.dh_dz, noise_free.dh_dz),
                ("bend", near.bend, kernel.bend, noise_free.bend),
                ("excess", near.excess, kernel.excess, noise_free.excess),
            ] {
                assert_close(what, value, limit, allowed);
                assert_close(what, quick, limit, allowed + FAST);
            }
            assert_close("d2h/dz2", near.d2h_dz2, noise_free.d2h_dz2, allowed);
            assert!(near.dh_ds.abs() <= 2.1 * s);
        }
    }
    for z in [-1e-3, -1.0, -100.0] {
        assert_eq!(evaluate(z, 0.0), Smoothed::default());
        assert_eq!(evaluate(z, -z * 1e-3), Smoothed::default());
        assert_eq!(of_hyperbola(z).rate, 0.0);
    }
    // The second order, h = z/(1+z) - s^2/(1+z)^3 + ..., figure computed in mpmath.
    let second = 0.75 / 1.75 - 0.007_812_5_f64.powi(2) / 1.75_f64.powi(3);
    assert_close(
        "s = 2^-7",
        evaluate(0.75, 0.0078125).h,
        0.428_560_039_406_483_47,
        1e-14,
    );
    assert_close("s = 2^-7, two terms", evaluate(0.75, 0.0078125).h, second, 1e-8);
    // At the kink the noise counts in the first order.
    for s in [1e-4, 1e-6, 1e-8] {
        let first = s / (2.0 * std::f64::consts::PI).sqrt();
        assert_close("kink", evaluate(0.0, s).h, first, 2.0 * s);
        assert_close("kink", fast(0.0, s).h, first, 2.0 * s + FAST);
    }
}

/// Rate and derivatives by (ln gain, 1/max rate, threshold, ln noise SD), as the fit evaluates them.
fn by_the_fit(max_rate: f64, threshold: f64, half_rise: f64, noise_sd: f64, drive: f64) -> (f64, [f64; 4]) {
    let parameters = [half_rise / max_rate, 1.0 / max_rate, threshold, noise_sd.ln()];
    let mut found = (f64::NAN, [f64::NAN; 4]);
    objective::evaluate(Chart::Ceiling, &parameters, &[drive], |_, rate, d| {
        found = (rate, *d)
    });
    found
}

#[test]
fn without_a_ceiling_it_is_the_smoothed_ramp() {
    // a = max rate/half-rise = 2, drive 130, threshold 100, noise 40; figures computed in mpmath.
    let limit = ramp(30.0, 40.0);
    assert_close("ramp", 2.0 * limit.value, 70.493_353_429_772_26, RAMP);
    for (half_rise, expected) in [
        (1e2, 44.135_679_256_066_01),
        (1e3, 66.237_086_739_015_66),
        (1e4, 70.037_994_187_122_22),
        (1e5, 70.447_493_792_776_76),
        (1e6, 70.488_764_199_930_57),
    ] {
        let max_rate = 2.0 * half_rise;
        let curve = evaluate(30.0 / half_rise, 40.0 / half_rise);
        assert_close("curve", max_rate * curve.h, expected, 1e-13);
        assert_close(
            "fast",
            max_rate * fast(30.0 / half_rise, 40.0 / half_rise).h,
            expected,
            FAST,
        );
        assert_close(
            "fit",
            by_the_fit(max_rate, 100.0, half_rise, 40.0, 130.0).0,
            expected,
            FAST,
        );
        // The next term is -(a/half-rise) E[x^2]; what is left falls with the square of the half-rise.
        let two_terms: f64 = 2.0 * (limit.value - limit.square / half_rise);
        assert!((expected - two_terms).abs() < 6e5 / (half_rise * half_rise) + 100.0 * RAMP);
        assert!((curve.dh_dz - limit.above).abs() < 80.0 / half_rise);
    }
    // At 1/max rate = 0 the fit takes the ramp itself, and its gradient continues that of the curve.
    let parameters = [0.5, 0.0, 100.0, 40.0_f64.ln()];
    let mut at_limit = [0.0; 4];
    objective::evaluate(Chart::Ceiling, &parameters, &[130.0], |_, rate, d| {
        assert_close("limit", rate, 2.0 * limit.value, 1e-13);
        at_limit = *d;
    });
    let (_, close) = by_the_fit(2e9, 100.0, 1e9, 40.0, 130.0);
    for (value, limit) in close.into_iter().zip(at_limit) {
        assert_close("gradient at the limit", value, limit, 1e-6);
    }
}

#[test]
fn far_above_the_threshold_it_is_the_max_rate() {
    for s in [1e-4, 0.1, 1.0, 20.0] {
        for z in [1e3, 1e6, 1e9, 1e12] {
            let at = evaluate(z, s);
            // 1 - h = E[1/(1+u)], which for z far above s is 1/(1+z).
            let missing = 1.0 / (1.0 + z);
            assert!(at.h < 1.0 && (1.0 - at.h - missing).abs() < 2.0 * (s / z).powi(2) * missing + 4e-16);
            assert!((fast(z, s).h - at.h).abs() < 1e-14);
            assert!(at.bend < 1.01 / z && at.dh_dz < 1.01 / (z * z));
        }
    }
    assert_close(
        "rate",
        by_the_fit(120.0, 150.0, 300.0, 25.0, 3e15).0,
        120.0,
        1e-12,
    );
}

#[test]
fn with_much_noise_it_is_a_step_seen_through_noise() {
    // At z = 0, computed in mpmath.
    for (s, expected) in [
        (50.0, 0.468_131_231_573_787_5),
        (500.0, 0.494_993_220_973_721),
        (5000.0, 0.499_315_781_321_278_8),
        (50000.0, 0.499_913_207_959_741_5),
    ] {
        assert_close("h", evaluate(0.0, s).h, expected, REFEREE);
    }
    // Where the promise of the fast evaluation ends, and a looser one beyond.
    assert_close("fast", fast(0.0, 50.0).h, 0.468_131_231_573_787_5, FAST);
    assert_close("fast", fast(0.0, 500.0).h, 0.494_993_220_973_721, 1e-8);
}

#[test]
fn gradients_in_physical_units() {
    // (max rate Hz, threshold, half-rise, noise SD in pA), drive, rate, derivatives by the four; mpmath.
    for (p, drive, rate, gradient) in [
        (
            [120.0, 150.0, 300.0, 25.0],
            160.0,
            5.644_441_123_216_943,
            [
                0.047_037_009_360_141_19,
                -0.226_463_620_232_170_68,
                -0.016_890_272_667_902_51,
                0.112_097_823_921_961_81,
            ],
        ),
        (
            [120.0, 150.0, 300.0, 25.0],
            100.0,
            0.080_444_475_871_388_13,
            [
                6.703_706_322_615_677e-4,
                -0.008_577_582_212_227_01,
                -2.543_223_141_400_448_4e-4,
                0.020_207_032_194_134_56,
            ],
        ),
        (
            [120.0, 150.0, 300.0, 25.0],
            150.0,
            3.620_774_271_774_519,
            [
                0.030_173_118_931_454_326,
                -0.176_951_295_475_107_7,
                -0.010_979_456_952_310_554,
                0.131_753_483_427_726_66,
            ],
        ),
        (
            [120.0, 150.0, 300.0, 25.0],
            600.0,
            71.946_487_893_475_04,
            [
                0.599_554_065_778_958_6,
                -0.064_214_527_829_949_8,
                -0.095_963_845_858_466_73,
                -0.004_295_350_637_495_443,
            ],
        ),
        (
            [80.0, 100.0, 60.0, 90.0],
            250.0,
            51.573_648_987_580_69,
            [
                0.644_670_612_344_758_6,
                -0.162_010_479_585_440_68,
                -0.248_041_567_591_128_25,
                -0.104_656_420_914_982_31,
            ],
        ),
    ] {
        let [max_rate, threshold, half_rise, noise_sd] = p;
        let (found, [by_inverse_gain, by_ceiling, by_threshold, by_ln_noise]) =
            by_the_fit(max_rate, threshold, half_rise, noise_sd, drive);
        assert_close("rate", found, rate, FAST);
        // From the fit's chart, K/R and 1/R, back to R and K.
        let by_max_rate = -(by_inverse_gain * half_rise + by_ceiling) / (max_rate * max_rate);
        assert_close("by max rate", by_max_rate, gradient[0], 1e-10);
        assert_close("by threshold", by_threshold, gradient[1], FAST);
        assert_close("by half-rise", by_inverse_gain / max_rate, gradient[2], FAST);
        // A difference of bend and z dh/dz; the latter is up to 15 times as large here.
        assert_close("by noise SD", by_ln_noise / noise_sd, gradient[3], 20.0 * FAST);
        let full = evaluate((drive - threshold) / half_rise, noise_sd / half_rise);
        assert_close("referee", max_rate * full.h, rate, 1e-14);
        assert_close(
            "referee by threshold",
            -max_rate / half_rise * full.dh_dz,
            gradient[1],
            1e-14,
        );
        assert_close(
            "referee by half-rise",
            -max_rate / half_rise * full.bend,
            gradient[2],
            1e-14,
        );
        assert_close(
            "referee by noise SD",
            max_rate / half_rise * full.dh_ds,
            gradient[3],
            1e-13,
        );
    }
}

/// Standard normal distribution function, w > -3, by the all-positive series of erf (Abramowitz & Stegun 7.1.6).
fn normal_below(w: f64) -> f64 {
    if w > 9.0 {
        return 1.0;
    }
    let x = w.abs() * std::f64::consts::FRAC_1_SQRT_2;
    let (mut term, mut sum) = (x, x);
    let mut odd = 1.0;
    while term > 1e-18 * sum {
        odd += 2.0;
        term *= 2.0 * x * x / odd;
        sum += term;
    }
    let erf = 2.0 / std::f64::consts::PI.sqrt() * (-x * x).exp() * sum;
    0.5 * (1.0 + erf.copysign(w))
}

#[test]
fn the_ramp_is_its_definition() {
    for w in [-2.5, -1.0, -0.1, 0.0, 0.3, 1.0, 4.0, 8.0, 20.0] {
        let at = ramp(w * 30.0, 30.0);
        let above = normal_below(w);
        let spread = 30.0 * 30.0 * density_at_zero(w * 30.0, 30.0);
        let value = 30.0 * w * above + spread;
        assert_close("above", at.above, above, RAMP);
        assert_close("spread", at.spread, spread, 1e-13);
        // In the tail the two terms of the value cancel.
        assert!((at.value - value).abs() <= RAMP * (30.0 * w.abs() * above + spread));
        let square = 900.0 * ((w * w + 1.0) * above) + 30.0 * w * spread;
        assert!(
            (at.square - square).abs() <= RAMP * (900.0 * (w * w + 1.0) * above + 30.0 * w.abs() * spread)
        );
    }
}

#[test]
fn the_integrals_obey_their_recurrence() {
    // n I_(n+1) = p0 - [I_(n-1) - (1+z) I_n]/s^2, I_n = int (1+u)^-n p du, for n = 1 and 2. It keeps its digits where
    // s is not small against 1 + z, and as long as I_1 is not lost in I_0.
    let mut compared = 0;
    let mut worst = 0.0_f64;
    for at in &reference() {
        if at.s < (1.0 + at.z).abs() / 7.0 || at.z / at.s < -2.0 {
            continue;
        }
        compared += 1;
        let full = evaluate(at.z, at.s);
        let p0 = density_at_zero(at.z, at.s);
        let zeroth = normal_below(at.z / at.s);
        let first = zeroth - full.h;
        let s2 = at.s * at.s;
        let second = p0 - (zeroth - (1.0 + at.z) * first) / s2;
        let third = 0.5 * (p0 - (first - (1.0 + at.z) * full.dh_dz) / s2);
        for (what, value, expected) in [
            ("I_2", second, full.dh_dz),
            ("I_3", third, 0.5 * (p0 - full.d2h_dz2)),
        ] {
            assert_close(&format!("{what} z {} s {}", at.z, at.s), value, expected, 1e-11);
            worst = worst.max((value / expected - 1.0).abs());
        }
    }
    println!("recurrence: {compared} points, worst {worst:.1e}");
    assert!(compared > 100, "{compared}");
}
