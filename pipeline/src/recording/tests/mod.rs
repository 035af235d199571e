//! Whole sets through [`super::read`]: clean ones, every rule, every kind of bad file, every format.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

mod bad_files;
mod clean;
mod formats;
mod refused;

use super::*;

/// A folder with these files.
pub fn folder(files: &[(&str, &[u8])]) -> tempfile::TempDir {
    let folder = tempfile::tempdir().unwrap();
    for (name, bytes) in files {
        let path = folder.path().join(name);
        std::fs::create_dir_all(path.parent().unwrap()).unwrap();
        std::fs::write(path, bytes).unwrap();
    }
    folder
}

/// Reads a set of text files and checks what must hold for every set.
pub fn read_files(files: &[(&str, &str)]) -> Result<RecordingSet, ReadError> {
    let files: Vec<(&str, &[u8])> = files
        .iter()
        .map(|(name, text)| (*name, text.as_bytes()))
        .collect();
    let folder = folder(&files);
    read(folder.path(), &ReadOptions::default()).inspect(check)
}

/// What must hold for every set that is read.
pub fn check(set: &RecordingSet) {
    let tables = [
        (TableKind::Spikes, Some(set.spike_rows)),
        (TableKind::Protocol, Some(set.protocol_rows)),
        (TableKind::Cells, set.cell_rows),
    ];
    for (table, counts) in tables {
        let refused = set.refused.iter().filter(|row| row.table == table).count() as u64;
        let rows: u64 = set
            .inputs
            .iter()
            .filter(|input| input.table == Some(table))
            .map(|input| input.rows)
            .sum();
        let counts = counts.unwrap_or_default();
        assert_eq!(counts.rows, rows);
        assert_eq!(counts.refused, refused);
        assert_eq!(counts.rows, counts.used + counts.outside_steps + counts.refused);
    }
    let (mut used, mut outside) = (0, 0);
    for cell in &set.cells {
        let met = crate::steps::meet(cell);
        used += met.of_step.iter().map(|spikes| spikes.len() as u64).sum::<u64>();
        outside += met.outside as u64;
        let mut end = 0;
        for sweep in &cell.sweeps {
            assert_eq!(sweep.spikes.start, end);
            end = sweep.spikes.end;
            let spikes = &cell.spikes_s[sweep.spikes.clone()];
            assert!(spikes.windows(2).all(|pair| pair[0] < pair[1]));
        }
        assert_eq!(end, cell.spikes_s.len());
        for pair in cell.steps.windows(2) {
            assert!((pair[0].sweep, pair[0].onset_s) < (pair[1].sweep, pair[1].onset_s));
            assert!(pair[0].sweep != pair[1].sweep || pair[0].offset_s <= pair[1].onset_s);
        }
        assert_eq!(cell.carried.len(), set.carried_columns.len());
    }
    assert_eq!(used, set.spike_rows.used);
    assert_eq!(outside, set.spike_rows.outside_steps);
    for row in &set.refused {
        assert!(
            rules::rule(row.reason).is_some(),
            "{} is not in the list of rules",
            row.reason
        );
        assert!(row.row >= 1 && row.row <= set.inputs[row.file].rows);
        assert_eq!(set.inputs[row.file].table, Some(row.table));
        assert!(!row.message.contains('\n'), "{}", row.message);
    }
    assert!(set.refused.is_sorted_by_key(|row| (row.table, row.file, row.row)));
    let mut names: Vec<&str> = set.cells.iter().map(|cell| &*cell.id.0).collect();
    assert!(names.windows(2).all(|pair| natural(pair[0], pair[1]).is_lt()));
    names.dedup();
    assert_eq!(names.len(), set.cells.len());
}

/// The spikes of a cell by name.
pub fn cell<'a>(set: &'a RecordingSet, name: &str) -> &'a CellRecording {
    set.cells.iter().find(|cell| &*cell.id.0 == name).unwrap()
}

/// Refused rows as `table row reason column value`.
pub fn refusals(set: &RecordingSet) -> Vec<String> {
    set.refused
        .iter()
        .map(|row| {
            format!(
                "{} {} {} {} {}",
                row.table.name(),
                row.row,
                row.reason,
                row.column.unwrap_or("-"),
                row.value.as_deref().unwrap_or("-")
            )
        })
        .collect()
}
