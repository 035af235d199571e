//! The spike threshold potential of simulated conductance-driven integrate-and-fire cells, from their spikes
//! (`fixtures/effective_threshold`, with its script and with what such a fit can and cannot find).

use halfrise::assess::inhibition::assess;
use halfrise::fit::inhibition::membrane::{effective_threshold, threshold_per_inhibition};
use halfrise::fit::inhibition::{Form, Membrane};
use halfrise::fit::{InhibitionPoint, fit_inhibition};
use halfrise::rates::{Response, cell_interval_cv, fit_se, step_rates};
use halfrise::recording::CellConstants;
use halfrise::settings::Analysis;
use serde_json::Value;

use super::support::json;

struct Cell {
    set: String,
    constants: CellConstants,
    v_threshold: f64,
    v_reset: f64,
    points: Vec<InhibitionPoint>,
}

fn cells() -> Vec<Cell> {
    let file = json("effective_threshold/effective_threshold.json");
    let number = |v: &Value| v.as_f64().unwrap();
    let (length, tick) = (number(&file["step_s"]), number(&file["tick_s"]));
    let settings = Analysis::default();
    file["cells"]
        .as_array()
        .unwrap()
        .iter()
        .map(|cell| {
            let steps = cell["steps"].as_array().unwrap();
            let trains: Vec<Vec<f64>> = steps
                .iter()
                .map(|step| {
                    let mut ticks = 0;
                    let intervals = step[2].as_array().unwrap();
                    intervals
                        .iter()
                        .map(|interval| {
                            ticks += interval.as_i64().unwrap();
                            ticks as f64 * tick
                        })
                        .collect()
                })
                .collect();
            // From here on as a run does it.
            let spikes: Vec<&[f64]> = trains.iter().map(Vec::as_slice).collect();
            let windows: Vec<(f64, f64, &[f64])> = spikes.iter().map(|train| (0.0, length, *train)).collect();
            let cv = cell_interval_cv(&spikes).cv;
            let points = step_rates(&windows, Response::Whole, cv, &settings)
                .iter()
                .zip(steps)
                .map(|(rate, step)| InhibitionPoint {
                    g_exc: number(&step[0]),
                    g_inh: number(&step[1]),
                    rate: rate.rate_hz,
                    se: fit_se(rate),
                })
                .collect();
            Cell {
                set: cell["set"].as_str().unwrap().to_owned(),
                constants: CellConstants {
                    g_leak_ns: cell["g_leak"].as_f64(),
                    e_leak_mv: cell["e_leak"].as_f64(),
                    e_exc_mv: cell["e_exc"].as_f64(),
                    e_inh_mv: cell["e_inh"].as_f64(),
                    ..CellConstants::default()
                },
                v_threshold: number(&cell["v_threshold"]),
                v_reset: number(&cell["v_reset"]),
                points,
            }
        })
        .collect()
}

/// What one set found: |error| of V_t of each cell, mV, and how many lie within the interval plus 1 mV.
#[derive(Default)]
struct Found {
    errors: Vec<f64>,
    within: usize,
}

impl Found {
    fn median(&self) -> f64 {
        let mut sorted = self.errors.clone();
        sorted.sort_by(f64::total_cmp);
        let half = sorted.len() / 2;
        0.5 * (sorted[half - 1] + sorted[half])
    }
}

#[test]
fn integrate_and_fire_cells_give_their_threshold_potential_back() {
    let (mut near, mut deep) = (Found::default(), Found::default());
    for cell in cells() {
        let fit = fit_inhibition(&cell.points, &cell.constants, true);
        for form in Form::ALL {
            assert!(fit.of(form).as_ref().unwrap().converged, "{form:?}");
        }
        let v = fit.relation.as_ref().unwrap().estimates.v_threshold;
        let (value, lo, hi) = (v.value.unwrap(), v.lo.unwrap(), v.hi.unwrap());
        let truth = cell.v_threshold;
        let row = assess(&fit);
        println!(
            "{} V_t {truth} reset {}: {value:.2} [{lo:.2}, {hi:.2}], slope expected {:.3} found {:.3}, p {:.1e}, divisive p {:.1e}",
            cell.set,
            cell.v_reset,
            row.slope_expected.value.unwrap(),
            row.slope_found.value.unwrap(),
            row.slope_test.unwrap().p,
            row.divisive_test.unwrap().p,
        );
        let middle = 0.5 * (truth + cell.v_reset);
        assert!(
            middle - 1.0 < value && value < truth + 1.0,
            "{value} between {middle} and {truth}"
        );
        // The slope loses by the same reason as the potential.
        let m = Membrane::from_constants(&cell.constants).unwrap();
        let slope = threshold_per_inhibition(truth, &m).unwrap().value;
        let found = row.slope_found.value.unwrap();
        assert!(
            (slope - 0.15..slope + 0.05).contains(&found),
            "{found} against {slope}"
        );
        let set = if cell.set == "near" { &mut near } else { &mut deep };
        set.errors.push((value - truth).abs());
        set.within += usize::from(lo - 1.0 <= truth && truth <= hi + 1.0);
    }
    for (name, set) in [("near", &near), ("deep", &deep)] {
        println!(
            "{name}: median error {:.2} mV, {} of {} within the interval plus 1 mV",
            set.median(),
            set.within,
            set.errors.len()
        );
        assert!(set.median() < 2.0, "{name}");
    }
    assert_eq!((near.errors.len(), deep.errors.len()), (20, 10));
    assert!(near.within >= 18, "{} of 20", near.within);
}

#[test]
fn the_worked_numbers_of_the_relation() {
    // g_leak 10 nS, E_leak -70, E_exc 0, E_inh -75, V_t -50 mV.
    let m = Membrane::new(10.0, -70.0, 0.0, -75.0).unwrap();
    let threshold = |g_inh: f64| effective_threshold(g_inh, -50.0, &m).unwrap().value;
    assert_eq!((threshold(0.0), threshold(10.0)), (4.0, 9.0));
    assert_eq!(threshold_per_inhibition(-50.0, &m).unwrap().value, 0.5);
}
