//! `halfrise check`: what a set holds and what would be refused.

use std::collections::BTreeMap;
use std::sync::atomic::AtomicBool;

use halfrise::recording::{ReadOptions, RecordingSet, read};
use halfrise::run::{SetFacts, drive_words};
use serde_json::json;

use crate::arguments::CommonArguments;
use crate::report::{Reporter, exit};

/// Examples printed of each reason.
const EXAMPLES: usize = 3;

pub fn check(arguments: &CommonArguments, cancel: &AtomicBool, reporter: &Reporter) -> exit::Code {
    let set = match read(&arguments.set, &ReadOptions { cancel: Some(cancel) }) {
        Ok(set) => set,
        Err(error) => {
            reporter.error(&error.to_string());
            return crate::code_of_read(&error);
        }
    };
    if let Err(error) = set.analysis.validate() {
        reporter.error(&error.to_string());
        return exit::USAGE;
    }
    let refused_cells = set.cells.iter().filter(|c| c.refusal.is_some()).count();
    if arguments.json {
        println!("{}", as_json(&set, refused_cells));
    } else if !arguments.quiet {
        print(&set, refused_cells);
    }
    let analysable = set
        .cells
        .iter()
        .any(|c| c.refusal.is_none() && !c.steps.is_empty());
    if !analysable {
        reporter.error("no cell of the set has a usable step\n  see the reasons above");
        exit::BAD_DATA
    } else if arguments.strict && (!set.refused.is_empty() || refused_cells > 0) {
        reporter.error(&format!(
            "--strict: {} rows and {refused_cells} cells would be refused",
            set.refused.len()
        ));
        exit::BAD_DATA
    } else {
        exit::DONE
    }
}

fn by_reason(set: &RecordingSet) -> BTreeMap<&'static str, Vec<&halfrise::recording::RefusedRow>> {
    let mut reasons: BTreeMap<_, Vec<_>> = BTreeMap::new();
    for row in &set.refused {
        reasons.entry(row.reason).or_default().push(row);
    }
    reasons
}

fn print(set: &RecordingSet, refused_cells: usize) {
    let steps: usize = set.cells.iter().map(|c| c.steps.len()).sum();
    println!(
        "{}: {} cells, {steps} steps, {}",
        set.name,
        set.cells.len(),
        drive_words(&set.drive_kinds())
    );
    for input in &set.inputs {
        let table = input.table.map_or("settings", |t| t.name());
        println!("  {:<9} {:>10} rows  {}", table, input.rows, input.path);
    }
    for (table, rows) in SetFacts::of(set).rows {
        println!(
            "{table}: {} rows = {} used + {} outside steps + {} refused",
            rows.rows, rows.used, rows.outside_steps, rows.refused
        );
    }
    for note in &set.notes {
        println!("note: {note}");
    }
    for cell in set
        .cells
        .iter()
        .filter_map(|c| c.refusal.as_ref().map(|r| (c, r)))
    {
        println!(
            "cell {:?} would be refused ({}): {}",
            &*cell.0.id.0, cell.1.rule, cell.1.sentence
        );
    }
    for (reason, rows) in by_reason(set) {
        println!("{} rows would be refused: {reason}", rows.len());
        for row in rows.iter().take(EXAMPLES) {
            let file = set.inputs.get(row.file).map_or("?", |f| f.path.as_str());
            println!("  {file} row {}: {}", row.row, row.message.replace('\n', " "));
        }
        if rows.len() > EXAMPLES {
            println!("  and {} more", rows.len() - EXAMPLES);
        }
    }
    if set.refused.is_empty() && refused_cells == 0 {
        println!("nothing would be refused");
    }
}

fn as_json(set: &RecordingSet, refused_cells: usize) -> serde_json::Value {
    let rows: serde_json::Map<String, serde_json::Value> = SetFacts::of(set)
        .rows
        .into_iter()
        .map(|(t, r)| (t.to_owned(), json!(r)))
        .collect();
    let reasons: BTreeMap<_, usize> = by_reason(set)
        .into_iter()
        .map(|(r, rows)| (r, rows.len()))
        .collect();
    json!({
        "command": "check",
        "name": set.name,
        "cells": set.cells.len(),
        "cells_refused": refused_cells,
        "steps": set.cells.iter().map(|c| c.steps.len()).sum::<usize>(),
        "rows": rows,
        "refused": reasons,
        "notes": set.notes,
    })
}
