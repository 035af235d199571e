//! The sections on what was read and what was refused.

use std::collections::BTreeMap;

use super::numbers::count_text;
use super::text::{id_markdown, sentence_markdown, table_head, table_row};
use crate::recording::{RecordingSet, RefusedRow, RowCounts, TableKind};

/// Most input files listed.
const FILES_LISTED: usize = 30;
/// Reasons named in the opening.
const REASONS_NAMED: usize = 4;
/// Most notes of the reader listed.
const NOTES_LISTED: usize = 50;

/// One line on what the set is.
pub(super) fn set_line(set: &RecordingSet) -> String {
    // From the row counts: the spikes themselves may have been let go by now.
    let steps = set.protocol_rows.used;
    let spikes = set.spike_rows.used + set.spike_rows.outside_steps;
    let mut groups: Vec<&str> = set
        .cells
        .iter()
        .filter_map(|cell| cell.group.as_deref())
        .collect();
    groups.sort_unstable();
    groups.dedup();
    let kinds: Vec<String> = set
        .drive_kinds()
        .iter()
        .map(|kind| {
            let cells = set
                .cells
                .iter()
                .filter(|cell| !cell.steps.is_empty() && cell.drive_kind == *kind)
                .count();
            format!(
                "{} under {} steps ({})",
                count_text(cells as u64),
                kind.name(),
                kind.unit()
            )
        })
        .collect();
    let drive = if kinds.is_empty() {
        String::new()
    } else {
        format!(", {}", kinds.join(", "))
    };
    let in_groups = match groups.len() {
        0 => String::new(),
        1 => " in 1 group".into(),
        n => format!(" in {} groups", count_text(n as u64)),
    };
    let time = if set.has_sweeps {
        "sweeps"
    } else {
        "a continuous time line"
    };
    format!(
        "{} cells{in_groups}{drive}; {} protocol steps and {} accepted spikes, recorded in {time}.\n",
        count_text(set.cells.len() as u64),
        count_text(steps),
        count_text(spikes)
    )
}

/// How many rows were read, used and refused, the sum that shows that no row is lost, and the reasons in one sentence.
pub(super) fn what_was_read_and_refused(set: &RecordingSet) -> String {
    let mut text = String::from(
        "## What was read and refused\n\nNo row is lost: in each table, rows read = used + outside steps + refused.\n\n",
    );
    text.push_str(&table_head(&[
        ("table", false),
        ("rows read", true),
        ("", false),
        ("used", true),
        ("outside steps", true),
        ("refused", true),
    ]));
    let tables = [
        ("spikes", Some(set.spike_rows)),
        ("protocol", Some(set.protocol_rows)),
        ("cells", set.cell_rows),
    ];
    for (name, counts) in tables {
        if let Some(RowCounts {
            rows,
            used,
            outside_steps,
            refused,
        }) = counts
        {
            // Said as it is: a sum that does not hold must not look as if it did.
            let holds = rows == used + outside_steps + refused;
            text.push_str(&table_row(&[
                name.to_string(),
                count_text(rows),
                if holds { "=" } else { "**is not**" }.to_string(),
                count_text(used),
                if name == "spikes" {
                    format!("+ {}", count_text(outside_steps))
                } else {
                    "+ 0".into()
                },
                format!("+ {}", count_text(refused)),
            ]));
        }
    }
    text.push('\n');
    let cells = set.cells.iter().filter(|cell| cell.refusal.is_some()).count();
    if set.refused.is_empty() && cells == 0 {
        text.push_str("Nothing was refused: every row and every cell was accepted.\n\n");
        return text;
    }
    let mut reasons: BTreeMap<(TableKind, &str), u64> = BTreeMap::new();
    for row in &set.refused {
        *reasons.entry((row.table, row.reason)).or_default() += 1;
    }
    let mut by_number: Vec<((TableKind, &str), u64)> = reasons.into_iter().collect();
    by_number.sort_by_key(|(_, rows)| std::cmp::Reverse(*rows));
    let more = by_number.len().saturating_sub(REASONS_NAMED);
    let mut named: Vec<String> = by_number
        .iter()
        .take(REASONS_NAMED)
        .map(|((table, reason), rows)| {
            format!(
                "{} {} in {}",
                count_text(*rows),
                id_markdown(reason),
                table.name()
            )
        })
        .collect();
    match more {
        0 => {}
        1 => named.push("1 more reason".into()),
        more => named.push(format!("{} more reasons", count_text(more as u64))),
    }
    let list = if named.is_empty() {
        String::new()
    } else {
        format!(" ({})", named.join(", "))
    };
    let whole = match cells {
        0 => String::new(),
        1 => " and 1 whole cell".into(),
        n => format!(" and {} whole cells", count_text(n as u64)),
    };
    text.push_str(&format!(
        "Refused: {} rows{list}{whole}. Each reason with an example stands under [What was refused and \
         why](#what-was-refused-and-why), each row in refused.parquet.\n\n",
        count_text(set.refused.len() as u64)
    ));
    text
}

/// The files with what was settled while reading them.
pub(super) fn input_section(set: &RecordingSet) -> String {
    let mut text = String::from("## Input files\n\n");
    text.push_str(&table_head(&[
        ("file", false),
        ("table", false),
        ("rows", true),
        ("SHA-256 (first 12)", false),
    ]));
    for input in set.inputs.iter().take(FILES_LISTED) {
        let hash: String = input.sha256.chars().take(12).collect();
        let rows = if input.table.is_some() {
            count_text(input.rows)
        } else {
            String::new()
        };
        text.push_str(&table_row(&[
            id_markdown(&input.path),
            input.table.map_or("settings", TableKind::name).to_string(),
            rows,
            id_markdown(&hash),
        ]));
    }
    if let Some(more) = set
        .inputs
        .len()
        .checked_sub(FILES_LISTED)
        .filter(|more| *more > 0)
    {
        text.push_str(&format!(
            "\n{} more files are listed in run.json.\n",
            count_text(more as u64)
        ));
    }
    if !set.notes.is_empty() {
        text.push_str("\nNoticed and settled while reading:\n\n");
        for note in set.notes.iter().take(NOTES_LISTED) {
            text.push_str(&format!("- {}\n", sentence_markdown(note)));
        }
        if let Some(more) = set.notes.len().checked_sub(NOTES_LISTED).filter(|more| *more > 0) {
            text.push_str(&format!("- and {} more\n", count_text(more as u64)));
        }
    }
    text.push('\n');
    text
}

/// What was refused, by reason, with the first example of each.
pub(super) fn refused_section(set: &RecordingSet) -> String {
    let mut text = String::from("## What was refused and why\n\n");
    let cells = set.cells.iter().filter(|cell| cell.refusal.is_some()).count();
    if set.refused.is_empty() && cells == 0 {
        text.push_str("Nothing.\n\n");
        return text;
    }
    let mut reasons: BTreeMap<(TableKind, &str), (u64, &RefusedRow)> = BTreeMap::new();
    for row in &set.refused {
        reasons.entry((row.table, row.reason)).or_insert((0, row)).0 += 1;
    }
    text.push_str(&format!(
        "{} rows, each with file, row number and reason in refused.parquet. Rows are counted from 1 without the header.\n\n",
        count_text(set.refused.len() as u64)
    ));
    text.push_str(&table_head(&[
        ("table", false),
        ("reason", false),
        ("rows", true),
        ("first example", false),
        ("why, and what to do", false),
    ]));
    for ((table, reason), (rows, first)) in reasons {
        let file = set
            .inputs
            .get(first.file)
            .map_or_else(|| "unknown file".into(), |f| id_markdown(&f.path));
        let mut example = format!("{file}, row {}", count_text(first.row));
        if let Some(cell) = &first.cell {
            example.push_str(&format!(", cell {}", id_markdown(cell)));
        }
        match (first.column, &first.value) {
            (Some(column), Some(value)) => {
                example.push_str(&format!(", {} = {}", id_markdown(column), id_markdown(value)));
            }
            (Some(column), None) => example.push_str(&format!(", column {}", id_markdown(column))),
            (None, Some(value)) => example.push_str(&format!(", value {}", id_markdown(value))),
            (None, None) => {}
        }
        text.push_str(&table_row(&[
            table.name().to_string(),
            id_markdown(reason),
            count_text(rows),
            example,
            sentence_markdown(&first.message),
        ]));
    }
    text.push('\n');
    if cells > 0 {
        let mut rules: BTreeMap<&str, (u64, &str, &str)> = BTreeMap::new();
        for cell in &set.cells {
            if let Some(refusal) = &cell.refusal {
                rules
                    .entry(refusal.rule)
                    .or_insert((0, &cell.id.0, &refusal.sentence))
                    .0 += 1;
            }
        }
        text.push_str(&format!("Whole cells refused: {}.\n\n", count_text(cells as u64)));
        text.push_str(&table_head(&[
            ("reason", false),
            ("cells", true),
            ("first example", false),
            ("why, and what to do", false),
        ]));
        for (rule, (count, cell, sentence)) in rules {
            text.push_str(&table_row(&[
                id_markdown(rule),
                count_text(count),
                id_markdown(cell),
                sentence_markdown(sentence),
            ]));
        }
        text.push('\n');
    }
    text
}
