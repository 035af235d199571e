//! From a file's headers to our columns and their units.

use super::error::{Problem, ReadError};
use super::files::TableFile;
use super::model::TableKind;
use super::set_file::{SET_FILE, SetFile};
use super::units::{Quantity, Unit};

/// A column of ours.
#[derive(Clone, Copy, Debug)]
pub struct ColumnSpec {
    /// Our name.
    pub name: &'static str,
    /// What it measures; `None` for text.
    pub quantity: Option<Quantity>,
    /// Whether the table is useless without it.
    pub required: bool,
}

const fn column(name: &'static str, quantity: Option<Quantity>, required: bool) -> ColumnSpec {
    ColumnSpec {
        name,
        quantity,
        required,
    }
}

/// Columns of the spike table, in this order everywhere.
pub const SPIKES: &[ColumnSpec] = &[
    column("cell", None, true),
    column("sweep", None, false),
    column("time", Some(Quantity::Time), true),
];

/// Columns of the protocol, in this order everywhere.
pub const PROTOCOL: &[ColumnSpec] = &[
    column("cell", None, true),
    column("sweep", None, false),
    column("onset", Some(Quantity::Time), true),
    column("offset", Some(Quantity::Time), true),
    column("current", Some(Quantity::Current), false),
    column("g_exc", Some(Quantity::Conductance), false),
    column("g_inh", Some(Quantity::Conductance), false),
    column("step", None, false),
];

/// Columns of the cell table, in this order everywhere.
pub const CELLS: &[ColumnSpec] = &[
    column("cell", None, true),
    column("group", None, false),
    column("g_leak", Some(Quantity::Conductance), false),
    column("e_leak", Some(Quantity::Potential), false),
    column("e_exc", Some(Quantity::Potential), false),
    column("e_inh", Some(Quantity::Potential), false),
    column("v_threshold", Some(Quantity::Potential), false),
    column("capacitance", Some(Quantity::Capacitance), false),
];

/// The columns of a table.
pub fn specs(table: TableKind) -> &'static [ColumnSpec] {
    match table {
        TableKind::Spikes => SPIKES,
        TableKind::Protocol => PROTOCOL,
        TableKind::Cells => CELLS,
    }
}

/// Where our columns are in a file.
#[derive(Clone, Debug)]
pub struct Matched {
    /// Position in the file of each column of [`specs`]; `None` where the file lacks it.
    pub positions: Vec<Option<usize>>,
    /// Unit of each column of [`specs`]; for text the entry is `None`.
    pub units: Vec<Option<Unit>>,
    /// Positions of the columns that are none of ours.
    pub others: Vec<usize>,
    /// What was settled, for the summary.
    pub notes: Vec<String>,
}

/// Our name with the unit a header may carry: `time_ms`, `time (ms)`, `time [ms]`.
enum Reading {
    /// Another column.
    No,
    /// Ours, with the header's unit where it carries one.
    Yes(Option<Unit>),
    /// Ours by name, with a unit that is not known.
    StrangeUnit,
}

fn read_header(header: &str, spec: &ColumnSpec) -> Reading {
    let header = header.to_lowercase();
    let Some(rest) = header.strip_prefix(spec.name) else {
        return Reading::No;
    };
    if rest.is_empty() {
        return Reading::Yes(None);
    }
    let Some(quantity) = spec.quantity else {
        return Reading::No;
    };
    if !rest.starts_with(['_', ' ', '(', '[']) {
        return Reading::No;
    }
    let symbol = rest.trim_matches(['_', ' ', '(', ')', '[', ']']);
    match quantity.unit(symbol) {
        Some(unit) => Reading::Yes(Some(unit)),
        None => Reading::StrangeUnit,
    }
}

/// The unit at the end of a header that `[columns]` names, in the unit's own case (`stamp_ms`, `stamp (ms)`).
fn unit_of_mapped(header: &str, quantity: Quantity) -> Option<Unit> {
    let end = header.trim_end_matches([')', ']', ' ']);
    let start = end.rfind(['_', ' ', '(', '['])? + 1;
    let symbol = &end[start..];
    quantity
        .units()
        .iter()
        .copied()
        .find(|unit| unit.symbol == symbol)
}

fn shown(headers: &[String]) -> String {
    const SHOWN: usize = 30;
    let mut list = headers
        .iter()
        .take(SHOWN)
        .map(|header| {
            if header.is_empty() {
                "(unnamed)"
            } else {
                header.as_str()
            }
        })
        .collect::<Vec<_>>()
        .join(", ");
    if headers.len() > SHOWN {
        list.push_str(&format!(" and {} more", headers.len() - SHOWN));
    }
    list
}

/// Finds our columns among a file's headers (trimmed) and settles their units.
///
/// # Errors
/// `Settings` where `[columns]` or `[units]` disagrees with the file, `Data` where a required column is missing or two
/// headers claim one column.
pub fn match_headers(file: &TableFile, headers: &[String], set: &SetFile) -> Result<Matched, ReadError> {
    let table = file.table;
    let specs = specs(table);
    let mapping = set.columns.of(table);
    let section = format!("[columns.{}]", table.name());
    if let Some(key) = mapping
        .keys()
        .find(|key| specs.iter().all(|spec| spec.name != key.as_str()))
    {
        let known: Vec<&str> = specs.iter().map(|spec| spec.name).collect();
        return Err(ReadError::Settings(Problem::of_file(
            SET_FILE,
            format!(
                "{section} {key}: the {} table has no column of that name",
                table.name()
            ),
            format!("its columns are {}", known.join(", ")),
        )));
    }
    let mut matched = Matched {
        positions: vec![None; specs.len()],
        units: vec![None; specs.len()],
        others: Vec::new(),
        notes: Vec::new(),
    };
    let mut taken = vec![false; headers.len()];
    // What [columns] says comes first and is not second-guessed.
    for (i, spec) in specs.iter().enumerate() {
        let Some(wanted) = mapping.get(spec.name) else {
            continue;
        };
        let position = headers
            .iter()
            .position(|header| header == wanted.trim())
            .or_else(|| {
                let wanted = wanted.trim().to_lowercase();
                headers.iter().position(|header| header.to_lowercase() == wanted)
            });
        let Some(position) = position else {
            return Err(ReadError::Settings(Problem::of_file(
                file.name.clone(),
                format!(
                    "there is no header {wanted:?}, which {section} {} asks for",
                    spec.name
                ),
                format!("the headers are {}", shown(headers)),
            )));
        };
        if taken[position] {
            return Err(ReadError::Settings(Problem::of_file(
                SET_FILE,
                format!(
                    "{section} gives the header {wanted:?} to two columns, {} among them",
                    spec.name
                ),
                "give every column a header of its own",
            )));
        }
        taken[position] = true;
        matched.positions[i] = Some(position);
        if let Some(quantity) = spec.quantity {
            let unit = unit_of_mapped(&headers[position], quantity);
            matched.units[i] = Some(settle(
                file,
                set,
                spec,
                quantity,
                &headers[position],
                unit,
                &mut matched.notes,
            )?);
        }
    }
    let mut strange = Vec::new();
    for (position, header) in headers.iter().enumerate() {
        if taken[position] {
            continue;
        }
        for (i, spec) in specs.iter().enumerate() {
            if mapping.contains_key(spec.name) {
                continue;
            }
            match read_header(header, spec) {
                Reading::No => {}
                Reading::StrangeUnit => strange.push((header, spec)),
                Reading::Yes(unit) => {
                    if let Some(other) = matched.positions[i] {
                        return Err(ReadError::Data(Problem::of_file(
                            file.name.clone(),
                            format!(
                                "two headers mean the column {}: {:?} and {header:?}",
                                spec.name, headers[other]
                            ),
                            format!(
                                "say which one to read in {SET_FILE}:\n{section}\n{} = {header:?}",
                                spec.name
                            ),
                        )));
                    }
                    taken[position] = true;
                    matched.positions[i] = Some(position);
                    if let Some(quantity) = spec.quantity {
                        matched.units[i] = Some(settle(
                            file,
                            set,
                            spec,
                            quantity,
                            header,
                            unit,
                            &mut matched.notes,
                        )?);
                    }
                }
            }
        }
    }
    let missing: Vec<&str> = specs
        .iter()
        .zip(&matched.positions)
        .filter(|(spec, position)| spec.required && position.is_none())
        .map(|(spec, _)| spec.name)
        .collect();
    let no_drive =
        table == TableKind::Protocol && matched.positions[4].is_none() && matched.positions[5].is_none();
    if !missing.is_empty() || no_drive {
        return Err(missing_columns(file, headers, &missing, no_drive, &strange));
    }
    matched.others = (0..headers.len()).filter(|&position| !taken[position]).collect();
    if table != TableKind::Cells {
        let unused: Vec<String> = matched
            .others
            .iter()
            .map(|&position| headers[position].clone())
            .filter(|header| !header.is_empty())
            .collect();
        if !unused.is_empty() {
            matched
                .notes
                .push(format!("{}: columns not used: {}", file.name, shown(&unused)));
        }
    }
    Ok(matched)
}

/// The unit of a column from its header, `[units]` and the default.
fn settle(
    file: &TableFile,
    set: &SetFile,
    spec: &ColumnSpec,
    quantity: Quantity,
    header: &str,
    in_header: Option<Unit>,
    notes: &mut Vec<String>,
) -> Result<Unit, ReadError> {
    let in_settings = set.units.of(file.table, quantity)?;
    match (in_header, in_settings) {
        (Some(unit), Some((other, key))) if unit != other => Err(ReadError::Settings(Problem::of_file(
            file.name.clone(),
            format!(
                "the header {header:?} says {}, but {key} = {:?} in {SET_FILE}",
                unit.symbol, other.symbol
            ),
            format!(
                "remove one of the two; [units.{}] sets a unit for one table only",
                file.table.name()
            ),
        ))),
        (Some(unit), _) => {
            notes.push(format!(
                "{}: {} in {}, from its header",
                file.name, spec.name, unit.symbol
            ));
            Ok(unit)
        }
        (None, Some((unit, key))) => {
            notes.push(format!(
                "{}: {} in {}, from {key}",
                file.name, spec.name, unit.symbol
            ));
            Ok(unit)
        }
        (None, None) => Ok(quantity.own()),
    }
}

fn missing_columns(
    file: &TableFile,
    headers: &[String],
    missing: &[&str],
    no_drive: bool,
    strange: &[(&String, &ColumnSpec)],
) -> ReadError {
    let table = file.table.name();
    let looks_like_data = !headers.is_empty()
        && headers
            .iter()
            .any(|header| header.replace(',', ".").parse::<f64>().is_ok());
    if looks_like_data {
        return ReadError::Data(Problem::of_file(
            file.name.clone(),
            format!(
                "the first line looks like data, not like a header: {}",
                shown(headers)
            ),
            format!(
                "put the names of the columns in the first line, for example {}",
                example(file.table)
            ),
        ));
    }
    let mut wanted: Vec<String> = missing.iter().map(|name| (*name).to_owned()).collect();
    if no_drive {
        wanted.push("current or g_exc".into());
    }
    let mut what = format!(
        "no column {}; the headers are {}",
        wanted.join(", "),
        if headers.is_empty() {
            "none".into()
        } else {
            shown(headers)
        }
    );
    for (header, spec) in strange {
        let symbols = spec.quantity.map(Quantity::symbols).unwrap_or_default();
        what.push_str(&format!(
            "; {header:?} ends in a unit that is not known ({symbols} are)"
        ));
    }
    let name = missing.first().copied().unwrap_or("current");
    ReadError::Data(Problem::of_file(
        file.name.clone(),
        what,
        format!(
            "rename a header, or say in {SET_FILE} which it is:\n[columns.{table}]\n{name} = \"the file's header\""
        ),
    ))
}

fn example(table: TableKind) -> &'static str {
    match table {
        TableKind::Spikes => "cell,sweep,time",
        TableKind::Protocol => "cell,sweep,onset,offset,current",
        TableKind::Cells => "cell,group",
    }
}

#[cfg(test)]
mod tests {
    #![allow(clippy::unwrap_used)]
    use super::*;
    use crate::recording::ErrorClass;
    use crate::recording::files::Format;

    fn matched(table: TableKind, headers: &[&str], toml: &str) -> Result<Matched, ReadError> {
        let file = TableFile {
            table,
            path: "t.csv".into(),
            name: "t.csv".into(),
            format: Format::Parquet,
        };
        let headers: Vec<String> = headers.iter().map(|header| (*header).to_owned()).collect();
        match_headers(&file, &headers, &SetFile::parse(toml).unwrap())
    }

    fn symbol(matched: &Matched, i: usize) -> &str {
        matched.units[i].unwrap().symbol
    }

    #[test]
    fn headers_carry_units_in_any_case() {
        let found = matched(
            TableKind::Protocol,
            &[
                "CELL",
                "Onset_MS",
                "offset (ms)",
                "current_nA",
                "G_inh [uS]",
                "remark",
            ],
            "",
        )
        .unwrap();
        assert_eq!(
            found.positions,
            [Some(0), None, Some(1), Some(2), Some(3), None, Some(4), None]
        );
        assert_eq!(symbol(&found, 2), "ms");
        assert_eq!(symbol(&found, 3), "ms");
        assert_eq!(symbol(&found, 4), "nA");
        assert_eq!(symbol(&found, 6), "uS");
        assert_eq!(found.others, [5]);
        let notes = found.notes.join("\n");
        assert!(
            notes.contains("onset in ms") && notes.contains("remark"),
            "{notes}"
        );
    }

    #[test]
    fn similar_names_stay_apart() {
        let found = matched(
            TableKind::Cells,
            &[
                "cell",
                "e_leak_V",
                "g_leak_nS",
                "capacitance_pF",
                "e_leaky",
                "cell_type",
            ],
            "",
        )
        .unwrap();
        assert_eq!(symbol(&found, 3), "V");
        assert_eq!(found.others, [4, 5]);
    }

    #[test]
    fn mapped_headers() {
        let found = matched(
            TableKind::Spikes,
            &["Neuron", "cell", "stamp_ms", "time"],
            "[columns.spikes]\ncell = \"neuron\"\ntime = \"stamp_ms\"",
        )
        .unwrap();
        assert_eq!(found.positions, [Some(0), None, Some(2)]);
        assert_eq!(symbol(&found, 2), "ms");
        assert_eq!(found.others, [1, 3]);
    }

    #[test]
    fn units_for_one_table() {
        let toml = "[units]\ntime = \"us\"\n[units.spikes]\ntime = \"ms\"";
        assert_eq!(
            symbol(&matched(TableKind::Spikes, &["cell", "time"], toml).unwrap(), 2),
            "ms"
        );
        let protocol = matched(TableKind::Protocol, &["cell", "onset", "offset", "current"], toml).unwrap();
        assert_eq!(symbol(&protocol, 2), "us");
    }

    /// Each entry: table, headers, settings, class, fragments of the message.
    #[test]
    fn mistakes_are_named() {
        use TableKind::{Protocol, Spikes};
        for (table, headers, toml, class, fragments) in [
            (
                Spikes,
                &["cell", "when"][..],
                "",
                ErrorClass::Data,
                &["no column time", "cell, when", "[columns.spikes]"][..],
            ),
            (
                Spikes,
                &["cell", "time_min"],
                "",
                ErrorClass::Data,
                &["time_min", "s, ms, us"],
            ),
            (
                Spikes,
                &["a1", "0.25"],
                "",
                ErrorClass::Data,
                &["looks like data", "0.25", "first line"],
            ),
            (
                Spikes,
                &["cell", "time", "Time_ms"],
                "",
                ErrorClass::Data,
                &["two headers", "\"time\"", "\"Time_ms\""],
            ),
            (
                Spikes,
                &["cell", "time_ms"],
                "[units]\ntime = \"s\"",
                ErrorClass::Settings,
                &["time_ms", "says ms", "[units] time = \"s\""],
            ),
            (
                Spikes,
                &["cell", "time"],
                "[columns.spikes]\ncell = \"unit\"",
                ErrorClass::Settings,
                &["\"unit\"", "cell, time"],
            ),
            (
                Spikes,
                &["cell", "time"],
                "[columns.spikes]\nclel = \"unit\"",
                ErrorClass::Settings,
                &["clel", "cell, sweep, time"],
            ),
            (
                Spikes,
                &["cell", "time"],
                "[columns.spikes]\ncell = \"time\"\ntime = \"time\"",
                ErrorClass::Settings,
                &["two columns"],
            ),
            (
                Protocol,
                &["cell", "onset", "offset"],
                "",
                ErrorClass::Data,
                &["current or g_exc"],
            ),
        ] {
            let error = matched(table, headers, toml).unwrap_err();
            assert_eq!(error.class(), class, "{error}");
            for fragment in fragments {
                assert!(error.to_string().contains(fragment), "{fragment} not in {error}");
            }
            assert!(error.to_string().contains("\n  "), "no remedy in {error}");
        }
    }
}
