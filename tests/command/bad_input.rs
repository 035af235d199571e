//! Broken sets: each gets a message with the file, the trouble and the way out, and its exit code.

use std::io::Write as _;

use crate::support::{Made, column, halfrise, text};

#[test]
fn a_folder_that_is_not_there() {
    let home = tempfile::tempdir().unwrap();
    let out = home.path().join("no/where");
    halfrise(&["fit", "no/such/folder", "--out", text(&out)]).fails(1, &["no/such/folder"]);
    let left = std::fs::read_dir(home.path()).unwrap().count();
    assert_eq!(left, 0, "a failed run leaves nothing behind");
}

#[test]
fn tables_that_are_not_there() {
    let made = Made::healthy();
    std::fs::remove_file(made.set().join("protocol.csv")).unwrap();
    made.fit(&[]).fails(3, &["protocol"]);
    let made = Made::healthy();
    std::fs::remove_file(made.set().join("spikes.csv")).unwrap();
    made.fit(&[]).fails(3, &["spikes"]);
}

#[test]
fn files_that_are_no_tables() {
    let cases: [(&str, Vec<u8>, &[&str]); 6] = [
        ("spikes.csv", Vec::new(), &["spikes.csv", "empty"]),
        ("spikes.csv", b"cell,sweep,time\n".to_vec(), &["spikes.csv"]),
        (
            "spikes.csv",
            b"a,0,0.25\na,0,0.5\n".to_vec(),
            &["spikes.csv", "header"],
        ),
        (
            "spikes.csv",
            b"\x7fELF\0\0\0\x01\x02\xff\xfe\0".to_vec(),
            &["spikes.csv"],
        ),
        (
            "spikes.csv",
            "cell,sweep,time\na,0,0.25\n"
                .encode_utf16()
                .flat_map(u16::to_le_bytes)
                .collect(),
            &["spikes.csv", "UTF-16", "UTF-8"],
        ),
        (
            "spikes.csv",
            b"cell;sweep;time\na;0;0,25\na;0;0,5\n".to_vec(),
            &["spikes.csv", "separator", "decimal"],
        ),
    ];
    for (name, content, words) in cases {
        let made = Made::healthy();
        made.write(name, content);
        made.fit(&[]).fails(3, words);
        assert!(!made.out().exists());
    }
}

#[test]
fn semicolons_and_decimal_commas_are_read_when_the_set_says_so() {
    let made = Made::healthy();
    for name in ["spikes.csv", "protocol.csv"] {
        let excel = made.read(name).replace(',', ";").replace('.', ",");
        made.write(name, excel);
    }
    made.fit(&[]).fails(3, &["separator", "decimal"]);
    made.write("recording.toml", "[tables]\nseparator = \";\"\ndecimal = \",\"\n");
    made.fit(&["--strict"]).succeeds();
}

#[test]
fn truncated_files() {
    let made = Made::healthy();
    let plain = made.read("spikes.csv");
    let mut packed = flate2::write::GzEncoder::new(Vec::new(), flate2::Compression::default());
    packed.write_all(plain.as_bytes()).unwrap();
    let packed = packed.finish().unwrap();
    std::fs::remove_file(made.set().join("spikes.csv")).unwrap();
    made.write("spikes.csv.gz", &packed[..packed.len() / 2]);
    made.fit(&[]).fails(3, &["spikes.csv.gz"]);
    made.write("spikes.csv.gz", &packed);
    made.fit(&["--strict"]).succeeds();

    // A result table is a Parquet file at hand.
    let table = std::fs::read(made.out().join("steps.parquet")).unwrap();
    std::fs::remove_file(made.set().join("spikes.csv.gz")).unwrap();
    for length in [0, 3, 100, table.len() / 2, table.len() - 1] {
        made.write("spikes.parquet", &table[..length]);
        made.fit(&["--overwrite"]).fails(3, &["spikes.parquet"]);
    }
    assert_eq!(
        std::fs::read(made.out().join("steps.parquet")).unwrap(),
        table,
        "earlier results stay"
    );
}

#[test]
fn a_bad_row_costs_that_row_only() {
    let made = Made::healthy();
    let good = made.read("spikes.csv");
    let rows = good.lines().count();
    made.write(
        "spikes.csv",
        format!("{good}a,5,NaN\na,5,inf\na,5,soon\na,5,\na,5,-0.2\nz,5,0.3\na,99,0.3\n,5,0.3\n"),
    );
    made.fit(&["--quiet"]).succeeds();
    let refused = made.out().join("refused.parquet");
    let mut reasons = column(&refused, "reason");
    let numbers = column(&refused, "row");
    assert_eq!(
        numbers,
        (rows..rows + 8).map(|r| r.to_string()).collect::<Vec<_>>()
    );
    for reason in &mut reasons {
        *reason = reason.trim_matches('"').to_owned();
    }
    assert_eq!(
        reasons,
        [
            "non-finite",
            "non-finite",
            "not-a-number",
            "missing-value",
            "negative-time",
            "unknown-cell",
            "unknown-sweep",
            "missing-cell"
        ]
    );
    made.fit(&["--overwrite", "--strict"])
        .fails(3, &["--strict", "8 rows"]);
    let check = halfrise(&["check", text(&made.set())]);
    check.succeeds();
    assert!(check.out.contains("row") && check.out.contains("not-a-number") && check.out.contains("soon"));
}

#[test]
fn times_in_another_unit_stop_the_run() {
    let made = Made::healthy();
    let spikes = made.read("spikes.csv");
    let in_ms: Vec<String> = spikes
        .lines()
        .enumerate()
        .map(|(i, line)| match line.rsplit_once(',') {
            Some((front, time)) if i > 0 => format!("{front},{:.3}", time.parse::<f64>().unwrap() * 1e3),
            _ => line.to_owned(),
        })
        .collect();
    made.write("spikes.csv", in_ms.join("\n"));
    made.fit(&[]).fails(3, &["time", "units"]);
}

#[test]
fn settings_out_of_place() {
    let made = Made::healthy();
    made.fit(&["--steady-fraction", "7"])
        .fails(2, &["steady_fraction", "7", "(0, 1]"]);
    made.write("recording.toml", "[analysis]\nsteady_fractoin = 0.4\n");
    made.fit(&[]).fails(2, &["recording.toml", "steady_fractoin"]);
    made.write("recording.toml", "[columns.spikes]\ncell = \"neuron\"\n");
    made.fit(&[]).fails(2, &["neuron"]);
    made.write("recording.toml", "[units]\ntime = \"minutes\"\n");
    made.fit(&[]).fails(2, &["minutes"]);
    assert_eq!(
        halfrise(&["fit", text(&made.set()), "--no-such-flag"]).code,
        Some(2)
    );
    assert_eq!(halfrise(&[]).code, Some(2));
}

#[test]
fn nothing_to_fit_is_bad_data_with_its_tables() {
    let made = Made::healthy();
    let few: Vec<String> = made
        .read("spikes.csv")
        .lines()
        .take(3)
        .map(str::to_owned)
        .collect();
    made.write("spikes.csv", few.join("\n"));
    made.fit(&[]).fails(3, &["no cell could be fitted"]);
    assert_eq!(column(&made.out().join("parameters.parquet"), "status").len(), 9);
}
