//! What can go wrong with a whole recording set, as opposed to one row or one cell of it.

use std::fmt;

/// What kind of trouble an error is; the command line turns it into an exit code.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash)]
pub enum ErrorClass {
    /// A file or folder could not be read, or this program has a fault.
    Io,
    /// `recording.toml` or the way the set is laid out asks for something impossible.
    Settings,
    /// The tables do not hold what the job needs.
    Data,
}

/// Where a problem sits, what it is, and the way out.
///
/// Prints as `<file> row <n>: <what>` and, on a second line indented by two spaces, the remedy.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Problem {
    /// The file or folder, as the user knows it.
    pub file: String,
    /// Row number, 1-based, header excluded, where one row is to blame.
    pub row: Option<u64>,
    /// What is wrong, with the value and the limit.
    pub what: String,
    /// What to do about it; several lines where lines are to be copied.
    pub remedy: String,
}

impl Problem {
    /// A problem of a whole file or folder.
    pub fn of_file(file: impl Into<String>, what: impl Into<String>, remedy: impl Into<String>) -> Self {
        Self {
            file: file.into(),
            row: None,
            what: what.into(),
            remedy: remedy.into(),
        }
    }

    /// The same problem pinned to a row.
    #[must_use]
    pub fn at_row(mut self, row: u64) -> Self {
        self.row = Some(row);
        self
    }
}

impl fmt::Display for Problem {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(&self.file)?;
        if let Some(row) = self.row {
            write!(f, " row {row}")?;
        }
        write!(f, ": {}", self.what)?;
        for line in self.remedy.lines() {
            write!(f, "\n  {line}")?;
        }
        Ok(())
    }
}

/// Why a recording set could not be read.
#[derive(Clone, Debug, PartialEq, Eq, thiserror::Error)]
pub enum ReadError {
    /// A file or folder could not be opened or read.
    #[error("{0}")]
    Io(Problem),
    /// `recording.toml` or the choice of files is at fault.
    #[error("{0}")]
    Settings(Problem),
    /// The content of a table is at fault as a whole.
    #[error("{0}")]
    Data(Problem),
    /// The row count of a table does not add up: a fault of this program, never of the data.
    #[error(
        "{table}: {rows} rows read, but {used} used + {outside} outside steps + {refused} refused\n  this is a fault of halfrise; please report it with the set"
    )]
    Internal {
        /// Which table.
        table: &'static str,
        /// Rows read.
        rows: u64,
        /// Rows used.
        used: u64,
        /// Rows outside every step.
        outside: u64,
        /// Rows refused.
        refused: u64,
    },
    /// The caller asked to stop.
    #[error("interrupted while reading\n  nothing was written")]
    Interrupted,
}

impl ReadError {
    /// The kind of trouble this is.
    pub fn class(&self) -> ErrorClass {
        match self {
            Self::Io(_) | Self::Internal { .. } | Self::Interrupted => ErrorClass::Io,
            Self::Settings(_) => ErrorClass::Settings,
            Self::Data(_) => ErrorClass::Data,
        }
    }
}
