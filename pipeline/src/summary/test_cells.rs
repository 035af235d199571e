//! Made-up cells for the tests of summary and figures.

use std::path::PathBuf;
use std::sync::Arc;

use crate::assess::{Ceiling, CellResult, CurvePoint, Estimate, Flag, ResponseResult, Severity, Status};
use crate::rates::{RateFrom, Response, StepRate, fit_se};
use crate::recording::{
    CellConstants, CellId, CellRecording, DriveKind, InputFile, ProtocolStep, RecordingSet, RefusedRow,
    RowCounts, TableKind,
};
use crate::settings::Analysis;

/// Scatter between the steps of the cells, Hz.
const EXTRA_SD: f64 = 1.1;

pub(super) fn estimate(value: f64, below: f64, above: f64) -> Estimate {
    Estimate {
        value: Some(value),
        se: Some(0.25 * (below + above)),
        lo: Some(value - below),
        hi: Some(value + above),
    }
}

/// A cell whose responses all have this verdict; 16 drives, twice each.
pub(super) fn cell(id: &str, verdict: Ceiling) -> CellResult {
    let kind = DriveKind::Current;
    let drives: Vec<f64> = (0..32).map(|i| -50.0 + 30.0 * f64::from(i / 2)).collect();
    let steps = drives
        .iter()
        .enumerate()
        .map(|(i, drive)| ProtocolStep {
            sweep: 0,
            step: i.to_string().into(),
            onset_s: i as f64,
            offset_s: i as f64 + 0.8,
            drive: *drive,
            g_inh_ns: None,
        })
        .collect();
    CellResult {
        id: CellId(Arc::from(id)),
        group: Some("L5 pyramidal".into()),
        drive_kind: kind,
        carried: Vec::new(),
        sweep_names: vec![None],
        steps,
        spikes_outside: 0,
        responses: [Response::Whole, Response::Steady, Response::Onset]
            .into_iter()
            .enumerate()
            .map(|(i, r)| response(r, verdict, &drives, 1.0 - 0.2 * i as f64))
            .collect(),
    }
}

fn response(response: Response, verdict: Ceiling, drives: &[f64], size: f64) -> ResponseResult {
    let open = verdict == Ceiling::Open;
    let half = if open { 2500.0 } else { 110.0 };
    let max = size * if open { 900.0 } else { 120.0 };
    let threshold = 42.0;
    let rate = |drive: f64| {
        let u = (drive - threshold) / half;
        // Softened at the threshold so that the curve looks like a smoothed one.
        let soft = 0.08 * (1.0 + (u / 0.08).exp()).ln();
        let soft = if soft.is_finite() { soft } else { u };
        max * soft / (1.0 + soft)
    };
    let falls = |drive: f64| verdict == Ceiling::Declining && drive > 310.0;
    let silent = verdict == Ceiling::Silent;
    let rates: Vec<StepRate> = drives
        .iter()
        .enumerate()
        .map(|(i, &drive)| {
            let wobble = 1.0 + 0.06 * ((i as f64 * 12.9898).sin());
            let fitted = rate(drive);
            let mut hz = fitted * wobble;
            if falls(drive) {
                hz *= 0.35;
            }
            if silent || hz < 1.5 {
                hz = 0.0;
            }
            let used = !falls(drive) && !silent;
            let se = if hz > 0.0 { 0.9 + 0.05 * hz } else { 0.36 };
            let made = StepRate {
                step: i,
                response,
                window_start_s: i as f64,
                window_end_s: i as f64 + 0.8,
                spikes: (hz * 0.8) as usize,
                intervals: (hz * 0.8) as usize,
                rate_hz: hz,
                rate_se_hz: se,
                rate_from: if hz > 0.0 {
                    RateFrom::Intervals
                } else {
                    RateFrom::Silent
                },
                first_spike_latency_s: None,
                min_interval_s: None,
                cv: None,
                cv2: None,
                lv: None,
                lvr: None,
                adaptation_ratio: None,
                used,
                fitted_hz: used.then_some(fitted),
                residual_hz: used.then_some(hz - fitted),
                weight: None,
            };
            StepRate {
                weight: used.then(|| 1.0 / (fit_se(&made).powi(2) + EXTRA_SD * EXTRA_SD)),
                ..made
            }
        })
        .collect();
    let curve = if silent {
        Vec::new()
    } else {
        (0..101)
            .map(|i| {
                let drive = -50.0 + 4.5 * f64::from(i);
                let hz = rate(drive);
                CurvePoint {
                    drive,
                    rate_hz: hz,
                    lo_hz: Some(hz * 0.94 - 0.3),
                    hi_hz: Some(hz * 1.06 + 0.3),
                }
            })
            .collect()
    };
    let (max_rate, half_rise) = match verdict {
        Ceiling::Open => (
            Estimate {
                lo: Some(310.0 * size),
                hi: Some(f64::INFINITY),
                ..Estimate::default()
            },
            Estimate {
                lo: Some(800.0),
                hi: Some(f64::INFINITY),
                ..Estimate::default()
            },
        ),
        Ceiling::Silent => Default::default(),
        Ceiling::Loose => (estimate(max, 22.0, 61.0), estimate(half, 24.0, 70.0)),
        _ => (estimate(max, 7.3, 9.1), estimate(half, 12.0, 14.5)),
    };
    let fitted = |e: Estimate| if silent { Estimate::default() } else { e };
    ResponseResult {
        response,
        status: if silent { Status::Silent } else { Status::Fitted },
        reason: if silent {
            "0 steps have a rate from intervals; at least 3 are needed. Record at larger drives.".into()
        } else {
            "fitted".into()
        },
        steps: drives.len(),
        levels: drives.len() / 2,
        spikes: 100,
        drive_min: drives.first().copied(),
        drive_max: drives.iter().copied().rfind(|drive| !falls(*drive)),
        peak_rate_hz: Some(90.0),
        max_rate,
        half_rise,
        threshold: fitted(estimate(threshold, 6.1, 5.2)),
        noise_sd: fitted(estimate(21.4, 4.4, 5.2)),
        initial_gain: fitted(estimate(max / half, 0.08, 0.11)),
        reached: (!open && !silent).then_some(0.78),
        extra_sd_hz: Some(EXTRA_SD),
        interval_cv: Some(0.2),
        ceiling: Some(verdict),
        usable: matches!(verdict, Ceiling::Resolved | Ceiling::Loose),
        flags: Vec::new(),
        covariance: None,
        bootstrap: None,
        repeats: None,
        goodness: Vec::new(),
        curve,
        rivals: Vec::new(),
        rates,
    }
}

pub(super) fn flag(name: &'static str, severity: Severity, message: &str) -> Flag {
    Flag {
        flag: name,
        severity,
        value: Some(1.0),
        limit: Some(2.0),
        message: message.into(),
    }
}

/// The recording that goes with the cells, with two rows refused.
pub(super) fn set(name: &str, cells: &[CellResult]) -> RecordingSet {
    RecordingSet {
        name: name.into(),
        folder: PathBuf::from("set"),
        has_sweeps: false,
        inputs: vec![
            InputFile {
                table: None,
                path: "recording.toml".into(),
                sha256: "0a".repeat(32),
                rows: 0,
            },
            InputFile {
                table: Some(TableKind::Spikes),
                path: "spikes|a.csv".into(),
                sha256: "1b".repeat(32),
                rows: 1234,
            },
            InputFile {
                table: Some(TableKind::Protocol),
                path: "protocol.csv".into(),
                sha256: "2c".repeat(32),
                rows: 64,
            },
        ],
        carried_columns: Vec::new(),
        cells: cells
            .iter()
            .map(|cell| CellRecording {
                id: cell.id.clone(),
                group: cell.group.clone(),
                drive_kind: cell.drive_kind,
                constants: CellConstants::default(),
                carried: Vec::new(),
                sweeps: Vec::new(),
                steps: cell.steps.clone(),
                spikes_s: vec![0.1; 10],
                duplicate_spikes: 0,
                refusal: None,
            })
            .collect(),
        refused: (0..2)
            .map(|row| RefusedRow {
                table: TableKind::Spikes,
                file: 1,
                row: row + 7,
                cell: Some("c|1".into()),
                column: Some("spike_time_s"),
                value: Some("n/a <b>\n".into()),
                reason: "time-not-a-number",
                message: "the time is not a number; correct or delete the row".into(),
            })
            .collect(),
        spike_rows: RowCounts {
            rows: 1234,
            used: 1200,
            outside_steps: 32,
            refused: 2,
        },
        protocol_rows: RowCounts {
            rows: 64,
            used: 64,
            outside_steps: 0,
            refused: 0,
        },
        cell_rows: None,
        analysis: Analysis::default(),
        notes: vec!["times are in ms (header `time (ms)`)".into()],
    }
}
