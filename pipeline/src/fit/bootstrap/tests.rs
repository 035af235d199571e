#![allow(clippy::unwrap_used, clippy::panic)]
use super::super::estimates;
use super::*;

/// Points scattered about a known curve: standard errors of 4 % and half a count, extra SD 1 Hz.
fn points(seed: u64, truth: [f64; 4], top: f64, levels: u32, repeats: u32) -> Vec<Point> {
    let mut rng = ChaCha8Rng::seed_from_u64(seed);
    let [max_rate, half_rise, threshold, noise] = truth;
    let parameters = [
        half_rise / max_rate,
        if max_rate.is_finite() { 1.0 / max_rate } else { 0.0 },
        threshold,
        noise.ln(),
    ];
    let drives: Vec<f64> = (0..levels * repeats)
        .map(|i| top * f64::from(i / repeats) / f64::from(levels - 1))
        .collect();
    let mut points = Vec::new();
    evaluate(Chart::Ceiling, &parameters, &drives, |i, rate, _| {
        let se = 0.5 + 0.04 * rate;
        let normal: f64 = StandardNormal.sample(&mut rng);
        points.push(Point {
            drive: drives[i],
            rate: rate + normal * se.hypot(1.0),
            se,
        });
    });
    points
}

const TRUTH: [f64; 4] = [100.0, 150.0, 120.0, 25.0];

fn settings(kind: BootstrapKind, resamples: usize) -> BootstrapSettings {
    BootstrapSettings {
        kind,
        resamples,
        seed: 7,
    }
}

fn plain(points: &[Point]) -> MainFit {
    main_fit::fit(points, Scatter::Estimated).unwrap()
}

#[test]
fn the_same_cell_gives_the_same_numbers_and_another_cell_others() {
    let points = points(1, TRUTH, 600.0, 25, 1);
    let fit = plain(&points);
    let run = |kind, count, cell| {
        bootstrap(
            &points,
            Scatter::Estimated,
            &fit,
            &settings(kind, count),
            cell,
            "whole",
        )
        .unwrap()
    };
    for kind in [BootstrapKind::Parametric, BootstrapKind::Cases] {
        assert_eq!(run(kind, 200, "a"), run(kind, 200, "a"));
        assert_ne!(run(kind, 200, "a"), run(kind, 200, "b"));
    }
    // Without repeats there are no cases to draw from.
    assert_eq!(
        run(BootstrapKind::Parametric, 200, "a"),
        run(BootstrapKind::Cases, 200, "a")
    );
    assert_ne!(stream_key(1, "ab", "c"), stream_key(1, "a", "bc"));
    assert_ne!(stream_key(1, "ab", "c"), stream_key(2, "ab", "c"));
}

#[test]
fn the_hash_is_the_published_one() {
    // FNV-1a of "a" is af63dc4c8601ec8c; here a part byte and the seed go before, so the hash is remade by hand.
    let mut hash: u64 = 0xcbf2_9ce4_8422_2325;
    for byte in [0_u8; 9].iter().chain(b"a\0whole\0") {
        hash = (hash ^ u64::from(*byte)).wrapping_mul(1_099_511_628_211);
    }
    assert_eq!(stream_key(0, "a", "whole")[..8], hash.to_le_bytes());
}

/// Drawn rates of the first resamples.
fn drawn(points: &[Point], fit: &MainFit, kind: BootstrapKind, count: u64) -> Vec<Vec<f64>> {
    let drawer = Drawer::new(points, fit, kind);
    let levels: Vec<usize> = fit.levels.level_of_point().collect();
    (0..count)
        .map(|i| {
            let mut rng = ChaCha8Rng::from_seed(stream_key(3, "c", "whole"));
            rng.set_stream(i);
            let mut sample = Sample::default();
            drawer.draw(&mut rng, &levels, &mut sample);
            sample.rates
        })
        .collect()
}

#[test]
fn drawn_rates_have_the_variance_of_their_source() {
    let points = points(2, TRUTH, 600.0, 12, 3);
    let fit = plain(&points);
    let moments = |draws: &[Vec<f64>], i: usize| {
        let mean = draws.iter().map(|d| d[i]).sum::<f64>() / draws.len() as f64;
        let square = draws.iter().map(|d| (d[i] - mean).powi(2)).sum::<f64>() / draws.len() as f64;
        (mean, square)
    };
    let draws = drawn(&points, &fit, BootstrapKind::Cases, 4000);
    for level in 0..12 {
        let own = &points[3 * level..3 * level + 3];
        let mean = own.iter().map(|p| p.rate).sum::<f64>() / 3.0;
        let variance = own.iter().map(|p| (p.rate - mean).powi(2)).sum::<f64>() / 2.0;
        for repeat in 0..3 {
            let (m, v) = moments(&draws, 3 * level + repeat);
            assert!((m - mean).abs() < 5.0 * (variance / 4000.0).sqrt());
            assert!((v / variance - 1.0).abs() < 0.15, "{v} {variance}");
        }
    }
    let draws = drawn(&points, &fit, BootstrapKind::Parametric, 4000);
    for (i, point) in points.iter().enumerate() {
        let (_, v) = moments(&draws, i);
        let expected = point.se * point.se + fit.extra_variance;
        assert!((v / expected - 1.0).abs() < 0.15, "{v} {expected}");
    }
}

/// Distance of the short search's ends from those of the full one, in standard deviations of the resamples.
fn distances(points: &[Point], kind: BootstrapKind, rough: bool, count: u64) -> Vec<f64> {
    let fit = plain(points);
    let mut quick = ResampleFit::new(&fit, Scatter::Estimated, rough);
    let variances: Vec<f64> = points.iter().map(|p| p.se * p.se).collect();
    let (mut short, mut long) = (Vec::new(), Vec::new());
    for rates in drawn(points, &fit, kind, count) {
        let sample = Sample {
            rates,
            variances: variances.clone(),
        };
        let full = main_fit::fit(&points_of(points, &sample), Scatter::Estimated).unwrap();
        let Some(refit) = quick.fit(&sample) else {
            continue;
        };
        short.push(refit.parameters);
        long.push(full.solution.parameters);
    }
    assert!(
        short.len() as f64 > 0.98 * count as f64,
        "{} arrived",
        short.len()
    );
    let n = long.len() as f64;
    let mut out = Vec::new();
    for i in 0..4 {
        let mean = long.iter().map(|p| p[i]).sum::<f64>() / n;
        let sd = (long.iter().map(|p| (p[i] - mean).powi(2)).sum::<f64>() / n).sqrt();
        out.extend(short.iter().zip(&long).map(|(s, l)| (s[i] - l[i]).abs() / sd));
    }
    out
}

#[test]
fn the_short_search_ends_where_the_long_one_does() {
    for (seed, truth, top, levels, repeats) in [
        (3, TRUTH, 600.0, 25, 1),
        (4, [60.0, 300.0, 80.0, 10.0], 700.0, 30, 1),
        (5, TRUTH, 500.0, 12, 3),
    ] {
        let points = points(seed, truth, top, levels, repeats);
        for rough in [true, false] {
            let mut all = distances(&points, BootstrapKind::Parametric, rough, 400);
            all.sort_by(f64::total_cmp);
            let at = |part: f64| all[(part * all.len() as f64) as usize];
            println!("{seed} {rough}: {:.4} {:.4} {:.4}", at(0.5), at(0.9), at(0.98));
            assert!(at(0.5) < 0.02 && at(0.9) < 0.1 && at(0.98) < 0.5);
        }
    }
}

#[test]
fn few_nodes_do_not_move_the_intervals() {
    // Quantiles of the same 500 draws, fitted with few nodes and with all.
    let points = points(6, TRUTH, 600.0, 30, 1);
    let fit = plain(&points);
    let variances: Vec<f64> = points.iter().map(|p| p.se * p.se).collect();
    let ends = |rough: bool| -> [Vec<f64>; 4] {
        let mut quick = ResampleFit::new(&fit, Scatter::Estimated, rough);
        let mut all: [Vec<f64>; 4] = Default::default();
        for rates in drawn(&points, &fit, BootstrapKind::Parametric, 500) {
            let variances = variances.clone();
            let refit = quick.fit(&Sample { rates, variances }).unwrap();
            for i in 0..4 {
                all[i].push(refit.parameters[i]);
            }
        }
        all.map(|mut list| {
            list.sort_by(f64::total_cmp);
            list
        })
    };
    for (rough, full) in ends(true).iter().zip(&ends(false)) {
        for tail in [12, 250, 487] {
            let width = full[487] - full[12];
            assert!((rough[tail] - full[tail]).abs() < 0.01 * width);
        }
    }
}

#[test]
fn bootstrap_and_profile_tell_the_same_of_a_well_determined_cell() {
    let points = points(8, TRUTH, 700.0, 60, 1);
    let mut fit = plain(&points);
    let profile = estimates(&points, Scatter::Estimated, &mut fit, true);
    for kind in [BootstrapKind::Parametric, BootstrapKind::Cases] {
        let found = bootstrap(
            &points,
            Scatter::Estimated,
            &fit,
            &settings(kind, 2000),
            "x",
            "whole",
        )
        .unwrap();
        assert_eq!((found.failed, found.jackknife_failed), (0, 0));
        for (estimate, boot) in [
            (profile.max_rate, found.max_rate),
            (profile.half_rise, found.half_rise),
            (profile.threshold, found.threshold),
            (profile.initial_gain, found.initial_gain),
        ] {
            let (lo, hi) = (estimate.lo.unwrap(), estimate.hi.unwrap());
            for [low, high] in [boot.percentile, boot.bca.unwrap()] {
                let ratio = (high - low) / (hi - lo);
                assert!((0.8..1.25).contains(&ratio), "{ratio}");
                assert!((low - lo).abs() < 0.2 * (hi - lo) && (high - hi).abs() < 0.2 * (hi - lo));
            }
        }
    }
}

#[test]
fn a_cell_without_a_ceiling_has_an_infinite_upper_bound() {
    // Gain 0.3 Hz/pA for ever: 1/max rate is 0.
    let line: Vec<Point> = (0..30)
        .map(|i| {
            let rate = 0.3 * (f64::from(i) * 20.0 - 100.0).max(0.0);
            Point {
                drive: f64::from(i) * 20.0,
                rate: rate + 1.5 * f64::from(i * 7 % 5 - 2),
                se: 2.0,
            }
        })
        .collect();
    let fit = plain(&line);
    let found = bootstrap(
        &line,
        Scatter::Estimated,
        &fit,
        &settings(BootstrapKind::Parametric, 500),
        "line",
        "whole",
    )
    .unwrap();
    assert!(found.without_ceiling > 100, "{}", found.without_ceiling);
    assert_eq!(found.failed, 0);
    assert_eq!(found.max_rate.percentile[1], f64::INFINITY);
    assert_eq!(found.half_rise.percentile[1], f64::INFINITY);
    assert!(found.max_rate.percentile[0].is_finite() && found.max_rate.percentile[0] > 100.0);
    let [low, high] = found.initial_gain.percentile;
    assert!(low < 0.3 && 0.3 < high);
}

#[test]
fn a_held_scatter_stays_held_and_questions_without_answer_have_none() {
    let points = points(9, TRUTH, 600.0, 30, 1);
    let held = Scatter::Held(1.0);
    let fit = main_fit::fit(&points, held).unwrap();
    let mut quick = ResampleFit::new(&fit, held, ROUGH);
    let sample = Sample {
        rates: points.iter().map(|p| p.rate + 1.0).collect(),
        variances: points.iter().map(|p| p.se * p.se).collect(),
    };
    assert_eq!(quick.fit(&sample).unwrap().variance, 1.0);
    let none = settings(BootstrapKind::Parametric, 0);
    assert!(bootstrap(&points, held, &fit, &none, "c", "whole").is_none());
    let mut stopped = fit.clone();
    stopped.converged = false;
    let some = settings(BootstrapKind::Parametric, 10);
    assert!(bootstrap(&points, held, &stopped, &some, "c", "whole").is_none());
    let few = Sample {
        variances: vec![f64::INFINITY; points.len()],
        ..sample
    };
    assert!(quick.fit(&few).is_none());
}
