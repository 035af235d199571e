//! Makes the demo recording sets: a survey that never took place, of cells that do not exist.
//!
//! ```text
//! model  ->  protocol  ->  survey  ->  tables + faults  ->  writer
//! one cell   what it is    who is      rows of text, and     files,
//! spiking    driven with   recorded    the bad ones          gzip
//! ```
//!
//! The cells are leaky integrate-and-fire neurons with refractory period, adaptation and noise, simulated spike by
//! spike. No rate function is evaluated anywhere in this crate, so a curve fitted to the sets is never handed its
//! own shape back.
//!
//! The same bytes come out every time: one ChaCha stream a cell from a fixed seed, 64-bit floating-point
//! arithmetic, one thread, and a compressor whose output depends on nothing but its input. `exp` and `ln` come from the
//! platform and may differ between platforms in the last bit; the membrane forgets such a difference, and spike times are
//! rounded to 0.01 or 0.1 ms.

pub mod faults;
pub mod model;
pub mod protocol;
pub mod survey;
pub mod tables;
pub mod writer;

use faults::Placed;
use writer::SetFile;

/// Everything the program makes, in memory.
pub struct Made {
    /// The files of both sets.
    pub files: Vec<SetFile>,
    /// The rows made bad on purpose, file by file in row order.
    pub faults: Vec<Placed>,
}

/// Simulates the survey and lays out the files of both sets.
///
/// # Errors
/// Only on a mistake in this crate's own lists, such as a bad row placed behind a row that does not exist.
pub fn make() -> anyhow::Result<Made> {
    let mut made = Made {
        files: Vec::new(),
        faults: Vec::new(),
    };
    tables::lay_out_current_set(&survey::current_set(), &mut made)?;
    tables::lay_out_conductance_set(&survey::conductance_set(), &mut made)?;
    Ok(made)
}

#[cfg(test)]
mod tests {
    #![allow(clippy::unwrap_used)]
    use std::path::{Path, PathBuf};

    use super::*;

    fn home() -> PathBuf {
        PathBuf::from(env!("CARGO_MANIFEST_DIR"))
    }

    fn files_below(folder: &Path, found: &mut Vec<PathBuf>) {
        for entry in std::fs::read_dir(folder).unwrap() {
            let path = entry.unwrap().path();
            if path.is_dir() {
                files_below(&path, found);
            } else {
                found.push(path);
            }
        }
    }

    #[test]
    fn two_runs_make_the_same_bytes_and_they_are_the_committed_ones() {
        let first = make().unwrap();
        let second = make().unwrap();
        assert_eq!(first.files.len(), second.files.len());
        for (a, b) in first.files.iter().zip(&second.files) {
            assert_eq!(a.path, b.path);
            assert!(a.bytes == b.bytes, "{} differs between two runs", a.path);
            let committed = std::fs::read(home().join(&a.path)).unwrap();
            assert!(
                a.bytes == committed,
                "{} is not what the program makes: run it again",
                a.path
            );
        }
        let mut found = Vec::new();
        for set in [tables::CURRENT_SET, tables::CONDUCTANCE_SET] {
            files_below(&home().join(set), &mut found);
        }
        let mut made: Vec<PathBuf> = first.files.iter().map(|file| home().join(&file.path)).collect();
        found.sort();
        made.sort();
        assert_eq!(found, made, "the set folders hold exactly the files made");
        let size: usize = first.files.iter().map(|file| file.bytes.len()).sum();
        assert!(size < 1_500_000, "{size} bytes");
    }

    #[test]
    fn the_readme_lists_the_bad_rows_as_they_are() {
        let readme = std::fs::read_to_string(home().join("README.md")).unwrap();
        let table = faults::markdown(&make().unwrap().faults);
        assert!(readme.contains(&table), "paste into README.md:\n{table}");
    }

    #[test]
    fn every_bad_row_stands_where_the_list_says() {
        let made = make().unwrap();
        assert!(made.faults.len() > 30);
        for fault in &made.faults {
            let file = made.files.iter().find(|file| file.path == fault.file).unwrap();
            let text = file.text().unwrap();
            assert_eq!(
                text.lines().nth(fault.row),
                Some(fault.text.as_str()),
                "{} row {}",
                fault.file,
                fault.row
            );
        }
    }
}
