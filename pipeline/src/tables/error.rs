//! What can go wrong while results are written.

use std::io;
use std::path::{Path, PathBuf};

use parquet::errors::ParquetError;

/// What kind of trouble a [`WriteError`] is; the command line turns it into an exit code.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash)]
pub enum WriteErrorClass {
    /// The place asked for is taken or must not be replaced: the user chooses another or says `--overwrite`.
    Exists,
    /// A file or folder could not be written, or this program has a fault.
    Io,
}

/// Why results could not be written. Prints as `<path>: <cause>` and, on a second line indented by two spaces, the
/// remedy.
#[derive(Clone, Debug, PartialEq, Eq, thiserror::Error)]
pub enum WriteError {
    /// The result folder is taken, or holds something that must not be replaced.
    #[error("{}: {cause}\n  {remedy}", path.display())]
    Exists {
        /// The folder asked for.
        path: PathBuf,
        /// What stands in the way.
        cause: String,
        /// The way out.
        remedy: String,
    },
    /// The file system refused.
    #[error("{}: {cause}\n  {remedy}", path.display())]
    Io {
        /// The file or folder.
        path: PathBuf,
        /// What was tried and what the system answered.
        cause: String,
        /// The way out.
        remedy: String,
    },
    /// The results handed over contradict themselves: a fault of this program, never of the data.
    #[error("{}: {cause}\n  this is a fault of halfrise; please report it with the set", path.display())]
    Internal {
        /// The file being written.
        path: PathBuf,
        /// The contradiction.
        cause: String,
    },
}

impl WriteError {
    /// The kind of trouble this is.
    pub fn class(&self) -> WriteErrorClass {
        match self {
            Self::Exists { .. } => WriteErrorClass::Exists,
            Self::Io { .. } | Self::Internal { .. } => WriteErrorClass::Io,
        }
    }

    /// The file or folder at fault.
    pub fn path(&self) -> &Path {
        match self {
            Self::Exists { path, .. } | Self::Io { path, .. } | Self::Internal { path, .. } => path,
        }
    }

    /// An answer of the file system to `action` (`"cannot be created"`) on `path`.
    pub fn of_io(path: &Path, action: &str, error: &io::Error) -> Self {
        let remedy = match error.kind() {
            io::ErrorKind::StorageFull | io::ErrorKind::QuotaExceeded => {
                "free some space there, or choose a folder on another disk with --out"
            }
            io::ErrorKind::PermissionDenied | io::ErrorKind::ReadOnlyFilesystem => {
                "choose a folder you may write to with --out"
            }
            io::ErrorKind::NotADirectory | io::ErrorKind::IsADirectory | io::ErrorKind::AlreadyExists => {
                "a file and a folder are in each other's place; choose another folder with --out"
            }
            _ => "check the disk and the folder's permissions, or choose another folder with --out",
        };
        Self::Io {
            path: path.to_path_buf(),
            cause: format!("{action}: {error}"),
            remedy: remedy.into(),
        }
    }

    /// An answer of the Parquet writer: mostly one of the file system in disguise.
    pub(super) fn of_parquet(path: &Path, error: &ParquetError) -> Self {
        if let ParquetError::External(inner) = error
            && let Some(io) = inner.downcast_ref::<io::Error>()
        {
            return Self::of_io(path, "cannot be written", io);
        }
        Self::Internal {
            path: path.to_path_buf(),
            cause: format!("cannot be written: {error}"),
        }
    }
}
