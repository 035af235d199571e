//! Files and sets that cannot be read as a whole: each has its own message, remedy and class.

use std::io::Write;

use polars::prelude::{Column, DataFrame, IntoColumn, NamedFrom, Series};

use super::formats::{arrow, parquet};
use super::*;

const SPIKES: &str = "cell,time\na,0.5\n";
const PROTOCOL: &str = "cell,onset,offset,current\na,0,1,10\n";

/// The message of a set with these bytes as its spike table.
fn error_of(name: &str, bytes: &[u8]) -> ReadError {
    let folder = folder(&[(name, bytes), ("protocol.csv", PROTOCOL.as_bytes())]);
    read(folder.path(), &ReadOptions::default()).expect_err(name)
}

fn assert_message(error: &ReadError, class: ErrorClass, fragments: &[&str]) {
    let message = error.to_string();
    assert_eq!(error.class(), class, "{message}");
    for fragment in fragments {
        assert!(message.contains(fragment), "{fragment:?} not in: {message}");
    }
    let (_, remedy) = message.split_once('\n').expect("a second line");
    assert!(remedy.starts_with("  ") && remedy.trim().len() > 10, "{message}");
}

#[test]
fn folders() {
    let here = folder(&[("spikes.csv", SPIKES.as_bytes())]);
    let read = |path: &Path| read(path, &ReadOptions::default()).unwrap_err();
    assert_message(
        &read(&here.path().join("gone")),
        ErrorClass::Io,
        &["no such folder", "gone"],
    );
    assert_message(
        &read(&here.path().join("spikes.csv")),
        ErrorClass::Io,
        &["a file, not a folder"],
    );
    assert_message(
        &read(here.path()),
        ErrorClass::Data,
        &["no protocol table", ".parquet", "spikes.csv"],
    );
    assert_message(
        &read(folder(&[]).path()),
        ErrorClass::Data,
        &["no spikes table", "folder is empty"],
    );
}

#[test]
fn bad_text_files() {
    let utf16 = |text: &str, mark: bool| {
        let mut bytes = if mark { vec![0xff, 0xfe] } else { Vec::new() };
        bytes.extend(text.encode_utf16().flat_map(u16::to_le_bytes));
        bytes
    };
    let cases: &[(&str, Vec<u8>, &[&str])] = &[
        ("0 bytes", Vec::new(), &["spikes.csv: is empty (0 bytes)"]),
        ("blank", b"\n\r\n \n".to_vec(), &["nothing but blank lines"]),
        (
            "header only",
            b"cell,time\n".to_vec(),
            &["spikes.csv: has a header but no row", "spikes table is empty"],
        ),
        (
            "header only, no newline",
            b"cell,time".to_vec(),
            &["has a header but no row"],
        ),
        (
            "no header",
            b"a,0.5\na,0.6\n".to_vec(),
            &["first line looks like data", "a, 0.5"],
        ),
        (
            "other header",
            b"neuron,when\na,0.5\n".to_vec(),
            &["no column cell, time", "neuron, when", "[columns.spikes]"],
        ),
        (
            "binary",
            b"cell,time\na,0.5\n\x01\x00\x02".to_vec(),
            &["zero byte at byte offset 17"],
        ),
        (
            "Latin-1",
            b"cell,time\nZ\xfcrich,0.5\n".to_vec(),
            &["0xfc at byte offset 11", "Latin-1", "UTF-8"],
        ),
        ("UTF-16", utf16(SPIKES, true), &["UTF-16", "byte offset 0"]),
        (
            "UTF-16 without mark",
            utf16(SPIKES, false),
            &["looks like UTF-16"],
        ),
        (
            "workbook",
            b"PK\x03\x04rest".to_vec(),
            &["zip archive or a spreadsheet"],
        ),
        ("Parquet", b"PAR1rest".to_vec(), &["is a Parquet file"]),
        ("old Mac", b"cell,time\ra,0.5\r".to_vec(), &["carriage returns"]),
        (
            "semicolons",
            "cell;time\na;0,5\nb;0,75\n".into(),
            &[
                "separated by semicolons",
                "decimal commas",
                "[tables]",
                "separator = \";\"",
                "decimal = \",\"",
            ],
        ),
        (
            "semicolons, points",
            "cell;time\na;0.5\n".into(),
            &["separated by semicolons", "separator = \";\""],
        ),
        (
            "tabs",
            "cell\ttime\na\t0.5\n".into(),
            &["separated by tabs", "separator = \"\\t\""],
        ),
        (
            "quoted decimal commas",
            "cell,time\na,\"0,5\"\na,\"3\"\n".into(),
            &["decimal commas", "\"0,5\"", "decimal = \",\""],
        ),
        (
            "open quote",
            "cell,time\na,0.5\n\n\"a,0.6\na,0.7\n".into(),
            &["spikes.csv row 2:", "quotes do not pair up"],
        ),
        (
            "stray quote",
            "cell,time\n\"a\",0.5\nb\"b,0.6\n".into(),
            &["spikes.csv row 2:", "quotes do not pair up"],
        ),
        (
            "text after quote",
            "cell,time\n\"a\"x,0.5\n".into(),
            &["spikes.csv row 1:", "quotes do not pair up"],
        ),
        (
            "two times",
            "cell,time,TIME_ms\na,0.5,500\n".into(),
            &["two headers"],
        ),
    ];
    for (what, bytes, fragments) in cases {
        let error = error_of("spikes.csv", bytes);
        assert_message(&error, ErrorClass::Data, fragments);
        assert!(!error.to_string().contains("halfrise"), "{what}: {error}");
    }
    // Without decimal commas that line is not asked for.
    assert!(
        !error_of("spikes.csv", b"cell;time\na;0.5\n")
            .to_string()
            .contains("decimal")
    );
}

#[test]
fn a_file_that_may_not_be_read() {
    // A folder under a table's name cannot be read as a file by anyone, root included.
    let here = folder(&[("protocol.csv", PROTOCOL.as_bytes())]);
    std::fs::create_dir(here.path().join("spikes.csv")).unwrap();
    let error = read(here.path(), &ReadOptions::default()).unwrap_err();
    assert_message(&error, ErrorClass::Io, &["spikes.csv: cannot be read"]);
}

#[cfg(unix)]
#[test]
fn permission_denied() {
    use std::os::unix::fs::PermissionsExt;
    let here = folder(&[
        ("spikes.csv", SPIKES.as_bytes()),
        ("protocol.csv", PROTOCOL.as_bytes()),
    ]);
    let path = here.path().join("spikes.csv");
    std::fs::set_permissions(&path, std::fs::Permissions::from_mode(0o000)).unwrap();
    let outcome = read(here.path(), &ReadOptions::default());
    // Root may read everything; everybody else gets the message.
    if std::fs::read(&path).is_err() {
        assert_message(
            &outcome.unwrap_err(),
            ErrorClass::Io,
            &["spikes.csv: cannot be read", "denied"],
        );
    } else {
        assert!(outcome.is_ok());
    }
}

#[test]
fn packed_files_cut_off_or_false() {
    let mut text = SPIKES.to_owned();
    for i in 0..5000 {
        text.push_str(&format!("a,{}\n", (i * 7919 % 5003) as f64 / 7.0));
    }
    let mut gzip = flate2::write::GzEncoder::new(Vec::new(), flate2::Compression::default());
    gzip.write_all(text.as_bytes()).unwrap();
    let gzip = gzip.finish().unwrap();
    let zst = zstd::encode_all(text.as_bytes(), 3).unwrap();
    for cut in [1, 8, gzip.len() / 2, gzip.len() - 5] {
        assert_message(
            &error_of("spikes.csv.gz", &gzip[..cut]),
            ErrorClass::Data,
            &["spikes.csv.gz", "gzip"],
        );
    }
    assert_message(
        &error_of("spikes.csv.gz", &gzip[..gzip.len() / 2]),
        ErrorClass::Data,
        &["cut off"],
    );
    for cut in [2, zst.len() / 2, zst.len() - 1] {
        assert_message(
            &error_of("spikes.csv.zst", &zst[..cut]),
            ErrorClass::Data,
            &["spikes.csv.zst", "zstd"],
        );
    }
    assert_message(
        &error_of("spikes.csv.zst", &zst[..zst.len() / 2]),
        ErrorClass::Data,
        &["cut off"],
    );
    assert_message(
        &error_of("spikes.csv.gz", text.as_bytes()),
        ErrorClass::Data,
        &["not a valid gzip file"],
    );
    assert_message(
        &error_of("spikes.csv.zst", text.as_bytes()),
        ErrorClass::Data,
        &["not a valid zstd file"],
    );
    let mut broken = gzip.clone();
    broken[100] ^= 0xff;
    assert_message(&error_of("spikes.csv.gz", &broken), ErrorClass::Data, &["gzip"]);
}

fn frame(rows: usize) -> DataFrame {
    let column = |series: Series| -> Column { series.into_column() };
    let names: Vec<String> = (0..rows).map(|row| format!("cell {}", row % 17)).collect();
    let times: Vec<f64> = (0..rows).map(|row| (row * 7919 % 5003) as f64 / 7.0).collect();
    DataFrame::new(
        rows,
        vec![
            column(Series::new("cell".into(), names)),
            column(Series::new("time".into(), times)),
        ],
    )
    .unwrap()
}

#[test]
fn columnar_files_cut_off_or_false() {
    let (parquet, arrow) = (parquet(&mut frame(500)), arrow(&mut frame(500), None));
    for (name, bytes) in [("spikes.parquet", &parquet), ("spikes.arrow", &arrow)] {
        for cut in [1, 8, 11, bytes.len() / 2, bytes.len() - 1] {
            let error = error_of(name, &bytes[..cut]);
            assert_message(&error, ErrorClass::Data, &[name]);
        }
        assert_message(
            &error_of(name, &bytes[..bytes.len() / 2]),
            ErrorClass::Data,
            &["cut off"],
        );
        assert_message(
            &error_of(name, SPIKES.as_bytes()),
            ErrorClass::Data,
            &["is not a"],
        );
        // The tail is there but the middle is missing.
        let holed = [&bytes[..bytes.len() / 3], &bytes[bytes.len() - 200..]].concat();
        assert_message(&error_of(name, &holed), ErrorClass::Data, &[name]);
    }
    assert_message(
        &error_of("spikes.arrow", b"\xff\xff\xff\xff0000"),
        ErrorClass::Data,
        &["Arrow stream"],
    );
}

/// Whatever single byte is damaged, reading ends with a value or an error, never with a panic.
#[test]
fn damaged_bytes_never_panic() {
    for (name, bytes) in [
        ("spikes.parquet", parquet(&mut frame(40))),
        ("spikes.arrow", arrow(&mut frame(40), None)),
    ] {
        let folder = folder(&[("protocol.csv", PROTOCOL.as_bytes())]);
        let step = (bytes.len() / 150).max(1);
        for at in (4..bytes.len() - 8).step_by(step) {
            let mut damaged = bytes.clone();
            damaged[at] ^= 0x55;
            std::fs::write(folder.path().join(name), &damaged).unwrap();
            if let Err(error) = read(folder.path(), &ReadOptions::default()) {
                assert!(!error.to_string().is_empty());
            }
        }
    }
}

#[test]
fn an_empty_columnar_table() {
    let mut frame = frame(0);
    assert_message(
        &error_of("spikes.parquet", &parquet(&mut frame)),
        ErrorClass::Data,
        &["no row"],
    );
    assert_message(
        &error_of("spikes.arrow", &arrow(&mut frame, None)),
        ErrorClass::Data,
        &["no row"],
    );
}

/// Spikes, protocol, `recording.toml`, class, fragments.
type Mismatch = (
    &'static str,
    &'static str,
    &'static str,
    ErrorClass,
    &'static [&'static str],
);

#[test]
fn tables_that_do_not_fit_each_other() {
    let cases: &[Mismatch] = &[
        (
            "cell,sweep,time\na,1,0.5\n",
            PROTOCOL,
            "",
            ErrorClass::Data,
            &["protocol.csv: has no sweep column", "spikes.csv has sweeps"],
        ),
        (
            SPIKES,
            "cell,sweep,onset,offset,current\na,1,0,1,10\n",
            "",
            ErrorClass::Data,
            &["spikes.csv: has no sweep column", "protocol.csv has sweeps"],
        ),
        (
            "cell,time\nA1,0.5\nA2,0.6\n",
            PROTOCOL,
            "",
            ErrorClass::Data,
            &["not one cell", "A1, A2", "the protocol has a"],
        ),
        (
            "cell,sweep,time\na,s1,0.5\n",
            "cell,sweep,onset,offset,current\na,1,0,1,10\n",
            "",
            ErrorClass::Data,
            &["not one sweep", "spikes have s1", "the protocol has 1"],
        ),
        (
            "cell,time\na,500\na,700\na,2500\n",
            PROTOCOL,
            "",
            ErrorClass::Data,
            &[
                "500 s to 2500 s",
                "0 s to 1 s",
                "[units.spikes]",
                "time = \"ms\"",
                "2 of 3 spikes",
            ],
        ),
        (
            "cell,time\na,0.6\na,0.7\n",
            "cell,onset,offset,current\na,500,1000,10\n",
            "",
            ErrorClass::Data,
            &[
                "0.6 s to 0.7 s",
                "500 s to 1000 s",
                "[units.protocol]",
                "time = \"ms\"",
            ],
        ),
        (
            "cell,time\na,600000\na,700000\n",
            "cell,onset,offset,current\na,0.5,1,10\n",
            "",
            ErrorClass::Data,
            &["[units.spikes]", "time = \"us\""],
        ),
        (
            "cell,time_ms\na,600000\na,700000\n",
            "cell,onset,offset,current\na,0.5,1,10\n",
            "",
            ErrorClass::Data,
            &["read as ms", "[units.spikes]", "time = \"us\"", "header"],
        ),
        (
            "cell,time_us\na,600000000\na,700000000\n",
            "cell,onset,offset,current\na,0.5,1,10\n",
            "",
            ErrorClass::Data,
            &["check the unit", "read as us"],
        ),
        (
            "cell,time_ms\na,500\n",
            PROTOCOL,
            "[units]\ntime = \"s\"",
            ErrorClass::Settings,
            &["time_ms", "says ms", "[units] time = \"s\""],
        ),
        (
            SPIKES,
            PROTOCOL,
            "[unit]\ntime = \"s\"",
            ErrorClass::Settings,
            &["recording.toml", "`unit`"],
        ),
        (
            SPIKES,
            PROTOCOL,
            "[columns.protocol]\nonset = \"start\"",
            ErrorClass::Settings,
            &["protocol.csv", "\"start\"", "cell, onset, offset, current"],
        ),
    ];
    for (spikes, protocol, toml, class, fragments) in cases {
        let error = read_files(&[
            ("spikes.csv", spikes),
            ("protocol.csv", protocol),
            ("recording.toml", toml),
        ])
        .unwrap_err();
        assert_message(&error, *class, fragments);
    }
}

#[test]
fn the_unit_line_that_is_proposed_works() {
    let set = read_files(&[
        ("spikes.csv", "cell,time\na,500\na,700\na,2500\n"),
        ("protocol.csv", PROTOCOL),
        ("recording.toml", "[units.spikes]\ntime = \"ms\""),
    ])
    .unwrap();
    assert_eq!((set.spike_rows.used, set.spike_rows.outside_steps), (2, 1));
}

#[test]
fn spikes_outside_for_another_reason_are_baseline() {
    let set = read_files(&[
        ("spikes.csv", "cell,time\na,3\na,4\n"),
        ("protocol.csv", PROTOCOL),
    ])
    .unwrap();
    assert_eq!((set.spike_rows.used, set.spike_rows.outside_steps), (0, 2));
}

#[test]
fn files_of_one_table_must_agree_on_sweeps() {
    let error = read_files(&[
        ("recording.toml", "[tables]\nspikes = [\"s1.csv\", \"s2.csv\"]"),
        ("s1.csv", "cell,sweep,time\na,1,0.5\n"),
        ("s2.csv", SPIKES),
        ("protocol.csv", "cell,sweep,onset,offset,current\na,1,0,1,10\n"),
    ])
    .unwrap_err();
    assert_message(
        &error,
        ErrorClass::Data,
        &["s2.csv: has no sweep column", "s1.csv has one"],
    );
}

#[test]
fn a_sum_that_does_not_hold_is_a_fault_of_the_program() {
    let error = ReadError::Internal {
        table: "spikes",
        rows: 3,
        used: 1,
        outside: 0,
        refused: 1,
    };
    assert_message(
        &error,
        ErrorClass::Io,
        &["3 rows read", "1 used + 0 outside steps + 1 refused"],
    );
}
