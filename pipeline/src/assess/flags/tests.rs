//! Every flag raised once and not raised once, on a small made response.
#![allow(clippy::unwrap_used, clippy::panic)]
use super::*;
use crate::fit::Estimate;
use crate::rates::RateFrom;

/// Everything that [`Evidence`] borrows. As made, it raises no flag: eight drives from 0 to 350 pA, two silent, two
/// repeats of each, a resolved ceiling.
struct Made {
    response: Response,
    steps: Vec<ProtocolStep>,
    spikes: Vec<Vec<f64>>,
    rates: Vec<StepRate>,
    outside: usize,
    cell_cv: CellCv,
    status: Status,
    ceiling: Option<Ceiling>,
    estimates: Option<Estimates>,
    goodness: Vec<Goodness>,
    repeats: Option<Repeats>,
    duplicates: usize,
    down_weighted: Vec<usize>,
    settings: Analysis,
}

fn estimate(value: f64) -> Estimate {
    Estimate {
        value: Some(value),
        se: Some(0.05 * value),
        lo: Some(0.9 * value),
        hi: Some(1.1 * value),
    }
}

fn fitted(curve: &'static str, log_likelihood: f64, aicc: f64) -> Goodness {
    Goodness {
        curve,
        parameters: 4,
        steps: 16,
        log_likelihood: Some(log_likelihood),
        aicc: Some(aicc),
        aicc_weight: None,
        bic: None,
        rmse_hz: None,
        r2: None,
        reduced_chi2: None,
        lack_of_fit_f: Some(1.0),
        lack_of_fit_p: Some(0.4),
        runs_p: None,
        loo_rmse_hz: None,
        reason: "fitted".into(),
        converged: true,
        evaluations: 1,
    }
}

fn made() -> Made {
    // Rates of 0, 0, 10, 20 ... 60 Hz, spikes at even intervals through the second that a step lasts.
    let (mut steps, mut spikes, mut rates) = (Vec::new(), Vec::new(), Vec::new());
    for i in 0..16 {
        let rate = 10.0 * f64::from((i / 2 - 1_i32).max(0));
        let count = rate as usize;
        steps.push(ProtocolStep {
            sweep: i as usize,
            step: "1".into(),
            onset_s: 0.0,
            offset_s: 1.0,
            drive: 50.0 * f64::from(i / 2),
            g_inh_ns: None,
        });
        spikes.push((0..count).map(|k| (k as f64 + 0.5) / rate).collect());
        rates.push(StepRate {
            step: i as usize,
            response: Response::Whole,
            window_start_s: 0.0,
            window_end_s: 1.0,
            spikes: count,
            intervals: count.saturating_sub(1),
            rate_hz: rate,
            rate_se_hz: 0.5,
            rate_from: if count > 1 {
                RateFrom::Intervals
            } else {
                RateFrom::Silent
            },
            first_spike_latency_s: None,
            min_interval_s: (count > 1).then(|| 0.5 / rate),
            cv: None,
            cv2: None,
            lv: None,
            lvr: None,
            adaptation_ratio: (count > 1).then_some(0.9),
            used: true,
            fitted_hz: None,
            residual_hz: None,
            weight: None,
        });
    }
    Made {
        response: Response::Whole,
        steps,
        spikes,
        rates,
        outside: 0,
        cell_cv: CellCv {
            cv: 0.3,
            steps: 10,
            enough: true,
        },
        status: Status::Fitted,
        ceiling: Some(Ceiling::Resolved),
        estimates: Some(Estimates {
            max_rate: estimate(90.0),
            half_rise: estimate(150.0),
            threshold: estimate(80.0),
            noise_sd: estimate(15.0),
            initial_gain: estimate(0.6),
            covariance: None,
            ceiling_open: false,
            at_bound: Vec::new(),
        }),
        goodness: vec![
            fitted("smoothed-hyperbola", -30.0, 76.0),
            fitted("logistic", -31.0, 78.0),
            fitted("smoothed-ramp", -38.0, 86.0),
        ],
        repeats: Some(Repeats {
            levels: 8,
            steps: 16,
            drift_percent: Some(4.0),
            drift_p: Some(0.3),
            between_sd_hz: Some(1.0),
            misfit_sd_hz: Some(0.0),
        }),
        duplicates: 0,
        down_weighted: Vec::new(),
        settings: Analysis::default(),
    }
}

impl Made {
    fn flags(&self) -> Vec<Flag> {
        let spikes: Vec<&[f64]> = self.spikes.iter().map(Vec::as_slice).collect();
        raise(&Evidence {
            response: self.response,
            drive_unit: "pA",
            steps: &self.steps,
            step_spikes: &spikes,
            rates: &self.rates,
            spikes_outside: self.outside,
            cell_cv: self.cell_cv,
            status: self.status,
            ceiling: self.ceiling,
            estimates: self.estimates.as_ref(),
            levels: 8,
            goodness: &self.goodness,
            repeats: self.repeats,
            duplicate_spikes: self.duplicates,
            down_weighted: &self.down_weighted,
            settings: &self.settings,
        })
    }

    fn estimates(&mut self) -> &mut Estimates {
        self.estimates.as_mut().unwrap()
    }
}

/// Flag of that name after `change`.
fn after(name: &str, change: impl FnOnce(&mut Made)) -> Option<Flag> {
    let mut made = made();
    change(&mut made);
    made.flags().into_iter().find(|f| f.flag == name)
}

/// Fails unless `yes` raises the flag with this severity and a sentence that holds `words`, and `no`, which is close to
/// it, does not.
#[track_caller]
fn check(
    name: &str,
    severity: Severity,
    words: &str,
    yes: impl FnOnce(&mut Made),
    no: impl FnOnce(&mut Made),
) -> Flag {
    let Some(flag) = after(name, yes) else {
        panic!("{name} is not raised");
    };
    assert_eq!(flag.severity, severity, "{name}");
    assert!(flag.message.contains(words), "{}", flag.message);
    assert!(!flag.message.contains("  ") && !flag.message.contains('\n'));
    assert_eq!(after(name, no), None, "{name}");
    flag
}

#[test]
fn a_sound_cell_raises_nothing() {
    assert_eq!(made().flags(), []);
}

#[test]
fn not_converged() {
    check(
        "not-converged",
        Severity::Reject,
        "did not settle",
        |m| m.status = Status::NotConverged,
        |m| m.status = Status::TooFewLevels,
    );
}

#[test]
fn touched_bound() {
    check(
        "touched-bound",
        Severity::Caution,
        "threshold ended on the bound",
        |m| m.estimates().at_bound = vec!["threshold"],
        |m| m.estimates().at_bound.clear(),
    );
    check(
        "touched-bound",
        Severity::Note,
        "too small to be measured",
        |m| m.estimates().at_bound = vec!["noise_sd"],
        |m| m.estimates = None,
    );
}

#[test]
fn ceiling_open() {
    check(
        "ceiling-open",
        Severity::Caution,
        "larger drives would tell",
        |m| m.ceiling = Some(Ceiling::Open),
        |m| m.ceiling = Some(Ceiling::Loose),
    );
}

#[test]
fn ceiling_loose() {
    let flag = check(
        "ceiling-loose",
        Severity::Note,
        "only loosely",
        |m| {
            m.ceiling = Some(Ceiling::Loose);
            m.estimates().max_rate.hi = Some(162.0);
        },
        |m| m.estimates().max_rate.hi = Some(162.0),
    );
    assert_eq!((flag.value, flag.limit), (Some(2.0), Some(1.5)));
}

#[test]
fn ceiling_declining() {
    let flag = check(
        "ceiling-declining",
        Severity::Caution,
        "2 steps above the peak were left out",
        |m| {
            m.ceiling = Some(Ceiling::Declining);
            m.rates[14].used = false;
            m.rates[15].used = false;
        },
        |m| m.rates[15].used = false,
    );
    assert_eq!(flag.value, Some(2.0));
}

#[test]
fn few_levels() {
    check(
        "few-levels",
        Severity::Caution,
        "only 8 different drives",
        |m| m.settings.few_levels = 9,
        |m| m.settings.few_levels = 8,
    );
}

#[test]
fn no_silent_level() {
    let fire = |m: &mut Made, steps: usize| {
        for rate in &mut m.rates[..steps] {
            rate.rate_from = RateFrom::OneSpike;
        }
    };
    check(
        "no-silent-level",
        Severity::Caution,
        "fired at every drive",
        |m| fire(m, 4),
        |m| fire(m, 3),
    );
}

#[test]
fn below_half_rise() {
    // The largest drive is 350 pA, the threshold 80.
    let flag = check(
        "below-half-rise",
        Severity::Caution,
        "380.0 pA needed",
        |m| m.estimates().half_rise.value = Some(300.0),
        |m| m.estimates().half_rise.value = Some(269.0),
    );
    assert_eq!((flag.value, flag.limit), (Some(350.0), Some(380.0)));
}

#[test]
fn non_monotone() {
    let change = |m: &mut Made, rate: f64| {
        // 250 pA, between 30 Hz at 200 and 50 Hz at 300.
        for step in [10, 11] {
            m.rates[step].rate_hz = rate;
        }
    };
    check(
        "non-monotone",
        Severity::Caution,
        "fired less at 250.0 pA than at 200.0 pA",
        |m| change(m, 20.0),
        |m| change(m, 29.0),
    );
    // Without repeats the scatter is that of neighbours: every step a level of its own, 20 pA apart.
    let single = |m: &mut Made, low: f64| {
        m.repeats = None;
        for i in 0..16 {
            m.steps[i].drive = 20.0 * i as f64;
            m.rates[i].rate_hz = 4.0 * i as f64;
        }
        m.rates[12].rate_hz = low;
    };
    check(
        "non-monotone",
        Severity::Caution,
        "fired less at 240.0 pA than at 220.0 pA",
        |m| single(m, 30.0),
        |m| single(m, 42.0),
    );
    // A fall for good at the largest drives is told by another flag.
    check(
        "non-monotone",
        Severity::Caution,
        "though the drive was larger",
        |m| change(m, 20.0),
        |m| {
            change(m, 20.0);
            m.ceiling = Some(Ceiling::Declining);
        },
    );
}

#[test]
fn drift() {
    let change = |m: &mut Made, percent: f64, p: f64| {
        let repeats = m.repeats.as_mut().unwrap();
        (repeats.drift_percent, repeats.drift_p) = (Some(percent), Some(p));
    };
    let flag = check(
        "drift",
        Severity::Caution,
        "the rate fell by 25 %",
        |m| change(m, -25.0, 0.001),
        |m| change(m, -25.0, 0.02),
    );
    assert_eq!((flag.value, flag.limit), (Some(-25.0), Some(10.0)));
    check(
        "drift",
        Severity::Caution,
        "the rate rose by 12 %",
        |m| change(m, 12.0, 1e-6),
        |m| change(m, 8.0, 1e-6),
    );
    assert_eq!(after("drift", |m| m.repeats = None), None);
}

#[test]
fn lack_of_fit() {
    let flag = check(
        "lack-of-fit",
        Severity::Caution,
        "does not follow this curve",
        |m| m.goodness[0].lack_of_fit_p = Some(0.002),
        |m| m.goodness[0].lack_of_fit_p = Some(0.02),
    );
    assert_eq!((flag.value, flag.limit), (Some(0.002), Some(0.01)));
    // A rival's misfit is no flag.
    assert_eq!(
        after("lack-of-fit", |m| m.goodness[1].lack_of_fit_p = Some(1e-9)),
        None
    );
}

#[test]
fn rival_better() {
    let flag = check(
        "rival-better",
        Severity::Caution,
        "the logistic curve describes the rates clearly better (AICc lower by 12.0)",
        |m| m.goodness[1].aicc = Some(64.0),
        |m| m.goodness[1].aicc = Some(67.0),
    );
    assert_eq!((flag.value, flag.limit), (Some(12.0), Some(10.0)));
    let ramp = |m: &mut Made, likelihood: f64| {
        m.goodness[2].aicc = Some(60.0);
        m.goodness[2].log_likelihood = Some(likelihood);
    };
    // A nested curve with no better likelihood is only cheaper; where the ceiling is open it is no news at all.
    check(
        "rival-better",
        Severity::Caution,
        "smoothed-ramp",
        |m| ramp(m, -28.0),
        |m| ramp(m, -30.5),
    );
    check(
        "rival-better",
        Severity::Caution,
        "smoothed-ramp",
        |m| ramp(m, -28.0),
        |m| {
            ramp(m, -28.0);
            m.ceiling = Some(Ceiling::Open);
        },
    );
    assert_eq!(
        after("rival-better", |m| {
            m.goodness[1].aicc = Some(20.0);
            m.goodness[1].converged = false;
        }),
        None
    );
}

#[test]
fn few_spikes() {
    let leave = |m: &mut Made, spikes: usize| {
        for rate in &mut m.rates {
            rate.spikes = 0;
        }
        m.rates[15].spikes = spikes;
    };
    check(
        "few-spikes",
        Severity::Reject,
        "only 4 spikes",
        |m| leave(m, 4),
        |m| leave(m, 5),
    );
}

#[test]
fn short_interval() {
    check(
        "short-interval",
        Severity::Caution,
        "0.400 ms apart",
        |m| m.rates[15].min_interval_s = Some(0.0004),
        |m| m.rates[15].min_interval_s = Some(0.001),
    );
}

#[test]
fn faster_than_intervals() {
    // The shortest interval of 1/120 s allows 120 Hz.
    let least = |m: &mut Made, rate: f64| m.estimates().max_rate.lo = Some(rate);
    check(
        "faster-than-intervals",
        Severity::Note,
        "130.0 Hz at the least",
        |m| least(m, 130.0),
        |m| least(m, 119.0),
    );
    check(
        "faster-than-intervals",
        Severity::Caution,
        "allows (120.0 Hz)",
        |m| least(m, 250.0),
        |m| m.estimates().max_rate = Estimate::default(),
    );
}

#[test]
fn stops_early() {
    // At 60 Hz: spikes in the first 0.3 s only, so that 0.7 s of silence are 42 intervals.
    let cut = |m: &mut Made, steps: &[usize], end: f64| {
        for step in steps {
            m.spikes[*step].retain(|t| *t < end);
        }
    };
    let flag = check(
        "stops-early",
        Severity::Caution,
        "in 1 step firing stopped",
        |m| cut(m, &[15], 0.3),
        |m| cut(m, &[15], 0.6),
    );
    assert!((flag.value.unwrap() - 42.0).abs() < 1.0 && flag.limit == Some(5.0));
    check(
        "stops-early",
        Severity::Reject,
        "in 5 steps firing stopped",
        |m| cut(m, &[11, 12, 13, 14, 15], 0.3),
        |m| {
            cut(m, &[11, 12, 13, 14, 15], 0.3);
            m.response = Response::Steady;
        },
    );
}

#[test]
fn strong_adaptation() {
    let ratio = |m: &mut Made, ratio: f64| {
        for step in [14, 15] {
            m.rates[step].adaptation_ratio = Some(ratio);
        }
    };
    let flag = check(
        "strong-adaptation",
        Severity::Note,
        "falls to 40 % of its first value",
        |m| ratio(m, 0.4),
        |m| ratio(m, 0.5),
    );
    assert_eq!((flag.value, flag.limit), (Some(0.4), Some(0.5)));
    // Smaller drives do not count.
    assert_eq!(
        after("strong-adaptation", |m| m.rates[8].adaptation_ratio = Some(0.1)),
        None
    );
}

#[test]
fn irregular() {
    check(
        "irregular",
        Severity::Note,
        "(CV 1.20)",
        |m| m.cell_cv.cv = 1.2,
        |m| m.cell_cv.cv = 1.0,
    );
    // A CV that was assumed is no finding.
    assert_eq!(
        after("irregular", |m| {
            m.cell_cv.cv = 1.2;
            m.cell_cv.steps = 0;
        }),
        None
    );
}

#[test]
fn spikes_outside() {
    // 420 spikes inside.
    check(
        "spikes-outside",
        Severity::Caution,
        "30 % of the spikes lie outside every step",
        |m| m.outside = 180,
        |m| m.outside = 105,
    );
}

#[test]
fn duplicates_dropped() {
    let flag = check(
        "duplicates-dropped",
        Severity::Note,
        "3 spike times were there more than once",
        |m| m.duplicates = 3,
        |m| {
            m.duplicates = 3;
            m.settings.duplicate_spikes = 3;
        },
    );
    assert_eq!((flag.value, flag.limit), (Some(3.0), Some(0.0)));
    let one = after("duplicates-dropped", |m| m.duplicates = 1).unwrap();
    assert!(one.message.starts_with("1 spike time was there twice"));
}

#[test]
fn down_weighted() {
    let flag = check(
        "down-weighted",
        Severity::Note,
        "2 of",
        |m| m.down_weighted = vec![3, 5],
        |m| {
            m.down_weighted = vec![3, 5];
            m.settings.down_weighted_steps = 2;
        },
    );
    assert!(flag.message.contains("(step 4)") && flag.message.contains("(step 6)"));
}
