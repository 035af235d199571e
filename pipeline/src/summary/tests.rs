//! Summary and figures of made-up cells: well formed, complete, the same each time.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

use std::collections::BTreeMap;

use quick_xml::Reader;
use quick_xml::events::Event;

use super::figure::{
    FigureNames, OVERVIEW_FILE, POPULATION_FILE, WORST_FILE, cell_figure, gets_figure, is_flagged,
};
use super::test_cells::{cell, flag, set};
use super::text::{ID_LENGTH, id_markdown, visible};
use super::*;
use crate::assess::{Ceiling, CellResult, Estimate, RivalCurve, Severity, Status};
use crate::recording::{DriveKind, RecordingSet};
use crate::settings::{Analysis, CellFigures};

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

/// What was built of some cells.
#[derive(Debug, PartialEq)]
struct Built {
    markdown: String,
    /// Figures of the set by file name.
    figures: BTreeMap<String, String>,
}

impl Built {
    fn figure(&self, name: &str) -> &str {
        self.figures
            .get(name)
            .unwrap_or_else(|| panic!("no {name} among {:?}", self.figures.keys()))
    }

    /// Number of contact sheets.
    fn sheets(&self) -> usize {
        self.figures
            .keys()
            .filter(|name| name.starts_with("sheet-"))
            .count()
    }
}

/// Summary and figures of the cells, each with a figure of its own where the settings give it one.
fn build(set: &RecordingSet, cells: &[CellResult], settings: &Analysis) -> Built {
    let mut builder = SummaryBuilder::new(set, settings);
    let mut names = FigureNames::new();
    let mut figures = BTreeMap::new();
    for cell in cells {
        let file = names.name(&cell.id.0);
        let drawn =
            gets_figure(cell, set.cells.len(), settings.figures) && cell_figure(cell, false).is_some();
        if let Some(page) = builder.add(cell, drawn.then_some(file.as_str())) {
            assert_eq!(figures.insert(page.name, page.svg), None);
        }
    }
    for figure in builder.closing_figures() {
        assert_eq!(figures.insert(figure.name, figure.svg), None);
    }
    Built {
        markdown: builder.finish(),
        figures,
    }
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
        let texts = texts(&cell_figure(cell, false).unwrap());
        let shown = visible(&cell.id.0, ID_LENGTH);
        let title = &texts[0];
        assert_eq!(title, format!("Rate functions of cell {shown}").trim());
    }
    let set = set("s|<i>\n", &cells);
    let built = build(&set, &cells, &Analysis::default());
    for file in [OVERVIEW_FILE, WORST_FILE, "sheet-01.svg"] {
        let texts = texts(built.figure(file));
        assert!(texts.iter().any(|text| text.starts_with("<b>bold</b>")), "{file}");
    }
    let markdown = built.markdown;
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
    let built = build(&set, &cells, &Analysis::default());
    let markdown = &built.markdown;
    for part in [
        "5 cells in 1 group, 5 under current steps (pA); 64 protocol steps and 1,232 accepted spikes",
        "| spikes | 1,234 | = | 1,200 | + 32 | + 2 |",
        "| spikes | time-not-a-number | 2 | spikes&#124;a.csv, row 7, cell c&#124;1, spike_time_s = n/a &lt;b&gt;\\\\n |",
        "times are in ms",
        "| whole | 5 | 1 | 1 | 1 | 1 | 1 | 0 | 4 | 2 |",
        "Refused: 2 rows (2 time-not-a-number in spikes). Each reason",
        "**2 of 5 cells are usable** by the response `whole`",
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
    // The order of a two-minute read.
    let heads: Vec<&str> = markdown.lines().filter(|line| line.starts_with("## ")).collect();
    assert_eq!(
        heads,
        [
            "## What was read and refused",
            "## What the data say about the ceiling",
            "## Cells to distrust first",
            "## Contact sheet",
            "## Parameters of the usable cells",
            "## Parameters",
            "## Flags raised",
            "## Settings used",
            "## How these numbers are made",
            "## References",
            "## Input files",
            "## What was refused and why",
        ]
    );
    for file in [OVERVIEW_FILE, WORST_FILE, POPULATION_FILE, "sheet-01.svg"] {
        texts(built.figure(file));
        assert!(markdown.contains(&format!("(figures/{file})")), "{file}");
    }
    let tables = tables(markdown);
    let distrusted = distrusted(&tables);
    let order: Vec<[&str; 2]> = distrusted[2..]
        .iter()
        .map(|row| [row[0].as_str(), row[1].as_str()])
        .collect();
    // Silent has no fit, and no interval to draw; then declining, open, the loose one with a caution; the resolved one is not listed.
    assert_eq!(
        order,
        [
            ["", "[c4](figures/c4.svg)"],
            ["1", "[c3](figures/c3.svg)"],
            ["2", "[c2](figures/c2.svg)"],
            ["3", "[c1](figures/c1.svg)"],
        ]
    );
}

/// The table of the cells to distrust.
fn distrusted(tables: &[Vec<Vec<String>>]) -> &Vec<Vec<String>> {
    tables
        .iter()
        .find(|table| table[0].get(3).is_some_and(|name| name == "why"))
        .unwrap()
}

#[test]
fn a_sum_that_does_not_hold_is_not_shown_as_one() {
    let cells = [cell("a", Ceiling::Resolved)];
    let mut set = set("s", &cells);
    set.spike_rows.used -= 1;
    let built = build(&set, &cells, &Analysis::default());
    assert!(built.markdown.contains("| spikes | 1,234 | **is not** |"));
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
    let built = build(&set, &cells, &Analysis::default());
    let markdown = &built.markdown;
    let tables = tables(markdown);
    let distrusted = distrusted(&tables);
    assert_eq!(distrusted.len(), 2 + 25);
    for (row, (number, id)) in [("1", "n299"), ("2", "n150"), ("3", "n0")].iter().enumerate() {
        assert_eq!(distrusted[2 + row][0], *number);
        assert_eq!(distrusted[2 + row][1], format!("[{id}](figures/{id}.svg)"));
    }
    assert_eq!(distrusted[2 + 9][0], "10");
    assert_eq!(distrusted[2 + 10][0], "");
    assert!(distrusted[2][3].starts_with("**not-converged**: the solver stopped"));
    let worst = texts(built.figure(WORST_FILE));
    let places = worst
        .iter()
        .filter(|t| t.ends_with('.') && t.trim_end_matches('.').parse::<u8>().is_ok());
    assert_eq!(places.count(), 10);
    assert!(markdown.contains("300 of 300 cells") && markdown.contains("25 of them are shown"));
    assert!(markdown.contains("The first 200 of 300 cells are shown"));
    let texts = texts(built.figure(OVERVIEW_FILE));
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
fn cells_that_are_drawn_are_listed_behind_many_silent_ones() {
    let mut cells: Vec<CellResult> = (0..30).map(|i| cell(&format!("s{i}"), Ceiling::Silent)).collect();
    cells.extend((0..3).map(|i| cell(&format!("o{i}"), Ceiling::Open)));
    let built = build(&set("silent", &cells), &cells, &Analysis::default());
    let tables = tables(&built.markdown);
    let rows = &distrusted(&tables)[2..];
    assert_eq!(rows.len(), 25 + 3);
    assert!(
        rows[..25]
            .iter()
            .all(|row| row[0].is_empty() && row[1].starts_with("[s"))
    );
    let drawn: Vec<[&str; 2]> = rows[25..]
        .iter()
        .map(|row| [row[0].as_str(), row[1].as_str()])
        .collect();
    assert_eq!(
        drawn,
        [
            ["1", "[o0](figures/o0.svg)"],
            ["2", "[o1](figures/o1.svg)"],
            ["3", "[o2](figures/o2.svg)"]
        ]
    );
}

#[test]
fn figures_say_what_they_cannot_draw() {
    let said = |cell: &CellResult, text: &str| {
        texts(&cell_figure(cell, false).unwrap())
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
    assert_eq!(cell_figure(&empty, false), None);
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
        let document = cell_figure(&cell, true).unwrap();
        assert!(!document.contains("NaN") && !document.contains("inf"), "{value}");
        texts(&document);
        let set = set("odd", std::slice::from_ref(&cell));
        let built = build(&set, std::slice::from_ref(&cell), &Analysis::default());
        assert!(!built.markdown.contains("NaN"), "{value}");
        tables(&built.markdown);
        assert!(built.figures.contains_key("sheet-01.svg"));
        for (file, document) in &built.figures {
            texts(document);
            let marks = document
                .split('<')
                .filter(|part| !part.starts_with("text") && !part.starts_with("title"));
            for mark in marks {
                assert!(
                    !mark.contains("NaN") && !mark.contains("inf"),
                    "{file}, {value}: {mark}"
                );
            }
        }
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
        assert_eq!(cell_figure(cell, true), cell_figure(&cell.clone(), true));
    }
}

#[test]
fn without_figures_nothing_is_linked() {
    let cells = [cell("a", Ceiling::Open)];
    let set = set("s", &cells);
    let settings = Analysis {
        figures: CellFigures::None,
        profiles: false,
        ..Analysis::default()
    };
    let Built { markdown, figures } = build(&set, &cells, &settings);
    assert_eq!(figures.len(), 0);
    assert!(!markdown.contains("figures/") && !markdown.contains(OVERVIEW_FILE));
    assert!(markdown.contains("Profile intervals were switched off"));
}

#[test]
fn an_empty_set_still_has_a_summary() {
    let mut empty = set("none", &[]);
    empty.refused.clear();
    let Built { markdown, figures } = build(&empty, &[], &Analysis::default());
    assert!(figures.is_empty() && markdown.contains("0 cells"));
    assert!(markdown.contains("Nothing was refused: every row and every cell was accepted."));
    assert!(markdown.contains("No cell is usable."));
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
    let document = cell_figure(&cell, false).unwrap();
    assert!(document.len() < 4_000_000, "{}", document.len());
    assert!(
        texts(&document)
            .iter()
            .any(|text| text.contains("one step in 15 drawn"))
    );
}

#[test]
fn contact_sheets_hold_48_cells_a_page() {
    for (count, pages) in [(0, 0), (1, 1), (48, 1), (49, 2)] {
        let cells: Vec<CellResult> = (0..count)
            .map(|i| cell(&format!("n{i}"), VERDICTS[i % 5]))
            .collect();
        let set = set("paged", &cells);
        let built = build(&set, &cells, &Analysis::default());
        assert_eq!(built.sheets(), pages, "{count}");
        let mut shown: Vec<String> = Vec::new();
        for page in 1..=pages {
            let file = format!("sheet-{page:02}.svg");
            assert!(built.markdown.contains(&format!("(figures/{file})")), "{file}");
            let texts = texts(built.figure(&file));
            shown.extend(texts.into_iter().filter(|text| {
                text.strip_prefix('n')
                    .is_some_and(|rest| rest.parse::<usize>().is_ok())
            }));
        }
        let wanted: Vec<String> = (0..count).map(|i| format!("n{i}")).collect();
        assert_eq!(shown, wanted);
    }
    let cells: Vec<CellResult> = VERDICTS.iter().map(|verdict| cell("x", *verdict)).collect();
    let built = build(&set("key", &cells), &cells, &Analysis::default());
    let texts = texts(built.figure("sheet-01.svg"));
    for entry in [
        "resolved (1)",
        "loose (1)",
        "open (1)",
        "declining (1)",
        "rejected by a flag (0)",
        "no fit (1)",
        "silent",
    ] {
        assert!(texts.iter().any(|text| text == entry), "{entry}: {texts:?}");
    }
}

#[test]
fn cells_without_steps_stand_on_the_sheet_but_silent_ones_of_huge_sets_do_not() {
    let mut empty = cell("bare", Ceiling::Silent);
    empty.steps.clear();
    empty.responses.truncate(1);
    (empty.responses[0].status, empty.responses[0].ceiling) = (Status::NoSteps, None);
    empty.responses[0].rates.clear();
    let cells = [
        empty,
        cell("mute", Ceiling::Silent),
        cell("well", Ceiling::Resolved),
    ];
    let mut set = set("some", &cells);
    let shown = |set: &RecordingSet| -> Vec<String> {
        let built = build(set, &cells, &Analysis::default());
        let names = ["bare", "mute", "well"];
        let mut texts = texts(built.figure("sheet-01.svg"));
        texts.retain(|text| names.contains(&text.as_str()));
        texts
    };
    assert_eq!(shown(&set), ["bare", "mute", "well"]);
    while set.cells.len() <= super::figure::CELLS_ALL_DRAWN {
        set.cells.push(set.cells[0].clone());
    }
    assert_eq!(shown(&set), ["well"]);
}

#[test]
fn flagged_draws_only_cells_that_ask_for_a_look() {
    let good = cell("good", Ceiling::Resolved);
    let mut noted = good.clone();
    noted.responses[0]
        .flags
        .push(flag("worth-knowing", Severity::Note, "so"));
    let mut cautioned = good.clone();
    cautioned.responses[2]
        .flags
        .push(flag("look", Severity::Caution, "so"));
    let mut rejected = good.clone();
    rejected.responses[1]
        .flags
        .push(flag("bad", Severity::Reject, "so"));
    let mut unusable = good.clone();
    unusable.responses[1].usable = false;
    let cells = [good, noted, cautioned, rejected, unusable];
    let drawn = |figures| cells.each_ref().map(|cell| gets_figure(cell, 5, figures));
    assert_eq!(drawn(CellFigures::All), [true; 5]);
    assert_eq!(drawn(CellFigures::Flagged), [false, false, true, true, true]);
    assert_eq!(drawn(CellFigures::None), [false; 5]);
    assert!(is_flagged(&cell("open", Ceiling::Open)));
}

#[test]
fn a_fit_that_a_flag_rejects_says_so() {
    let mut rejected = cell("r", Ceiling::Resolved);
    rejected.responses[0].usable = false;
    rejected.responses[0]
        .flags
        .push(flag("stops-early", Severity::Reject, "firing stops"));
    let cells = [rejected];
    let said = "resolved, not usable: stops-early";
    assert!(
        texts(&cell_figure(&cells[0], false).unwrap())
            .iter()
            .any(|text| *text == format!("whole: {said}"))
    );
    let built = build(&set("s", &cells), &cells, &Analysis::default());
    assert!(
        texts(built.figure(OVERVIEW_FILE))
            .join(" ")
            .contains("resolved, not usable: stops-early")
    );
    assert!(texts(built.figure(WORST_FILE)).iter().any(|text| text == said));
    assert!(
        texts(built.figure("sheet-01.svg"))
            .iter()
            .any(|text| text == "rejected by a flag (1)")
    );
    assert!(built.markdown.contains("| resolved | no: stops-early |"));
    assert!(
        built
            .markdown
            .contains("| reject | stops-early | 1 | 1 | firing stops within the step")
    );
    assert!(built.markdown.contains("No cell is usable."));
}

#[test]
fn a_flag_without_a_known_meaning_shows_its_first_message() {
    let mut first = cell("c|1", Ceiling::Resolved);
    for response in &mut first.responses {
        response
            .flags
            .push(flag("brand-new", Severity::Note, "odd | here"));
    }
    let cells = [first];
    let built = build(&set("s", &cells), &cells, &Analysis::default());
    assert!(
        built
            .markdown
            .contains("| note | brand-new | 3 | 1 | for example cell c&#124;1: odd &#124; here |"),
        "{}",
        built.markdown
    );
}

#[test]
fn residuals_are_drawn_below_and_the_curve_is_dashed_beyond_the_steps_used() {
    let said = |cell: &CellResult| texts(&cell_figure(cell, false).unwrap());
    let has = |cell: &CellResult, text: &str| said(cell).iter().any(|t| t == text);
    let resolved = cell("a", Ceiling::Resolved);
    assert_eq!(
        said(&resolved).iter().filter(|t| *t == "residual (Hz)").count(),
        3
    );
    assert!(has(&resolved, "residual ± 1 SD as the fit weighs it"));
    assert!(!has(&resolved, "the same beyond the steps used"));
    assert!(has(
        &cell("a", Ceiling::Declining),
        "the same beyond the steps used"
    ));
    assert!(!has(&cell("a", Ceiling::Silent), "residual (Hz)"));
    assert!(!has(&resolved, "step with less than half its weight"));
    let mut robust = resolved.clone();
    let weight = &mut robust.responses[0].rates[20].weight;
    *weight = weight.map(|weight| 0.51 * weight);
    assert!(!has(&robust, "step with less than half its weight"));
    let weight = &mut robust.responses[0].rates[20].weight;
    *weight = weight.map(|weight| 0.9 * weight);
    assert!(has(&robust, "step with less than half its weight"));
}

#[test]
fn rivals_are_drawn_on_demand_with_their_weights() {
    let mut both = cell("a", Ceiling::Resolved);
    let goodness = |curve, aicc_weight| crate::assess::Goodness {
        curve,
        parameters: 3,
        steps: 32,
        log_likelihood: None,
        aicc: None,
        aicc_weight,
        bic: None,
        rmse_hz: None,
        r2: None,
        reduced_chi2: None,
        lack_of_fit_f: None,
        lack_of_fit_p: None,
        runs_p: None,
        loo_rmse_hz: None,
        reason: "fitted".into(),
        converged: true,
        evaluations: 1,
    };
    let first = &mut both.responses[0];
    first.goodness = vec![
        goodness(crate::curve::Curve::SmoothedHyperbola.name(), Some(0.7)),
        goodness("ramp", Some(1e-9)),
        goodness("logistic", Some(0.3)),
    ];
    first.rivals = ["ramp", "logistic", "hill"]
        .into_iter()
        .map(|curve| RivalCurve {
            curve,
            rates_hz: first.curve.iter().map(|point| 0.9 * point.rate_hz).collect(),
        })
        .collect();
    let plain = texts(&cell_figure(&both, false).unwrap());
    assert!(!plain.iter().any(|text| text.contains("AICc")));
    let texts = texts(&cell_figure(&both, true).unwrap());
    let at = texts
        .iter()
        .position(|text| text == "rate functions, AICc weight")
        .unwrap();
    assert_eq!(
        texts[at + 1..at + 5],
        [
            "smoothed-hyperbola, 0.700",
            "logistic, 0.300",
            "ramp, below 0.001",
            "hill, no weight"
        ]
    );
}

#[test]
fn a_large_population_is_a_histogram_of_few_elements() {
    let cells: Vec<CellResult> = (0..400)
        .map(|i| {
            let mut cell = cell(&format!("n{i}"), Ceiling::Resolved);
            cell.responses.truncate(1);
            cell.group = Some(format!("g{}", i % 12).into());
            cell.responses[0].max_rate = super::test_cells::estimate(50.0 + f64::from(i % 97), 2.0, 2.0);
            cell
        })
        .collect();
    let built = build(&set("many", &cells), &cells, &Analysis::default());
    let document = built.figure(POPULATION_FILE);
    texts(document);
    assert!(
        document.matches('<').count() < 700,
        "{}",
        document.matches('<').count()
    );
    assert!(document.contains("the 8 largest of 12 groups"));
    assert!(built.markdown.contains("| **all** | 400 |"));
    // The small set has its cells one by one.
    let built = build(&set("few", &cells[..20]), &cells[..20], &Analysis::default());
    assert!(built.figure(POPULATION_FILE).contains("a usable cell"));
}

#[test]
fn current_and_conductance_cells_have_distributions_of_their_own() {
    let mut cells = [cell("pA", Ceiling::Resolved), cell("nS", Ceiling::Resolved)];
    cells[1].drive_kind = DriveKind::Conductance;
    let built = build(&set("mixed", &cells), &cells, &Analysis::default());
    let texts = texts(built.figure(POPULATION_FILE));
    for text in [
        "current steps (pA)",
        "conductance steps (nS)",
        "threshold (pA)",
        "threshold (nS)",
    ] {
        assert!(texts.iter().any(|t| t == text), "{text}: {texts:?}");
    }
    assert_eq!(texts.iter().filter(|t| *t == "1 cell").count(), 2);
}
