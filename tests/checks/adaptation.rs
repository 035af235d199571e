//! Adaptation and the run of a rate function, against SciPy's integration of the same equations, and the
//! Kolmogorov-Smirnov test against SciPy's: see `fixtures/adaptation`.

use halfrise::curve::adapting::steady;
use halfrise::curve::rate_function::RateFunction;
use halfrise::fit::adaptation_time::{Train, cell_adaptation};
use halfrise::predict::kolmogorov::{distance_from_uniform, p_value};
use halfrise::predict::{Drive, Piece, RateModel, predict};
use halfrise::settings::Analysis;

use super::support::{assert_close, json, numbers};

fn number(value: &serde_json::Value, key: &str) -> f64 {
    value[key].as_f64().unwrap_or_else(|| panic!("{key}"))
}

fn list(value: &serde_json::Value, key: &str) -> Vec<f64> {
    let list = value[key].as_array().unwrap();
    list.iter().map(|x| x.as_f64().unwrap()).collect()
}

fn cells() -> Vec<serde_json::Value> {
    let cells = json("adaptation/model.json")["cells"].as_array().unwrap().clone();
    assert_eq!(cells.len(), 3);
    cells
}

fn curve(cell: &serde_json::Value) -> RateFunction {
    let [max_rate, half_rise, threshold, noise] =
        ["max_rate", "half_rise", "threshold", "noise_sd"].map(|key| number(cell, key));
    RateFunction::from_reported(max_rate, half_rise, threshold, noise).unwrap()
}

#[test]
fn settled_rates_slopes_and_decay_times_agree() {
    for cell in cells() {
        let (alpha, tau_a) = (number(&cell, "alpha"), number(&cell, "tau_a"));
        let curve = curve(&cell);
        let rows = cell["steady"].as_array().unwrap();
        assert_eq!(rows.len(), 5);
        for row in rows {
            let drive = number(row, "drive");
            let found = steady(&curve, alpha, drive);
            assert_close("onset", curve.at(drive).rate, number(row, "onset"), 1e-9);
            assert_close("settled", found.rate, number(row, "rate"), 1e-8);
            // Differences of settled rates and of a spline: a few digits fewer.
            assert_close("slope", found.slope, number(row, "slope"), 1e-5);
            assert_close("onset slope", found.onset_slope, number(row, "onset_slope"), 1e-6);
            // tau_eff = tau_a finf'/f0' against the integrated decay.
            let relation = tau_a * found.slope / found.onset_slope;
            assert_close("tau_eff", tau_a * found.time_ratio(alpha), relation, 1e-12);
            assert_close("tau_eff", relation, number(row, "tau_eff"), 1e-3);
        }
    }
}

#[test]
fn rates_over_a_protocol_agree() {
    let piece = |start_s, end_s, from, to| Piece {
        start_s,
        end_s,
        from,
        to,
    };
    let drive = Drive::new(
        vec![piece(0.1, 0.5, 400.0, 400.0), piece(0.7, 1.2, 0.0, 700.0)],
        0.0,
    )
    .unwrap();
    let mut worst = [0.0_f64; 2];
    for cell in cells() {
        for run in cell["runs"].as_array().unwrap() {
            let model = RateModel {
                curve: curve(&cell),
                alpha: number(&cell, "alpha"),
                tau_a_s: number(&cell, "tau_a"),
                tau_rate_s: number(run, "tau_rate"),
            };
            let times = list(run, "times");
            let found = predict(&model, &drive, 0.0, &times, 0.01).unwrap();
            for (i, (rate, count)) in list(run, "rates").iter().zip(list(run, "counts")).enumerate() {
                worst[0] = worst[0].max((found.rates_hz[i] - rate).abs());
                worst[1] = worst[1].max((found.counts[i] - count).abs());
            }
            assert_eq!(found.rates_hz.len(), 9);
        }
    }
    println!("largest difference: {:.1e} Hz, {:.1e} spikes", worst[0], worst[1]);
    assert!(worst[0] < 1e-3 && worst[1] < 1e-4, "{worst:?}");
}

#[test]
fn strength_and_time_constant_come_back_from_spike_times() {
    let rows = numbers("adaptation/spikes.csv", ["cell", "step", "drive_pa", "time_s"]);
    for (index, cell) in cells().iter().enumerate() {
        let trains: Vec<(f64, Vec<f64>)> = (0..18)
            .map(|step| {
                let of_step = |row: &&[f64; 4]| row[0] == index as f64 && row[1] == f64::from(step);
                let times = rows.iter().filter(of_step).map(|row| row[3]).collect();
                (50.0 * f64::from(step), times)
            })
            .collect();
        let trains: Vec<Train> = trains
            .iter()
            .map(|(drive, times)| Train {
                drive: *drive,
                onset_s: 0.0,
                offset_s: 1.0,
                spikes_s: times,
            })
            .collect();
        let found = cell_adaptation(&trains, &Analysis::default());
        let fit = found.fit.unwrap();
        let tau = found.tau_a_s.unwrap();
        let relation = found.tau_a_by_relation_s.unwrap();
        println!(
            "cell {index}: alpha {:.4} of {}, tau_a {:.5} of {} s, by relation {:.5} s",
            fit.strength(),
            number(cell, "alpha"),
            tau.value.unwrap(),
            number(cell, "tau_a"),
            relation.value.unwrap()
        );
        assert_close("alpha", fit.strength(), number(cell, "alpha"), 0.1);
        assert_close("tau_a", tau.value.unwrap(), number(cell, "tau_a"), 0.1);
        // The relation is exact near the steady state only; how far off it is grows with alpha.
        assert_close("relation", relation.value.unwrap(), number(cell, "tau_a"), 0.2);
        assert_close(
            "max rate",
            fit.max_rate.value.unwrap(),
            number(cell, "max_rate"),
            0.05,
        );
        let inside =
            |e: &halfrise::fit::Estimate, truth: f64| e.lo.unwrap() <= truth && truth <= e.hi.unwrap();
        assert!(inside(&fit.alpha, number(cell, "alpha")));
        assert!(inside(&tau, number(cell, "tau_a")));
    }
}

#[test]
fn kolmogorov_smirnov_agrees_with_scipy() {
    let expected = json("adaptation/kolmogorov.json");
    let table = expected["table"].as_array().unwrap();
    // SciPy is exact to 140 values and an expansion (Pelz & Good 1976) above, good to about 1e-6.
    let mut worst = [0.0_f64; 3];
    for row in table {
        let n = row["n"].as_u64().unwrap() as usize;
        let error = (p_value(number(row, "distance"), n) - number(row, "p")).abs();
        let kind = usize::from(n > 140) + usize::from(n > 200);
        worst[kind] = worst[kind].max(error);
    }
    println!("largest differences, to 140, to 200, above: {worst:?}");
    assert!(
        table.len() > 100 && worst[0] < 1e-12 && worst[1] < 3e-6 && worst[2] < 1e-4,
        "{worst:?}"
    );
    for sample in expected["samples"].as_array().unwrap() {
        let values = list(sample, "values");
        let distance = distance_from_uniform(&values).unwrap();
        assert_close("distance", distance, number(sample, "distance"), 1e-13);
        assert!((p_value(distance, values.len()) - number(sample, "p")).abs() < 1e-4);
    }
}
