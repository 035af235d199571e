//! Parquet, Arrow and packed text: the same set as plain CSV, whatever the column types.

use std::io::Write;

use polars::prelude::{
    Categories, Column, DataFrame, DataType, IntoColumn, IpcCompression, IpcWriter, NamedFrom, ParquetWriter,
    SerWriter, Series,
};

use super::*;

const PROTOCOL: &str = "cell,sweep,onset,offset,current\n1,3,0.5,1,100\n2,3,0.5,1,50\n1,12,0.25,1,-20\n";

fn spikes(cell: DataType, sweep: DataType, time: DataType) -> DataFrame {
    let text = |name: &str, values: &[&str], dtype: &DataType| -> Column {
        let series = Series::new(name.into(), values);
        let whole = dtype.is_primitive_numeric();
        let series = if whole {
            series.cast(&DataType::Int64).unwrap()
        } else {
            series
        };
        series.cast(dtype).unwrap().into_column()
    };
    let time = Series::new("time".into(), &[0.75_f64, 0.5, 0.25, 0.875])
        .cast(&time)
        .unwrap();
    DataFrame::new(
        4,
        vec![
            text("cell", &["2", "1", "1", "1"], &cell),
            text("sweep", &["3", "12", "3", "3"], &sweep),
            time.into_column(),
            Series::new("remark".into(), &["a", "b", "c", "d"]).into_column(),
        ],
    )
    .unwrap()
}

pub fn parquet(frame: &mut DataFrame) -> Vec<u8> {
    let mut bytes = Vec::new();
    ParquetWriter::new(&mut bytes)
        .with_row_group_size(Some(3))
        .finish(frame)
        .unwrap();
    bytes
}

pub fn arrow(frame: &mut DataFrame, compression: Option<IpcCompression>) -> Vec<u8> {
    let mut bytes = Vec::new();
    IpcWriter::new(&mut bytes)
        .with_compression(compression)
        .finish(frame)
        .unwrap();
    bytes
}

fn read_with(name: &str, bytes: &[u8]) -> Result<RecordingSet, ReadError> {
    let folder = folder(&[(name, bytes), ("protocol.csv", PROTOCOL.as_bytes())]);
    read(folder.path(), &ReadOptions::default()).inspect(check)
}

fn plain() -> RecordingSet {
    read_with(
        "spikes.csv",
        b"cell,sweep,time\n2,3,0.75\n1,12,0.5\n1,3,0.25\n1,3,0.875\n",
    )
    .unwrap()
}

#[test]
fn every_column_type_gives_the_same_cells() {
    let plain = plain();
    let categories = || DataType::from_categories(Categories::global());
    for cell in [
        DataType::String,
        DataType::Int8,
        DataType::UInt16,
        DataType::Int64,
        DataType::UInt64,
        DataType::Float64,
        categories(),
    ] {
        for (sweep, time) in [
            (DataType::Int16, DataType::Float64),
            (DataType::UInt8, DataType::Float32),
            (DataType::String, DataType::String),
            (categories(), DataType::Float64),
        ] {
            let what = format!("{cell} {sweep} {time}");
            let mut frame = spikes(cell.clone(), sweep, time);
            for (name, bytes) in [
                ("spikes.parquet", parquet(&mut frame)),
                ("spikes.arrow", arrow(&mut frame, None)),
                (
                    "spikes.arrow",
                    arrow(&mut frame, Some(IpcCompression::ZSTD(Default::default()))),
                ),
            ] {
                let set = read_with(name, &bytes).unwrap_or_else(|error| panic!("{what} {name}: {error}"));
                assert_eq!(set.cells, plain.cells, "{what} {name}");
                assert_eq!(set.inputs[0].rows, 4);
                assert!(set.notes.iter().any(|note| note.contains("remark")));
            }
        }
    }
}

#[test]
fn whole_numbers_of_time_in_milliseconds() {
    let mut frame = spikes(DataType::Int32, DataType::Int32, DataType::Float64);
    let times = Series::new("time_ms".into(), &[750_i32, 500, 250, 875]).into_column();
    frame = DataFrame::new(
        4,
        vec![frame.columns()[0].clone(), frame.columns()[1].clone(), times],
    )
    .unwrap();
    assert_eq!(
        read_with("spikes.parquet", &parquet(&mut frame)).unwrap().cells,
        plain().cells
    );
}

#[test]
fn nulls_and_nan_cost_their_rows() {
    let mut frame = DataFrame::new(
        5,
        vec![
            Series::new(
                "cell".into(),
                &[Some(1.0_f64), Some(1.0), None, Some(f64::NAN), Some(1.0)],
            )
            .into_column(),
            Series::new(
                "sweep".into(),
                &[Some(3.0_f64), None, Some(3.0), Some(3.0), Some(3.0)],
            )
            .into_column(),
            Series::new(
                "time".into(),
                &[Some(0.75_f64), Some(0.5), Some(0.5), Some(0.5), None],
            )
            .into_column(),
        ],
    )
    .unwrap();
    let expected = [
        "spikes 2 missing-sweep sweep -",
        "spikes 3 missing-cell cell -",
        "spikes 4 missing-cell cell -",
        "spikes 5 missing-value time -",
    ];
    for (name, bytes) in [
        ("spikes.parquet", parquet(&mut frame)),
        ("spikes.arrow", arrow(&mut frame, None)),
    ] {
        assert_eq!(refusals(&read_with(name, &bytes).unwrap()), expected, "{name}");
    }
    let mut frame = DataFrame::new(
        2,
        vec![
            Series::new("cell".into(), &["1", "1"]).into_column(),
            Series::new("sweep".into(), &["3", "3"]).into_column(),
            Series::new("time".into(), &[0.75_f64, f64::NAN]).into_column(),
        ],
    )
    .unwrap();
    let set = read_with("spikes.parquet", &parquet(&mut frame)).unwrap();
    assert_eq!(refusals(&set), ["spikes 2 non-finite time NaN"]);
}

#[test]
fn packed_text() {
    let text = "cell,sweep,time\n2,3,0.75\n1,12,0.5\n1,3,0.25\n1,3,0.875\n";
    let mut gzip = flate2::write::GzEncoder::new(Vec::new(), flate2::Compression::default());
    gzip.write_all(text.as_bytes()).unwrap();
    let gzip = gzip.finish().unwrap();
    let zst = zstd::encode_all(text.as_bytes(), 3).unwrap();
    let tabs = zstd::encode_all(text.replace(',', "\t").as_bytes(), 3).unwrap();
    // Two archives end to end are one file to gzip and to zstd.
    let twice = |bytes: &[u8], more: &[u8]| [bytes, more].concat();
    let more = zstd::encode_all(&b"1,3,0.9\n"[..], 3).unwrap();
    for (name, bytes) in [
        ("spikes.csv.gz", gzip),
        ("spikes.csv.zst", zst.clone()),
        ("spikes.tsv.zst", tabs),
    ] {
        assert_eq!(read_with(name, &bytes).unwrap().cells, plain().cells, "{name}");
    }
    assert_eq!(
        read_with("spikes.csv.zst", &twice(&zst, &more))
            .unwrap()
            .spike_rows
            .rows,
        5
    );
}

#[test]
fn carried_columns_of_a_columnar_cell_table() {
    let list = Series::new("list".into(), &[Series::new("".into(), &[1, 2])]);
    let mut frame = DataFrame::new(
        1,
        vec![
            Series::new("cell".into(), &[1_i64]).into_column(),
            Series::new("depth".into(), &[350_i32]).into_column(),
            Series::new("tagged".into(), &[true]).into_column(),
            list.into_column(),
            Series::new("group".into(), &["pv"])
                .cast(&DataType::from_categories(Categories::global()))
                .unwrap()
                .into_column(),
        ],
    )
    .unwrap();
    let spikes: &[u8] = b"cell,sweep,time\n1,3,0.75\n";
    for (name, bytes) in [
        ("cells.parquet", parquet(&mut frame)),
        ("cells.arrow", arrow(&mut frame, None)),
    ] {
        let folder = folder(&[
            ("spikes.csv", spikes),
            ("protocol.csv", PROTOCOL.as_bytes()),
            (name, &bytes),
        ]);
        let set = read(folder.path(), &ReadOptions::default()).unwrap();
        check(&set);
        assert_eq!(set.carried_columns, ["depth", "tagged"]);
        let cell = cell(&set, "1");
        assert_eq!(cell.carried, [Some("350".into()), Some("true".into())]);
        assert_eq!(cell.group.as_deref(), Some("pv"));
        assert!(
            set.notes
                .iter()
                .any(|note| note.contains("\"list\"") && note.contains("not carried"))
        );
    }
}

#[test]
fn times_of_the_wrong_type_are_named() {
    let mut frame = spikes(DataType::Int32, DataType::Int32, DataType::Float64);
    let flags = Series::new("time".into(), &[true, false, true, true]).into_column();
    frame = DataFrame::new(
        4,
        vec![frame.columns()[0].clone(), frame.columns()[1].clone(), flags],
    )
    .unwrap();
    let error = read_with("spikes.parquet", &parquet(&mut frame)).unwrap_err();
    assert_eq!(error.class(), ErrorClass::Data);
    assert!(
        error.to_string().contains("\"time\"") && error.to_string().contains("must be a number"),
        "{error}"
    );
}
