//! The cells to look at before anything else, worst first.

use super::figure::{WORST, WorstCell};
use super::text::{id_markdown, sentence_markdown};
use crate::assess::{Ceiling, CellResult, Flag, Severity, Status};

/// Most cells listed, those in the figure not counted.
const LISTED: usize = 25;
/// Most reasons given for one cell.
const REASONS: usize = 5;

/// How bad a cell is; smaller is worse. The last field is the cell's place, so that the order is total.
type Rank = (u8, std::cmp::Reverse<usize>, std::cmp::Reverse<usize>, u64);

#[derive(Clone)]
struct Listed {
    rank: Rank,
    cell: String,
    group: String,
    reasons: String,
    figure: Option<String>,
}

struct Drawn {
    row: Listed,
    cell: WorstCell,
}

/// A row of the table, as Markdown.
pub(super) struct DistrustRow<'a> {
    /// Number in the figure of the worst, from 1.
    pub in_figure: Option<usize>,
    pub cell: &'a str,
    pub group: &'a str,
    pub reasons: &'a str,
    /// File of the cell's own figure.
    pub figure: Option<&'a str>,
}

/// Keeps the worst cells of a stream.
#[derive(Default)]
pub(super) struct Distrust {
    listed: Vec<Listed>,
    /// The worst of those that have something to draw.
    drawn: Vec<Drawn>,
    /// Cells with a reason to be listed, shown or not.
    suspects: u64,
}

/// The sentence said about a verdict, where it is a reason for distrust.
fn verdict_words(verdict: Option<Ceiling>) -> Option<&'static str> {
    match verdict? {
        Ceiling::Declining => Some(
            "the rate falls at high drive (depolarisation block or failing clamp); steps beyond the peak are left out",
        ),
        Ceiling::Open => {
            Some("no ceiling in sight: max rate and half-rise are not determined, the initial gain is")
        }
        Ceiling::Loose => Some("the interval of max rate is wide"),
        Ceiling::Resolved | Ceiling::Silent => None,
    }
}

fn tier(cell: &CellResult, rejects: usize, cautions: usize) -> Option<u8> {
    let Some(first) = cell.responses.first() else {
        return Some(1);
    };
    let verdict = |wanted| first.ceiling == Some(wanted);
    Some(match first.status {
        Status::NotConverged => 0,
        Status::Refused => 1,
        Status::TooFewLevels => 2,
        Status::NoSteps => 3,
        Status::Silent => 4,
        Status::Fitted if rejects > 0 => 5,
        Status::Fitted if verdict(Ceiling::Declining) => 6,
        Status::Fitted if verdict(Ceiling::Open) => 7,
        Status::Fitted if cautions > 0 => 8,
        Status::Fitted if verdict(Ceiling::Loose) => 9,
        Status::Fitted => return None,
    })
}

impl Distrust {
    /// Looks at the next cell; `place` is its number in the stream, `draw` whether its figure may be wanted.
    pub(super) fn add(&mut self, cell: &CellResult, figure: Option<&str>, place: u64, draw: bool) {
        let flags = |severity| {
            cell.responses
                .iter()
                .flat_map(|r| &r.flags)
                .filter(|flag| flag.severity == severity)
                .count()
        };
        let (rejects, cautions) = (flags(Severity::Reject), flags(Severity::Caution));
        let Some(tier) = tier(cell, rejects, cautions) else {
            return;
        };
        self.suspects += 1;
        let rank = (
            tier,
            std::cmp::Reverse(rejects),
            std::cmp::Reverse(cautions),
            place,
        );
        let listed_at = self.listed.partition_point(|listed| listed.rank < rank);
        let drawn_at = self.drawn.partition_point(|drawn| drawn.row.rank < rank);
        if listed_at >= LISTED && drawn_at >= WORST {
            return;
        }
        let row = Listed {
            rank,
            cell: id_markdown(&cell.id.0),
            group: cell.group.as_deref().map(id_markdown).unwrap_or_default(),
            reasons: reasons(cell),
            figure: figure.map(str::to_string),
        };
        if draw
            && drawn_at < WORST
            && let Some(cell) = WorstCell::new(cell)
        {
            self.drawn.truncate(WORST - 1);
            let row = row.clone();
            self.drawn.insert(drawn_at, Drawn { row, cell });
        }
        if listed_at < LISTED {
            self.listed.truncate(LISTED - 1);
            self.listed.insert(listed_at, row);
        }
    }

    /// Number of cells with a reason for distrust.
    pub(super) fn suspects(&self) -> u64 {
        self.suspects
    }

    /// The worst cells that have something to draw, worst first.
    pub(super) fn drawn(&self) -> Vec<&WorstCell> {
        self.drawn.iter().map(|drawn| &drawn.cell).collect()
    }

    /// The worst cells and those drawn, worst first, each with its number in the figure.
    pub(super) fn rows(&self) -> Vec<DistrustRow<'_>> {
        let number = |row: &Listed| self.drawn.iter().position(|drawn| drawn.row.rank == row.rank);
        // A drawn cell that is not among the listed ranks behind all of them.
        let further = self
            .drawn
            .iter()
            .map(|drawn| &drawn.row)
            .filter(|row| self.listed.iter().all(|listed| listed.rank != row.rank));
        self.listed
            .iter()
            .chain(further)
            .map(|row| DistrustRow {
                in_figure: number(row).map(|place| place + 1),
                cell: &row.cell,
                group: &row.group,
                reasons: &row.reasons,
                figure: row.figure.as_deref(),
            })
            .collect()
    }
}

/// The reasons in plain words, as Markdown.
fn reasons(cell: &CellResult) -> String {
    let mut said: Vec<String> = Vec::new();
    let mut say = |text: String| {
        if !text.is_empty() && !said.contains(&text) {
            said.push(text);
        }
    };
    let Some(first) = cell.responses.first() else {
        return "no response was analysed".into();
    };
    if first.status != Status::Fitted {
        let reason = sentence_markdown(&first.reason);
        let status = first.status.name();
        say(if reason.is_empty() {
            status.into()
        } else {
            format!("**{status}**: {reason}")
        });
    } else if let Some(words) = verdict_words(first.ceiling) {
        let verdict = first.ceiling.map_or("", Ceiling::name);
        say(format!("**{verdict}**: {words}"));
    }
    for severity in [Severity::Reject, Severity::Caution] {
        for (i, response) in cell.responses.iter().enumerate() {
            for flag in response.flags.iter().filter(|flag| flag.severity == severity) {
                // What holds for the first response need not be said again for the others.
                let known = cell
                    .responses
                    .iter()
                    .take(i)
                    .flat_map(|r| &r.flags)
                    .any(|f| f.flag == flag.flag);
                // The verdict of the first response has already said as much.
                let said_by_verdict = i == 0 && flag.flag.starts_with("ceiling-");
                if !known && !said_by_verdict {
                    let place = if i == 0 {
                        String::new()
                    } else {
                        format!(" (response {})", response.response.name())
                    };
                    say(flag_words(flag, &place));
                }
            }
        }
    }
    let more = said.len().saturating_sub(REASONS);
    said.truncate(REASONS);
    let mut text = said.join("; ");
    if more > 0 {
        text.push_str(&format!("; and {more} more in flags.parquet"));
    }
    text
}

fn flag_words(flag: &Flag, place: &str) -> String {
    let message = sentence_markdown(flag.message.trim().trim_end_matches('.'));
    let lead = if flag.severity == Severity::Reject {
        "**reject** "
    } else {
        ""
    };
    if message.is_empty() {
        format!("{lead}{}{place}", sentence_markdown(flag.flag))
    } else {
        format!("{lead}{message}{place}")
    }
}
