//! Spikes meet the protocol: which spikes of a cell fall into which step.

use crate::recording::CellRecording;

/// The spikes of one cell, step by step. Borrowed from the recording; nothing is copied.
#[derive(Clone, Debug, PartialEq)]
pub struct StepSpikes<'a> {
    /// For every step of the cell, in its order, the spike times with onset <= t < offset, ascending, seconds.
    pub of_step: Vec<&'a [f64]>,
    /// Number of the cell's spikes outside every step.
    pub outside: usize,
}

/// Finds every step's spikes by binary search within its sweep.
///
/// A spike exactly at the onset belongs to the step, one exactly at the offset does not, so that two steps that touch
/// never share a spike. A step the spike table never mentions gets an empty slice: it is silent, not missing.
pub fn meet(cell: &CellRecording) -> StepSpikes<'_> {
    let of_step: Vec<&[f64]> = cell.steps.iter().map(|step| cell.spikes_in(step)).collect();
    let inside: usize = of_step.iter().map(|spikes| spikes.len()).sum();
    StepSpikes {
        of_step,
        // Accepted steps of a sweep are disjoint, so no spike is counted twice.
        outside: cell.spikes_s.len().saturating_sub(inside),
    }
}

#[cfg(test)]
mod tests {
    #![allow(clippy::single_range_in_vec_init)]
    use super::*;
    use crate::recording::{CellConstants, CellId, DriveKind, ProtocolStep, Sweep};

    fn step(sweep: usize, onset_s: f64, offset_s: f64) -> ProtocolStep {
        ProtocolStep {
            sweep,
            step: "1".into(),
            onset_s,
            offset_s,
            drive: 1.0,
            g_inh_ns: None,
        }
    }

    fn cell(
        sweeps: &[std::ops::Range<usize>],
        steps: Vec<ProtocolStep>,
        spikes_s: Vec<f64>,
    ) -> CellRecording {
        CellRecording {
            id: CellId("c".into()),
            group: None,
            drive_kind: DriveKind::Current,
            constants: CellConstants::default(),
            carried: Vec::new(),
            sweeps: sweeps
                .iter()
                .map(|spikes| Sweep {
                    name: None,
                    spikes: spikes.clone(),
                })
                .collect(),
            steps,
            spikes_s,
            duplicate_spikes: 0,
            refusal: None,
        }
    }

    #[test]
    fn onset_belongs_and_offset_does_not() {
        let cell = cell(
            &[0..5],
            vec![step(0, 0.5, 1.0), step(0, 1.0, 1.5), step(0, 3.0, 4.0)],
            vec![0.1, 0.5, 0.75, 1.0, 1.5],
        );
        let met = meet(&cell);
        assert_eq!(met.of_step, [&[0.5, 0.75][..], &[1.0], &[]]);
        assert_eq!(met.outside, 2);
    }

    #[test]
    fn sweeps_keep_their_own_time() {
        let cell = cell(
            &[0..2, 2..2, 2..5],
            vec![step(0, 0.0, 1.0), step(1, 0.0, 1.0), step(2, 0.0, 1.0)],
            vec![0.2, 2.0, 0.1, 0.2, 0.3],
        );
        let met = meet(&cell);
        assert_eq!(met.of_step, [&[0.2][..], &[], &[0.1, 0.2, 0.3]]);
        assert_eq!(met.outside, 1);
    }

    #[test]
    fn a_cell_without_steps_has_every_spike_outside() {
        let met_cell = cell(&[0..2], Vec::new(), vec![0.2, 2.0]);
        let met = meet(&met_cell);
        assert!(met.of_step.is_empty());
        assert_eq!(met.outside, 2);
    }
}
