//! Reading fixtures and comparing digits.

use std::path::PathBuf;

/// A file below `fixtures/`.
pub fn fixture(path: &str) -> PathBuf {
    PathBuf::from(env!("CARGO_MANIFEST_DIR"))
        .join("../fixtures")
        .join(path)
}

/// A JSON fixture.
pub fn json(path: &str) -> serde_json::Value {
    let text = std::fs::read_to_string(fixture(path)).unwrap_or_else(|e| panic!("{path}: {e}"));
    serde_json::from_str(&text).unwrap_or_else(|e| panic!("{path}: {e}"))
}

/// A CSV fixture without quotes: header and rows.
pub fn csv(path: &str) -> (Vec<String>, Vec<Vec<String>>) {
    let text = std::fs::read_to_string(fixture(path)).unwrap_or_else(|e| panic!("{path}: {e}"));
    let mut lines = text
        .lines()
        .map(|line| line.split(',').map(str::to_owned).collect::<Vec<_>>());
    let header = lines.next().unwrap();
    let rows: Vec<_> = lines.collect();
    assert!(
        rows.iter().all(|row| row.len() == header.len()),
        "{path}: rows of unequal length"
    );
    (header, rows)
}

/// A CSV fixture of numbers, whose header must be `columns`.
pub fn numbers<const N: usize>(path: &str, columns: [&str; N]) -> Vec<[f64; N]> {
    let (header, rows) = csv(path);
    assert_eq!(header, columns, "{path}");
    rows.iter()
        .map(|row| std::array::from_fn(|i| row[i].parse().unwrap()))
        .collect()
}

/// Log relative error: the number of digits in which `value` agrees with `certified`, at most 11, the digits that
/// the certified figures have.
pub fn digits(value: f64, certified: f64) -> f64 {
    if value == certified {
        return 11.0;
    }
    // NaN gives NaN, which no comparison accepts.
    (-((value - certified) / certified).abs().log10()).min(11.0)
}

/// Fails unless `value` agrees with `expected` within `tolerance`, relatively.
#[track_caller]
pub fn assert_close(what: &str, value: f64, expected: f64, tolerance: f64) {
    let error = (value - expected).abs() / expected.abs();
    assert!(
        error <= tolerance,
        "{what}: {value:e} against {expected:e}, relative error {error:e}"
    );
}
