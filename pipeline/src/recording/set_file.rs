//! `recording.toml`: the optional file that names files, columns, units and analysis settings of a set.

use std::collections::BTreeMap;
use std::path::Path;

use serde::Deserialize;

use super::error::{Problem, ReadError};
use super::model::TableKind;
use super::units::{Quantity, Unit};
use crate::settings::Analysis;

/// Name of the file.
pub const SET_FILE: &str = "recording.toml";

/// The content of `recording.toml`; every part has a default.
#[derive(Debug, Default, Deserialize)]
#[serde(default, deny_unknown_fields)]
pub struct SetFile {
    /// Name of the set.
    pub name: Option<String>,
    /// Files of each table and how text files are written.
    pub tables: Tables,
    /// Headers of each table.
    pub columns: Columns,
    /// Units of each quantity.
    pub units: Units,
    /// Analysis settings.
    pub analysis: Analysis,
}

/// `[tables]`.
#[derive(Debug, Default, Deserialize)]
#[serde(default, deny_unknown_fields)]
pub struct Tables {
    /// Files or globs of the spike table.
    pub spikes: Option<Files>,
    /// Files or globs of the protocol.
    pub protocol: Option<Files>,
    /// Files or globs of the cell table.
    pub cells: Option<Files>,
    /// Field separator of `.csv` files.
    pub separator: Option<Mark>,
    /// Decimal mark of numbers in text files.
    pub decimal: Option<Mark>,
}

impl Tables {
    /// The files listed for a table.
    pub fn of(&self, table: TableKind) -> Option<&[String]> {
        let files = match table {
            TableKind::Spikes => &self.spikes,
            TableKind::Protocol => &self.protocol,
            TableKind::Cells => &self.cells,
        };
        files.as_ref().map(|files| files.0.as_slice())
    }
}

/// One file or glob, or a list of them.
#[derive(Debug, Deserialize)]
#[serde(try_from = "toml::Value")]
pub struct Files(Vec<String>);

impl TryFrom<toml::Value> for Files {
    type Error = String;

    fn try_from(value: toml::Value) -> Result<Self, String> {
        const WANTED: &str = "expected a file name, or a list of file names, in quotes";
        let files = match value {
            toml::Value::String(file) => vec![file],
            toml::Value::Array(list) => list
                .into_iter()
                .map(|entry| match entry {
                    toml::Value::String(file) => Ok(file),
                    other => Err(format!("{other} is not a file name; {WANTED}")),
                })
                .collect::<Result<_, _>>()?,
            other => return Err(format!("{other} is not a file name; {WANTED}")),
        };
        if files.is_empty() || files.iter().any(|file| file.trim().is_empty()) {
            return Err(format!("no file name given; {WANTED}"));
        }
        Ok(Self(files))
    }
}

/// One ASCII character, such as `;`.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Deserialize)]
#[serde(try_from = "String")]
pub struct Mark(pub u8);

impl TryFrom<String> for Mark {
    type Error = String;

    fn try_from(text: String) -> Result<Self, String> {
        match text.as_bytes() {
            [byte]
                if byte.is_ascii() && !matches!(byte, b'"' | b'\n' | b'\r' | 0) && !byte.is_ascii_digit() =>
            {
                Ok(Self(*byte))
            }
            _ => Err(format!(
                "{text:?} is not one ASCII character such as \",\", \";\" or \"\\t\""
            )),
        }
    }
}

/// `[columns.spikes]`, `[columns.protocol]`, `[columns.cells]`: our name = the file's header.
#[derive(Debug, Default, Deserialize)]
#[serde(default, deny_unknown_fields)]
pub struct Columns {
    /// Headers of the spike table.
    pub spikes: BTreeMap<String, String>,
    /// Headers of the protocol.
    pub protocol: BTreeMap<String, String>,
    /// Headers of the cell table.
    pub cells: BTreeMap<String, String>,
}

impl Columns {
    /// The headers given for a table.
    pub fn of(&self, table: TableKind) -> &BTreeMap<String, String> {
        match table {
            TableKind::Spikes => &self.spikes,
            TableKind::Protocol => &self.protocol,
            TableKind::Cells => &self.cells,
        }
    }
}

/// `[units]`: symbols for all tables, and `[units.spikes]` and so on where one table differs from the others.
#[derive(Debug, Default, Deserialize)]
#[serde(default, deny_unknown_fields)]
pub struct Units {
    time: Option<String>,
    current: Option<String>,
    conductance: Option<String>,
    potential: Option<String>,
    capacitance: Option<String>,
    spikes: TableUnits,
    protocol: TableUnits,
    cells: TableUnits,
}

/// `[units.<table>]`.
#[derive(Debug, Default, Deserialize)]
#[serde(default, deny_unknown_fields)]
pub struct TableUnits {
    time: Option<String>,
    current: Option<String>,
    conductance: Option<String>,
    potential: Option<String>,
    capacitance: Option<String>,
}

/// Field of one quantity in `Units` and `TableUnits`, which have the same five.
macro_rules! field {
    ($units:expr, $quantity:expr) => {
        match $quantity {
            Quantity::Time => $units.time.as_deref(),
            Quantity::Current => $units.current.as_deref(),
            Quantity::Conductance => $units.conductance.as_deref(),
            Quantity::Potential => $units.potential.as_deref(),
            Quantity::Capacitance => $units.capacitance.as_deref(),
        }
    };
}

impl Units {
    /// The unit set for a quantity in a table, and the name of the key that sets it.
    ///
    /// # Errors
    /// A symbol that is not one of the quantity's units.
    pub fn of(&self, table: TableKind, quantity: Quantity) -> Result<Option<(Unit, String)>, ReadError> {
        let own = match table {
            TableKind::Spikes => &self.spikes,
            TableKind::Protocol => &self.protocol,
            TableKind::Cells => &self.cells,
        };
        if let Some(symbol) = field!(own, quantity) {
            let key = format!("[units.{}] {}", table.name(), quantity.key());
            return known(symbol, quantity, &key).map(|unit| Some((unit, key)));
        }
        match field!(self, quantity) {
            None => Ok(None),
            Some(symbol) => {
                let key = format!("[units] {}", quantity.key());
                known(symbol, quantity, &key).map(|unit| Some((unit, key)))
            }
        }
    }

    /// Checks every symbol, also those of columns the set does not have.
    fn check(&self) -> Result<(), ReadError> {
        for table in [TableKind::Spikes, TableKind::Protocol, TableKind::Cells] {
            for quantity in Quantity::ALL {
                self.of(table, quantity)?;
            }
        }
        for quantity in Quantity::ALL {
            if let Some(symbol) = field!(self, quantity) {
                known(symbol, quantity, &format!("[units] {}", quantity.key()))?;
            }
        }
        Ok(())
    }
}

fn known(symbol: &str, quantity: Quantity, key: &str) -> Result<Unit, ReadError> {
    quantity.unit(symbol).ok_or_else(|| {
        ReadError::Settings(Problem::of_file(
            SET_FILE,
            format!(
                "{key} = {symbol:?} is not a unit of {} known here",
                quantity.key()
            ),
            format!("use one of {}", quantity.symbols()),
        ))
    })
}

impl SetFile {
    /// Parses the text of `recording.toml`.
    ///
    /// # Errors
    /// Invalid TOML, unknown keys, unknown units and settings out of range, each with its place and the way out.
    pub fn parse(text: &str) -> Result<Self, ReadError> {
        let text = text.strip_prefix('\u{feff}').unwrap_or(text);
        let set: Self = toml::from_str(text).map_err(|error| {
            let line = error
                .span()
                .map(|span| text.get(..span.start).unwrap_or(text).matches('\n').count() + 1);
            let place = line.map(|line| format!("line {line}: ")).unwrap_or_default();
            let message = error.message().trim().replace('\n', " ");
            ReadError::Settings(Problem::of_file(
                SET_FILE,
                format!("{place}{message}"),
                "known keys: name, [tables], [columns.spikes], [columns.protocol], [columns.cells], [units], [analysis]",
            ))
        })?;
        set.units.check()?;
        set.analysis.validate().map_err(|error| {
            let text = error.to_string();
            let (what, remedy) = text.split_once('\n').unwrap_or((&text, ""));
            ReadError::Settings(Problem::of_file(
                SET_FILE,
                format!("[analysis] {what}"),
                remedy.trim(),
            ))
        })?;
        if set
            .tables
            .decimal
            .is_some_and(|mark| !matches!(mark.0, b'.' | b','))
        {
            return Err(ReadError::Settings(Problem::of_file(
                SET_FILE,
                "[tables] decimal is neither \".\" nor \",\"",
                "decimal = \",\" reads numbers such as 0,25",
            )));
        }
        if set.tables.decimal == Some(Mark(b',')) && set.tables.separator.is_none_or(|mark| mark.0 == b',') {
            // Tab-separated files may have decimal commas under any separator, so only the explicit clash is refused.
            if set.tables.separator.is_some() {
                return Err(ReadError::Settings(Problem::of_file(
                    SET_FILE,
                    "[tables] separator and decimal are both \",\"",
                    "separator = \";\" is what spreadsheets write beside decimal commas",
                )));
            }
        }
        Ok(set)
    }

    /// Reads `recording.toml` of a folder; `None` where there is none. Gives back its bytes too.
    ///
    /// # Errors
    /// Where the file exists but cannot be read or is not valid.
    pub fn read(folder: &Path) -> Result<Option<(Self, Vec<u8>)>, ReadError> {
        let path = folder.join(SET_FILE);
        let bytes = match std::fs::read(&path) {
            Ok(bytes) => bytes,
            Err(error) if error.kind() == std::io::ErrorKind::NotFound => return Ok(None),
            Err(error) => {
                return Err(ReadError::Io(Problem::of_file(
                    SET_FILE,
                    format!("cannot be read: {error}"),
                    "check that it is a file and that you may read it",
                )));
            }
        };
        let text = std::str::from_utf8(&bytes).map_err(|error| {
            ReadError::Settings(Problem::of_file(
                SET_FILE,
                format!("is not UTF-8 text (byte offset {})", error.valid_up_to()),
                "save it as UTF-8",
            ))
        })?;
        let set = Self::parse(text)?;
        Ok(Some((set, bytes)))
    }
}

#[cfg(test)]
mod tests {
    #![allow(clippy::unwrap_used)]
    use super::*;
    use crate::recording::ErrorClass;

    #[test]
    fn a_full_file_is_read() {
        let set = SetFile::parse(
            "name = \"lateral shelf, spring\"\n[tables]\nspikes = [\"day1/spikes.csv\", \"day2/*.parquet\"]\nprotocol = \"p.csv\"\n\
             separator = \";\"\ndecimal = \",\"\n[columns.spikes]\ncell = \"neuron\"\n[units]\ntime = \"ms\"\n[units.protocol]\ntime = \"s\"\n\
             [analysis]\ncurve_points = 51\n",
        )
        .unwrap();
        assert_eq!(set.name.as_deref(), Some("lateral shelf, spring"));
        assert_eq!(set.tables.of(TableKind::Spikes).unwrap().len(), 2);
        assert_eq!(set.tables.of(TableKind::Protocol).unwrap(), ["p.csv"]);
        assert!(set.tables.of(TableKind::Cells).is_none());
        assert_eq!(set.columns.of(TableKind::Spikes)["cell"], "neuron");
        let unit = |table| set.units.of(table, Quantity::Time).unwrap().unwrap();
        assert_eq!(unit(TableKind::Spikes).0.symbol, "ms");
        assert_eq!(unit(TableKind::Spikes).1, "[units] time");
        assert_eq!(unit(TableKind::Protocol).0.symbol, "s");
        assert_eq!(unit(TableKind::Protocol).1, "[units.protocol] time");
        assert_eq!(set.analysis.curve_points, 51);
    }

    /// Each entry: text, and fragments the message must hold.
    #[test]
    fn mistakes_are_named() {
        for (text, fragments) in [
            ("nam = \"x\"", &["line 1", "`nam`", "`name`", "`units`"][..]),
            ("[units]\ntimes = \"s\"", &["line 2", "`times`", "`time`"]),
            ("[units]\ntime = \"min\"", &["[units] time", "min", "s, ms, us"]),
            (
                "[units.spikes]\ntime = \"pA\"",
                &["[units.spikes] time", "pA", "s, ms, us"],
            ),
            ("[analysis]\nboots = 3", &["`boots`", "`steady_fraction`"]),
            (
                "[analysis]\nsteady_fraction = 2.0",
                &["steady_fraction = 2", "(0, 1]"],
            ),
            ("[tables]\nspikes = 3", &["3", "file name"]),
            ("[tables]\nspikes = []", &["no file name"]),
            ("[tables]\nseparator = \"ab\"", &["ab", "one ASCII character"]),
            ("[tables]\ndecimal = \"x\"", &["decimal"]),
            ("[tables]\ndecimal = \",\"\nseparator = \",\"", &["both"]),
            ("[columns.spike]\ncell = \"x\"", &["`spike`", "`spikes`"]),
            ("name = ", &["line 1"]),
        ] {
            let error = SetFile::parse(text).unwrap_err();
            assert_eq!(error.class(), ErrorClass::Settings);
            let message = error.to_string();
            for fragment in fragments {
                assert!(message.contains(fragment), "{fragment} not in {message}");
            }
            assert!(message.contains("\n  "), "no remedy in {message}");
        }
    }
}
