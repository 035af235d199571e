//! File names for figures: safe everywhere, unique also where upper and lower case are one.

use std::collections::HashSet;

use sha2::{Digest, Sha256};

/// Longest file name, extension included.
const LONGEST: usize = 80;
const EXTENSION: &str = ".svg";

/// File name of the overview figure within `figures/`.
pub const OVERVIEW_FILE: &str = "overview.svg";
/// File name of the figure of the cells to distrust first.
pub const WORST_FILE: &str = "worst.svg";
/// File name of the figure of the parameters' distributions.
pub const POPULATION_FILE: &str = "population.svg";

/// Whether a name is kept for a page of the contact sheets.
fn is_sheet(name: &str) -> bool {
    name.to_ascii_lowercase()
        .strip_prefix("sheet-")
        .and_then(|rest| rest.strip_suffix(EXTENSION))
        .is_some_and(|page| page.bytes().all(|b| b.is_ascii_digit()))
}

/// Names that stand for devices on Windows, whatever the extension.
fn is_device(stem: &str) -> bool {
    let base = stem.split('.').next().unwrap_or(stem).to_ascii_lowercase();
    let numbered = |prefix: &str| {
        base.strip_prefix(prefix)
            .is_some_and(|rest| rest.len() == 1 && rest.bytes().all(|b| b.is_ascii_digit()))
    };
    matches!(base.as_str(), "con" | "prn" | "aux" | "nul") || numbered("com") || numbered("lpt")
}

fn hex(bytes: &[u8], digits: usize) -> String {
    bytes
        .iter()
        .map(|byte| format!("{byte:02x}"))
        .collect::<String>()
        .chars()
        .take(digits)
        .collect()
}

/// The safe form of an id, and whether it differs from the id.
fn safe_stem(id: &str) -> (String, bool) {
    let longest = LONGEST - EXTENSION.len();
    // ASCII only, so characters are bytes; more than `longest` need not be looked at.
    let mut stem: String = id
        .chars()
        .take(longest + 1)
        .map(|c| {
            if c.is_ascii_alphanumeric() || matches!(c, '-' | '_' | '.') {
                c
            } else {
                '_'
            }
        })
        .collect();
    if stem.is_empty() {
        stem.push_str("cell");
    }
    if stem.starts_with('.') {
        stem.replace_range(0..1, "_");
    }
    // A leading hyphen would be taken for an option by command-line tools.
    if stem.starts_with('-') {
        stem.replace_range(0..1, "_");
    }
    let altered = stem != id || stem.len() > longest || is_device(&stem);
    (stem, altered)
}

/// Stem, `-`, the suffix, extension; the stem is cut to make room.
fn with_suffix(stem: &str, suffix: &str) -> String {
    let room = LONGEST - EXTENSION.len() - 1 - suffix.len();
    let stem: String = stem.chars().take(room).collect();
    // A stem that is a device's name is no longer one with a suffix, unless its first part still is.
    let stem = if is_device(&stem) {
        format!("_{}", stem.replace('.', "_"))
    } else {
        stem
    };
    let stem: String = stem.chars().take(room).collect();
    format!("{stem}-{suffix}{EXTENSION}")
}

/// The file name of a cell's figure: ASCII letters, digits, `-`, `_`, `.`; at most 80 characters; `.svg` at the end.
///
/// An id that is not such a name as it stands is changed into one, with the first eight hexadecimal digits of its
/// SHA-256 added, so that different ids keep different names. Two ids that differ in case alone are kept apart by
/// [`FigureNames`].
pub fn figure_file_name(id: &str) -> String {
    let (stem, altered) = safe_stem(id);
    if altered {
        with_suffix(&stem, &hex(&Sha256::digest(id), 8))
    } else {
        format!("{stem}{EXTENSION}")
    }
}

/// Hands out figure names, no two the same even where the file system does not tell upper from lower case.
///
/// Remembers 64 bits of a hash a name: two names that share them by chance merely get a longer name.
#[derive(Debug)]
pub struct FigureNames {
    taken: HashSet<u64>,
}

impl Default for FigureNames {
    fn default() -> Self {
        Self::new()
    }
}

impl FigureNames {
    /// No name taken but those of the figures of the set.
    pub fn new() -> Self {
        let mut names = Self {
            taken: HashSet::new(),
        };
        for name in [OVERVIEW_FILE, WORST_FILE, POPULATION_FILE] {
            names.take(name);
        }
        names
    }

    /// Whether the name was free; it is taken afterwards.
    fn take(&mut self, name: &str) -> bool {
        let digest = Sha256::digest(name.to_ascii_lowercase());
        let key = digest
            .iter()
            .take(8)
            .fold(0u64, |key, byte| (key << 8) | u64::from(*byte));
        self.taken.insert(key)
    }

    /// A name for the figure of the cell called `id`. The names depend on the order in which the cells come.
    pub fn name(&mut self, id: &str) -> String {
        let plain = figure_file_name(id);
        if !is_sheet(&plain) && self.take(&plain) {
            return plain;
        }
        let (stem, _) = safe_stem(id);
        let digest = Sha256::digest(id);
        for digits in [8, 16, 32] {
            let longer = with_suffix(&stem, &hex(&digest, digits));
            if self.take(&longer) {
                return longer;
            }
        }
        // Only reached when one id is asked for again and again; a number ends it.
        let mut number = 2u64;
        loop {
            let numbered = with_suffix(&stem, &format!("{}-{number}", hex(&digest, 32)));
            if self.take(&numbered) {
                return numbered;
            }
            number += 1;
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn is_safe(name: &str) -> bool {
        name.len() <= LONGEST
            && name.ends_with(".svg")
            && name.len() > 4
            && !name.starts_with(['.', '-'])
            && name
                .bytes()
                .all(|b| b.is_ascii_alphanumeric() || b"-_.".contains(&b))
    }

    #[test]
    fn names_are_safe_and_plain_ids_stay() {
        assert_eq!(figure_file_name("L5-pyr_01.a"), "L5-pyr_01.a.svg");
        let long = "x".repeat(300);
        let seventy_six = "x".repeat(76);
        let nasty = [
            "",
            ".",
            "..",
            "../../etc/passwd",
            ".hidden",
            "-rf",
            "a/b",
            "a|b",
            "a\nb",
            "ä",
            "細胞",
            "con",
            "NUL.x",
            "com1",
            "a\u{0}b",
            long.as_str(),
            " ",
            "a b",
            "\"q\"",
            "<b>",
        ];
        for id in nasty {
            let name = figure_file_name(id);
            assert!(is_safe(&name), "{id:?} -> {name}");
            let (body, suffix) = name.trim_end_matches(".svg").rsplit_once('-').unwrap_or_default();
            assert!(!body.is_empty() && suffix.len() == 8, "{id:?} -> {name}");
            assert!(!is_device(&name), "{id:?} -> {name}");
        }
        assert_eq!(figure_file_name(&seventy_six), format!("{seventy_six}.svg"));
        assert_ne!(figure_file_name("a/b"), figure_file_name("a|b"));
        assert_ne!(figure_file_name(&long), figure_file_name(&"x".repeat(299)));
    }

    #[test]
    fn names_are_unique_without_regard_to_case() {
        let mut names = FigureNames::new();
        let ids = [
            "a",
            "A",
            "a",
            "a",
            "a",
            "a",
            "a",
            "a_b",
            "a b",
            "a/b",
            "overview",
            "Overview",
            "CON",
            "con",
            "worst",
            "Population",
            "sheet-01",
            "Sheet-123",
        ];
        let mut seen = HashSet::new();
        for id in ids {
            let name = names.name(id);
            assert!(is_safe(&name), "{id:?} -> {name}");
            assert!(seen.insert(name.to_ascii_lowercase()), "{id:?} -> {name} again");
            let lower = name.to_ascii_lowercase();
            assert!(![OVERVIEW_FILE, WORST_FILE, POPULATION_FILE].contains(&lower.as_str()));
            assert!(!is_sheet(&lower), "{name}");
        }
        assert_eq!(FigureNames::new().name("a"), "a.svg");
    }
}
