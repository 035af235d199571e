//! Progress, messages and the closing summary.

use halfrise::run::{Outcome, Progress};
use indicatif::{ProgressBar, ProgressStyle};
use serde_json::{Value, json};

/// Exit codes.
pub mod exit {
    use std::process::ExitCode;

    /// An exit code by its number.
    #[derive(Clone, Copy, Debug)]
    pub struct Code(u8);

    impl From<Code> for ExitCode {
        fn from(code: Code) -> Self {
            Self::from(code.0)
        }
    }

    /// Done.
    pub const DONE: Code = Code(0);
    /// Could not read or write, or an internal fault.
    pub const FAILED: Code = Code(1);
    /// Usage or settings.
    pub const USAGE: Code = Code(2);
    /// Bad data: nothing could be fitted, or `--strict` and something was refused.
    pub const BAD_DATA: Code = Code(3);
    /// Interrupted.
    pub const INTERRUPTED: Code = Code(130);
}

/// Speaks to the person at the terminal, on standard error.
pub struct Reporter {
    quiet: bool,
}

impl Reporter {
    /// `quiet` leaves only errors.
    pub fn new(quiet: bool) -> Self {
        Self { quiet }
    }

    /// An error: what, where, and the way out.
    pub fn error(&self, message: &str) {
        // anstream drops the colour off a terminal and for NO_COLOR.
        anstream::eprintln!("\u{1b}[1;31merror\u{1b}[0m: {message}");
    }

    /// A progress bar that hides itself off a terminal.
    pub fn progress(&self) -> Bar {
        if self.quiet {
            Bar(ProgressBar::hidden())
        } else {
            Bar(ProgressBar::new_spinner())
        }
    }

    /// The closing summary, on standard output.
    pub fn outcome(&self, outcome: &Outcome, rates_only: bool) {
        if self.quiet {
            return;
        }
        for (table, rows) in &outcome.set.rows {
            println!(
                "{table}: {} rows = {} used + {} outside steps + {} refused",
                rows.rows, rows.used, rows.outside_steps, rows.refused
            );
        }
        if !rates_only {
            for (response, counts) in &outcome.counts.responses {
                let ceiling: Vec<String> = counts
                    .ceiling
                    .iter()
                    .filter(|(_, n)| **n > 0)
                    .map(|(name, n)| format!("{n} {name}"))
                    .collect();
                println!(
                    "{}: {} cells, {} usable; ceiling {}",
                    response.name(),
                    outcome.counts.cells,
                    counts.usable,
                    if ceiling.is_empty() {
                        "not judged".into()
                    } else {
                        ceiling.join(", ")
                    }
                );
            }
        }
        let what = if rates_only {
            "rates"
        } else {
            "read summary.md first; results"
        };
        println!("{what} in {}", outcome.folder.display());
    }
}

/// The bar of one run.
pub struct Bar(ProgressBar);

impl Bar {
    /// Shows a stage.
    pub fn at(&self, stage: Progress) {
        match stage {
            Progress::Reading => self.0.set_message("reading"),
            Progress::Cells(cells) => {
                self.0.set_length(cells);
                if let Ok(style) = ProgressStyle::with_template("{bar:30} {pos}/{len} cells, {eta} left") {
                    self.0.set_style(style);
                }
            }
            Progress::Done(cells) => self.0.inc(cells),
            Progress::Finishing => self.0.set_message("writing"),
        }
    }

    /// Takes the bar off the screen.
    pub fn clear(&self) {
        self.0.finish_and_clear();
    }
}

/// The closing summary as JSON.
pub fn json(outcome: &Outcome, rates_only: bool) -> Value {
    let rows: serde_json::Map<String, Value> = outcome
        .set
        .rows
        .iter()
        .map(|(table, rows)| ((*table).to_owned(), json!(rows)))
        .collect();
    json!({
        "command": if rates_only { "rates" } else { "fit" },
        "name": outcome.set.name,
        "folder": outcome.folder,
        "rows": rows,
        "counts": outcome.counts,
        "fitted": if rates_only { Value::Null } else { json!(outcome.fitted) },
        "unfitted": if rates_only { Value::Null } else { json!(outcome.unfitted) },
        "tables": outcome.tables,
    })
}
