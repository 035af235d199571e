//! `summary.md`, built while the cells pass by.

use std::cmp::Reverse;
use std::collections::BTreeMap;

use super::distrust::{Distrust, LISTED};
use super::figure::{OVERVIEW_FILE, Overview};
use super::method_text::{REFERENCES, methods_section, settings_section};
use super::numbers::{count_text, estimate_text};
use super::read_text::{set_line, what_was_read, what_was_refused};
use super::text::{id_markdown, table_head, table_row};
use crate::assess::{Ceiling, CellResult, Severity, Status};
use crate::rates::Response;
use crate::recording::{DriveKind, RecordingSet};
use crate::settings::Analysis;

/// Most rows of the parameter table; all of them are in `parameters.parquet`.
const PARAMETER_ROWS: usize = 200;

/// Counts over the cells for one response.
#[derive(Clone, Copy, Default)]
struct VerdictCounts {
    resolved: u64,
    loose: u64,
    open: u64,
    declining: u64,
    silent: u64,
    without: u64,
    fitted: u64,
    usable: u64,
    cells: u64,
}

struct ParameterRow {
    kind: DriveKind,
    markdown: String,
}

/// Collects what `summary.md` says and what the overview figure shows, one cell at a time.
///
/// Cells are to be added in the order of the set. Memory does not grow with the number of cells.
pub struct SummaryBuilder {
    settings: Analysis,
    cells: u64,
    verdicts: Vec<(Response, VerdictCounts)>,
    flags: BTreeMap<(Reverse<Severity>, &'static str), u64>,
    distrust: Distrust,
    parameters: Vec<ParameterRow>,
    overview: Overview,
}

impl SummaryBuilder {
    /// A summary of `set` analysed with `settings`, to which no cell has been added yet.
    pub fn new(set: &RecordingSet, settings: &Analysis) -> Self {
        Self {
            settings: settings.clone(),
            cells: 0,
            verdicts: settings
                .responses
                .iter()
                .map(|r| (*r, VerdictCounts::default()))
                .collect(),
            flags: BTreeMap::new(),
            distrust: Distrust::default(),
            parameters: Vec::new(),
            overview: Overview::new(set),
        }
    }

    /// Adds the next cell. `figure` is the file name of its figure within `figures/`, where one was written.
    pub fn add(&mut self, cell: &CellResult, figure: Option<&str>) {
        for response in &cell.responses {
            let place = self
                .verdicts
                .iter()
                .position(|(r, _)| *r == response.response)
                .unwrap_or_else(|| {
                    self.verdicts.push((response.response, VerdictCounts::default()));
                    self.verdicts.len() - 1
                });
            if let Some((_, counts)) = self.verdicts.get_mut(place) {
                counts.cells += 1;
                counts.fitted += u64::from(response.status == Status::Fitted);
                counts.usable += u64::from(response.usable);
                *match response.ceiling {
                    Some(Ceiling::Resolved) => &mut counts.resolved,
                    Some(Ceiling::Loose) => &mut counts.loose,
                    Some(Ceiling::Open) => &mut counts.open,
                    Some(Ceiling::Declining) => &mut counts.declining,
                    Some(Ceiling::Silent) => &mut counts.silent,
                    None => &mut counts.without,
                } += 1;
            }
            for flag in &response.flags {
                *self.flags.entry((Reverse(flag.severity), flag.flag)).or_default() += 1;
            }
        }
        self.distrust.add(cell, figure, self.cells);
        if self.parameters.len() < PARAMETER_ROWS {
            self.parameters.extend(parameter_row(cell, figure));
        }
        if self.settings.figures {
            self.overview.add(cell);
        }
        self.cells += 1;
    }

    /// The overview figure of the cells added so far, an SVG document to be written as [`OVERVIEW_FILE`] in
    /// `figures/`. `None` where figures are switched off or no cell has steps.
    pub fn overview_figure(&self) -> Option<String> {
        if self.settings.figures {
            self.overview.figure()
        } else {
            None
        }
    }

    /// The summary as Markdown. `set` is the set given to [`SummaryBuilder::new`].
    pub fn finish(self, set: &RecordingSet) -> String {
        let mut text = format!("# Rate functions of {}\n\n", id_markdown(&set.name));
        text.push_str(&set_line(set));
        text.push('\n');
        text.push_str(&what_was_read(set));
        text.push_str(&what_was_refused(set));
        text.push_str(&self.verdict_section());
        if self.settings.figures && !self.overview.is_empty() {
            text.push_str(&format!(
                "![Rate and fitted rate function of each cell drawn, by drive](figures/{OVERVIEW_FILE})\n\n"
            ));
        }
        text.push_str(&self.distrust_section());
        text.push_str(&self.flag_section());
        text.push_str(&self.parameter_section());
        text.push_str(&settings_section(&self.settings));
        text.push_str(&methods_section(&self.settings));
        text.push_str(REFERENCES);
        text
    }

    fn verdict_section(&self) -> String {
        let mut text = String::from("## What the data say about the ceiling\n\n");
        text.push_str("Number of cells with each verdict, by response.\n\n");
        text.push_str(&table_head(&[
            ("response", false),
            ("cells", true),
            ("resolved", true),
            ("loose", true),
            ("open", true),
            ("declining", true),
            ("silent", true),
            ("no verdict", true),
            ("fitted", true),
            ("usable", true),
        ]));
        for (response, c) in &self.verdicts {
            let mut row = vec![response.name().to_string()];
            row.extend(
                [
                    c.cells,
                    c.resolved,
                    c.loose,
                    c.open,
                    c.declining,
                    c.silent,
                    c.without,
                    c.fitted,
                    c.usable,
                ]
                .map(count_text),
            );
            text.push_str(&table_row(&row));
        }
        text.push('\n');
        text
    }

    fn first_response(&self) -> &'static str {
        self.verdicts
            .first()
            .map_or("whole", |(response, _)| response.name())
    }

    fn distrust_section(&self) -> String {
        let mut text = String::from("## Cells to distrust first\n\n");
        let suspects = self.distrust.suspects();
        if suspects == 0 {
            text.push_str("None: every cell is fitted, resolved and free of cautions.\n\n");
            return text;
        }
        text.push_str(&format!(
            "{} of {} cells, judged by the response `{}` and by the flags of all responses{}. First those without a \
             fit, then rejected, declining, open, with cautions, loose.\n\n",
            count_text(suspects),
            count_text(self.cells),
            self.first_response(),
            if suspects > LISTED as u64 {
                format!("; the {LISTED} to look at first are shown, the rest is in parameters.parquet and flags.parquet")
            } else {
                String::new()
            }
        ));
        text.push_str(&table_head(&[
            ("cell", false),
            ("group", false),
            ("why", false),
            ("figure", false),
        ]));
        for (cell, group, reasons, figure) in self.distrust.rows() {
            let link = figure
                .map(|file| format!("[figure](figures/{})", link_target(file)))
                .unwrap_or_default();
            text.push_str(&table_row(&[cell, group, reasons, &link]));
        }
        text.push('\n');
        text
    }

    fn flag_section(&self) -> String {
        if self.flags.is_empty() {
            return "## Flags raised\n\nNone.\n\n".into();
        }
        let mut text = String::from(
            "## Flags raised\n\nEach with the value and the limit it crossed in flags.parquet, one for a cell and response.\n\n",
        );
        text.push_str(&table_head(&[
            ("severity", false),
            ("flag", false),
            ("raised", true),
        ]));
        for ((Reverse(severity), flag), raised) in &self.flags {
            text.push_str(&table_row(&[
                severity.name().to_string(),
                id_markdown(flag),
                count_text(*raised),
            ]));
        }
        text.push('\n');
        text
    }

    fn parameter_section(&self) -> String {
        let mut text = format!(
            "## Parameters\n\nResponse `{}`: value with {} in brackets. All responses and all digits are in \
             parameters.parquet.\n\n",
            self.first_response(),
            if self.settings.profiles {
                "its 95 % interval"
            } else {
                "its standard error"
            }
        );
        for kind in [DriveKind::Current, DriveKind::Conductance] {
            let mut rows = self.parameters.iter().filter(|row| row.kind == kind).peekable();
            if rows.peek().is_none() {
                continue;
            }
            let unit = kind.unit();
            text.push_str(&table_head(&[
                ("cell", false),
                ("group", false),
                ("verdict", false),
                ("usable", false),
                ("max rate (Hz)", true),
                (&format!("half-rise ({unit})"), true),
                (&format!("threshold ({unit})"), true),
                (&format!("noise SD ({unit})"), true),
                (&format!("initial gain (Hz/{unit})"), true),
            ]));
            for row in rows {
                text.push_str(&row.markdown);
            }
            text.push('\n');
        }
        if self.cells > self.parameters.len() as u64 {
            text.push_str(&format!(
                "The first {} of {} cells are shown; the rest is in parameters.parquet.\n\n",
                count_text(self.parameters.len() as u64),
                count_text(self.cells)
            ));
        }
        text
    }
}

fn parameter_row(cell: &CellResult, figure: Option<&str>) -> Option<ParameterRow> {
    let first = cell.responses.first()?;
    let id = id_markdown(&cell.id.0);
    let verdict = match (first.status, first.ceiling) {
        (Status::Fitted, Some(verdict)) => verdict.name(),
        (status, _) => status.name(),
    };
    let markdown = table_row(&[
        figure.map_or_else(
            || id.clone(),
            |file| format!("[{id}](figures/{})", link_target(file)),
        ),
        cell.group.as_deref().map(id_markdown).unwrap_or_default(),
        verdict.to_string(),
        if first.usable { "yes" } else { "no" }.to_string(),
        estimate_text(&first.max_rate),
        estimate_text(&first.half_rise),
        estimate_text(&first.threshold),
        estimate_text(&first.noise_sd),
        estimate_text(&first.initial_gain),
    ]);
    Some(ParameterRow {
        kind: cell.drive_kind,
        markdown,
    })
}

/// A file name as the target of a link: whatever is not plain is percent-encoded.
fn link_target(file: &str) -> String {
    let mut target = String::with_capacity(file.len());
    for byte in file.bytes() {
        if byte.is_ascii_alphanumeric() || b"-_.".contains(&byte) {
            target.push(char::from(byte));
        } else {
            target.push_str(&format!("%{byte:02X}"));
        }
    }
    target
}
