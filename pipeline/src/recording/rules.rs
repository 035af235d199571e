//! Every rule that refuses a row or a cell, in one list with stable names.
//!
//! Nothing else in the program may refuse anything: a refusal is made from a [`Rule`] of this list, so that
//! `refused.parquet`, the summary and the guide can never disagree about the reasons.

use super::model::TableKind;

/// What a rule costs.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash)]
pub enum Scope {
    /// The row at fault.
    Row,
    /// The whole cell: every protocol and spike row of it.
    Cell,
}

/// A reason to refuse a row or a cell.
#[derive(Debug, PartialEq, Eq)]
pub struct Rule {
    /// Stable kebab-case name: the `reason` of a refused row.
    pub name: &'static str,
    /// Tables it is applied to.
    pub tables: &'static [TableKind],
    /// What it costs.
    pub scope: Scope,
    /// What is wrong, in words.
    pub what: &'static str,
    /// What to do about it.
    pub remedy: &'static str,
}

use TableKind::{Cells, Protocol, Spikes};

macro_rules! rules {
    ($($(#[$doc:meta])* $constant:ident = $name:literal, $tables:expr, $scope:ident, $what:literal, $remedy:literal;)*) => {
        $(
            $(#[$doc])*
            pub const $constant: &Rule = &Rule {
                name: $name,
                tables: $tables,
                scope: Scope::$scope,
                what: $what,
                remedy: $remedy,
            };
        )*
        /// The list of all rules, in the order in which they are described to the user.
        pub const RULES: &[&Rule] = &[$($constant),*];
    };
}

rules! {
    /// More fields than the header.
    RAGGED_ROW = "ragged-row", &[Spikes, Protocol, Cells], Row,
        "the row has more fields than the header",
        "quote fields that hold the separator";
    /// No cell.
    MISSING_CELL = "missing-cell", &[Spikes, Protocol, Cells], Row,
        "the row names no cell",
        "fill in the cell column";
    /// No sweep although the table has sweeps.
    MISSING_SWEEP = "missing-sweep", &[Spikes, Protocol], Row,
        "the row names no sweep although its table has a sweep column",
        "fill in the sweep column";
    /// No number where one is required.
    MISSING_VALUE = "missing-value", &[Spikes, Protocol], Row,
        "a required number is missing",
        "fill in the column";
    /// Text that is not a number.
    NOT_A_NUMBER = "not-a-number", &[Spikes, Protocol, Cells], Row,
        "a numeric column holds text",
        "write a plain number such as 0.25 or 2.5e-1; leave the field empty where there is none";
    /// NaN or infinity.
    NON_FINITE = "non-finite", &[Spikes, Protocol, Cells], Row,
        "a number is NaN or infinite",
        "leave the field empty where there is no number";
    /// Before the start of the time base.
    NEGATIVE_TIME = "negative-time", &[Spikes, Protocol], Row,
        "a time is before 0, the start of its sweep or time line",
        "shift the times of both tables so that the time base starts at 0";
    /// Inhibitory or excitatory conductance below zero.
    NEGATIVE_CONDUCTANCE = "negative-conductance", &[Protocol], Row,
        "a conductance is below 0 nS",
        "conductances are 0 or positive; was a current put into the column?";
    /// Leak conductance or capacitance of zero or less.
    NOT_POSITIVE = "not-positive", &[Cells], Row,
        "a leak conductance or capacitance is not above 0",
        "leave the field empty where it was not measured";
    /// Step without length.
    OFFSET_NOT_AFTER_ONSET = "offset-not-after-onset", &[Protocol], Row,
        "the offset of a step is not after its onset",
        "were the two columns swapped? see [columns.protocol] in recording.toml";
    /// Neither a current nor a conductance.
    NO_DRIVE = "no-drive", &[Protocol], Row,
        "the row has neither a current nor an excitatory conductance",
        "give one of current and g_exc; a step without input is 0, not empty";
    /// Both a current and a conductance.
    TWO_DRIVES = "two-drives", &[Protocol], Row,
        "the row has both a current and an excitatory conductance",
        "give one of current and g_exc and leave the other empty";
    /// The same row again.
    DUPLICATE_PROTOCOL_ROW = "duplicate-protocol-row", &[Protocol], Row,
        "the row repeats an earlier row of the protocol",
        "remove the repeat; was a file listed twice?";
    /// The same stretch of time with another drive.
    DUPLICATE_STEP = "duplicate-step", &[Protocol], Row,
        "the row gives another drive for a step already described",
        "keep the row that is right; repeats of a step belong into sweeps of their own";
    /// A stretch of time that overlaps an earlier row's.
    OVERLAPPING_STEPS = "overlapping-steps", &[Protocol], Row,
        "the step overlaps a step of the same sweep in an earlier row, which is kept",
        "give overlapping steps sweeps of their own, or correct onset and offset";
    /// Spike of a cell without protocol.
    UNKNOWN_CELL = "unknown-cell", &[Spikes], Row,
        "no protocol row names the cell of this spike",
        "add the cell to the protocol, or check how both tables write its name";
    /// Spike of a sweep without protocol.
    UNKNOWN_SWEEP = "unknown-sweep", &[Spikes], Row,
        "the protocol knows the cell of this spike but not the sweep",
        "add the sweep to the protocol, or check how both tables write its name";
    /// A second spike at exactly the same time.
    DUPLICATE_SPIKE = "duplicate-spike", &[Spikes], Row,
        "an earlier row has a spike of the same cell and sweep at exactly this time",
        "remove the repeat; was a file listed twice?";
    /// Second row for a cell.
    DUPLICATE_CELL = "duplicate-cell", &[Cells], Row,
        "an earlier row of the cell table describes this cell",
        "keep one row a cell";
    /// Current steps and conductance steps in one cell.
    MIXED_DRIVE = "mixed-drive", &[Spikes, Protocol], Cell,
        "the protocol has current steps and conductance steps for this cell",
        "give the two parts names of their own, for example by adding the kind of drive to the cell's name";
    /// Inhibition that changes from step to step.
    VARYING_INHIBITION = "varying-inhibition", &[Spikes, Protocol], Cell,
        "a varying g_inh within one cell is not supported yet",
        "split the cell by g_inh level, each level under a name of its own";
}

/// The rule of that name.
pub fn rule(name: &str) -> Option<&'static Rule> {
    RULES.iter().copied().find(|rule| rule.name == name)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn names_are_stable_unique_and_kebab_case() {
        for (i, rule) in RULES.iter().enumerate() {
            assert!(rule.name.bytes().all(|b| b.is_ascii_lowercase() || b == b'-'));
            assert!(!rule.what.is_empty() && !rule.remedy.is_empty() && !rule.tables.is_empty());
            assert!(RULES[..i].iter().all(|other| other.name != rule.name));
        }
    }
}
