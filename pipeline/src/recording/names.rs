//! Names of cells and sweeps as small integers, so that no later step handles text row by row.

use std::sync::Arc;

use polars::prelude::PlHashMap;

use super::natural::natural;

/// The code of a row that names nothing.
pub const MISSING: u32 = u32::MAX;

/// Gives every distinct name a code, in order of first appearance.
#[derive(Default)]
pub struct Names {
    codes: PlHashMap<Arc<str>, u32>,
    integers: PlHashMap<i64, u32>,
    names: Vec<Arc<str>>,
    /// The last name looked up: tables are mostly sorted, so the next row mostly repeats it.
    last: Option<u32>,
    last_integer: Option<(i64, u32)>,
}

impl Names {
    /// The code of a name; blanks around it do not count, and [`MISSING`] stands for an empty one.
    pub fn code(&mut self, name: &str) -> u32 {
        if let Some(last) = self.last
            && *self.names[last as usize] == *name
        {
            return last;
        }
        let name = name.trim();
        if name.is_empty() {
            return MISSING;
        }
        let code = match self.codes.get(name) {
            Some(&code) => code,
            None => {
                let code = self.names.len() as u32;
                let name: Arc<str> = name.into();
                self.names.push(Arc::clone(&name));
                self.codes.insert(name, code);
                code
            }
        };
        self.last = Some(code);
        code
    }

    /// The code of an integer name, the same as that of its text.
    pub fn code_of_integer(&mut self, name: i64) -> u32 {
        if let Some((last, code)) = self.last_integer
            && last == name
        {
            return code;
        }
        let code = match self.integers.get(&name) {
            Some(&code) => code,
            None => {
                let code = self.code(&name.to_string());
                self.integers.insert(name, code);
                code
            }
        };
        self.last_integer = Some((name, code));
        code
    }

    /// The name behind a code; `None` for [`MISSING`].
    pub fn name(&self, code: u32) -> Option<&Arc<str>> {
        self.names.get(code as usize)
    }

    /// Number of distinct names.
    pub fn len(&self) -> usize {
        self.names.len()
    }

    /// Codes in natural order of their names.
    pub fn in_natural_order(&self) -> Vec<u32> {
        use rayon::slice::ParallelSliceMut;
        let mut order: Vec<u32> = (0..self.names.len() as u32).collect();
        order.par_sort_unstable_by(|&a, &b| natural(&self.names[a as usize], &self.names[b as usize]));
        order
    }
}

/// Every pair of cell and sweep that a table names, with a code of its own.
#[derive(Default)]
pub struct Groups {
    codes: PlHashMap<(u32, u32), u32>,
    pairs: Vec<(u32, u32)>,
    last: Option<u32>,
}

impl Groups {
    /// The code of a pair of cell code and sweep code (the latter may be [`MISSING`]).
    pub fn code(&mut self, cell: u32, sweep: u32) -> u32 {
        let pair = (cell, sweep);
        if let Some(last) = self.last
            && self.pairs[last as usize] == pair
        {
            return last;
        }
        let pairs = &mut self.pairs;
        let code = *self.codes.entry(pair).or_insert_with(|| {
            pairs.push(pair);
            pairs.len() as u32 - 1
        });
        self.last = Some(code);
        code
    }

    /// The pairs of cell code and sweep code, by group code.
    pub fn pairs(&self) -> &[(u32, u32)] {
        &self.pairs
    }
}

#[cfg(test)]
mod tests {
    #![allow(clippy::unwrap_used)]
    use super::*;

    #[test]
    fn text_and_integer_names_meet() {
        let mut names = Names::default();
        let text = names.code(" 12 ");
        assert_eq!(names.code_of_integer(12), text);
        assert_eq!(names.code("  "), MISSING);
        assert_ne!(names.code("012"), text);
        assert_eq!(&**names.name(text).unwrap(), "12");
        assert!(names.name(MISSING).is_none());
        assert_eq!(names.len(), 2);
    }

    #[test]
    fn groups_are_pairs() {
        let mut groups = Groups::default();
        let a = groups.code(1, 2);
        let b = groups.code(2, 1);
        assert_ne!(a, b);
        assert_eq!(groups.code(1, 2), a);
        assert_eq!(groups.pairs(), [(1, 2), (2, 1)]);
    }
}
