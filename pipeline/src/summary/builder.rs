//! `summary.md`, built while the cells pass by.

use std::cmp::Reverse;
use std::collections::BTreeMap;

use super::distrust::Distrust;
use super::figure::{
    ContactSheets, FigureFile, OVERVIEW_FILE, Overview, POPULATION_FILE, WORST_FILE, population_figure,
    worst_figure, worth_drawing,
};
use super::flag_text::flag_meaning;
use super::method_text::{REFERENCES, methods_section, settings_section};
use super::numbers::{count_text, estimate_text};
use super::population::Population;
use super::read_text::{input_section, refused_section, set_line, what_was_read_and_refused};
use super::text::{id_markdown, sentence_markdown, table_head, table_row};
use crate::assess::{Ceiling, CellResult, Severity, Status};
use crate::rates::Response;
use crate::recording::{DriveKind, RecordingSet};
use crate::settings::{Analysis, CellFigures};

/// Most rows of the parameter table; all of them are in `parameters.parquet`.
const PARAMETER_ROWS: usize = 200;
/// Most contact sheets linked one by one.
const PAGES_LINKED: usize = 60;

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

/// How often a flag was raised.
struct FlagCount {
    raised: u64,
    cells: u64,
    /// Id and message of the first cell that raised it.
    first: (String, String),
}

/// Collects what `summary.md` says and what the figures of the set show, one cell at a time.
///
/// Cells are to be added in the order of the set. Memory grows by 40 bytes a usable cell, for the quartiles of the
/// parameters.
pub struct SummaryBuilder {
    settings: Analysis,
    /// Title to refusals, written while the set still has its cells.
    opening: String,
    /// Files and refusals in detail, which stand at the end.
    details: String,
    cells_in_set: usize,
    cells: u64,
    verdicts: Vec<(Response, VerdictCounts)>,
    flags: BTreeMap<(Reverse<Severity>, &'static str), FlagCount>,
    distrust: Distrust,
    parameters: Vec<ParameterRow>,
    population: Population,
    sheets: ContactSheets,
    overview: Overview,
    /// Files of the figures of the set that were handed out at the end.
    closing: Vec<String>,
}

impl SummaryBuilder {
    /// A summary of `set` analysed with `settings`, to which no cell has been added yet.
    pub fn new(set: &RecordingSet, settings: &Analysis) -> Self {
        let mut opening = format!("# Rate functions of {}\n\n", id_markdown(&set.name));
        opening.push_str(&set_line(set));
        opening.push('\n');
        opening.push_str(&what_was_read_and_refused(set));
        Self {
            settings: settings.clone(),
            opening,
            details: input_section(set) + &refused_section(set),
            cells_in_set: set.cells.len(),
            cells: 0,
            verdicts: settings
                .responses
                .iter()
                .map(|r| (*r, VerdictCounts::default()))
                .collect(),
            flags: BTreeMap::new(),
            distrust: Distrust::default(),
            parameters: Vec::new(),
            population: Population::default(),
            sheets: ContactSheets::new(set),
            overview: Overview::new(set),
            closing: Vec::new(),
        }
    }

    fn draws(&self) -> bool {
        self.settings.figures != CellFigures::None
    }

    /// Adds the next cell. `figure` is the file name of its figure within `figures/`, where one was written. Gives back
    /// the page of the contact sheets that this cell completes, to be written there, too.
    pub fn add(&mut self, cell: &CellResult, figure: Option<&str>) -> Option<FigureFile> {
        let mut met: Vec<(Severity, &'static str)> = Vec::new();
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
                let count = self
                    .flags
                    .entry((Reverse(flag.severity), flag.flag))
                    .or_insert_with(|| FlagCount {
                        raised: 0,
                        cells: 0,
                        first: (id_markdown(&cell.id.0), sentence_markdown(flag.message.trim())),
                    });
                count.raised += 1;
                if !met.contains(&(flag.severity, flag.flag)) {
                    met.push((flag.severity, flag.flag));
                    count.cells += 1;
                }
            }
        }
        let draw = self.draws() && worth_drawing(cell, self.cells_in_set);
        self.distrust.add(cell, figure, self.cells, draw);
        self.population.add(cell);
        if self.parameters.len() < PARAMETER_ROWS {
            self.parameters.extend(parameter_row(cell, figure));
        }
        self.cells += 1;
        if !self.draws() {
            return None;
        }
        self.overview.add(cell);
        self.sheets.add(cell)
    }

    /// The figures of the set that are left to be written into `figures/` once all cells have been added: last contact
    /// sheet, cells to distrust first, distributions of the parameters, overview. None where figures are switched off.
    pub fn closing_figures(&mut self) -> Vec<FigureFile> {
        if !self.draws() {
            return Vec::new();
        }
        let mut figures: Vec<FigureFile> = self.sheets.close().into_iter().collect();
        figures.extend(worst_figure(&self.distrust.drawn()));
        figures.extend(population_figure(&self.population, self.first_response()));
        figures.extend(self.overview.figure().map(|svg| FigureFile {
            name: OVERVIEW_FILE.into(),
            svg,
        }));
        self.closing = figures.iter().map(|figure| figure.name.clone()).collect();
        figures
    }

    /// The summary as Markdown. Figures of the set are shown where [`Self::closing_figures`] has handed them out.
    pub fn finish(mut self) -> String {
        let mut text = std::mem::take(&mut self.opening);
        text.push_str(&self.verdict_section());
        text.push_str(&self.distrust_section());
        text.push_str(&self.sheet_section());
        text.push_str(&self.population_section());
        text.push_str(&self.parameter_section());
        text.push_str(&self.flag_section());
        text.push_str(&settings_section(&self.settings));
        text.push_str(&methods_section(&self.settings));
        text.push_str(REFERENCES);
        text.push('\n');
        text.push_str(self.details.trim_end());
        text.push('\n');
        text
    }

    fn has_figure(&self, file: &str) -> bool {
        self.closing.iter().any(|name| name == file)
    }

    fn sheet_section(&self) -> String {
        let files = self.sheets.files();
        let Some(first) = files.first() else {
            return String::new();
        };
        let mut text = format!(
            "## Contact sheet{}\n\nEach of {} cells as a stamp by its response `{}`; symbol, frame and ground tell the \
             verdict.",
            if files.len() > 1 { "s" } else { "" },
            count_text(self.sheets.shown()),
            self.first_response()
        );
        if self.has_figure(OVERVIEW_FILE) {
            text.push_str(&format!(
                " With axes: [overview](figures/{OVERVIEW_FILE}){}.",
                if self.cells > 60 { " of 60 cells" } else { "" }
            ));
        }
        text.push_str("\n\n");
        if files.len() > 1 {
            let listed = files.iter().take(PAGES_LINKED);
            let links: Vec<String> = listed
                .enumerate()
                .map(|(i, file)| format!("[{}](figures/{file})", i + 1))
                .collect();
            let more = files.len().saturating_sub(PAGES_LINKED);
            let rest = if more > 0 {
                format!(" and {} more in `figures/`", count_text(more as u64))
            } else {
                String::new()
            };
            text.push_str(&format!("Pages: {}{rest}\n\n", links.join(", ")));
        }
        text.push_str(&format!("![Contact sheet 1](figures/{first})\n\n"));
        text
    }

    fn population_section(&self) -> String {
        let mut text = String::from("## Parameters of the usable cells\n\n");
        if self.population.is_empty() {
            text.push_str("No cell is usable.\n\n");
            return text;
        }
        text.push_str(&format!(
            "Response `{}`: the median with the lower and the upper quartile in brackets (Hyndman & Fan 1996, \
             definition 7); n is given where some cells have no such value. A noise SD too small to be measured has \
             none, so the quartiles of the noise SD are those of the noisier cells.\n\n",
            self.first_response()
        ));
        if self.has_figure(POPULATION_FILE) {
            text.push_str(&format!(
                "![Distributions of max rate, half-rise, threshold and noise SD](figures/{POPULATION_FILE})\n\n"
            ));
        }
        text.push_str(&self.population.tables());
        text
    }

    fn verdict_section(&self) -> String {
        let mut text = String::from("## What the data say about the ceiling\n\n");
        if let Some((response, first)) = self.verdicts.first() {
            text.push_str(&format!(
                "**{} of {} cells are usable** by the response `{}`: fitted, ceiling resolved or loose, rejected by no \
                 flag. Number of cells with each verdict, by response:\n\n",
                count_text(first.usable),
                count_text(self.cells),
                response.name()
            ));
        }
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
        let rows = self.distrust.rows();
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
            if suspects > rows.len() as u64 {
                format!(
                    "; {} of them are shown, the rest is in parameters.parquet and flags.parquet",
                    count_text(rows.len() as u64)
                )
            } else {
                String::new()
            }
        ));
        if self.has_figure(WORST_FILE) {
            text.push_str(&format!(
                "![The cells to distrust first, with their step rates and fits](figures/{WORST_FILE})\n\nDrawn are the \
                 first {} whose steps hold an interval, with the number of the first column.\n\n",
                self.distrust.drawn().len()
            ));
        }
        text.push_str(&table_head(&[
            ("in figure", true),
            ("cell", false),
            ("group", false),
            ("why", false),
        ]));
        for row in rows {
            let name = row.figure.map_or_else(
                || row.cell.to_string(),
                |file| format!("[{}](figures/{})", row.cell, link_target(file)),
            );
            let number = row
                .in_figure
                .filter(|_| self.has_figure(WORST_FILE))
                .map_or_else(String::new, |number| number.to_string());
            text.push_str(&table_row(&[&number, &name, row.group, row.reasons]));
        }
        text.push('\n');
        text
    }

    fn flag_section(&self) -> String {
        if self.flags.is_empty() {
            return "## Flags raised\n\nNone.\n\n".into();
        }
        let mut text = String::from(
            "## Flags raised\n\nOne for a cell and response; each with its value and the limit it crossed in \
             flags.parquet. `reject`: not usable; `caution`: look before use; `note`: worth knowing.\n\n",
        );
        text.push_str(&table_head(&[
            ("severity", false),
            ("flag", false),
            ("raised", true),
            ("cells", true),
            ("meaning", false),
        ]));
        for ((Reverse(severity), flag), count) in &self.flags {
            let meaning = flag_meaning(flag).map_or_else(
                || format!("for example cell {}: {}", count.first.0, count.first.1),
                str::to_string,
            );
            text.push_str(&table_row(&[
                severity.name().to_string(),
                id_markdown(flag),
                count_text(count.raised),
                count_text(count.cells),
                meaning,
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
        match first.flags.iter().find(|flag| flag.severity == Severity::Reject) {
            _ if first.usable => "yes".into(),
            Some(flag) if first.status == Status::Fitted => format!("no: {}", id_markdown(flag.flag)),
            _ => "no".into(),
        },
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
