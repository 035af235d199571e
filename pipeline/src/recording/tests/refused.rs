//! Every rule, raised by a set made for it.

use super::*;

const SPIKES: &str = "cell,sweep,time\na,1,0.5\n";
const PROTOCOL: &str = "cell,sweep,onset,offset,current\na,1,0,1,10\n";

struct Case {
    rule: &'static str,
    spikes: &'static str,
    protocol: &'static str,
    cells: &'static str,
    /// Refused rows as `table row reason column value`.
    expected: &'static [&'static str],
    /// A fragment of the first message.
    message: &'static str,
}

const fn spikes(
    rule: &'static str,
    spikes: &'static str,
    expected: &'static [&'static str],
    message: &'static str,
) -> Case {
    Case {
        rule,
        spikes,
        protocol: PROTOCOL,
        cells: "",
        expected,
        message,
    }
}

const fn protocol(
    rule: &'static str,
    protocol: &'static str,
    expected: &'static [&'static str],
    message: &'static str,
) -> Case {
    Case {
        rule,
        spikes: SPIKES,
        protocol,
        cells: "",
        expected,
        message,
    }
}

const fn cells(
    rule: &'static str,
    cells: &'static str,
    expected: &'static [&'static str],
    message: &'static str,
) -> Case {
    Case {
        rule,
        spikes: SPIKES,
        protocol: PROTOCOL,
        cells,
        expected,
        message,
    }
}

const CASES: &[Case] = &[
    spikes(
        "ragged-row",
        "cell,sweep,time\na,1,0.5,7\na,1,0.6,\na,1,0.7,,9\n",
        &["spikes 1 ragged-row - 7", "spikes 3 ragged-row - 9"],
        "more fields than the header",
    ),
    protocol(
        "ragged-row",
        "cell,sweep,onset,offset,current\na,1,0,1,10\na,2,0,1,10,oops\n",
        &["protocol 2 ragged-row - oops"],
        "(cell a, sweep 2)",
    ),
    cells(
        "ragged-row",
        "cell,group\na,x,y\n",
        &["cells 1 ragged-row - y"],
        "without its group",
    ),
    spikes(
        "missing-cell",
        "cell,sweep,time\na,1,0.5\n,1,0.6\n\"  \",1,0.7\n",
        &["spikes 2 missing-cell cell -", "spikes 3 missing-cell cell -"],
        "names no cell",
    ),
    protocol(
        "missing-cell",
        "cell,sweep,onset,offset,current\na,1,0,1,10\n,1,0,1,10\n",
        &["protocol 2 missing-cell cell -"],
        "names no cell",
    ),
    cells(
        "missing-cell",
        "cell,group\na,x\n,y\n",
        &["cells 2 missing-cell cell -"],
        "names no cell",
    ),
    spikes(
        "missing-sweep",
        "cell,sweep,time\na,1,0.5\na,,0.6\n",
        &["spikes 2 missing-sweep sweep -"],
        "(cell a)",
    ),
    protocol(
        "missing-sweep",
        "cell,sweep,onset,offset,current\na,1,0,1,10\na,,0,1,10\n",
        &["protocol 2 missing-sweep sweep -"],
        "sweep column",
    ),
    spikes(
        "missing-value",
        "cell,sweep,time\na,1,0.5\na,1,\na,1\n",
        &["spikes 2 missing-value time -", "spikes 3 missing-value time -"],
        "time: a required number is missing",
    ),
    protocol(
        "missing-value",
        "cell,sweep,onset,offset,current\na,1,0,1,10\na,2,,1,10\na,3,0,,10\na,4,0,1,\n",
        &[
            "protocol 2 missing-value onset -",
            "protocol 3 missing-value offset -",
            "protocol 4 missing-value current -",
        ],
        "onset: a required",
    ),
    spikes(
        "not-a-number",
        "cell,sweep,time\na,1,0.5\na,1,soon\na,1,\"0,7\"\na,1,1e\n",
        &[
            "spikes 2 not-a-number time soon",
            "spikes 3 not-a-number time 0,7",
            "spikes 4 not-a-number time 1e",
        ],
        "time = \"soon\": a numeric column holds text (cell a, sweep 1)",
    ),
    protocol(
        "not-a-number",
        "cell,sweep,onset,offset,current,g_inh\na,1,0,1,10,\na,2,x,1,10,\na,3,0,y,10,\na,4,0,1,z,\na,5,0,1,1,w\n",
        &[
            "protocol 2 not-a-number onset x",
            "protocol 3 not-a-number offset y",
            "protocol 4 not-a-number current z",
            "protocol 5 not-a-number g_inh w",
        ],
        "plain number",
    ),
    cells(
        "not-a-number",
        "cell,group,g_leak\na,x,ten\n",
        &["cells 1 not-a-number g_leak ten"],
        "analysed without its group, constants",
    ),
    spikes(
        "non-finite",
        "cell,sweep,time\na,1,0.5\na,1,NaN\na,1,inf\na,1,-Infinity\na,1,1e400\n",
        &[
            "spikes 2 non-finite time NaN",
            "spikes 3 non-finite time inf",
            "spikes 4 non-finite time -Infinity",
            "spikes 5 non-finite time 1e400",
        ],
        "NaN or infinite",
    ),
    protocol(
        "non-finite",
        "cell,sweep,onset,offset,current\na,1,0,1,10\na,2,0,inf,10\na,3,0,1,nan\n",
        &[
            "protocol 2 non-finite offset inf",
            "protocol 3 non-finite current nan",
        ],
        "NaN or infinite",
    ),
    cells(
        "non-finite",
        "cell,e_leak\na,inf\n",
        &["cells 1 non-finite e_leak inf"],
        "NaN or infinite",
    ),
    spikes(
        "negative-time",
        "cell,sweep,time\na,1,0.5\na,1,-0.1\na,1,-0\n",
        &["spikes 2 negative-time time -0.1"],
        "before 0",
    ),
    protocol(
        "negative-time",
        "cell,sweep,onset,offset,current\na,1,0,1,10\na,2,-1,1,10\na,3,0,-2,5\n",
        &[
            "protocol 2 negative-time onset -1",
            "protocol 3 negative-time offset -2",
        ],
        "before 0",
    ),
    protocol(
        "negative-conductance",
        "cell,sweep,onset,offset,current,g_exc,g_inh\na,1,0,1,10,,\nb,1,0,1,,-3,\nb,2,0,1,,3,-0.5\n",
        &[
            "protocol 2 negative-conductance g_exc -3",
            "protocol 3 negative-conductance g_inh -0.5",
        ],
        "below 0 nS",
    ),
    cells(
        "not-positive",
        "cell,g_leak,capacitance\na,0,\nb,1,-4\n",
        &[
            "cells 1 not-positive g_leak 0",
            "cells 2 not-positive capacitance -4",
        ],
        "not above 0",
    ),
    protocol(
        "offset-not-after-onset",
        "cell,sweep,onset,offset,current\na,1,0,1,10\na,2,0.7,0.2,10\na,3,1,1,10\n",
        &[
            "protocol 2 offset-not-after-onset offset 0.2",
            "protocol 3 offset-not-after-onset offset 1",
        ],
        "offset 0.2 s is not after onset 0.7 s (cell a, sweep 2); were the two columns swapped?",
    ),
    protocol(
        "no-drive",
        "cell,sweep,onset,offset,current,g_exc\na,1,0,1,10,\na,2,0,1,,\n",
        &["protocol 2 no-drive - -"],
        "neither",
    ),
    protocol(
        "two-drives",
        "cell,sweep,onset,offset,current,g_exc\na,1,0,1,10,\na,2,0,1,5,6\n",
        &["protocol 2 two-drives - -"],
        "current 5 pA and g_exc 6 nS",
    ),
    protocol(
        "duplicate-protocol-row",
        "cell,sweep,onset,offset,current\na,1,0,1,10\na,1,2,3,10\na,1,0,1,10\n",
        &["protocol 3 duplicate-protocol-row - -"],
        "repeats row 1 (cell a, sweep 1)",
    ),
    protocol(
        "duplicate-step",
        "cell,sweep,onset,offset,current\na,1,0,1,10\na,1,0,1,20\n",
        &["protocol 2 duplicate-step - -"],
        "drive 20 for the step of row 1, which has drive 10",
    ),
    protocol(
        "overlapping-steps",
        "cell,sweep,onset,offset,current\na,1,0,1,10\na,1,0.5,1.5,20\na,1,1,2,30\na,1,0.2,0.4,5\na,2,0.5,1.5,20\na,1,1.5,9,5\n",
        &[
            "protocol 2 overlapping-steps - -",
            "protocol 4 overlapping-steps - -",
            "protocol 6 overlapping-steps - -",
        ],
        "step 0.5 s to 1.5 s overlaps the step 0 s to 1 s of row 1",
    ),
    spikes(
        "unknown-cell",
        "cell,sweep,time\na,1,0.5\nzz,1,0.5\n",
        &["spikes 2 unknown-cell - -"],
        "(cell zz, sweep 1)",
    ),
    spikes(
        "unknown-sweep",
        "cell,sweep,time\na,1,0.5\na,7,0.5\n",
        &["spikes 2 unknown-sweep sweep 7"],
        "(cell a, sweep 7)",
    ),
    spikes(
        "duplicate-spike",
        "cell,sweep,time\na,1,0.5\na,1,0.25\na,1,0.5\na,1,5e-1\n",
        &[
            "spikes 3 duplicate-spike time 0.5",
            "spikes 4 duplicate-spike time 0.5",
        ],
        "time 0.5 s: an earlier row",
    ),
    cells(
        "duplicate-cell",
        "cell,group\na,x\na,y\n",
        &["cells 2 duplicate-cell cell -"],
        "earlier row",
    ),
    Case {
        rule: "mixed-drive",
        spikes: "cell,sweep,time\nm,1,0.5\na,1,0.5\n",
        protocol: "cell,sweep,onset,offset,current,g_exc\nm,1,0,1,10,\nm,2,0,1,,4\na,1,0,1,10,\n",
        cells: "",
        expected: &[
            "spikes 1 mixed-drive - -",
            "protocol 1 mixed-drive - -",
            "protocol 2 mixed-drive - -",
        ],
        message: "current steps and conductance steps",
    },
    Case {
        rule: "varying-inhibition",
        spikes: "cell,sweep,time\nv,1,0.5\na,1,0.5\n",
        protocol: "cell,sweep,onset,offset,g_exc,g_inh\nv,1,0,1,10,0\nv,2,0,1,10,5\na,1,0,1,10,3\na,2,0,1,11,3\n",
        cells: "",
        expected: &[
            "spikes 1 varying-inhibition - -",
            "protocol 1 varying-inhibition - -",
            "protocol 2 varying-inhibition - -",
        ],
        message: "split the cell by g_inh level",
    },
];

fn read_case(case: &Case) -> RecordingSet {
    let mut files = vec![("spikes.csv", case.spikes), ("protocol.csv", case.protocol)];
    if !case.cells.is_empty() {
        files.push(("cells.csv", case.cells));
    }
    read_files(&files).unwrap_or_else(|error| panic!("{}: {error}", case.rule))
}

#[test]
fn every_case_costs_just_its_rows() {
    for case in CASES {
        let set = read_case(case);
        assert_eq!(refusals(&set), case.expected, "{}", case.rule);
        assert!(set.refused.iter().all(|row| row.reason == case.rule));
        let messages: Vec<&str> = set.refused.iter().map(|row| row.message.as_str()).collect();
        assert!(messages[0].contains(case.message), "{messages:?}");
        // Cell a, which has nothing to do with it, is there with its first spike and step.
        assert!(
            set.spike_rows.used > 0 || case.spikes.contains("a,1,0.5,7"),
            "{}",
            case.rule
        );
        let rule = rules::rule(case.rule).unwrap();
        for row in &set.refused {
            assert!(
                rule.tables.contains(&row.table),
                "{} is not listed for {:?}",
                case.rule,
                row.table
            );
        }
    }
}

#[test]
fn every_rule_and_table_has_its_case() {
    for rule in rules::RULES {
        for table in rule.tables {
            let raised = CASES.iter().any(|case| {
                case.rule == rule.name && case.expected.iter().any(|line| line.starts_with(table.name()))
            });
            assert!(
                raised,
                "no case raises {} in the {} table",
                rule.name,
                table.name()
            );
        }
    }
    for case in CASES {
        assert!(rules::rule(case.rule).is_some(), "{} is no rule", case.rule);
    }
}

#[test]
fn a_refused_cell_keeps_its_place() {
    for rule in rules::RULES
        .iter()
        .filter(|rule| rule.scope == rules::Scope::Cell)
    {
        let case = CASES.iter().find(|case| case.rule == rule.name).unwrap();
        let set = read_case(case);
        let refused: Vec<_> = set.cells.iter().filter(|cell| cell.refusal.is_some()).collect();
        assert_eq!(refused.len(), 1);
        let refusal = refused[0].refusal.as_ref().unwrap();
        assert_eq!(refusal.rule, rule.name);
        assert!(refusal.sentence.contains(rule.remedy));
        assert!(refused[0].steps.is_empty() && refused[0].spikes_s.is_empty());
        assert_eq!(cell(&set, "a").spikes_s, [0.5]);
        if rule.name == "varying-inhibition" {
            assert_eq!(refused[0].drive_kind, DriveKind::Conductance);
        }
    }
}

#[test]
fn a_cell_known_from_spikes_alone_is_listed() {
    let set = read_files(&[
        ("spikes.csv", "cell,sweep,time\na,1,0.5\nzz,1,0.5\n"),
        ("protocol.csv", PROTOCOL),
    ])
    .unwrap();
    let stranger = cell(&set, "zz");
    assert!(stranger.steps.is_empty() && stranger.spikes_s.is_empty() && stranger.refusal.is_none());
    assert!(set.notes.iter().any(|note| note.ends_with("zz")));
}

#[test]
fn a_refused_step_still_names_its_sweep() {
    let set = read_files(&[
        ("spikes.csv", "cell,sweep,time\na,1,0.5\na,2,0.5\n"),
        (
            "protocol.csv",
            "cell,sweep,onset,offset,current\na,1,0,1,10\na,2,0,1,x\n",
        ),
    ])
    .unwrap();
    assert_eq!(set.refused.len(), 1);
    assert_eq!(set.spike_rows.outside_steps, 1);
    assert_eq!(cell(&set, "a").sweeps.len(), 2);
}

#[test]
fn a_row_with_several_faults_is_refused_once() {
    let set = read_files(&[
        ("spikes.csv", "cell,sweep,time\na,1,0.5\n,1,x,9\n"),
        (
            "protocol.csv",
            "cell,sweep,onset,offset,current\na,1,0,1,10\na,2,x,y,z\n",
        ),
    ])
    .unwrap();
    assert_eq!(
        refusals(&set),
        ["spikes 2 ragged-row - 9", "protocol 2 not-a-number onset x"]
    );
}

#[test]
fn rows_after_blank_lines_keep_their_numbers() {
    let set = read_files(&[
        (
            "spikes.csv",
            "cell,sweep,time\n\na,1,0.5\n\r\n\n\"a\",1,x\n,,\na,1,y\n",
        ),
        ("protocol.csv", PROTOCOL),
    ])
    .unwrap();
    assert_eq!(
        refusals(&set),
        ["spikes 2 not-a-number time x", "spikes 3 not-a-number time y"]
    );
    assert!(
        set.notes.iter().any(|note| note.contains("4 blank lines")),
        "{:?}",
        set.notes
    );
}

#[test]
fn a_row_of_an_earlier_file_is_named_as_such() {
    let set = read_files(&[
        ("recording.toml", "[tables]\nprotocol = [\"p1.csv\", \"p2.csv\"]"),
        ("spikes.csv", "cell,time\na,0.5\n"),
        ("p1.csv", "cell,onset,offset,current\nb,0,1,1\na,0,1,10\n"),
        ("p2.csv", "cell,onset,offset,current\na,0,1,10\n"),
    ])
    .unwrap();
    assert_eq!(set.refused.len(), 1);
    assert_eq!((set.refused[0].file, set.refused[0].row), (3, 1));
    assert!(
        set.refused[0]
            .message
            .contains("repeats row 2 of an earlier file"),
        "{}",
        set.refused[0].message
    );
}
