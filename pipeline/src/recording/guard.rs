//! Foreign parsers on damaged files: whatever they do, the outcome is an error with the file's name.

use std::panic::{AssertUnwindSafe, catch_unwind};

use polars::error::PolarsResult;

use super::error::{Problem, ReadError};

/// Runs a parser of polars; an error or a panic becomes a `Data` error that begins with `what`.
///
/// # Errors
/// Whenever the parser does not return a value.
pub fn guarded<T>(file: &str, what: &str, parse: impl FnOnce() -> PolarsResult<T>) -> Result<T, ReadError> {
    const REMEDY: &str =
        "copy or export the file again; if it opens elsewhere, export it as CSV and report the file";
    // The parser's state is dropped with the closure, so nothing half-changed can be seen afterwards.
    let reason = match catch_unwind(AssertUnwindSafe(parse)) {
        Ok(Ok(value)) => return Ok(value),
        Ok(Err(error)) => error.to_string(),
        Err(panic) => panic
            .downcast_ref::<String>()
            .cloned()
            .or_else(|| panic.downcast_ref::<&str>().map(|text| (*text).to_owned()))
            .unwrap_or_else(|| "the parser gave up".into()),
    };
    let reason = reason.lines().next().unwrap_or_default().trim().to_owned();
    Err(ReadError::Data(Problem::of_file(
        file,
        format!("{what}: {reason}"),
        REMEDY,
    )))
}
