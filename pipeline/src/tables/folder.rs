//! A result folder that is never half-written: everything goes to a hidden folder beside it, which takes its place
//! at the end.

use std::fs::{self, File};
use std::io;
use std::path::{Path, PathBuf};

use tempfile::TempDir;

use super::error::WriteError;
use super::provenance::{RUN_FILE, written_by_us};

/// File stems and extensions by which a recording set is known.
const SET_STEMS: [&str; 2] = ["spikes", "protocol"];
const SET_EXTENSIONS: [&str; 8] = [
    "csv", "csv.gz", "csv.zst", "tsv", "tsv.gz", "tsv.zst", "parquet", "arrow",
];
const SET_FILE: &str = "recording.toml";

/// Results on their way to their folder.
///
/// Files are written below [`ResultFolder::path`]; [`ResultFolder::commit`] puts them in place. Dropped without that,
/// they vanish and whatever the folder held before stays untouched.
#[derive(Debug)]
pub struct ResultFolder {
    /// Where the results belong: absolute, links resolved.
    out: PathBuf,
    overwrite: bool,
    /// Hidden folder beside `out`; removed with everything in it when dropped.
    hidden: TempDir,
    /// The new results, below `hidden`.
    staging: PathBuf,
}

impl ResultFolder {
    /// Makes ready to write results to `out`, creating missing parent folders.
    ///
    /// # Errors
    /// [`WriteErrorClass::Exists`](super::WriteErrorClass::Exists): `out` is a file, holds the tables of a recording
    /// set, itself or in a folder below, or is not empty, unless `overwrite` is set and it holds a `run.json` of this
    /// program.
    /// [`WriteErrorClass::Io`](super::WriteErrorClass::Io): a folder cannot be looked at or created.
    pub fn prepare(out: &Path, overwrite: bool) -> Result<Self, WriteError> {
        let out = resolve(out)?;
        check(&out, overwrite)?;
        let parent = out.parent().unwrap_or(&out);
        let failed = |error: io::Error| WriteError::of_io(&out, "cannot be prepared", &error);
        let hidden = tempfile::Builder::new()
            .prefix(".halfrise-")
            .tempdir_in(parent)
            .map_err(failed)?;
        // The hidden folder is closed to other users; this one, which becomes the result folder, is as the user's
        // other folders are.
        let staging = hidden.path().join("new");
        fs::create_dir(&staging).map_err(failed)?;
        Ok(Self {
            out,
            overwrite,
            hidden,
            staging,
        })
    }

    /// Where to write the results now. The folder exists and is empty at first.
    pub fn path(&self) -> &Path {
        &self.staging
    }

    /// Where the results will be: absolute, links resolved.
    pub fn destination(&self) -> &Path {
        &self.out
    }

    /// Puts the results in place of whatever the folder held before, after the files are safely on disk (those of
    /// subfolders, which hold figures only, are left to the system).
    ///
    /// # Errors
    /// A file cannot be brought to disk or a folder not renamed; earlier results are then where they were. Should even
    /// moving them back fail, the error says where they are. Also if `out` has been filled by someone else meanwhile.
    pub fn commit(self) -> Result<(), WriteError> {
        self.commit_by(|from, to| fs::rename(from, to))
    }

    /// [`ResultFolder::commit`] with the renaming handed in, so that its failures can be tried.
    pub(super) fn commit_by(self, rename: impl Fn(&Path, &Path) -> io::Result<()>) -> Result<(), WriteError> {
        let Self {
            out,
            overwrite,
            hidden,
            staging,
        } = self;
        sync(&staging)?;
        check(&out, overwrite)?;
        let old = hidden.path().join("old");
        let replaces = out.exists();
        let failed = |error: io::Error| WriteError::of_io(&out, "cannot be put in place", &error);
        if replaces {
            rename(&out, &old).map_err(failed)?;
        }
        if let Err(error) = rename(&staging, &out) {
            if replaces && let Err(second) = rename(&old, &out) {
                let kept = hidden.keep().join("old");
                return Err(WriteError::Io {
                    path: out,
                    cause: format!("cannot be put in place: {error}; nor earlier results put back: {second}"),
                    remedy: format!("the earlier results are in {}; move them back", kept.display()),
                });
            }
            return Err(failed(error));
        }
        sync_folder(out.parent().unwrap_or(&out))?;
        let place = hidden.path().to_path_buf();
        hidden.close().map_err(|error| WriteError::Io {
            path: place,
            cause: format!("earlier results, replaced by now, cannot be removed: {error}"),
            remedy: format!(
                "the new results are complete in {}; remove this folder by hand",
                out.display()
            ),
        })
    }
}

/// `out` as an absolute path without links, its parents created.
fn resolve(out: &Path) -> Result<PathBuf, WriteError> {
    let failed = |error: io::Error| WriteError::of_io(out, "cannot be created", &error);
    match fs::canonicalize(out) {
        Ok(path) => return Ok(path),
        Err(error) if error.kind() == io::ErrorKind::NotFound => {}
        Err(error) => return Err(WriteError::of_io(out, "cannot be opened", &error)),
    }
    if fs::symlink_metadata(out).is_ok() {
        return Err(WriteError::Exists {
            path: out.to_path_buf(),
            cause: "is a link that leads nowhere".into(),
            remedy: "remove it, or choose another folder with --out".into(),
        });
    }
    let Some(name) = out.file_name() else {
        return Err(WriteError::Exists {
            path: out.to_path_buf(),
            cause: "does not name a folder".into(),
            remedy: "give the result folder's own name with --out".into(),
        });
    };
    let parent = match out.parent() {
        Some(parent) if !parent.as_os_str().is_empty() => parent,
        _ => Path::new("."),
    };
    fs::create_dir_all(parent).map_err(failed)?;
    Ok(fs::canonicalize(parent).map_err(failed)?.join(name))
}

/// Whether results may go to `out`.
fn check(out: &Path, overwrite: bool) -> Result<(), WriteError> {
    let taken = |cause: String, remedy: &str| {
        Err(WriteError::Exists {
            path: out.to_path_buf(),
            cause,
            remedy: remedy.into(),
        })
    };
    let failed = |error: io::Error| WriteError::of_io(out, "cannot be opened", &error);
    match fs::metadata(out) {
        Ok(metadata) if metadata.is_dir() => {}
        Ok(_) => {
            return taken(
                "is a file, not a folder".into(),
                "choose another folder with --out",
            );
        }
        Err(error) if error.kind() == io::ErrorKind::NotFound => return Ok(()),
        Err(error) => return Err(failed(error)),
    }
    let mut empty = true;
    let mut ours = false;
    for entry in fs::read_dir(out).map_err(failed)? {
        let name = entry.map_err(failed)?.file_name();
        let name = name.to_string_lossy();
        empty = false;
        if is_set_table(&name) {
            return taken(
                format!("holds a recording set ({name}); results never go among the recordings"),
                "choose another folder with --out",
            );
        }
        ours |= name == RUN_FILE;
    }
    if empty {
        return Ok(());
    }
    if !overwrite {
        return taken(
            "exists already and is not empty".into(),
            "say --overwrite to replace it, or choose another folder with --out",
        );
    }
    if !ours || !written_by_us(&out.join(RUN_FILE)).map_err(failed)? {
        return taken(
            format!("holds no {RUN_FILE} of halfrise, so it is not replaced even with --overwrite"),
            "choose another folder with --out, or empty this one by hand",
        );
    }
    // Replacing a folder removes all that is below it, recordings put there since included.
    if let Some(table) = set_table_below(out)? {
        let shown = table.strip_prefix(out).unwrap_or(&table).display().to_string();
        return taken(
            format!("holds a recording set ({shown}), so it is not replaced even with --overwrite"),
            "move the recordings out of it, or choose another folder with --out",
        );
    }
    Ok(())
}

/// A table or settings file of a recording set anywhere below `folder`. Links are not followed: replacing a folder
/// removes a link, never what it leads to.
fn set_table_below(folder: &Path) -> Result<Option<PathBuf>, WriteError> {
    let mut waiting = vec![folder.to_path_buf()];
    while let Some(place) = waiting.pop() {
        let failed = |error: io::Error| WriteError::of_io(&place, "cannot be opened", &error);
        for entry in fs::read_dir(&place).map_err(failed)? {
            let entry = entry.map_err(failed)?;
            if is_set_table(&entry.file_name().to_string_lossy()) {
                return Ok(Some(entry.path()));
            }
            if entry.file_type().map_err(failed)?.is_dir() {
                waiting.push(entry.path());
            }
        }
    }
    Ok(None)
}

fn is_set_table(name: &str) -> bool {
    let name = name.to_lowercase();
    name == SET_FILE
        || name
            .split_once('.')
            .is_some_and(|(stem, extension)| SET_STEMS.contains(&stem) && SET_EXTENSIONS.contains(&extension))
}

/// Brings the files of `folder` and its list of names to disk.
fn sync(folder: &Path) -> Result<(), WriteError> {
    let failed = |path: &Path, error: io::Error| WriteError::of_io(path, "cannot be brought to disk", &error);
    for entry in fs::read_dir(folder).map_err(|error| failed(folder, error))? {
        let path = entry.map_err(|error| failed(folder, error))?.path();
        if path.is_dir() {
            sync_folder(&path)?;
        } else {
            File::open(&path)
                .and_then(|file| file.sync_all())
                .map_err(|error| failed(&path, error))?;
        }
    }
    sync_folder(folder)
}

#[cfg(unix)]
fn sync_folder(folder: &Path) -> Result<(), WriteError> {
    match File::open(folder).and_then(|handle| handle.sync_all()) {
        // Some network file systems know no such thing for folders.
        Err(error)
            if !matches!(
                error.kind(),
                io::ErrorKind::InvalidInput | io::ErrorKind::Unsupported
            ) =>
        {
            Err(WriteError::of_io(folder, "cannot be brought to disk", &error))
        }
        _ => Ok(()),
    }
}

/// Only Unix lets a folder be opened like a file.
#[cfg(not(unix))]
fn sync_folder(_folder: &Path) -> Result<(), WriteError> {
    Ok(())
}
