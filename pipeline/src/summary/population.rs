//! How the four parameters are distributed over the usable cells, by group.

use std::collections::BTreeMap;
use std::sync::Arc;

use super::numbers::{count_text, estimate_text};
use super::text::{ID_LENGTH, id_markdown, table_head, table_row, visible};
use crate::assess::{CellResult, Estimate};
use crate::recording::{DriveKind, natural};

/// Most groups in the table; with more, the largest are shown.
const GROUPS_LISTED: usize = 20;

/// Names of the four parameters, in the order of the values.
pub(super) const PARAMETERS: [&str; 4] = ["max rate", "half-rise", "threshold", "noise SD"];

/// Unit of the parameter of this number.
pub(super) fn unit_of(parameter: usize, kind: DriveKind) -> &'static str {
    if parameter == 0 { "Hz" } else { kind.unit() }
}

/// The fitted values of one usable cell; NaN where the data do not determine one.
struct Sample {
    /// Number of its group in the order of appearance; none where the cell has no group.
    group: Option<u32>,
    values: [f64; 4],
}

/// Collects the parameters of usable cells by their first response: 40 bytes a usable cell, so that the quartiles are
/// exact.
#[derive(Default)]
pub(super) struct Population {
    groups: BTreeMap<Arc<str>, u32>,
    current: Vec<Sample>,
    conductance: Vec<Sample>,
}

/// The values of one group, or of all cells.
pub(super) struct Row {
    /// Name of the group; `None` for all cells.
    pub group: Option<String>,
    /// Usable cells in it.
    pub cells: usize,
    /// Values of each parameter, ascending; fewer than cells where some are not determined.
    pub values: [Vec<f64>; 4],
}

/// Quantile of ascending values by linear interpolation between order statistics: at position `(n - 1) fraction`
/// counted from 0 (definition 7 of Hyndman & Fan 1996). `None` without values.
pub(super) fn quantile(ascending: &[f64], fraction: f64) -> Option<f64> {
    let last = ascending.len().checked_sub(1)?;
    let position = fraction.clamp(0.0, 1.0) * last as f64;
    let below = position.floor() as usize;
    let (low, high) = (*ascending.get(below)?, *ascending.get((below + 1).min(last))?);
    Some(low + (position - below as f64) * (high - low))
}

impl Population {
    /// Looks at the next cell.
    pub(super) fn add(&mut self, cell: &CellResult) {
        let Some(first) = cell.responses.first().filter(|first| first.usable) else {
            return;
        };
        let group = cell
            .group
            .as_ref()
            .filter(|name| !name.trim().is_empty())
            .map(|name| {
                let next = self.groups.len() as u32;
                *self.groups.entry(name.clone()).or_insert(next)
            });
        let value = |estimate: &Estimate| estimate.value.filter(|v| v.is_finite()).unwrap_or(f64::NAN);
        let sample = Sample {
            group,
            values: [
                value(&first.max_rate),
                value(&first.half_rise),
                value(&first.threshold),
                value(&first.noise_sd),
            ],
        };
        match cell.drive_kind {
            DriveKind::Current => self.current.push(sample),
            DriveKind::Conductance => self.conductance.push(sample),
        }
    }

    fn samples(&self, kind: DriveKind) -> &[Sample] {
        match kind {
            DriveKind::Current => &self.current,
            DriveKind::Conductance => &self.conductance,
        }
    }

    /// All usable cells under this kind of drive, then their groups by name where there are two or more: the `most`
    /// largest. With them the number of groups left out.
    pub(super) fn rows(&self, kind: DriveKind, most: usize) -> (Vec<Row>, usize) {
        let samples = self.samples(kind);
        if samples.is_empty() {
            return (Vec::new(), 0);
        }
        let mut rows = vec![row_of(None, samples.iter())];
        // One pass sorts the cells into their groups; those without one come last.
        let mut members: Vec<Vec<&Sample>> = Vec::new();
        members.resize_with(self.groups.len() + 1, Vec::new);
        for sample in samples {
            let place = sample.group.map_or(self.groups.len(), |group| group as usize);
            if let Some(group) = members.get_mut(place) {
                group.push(sample);
            }
        }
        let mut named: Vec<(&Arc<str>, usize)> = self
            .groups
            .iter()
            .map(|(name, number)| (name, *number as usize))
            .collect();
        named.sort_by(|(a, _), (b, _)| natural(a, b));
        let names = named
            .into_iter()
            .map(|(name, place)| (visible(name, ID_LENGTH), place))
            .chain([("no group".into(), self.groups.len())]);
        let mut groups: Vec<(String, &Vec<&Sample>)> = names
            .filter_map(|(name, place)| members.get(place).map(|cells| (name, cells)))
            .filter(|(_, cells)| !cells.is_empty())
            .collect();
        if groups.len() < 2 {
            return (rows, 0);
        }
        let mut left_out = 0;
        if groups.len() > most {
            let mut sizes: Vec<usize> = groups.iter().map(|(_, cells)| cells.len()).collect();
            sizes.sort_unstable_by(|a, b| b.cmp(a));
            let least = sizes.get(most.saturating_sub(1)).copied().unwrap_or(0);
            // Of several groups of the least size, the first ones by name.
            let mut room = most.saturating_sub(sizes.iter().filter(|size| **size > least).count());
            left_out = groups.len() - most;
            groups.retain(|(_, cells)| {
                let at_border = cells.len() == least && room > 0;
                room -= usize::from(at_border);
                cells.len() > least || at_border
            });
        }
        rows.extend(
            groups
                .into_iter()
                .map(|(name, cells)| row_of(Some(name), cells.iter().copied())),
        );
        (rows, left_out)
    }

    /// Whether there is no usable cell.
    pub(super) fn is_empty(&self) -> bool {
        self.current.is_empty() && self.conductance.is_empty()
    }

    /// The tables, one for each kind of drive.
    pub(super) fn tables(&self) -> String {
        let mut text = String::new();
        for kind in [DriveKind::Current, DriveKind::Conductance] {
            let (rows, left_out) = self.rows(kind, GROUPS_LISTED);
            if rows.is_empty() {
                continue;
            }
            let heads: Vec<String> = PARAMETERS
                .iter()
                .enumerate()
                .map(|(i, name)| format!("{name} ({})", unit_of(i, kind)))
                .collect();
            let mut columns = vec![("group", false), ("usable cells", true)];
            columns.extend(heads.iter().map(|head| (head.as_str(), true)));
            text.push_str(&table_head(&columns));
            for row in &rows {
                let mut cells = vec![
                    row.group.as_deref().map_or_else(|| "**all**".into(), id_markdown),
                    count_text(row.cells as u64),
                ];
                cells.extend(row.values.iter().map(|values| spread_text(values, row.cells)));
                text.push_str(&table_row(&cells));
            }
            text.push('\n');
            if left_out > 0 {
                text.push_str(&format!(
                    "The {GROUPS_LISTED} largest groups are shown, {} more are not.\n\n",
                    count_text(left_out as u64)
                ));
            }
        }
        text
    }
}

fn row_of<'a>(group: Option<String>, samples: impl Iterator<Item = &'a Sample>) -> Row {
    let mut values: [Vec<f64>; 4] = Default::default();
    let mut cells = 0;
    for sample in samples {
        cells += 1;
        for (column, value) in values.iter_mut().zip(sample.values) {
            if value.is_finite() {
                column.push(value);
            }
        }
    }
    for column in &mut values {
        column.sort_by(f64::total_cmp);
    }
    Row { group, cells, values }
}

/// Median with its quartiles, and the number of values where not every cell has one.
fn spread_text(ascending: &[f64], cells: usize) -> String {
    let (Some(median), lower, upper) = (
        quantile(ascending, 0.5),
        quantile(ascending, 0.25),
        quantile(ascending, 0.75),
    ) else {
        return "none".into();
    };
    let spread = if ascending.len() > 1 {
        estimate_text(&Estimate {
            value: Some(median),
            se: None,
            lo: lower,
            hi: upper,
        })
    } else {
        super::numbers::significant_text(median)
    };
    if ascending.len() < cells {
        format!("{spread}, n = {}", count_text(ascending.len() as u64))
    } else {
        spread
    }
}

#[cfg(test)]
mod tests {
    #![allow(clippy::unwrap_used)]
    use super::super::test_cells::{cell, estimate};
    use super::*;
    use crate::assess::Ceiling;

    fn one(group: Option<&str>, max_rate: f64, kind: DriveKind) -> CellResult {
        let mut cell = cell("c", Ceiling::Resolved);
        cell.group = group.map(Arc::from);
        cell.drive_kind = kind;
        cell.responses[0].max_rate = estimate(max_rate, 1.0, 1.0);
        cell
    }

    #[test]
    fn quantiles_are_those_worked_out_by_hand() {
        let values = [10.0, 20.0, 30.0, 50.0];
        // Positions 0.75, 1.5 and 2.25 counted from 0.
        assert_eq!(quantile(&values, 0.25), Some(17.5));
        assert_eq!(quantile(&values, 0.5), Some(25.0));
        assert_eq!(quantile(&values, 0.75), Some(35.0));
        assert_eq!(quantile(&values, 0.0), Some(10.0));
        assert_eq!(quantile(&values, 1.0), Some(50.0));
        assert_eq!(quantile(&[7.0], 0.25), Some(7.0));
        assert_eq!(quantile(&[], 0.5), None);
    }

    #[test]
    fn only_usable_cells_count_and_kinds_of_drive_stay_apart() {
        let mut population = Population::default();
        for rate in [50.0, 10.0, 30.0, 20.0] {
            population.add(&one(None, rate, DriveKind::Current));
        }
        population.add(&one(None, 500.0, DriveKind::Conductance));
        let mut unusable = one(None, 900.0, DriveKind::Current);
        unusable.responses[0].usable = false;
        population.add(&unusable);
        let (rows, left_out) = population.rows(DriveKind::Current, 8);
        assert_eq!((rows.len(), left_out, rows[0].cells), (1, 0, 4));
        assert_eq!(rows[0].values[0], [10.0, 20.0, 30.0, 50.0]);
        assert_eq!(population.rows(DriveKind::Conductance, 8).0[0].values[0], [500.0]);
        let tables = population.tables();
        assert!(tables.contains("half-rise (pA)") && tables.contains("half-rise (nS)"));
        assert!(tables.contains("| **all** | 4 | 25 (18 to 35) |"), "{tables}");
    }

    #[test]
    fn groups_are_told_apart_and_the_largest_are_kept() {
        let mut population = Population::default();
        for (group, cells) in [("b10", 3), ("b9", 2), ("c", 1), ("d", 2)] {
            for i in 0..cells {
                population.add(&one(Some(group), 10.0 + f64::from(i), DriveKind::Current));
            }
        }
        population.add(&one(None, 99.0, DriveKind::Current));
        let names = |most| -> Vec<String> {
            let (rows, _) = population.rows(DriveKind::Current, most);
            rows.into_iter().filter_map(|row| row.group).collect()
        };
        assert_eq!(names(8), ["b9", "b10", "c", "d", "no group"]);
        assert_eq!(names(2), ["b9", "b10"]);
        assert_eq!(population.rows(DriveKind::Current, 2).1, 3);
    }

    #[test]
    fn a_parameter_that_is_not_determined_is_counted_out() {
        let mut population = Population::default();
        let mut without = one(None, 10.0, DriveKind::Current);
        without.responses[0].noise_sd = Estimate {
            lo: Some(0.0),
            hi: Some(24.0),
            ..Estimate::default()
        };
        population.add(&without);
        population.add(&one(None, 20.0, DriveKind::Current));
        assert!(
            population.tables().contains("| 21.4, n = 1 |"),
            "{}",
            population.tables()
        );
    }
}
