//! The smoothed hyperbola against 591 points computed with 30 digits (mpmath, `fixtures/smoothed_hyperbola`, whose
//! README tells how), against its limits, and against its own recurrence.

use halfrise::curve::smoothed_hyperbola::{Kernel, Smoothed, evaluate};
use halfrise::curve::smoothed_ramp::ramp;
use halfrise::fit::objective::{Chart, evaluate as rates};

use super::support::{assert_close, numbers};

/// One reference point; `bend` is E[u H'(u)] = z dh/dz + s dh/ds.
struct Reference {
    z: f64,
    s: f64,
    h: f64,
    dh_dz: f64,
    dh_ds: f64,
    d2h_dz2: f64,
    bend: f64,
}

impl Reference {
    /// The density of z + s X at zero: the scale of d2h/dz2, which changes sign.
    fn density_at_zero(&self) -> f64 {
        (-0.5 * (self.z / self.s).powi(2)).exp() / (self.s * (2.0 * std::f64::consts::PI).sqrt())
    }

    /// What a second derivative may be off by, relatively to itself where it is not close to its root.
    fn curvature_scale(&self) -> f64 {
        self.d2h_dz2.abs().max(1e-3 * self.density_at_zero())
    }
}

fn references() -> Vec<Reference> {
    let values = numbers(
        "smoothed_hyperbola/smoothed_hyperbola.csv",
        ["z", "s", "h", "dh_dz", "dh_ds", "d2h_dz2"],
    );
    let second = numbers(
        "smoothed_hyperbola/smoothed_hyperbola_hessian.csv",
        [
            "z",
            "s",
            "d2h_dzds",
            "d2h_ds2",
            "E_u_g1",
            "k2_rkk_over_R",
            "k2_rthetak_over_R",
            "k2_rsigmak_over_R",
        ],
    );
    assert_eq!((values.len(), second.len()), (591, 591));
    values
        .iter()
        .zip(&second)
        .map(|([z, s, h, dh_dz, dh_ds, d2h_dz2], more)| {
            assert_eq!((*z, *s), (more[0], more[1]));
            Reference { z: *z, s: *s, h: *h, dh_dz: *dh_dz, dh_ds: *dh_ds, d2h_dz2: *d2h_dz2, bend: more[4] }
        })
        .collect()
}

/// The largest error met and where.
#[derive(Default)]
struct Worst(f64, String);

impl Worst {
    fn see(&mut self, what: &str, r: &Reference, error: f64) {
        // NaN must not pass unseen.
        if !(error <= self.0) {
            *self = Self(error, format!("{what} at z = {}, s = {}", r.z, r.s));
        }
    }
}

#[test]
fn the_full_evaluation_keeps_thirteen_digits() {
    let mut worst = Worst::default();
    let mut curvature = Worst::default();
    let mut compared = 0;
    for r in references().iter().filter(|r| r.h > 1e-300 && -r.z / r.s < 37.0) {
        let f = evaluate(r.z, r.s);
        for (what, value, expected) in [
            ("h", f.h, r.h),
            ("dh/dz", f.dh_dz, r.dh_dz),
            ("bend", f.bend, r.bend),
            ("excess", f.excess, r.h - r.bend),
        ] {
            // h - bend of the table loses digits where the two are close, and excess is then no test of anything.
            if what != "excess" || (r.h - r.bend) > 0.05 * r.h {
                worst.see(what, r, ((value - expected) / expected).abs());
            }
        }
        curvature.see("d2h/dz2", r, (f.d2h_dz2 - r.d2h_dz2).abs() / r.curvature_scale());
        curvature.see("dh/ds", r, (f.dh_ds - r.dh_ds).abs() / (r.s * r.curvature_scale()));
        compared += 1;
    }
    println!("{compared} points; {} off by {:e}; {} off by {:e}", worst.1, worst.0, curvature.1, curvature.0);
    assert!(compared > 560, "{compared}");
    assert!(worst.0 < 1e-13, "{} off by {:e}", worst.1, worst.0);
    assert!(curvature.0 < 1e-13, "{} off by {:e}", curvature.1, curvature.0);
}

#[test]
fn the_fast_evaluation_keeps_eleven_digits() {
    let mut worst = Worst::default();
    let mut compared = 0;
    for r in references().iter().filter(|r| r.h > 1e-300 && -r.z / r.s < 37.0) {
        let f = Kernel::new(r.s).at(r.z);
        for (what, value, expected) in [("h", f.h, r.h), ("dh/dz", f.dh_dz, r.dh_dz), ("bend", f.bend, r.bend)] {
            worst.see(what, r, ((value - expected) / expected).abs());
        }
        // The derivative by ln s is a difference: exact to the larger of its terms.
        let scale = (r.s * r.dh_ds).abs().max(r.bend).max((r.z * r.dh_dz).abs());
        worst.see("dh/dlns", r, (f.dh_dlns - r.s * r.dh_ds).abs() / scale);
        worst.see("excess", r, (f.excess - evaluate(r.z, r.s).excess).abs() / evaluate(r.z, r.s).excess);
        compared += 1;
    }
    println!("{compared} points; {} off by {:e}", worst.1, worst.0);
    assert!(compared > 560, "{compared}");
    assert!(worst.0 < 1e-11, "{} off by {:e}", worst.1, worst.0);
}

/// Integrals I_0 to I_3 of (1+u)^-n N(u; z, s) over u > 0, from what an evaluation gives.
fn integrals(f: &Smoothed, density_at_zero: f64) -> [f64; 4] {
    let i1 = f.bend + f.dh_dz;
    [f.h + i1, i1, f.dh_dz, 0.5 * (density_at_zero - f.d2h_dz2)]
}

#[test]
fn the_recurrence_holds_where_it_keeps_digits() {
    // n I_(n+1) = p0 - (I_(n-1) - (1+z) I_n)/s^2, by parts; in doubles it keeps 13 digits for s >= |1+z|/7.
    let mut compared = 0;
    for r in references().iter().filter(|r| r.s >= (1.0 + r.z).abs() / 7.0 && r.h > 1e-290) {
        let f = evaluate(r.z, r.s);
        let p0 = r.density_at_zero();
        let i = integrals(&f, p0);
        for n in 1..3 {
            let right = p0 - (i[n - 1] - (1.0 + r.z) * i[n]) / (r.s * r.s);
            let left = n as f64 * i[n + 1];
            assert!((left / right - 1.0).abs() < 2e-12, "I_{} at z = {}, s = {}: {left:e} {right:e}", n + 1, r.z, r.s);
        }
        compared += 1;
    }
    assert!(compared > 200, "{compared}");
    // I_0 is the probability of a positive argument: one half at z = 0, Phi(1) at z = s.
    for s in [1e-4, 0.03, 1.0, 50.0] {
        assert_close("I_0", integrals(&evaluate(0.0, s), 0.0)[0], 0.5, 1e-13);
        assert_close("I_0", integrals(&evaluate(s, s), 0.0)[0], 0.841_344_746_068_542_9, 1e-13);
    }
}

#[test]
fn without_noise_it_is_the_hyperbola() {
    // h = z/(1+z) - s^2/(1+z)^3 + O(s^4); the value at s = 2^-7 with 20 digits from mpmath.
    assert_close("h", evaluate(0.75, 0.0078125).h, 0.428_560_039_406_483_468_14, 1e-15);
    for z in [0.05, 0.75, 3.0, 40.0] {
        let plain = evaluate(z, 0.0);
        assert_close("h", plain.h, z / (1.0 + z), 1e-15);
        assert_close("dh/dz", plain.dh_dz, (1.0_f64 + z).powi(-2), 1e-15);
        for s in [1e-3, 1e-4, 1e-5, 1e-6] {
            let f = evaluate(z, s);
            let fast = Kernel::new(s).at(z);
            // Every derivative of the hyperbola is at most of order one above the kink, so the changes are of s^2.
            for (a, b) in [
                (f.h, plain.h),
                (f.dh_dz, plain.dh_dz),
                (f.bend, plain.bend),
                (f.excess, plain.excess),
                (f.d2h_dz2, plain.d2h_dz2),
                (fast.h, plain.h),
                (fast.dh_dz, plain.dh_dz),
                (fast.bend, plain.bend),
                (fast.excess, plain.excess),
            ] {
                assert!((a - b).abs() <= 13.0 * s * s + 1e-11 * b.abs(), "z = {z}, s = {s}: {a} {b}");
            }
            assert!(f.dh_ds < 0.0 && f.dh_ds > -2.0 * s * (1.0 + 10.0 * s));
        }
    }
    // Below the threshold nothing is left, value and derivatives.
    assert_eq!(evaluate(-0.3, 0.0), Smoothed::default());
    assert_eq!(evaluate(-0.3, 0.005), Smoothed::default());
    // At the threshold the value grows linearly with the noise: s/sqrt(2 pi).
    for s in [1e-4, 1e-6, 1e-8] {
        assert_close("h", evaluate(0.0, s).h, s / (2.0 * std::f64::consts::PI).sqrt(), 1.3 * s);
    }
}

#[test]
fn without_a_ceiling_it_is_the_smoothed_ramp() {
    // Gain 2 Hz/pA, threshold 100 pA, noise 40 pA at 130 pA, for growing half-rise (mpmath).
    let limit = 70.493_353_429_772_260_435;
    let [gain, drive, threshold, noise] = [2.0_f64, 130.0, 100.0, 40.0_f64];
    assert_close("ramp", gain * ramp(drive - threshold, noise).value, limit, 1e-14);
    let at = |ceiling: f64| {
        let mut value = f64::NAN;
        rates(Chart::Ceiling, &[gain.ln(), ceiling, threshold, noise.ln()], &[drive], |_, f, _| value = f);
        value
    };
    for (half_rise, expected) in [
        (1e2, 44.135_679_256_066_01),
        (1e3, 66.237_086_739_015_66),
        (1e4, 70.037_994_187_122_22),
        (1e5, 70.447_493_792_776_76),
        (1e6, 70.488_764_199_930_57),
    ] {
        let max_rate = gain * half_rise;
        let f = evaluate((drive - threshold) / half_rise, noise / half_rise);
        assert_close("rate", max_rate * f.h, expected, 1e-13);
        assert_close("rate in the fit's chart", at(1.0 / max_rate), expected, 1e-11);
    }
    assert_close("rate at a ceiling of infinity", at(0.0), limit, 1e-13);
    assert_close("rate next to it", at(1e-14), limit, 1e-9);
}

#[test]
fn at_high_drive_it_is_the_ceiling() {
    for s in [0.0, 1e-3, 0.3, 2.0] {
        for z in [1e3, 1e6, 1e9] {
            let f = evaluate(z, s);
            assert!((1.0 - f.h) * (1.0 + z) < 1.0 + 1e-4 && (1.0 - f.h) * (1.0 + z) > 1.0 - 1e-4, "{z} {s}");
            assert!(f.dh_dz > 0.0 && f.dh_dz < 2.0 / (z * z));
        }
    }
}

#[test]
fn with_much_noise_it_is_the_normal_distribution() {
    // h(0, s) for s far above one, 18 digits from mpmath; it tends to 1/2.
    assert_close("h", evaluate(0.0, 50.0).h, 0.468_131_231_573_787_506, 1e-14);
    assert_close("h", evaluate(0.0, 50_000.0).h, 0.499_913_207_959_741_474, 1e-13);
    assert_close("h", Kernel::new(50.0).at(0.0).h, 0.468_131_231_573_787_506, 1e-11);
}

#[test]
fn rate_and_gradient_in_physical_units() {
    // Seven worked examples (mpmath): drive; max rate, half-rise, threshold, noise SD; rate; its derivatives by
    // max rate, threshold, half-rise and noise SD.
    let examples = [
        (160.0, [120.0, 150.0, 300.0, 25.0], 5.644441123216943, [0.04703700936014119, -0.22646362023217068, -0.01689027266790251, 0.11209782392196181]),
        (100.0, [120.0, 150.0, 300.0, 25.0], 0.08044447587138813, [0.0006703706322615677, -0.00857758221222701, -0.00025432231414004484, 0.02020703219413456]),
        (150.0, [120.0, 150.0, 300.0, 25.0], 3.620774271774519, [0.030173118931454326, -0.1769512954751077, -0.010979456952310554, 0.13175348342772666]),
        (600.0, [120.0, 150.0, 300.0, 25.0], 71.94648789347504, [0.5995540657789586, -0.0642145278299498, -0.09596384585846673, -0.004295350637495443]),
        (250.0, [80.0, 100.0, 60.0, 90.0], 51.57364898758069, [0.6446706123447586, -0.16201047958544068, -0.24804156759112825, -0.10465642091498231]),
        (40.0, [200.0, 30.0, 2000.0, 5.0], 0.9980459960912713, [0.004990229980456356, -0.09673001893496831, -0.0004959448721681285, 0.004917910997314796]),
        (12.0, [150.0, 8.0, 20.0, 0.05], 24.99945745821337, [0.16666304972142246, -5.208401151645376, -1.041625975443956, -0.021701954047621777]),
    ];
    for (drive, [max_rate, threshold, half_rise, noise], rate, [by_max, by_threshold, by_half, by_noise]) in examples {
        let parameters =
            [(max_rate / half_rise as f64).ln(), 1.0 / max_rate, threshold, (noise as f64).ln()];
        let mut seen = 0;
        rates(Chart::Ceiling, &parameters, &[drive], |_, value, d| {
            assert_close("rate", value, rate, 1e-11);
            // By the chain rule: ln a = ln R - ln K, c = 1/R.
            assert_close("by max rate", d[0] / max_rate - d[1] / (max_rate * max_rate), by_max, 1e-10);
            assert_close("by half-rise", -d[0] / half_rise, by_half, 1e-10);
            assert_close("by threshold", d[2], by_threshold, 1e-10);
            assert_close("by noise SD", d[3] / noise, by_noise, 1e-9);
            seen += 1;
        });
        assert_eq!(seen, 1);
    }
}
