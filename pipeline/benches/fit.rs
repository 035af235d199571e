//! Times the curve, one fit and one cell: `cargo bench --bench fit`.
//!
//! Every figure is the median of several batches, single-threaded. The yardstick beside it, a plain 48-node evaluation
//! with the standard library's exponential, runs in the same process, so that ratios hold on a machine of any speed.

use std::hint::black_box;
use std::time::Instant;

use halfrise::curve::quadrature::legendre;
use halfrise::curve::smoothed_hyperbola::{Kernel, Pass, evaluate, vectorised};
use halfrise::fit::main_fit::{Scatter, fit};
use halfrise::fit::{Point, estimates};

/// Median time of one call in nanoseconds, over 9 batches of `calls`.
fn median_ns(calls: usize, mut work: impl FnMut()) -> f64 {
    let mut batches: Vec<f64> = (0..9)
        .map(|_| {
            let start = Instant::now();
            for _ in 0..calls {
                work();
            }
            start.elapsed().as_nanos() as f64 / calls as f64
        })
        .collect();
    batches.sort_by(f64::total_cmp);
    batches[4]
}

struct Many<'a> {
    s: f64,
    z: &'a [f64],
}

impl Pass for Many<'_> {
    type Output = f64;

    #[inline(always)]
    fn run(self) -> f64 {
        let kernel = Kernel::new(self.s);
        // A plain loop: a closure handed to an iterator may stay outside what is compiled for wide vectors.
        let mut sum = 0.0;
        for z in self.z {
            let f = kernel.at(*z);
            sum += f.h + f.dh_dz + f.bend + f.excess + f.dh_dlns;
        }
        sum
    }
}

/// Value and gradient by one 48-node panel and one scalar exponential a node, tabulated in u.
fn plain(z: f64, s: f64, nodes: &[f64], weights: &[f64]) -> f64 {
    let low = (z - 9.0 * s).max(0.0);
    let high = (z + 9.0 * s).max(low + s);
    let (mut h, mut slope, mut bend) = (0.0, 0.0, 0.0);
    for (x, weight) in nodes.iter().zip(weights) {
        let u = low + (high - low) * x;
        let xi = (u - z) / s;
        let mass = weight * (-0.5 * xi * xi).exp();
        let inverse = 1.0 / (1.0 + u);
        h += mass * u * inverse;
        slope += mass * inverse * inverse;
        bend += mass * u * inverse * inverse;
    }
    (h + slope + bend) * (high - low) / s
}

/// Forty levels, with scatter from a fixed sequence.
fn points() -> Vec<Point> {
    let (max, half, threshold, noise) = (90.0, 180.0, 120.0, 25.0);
    (0..40)
        .map(|i| {
            let drive = 20.0 * f64::from(i);
            let rate = max * evaluate((drive - threshold) / half, noise / half).h;
            let se = 0.3 + 0.02 * rate;
            let wobble = f64::from((i * 37) % 19) / 9.0 - 1.0;
            Point {
                drive,
                rate: (rate + 1.7 * se * wobble).max(0.0),
                se,
            }
        })
        .collect()
}

fn main() {
    let rule = legendre::<48>();
    for (name, s, from, to) in [
        ("below threshold", 0.1, -6.0, 0.0),
        ("around and above it", 0.1, 0.0, 7.0),
        ("far above, noise 0.1", 0.1, 9.0, 60.0),
        ("all levels of a cell", 0.15, -5.0, 25.0),
    ] {
        let z: Vec<f64> = (0..400)
            .map(|i| s * (from + (to - from) * f64::from(i) / 400.0))
            .collect();
        let fast = median_ns(200, || {
            black_box(vectorised(Many { s, z: black_box(&z) }));
        }) / 400.0;
        let full = median_ns(5, || {
            black_box(z.iter().map(|z| evaluate(*z, s).h).sum::<f64>());
        }) / 400.0;
        let yardstick = median_ns(50, || {
            black_box(
                z.iter()
                    .map(|z| plain(*z, s, &rule.nodes, &rule.weights))
                    .sum::<f64>(),
            );
        }) / 400.0;
        println!(
            "curve with gradient, {name}: {fast:.0} ns; referee {full:.0} ns; plain 48 nodes {yardstick:.0} ns"
        );
    }
    let points = points();
    let one_fit = median_ns(20, || {
        black_box(fit(black_box(&points), Scatter::Estimated));
    });
    println!("one fit of 40 levels: {:.0} us", one_fit / 1e3);
    let with_profiles = median_ns(20, || {
        if let Some(mut found) = fit(black_box(&points), Scatter::Estimated) {
            black_box(estimates(&points, Scatter::Estimated, &mut found, true));
        }
    });
    println!("the same with profile intervals: {:.0} us", with_profiles / 1e3);
}
