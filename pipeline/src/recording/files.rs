//! Which files feed which table: default names, lists and globs.

use std::path::{Path, PathBuf};

use super::error::{Problem, ReadError};
use super::model::TableKind;
use super::set_file::{SET_FILE, SetFile};

/// How a file is written.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Format {
    /// Separated text, `tab` telling `.tsv` from `.csv`.
    Text {
        /// Whether fields are separated by tabs by name.
        tab: bool,
        /// How the bytes are packed.
        packing: Packing,
    },
    /// Apache Parquet.
    Parquet,
    /// Arrow IPC file.
    Arrow,
}

/// Compression of a text file.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Packing {
    /// None.
    Plain,
    /// `.gz`.
    Gzip,
    /// `.zst`.
    Zstandard,
}

const EXTENSIONS: &[(&str, Format)] = &[
    (".csv", text(false, Packing::Plain)),
    (".csv.gz", text(false, Packing::Gzip)),
    (".csv.zst", text(false, Packing::Zstandard)),
    (".tsv", text(true, Packing::Plain)),
    (".tsv.gz", text(true, Packing::Gzip)),
    (".tsv.zst", text(true, Packing::Zstandard)),
    (".parquet", Format::Parquet),
    (".arrow", Format::Arrow),
];

/// The extensions in words.
pub const EXTENSIONS_IN_WORDS: &str = ".csv, .tsv (also .gz, .zst), .parquet or .arrow";

const fn text(tab: bool, packing: Packing) -> Format {
    Format::Text { tab, packing }
}

fn format_of(name: &str) -> Option<Format> {
    let name = name.to_lowercase();
    EXTENSIONS
        .iter()
        .find(|(extension, _)| name.ends_with(extension))
        .map(|(_, format)| *format)
}

/// One file of a table.
#[derive(Clone, Debug)]
pub struct TableFile {
    /// Which table.
    pub table: TableKind,
    /// Where it is.
    pub path: PathBuf,
    /// Its path below the set's folder, with `/`: what messages call it.
    pub name: String,
    /// How it is written.
    pub format: Format,
}

/// The files of every table: spikes, protocol, cells.
///
/// # Errors
/// No spike table, no protocol, two files under one default name, a listed file or glob that finds nothing, an
/// extension that is not known.
pub fn find(folder: &Path, set: &SetFile) -> Result<Vec<TableFile>, ReadError> {
    let mut entries = Vec::new();
    let unreadable = |error: std::io::Error| {
        ReadError::Io(Problem::of_file(
            folder.display().to_string(),
            format!("the folder cannot be listed: {error}"),
            "check its permissions",
        ))
    };
    for entry in std::fs::read_dir(folder).map_err(unreadable)? {
        entries.push(
            entry
                .map_err(unreadable)?
                .file_name()
                .to_string_lossy()
                .into_owned(),
        );
    }
    entries.sort();
    let mut files = Vec::new();
    for table in [TableKind::Spikes, TableKind::Protocol, TableKind::Cells] {
        match set.tables.of(table) {
            Some(listed) => files.extend(listed_files(folder, table, listed)?),
            None => files.extend(default_file(folder, table, &entries)?),
        }
    }
    Ok(files)
}

fn default_file(folder: &Path, table: TableKind, entries: &[String]) -> Result<Option<TableFile>, ReadError> {
    let stem = table.name();
    let matches: Vec<(&String, Format)> = entries
        .iter()
        .filter_map(|entry| {
            let lower = entry.to_lowercase();
            let rest = lower.strip_prefix(stem)?;
            let (_, format) = EXTENSIONS.iter().find(|(extension, _)| *extension == rest)?;
            Some((entry, *format))
        })
        .collect();
    match matches.as_slice() {
        [(entry, format)] => Ok(Some(TableFile {
            table,
            path: folder.join(entry),
            name: (*entry).clone(),
            format: *format,
        })),
        [] if table == TableKind::Cells => Ok(None),
        [] => Err(ReadError::Data(Problem::of_file(
            folder.display().to_string(),
            format!("no {stem} table: looked for {stem} with the extension {EXTENSIONS_IN_WORDS}"),
            format!(
                "name the file so, or list it in {SET_FILE}:\n  [tables]\n  {stem} = \"your-file.csv\"{}",
                seen(entries)
            ),
        ))),
        several => {
            let names: Vec<&str> = several.iter().map(|(entry, _)| entry.as_str()).collect();
            Err(ReadError::Settings(Problem::of_file(
                folder.display().to_string(),
                format!(
                    "more than one file could be the {stem} table: {}",
                    names.join(", ")
                ),
                format!(
                    "say in {SET_FILE} which to read (a list reads several as one table):\n  [tables]\n  {stem} = {:?}",
                    names[0]
                ),
            )))
        }
    }
}

/// A line that lists what the folder holds, so that a misspelt name is seen at once.
fn seen(entries: &[String]) -> String {
    const SHOWN: usize = 8;
    if entries.is_empty() {
        return "\nthe folder is empty".into();
    }
    let more = entries.len().saturating_sub(SHOWN);
    let mut list = entries[..entries.len() - more].join(", ");
    if more > 0 {
        list.push_str(&format!(" and {more} more"));
    }
    format!("\nthe folder holds {list}")
}

fn listed_files(folder: &Path, table: TableKind, listed: &[String]) -> Result<Vec<TableFile>, ReadError> {
    let settings =
        |what: String, remedy: &str| Err(ReadError::Settings(Problem::of_file(SET_FILE, what, remedy)));
    let key = table.name();
    let mut files: Vec<TableFile> = Vec::new();
    for entry in listed {
        let entry = entry.trim();
        let path = folder.join(entry);
        let mut found = Vec::new();
        if path.is_file() {
            found.push((path, entry.replace('\\', "/")));
        } else if entry.contains(['*', '?', '[']) {
            let pattern = format!("{}/{entry}", glob::Pattern::escape(&folder.to_string_lossy()));
            let paths = match glob::glob(&pattern) {
                Ok(paths) => paths,
                Err(error) => {
                    return settings(
                        format!("[tables] {key}: {entry:?} is not a valid pattern: {}", error.msg),
                        "* matches any part of a name, ** any folders, ? one character",
                    );
                }
            };
            for path in paths.flatten().filter(|path| path.is_file()) {
                let below = path.strip_prefix(folder).unwrap_or(&path);
                let name = below.to_string_lossy().replace('\\', "/");
                found.push((path, name));
            }
            found.sort_by(|a, b| a.1.cmp(&b.1));
            if found.is_empty() {
                return settings(
                    format!("[tables] {key}: the pattern {entry:?} matches no file"),
                    "patterns are taken from the folder of recording.toml",
                );
            }
        } else {
            return settings(
                format!("[tables] {key}: there is no file {entry:?}"),
                "file names are taken from the folder of recording.toml",
            );
        }
        for (path, name) in found {
            let Some(format) = format_of(&name) else {
                return settings(
                    format!("[tables] {key}: {name:?} has an extension that is not known"),
                    &format!("known: {EXTENSIONS_IN_WORDS}"),
                );
            };
            if files.iter().any(|file| file.path == path) {
                return settings(
                    format!("[tables] {key}: {name:?} is listed twice"),
                    "list every file once; a pattern may already cover it",
                );
            }
            files.push(TableFile {
                table,
                path,
                name,
                format,
            });
        }
    }
    Ok(files)
}

#[cfg(test)]
mod tests {
    #![allow(clippy::unwrap_used)]
    use super::*;
    use crate::recording::ErrorClass;

    fn folder(names: &[&str]) -> tempfile::TempDir {
        let folder = tempfile::tempdir().unwrap();
        for name in names {
            let path = folder.path().join(name);
            std::fs::create_dir_all(path.parent().unwrap()).unwrap();
            std::fs::write(path, "x").unwrap();
        }
        folder
    }

    fn names(files: &[TableFile]) -> Vec<&str> {
        files.iter().map(|file| file.name.as_str()).collect()
    }

    #[test]
    fn default_names() {
        let folder = folder(&[
            "spikes.parquet",
            "Protocol.CSV.gz",
            "cells.tsv",
            "spikes.md",
            "notes.txt",
        ]);
        let files = find(folder.path(), &SetFile::default()).unwrap();
        assert_eq!(names(&files), ["spikes.parquet", "Protocol.CSV.gz", "cells.tsv"]);
        assert_eq!(files[1].format, text(false, Packing::Gzip));
        assert_eq!(files[2].format, text(true, Packing::Plain));
    }

    #[test]
    fn lists_and_patterns_are_sorted() {
        let folder = folder(&["d2/b.csv", "d1/a.csv", "d1/c.parquet", "protocol.csv"]);
        let set = SetFile::parse("[tables]\nspikes = [\"d1/c.parquet\", \"*/*.csv\"]").unwrap();
        let files = find(folder.path(), &set).unwrap();
        assert_eq!(
            names(&files),
            ["d1/c.parquet", "d1/a.csv", "d2/b.csv", "protocol.csv"]
        );
    }

    #[test]
    fn mistakes_are_named() {
        let here = folder(&["spikes.csv", "spikes.parquet", "protocol.csv", "x.txt"]);
        for (text, class, fragments) in [
            (
                "",
                ErrorClass::Settings,
                &["spikes.csv, spikes.parquet", "[tables]"][..],
            ),
            (
                "[tables]\nspikes = \"gone.csv\"",
                ErrorClass::Settings,
                &["gone.csv", "no file"],
            ),
            (
                "[tables]\nspikes = \"d*/x.csv\"",
                ErrorClass::Settings,
                &["d*/x.csv", "matches no file"],
            ),
            (
                "[tables]\nspikes = \"x.txt\"",
                ErrorClass::Settings,
                &["x.txt", ".parquet"],
            ),
            (
                "[tables]\nspikes = [\"spikes.csv\", \"s*.csv\"]",
                ErrorClass::Settings,
                &["listed twice"],
            ),
            ("[tables]\nspikes = \"***\"", ErrorClass::Settings, &["***"]),
        ] {
            let error = find(here.path(), &SetFile::parse(text).unwrap()).unwrap_err();
            assert_eq!(error.class(), class);
            for fragment in fragments {
                assert!(error.to_string().contains(fragment), "{fragment} not in {error}");
            }
        }
        let error = find(folder(&["spikes.csv"]).path(), &SetFile::default()).unwrap_err();
        assert_eq!(error.class(), ErrorClass::Data);
        assert!(error.to_string().contains("no protocol table"), "{error}");
        let error = find(folder(&["Spiks.csv", "protocol.csv"]).path(), &SetFile::default()).unwrap_err();
        assert!(error.to_string().contains("no spikes table"), "{error}");
        assert!(error.to_string().contains("Spiks.csv"), "{error}");
    }
}
