//! A stretch of rows of one file, and how names and numbers are taken out of its columns.

use polars::prelude::{Column, DataType};

use super::error::{Problem, ReadError};
use super::names::{MISSING, Names};
use super::rules::{self, Rule};
use super::units::Unit;

/// Rows of one file, with our columns in the order of their table's list.
pub struct Batch {
    /// Number of rows.
    pub rows: usize,
    /// Our columns; `None` where the file lacks one.
    pub ours: Vec<Option<Column>>,
    /// The columns that are none of ours, in file order (only where they are carried).
    pub others: Vec<Column>,
    /// Rows with more fields than the header, ascending, each with the first surplus field.
    pub ragged: Vec<(usize, String)>,
    /// Whether numbers in text have a decimal comma.
    pub decimal_comma: bool,
}

/// A value that costs its row.
#[derive(Clone, Debug)]
pub struct BadValue {
    /// Row within the batch.
    pub row: usize,
    /// Our name of the column, where one is at fault.
    pub column: Option<&'static str>,
    /// The value as text, where there is one.
    pub value: Option<String>,
    /// The rule it breaks.
    pub rule: &'static Rule,
}

/// Codes of a column of names; every row is [`MISSING`] where the file lacks the column.
///
/// # Errors
/// A column whose type cannot name anything, such as a list.
pub fn codes(batch: &Batch, index: usize, file: &str, names: &mut Names) -> Result<Vec<u32>, ReadError> {
    let Some(column) = &batch.ours[index] else {
        return Ok(vec![MISSING; batch.rows]);
    };
    let mut codes = Vec::with_capacity(batch.rows);
    let series = column.as_materialized_series();
    match series.dtype() {
        DataType::Null => codes.resize(batch.rows, MISSING),
        DataType::String => {
            let text = series.str().map_err(|error| internal(file, &error))?;
            codes.extend(
                text.iter()
                    .map(|name| name.map_or(MISSING, |name| names.code(name))),
            );
        }
        dtype if dtype.is_integer() && *dtype != DataType::UInt64 => {
            let series = series
                .cast(&DataType::Int64)
                .map_err(|error| internal(file, &error))?;
            let integers = series.i64().map_err(|error| internal(file, &error))?;
            codes.extend(
                integers
                    .iter()
                    .map(|name| name.map_or(MISSING, |name| names.code_of_integer(name))),
            );
        }
        dtype if dtype.is_float() => {
            let series = series
                .cast(&DataType::Float64)
                .map_err(|error| internal(file, &error))?;
            let floats = series.f64().map_err(|error| internal(file, &error))?;
            codes.extend(floats.iter().map(|name| match name {
                // A column of whole numbers with gaps is often stored as floats: 3.0 is sweep 3.
                Some(name) if name.fract() == 0.0 && name.abs() < 9.0e15 => {
                    names.code_of_integer(name as i64)
                }
                Some(name) if !name.is_nan() => names.code(&name.to_string()),
                _ => MISSING,
            }));
        }
        _ => {
            let series = as_text(column, file)?;
            let text = series.str().map_err(|error| internal(file, &error))?;
            codes.extend(
                text.iter()
                    .map(|name| name.map_or(MISSING, |name| names.code(name))),
            );
        }
    }
    Ok(codes)
}

/// A column as text: categories by their names, numbers in their shortest form.
///
/// # Errors
/// A type that has no plain text, such as a list.
pub fn as_text(column: &Column, file: &str) -> Result<polars::prelude::Series, ReadError> {
    let series = column.as_materialized_series();
    let dtype = series.dtype();
    let plain = dtype.is_primitive_numeric()
        || matches!(
            dtype,
            DataType::String
                | DataType::Boolean
                | DataType::Null
                | DataType::Binary
                | DataType::Categorical(..)
                | DataType::Enum(..)
        );
    if plain && let Ok(text) = series.strict_cast(&DataType::String) {
        return Ok(text);
    }
    Err(ReadError::Data(Problem::of_file(
        file,
        format!(
            "column {:?} is of type {dtype}, which cannot be read as text",
            column.name().as_str()
        ),
        "store names as text or integers",
    )))
}

/// Numbers of a column in the program's own unit, NaN where a row has none.
///
/// Missing values are reported as [`rules::MISSING_VALUE`] only where `required`; text that is no number and values
/// that are not finite always are.
///
/// # Errors
/// A column whose type is no number.
pub fn numbers(
    batch: &Batch,
    index: usize,
    name: &'static str,
    unit: Option<Unit>,
    required: bool,
    file: &str,
    bad: &mut Vec<BadValue>,
) -> Result<Vec<f64>, ReadError> {
    let Some(column) = &batch.ours[index] else {
        return Ok(vec![f64::NAN; batch.rows]);
    };
    let mut report = |row: usize, value: Option<String>, rule: &'static Rule| {
        bad.push(BadValue {
            row,
            column: Some(name),
            value,
            rule,
        });
        f64::NAN
    };
    let mut values = Vec::with_capacity(batch.rows);
    let series = column.as_materialized_series();
    let convert = |value: f64| match unit {
        // The sum turns -0 into 0, so that the two cannot pass for different times.
        Some(unit) => unit.convert(value) + 0.0,
        None => value + 0.0,
    };
    match series.dtype() {
        DataType::String | DataType::Categorical(..) | DataType::Enum(..) => {
            let series = as_text(column, file)?;
            let text = series.str().map_err(|error| internal(file, &error))?;
            for (row, field) in text.iter().enumerate() {
                let field = field.map_or("", str::trim);
                values.push(if field.is_empty() {
                    if required {
                        report(row, None, rules::MISSING_VALUE)
                    } else {
                        f64::NAN
                    }
                } else {
                    match parse(field, batch.decimal_comma) {
                        Some(value) if value.is_finite() && convert(value).is_finite() => convert(value),
                        Some(_) => report(row, Some(field.to_owned()), rules::NON_FINITE),
                        None => report(row, Some(field.to_owned()), rules::NOT_A_NUMBER),
                    }
                });
            }
        }
        dtype if dtype.is_primitive_numeric() || *dtype == DataType::Null => {
            let series = series
                .cast(&DataType::Float64)
                .map_err(|error| internal(file, &error))?;
            let floats = series.f64().map_err(|error| internal(file, &error))?;
            for (row, value) in floats.iter().enumerate() {
                values.push(match value {
                    Some(value) if value.is_finite() && convert(value).is_finite() => convert(value),
                    Some(value) => report(row, Some(value.to_string()), rules::NON_FINITE),
                    None if required => report(row, None, rules::MISSING_VALUE),
                    None => f64::NAN,
                });
            }
        }
        dtype => {
            return Err(ReadError::Data(Problem::of_file(
                file,
                format!(
                    "column {:?} is of type {dtype}; {name} must be a number",
                    column.name().as_str()
                ),
                "store it as a 64-bit float",
            )));
        }
    }
    Ok(values)
}

/// A number written plainly. `None` for anything else, thousands separators included.
pub fn parse(field: &str, decimal_comma: bool) -> Option<f64> {
    if decimal_comma {
        if field.contains('.') {
            return None;
        }
        if field.contains(',') {
            return field.replacen(',', ".", 1).parse().ok();
        }
    }
    field.parse().ok()
}

/// Whether a field is a number once its comma is read as a decimal mark: the sign of a spreadsheet's export.
pub fn has_decimal_comma(field: &str) -> bool {
    field.contains(',') && parse(field.trim(), true).is_some_and(f64::is_finite)
}

/// Polars refused something that was checked before: reported, never a panic.
pub fn internal(file: &str, error: &polars::error::PolarsError) -> ReadError {
    ReadError::Io(Problem::of_file(
        file,
        format!("could not be processed: {error}"),
        "this is a fault of halfrise; please report it with the file",
    ))
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn plain_numbers_only() {
        assert_eq!(parse("0.25", false), Some(0.25));
        assert_eq!(parse("-2.5e-1", false), Some(-0.25));
        assert_eq!(parse("0,25", true), Some(0.25));
        assert_eq!(parse("25", true), Some(25.0));
        for text in ["0,25", "1 000", "0x10", "1_000", "1.2.3", "ms", "3s", "--1"] {
            assert_eq!(parse(text, false), None, "{text}");
        }
        assert_eq!(parse("1.234,5", true), None);
        assert_eq!(parse("1,234,5", true), None);
        assert!(has_decimal_comma("0,25") && !has_decimal_comma("a,b") && !has_decimal_comma("25"));
    }
}
