//! Sets without a fault: everything arrives, whatever the spelling.

use super::*;

const SPIKES: &str = "cell,sweep,time\nb,1,0.6\nb,1,0.7\na,2,0.1\na,10,0.9\na,10,0.6\nb,1,2.5\n";
const PROTOCOL: &str =
    "cell,sweep,onset,offset,current\na,10,0.5,1,100\na,2,0.5,1,50\nb,1,0.5,1,-20\nb,1,1.5,2,30\n";

#[test]
fn a_set_with_sweeps() {
    let set = read_files(&[("spikes.csv", SPIKES), ("protocol.csv", PROTOCOL)]).unwrap();
    assert!(set.has_sweeps && set.refused.is_empty() && set.cell_rows.is_none());
    assert_eq!(set.drive_kinds(), [DriveKind::Current]);
    assert_eq!(set.cells.len(), 2);
    let a = cell(&set, "a");
    let names: Vec<_> = a
        .sweeps
        .iter()
        .map(|sweep| sweep.name.as_deref().unwrap())
        .collect();
    assert_eq!(names, ["2", "10"]);
    assert_eq!(a.spikes_s, [0.1, 0.6, 0.9]);
    assert_eq!(
        a.steps.iter().map(|step| step.drive).collect::<Vec<_>>(),
        [50.0, 100.0]
    );
    assert_eq!(crate::steps::meet(a).of_step, [&[][..], &[0.6, 0.9]]);
    let b = cell(&set, "b");
    assert_eq!(
        b.steps.iter().map(|step| &*step.step).collect::<Vec<_>>(),
        ["1", "2"]
    );
    assert_eq!((set.spike_rows.used, set.spike_rows.outside_steps), (4, 2));
}

#[test]
fn a_continuous_time_line_with_a_cell_table() {
    let set = read_files(&[
        ("spikes.csv", "cell,time\n1,10.5\n1,2.25\n"),
        (
            "protocol.csv",
            "cell,onset,offset,g_exc,g_inh,step\n1,10,11,4,2,hold\n1,2,3,1.5,2,\n2,2,3,1,,\n",
        ),
        (
            "cells.csv",
            "cell,Group,g_leak_nS,e_leak_V,depth,note\n2,pv,10,-0.07,350,\"a, b\"\n1,pyr,,,,\n9,pv,5,,,\n",
        ),
    ])
    .unwrap();
    assert!(!set.has_sweeps && set.refused.is_empty());
    let one = cell(&set, "1");
    assert_eq!(one.sweeps.len(), 1);
    assert_eq!(one.sweeps[0].name, None);
    assert_eq!(one.drive_kind, DriveKind::Conductance);
    assert_eq!(
        one.steps.iter().map(|step| &*step.step).collect::<Vec<_>>(),
        ["1", "hold"]
    );
    assert_eq!(one.steps[0].g_inh_ns, Some(2.0));
    assert_eq!(one.group.as_deref(), Some("pyr"));
    let two = cell(&set, "2");
    assert!(two.spikes_s.is_empty());
    assert_eq!(two.constants.g_leak_ns, Some(10.0));
    assert_eq!(two.constants.e_leak_mv, Some(-70.0));
    assert_eq!(set.carried_columns, ["depth", "note"]);
    assert_eq!(two.carried, [Some("350".into()), Some("a, b".into())]);
    // Cell 9 has no protocol: it is there, without steps, and the notes say so.
    assert!(cell(&set, "9").steps.is_empty());
    assert!(
        set.notes
            .iter()
            .any(|note| note.contains("1 cell has no row in the protocol") && note.ends_with(": 9"))
    );
    assert_eq!(set.cell_rows.unwrap().used, 3);
}

#[test]
fn current_and_conductance_cells_side_by_side() {
    let set = read_files(&[
        ("spikes.csv", "cell,time\na,0.5\nb,0.5\n"),
        (
            "protocol.csv",
            "cell,onset,offset,current,g_exc\na,0,1,5,\nb,0,1,,7\n",
        ),
    ])
    .unwrap();
    assert_eq!(set.drive_kinds(), [DriveKind::Current, DriveKind::Conductance]);
    assert_eq!(cell(&set, "b").steps[0].drive, 7.0);
}

/// The same set in other spellings gives the same cells.
#[test]
fn spelling_does_not_matter() {
    let plain = read_files(&[("spikes.csv", SPIKES), ("protocol.csv", PROTOCOL)]).unwrap();
    let crlf = |text: &str| text.replace('\n', "\r\n");
    let milliseconds = "Cell,SWEEP,Time_ms\nb,1,600\nb,1,700\na,2,100\na,10,900\na,10,600\nb,1,2500\n";
    let nanoampere = "cell,sweep,onset_ms,offset_ms,current_nA\na,10,500,1000,0.1\na,2,500,1000,0.05\nb,1,500,1000,-0.02\n\
                      b,1,1500,2000,0.03\n";
    let quoted = "\"cell\",\"sweep\",\"time\"\n\"b\",\"1\",\"0.6\"\nb,1,0.7\n\n\na,\"2\",0.1\na,10,0.9\na,10,0.6\nb,1,2.5\n\n\n";
    let semicolon = SPIKES.replace(',', ";").replace('.', ",");
    let semicolon_protocol = PROTOCOL.replace(',', ";").replace('.', ",");
    let decimal = "[tables]\nseparator = \";\"\ndecimal = \",\"";
    let renamed = SPIKES.replace("cell,sweep,time", "neuron,trial,when");
    let mapping = "[columns.spikes]\ncell = \"Neuron\"\nsweep = \"trial\"\ntime = \"when\"";
    for (what, files) in [
        (
            "CRLF",
            vec![("spikes.csv", crlf(SPIKES)), ("protocol.csv", crlf(PROTOCOL))],
        ),
        (
            "BOM",
            vec![
                ("spikes.csv", format!("\u{feff}{SPIKES}")),
                ("protocol.csv", format!("\u{feff}{PROTOCOL}")),
            ],
        ),
        (
            "blank lines",
            vec![
                ("spikes.csv", format!("\n\r\n{SPIKES}\n\n")),
                ("protocol.csv", format!("{PROTOCOL}\r\n\r\n")),
            ],
        ),
        (
            "lines of blanks",
            vec![
                ("spikes.csv", format!("{SPIKES}   \n\t \n")),
                ("protocol.csv", format!("{PROTOCOL}  \r\n")),
            ],
        ),
        (
            "no last newline",
            vec![
                ("spikes.csv", SPIKES.trim_end().into()),
                ("protocol.csv", PROTOCOL.trim_end().into()),
            ],
        ),
        (
            "units",
            vec![
                ("spikes.csv", milliseconds.into()),
                ("protocol.csv", nanoampere.into()),
            ],
        ),
        (
            "quotes",
            vec![("spikes.csv", quoted.into()), ("protocol.csv", PROTOCOL.into())],
        ),
        (
            "tabs",
            vec![
                ("spikes.tsv", SPIKES.replace(',', "\t")),
                ("protocol.csv", PROTOCOL.into()),
            ],
        ),
        (
            "blanks",
            vec![
                ("spikes.csv", SPIKES.replace(',', " , ")),
                ("protocol.csv", PROTOCOL.into()),
            ],
        ),
        (
            "semicolons",
            vec![
                ("spikes.csv", semicolon),
                ("protocol.csv", semicolon_protocol),
                ("recording.toml", decimal.into()),
            ],
        ),
        (
            "mapped",
            vec![
                ("spikes.csv", renamed),
                ("protocol.csv", PROTOCOL.into()),
                ("recording.toml", mapping.into()),
            ],
        ),
    ] {
        let files: Vec<(&str, &str)> = files.iter().map(|(name, text)| (*name, text.as_str())).collect();
        let set = read_files(&files).unwrap_or_else(|error| panic!("{what}: {error}"));
        assert_eq!(set.cells, plain.cells, "{what}");
        assert!(set.refused.is_empty(), "{what}");
        assert_eq!(set.spike_rows, plain.spike_rows, "{what}");
    }
}

#[test]
fn row_order_does_not_matter() {
    let reverse = |text: &str| {
        let mut lines: Vec<&str> = text.trim_end().lines().collect();
        lines[1..].reverse();
        lines.join("\n")
    };
    let plain = read_files(&[("spikes.csv", SPIKES), ("protocol.csv", PROTOCOL)]).unwrap();
    let (spikes, protocol) = (reverse(SPIKES), reverse(PROTOCOL));
    let turned = read_files(&[("spikes.csv", &spikes), ("protocol.csv", &protocol)]).unwrap();
    assert_eq!(plain.cells, turned.cells);
}

#[test]
fn several_files_make_one_table_and_rows_keep_their_place() {
    let set = read_files(&[
        (
            "recording.toml",
            "name = \"spring\"\n[tables]\nspikes = [\"d*/spikes.csv\"]\n[analysis]\ncurve_points = 7",
        ),
        ("d1/spikes.csv", "cell,time\na,0.2\n\n"),
        ("d2/spikes.csv", "time_ms,cell\n300,a\nx,a\n"),
        ("d3/spikes.csv", "cell,time\n"),
        ("protocol.csv", "cell,onset,offset,current\na,0,1,1\n"),
    ])
    .unwrap();
    assert_eq!(set.name, "spring");
    assert_eq!(set.analysis.curve_points, 7);
    assert_eq!(cell(&set, "a").spikes_s, [0.2, 0.3]);
    let inputs: Vec<_> = set
        .inputs
        .iter()
        .map(|input| (input.path.as_str(), input.rows))
        .collect();
    assert_eq!(
        inputs,
        [
            ("recording.toml", 0),
            ("d1/spikes.csv", 1),
            ("d2/spikes.csv", 2),
            ("d3/spikes.csv", 0),
            ("protocol.csv", 1)
        ]
    );
    assert_eq!((set.refused[0].file, set.refused[0].row), (2, 2));
    // SHA-256 of the six bytes and so on is checked against the published digest of "abc" in `table`.
    assert!(set.inputs.iter().all(|input| input.sha256.len() == 64));
}

#[test]
fn sha256_is_that_of_the_standard() {
    // FIPS 180-4 example: SHA-256("abc").
    assert_eq!(
        table::sha256(b"abc"),
        "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad"
    );
}

#[test]
fn an_empty_sweep_column_counts_as_none() {
    let set = read_files(&[
        ("spikes.csv", "cell,sweep,time\na,,0.5\n"),
        ("protocol.csv", "cell,onset,offset,current\na,0,1,1\n"),
    ])
    .unwrap();
    assert!(!set.has_sweeps);
    assert_eq!(set.spike_rows.used, 1);
    assert!(
        set.notes
            .iter()
            .any(|note| note.contains("sweep column is empty"))
    );
}

#[test]
fn awkward_names_survive() {
    let long = "n".repeat(300);
    let names = [
        "a/b\\c",
        "..",
        "../../etc",
        "say \"\"hi\"\"",
        "pipe|bar",
        "<b>&amp;</b>",
        "two\nlines",
        "comma, inside",
        "Zelle \u{3b1}\u{2603}\u{1f9e0}",
        "x^2",
        "-1",
        &long,
    ];
    let mut spikes = "cell,time\n".to_owned();
    let mut protocol = "cell,onset,offset,current\n".to_owned();
    // First of all a name that could pass for compressed bytes.
    for name in ["x^2 first"].iter().chain(&names) {
        spikes.push_str(&format!("\"{name}\",0.5\n"));
        protocol.push_str(&format!("\"{name}\",0,1,1\n"));
    }
    spikes.push_str("\"two\nlines\",no\n");
    let set = read_files(&[("spikes.csv", &spikes), ("protocol.csv", &protocol)]).unwrap();
    assert_eq!(set.cells.len(), names.len() + 1);
    for name in names {
        let name = name.replace("\"\"", "\"");
        assert_eq!(cell(&set, &name).spikes_s, [0.5], "{name}");
    }
    // The quoted newline does not shift row numbers, and does not break the message's line.
    assert_eq!(refusals(&set), ["spikes 14 not-a-number time no"]);
    assert!(set.refused[0].message.contains("two\\nlines"));
}

#[test]
fn a_name_that_looks_compressed_may_start_the_rows_without_quotes() {
    let set = read_files(&[
        ("spikes.csv", "cell,time\nx^2,0.5\nx^2,bad\n"),
        ("protocol.csv", "cell,onset,offset,current\nx^2,0,1,1\n"),
    ])
    .unwrap();
    assert_eq!(cell(&set, "x^2").spikes_s, [0.5]);
    assert_eq!(refusals(&set), ["spikes 2 not-a-number time bad"]);
    assert!(set.notes.iter().all(|note| !note.contains("blank")));
}

#[test]
fn a_stray_quote_in_an_unquoted_file_is_a_character() {
    let set = read_files(&[
        ("spikes.csv", "cell,time\na\"b,0.5\n"),
        ("protocol.csv", "cell,onset,offset,current\na\"b,0,1,1\n"),
    ])
    .unwrap();
    assert_eq!(set.spike_rows.used, 1);
}

#[test]
fn rounding_is_no_overlap() {
    let set = read_files(&[
        ("spikes.csv", "cell,time\na,0.3\n"),
        (
            "protocol.csv",
            "cell,onset,offset,current\na,0,0.30000000000000004,1\na,0.3,0.6,2\n",
        ),
    ])
    .unwrap();
    assert!(set.refused.is_empty());
    assert_eq!(crate::steps::meet(cell(&set, "a")).of_step, [&[][..], &[0.3]]);
}

#[test]
fn large_text_files_keep_their_row_numbers() {
    // More than one stretch of text, with quoted newlines and blank lines on the way.
    let mut spikes = "cell,time,remark\n".to_owned();
    let rows = 400_000;
    for row in 1..=rows {
        if row % 50_000 == 0 {
            spikes.push_str("\"a\",bad,\"line\nbreak\"\n\n");
        } else {
            spikes.push_str(&format!("a,{}.5,\"some \"\"remark\"\"\"\n", row));
        }
    }
    assert!(spikes.len() > 8 << 20);
    let set = read_files(&[
        ("spikes.csv", &spikes),
        ("protocol.csv", "cell,onset,offset,current\na,0,1000000,1\n"),
    ])
    .unwrap();
    assert_eq!(set.spike_rows.rows, rows);
    let refused: Vec<u64> = set.refused.iter().map(|row| row.row).collect();
    assert_eq!(refused, (1..=8).map(|i| i * 50_000).collect::<Vec<_>>());
    assert!(set.notes.iter().any(|note| note.contains("8 blank lines")));
}

#[test]
fn reading_can_be_stopped() {
    let folder = folder(&[
        ("spikes.csv", SPIKES.as_bytes()),
        ("protocol.csv", PROTOCOL.as_bytes()),
    ]);
    let cancel = std::sync::atomic::AtomicBool::new(true);
    let error = read(
        folder.path(),
        &ReadOptions {
            cancel: Some(&cancel),
        },
    )
    .unwrap_err();
    assert_eq!(error, ReadError::Interrupted);
}

#[test]
fn the_result_does_not_depend_on_the_number_of_threads() {
    let mut spikes = "cell,sweep,time\n".to_owned();
    let mut protocol = "cell,sweep,onset,offset,current\n".to_owned();
    for i in 0..20_000_u64 {
        let mixed = i.wrapping_mul(2_654_435_761) % 100_003;
        spikes.push_str(&format!(
            "c{},{},{}\n",
            mixed % 37,
            mixed % 5,
            (mixed % 211) as f64 / 25.0
        ));
    }
    for cell in 0..37 {
        for sweep in 0..5 {
            protocol.push_str(&format!(
                "c{cell},{sweep},2,4,{sweep}\nc{cell},{sweep},5,7,{sweep}\n"
            ));
        }
    }
    let folder = folder(&[
        ("spikes.csv", spikes.as_bytes()),
        ("protocol.csv", protocol.as_bytes()),
    ]);
    let with = |threads| {
        let pool = rayon::ThreadPoolBuilder::new()
            .num_threads(threads)
            .build()
            .unwrap();
        pool.install(|| read(folder.path(), &ReadOptions::default()).unwrap())
    };
    let (one, three) = (with(1), with(3));
    check(&one);
    assert!(one.spike_rows.refused > 0, "the test wants repeated times");
    assert_eq!(one.cells, three.cells);
    assert_eq!(one.refused, three.refused);
}
