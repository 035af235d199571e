//! Recovery of known parameters: spike trains simulated from the rate function itself (gamma renewal processes, common
//! practice for regular firing), analysed by the whole line from spikes to verdict.
//!
//! No outside source: the truth is what was simulated. The demands are coverage of the 95 % intervals within 93 to
//! 97.5 %, a closed ceiling for at least 95 % of the cells that reached half of it, and at most 8 % of the cells
//! without a ceiling called anything but `open`.

use halfrise::assess::{Ceiling, CellResult, Status};
use halfrise::curve::smoothed_hyperbola::evaluate;
use halfrise::curve::smoothed_ramp::ramp;
use halfrise::fit::Estimate;
use halfrise::rates::Response;
use halfrise::recording::{CellConstants, CellId, CellRecording, DriveKind, ProtocolStep, Sweep};
use halfrise::run::analyse_cell;
use halfrise::settings::Analysis;
use rand::{RngExt, SeedableRng};
use rand_chacha::ChaCha8Rng;
use rand_distr::{Distribution, Gamma};

/// What a cell was made of.
struct Truth {
    max_rate: f64,
    half_rise: f64,
    threshold: f64,
    noise_sd: f64,
    /// Rate at the largest drive over max rate, without noise.
    reached: f64,
}

/// One cell: max rate 40 to 200 Hz, half-rise 50 to 400 pA, threshold 50 to 250 pA, noise SD 5 to 60 pA, 20 to 80 steps
/// of 1 s from 0 to where 35 to 95 % of max rate is reached, gamma shape 4 to 20.
fn cell(seed: u64, without_ceiling: bool) -> (CellRecording, Truth) {
    let mut rng = ChaCha8Rng::seed_from_u64(seed);
    let mut between = |low: f64, high: f64| low * (high / low).powf(rng.random::<f64>());
    let truth = Truth {
        max_rate: between(40.0, 200.0),
        half_rise: between(50.0, 400.0),
        threshold: between(50.0, 250.0),
        noise_sd: between(5.0, 60.0),
        reached: between(0.35, 0.95),
    };
    let count = between(20.0, 80.0).round() as usize;
    let shape = between(4.0, 20.0);
    let top = truth.threshold + truth.half_rise * truth.reached / (1.0 - truth.reached);
    let (mut steps, mut sweeps, mut spikes) = (Vec::new(), Vec::new(), Vec::new());
    for i in 0..count {
        let drive = top * i as f64 / (count - 1) as f64;
        let above = drive - truth.threshold;
        let rate = if without_ceiling {
            0.5 * truth.max_rate / (top - truth.threshold) * ramp(above, truth.noise_sd).value
        } else {
            truth.max_rate * evaluate(above / truth.half_rise, truth.noise_sd / truth.half_rise).h
        };
        let start = spikes.len();
        if rate > 1e-6 {
            // In equilibrium: the process has been running long before the step.
            let intervals = Gamma::new(shape, 1.0 / (shape * rate)).unwrap();
            let mut t = -(10.0 + rng.random::<f64>()) / rate;
            loop {
                t += intervals.sample(&mut rng);
                if t >= 1.0 {
                    break;
                }
                if t >= 0.0 {
                    spikes.push(t);
                }
            }
        }
        sweeps.push(Sweep {
            name: Some(i.to_string().into()),
            spikes: start..spikes.len(),
        });
        steps.push(ProtocolStep {
            sweep: i,
            step: "1".into(),
            onset_s: 0.0,
            offset_s: 1.0,
            drive,
            g_inh_ns: None,
        });
    }
    let recording = CellRecording {
        id: CellId(seed.to_string().into()),
        group: None,
        drive_kind: DriveKind::Current,
        constants: CellConstants::default(),
        carried: Vec::new(),
        sweeps,
        steps,
        spikes_s: spikes,
        duplicate_spikes: 0,
        refusal: None,
    };
    (recording, truth)
}

fn settings() -> Analysis {
    Analysis {
        responses: vec![Response::Whole],
        ..Analysis::default()
    }
}

fn analysed(cells: u64, without_ceiling: bool) -> Vec<(CellResult, Truth)> {
    (0..cells)
        .map(|seed| {
            let (recording, truth) = cell(seed, without_ceiling);
            (analyse_cell(&recording, &settings(), false), truth)
        })
        .collect()
}

#[test]
fn intervals_cover_the_truth_and_ceilings_are_seen() {
    const CELLS: u64 = 1500;
    let results = analysed(CELLS, false);
    let fitted = results
        .iter()
        .filter(|(r, _)| r.responses[0].status == Status::Fitted)
        .count();
    assert!(
        fitted as f64 >= 0.995 * CELLS as f64,
        "{fitted} of {CELLS} fitted"
    );
    let covers = |pick: fn(&halfrise::assess::ResponseResult) -> Estimate, truth: fn(&Truth) -> f64| {
        let mut known = 0;
        let mut hits = 0;
        for (result, t) in &results {
            let estimate = pick(&result.responses[0]);
            if let (Some(lo), Some(hi)) = (estimate.lo, estimate.hi) {
                known += 1;
                hits += usize::from(lo <= truth(t) && truth(t) <= hi);
            }
        }
        assert!(
            known as f64 >= 0.99 * fitted as f64,
            "{known} intervals of {fitted}"
        );
        hits as f64 / known as f64
    };
    for (name, coverage) in [
        ("max rate", covers(|r| r.max_rate, |t| t.max_rate)),
        ("half-rise", covers(|r| r.half_rise, |t| t.half_rise)),
        ("threshold", covers(|r| r.threshold, |t| t.threshold)),
        ("noise SD", covers(|r| r.noise_sd, |t| t.noise_sd)),
        (
            "initial gain",
            covers(|r| r.initial_gain, |t| t.max_rate / t.half_rise),
        ),
    ] {
        println!("{name}: {:.1} %", 100.0 * coverage);
        assert!((0.93..=0.975).contains(&coverage), "{name}: {coverage}");
    }
    let reached: Vec<_> = results.iter().filter(|(_, t)| t.reached >= 0.5).collect();
    let closed = reached
        .iter()
        .filter(|(r, _)| matches!(r.responses[0].ceiling, Some(Ceiling::Resolved | Ceiling::Loose)))
        .count();
    println!("closed: {closed} of {}", reached.len());
    assert!(
        closed as f64 >= 0.95 * reached.len() as f64,
        "{closed} of {}",
        reached.len()
    );
}

#[test]
fn cells_without_a_ceiling_are_called_open() {
    const CELLS: u64 = 600;
    let results = analysed(CELLS, true);
    let other = results
        .iter()
        .filter(|(r, _)| r.responses[0].ceiling != Some(Ceiling::Open))
        .count();
    println!("not open: {other} of {CELLS}");
    assert!(other as f64 <= 0.08 * CELLS as f64, "{other} of {CELLS} not open");
}
