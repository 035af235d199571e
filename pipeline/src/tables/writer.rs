//! One Parquet file, written row by row in bounded memory.

use std::collections::HashMap;
use std::fs::File;
use std::io::{BufWriter, Write};
use std::path::{Path, PathBuf};
use std::sync::Arc;

use arrow_array::builder::{BooleanBuilder, Float64Builder, Int64Builder, ListBuilder, StringBuilder};
use arrow_array::{ArrayRef, RecordBatch};
use arrow_schema::{DataType, Field, FieldRef, Schema, SchemaRef};
use parquet::arrow::ArrowWriter;
use parquet::basic::{Compression, ZstdLevel};
use parquet::file::metadata::KeyValue;
use parquet::file::properties::WriterProperties;
use parquet::schema::types::ColumnPath;
use serde_json::{Map, Value, json};

use super::columns::{Column, Get, Table, TableContext};
use super::error::WriteError;
use super::schemas::SCHEMA_VERSION;

/// Rows of a row group: one cell is found fast, and what is held in memory stays small.
const ROW_GROUP_ROWS: usize = 131_072;
/// Rows gathered before they are encoded. Counted over the whole table, so the bytes do not depend on how the rows
/// were handed over.
const BATCH_ROWS: usize = 8_192;
/// Text gathered before it is encoded, bytes: text offsets are 32-bit.
const BATCH_TEXT: usize = 1 << 26;
/// Longest text that a table takes, bytes.
const LONGEST_TEXT: usize = 1 << 30;
const ZSTD_LEVEL: i32 = 3;

/// Values of one column that wait to be encoded.
enum Buffer<T: Table> {
    Text(for<'a> fn(&'a T::Row<'a>) -> Option<&'a str>, StringBuilder),
    Real(for<'a> fn(&'a T::Row<'a>) -> Option<f64>, Float64Builder),
    Count(for<'a> fn(&'a T::Row<'a>) -> u64, Int64Builder),
    Truth(for<'a> fn(&'a T::Row<'a>) -> bool, BooleanBuilder),
    FlagNames(
        for<'a> fn(&'a T::Row<'a>) -> &'a [crate::assess::Flag],
        ListBuilder<StringBuilder>,
    ),
    Reals(
        for<'a> fn(&'a T::Row<'a>) -> Option<&'a [f64]>,
        ListBuilder<Float64Builder>,
    ),
}

fn element(data_type: DataType) -> FieldRef {
    Arc::new(Field::new("element", data_type, true))
}

impl<T: Table> Buffer<T> {
    fn new(get: &Get<T>) -> Self {
        match *get {
            Get::Text(get) => Self::Text(get, StringBuilder::new()),
            Get::Real(get) => Self::Real(get, Float64Builder::new()),
            Get::Count(get) => Self::Count(get, Int64Builder::new()),
            Get::Truth(get) => Self::Truth(get, BooleanBuilder::new()),
            Get::FlagNames(get) => Self::FlagNames(
                get,
                ListBuilder::new(StringBuilder::new()).with_field(element(DataType::Utf8)),
            ),
            Get::Reals(get) => Self::Reals(
                get,
                ListBuilder::new(Float64Builder::new()).with_field(element(DataType::Float64)),
            ),
        }
    }

    /// Takes the value out of `row`; returns the bytes of text it added.
    fn push<'a>(&mut self, row: &'a T::Row<'a>) -> Result<usize, usize> {
        match self {
            Self::Text(get, builder) => return push_text(builder, get(row)),
            Self::Real(get, builder) => builder.append_option(get(row).filter(|value| !value.is_nan())),
            Self::Count(get, builder) => builder.append_value(i64::try_from(get(row)).unwrap_or(i64::MAX)),
            Self::Truth(get, builder) => builder.append_value(get(row)),
            Self::FlagNames(get, builder) => {
                let mut bytes = 0;
                for flag in get(row) {
                    bytes += push_text(builder.values(), Some(flag.flag))?;
                }
                builder.append(true);
                return Ok(bytes);
            }
            Self::Reals(get, builder) => {
                let values = get(row).filter(|values| values.iter().all(|value| value.is_finite()));
                builder.values().append_slice(values.unwrap_or_default());
                builder.append(values.is_some());
            }
        }
        Ok(0)
    }

    fn finish(&mut self) -> ArrayRef {
        match self {
            Self::Text(_, builder) => Arc::new(builder.finish()),
            Self::Real(_, builder) => Arc::new(builder.finish()),
            Self::Count(_, builder) => Arc::new(builder.finish()),
            Self::Truth(_, builder) => Arc::new(builder.finish()),
            Self::FlagNames(_, builder) => Arc::new(builder.finish()),
            Self::Reals(_, builder) => Arc::new(builder.finish()),
        }
    }
}

/// Appends a text; the error is the length of one that is too long.
fn push_text(builder: &mut StringBuilder, text: Option<&str>) -> Result<usize, usize> {
    let bytes = text.map_or(0, str::len);
    if bytes > LONGEST_TEXT {
        return Err(bytes);
    }
    builder.append_option(text);
    Ok(bytes)
}

fn field<T: Table>(column: &Column<T>, context: &TableContext) -> Field {
    let (data_type, nullable) = match column.get {
        Get::Text(_) => (DataType::Utf8, true),
        Get::Real(_) => (DataType::Float64, true),
        Get::Count(_) => (DataType::Int64, false),
        Get::Truth(_) => (DataType::Boolean, false),
        Get::FlagNames(_) => (DataType::List(element(DataType::Utf8)), true),
        Get::Reals(_) => (DataType::List(element(DataType::Float64)), true),
    };
    described(
        Field::new(column.name, data_type, nullable),
        &column.unit.symbol(context),
        column.description,
    )
}

fn described(field: Field, unit: &str, description: &str) -> Field {
    field.with_metadata(HashMap::from([
        ("unit".to_owned(), unit.to_owned()),
        ("description".to_owned(), description.to_owned()),
    ]))
}

/// The names that the cell table's further columns go by in table `T`: their own, or with `cell_` before it as often
/// as it takes to tell them from every column that the table can have.
fn carried_names<T: Table>(context: &TableContext) -> Vec<String> {
    let mut names: Vec<String> = Vec::new();
    for carried in context.carried_columns.iter().filter(|_| T::CARRIES) {
        let mut name = carried.clone();
        while T::COLUMNS.iter().any(|column| column.name == name) || names.contains(&name) {
            name.insert_str(0, "cell_");
        }
        names.push(name);
    }
    names
}

/// One table file being written.
pub(super) struct TableWriter<T: Table> {
    path: PathBuf,
    buffers: Vec<Buffer<T>>,
    carried: Vec<StringBuilder>,
    schema: SchemaRef,
    writer: ArrowWriter<BufWriter<File>>,
    pending: usize,
    pending_text: usize,
    rows: u64,
}

impl<T: Table> TableWriter<T> {
    /// Creates `<dir>/<name>.parquet`.
    pub(super) fn create(dir: &Path, context: &TableContext) -> Result<Self, WriteError> {
        let path = dir.join(format!("{}.parquet", T::NAME));
        let columns: Vec<&Column<T>> = T::COLUMNS
            .iter()
            .filter(|column| column.when.holds(context))
            .collect();
        let carried = carried_names::<T>(context);

        let mut fields = Vec::new();
        let mut facts = Map::new();
        let mut properties = WriterProperties::builder()
            .set_created_by(format!("halfrise {}", env!("CARGO_PKG_VERSION")))
            .set_max_row_group_row_count(Some(ROW_GROUP_ROWS))
            .set_dictionary_enabled(false)
            .set_compression(Compression::ZSTD(
                ZstdLevel::try_new(ZSTD_LEVEL).map_err(|error| WriteError::of_parquet(&path, &error))?,
            ));
        for column in &columns {
            let field = field(column, context);
            facts.insert(
                column.name.into(),
                fact(
                    column.get.type_name(),
                    &column.unit.symbol(context),
                    column.description,
                ),
            );
            let leaf: Option<&[&str]> = match column.get {
                Get::Text(_) => Some(&[]),
                Get::FlagNames(_) => Some(&["list", "element"]),
                _ => None,
            };
            if let Some(below) = leaf {
                let parts = std::iter::once(column.name).chain(below.iter().copied());
                properties = properties
                    .set_column_dictionary_enabled(ColumnPath::new(parts.map(str::to_owned).collect()), true);
            }
            fields.push(field);
        }
        for (name, original) in carried.iter().zip(&context.carried_columns) {
            let description = format!("Column {original} of the cell table, carried through as text");
            facts.insert(name.clone(), fact("text", "", &description));
            properties = properties.set_column_dictionary_enabled(ColumnPath::new(vec![name.clone()]), true);
            fields.push(described(
                Field::new(name, DataType::Utf8, true),
                "",
                &description,
            ));
        }

        // Readers differ in which of the two places they look at, and the Parquet writer copies neither to the other.
        let facts = Value::Object(facts).to_string();
        let shared = [
            (
                "halfrise.schema",
                json!({"table": T::NAME, "version": SCHEMA_VERSION}).to_string(),
            ),
            ("halfrise.columns", facts.clone()),
            ("PANDAS_ATTRS", facts),
        ];
        let properties = properties
            .set_key_value_metadata(Some(
                shared
                    .iter()
                    .map(|(key, value)| KeyValue::new((*key).to_owned(), value.clone()))
                    .collect(),
            ))
            .build();
        let metadata = shared
            .into_iter()
            .map(|(key, value)| (key.to_owned(), value))
            .collect();
        let schema: SchemaRef = Arc::new(Schema::new_with_metadata(fields, metadata));

        let file =
            File::create(&path).map_err(|error| WriteError::of_io(&path, "cannot be created", &error))?;
        let writer = ArrowWriter::try_new(BufWriter::new(file), Arc::clone(&schema), Some(properties))
            .map_err(|error| WriteError::of_parquet(&path, &error))?;
        Ok(Self {
            buffers: columns.iter().map(|column| Buffer::new(&column.get)).collect(),
            carried: carried.iter().map(|_| StringBuilder::new()).collect(),
            path,
            schema,
            writer,
            pending: 0,
            pending_text: 0,
            rows: 0,
        })
    }

    /// Adds a row.
    pub(super) fn push<'a>(&mut self, row: &'a T::Row<'a>) -> Result<(), WriteError> {
        let mut text = 0;
        let mut too_long = None;
        for buffer in &mut self.buffers {
            match buffer.push(row) {
                Ok(bytes) => text += bytes,
                Err(bytes) => too_long = Some(bytes),
            }
        }
        if T::CARRIES {
            let values = T::carried(row).unwrap_or_default();
            if values.len() != self.carried.len() {
                return Err(self.internal(format!(
                    "a cell carries {} columns of the cell table where the set has {}",
                    values.len(),
                    self.carried.len()
                )));
            }
            for (builder, value) in self.carried.iter_mut().zip(values) {
                match push_text(builder, value.as_deref()) {
                    Ok(bytes) => text += bytes,
                    Err(bytes) => too_long = Some(bytes),
                }
            }
        }
        if let Some(bytes) = too_long {
            return Err(WriteError::Io {
                path: self.path.clone(),
                cause: format!(
                    "row {}: a text of {bytes} bytes; the limit is {LONGEST_TEXT}",
                    self.rows + 1
                ),
                remedy: "look for a broken quote in the input tables".into(),
            });
        }
        self.rows += 1;
        self.pending += 1;
        self.pending_text += text;
        if self.pending >= BATCH_ROWS || self.pending_text >= BATCH_TEXT {
            self.flush()?;
        }
        Ok(())
    }

    /// Encodes what waits.
    fn flush(&mut self) -> Result<(), WriteError> {
        let arrays: Vec<ArrayRef> = self
            .buffers
            .iter_mut()
            .map(Buffer::finish)
            .chain(
                self.carried
                    .iter_mut()
                    .map(|builder| Arc::new(builder.finish()) as ArrayRef),
            )
            .collect();
        (self.pending, self.pending_text) = (0, 0);
        let batch = RecordBatch::try_new(Arc::clone(&self.schema), arrays)
            .map_err(|error| self.internal(error.to_string()))?;
        self.writer
            .write(&batch)
            .map_err(|error| WriteError::of_parquet(&self.path, &error))
    }

    /// Writes the rest and the footer; returns the number of rows.
    pub(super) fn finish(mut self) -> Result<u64, WriteError> {
        if self.pending > 0 {
            self.flush()?;
        }
        let path = self.path;
        let mut file = self
            .writer
            .into_inner()
            .map_err(|error| WriteError::of_parquet(&path, &error))?;
        // A dropped buffer would swallow a full disk.
        file.flush()
            .map_err(|error| WriteError::of_io(&path, "cannot be written", &error))?;
        Ok(self.rows)
    }

    /// A contradiction in what was handed over.
    pub(super) fn internal(&self, cause: String) -> WriteError {
        WriteError::Internal {
            path: self.path.clone(),
            cause,
        }
    }
}

fn fact(type_name: &str, unit: &str, description: &str) -> Value {
    json!({"type": type_name, "unit": unit, "description": description})
}
