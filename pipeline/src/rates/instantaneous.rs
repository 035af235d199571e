//! The instantaneous rate: 1/x over each interval x, undefined before the first spike of a step and after its last.

use std::sync::Arc;

use crate::recording::{CellId, CellRecording};
use crate::steps::StepSpikes;

/// One interval of one step.
#[derive(Clone, Debug, PartialEq)]
pub struct IntervalRate {
    /// The cell.
    pub cell: CellId,
    /// The sweep's name; `None` on a continuous time line.
    pub sweep: Option<Arc<str>>,
    /// The step's label.
    pub step: Arc<str>,
    /// Place within the step, 1 for the first.
    pub interval: u32,
    /// Its first spike, seconds in the sweep's time base.
    pub start_s: f64,
    /// Its second spike, seconds.
    pub end_s: f64,
    /// 1/(end - start), Hz.
    pub rate_hz: f64,
}

/// Every interval of a cell whose two spikes lie in one step, in the order of the steps. `met` are the cell's spikes step
/// by step. Two spikes at the same time have no rate and give no row.
pub fn interval_rates(cell: &CellRecording, met: &StepSpikes<'_>) -> Vec<IntervalRate> {
    let mut rows = Vec::with_capacity(met.of_step.iter().map(|s| s.len().saturating_sub(1)).sum());
    for (step, spikes) in cell.steps.iter().zip(&met.of_step) {
        let sweep = cell.sweeps.get(step.sweep).and_then(|sweep| sweep.name.clone());
        for (interval, pair) in (1..).zip(spikes.windows(2)) {
            let (start_s, end_s) = (pair[0], pair[1]);
            if end_s > start_s {
                rows.push(IntervalRate {
                    cell: cell.id.clone(),
                    sweep: sweep.clone(),
                    step: step.step.clone(),
                    interval,
                    start_s,
                    end_s,
                    rate_hz: 1.0 / (end_s - start_s),
                });
            }
        }
    }
    rows
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::recording::{CellConstants, DriveKind, ProtocolStep, Sweep};
    use crate::steps::meet;

    #[test]
    fn intervals_within_steps_only() {
        let step = |sweep: usize, label: &str, onset_s: f64, offset_s: f64| ProtocolStep {
            sweep,
            step: label.into(),
            onset_s,
            offset_s,
            drive: 100.0,
            g_inh_ns: None,
        };
        let cell = CellRecording {
            id: CellId("c".into()),
            group: None,
            drive_kind: DriveKind::Current,
            constants: CellConstants::default(),
            carried: Vec::new(),
            sweeps: vec![
                Sweep {
                    name: Some("s1".into()),
                    spikes: 0..5,
                },
                Sweep {
                    name: Some("s2".into()),
                    spikes: 5..7,
                },
            ],
            steps: vec![
                step(0, "1", 0.0, 1.0),
                step(0, "2", 1.0, 2.0),
                step(1, "1", 0.0, 1.0),
            ],
            spikes_s: vec![0.25, 0.5, 0.75, 1.25, 1.75, 0.5, 0.5],
            duplicate_spikes: 0,
            refusal: None,
        };
        let rows = interval_rates(&cell, &meet(&cell));
        let short: Vec<_> = rows
            .iter()
            .map(|r| {
                (
                    r.sweep.as_deref(),
                    &*r.step,
                    r.interval,
                    r.start_s,
                    r.end_s,
                    r.rate_hz,
                )
            })
            .collect();
        assert_eq!(
            short,
            [
                (Some("s1"), "1", 1, 0.25, 0.5, 4.0),
                (Some("s1"), "1", 2, 0.5, 0.75, 4.0),
                (Some("s1"), "2", 1, 1.25, 1.75, 2.0),
            ]
        );
    }
}
