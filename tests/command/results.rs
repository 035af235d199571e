//! What is written, where, and that it is the same every time.

use std::path::Path;

use crate::support::{Made, column, command, halfrise, tables, text};

fn demo(name: &str) -> String {
    let root = Path::new(env!("CARGO_MANIFEST_DIR")).parent().unwrap();
    text(&root.join("demo-recordings").join(name)).to_owned()
}

#[test]
fn same_bytes_for_one_thread_and_two() {
    for set in ["veltmoor-current", "veltmoor-conductance"] {
        let home = tempfile::tempdir().unwrap();
        let mut runs = Vec::new();
        for threads in ["1", "2"] {
            let out = home.path().join(threads);
            let arguments = [
                "fit",
                &demo(set),
                "--out",
                text(&out),
                "--threads",
                threads,
                "--quiet",
            ];
            halfrise(&arguments).succeeds();
            let mut all = tables(&out);
            let mut drawn: Vec<_> = std::fs::read_dir(out.join("figures"))
                .unwrap()
                .map(|e| e.unwrap().path())
                .collect();
            drawn.sort();
            assert!(drawn.len() > 20, "{drawn:?}");
            for path in drawn {
                let name = path.file_name().unwrap().to_string_lossy().into_owned();
                all.push((name, std::fs::read(&path).unwrap()));
            }
            for text_file in ["summary.md", "run.json"] {
                all.push((text_file.into(), std::fs::read(out.join(text_file)).unwrap()));
            }
            runs.push(all);
        }
        assert_eq!(runs[0].len(), runs[1].len());
        for (one, two) in runs[0].iter().zip(&runs[1]) {
            assert!(one == two, "{set}: {} differs", one.0);
        }
    }
}

#[test]
fn bootstrap_robust_fit_and_chosen_curves_give_the_same_bytes_for_any_threads() {
    let home = tempfile::tempdir().unwrap();
    let mut runs = Vec::new();
    for threads in ["1", "2"] {
        let out = home.path().join(threads);
        halfrise(&[
            "fit",
            &demo("veltmoor-conductance"),
            "--out",
            text(&out),
            "--threads",
            threads,
            "--quiet",
            "--responses",
            "whole",
            "--no-figures",
            "--bootstrap",
            "100",
            "--robust",
            "--curves",
            "ramp,hill",
        ])
        .succeeds();
        runs.push(tables(&out));
    }
    assert!(runs[0] == runs[1]);
    let bytes = |name: &str| &runs[0].iter().find(|(file, _)| file == name).unwrap().1;
    let holds = |name: &str, word: &str| {
        bytes(name)
            .windows(word.len())
            .any(|part| part == word.as_bytes())
    };
    assert!(holds("parameters.parquet", "half_rise_bca_lo"));
    assert!(holds("parameters.parquet", "noise_sd_percentile_hi"));
    let run: serde_json::Value =
        serde_json::from_slice(&std::fs::read(home.path().join("1/run.json")).unwrap()).unwrap();
    assert_eq!(run["seed"], 1);
    assert_eq!(run["settings"]["curves"], serde_json::json!(["ramp", "hill"]));
    // 3 rows for every fitted response, against 8.
    let all = home.path().join("all");
    halfrise(&[
        "fit",
        &demo("veltmoor-conductance"),
        "--out",
        text(&all),
        "--quiet",
        "--responses",
        "whole",
        "--no-figures",
    ])
    .succeeds();
    let rows = |folder: &std::path::Path| -> u64 {
        let run: serde_json::Value =
            serde_json::from_slice(&std::fs::read(folder.join("run.json")).unwrap()).unwrap();
        let tables = run["tables"].as_array().unwrap();
        tables.iter().find(|t| t["name"] == "goodness").unwrap()["rows"]
            .as_u64()
            .unwrap()
    };
    assert!(rows(&home.path().join("1")) * 2 < rows(&all));
}

#[test]
fn a_rate_function_that_is_none_is_named_with_those_that_are() {
    let home = tempfile::tempdir().unwrap();
    let out = home.path().join("out");
    let fit = |more: [&str; 2]| {
        halfrise(&[
            "fit",
            &demo("veltmoor-current"),
            "--out",
            text(&out),
            more[0],
            more[1],
        ])
    };
    fit(["--curves", "ramp,step"]).fails(2, &["step", "refractory-integrator"]);
    fit(["--bootstrap", "7"]).fails(2, &["bootstrap = 7", "100 to 1000000"]);
    assert!(!out.exists());
}

#[test]
fn refused_rows_of_the_demo_are_those_it_lists() {
    let home = tempfile::tempdir().unwrap();
    let out = home.path().join("out");
    halfrise(&["rates", &demo("veltmoor-current"), "--out", text(&out), "--quiet"]).succeeds();
    let mut written: Vec<String> = std::fs::read_dir(&out)
        .unwrap()
        .map(|e| e.unwrap().file_name().to_string_lossy().into_owned())
        .collect();
    written.sort();
    assert_eq!(written, ["refused.parquet", "run.json", "steps.parquet"]);
    let readme = std::fs::read_to_string(demo("README.md")).unwrap();
    let mut reasons = column(&out.join("refused.parquet"), "reason");
    reasons.sort();
    reasons.dedup();
    assert!(reasons.len() >= 15, "{reasons:?}");
    for reason in reasons {
        assert!(
            readme.contains(reason.trim_matches('"')),
            "{reason} is not in the README of the demo"
        );
    }
}

#[test]
fn rows_add_up_and_json_stands_alone() {
    let home = tempfile::tempdir().unwrap();
    let out = home.path().join("out");
    let said = halfrise(&[
        "rates",
        &demo("veltmoor-conductance"),
        "--out",
        text(&out),
        "--json",
    ]);
    said.succeeds();
    let json: serde_json::Value = serde_json::from_str(&said.out).expect("one JSON object");
    for (table, rows) in json["rows"].as_object().unwrap() {
        let number = |key: &str| rows[key].as_u64().unwrap();
        assert_eq!(
            number("rows"),
            number("used") + number("outside_steps") + number("refused"),
            "{table}"
        );
        assert!(number("rows") > 0);
    }
}

#[test]
fn check_writes_nothing() {
    let made = Made::healthy();
    let before = std::fs::read_dir(made.home.path()).unwrap().count();
    halfrise(&["check", text(&made.set()), "--strict"]).succeeds();
    assert_eq!(std::fs::read_dir(made.home.path()).unwrap().count(), before);
    assert_eq!(std::fs::read_dir(made.set()).unwrap().count(), 2);
}

#[test]
fn earlier_results_are_kept_unless_asked_and_when_a_run_fails() {
    let made = Made::healthy();
    made.fit(&[]).succeeds();
    let first = tables(&made.out());
    made.fit(&[]).fails(2, &["--overwrite"]);
    made.fit(&["--overwrite"]).succeeds();
    assert_eq!(tables(&made.out()), first);
    made.write("protocol.csv", "cell,onset\n");
    made.fit(&["--overwrite"]).fails(3, &["protocol.csv"]);
    assert_eq!(tables(&made.out()), first);
    // Nothing hidden is left beside them.
    assert_eq!(std::fs::read_dir(made.home.path()).unwrap().count(), 2);
    // A folder that is not ours is never replaced.
    halfrise(&[
        "fit",
        text(&made.set()),
        "--out",
        text(&made.set()),
        "--overwrite",
    ])
    .fails(2, &[]);
    assert!(made.set().join("spikes.csv").exists());
}

#[test]
fn a_place_that_cannot_be_written() {
    let made = Made::healthy();
    let file = made.home.path().join("file");
    std::fs::write(&file, "x").unwrap();
    let said = halfrise(&["fit", text(&made.set()), "--out", text(&file.join("below"))]);
    assert!(said.err.contains("file"), "{}", said.err);
    assert_eq!(said.code, Some(1));
}

#[test]
fn units_do_not_change_the_answer() {
    let made = Made::healthy();
    made.fit(&[]).succeeds();
    let other = Made::healthy();
    let protocol = other.read("protocol.csv");
    let in_na: Vec<String> = protocol
        .lines()
        .enumerate()
        .map(|(i, line)| match line.rsplit_once(',') {
            Some((front, current)) if i > 0 => format!("{front},{}", current.parse::<f64>().unwrap() / 1e3),
            _ => line.replace("current", "current_nA"),
        })
        .collect();
    other.write("protocol.csv", in_na.join("\n"));
    other.fit(&[]).succeeds();
    for name in [
        "max_rate_Hz",
        "half_rise",
        "threshold_lo",
        "extra_sd_Hz",
        "initial_gain_hi",
    ] {
        let a = column(&made.out().join("parameters.parquet"), name);
        let b = column(&other.out().join("parameters.parquet"), name);
        assert!(a.iter().any(|v| v != "null"), "{name} is never estimated");
        for (a, b) in a.iter().zip(&b) {
            match (a.parse::<f64>(), b.parse::<f64>()) {
                (Ok(a), Ok(b)) => assert!(a == b || ((a - b) / a).abs() < 1e-6, "{name}: {a} {b}"),
                _ => assert_eq!(a, b, "{name}"),
            }
        }
    }
}

#[test]
fn awkward_cell_ids_stay_harmless() {
    let long = "x".repeat(300);
    let ids = [
        "../../etc/cell",
        "a|b",
        "<b>bold</b>",
        "say \"hi\"",
        "two\nlines",
        "..",
        "q'uote & more",
        &long,
    ];
    let made = Made::with_cells(&ids);
    let out = made.out();
    halfrise(&[
        "fit",
        text(&made.set()),
        "--out",
        text(&out),
        "--quiet",
        "--strict",
    ])
    .succeeds();
    let mut figures = 0;
    for entry in std::fs::read_dir(out.join("figures")).unwrap() {
        let path = entry.unwrap().path();
        let svg = std::fs::read_to_string(&path).unwrap();
        let mut reader = quick_xml::Reader::from_str(&svg);
        reader.config_mut().check_end_names = true;
        loop {
            match reader.read_event() {
                Ok(quick_xml::events::Event::Eof) => break,
                Ok(_) => {}
                Err(error) => panic!("{}: {error}", path.display()),
            }
        }
        figures += 1;
    }
    // One for each cell, and of the set: overview, contact sheet, distributions of the parameters.
    assert_eq!(figures, ids.len() + 3);
    let summary = std::fs::read_to_string(out.join("summary.md")).unwrap();
    let mut columns = None;
    for line in summary.lines() {
        if !line.starts_with('|') {
            columns = None;
            continue;
        }
        let bars = line.replace("\\|", "").matches('|').count();
        assert_eq!(*columns.get_or_insert(bars), bars, "{line}");
        assert!(!line.contains("<b>"), "{line}");
    }
    assert_eq!(
        column(&out.join("parameters.parquet"), "cell").len(),
        3 * ids.len()
    );
}

#[cfg(unix)]
#[test]
fn an_interrupted_run_leaves_earlier_results() {
    let names: Vec<String> = (0..4000).map(|i| format!("cell-{i}")).collect();
    let made = Made::with_cells(&names.iter().map(String::as_str).collect::<Vec<_>>());
    std::fs::create_dir(made.out()).unwrap();
    std::fs::write(made.out().join("run.json"), "{\"program\": \"halfrise\"}").unwrap();
    let mut child = command(&[
        "fit",
        text(&made.set()),
        "--out",
        text(&made.out()),
        "--overwrite",
        "--threads",
        "1",
    ])
    .stderr(std::process::Stdio::piped())
    .stdout(std::process::Stdio::null())
    .spawn()
    .unwrap();
    // The work has begun once the hidden folder is there; the handler is set before.
    while std::fs::read_dir(made.home.path()).unwrap().count() < 3 {
        assert!(
            child.try_wait().unwrap().is_none(),
            "the run ended before it could be interrupted"
        );
        std::thread::sleep(std::time::Duration::from_millis(2));
    }
    let sent = std::process::Command::new("kill")
        .args(["-INT", &child.id().to_string()])
        .status()
        .unwrap();
    assert!(sent.success());
    let output = child.wait_with_output().unwrap();
    assert_eq!(
        output.status.code(),
        Some(130),
        "{}",
        String::from_utf8_lossy(&output.stderr)
    );
    let left: Vec<_> = std::fs::read_dir(made.out()).unwrap().collect();
    assert_eq!(left.len(), 1, "the earlier results alone");
    assert_eq!(
        std::fs::read_dir(made.home.path()).unwrap().count(),
        2,
        "nothing hidden is left"
    );
}

#[test]
fn a_recording_set_inside_an_earlier_result_folder_survives_overwriting() {
    let made = Made::healthy();
    made.fit(&[]).succeeds();
    let inside = made.out().join("myset");
    std::fs::rename(made.set(), &inside).unwrap();
    let said = halfrise(&[
        "fit",
        text(&inside),
        "--out",
        text(&made.out()),
        "--overwrite",
        "--no-figures",
    ]);
    said.fails(2, &["myset", "--out"]);
    assert!(inside.join("spikes.csv").exists() && inside.join("protocol.csv").exists());
    assert!(made.out().join("parameters.parquet").exists());
}

/// Names in `figures/` of the results, sorted; nothing where there is no such folder.
fn figures(made: &Made) -> Vec<String> {
    let mut names: Vec<String> = std::fs::read_dir(made.out().join("figures"))
        .map(|entries| {
            entries
                .map(|e| e.unwrap().file_name().to_string_lossy().into_owned())
                .collect()
        })
        .unwrap_or_default();
    names.sort();
    names
}

#[test]
fn figures_are_drawn_for_the_cells_asked_for() {
    // One cell loses the steps that a curve needs.
    let made = Made::with_cells(&["a", "b", "short"]);
    let protocol: Vec<String> = made
        .read("protocol.csv")
        .lines()
        .enumerate()
        .filter(|(i, line)| !line.starts_with("\"short\"") || i % 5 == 0)
        .map(|(_, line)| line.to_owned())
        .collect();
    made.write("protocol.csv", protocol.join("\n"));
    let fit = |more: &[&str]| {
        let (set, out) = (made.set(), made.out());
        let mut arguments = vec!["fit", text(&set), "--out", text(&out), "--quiet", "--overwrite"];
        arguments.extend(more);
        halfrise(&arguments)
    };
    let of_the_set = ["overview.svg", "population.svg", "sheet-01.svg", "worst.svg"];
    let with = |cells: &[&str]| {
        let mut names: Vec<String> = of_the_set.iter().chain(cells).map(|s| (*s).to_owned()).collect();
        names.sort();
        names
    };
    fit(&["--responses", "whole"]).succeeds();
    assert_eq!(figures(&made), with(&["a.svg", "b.svg", "short.svg"]));
    fit(&["--responses", "whole", "--figures", "flagged"]).succeeds();
    assert_eq!(figures(&made), with(&["short.svg"]));
    let run = std::fs::read_to_string(made.out().join("run.json")).unwrap();
    let run: serde_json::Value = serde_json::from_str(&run).unwrap();
    assert!(run.to_string().contains("\"figures\":\"flagged\""), "{run}");
    for none in [&["--figures", "none"][..], &["--no-figures"]] {
        fit(none).succeeds();
        assert!(figures(&made).is_empty());
    }
    fit(&["--figures", "some"]).fails(2, &["some", "flagged"]);
    fit(&["--figures", "all", "--no-figures"]).fails(2, &["--no-figures"]);
    // The same as a key of the set; what is typed comes first.
    made.write(
        "recording.toml",
        "[analysis]\nfigures = \"flagged\"\nresponses = [\"whole\"]\n",
    );
    fit(&[]).succeeds();
    assert_eq!(figures(&made), with(&["short.svg"]));
    fit(&["--figures", "all"]).succeeds();
    assert_eq!(figures(&made), with(&["a.svg", "b.svg", "short.svg"]));
    for wrong in ["\"some\"", "true", "3"] {
        made.write("recording.toml", format!("[analysis]\nfigures = {wrong}\n"));
        fit(&[]).fails(2, &["recording.toml", "line 2", "all", "flagged", "none"]);
    }
}
