//! Summary and figures of made-up cells: well formed, complete, the same each time.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

use quick_xml::Reader;
use quick_xml::events::Event;

use super::figure::{FigureNames, OVERVIEW_FILE, cell_figure};
use super::test_cells::{cell, flag, set};
use super::text::{ID_LENGTH, id_markdown, visible};
use super::*;
use crate::assess::{Ceiling, CellResult, Estimate, Severity, Status};
use crate::recording::{DriveKind, RecordingSet};
use crate::settings::Analysis;

const VERDICTS: [Ceiling; 5] = [
    Ceiling::Resolved,
    Ceiling::Loose,
    Ceiling::Open,
    Ceiling::Declining,
    Ceiling::Silent,
];

fn nasty_ids() -> Vec<String> {
    [
        "a|b",
        "<b>bold</b>",
        "two\nlines",
        "\"quoted\" 'id'",
        "]]> & &amp;",
        "\u{0}\u{1}\u{8}\u{b}\u{1f}\u{7f}\u{85}",
        "\u{fffe}\u{ffff}",
        "../../x",
        "`code`",
        "[a](b)",
        "\u{202e}backwards",
        "細胞 7",
        "",
        " ",
        "\\|",
        "\\",
        "| --- |",
    ]
    .into_iter()
    .map(str::to_string)
    .chain([format!("long|{}", "x".repeat(295))])
    .collect()
}

/// Summary and overview of the cells, with the figure names given to them.
fn build(set: &RecordingSet, cells: &[CellResult], settings: &Analysis) -> (String, Option<String>) {
    let mut builder = SummaryBuilder::new(set, settings);
    let mut names = FigureNames::new();
    for cell in cells {
        let file = names.name(&cell.id.0);
        builder.add(cell, cell_figure(cell).map(|_| file.as_str()));
    }
    let overview = builder.overview_figure();
    (builder.finish(set), overview)
}

/// All texts of an SVG document; fails where it is not well formed or has a character that XML 1.0 forbids.
fn texts(document: &str) -> Vec<String> {
    let legal = |c: char| matches!(c, '\t' | '\n' | '\r' | ' '..='\u{d7ff}' | '\u{e000}'..='\u{fffd}' | '\u{10000}'..);
    assert!(document.chars().all(legal));
    let mut reader = Reader::from_str(document);
    reader.config_mut().check_end_names = true;
    let (mut texts, mut depth, mut current) = (Vec::new(), 0, String::new());
    loop {
        match reader.read_event().unwrap() {
            Event::Start(start) => {
                depth += 1;
                start
                    .attributes()
                    .for_each(|a| assert!(!a.unwrap().value.contains('<')));
            }
            Event::Empty(start) => start
                .attributes()
                .for_each(|a| assert!(!a.unwrap().value.contains('<'))),
            Event::Text(text) => current.push_str(&text),
            Event::GeneralRef(entity) => current.push_str(match &*entity {
                "amp" => "&",
                "lt" => "<",
                "gt" => ">",
                "quot" => "\"",
                "apos" => "'",
                other => panic!("unknown entity {other}"),
            }),
            Event::End(_) => {
                depth -= 1;
                texts.push(std::mem::take(&mut current).trim().to_string());
            }
            Event::Eof => break,
            _ => {}
        }
    }
    assert_eq!(depth, 0);
    texts.retain(|text| !text.is_empty());
    texts
}

/// Every table of a Markdown text as rows of cells; fails where a row has another number of cells than its head.
fn tables(markdown: &str) -> Vec<Vec<Vec<String>>> {
    let mut tables: Vec<Vec<Vec<String>>> = Vec::new();
    let mut within = false;
    for line in markdown.lines() {
        if line.starts_with('|') {
            let cells: Vec<String> = line.split('|').map(|cell| cell.trim().to_string()).collect();
            let cells = cells[1..cells.len() - 1].to_vec();
            if !within {
                tables.push(Vec::new());
            }
            let table = tables.last_mut().unwrap();
            if let Some(head) = table.first() {
                assert_eq!(head.len(), cells.len(), "{line}");
            }
            table.push(cells);
        }
        within = line.starts_with('|');
    }
    tables
}

#[test]
fn nasty_ids_leave_markdown_and_svg_well_formed() {
    let cells: Vec<CellResult> = nasty_ids()
        .iter()
        .map(|id| {
            let mut cell = cell(id, Ceiling::Open);
            cell.group = Some(id.as_str().into());
            cell.responses[0]
                .flags
                .push(flag("odd", Severity::Reject, &format!("cell {id} is odd")));
            cell
        })
        .collect();
    for cell in &cells {
        let texts = texts(&cell_figure(cell).unwrap());
        let shown = visible(&cell.id.0, ID_LENGTH);
        let title = &texts[0];
        assert_eq!(title, format!("Rate functions of cell {shown}").trim());
    }
    let set = set("s|<i>\n", &cells);
    let (markdown, overview) = build(&set, &cells, &Analysis::default());
    assert!(texts(&overview.unwrap()).iter().any(|text| text == "<b>bold</b>"));
    assert!(
        markdown.starts_with("# Rate functions of s&#124;&lt;i&gt;\\\\n\n"),
        "{}",
        &markdown[..80]
    );
    assert!(!markdown.contains("<b>") && !markdown.contains('\u{0}') && !markdown.contains('\u{202e}'));
    let tables = tables(&markdown);
    let parameters = tables
        .iter()
        .find(|table| table[0][0] == "cell" && table[0][2] == "verdict")
        .unwrap();
    assert_eq!(parameters.len(), cells.len() + 2);
    for (row, cell) in parameters[2..].iter().zip(&cells) {
        assert!(
            row[0].starts_with(&format!("[{}](figures/", id_markdown(&cell.id.0))),
            "{row:?}"
        );
        assert_eq!(row[1], id_markdown(&cell.id.0));
    }
}

#[test]
fn the_summary_says_what_was_read_refused_found_and_how() {
    let mut cells: Vec<CellResult> = VERDICTS
        .iter()
        .enumerate()
        .map(|(i, v)| cell(&format!("c{i}"), *v))
        .collect();
    cells[1].responses[2].flags.push(flag(
        "short-interval",
        Severity::Caution,
        "an interval of 0.4 ms is below 1 ms.",
    ));
    let set = set("demo", &cells);
    let (markdown, overview) = build(&set, &cells, &Analysis::default());
    for part in [
        "5 cells in 1 group, 5 under current steps (pA); 64 protocol steps and 1,232 accepted spikes",
        "| spikes | 1,234 | = | 1,200 | + 32 | + 2 |",
        "| spikes | time-not-a-number | 2 | spikes&#124;a.csv, row 7, cell c&#124;1, spike_time_s = n/a &lt;b&gt;\\\\n |",
        "times are in ms",
        "| whole | 5 | 1 | 1 | 1 | 1 | 1 | 0 | 4 | 2 |",
        "(figures/overview.svg)",
        "| [c0](figures/c0.svg) | L5 pyramidal | resolved | yes | 120 (113 to 129) | 110 (98 to 124) | 42 (36 to 47) |",
        "not determined (above 310, no upper bound)",
        "an interval of 0.4 ms is below 1 ms (response onset)",
        "half-rise (pA)",
        "| `responses` | whole, steady, onset |",
        "1/(12 T^2)",
        "`steady` its last 50 %",
        "below 85 % of it by more than 3 standard errors",
        "Hurvich",
        "Moolgavkar",
    ] {
        assert!(markdown.contains(part), "{part}\n---\n{markdown}");
    }
    assert!(overview.is_some());
    let tables = tables(&markdown);
    let distrusted = tables
        .iter()
        .find(|table| table[0].get(2).is_some_and(|name| name == "why"))
        .unwrap();
    let order: Vec<&str> = distrusted[2..].iter().map(|row| row[0].as_str()).collect();
    // Silent has no fit; then declining, open, the loose one with a caution; the resolved one is not listed.
    assert_eq!(order, ["c4", "c3", "c2", "c1"]);
    assert!(distrusted[2][3].contains("c4.svg"));
}

#[test]
fn a_sum_that_does_not_hold_is_not_shown_as_one() {
    let cells = [cell("a", Ceiling::Resolved)];
    let mut set = set("s", &cells);
    set.spike_rows.used -= 1;
    let (markdown, _) = build(&set, &cells, &Analysis::default());
    assert!(markdown.contains("| spikes | 1,234 | **is not** |"));
}

#[test]
fn many_cells_are_counted_and_few_are_kept() {
    let mut cells: Vec<CellResult> = (0..300).map(|i| cell(&format!("n{i}"), Ceiling::Open)).collect();
    cells[299].responses[0].status = Status::NotConverged;
    cells[299].responses[0].reason = "the solver stopped".into();
    cells[150].responses[1]
        .flags
        .push(flag("bad", Severity::Reject, "bad"));
    let set = set("many", &cells);
    let (markdown, overview) = build(&set, &cells, &Analysis::default());
    let tables = tables(&markdown);
    let distrusted = tables
        .iter()
        .find(|table| table[0].get(2).is_some_and(|name| name == "why"))
        .unwrap();
    assert_eq!(distrusted.len(), 2 + 25);
    assert_eq!(
        [&distrusted[2][0], &distrusted[3][0], &distrusted[4][0]],
        ["n299", "n150", "n0"]
    );
    assert!(distrusted[2][2].starts_with("**not-converged**: the solver stopped"));
    assert!(markdown.contains("300 of 300 cells") && markdown.contains("the 25 to look at first"));
    assert!(markdown.contains("The first 200 of 300 cells are shown"));
    let texts = texts(&overview.unwrap());
    assert!(
        texts.iter().any(|t| t.contains("60 of 300 cells with steps")),
        "{texts:?}"
    );
    let shown = texts
        .iter()
        .filter(|t| t.starts_with('n') && t[1..].bytes().all(|b| b.is_ascii_digit()));
    assert_eq!(shown.clone().count(), 60);
    assert_eq!(
        shown.max_by_key(|t| t[1..].parse::<u32>().unwrap()).unwrap(),
        "n295"
    );
}

#[test]
fn figures_say_what_they_cannot_draw() {
    let said = |cell: &CellResult, text: &str| {
        texts(&cell_figure(cell).unwrap())
            .iter()
            .any(|t| t.contains(text))
    };
    assert!(said(&cell("a", Ceiling::Open), "no ceiling in sight"));
    assert!(said(&cell("a", Ceiling::Declining), "rate falls at high drive"));
    assert!(said(&cell("a", Ceiling::Declining), "step not used by the fit"));
    assert!(!said(&cell("a", Ceiling::Resolved), "step not used by the fit"));
    assert!(said(&cell("a", Ceiling::Silent), "no fit: silent"));
    assert!(said(&cell("a", Ceiling::Silent), "at least 3 are needed"));
    assert!(said(
        &cell("a", Ceiling::Resolved),
        "max rate 120 (113 to 129) Hz, 78 % reached"
    ));
    let mut high = cell("a", Ceiling::Loose);
    high.responses[0].max_rate = super::test_cells::estimate(900.0, 100.0, 200.0);
    assert!(said(&high, "ceiling at 900 Hz"));
    let mut conductance = cell("a", Ceiling::Resolved);
    conductance.drive_kind = DriveKind::Conductance;
    assert!(said(&conductance, "excitatory conductance (nS)"));
    let mut empty = cell("a", Ceiling::Resolved);
    empty.steps.clear();
    assert_eq!(cell_figure(&empty), None);
}

#[test]
fn numbers_no_fit_should_give_do_no_harm() {
    let odd = [
        f64::NAN,
        f64::INFINITY,
        f64::NEG_INFINITY,
        1e300,
        -1e300,
        1e-300,
        0.0,
        -5.0,
    ];
    for (i, &value) in odd.iter().enumerate() {
        let mut cell = cell("odd", VERDICTS[i % 5]);
        for response in &mut cell.responses {
            let estimate = Estimate {
                value: Some(value),
                se: Some(value),
                lo: Some(-value),
                hi: Some(value),
            };
            (response.max_rate, response.half_rise) = (estimate, estimate);
            (response.threshold, response.noise_sd) = (estimate, estimate);
            response.reached = Some(value);
            response.rates[3].rate_hz = value;
            response.rates[4].rate_se_hz = value;
            response.rates[5].step = 10_000;
            if let Some(point) = response.curve.get_mut(7) {
                (point.rate_hz, point.lo_hz, point.hi_hz) = (value, Some(value), Some(value));
            }
        }
        cell.steps[6].drive = value;
        let document = cell_figure(&cell).unwrap();
        assert!(!document.contains("NaN") && !document.contains("inf"), "{value}");
        texts(&document);
        let set = set("odd", std::slice::from_ref(&cell));
        let (markdown, overview) = build(&set, std::slice::from_ref(&cell), &Analysis::default());
        assert!(!markdown.contains("NaN"), "{value}");
        texts(&overview.unwrap());
        tables(&markdown);
    }
}

#[test]
fn the_same_cells_give_the_same_bytes() {
    let cells: Vec<CellResult> = VERDICTS
        .iter()
        .enumerate()
        .map(|(i, v)| cell(&format!("c{i}"), *v))
        .collect();
    let set = set("demo", &cells);
    let settings = Analysis::default();
    assert_eq!(build(&set, &cells, &settings), build(&set, &cells, &settings));
    for cell in &cells {
        assert_eq!(cell_figure(cell), cell_figure(&cell.clone()));
    }
}

#[test]
fn without_figures_nothing_is_linked() {
    let cells = [cell("a", Ceiling::Open)];
    let set = set("s", &cells);
    let settings = Analysis {
        figures: false,
        profiles: false,
        ..Analysis::default()
    };
    let mut builder = SummaryBuilder::new(&set, &settings);
    builder.add(&cells[0], None);
    assert_eq!(builder.overview_figure(), None);
    let markdown = builder.finish(&set);
    assert!(!markdown.contains("figures/") && !markdown.contains(OVERVIEW_FILE));
    assert!(markdown.contains("Profile intervals were switched off"));
}

#[test]
fn an_empty_set_still_has_a_summary() {
    let mut empty = set("none", &[]);
    empty.refused.clear();
    let (markdown, overview) = build(&empty, &[], &Analysis::default());
    assert!(overview.is_none() && markdown.contains("0 cells"));
    assert!(markdown.contains("Nothing: every row and every cell was accepted."));
}

#[test]
fn a_cell_with_very_many_steps_has_a_small_figure_that_says_so() {
    let mut cell = cell("many", Ceiling::Resolved);
    let (steps, rates) = (cell.steps.clone(), cell.responses[0].rates.clone());
    cell.steps = (0..30_000).map(|i| steps[i % 32].clone()).collect();
    for response in &mut cell.responses {
        response.rates = (0..30_000)
            .map(|i| crate::rates::StepRate {
                step: i,
                ..rates[i % 32].clone()
            })
            .collect();
    }
    let document = cell_figure(&cell).unwrap();
    assert!(document.len() < 2_500_000, "{}", document.len());
    assert!(
        texts(&document)
            .iter()
            .any(|text| text.contains("one step in 15 drawn"))
    );
}
