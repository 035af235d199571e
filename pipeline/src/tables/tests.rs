#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

use std::collections::BTreeSet;
use std::fs::{self, File};
use std::path::Path;
use std::sync::Arc;

use arrow_array::cast::AsArray;
use arrow_array::types::{Float64Type, Int64Type};
use arrow_array::{Array, RecordBatch};
use arrow_schema::Schema;
use parquet::arrow::arrow_reader::ParquetRecordBatchReaderBuilder;
use parquet::basic::{Compression, Encoding};
use parquet::file::metadata::ParquetMetaData;
use serde_json::Value;

use super::*;
use crate::assess::{Ceiling, CurvePoint, Estimate, Flag, Goodness, ResponseResult, Severity, Status};
use crate::rates::{RateFrom, Response, StepRate};
use crate::recording::{CellId, DriveKind, ProtocolStep, TableKind};

fn rate(step: usize, response: Response) -> StepRate {
    StepRate {
        step,
        response,
        window_start_s: 0.2,
        window_end_s: 0.7,
        spikes: 5,
        intervals: 4,
        rate_hz: 12.5,
        rate_se_hz: 1.5,
        rate_from: RateFrom::Intervals,
        first_spike_latency_s: Some(0.013),
        min_interval_s: Some(0.07),
        cv: Some(0.1),
        cv2: Some(f64::NAN),
        lv: None,
        lvr: Some(0.2),
        adaptation_ratio: Some(0.8),
        used: true,
        fitted_hz: Some(12.0),
        residual_hz: Some(0.5),
        weight: Some(0.4),
    }
}

fn flag(name: &'static str) -> Flag {
    Flag {
        flag: name,
        severity: Severity::Caution,
        value: Some(3.5),
        limit: Some(3.0),
        message: format!("{name}: 3.5 is above 3"),
    }
}

fn goodness(curve: &'static str) -> Goodness {
    Goodness {
        curve,
        parameters: 4,
        steps: 2,
        log_likelihood: Some(-12.25),
        aicc: Some(f64::NAN),
        aicc_weight: Some(0.9),
        bic: Some(30.0),
        rmse_hz: Some(1.1),
        r2: Some(0.98),
        reduced_chi2: Some(1.2),
        lack_of_fit_f: None,
        lack_of_fit_p: None,
        runs_p: Some(0.5),
        loo_rmse_hz: Some(1.3),
        reason: "fitted".into(),
        converged: true,
        evaluations: 431,
    }
}

fn fitted(response: Response) -> ResponseResult {
    let estimate = |value: f64| Estimate {
        value: Some(value),
        se: Some(value / 10.0),
        lo: Some(value * 0.8),
        hi: Some(value * 1.25),
    };
    let covariance: [f64; 16] = std::array::from_fn(|i| i as f64 / 16.0);
    ResponseResult {
        response,
        status: Status::Fitted,
        reason: "fitted to 2 steps".into(),
        steps: 2,
        levels: 2,
        spikes: 10,
        drive_min: Some(20.0),
        drive_max: Some(40.0),
        peak_rate_hz: Some(12.5),
        max_rate: Estimate {
            hi: Some(f64::INFINITY),
            ..estimate(90.0)
        },
        half_rise: estimate(150.0),
        threshold: Estimate {
            lo: Some(f64::NEG_INFINITY),
            ..estimate(55.0)
        },
        noise_sd: Estimate {
            se: Some(f64::NAN),
            ..estimate(8.0)
        },
        initial_gain: estimate(0.6),
        reached: Some(0.7),
        extra_sd_hz: Some(0.9),
        interval_cv: Some(0.15),
        ceiling: Some(Ceiling::Open),
        usable: false,
        flags: vec![flag("rate-drift"), flag("few-levels")],
        covariance: Some(covariance),
        bootstrap: None,
        repeats: None,
        goodness: vec![goodness("smoothed-hyperbola"), goodness("smoothed-ramp")],
        curve: vec![
            CurvePoint {
                drive: 20.0,
                rate_hz: 1.0,
                lo_hz: Some(0.5),
                hi_hz: Some(1.5),
            },
            CurvePoint {
                drive: 40.0,
                rate_hz: 9.0,
                lo_hz: None,
                hi_hz: Some(f64::NAN),
            },
        ],
        rivals: vec![],
        rates: vec![rate(0, response), rate(1, response)],
    }
}

fn refused(response: Response) -> ResponseResult {
    ResponseResult {
        status: Status::Refused,
        reason: "current and conductance are mixed".into(),
        max_rate: Estimate::default(),
        half_rise: Estimate::default(),
        threshold: Estimate::default(),
        noise_sd: Estimate::default(),
        initial_gain: Estimate::default(),
        drive_min: None,
        drive_max: None,
        peak_rate_hz: None,
        reached: None,
        extra_sd_hz: None,
        interval_cv: None,
        ceiling: None,
        flags: vec![],
        covariance: None,
        bootstrap: None,
        repeats: None,
        goodness: vec![],
        curve: vec![],
        rates: vec![],
        ..fitted(response)
    }
}

fn cell(name: &str, kind: DriveKind, sweep: Option<&str>) -> CellResult {
    let step = |number: usize, g_inh_ns| ProtocolStep {
        sweep: 0,
        step: number.to_string().into(),
        onset_s: 0.2,
        offset_s: 0.7,
        drive: 20.0 * number as f64,
        g_inh_ns,
    };
    CellResult {
        id: CellId(name.into()),
        group: Some("basket".into()),
        drive_kind: kind,
        carried: vec![Some("L2/3".into()), None],
        sweep_names: vec![sweep.map(Arc::from)],
        steps: vec![step(1, None), step(2, Some(0.5))],
        spikes_outside: 3,
        responses: vec![fitted(Response::Whole), fitted(Response::Steady)],
    }
}

fn mixed() -> Vec<CellResult> {
    vec![
        cell("TT-01", DriveKind::Current, Some("12")),
        cell("TT-02", DriveKind::Conductance, None),
        CellResult {
            group: None,
            steps: vec![],
            responses: vec![refused(Response::Whole), refused(Response::Steady)],
            ..cell("TT-03", DriveKind::Current, None)
        },
    ]
}

fn context(kinds: &[DriveKind]) -> TableContext {
    TableContext {
        drive_kinds: kinds.to_vec(),
        carried_columns: vec!["layer".into(), "status".into()],
        rates_only: false,
        bootstrap: false,
    }
}

const BOTH: [DriveKind; 2] = [DriveKind::Current, DriveKind::Conductance];

fn inputs() -> Vec<InputFile> {
    ["day1/spikes.csv", "/elsewhere/protocol.csv"]
        .iter()
        .map(|path| InputFile {
            table: Some(TableKind::Spikes),
            path: (*path).into(),
            sha256: "00ff".into(),
            rows: 7,
        })
        .collect()
}

fn refused_rows() -> Vec<RefusedRow> {
    let row = RefusedRow {
        table: TableKind::Spikes,
        file: 0,
        row: 118,
        cell: Some("TT-07".into()),
        column: Some("time"),
        value: Some("n/a".into()),
        reason: "time-not-a-number",
        message: "time is n/a".into(),
    };
    vec![
        row.clone(),
        RefusedRow {
            table: TableKind::Protocol,
            file: 1,
            cell: None,
            column: None,
            value: None,
            ..row
        },
    ]
}

fn write_all(dir: &Path, context: &TableContext, cells: &[CellResult]) -> Vec<WrittenTable> {
    let mut tables = Tables::create(dir, context).unwrap();
    tables.write(cells).unwrap();
    tables.write_refused(&refused_rows(), &inputs()).unwrap();
    tables.finish().unwrap()
}

/// Reads a table back: its Arrow schema, the file's metadata, all rows as one batch (the tests stay below its size).
fn read(dir: &Path, name: &str) -> (Arc<Schema>, Arc<ParquetMetaData>, RecordBatch) {
    let file = File::open(dir.join(format!("{name}.parquet"))).unwrap();
    let builder = ParquetRecordBatchReaderBuilder::try_new(file).unwrap();
    let (schema, metadata) = (Arc::clone(builder.schema()), Arc::clone(builder.metadata()));
    let mut reader = builder.with_batch_size(1 << 20).build().unwrap();
    let batch = reader
        .next()
        .map_or_else(|| RecordBatch::new_empty(Arc::clone(&schema)), Result::unwrap);
    assert!(reader.next().is_none());
    (schema, metadata, batch)
}

fn names(schema: &Schema) -> Vec<&str> {
    schema
        .fields()
        .iter()
        .map(|field| field.name().as_str())
        .collect()
}

fn reals(batch: &RecordBatch, name: &str) -> Vec<Option<f64>> {
    let column = batch.column_by_name(name).unwrap();
    column.as_primitive::<Float64Type>().iter().collect()
}

fn texts(batch: &RecordBatch, name: &str) -> Vec<Option<String>> {
    let column = batch.column_by_name(name).unwrap();
    column
        .as_string::<i32>()
        .iter()
        .map(|text| text.map(str::to_owned))
        .collect()
}

fn some(values: &[&str]) -> Vec<Option<String>> {
    values.iter().map(|value| Some((*value).to_owned())).collect()
}

#[test]
fn tables_and_columns_are_those_of_the_interface() {
    let dir = tempfile::tempdir().unwrap();
    let written = write_all(dir.path(), &context(&BOTH), &mixed());
    let rows: Vec<(&str, u64)> = written.iter().map(|table| (table.name, table.rows)).collect();
    assert_eq!(
        rows,
        [
            ("parameters", 6),
            ("goodness", 8),
            ("curves", 8),
            ("flags", 8),
            ("steps", 8),
            ("refused", 2)
        ]
    );
    let expected = [
        (
            "parameters",
            "cell group response status reason drive drive_unit steps levels spikes drive_min drive_max \
             peak_rate_Hz max_rate_Hz max_rate_Hz_se max_rate_Hz_lo max_rate_Hz_hi half_rise half_rise_se \
             half_rise_lo half_rise_hi threshold threshold_se threshold_lo threshold_hi noise_sd noise_sd_se \
             noise_sd_lo noise_sd_hi initial_gain initial_gain_se initial_gain_lo initial_gain_hi v_threshold_mV \
             v_threshold_mV_se v_threshold_mV_lo v_threshold_mV_hi reached extra_sd_Hz between_sd_Hz misfit_sd_Hz \
             drift_percent drift_p interval_cv ceiling usable flags covariance layer cell_status",
        ),
        (
            "goodness",
            "cell response curve parameters steps log_likelihood aicc aicc_weight bic rmse_Hz r2 reduced_chi2 \
             lack_of_fit_f lack_of_fit_p runs_p loo_rmse_Hz converged reason evaluations",
        ),
        (
            "steps",
            "cell sweep step onset_s offset_s current_pA g_exc_nS g_inh_nS drive response window_start_s \
             window_end_s spikes intervals rate_Hz rate_se_Hz rate_from first_spike_latency_s min_interval_s cv cv2 \
             lv lvr adaptation_ratio used fitted_Hz residual_Hz weight",
        ),
        (
            "curves",
            "cell response drive drive_unit fitted_Hz fitted_lo_Hz fitted_hi_Hz",
        ),
        ("flags", "cell response flag severity value limit message"),
        ("refused", "table file row cell column value reason message"),
    ];
    for (table, columns) in expected {
        let (schema, _, batch) = read(dir.path(), table);
        assert_eq!(
            names(&schema),
            columns.split_whitespace().collect::<Vec<_>>(),
            "{table}"
        );
        let rows = written.iter().find(|written| written.name == table).unwrap().rows;
        assert_eq!(batch.num_rows() as u64, rows, "{table}");
    }
}

#[test]
fn columns_follow_the_kinds_of_drive() {
    for (kinds, steps_have, steps_lack, potential, unit) in [
        (&BOTH[..1], "current_pA", "g_exc_nS", false, "pA"),
        (&BOTH[1..], "g_exc_nS", "current_pA", true, "nS"),
        (&BOTH[..0], "current_pA", "g_exc_nS", false, "pA"),
    ] {
        let dir = tempfile::tempdir().unwrap();
        write_all(dir.path(), &context(kinds), &[]);
        let (steps, _, _) = read(dir.path(), "steps");
        assert!(names(&steps).contains(&steps_have));
        assert!(!names(&steps).contains(&steps_lack));
        let (parameters, _, _) = read(dir.path(), "parameters");
        assert_eq!(names(&parameters).contains(&"v_threshold_mV_lo"), potential);
        let unit_of = |name: &str| {
            parameters
                .field_with_name(name)
                .unwrap()
                .metadata()
                .get("unit")
                .cloned()
        };
        assert_eq!(unit_of("half_rise_se").unwrap(), unit);
        assert_eq!(unit_of("initial_gain_hi").unwrap(), format!("Hz/{unit}"));
        assert_eq!(unit_of("max_rate_Hz").unwrap(), "Hz");
        assert_eq!(unit_of("cell").unwrap(), "");
    }
}

#[test]
fn values_arrive_where_they_belong() {
    let dir = tempfile::tempdir().unwrap();
    write_all(dir.path(), &context(&BOTH), &mixed());

    let (_, _, batch) = read(dir.path(), "parameters");
    assert_eq!(
        texts(&batch, "cell"),
        some(&["TT-01", "TT-01", "TT-02", "TT-02", "TT-03", "TT-03"])
    );
    assert_eq!(
        texts(&batch, "status"),
        some(&["fitted", "fitted", "fitted", "fitted", "refused", "refused"])
    );
    assert_eq!(
        texts(&batch, "drive_unit"),
        some(&["pA", "pA", "nS", "nS", "pA", "pA"])
    );
    assert_eq!(texts(&batch, "layer"), some(&["L2/3"; 6]));
    assert_eq!(texts(&batch, "cell_status"), vec![None; 6]);
    assert_eq!(texts(&batch, "group")[4], None);
    assert_eq!(reals(&batch, "max_rate_Hz")[0], Some(90.0));
    assert_eq!(reals(&batch, "half_rise_se")[0], Some(15.0));
    assert_eq!(reals(&batch, "half_rise_hi")[0], Some(187.5));
    // Open bounds stay infinite; what is not a number is not estimated.
    assert_eq!(reals(&batch, "max_rate_Hz_hi")[0], Some(f64::INFINITY));
    assert_eq!(reals(&batch, "threshold_lo")[0], Some(f64::NEG_INFINITY));
    assert_eq!(reals(&batch, "noise_sd_se")[0], None);
    assert_eq!(reals(&batch, "interval_cv")[0], Some(0.15));
    assert_eq!(reals(&batch, "v_threshold_mV"), vec![None; 6]);
    for name in ["max_rate_Hz", "drive_min", "reached", "threshold_lo"] {
        assert_eq!(reals(&batch, name)[4], None, "{name}");
    }
    let flags = batch.column_by_name("flags").unwrap().as_list::<i32>().clone();
    let first = flags.value(0);
    let first: Vec<Option<&str>> = first.as_string::<i32>().iter().collect();
    assert_eq!(first, [Some("rate-drift"), Some("few-levels")]);
    assert!(
        flags.is_valid(4) && flags.value(4).is_empty(),
        "no flag is an empty list"
    );
    let covariance = batch
        .column_by_name("covariance")
        .unwrap()
        .as_list::<i32>()
        .clone();
    let first = covariance.value(0);
    let first = first.as_primitive::<Float64Type>();
    assert_eq!((first.len(), first.value(5)), (16, 5.0 / 16.0));
    assert!(covariance.is_null(4));

    let (_, _, batch) = read(dir.path(), "steps");
    let kinds = [reals(&batch, "current_pA"), reals(&batch, "g_exc_nS")];
    assert_eq!(kinds[0][..2], [Some(20.0), Some(40.0)]);
    assert_eq!(kinds[0][4..], [None; 4]);
    assert_eq!(kinds[1][..4], [None; 4]);
    assert_eq!(kinds[1][4..6], [Some(20.0), Some(40.0)]);
    assert_eq!(reals(&batch, "g_inh_nS")[..2], [None, Some(0.5)]);
    assert_eq!(reals(&batch, "cv2"), vec![None; 8]);
    assert_eq!(texts(&batch, "sweep")[0].as_deref(), Some("12"));
    assert_eq!(texts(&batch, "sweep")[4], None);
    assert_eq!(
        texts(&batch, "response")[..4],
        some(&["whole", "whole", "steady", "steady"])
    );

    let (_, _, batch) = read(dir.path(), "curves");
    assert_eq!(reals(&batch, "fitted_lo_Hz")[..2], [Some(0.5), None]);
    assert_eq!(reals(&batch, "fitted_hi_Hz")[..2], [Some(1.5), None]);

    let (_, _, batch) = read(dir.path(), "goodness");
    assert_eq!(reals(&batch, "aicc"), vec![None; 8]);
    assert_eq!(reals(&batch, "log_likelihood")[0], Some(-12.25));
    let evaluations = batch.column_by_name("evaluations").unwrap();
    assert_eq!(evaluations.as_primitive::<Int64Type>().value(0), 431);

    let (_, _, batch) = read(dir.path(), "refused");
    assert_eq!(texts(&batch, "table"), some(&["spikes", "protocol"]));
    // No path of the machine, even where the set names one.
    assert_eq!(texts(&batch, "file"), some(&["day1/spikes.csv", "protocol.csv"]));
    assert_eq!(texts(&batch, "column"), [Some("time".to_owned()), None]);
}

#[test]
fn a_covariance_that_is_not_finite_is_not_estimated() {
    for bad in [f64::NAN, f64::INFINITY] {
        let mut cells = mixed();
        cells[0].responses[0].covariance.as_mut().unwrap()[7] = bad;
        let dir = tempfile::tempdir().unwrap();
        write_all(dir.path(), &context(&BOTH), &cells);
        let (_, _, batch) = read(dir.path(), "parameters");
        let covariance = batch.column_by_name("covariance").unwrap();
        assert!(covariance.is_null(0) && covariance.is_valid(1));
    }
}

#[test]
fn units_and_descriptions_are_told_in_every_place() {
    let dir = tempfile::tempdir().unwrap();
    let written = write_all(dir.path(), &context(&BOTH), &mixed());
    for table in &written {
        let (schema, metadata, _) = read(dir.path(), table.name);
        let file = metadata.file_metadata();
        let pairs = file.key_value_metadata().unwrap();
        let in_file = |key: &str| {
            let found: Vec<_> = pairs.iter().filter(|pair| pair.key == key).collect();
            assert_eq!(found.len(), 1, "{key}");
            found[0].value.clone().unwrap()
        };
        // The Arrow schema travels encoded in the file; read it on its own, without the file's pairs.
        let only: Vec<_> = pairs
            .iter()
            .filter(|pair| pair.key == "ARROW:schema")
            .cloned()
            .collect();
        assert_eq!(only.len(), 1);
        let arrow = parquet::arrow::parquet_to_arrow_schema(file.schema_descr(), Some(&only)).unwrap();
        for key in ["halfrise.schema", "halfrise.columns", "PANDAS_ATTRS"] {
            assert_eq!(arrow.metadata().get(key), Some(&in_file(key)), "{key}");
        }
        assert_eq!(in_file("halfrise.columns"), in_file("PANDAS_ATTRS"));
        let about: Value = serde_json::from_str(&in_file("halfrise.schema")).unwrap();
        assert_eq!(about["table"], table.name);
        assert_eq!(about["version"], 1);
        let columns: Value = serde_json::from_str(&in_file("halfrise.columns")).unwrap();
        let columns = columns.as_object().unwrap();
        assert_eq!(
            columns.keys().map(String::as_str).collect::<Vec<_>>(),
            names(&schema)
        );
        for field in schema.fields() {
            let (unit, description) = (&field.metadata()["unit"], &field.metadata()["description"]);
            assert_eq!(columns[field.name()]["unit"], unit.as_str());
            assert_eq!(columns[field.name()]["description"], description.as_str());
            assert!(!description.is_empty());
            // A fixed unit stands at the end of the name, before what marks error and bounds.
            let stem = ["_se", "_lo", "_hi"]
                .iter()
                .find_map(|end| field.name().strip_suffix(end))
                .unwrap_or(field.name());
            for symbol in ["Hz", "s", "mV", "pA", "nS"] {
                let named = stem.ends_with(&format!("_{symbol}"));
                assert_eq!(named, unit == symbol, "{} in {unit}", field.name());
            }
        }
        assert_eq!(
            file.created_by(),
            Some(concat!("halfrise ", env!("CARGO_PKG_VERSION")))
        );
    }
}

#[test]
fn dictionaries_for_text_only_and_zstd_throughout() {
    let dir = tempfile::tempdir().unwrap();
    for table in write_all(dir.path(), &context(&BOTH), &mixed()) {
        let (_, metadata, _) = read(dir.path(), table.name);
        for column in metadata.row_group(0).columns() {
            let text = column.column_type() == parquet::basic::Type::BYTE_ARRAY;
            let dictionary = column
                .encodings()
                .any(|encoding| encoding == Encoding::RLE_DICTIONARY);
            assert_eq!(text, dictionary, "{} {}", table.name, column.column_path());
            assert!(matches!(column.compression(), Compression::ZSTD(_)));
        }
    }
}

#[test]
fn row_groups_are_bounded_and_bytes_do_not_depend_on_how_rows_come() {
    let mut one = cell("TT-01", DriveKind::Current, None);
    one.responses.truncate(1);
    one.responses[0].rates.clear();
    one.responses[0].curve = (0..1000)
        .map(|i| CurvePoint {
            drive: f64::from(i),
            rate_hz: f64::from(i).sqrt(),
            lo_hz: None,
            hi_hz: None,
        })
        .collect();
    let cells: Vec<CellResult> = (0..300)
        .map(|i| CellResult {
            id: CellId(format!("TT-{i}").into()),
            ..one.clone()
        })
        .collect();
    let (whole, parts) = (tempfile::tempdir().unwrap(), tempfile::tempdir().unwrap());
    write_all(whole.path(), &context(&BOTH[..1]), &cells);
    let mut tables = Tables::create(parts.path(), &context(&BOTH[..1])).unwrap();
    tables.write_refused(&refused_rows()[..1], &inputs()).unwrap();
    for part in cells.chunks(7) {
        tables.write(part).unwrap();
    }
    tables.write_refused(&refused_rows()[1..], &inputs()).unwrap();
    let written = tables.finish().unwrap();
    for table in &written {
        let name = format!("{}.parquet", table.name);
        assert_eq!(
            fs::read(whole.path().join(&name)).unwrap(),
            fs::read(parts.path().join(&name)).unwrap(),
            "{name}"
        );
    }
    let (_, metadata, batch) = read(whole.path(), "curves");
    let groups: Vec<i64> = metadata
        .row_groups()
        .iter()
        .map(|group| group.num_rows())
        .collect();
    assert_eq!(groups, [131_072, 131_072, 37_856]);
    let drives = reals(&batch, "drive");
    assert!(
        drives
            .iter()
            .enumerate()
            .all(|(i, drive)| *drive == Some((i % 1000) as f64))
    );
}

#[test]
fn rates_alone_have_two_tables_without_fitted_columns() {
    let dir = tempfile::tempdir().unwrap();
    let context = TableContext {
        rates_only: true,
        bootstrap: false,
        ..context(&BOTH[..1])
    };
    let written = write_all(dir.path(), &context, &mixed()[..1]);
    let found: BTreeSet<String> = fs::read_dir(dir.path())
        .unwrap()
        .map(|entry| entry.unwrap().file_name().into_string().unwrap())
        .collect();
    assert_eq!(
        found.into_iter().collect::<Vec<_>>(),
        ["refused.parquet", "steps.parquet"]
    );
    assert_eq!(written.len(), 2);
    let (schema, _, _) = read(dir.path(), "steps");
    assert!(names(&schema).contains(&"used"));
    for name in ["fitted_Hz", "residual_Hz", "weight"] {
        assert!(!names(&schema).contains(&name));
    }
}

#[test]
fn carried_columns_never_take_a_name_of_ours_or_of_each_other() {
    let dir = tempfile::tempdir().unwrap();
    let carried = ["status", "cell_status", "v_threshold_mV", "depth"];
    let context = TableContext {
        carried_columns: carried.map(str::to_owned).to_vec(),
        ..context(&BOTH[..1])
    };
    let mut one = cell("TT-01", DriveKind::Current, None);
    one.carried = carried.map(|name| Some(name.into())).to_vec();
    write_all(dir.path(), &context, &[one]);
    let (schema, _, batch) = read(dir.path(), "parameters");
    let all = names(&schema);
    let new = &all[all.len() - 4..];
    assert_eq!(
        new,
        ["cell_status", "cell_cell_status", "cell_v_threshold_mV", "depth"]
    );
    for (name, original) in new.iter().zip(carried) {
        assert_eq!(texts(&batch, name), some(&[original; 2]));
    }
}

#[test]
fn contradictions_are_errors_that_name_the_file() {
    let dir = tempfile::tempdir().unwrap();
    let good = || cell("TT-01", DriveKind::Current, None);
    let mut no_step = good();
    no_step.steps.pop();
    let mut no_response = good();
    no_response.responses.clear();
    let mut no_carried = good();
    no_carried.carried.clear();
    for (cell, file, word) in [
        (no_step, "steps.parquet", "a rate of step 1"),
        (no_response, "parameters.parquet", "no response"),
        (no_carried, "parameters.parquet", "0 columns"),
    ] {
        let mut tables = Tables::create(dir.path(), &context(&BOTH[..1])).unwrap();
        let error = tables.write(&[cell]).unwrap_err();
        assert!(
            error.path().ends_with(file) && error.to_string().contains(word),
            "{error}"
        );
        assert_eq!(error.class(), WriteErrorClass::Io);
    }
    let mut tables = Tables::create(dir.path(), &context(&BOTH[..1])).unwrap();
    let error = tables.write_refused(&refused_rows(), &inputs()[..1]).unwrap_err();
    assert!(error.path().ends_with("refused.parquet"), "{error}");
}

#[test]
fn a_folder_in_the_place_of_a_file_is_named() {
    let dir = tempfile::tempdir().unwrap();
    fs::create_dir(dir.path().join("goodness.parquet")).unwrap();
    let error = Tables::create(dir.path(), &context(&BOTH)).err().unwrap();
    assert!(error.path().ends_with("goodness.parquet"), "{error}");
    assert_eq!(error.class(), WriteErrorClass::Io);
}

#[cfg(target_os = "linux")]
#[test]
fn a_full_disk_is_named_with_a_remedy() {
    for name in ["steps.parquet", "refused.parquet"] {
        let dir = tempfile::tempdir().unwrap();
        std::os::unix::fs::symlink("/dev/full", dir.path().join(name)).unwrap();
        let mut tables = Tables::create(dir.path(), &context(&BOTH)).unwrap();
        tables.write(&mixed()).unwrap();
        let error = tables.finish().unwrap_err();
        assert!(error.path().ends_with(name), "{error}");
        assert!(error.to_string().contains("free some space"), "{error}");
    }
}

fn put(folder: &Path, file: &str, content: &str) {
    fs::create_dir_all(folder).unwrap();
    fs::write(folder.join(file), content).unwrap();
}

fn names_in(folder: &Path) -> Vec<String> {
    let mut names: Vec<String> = fs::read_dir(folder)
        .unwrap()
        .map(|entry| entry.unwrap().file_name().into_string().unwrap())
        .collect();
    names.sort();
    names
}

const OURS: &str = "{\"program\": \"halfrise\"}";

#[test]
fn results_appear_only_on_commit() {
    let place = tempfile::tempdir().unwrap();
    let out = place.path().join("reports/deep/lateral");
    let folder = ResultFolder::prepare(&out, false).unwrap();
    put(folder.path(), "run.json", OURS);
    put(&folder.path().join("figures"), "a.svg", "<svg/>");
    assert!(!out.exists());
    folder.commit().unwrap();
    assert_eq!(names_in(&out), ["figures", "run.json"]);
    assert_eq!(
        names_in(out.parent().unwrap()),
        ["lateral"],
        "nothing hidden is left"
    );

    // Dropped without commit: as if it had never been.
    let folder = ResultFolder::prepare(&out, true).unwrap();
    put(folder.path(), "run.json", "half");
    drop(folder);
    assert_eq!(fs::read_to_string(out.join("run.json")).unwrap(), OURS);
    assert_eq!(names_in(out.parent().unwrap()), ["lateral"]);

    // Overwritten: the old files are gone, not mixed with the new.
    let folder = ResultFolder::prepare(&out, true).unwrap();
    put(folder.path(), "summary.md", "new");
    folder.commit().unwrap();
    assert_eq!(names_in(&out), ["summary.md"]);
    assert_eq!(names_in(out.parent().unwrap()), ["lateral"]);
}

#[cfg(unix)]
#[test]
fn the_result_folder_is_as_open_as_any_other() {
    use std::os::unix::fs::PermissionsExt;
    let place = tempfile::tempdir().unwrap();
    let (out, plain) = (place.path().join("out"), place.path().join("plain"));
    fs::create_dir(&plain).unwrap();
    ResultFolder::prepare(&out, false).unwrap().commit().unwrap();
    let mode = |path: &Path| fs::metadata(path).unwrap().permissions().mode();
    assert_eq!(mode(&out), mode(&plain));
}

#[test]
fn a_swap_that_fails_puts_the_old_results_back() {
    let place = tempfile::tempdir().unwrap();
    let out = place.path().join("out");
    put(&out, "run.json", OURS);
    // The n-th rename fails: moving the old away, moving the new in.
    for failing in [1, 2] {
        let folder = ResultFolder::prepare(&out, true).unwrap();
        put(folder.path(), "run.json", "new");
        let count = std::cell::Cell::new(0);
        let error = folder
            .commit_by(|from, to| {
                count.set(count.get() + 1);
                if count.get() == failing {
                    return Err(std::io::ErrorKind::StorageFull.into());
                }
                fs::rename(from, to)
            })
            .unwrap_err();
        assert_eq!(error.class(), WriteErrorClass::Io);
        assert!(error.to_string().contains("put in place"), "{error}");
        assert_eq!(fs::read_to_string(out.join("run.json")).unwrap(), OURS);
        assert_eq!(names_in(place.path()), ["out"]);
    }
    // Not even the way back works: the old results are kept where the error says.
    let folder = ResultFolder::prepare(&out, true).unwrap();
    let count = std::cell::Cell::new(0);
    let error = folder
        .commit_by(|from, to| {
            count.set(count.get() + 1);
            if count.get() > 1 {
                return Err(std::io::ErrorKind::StorageFull.into());
            }
            fs::rename(from, to)
        })
        .unwrap_err();
    let hidden = names_in(place.path());
    assert_eq!(hidden.len(), 1);
    let kept = fs::canonicalize(place.path())
        .unwrap()
        .join(&hidden[0])
        .join("old");
    assert_eq!(fs::read_to_string(kept.join("run.json")).unwrap(), OURS);
    assert!(error.to_string().contains(&kept.display().to_string()), "{error}");
}

#[test]
fn what_must_not_be_replaced_is_not() {
    let place = tempfile::tempdir().unwrap();
    let at = |name: &str| place.path().join(name);
    put(&at("results"), "run.json", OURS);
    put(&at("foreign"), "run.json", "{\"program\": \"other\"}");
    put(&at("thesis"), "chapter.txt", "words");
    put(&at("set"), "run.json", OURS);
    put(&at("set"), "Spikes.csv.gz", "");
    put(&at("set2"), "recording.toml", "");
    put(place.path(), "file", "");
    fs::create_dir(at("empty")).unwrap();
    for (name, overwrite, word) in [
        ("results", false, "--overwrite to replace"),
        ("foreign", true, "no run.json of halfrise"),
        ("thesis", true, "no run.json of halfrise"),
        ("thesis", false, "not empty"),
        ("set", true, "Spikes.csv.gz"),
        ("set2", true, "recording.toml"),
        ("file", true, "is a file"),
    ] {
        let before = names_in(place.path());
        let error = ResultFolder::prepare(&at(name), overwrite).unwrap_err();
        assert_eq!(error.class(), WriteErrorClass::Exists, "{error}");
        assert!(error.to_string().contains(word), "{error}");
        assert!(error.to_string().contains("--out"), "{error}");
        assert_eq!(names_in(place.path()), before);
    }
    // Recordings anywhere below results of ours would be removed with them.
    for (name, inside, file) in [
        ("parent", "recordings", "protocol.tsv.zst"),
        ("ancestor", "a/b/c", "recording.toml"),
    ] {
        put(&at(name), "run.json", OURS);
        put(&at(name).join(inside), file, "mine");
        let error = ResultFolder::prepare(&at(name), true).unwrap_err();
        assert_eq!(error.class(), WriteErrorClass::Exists, "{error}");
        let told = Path::new(inside).join(file).display().to_string();
        assert!(
            error.to_string().contains(&told) && error.to_string().contains("move the recordings"),
            "{error}"
        );
        assert_eq!(
            fs::read_to_string(at(name).join(inside).join(file)).unwrap(),
            "mine"
        );
    }
    // Put there while the run went on: kept too, and the old results with them.
    let folder = ResultFolder::prepare(&at("results"), true).unwrap();
    put(&at("results").join("late"), "spikes.csv", "mine");
    assert_eq!(folder.commit().unwrap_err().class(), WriteErrorClass::Exists);
    assert_eq!(names_in(&at("results")), ["late", "run.json"]);
    assert_eq!(
        fs::read_to_string(at("results").join("late/spikes.csv")).unwrap(),
        "mine"
    );

    let below_file = ResultFolder::prepare(&at("file").join("out"), false).unwrap_err();
    assert_eq!(below_file.class(), WriteErrorClass::Io);
    ResultFolder::prepare(&at("empty"), false)
        .unwrap()
        .commit()
        .unwrap();

    // Filled by someone else between the two: kept.
    let folder = ResultFolder::prepare(&at("late"), false).unwrap();
    put(&at("late"), "chapter.txt", "words");
    assert_eq!(folder.commit().unwrap_err().class(), WriteErrorClass::Exists);
    assert_eq!(names_in(&at("late")), ["chapter.txt"]);
}

#[test]
fn provenance_counts_and_names_no_place() {
    let rows = crate::recording::RowCounts {
        rows: 10,
        used: 6,
        outside_steps: 3,
        refused: 1,
    };
    let set = crate::recording::RecordingSet {
        name: "lateral shelf".into(),
        folder: "/elsewhere/set".into(),
        has_sweeps: true,
        inputs: inputs(),
        carried_columns: vec![],
        cells: vec![],
        refused: refused_rows(),
        spike_rows: rows,
        protocol_rows: rows,
        cell_rows: None,
        analysis: crate::settings::Analysis::default(),
        notes: vec![],
    };
    let mut counts = Counts::default();
    counts.add(&mixed()[..1]);
    counts.add(&mixed()[1..]);
    counts.add_refused(&set.refused);
    let dir = tempfile::tempdir().unwrap();
    let tables = vec![WrittenTable {
        name: "parameters",
        rows: 6,
    }];
    Provenance::new(&set, &set.analysis, counts, tables)
        .write(dir.path())
        .unwrap();
    let text = fs::read_to_string(dir.path().join(RUN_FILE)).unwrap();
    assert!(!text.contains("elsewhere"), "{text}");
    let json: Value = serde_json::from_str(&text).unwrap();
    assert_eq!(json["version"], env!("CARGO_PKG_VERSION"));
    assert_eq!(json["name"], "lateral shelf");
    assert_eq!(json["settings"]["loose_ratio"], 1.5);
    assert_eq!(json["inputs"][0]["path"], "day1/spikes.csv");
    assert_eq!(json["inputs"][0]["sha256"], "00ff");
    assert_eq!(json["rows"]["spikes"]["outside_steps"], 3);
    assert!(json["rows"]["cells"].is_null() && json["seed"].is_null());
    assert_eq!(json["counts"]["cells"], 3);
    let whole = &json["counts"]["responses"]["whole"];
    assert_eq!(whole["status"]["fitted"], 2);
    assert_eq!(whole["status"]["refused"], 1);
    assert_eq!(whole["status"]["silent"], 0);
    assert_eq!(whole["ceiling"]["open"], 2);
    assert_eq!(whole["no_verdict"], 1);
    assert_eq!(json["counts"]["flags"]["rate-drift"], 4);
    assert_eq!(json["counts"]["refused"]["time-not-a-number"], 2);
    assert_eq!(json["tables"][0]["rows"], 6);

    let full = dir.path().join("taken");
    fs::create_dir_all(full.join(RUN_FILE)).unwrap();
    let error = Provenance::new(&set, &set.analysis, Counts::default(), vec![])
        .write(&full)
        .unwrap_err();
    assert!(error.path().ends_with(RUN_FILE), "{error}");
}

#[test]
fn a_real_run_file_lets_its_folder_be_overwritten() {
    let place = tempfile::tempdir().unwrap();
    let out = place.path().join("out");
    let set = crate::recording::RecordingSet {
        name: String::new(),
        folder: "set".into(),
        has_sweeps: false,
        inputs: vec![],
        carried_columns: vec![],
        cells: vec![],
        refused: vec![],
        spike_rows: Default::default(),
        protocol_rows: Default::default(),
        cell_rows: None,
        analysis: crate::settings::Analysis::default(),
        notes: vec![],
    };
    let provenance = Provenance::new(&set, &set.analysis, Counts::default(), vec![]);
    for overwrite in [false, true] {
        let folder = ResultFolder::prepare(&out, overwrite).unwrap();
        provenance.write(folder.path()).unwrap();
        folder.commit().unwrap();
    }
    assert_eq!(names_in(&out), [RUN_FILE]);
}
