//! Where the joint search begins. At a given slope per nS of inhibition all levels collapse onto one curve of
//! g_exc - slope * g_inh, and that curve is an ordinary fit, with its own careful search; only the slope has to be
//! guessed, and the data do that.

use super::InhibitionPoint;
use super::form::Law;
use super::joint::Joint;
use super::membrane::Membrane;
use crate::fit::main_fit::{self, Scatter};
use crate::fit::objective::Point;

/// Fractions of the peak rate whose crossings tell how far each inhibition level is shifted.
const CROSSING: [f64; 3] = [0.1, 0.3, 0.6];
/// Potentials tried between E_inh and E_exc where the constants are known, as fractions of the way.
const POTENTIALS: [f64; 3] = [0.2, 0.35, 0.5];
/// Factors 1 + b g_inh tried at the largest inhibition.
const DIVISIONS: [f64; 3] = [1.3, 2.0, 4.0];

/// The curve that all levels share at one slope.
#[derive(Clone, Copy, Debug)]
pub(super) struct Collapsed {
    /// Chart `Ceiling`; the third is the threshold at g_inh = 0.
    pub(super) curve: [f64; 4],
    pub(super) slope: f64,
}

/// Curves at all slopes worth a try. Empty where the points, collapsed, do not carry a curve.
pub(super) fn collapsed(
    points: &[InhibitionPoint],
    joint: &Joint,
    membrane: Option<&Membrane>,
) -> Vec<Collapsed> {
    let mut slopes = vec![0.0];
    slopes.extend(
        CROSSING
            .iter()
            .filter_map(|part| shift_per_inhibition(joint, *part)),
    );
    if let Some(m) = membrane {
        slopes.extend(
            POTENTIALS.map(|part| m.per_inhibition_at(m.e_inh_mv() * (1.0 - part) + m.e_exc_mv() * part)),
        );
    }
    slopes
        .into_iter()
        .filter_map(|slope| {
            let mut shifted: Vec<Point> = points
                .iter()
                .map(|p| Point {
                    drive: p.g_exc - slope * p.g_inh,
                    rate: p.rate,
                    se: p.se,
                })
                .collect();
            if !shifted.iter().all(|p| p.drive.is_finite()) {
                return None;
            }
            shifted.sort_by(|a, b| a.drive.total_cmp(&b.drive));
            let fit = main_fit::fit(&shifted, Scatter::Estimated)?;
            Some(Collapsed {
                curve: fit.solution.parameters,
                slope,
            })
        })
        .collect()
}

/// Least-squares slope, over the inhibition levels, of the drive at which the rate first crosses a fraction of the
/// peak; `None` where fewer than two levels reach it.
fn shift_per_inhibition(joint: &Joint, fraction: f64) -> Option<f64> {
    let peak = joint
        .groups
        .iter()
        .flat_map(|g| &g.levels.rates)
        .copied()
        .fold(0.0, f64::max);
    let target = fraction * peak;
    let crossings: Vec<(f64, f64)> = joint
        .groups
        .iter()
        .filter_map(|group| {
            let (rates, drives) = (&group.levels.rates, &group.levels.drives);
            let at = rates.iter().position(|rate| *rate >= target)?;
            // A level that starts above the target crosses it below its smallest drive, where nothing was measured.
            let below = at.checked_sub(1)?;
            let part = (target - rates[below]) / (rates[at] - rates[below]);
            Some((group.g_inh, drives[below] + part * (drives[at] - drives[below])))
        })
        .collect();
    let n = crossings.len() as f64;
    let (mean_g, mean_x) = crossings
        .iter()
        .fold((0.0, 0.0), |(g, x), c| (g + c.0 / n, x + c.1 / n));
    let (mut cross, mut square) = (0.0, 0.0);
    for (g, x) in &crossings {
        cross += (g - mean_g) * (x - mean_x);
        square += (g - mean_g) * (g - mean_g);
    }
    (crossings.len() > 1 && square > 0.0).then(|| cross / square)
}

/// Starts of one form from the collapsed curves.
pub(super) fn starts<const P: usize>(law: &Law, joint: &Joint, collapsed: &[Collapsed]) -> Vec<[f64; P]> {
    let mut list = Vec::new();
    let highest = joint.groups.last().map_or(0.0, |g| g.g_inh);
    let middle = joint.groups.iter().map(|g| g.g_inh).sum::<f64>() / joint.groups.len() as f64;
    for from in collapsed {
        let [q, c, threshold, noise] = from.curve;
        let Some(m) = law.membrane() else {
            list.push(start([q, c, threshold, noise], from.slope));
            continue;
        };
        for g_inh in [0.0, middle, highest] {
            let potential = m.steady_potential(threshold + from.slope * g_inh, g_inh);
            if !(potential > m.e_inh_mv() && potential < m.e_exc_mv()) {
                continue;
            }
            list.push(start([q, c, potential, noise], 0.0));
            if let Law::Divisive(_) = law
                && highest > 0.0
            {
                for grown in DIVISIONS {
                    // The collapsed curve has the gain of the middle of the levels.
                    let b = (grown - 1.0) / highest;
                    list.push(start([q / (1.0 + b * middle), c, potential, noise], b));
                }
            }
        }
    }
    list
}

pub(super) fn start<const P: usize>(curve: [f64; 4], fifth: f64) -> [f64; P] {
    std::array::from_fn(|i| curve.get(i).copied().unwrap_or(fifth))
}
