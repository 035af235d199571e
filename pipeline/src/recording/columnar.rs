//! Parquet and Arrow IPC files: magic bytes and footers are checked first, then polars reads the columns asked for.

use std::io::Cursor;

use polars::prelude::{ArrowDataType, DataFrame, IpcReader, ParallelStrategy, ParquetReader, SerReader};

use super::error::{Problem, ReadError};
use super::files::{Format, TableFile};
use super::guard::guarded;

/// Rows read at a time from a Parquet file, to whole row groups.
const ROWS: usize = 1 << 20;

/// A Parquet or Arrow file whose frame was found sound.
pub struct ColumnarFile {
    name: String,
    bytes: Vec<u8>,
    parquet: bool,
    /// The headers, trimmed.
    pub headers: Vec<String>,
    /// The headers as the file has them.
    raw_headers: Vec<String>,
    types: Vec<ArrowDataType>,
}

impl ColumnarFile {
    /// Checks a file's frame and reads its schema.
    ///
    /// # Errors
    /// `Data`, where the bytes are no such file or are cut off.
    pub fn open(file: &TableFile, bytes: Vec<u8>) -> Result<Self, ReadError> {
        let parquet = file.format == Format::Parquet;
        if parquet {
            check_parquet(file, &bytes)?;
        } else {
            check_arrow(file, &bytes)?;
        }
        let fields = guarded(&file.name, damaged(parquet), || {
            let schema = if parquet {
                ParquetReader::new(Cursor::new(bytes.as_slice())).schema()?
            } else {
                IpcReader::new(Cursor::new(bytes.as_slice())).schema()?
            };
            Ok(schema
                .iter_values()
                .map(|field| (field.name.to_string(), field.dtype.clone()))
                .collect::<Vec<_>>())
        })?;
        let (raw_headers, types): (Vec<String>, Vec<ArrowDataType>) = fields.into_iter().unzip();
        Ok(Self {
            name: file.name.clone(),
            parquet,
            headers: raw_headers
                .iter()
                .map(|header| header.trim().to_owned())
                .collect(),
            raw_headers,
            types,
            bytes,
        })
    }

    /// Whether a column's type can be read at all; what else a file may hold is not carried.
    pub fn readable(&self, position: usize) -> bool {
        fn plain(dtype: &ArrowDataType) -> bool {
            use ArrowDataType as T;
            match dtype {
                T::Null
                | T::Boolean
                | T::Int8
                | T::Int16
                | T::Int32
                | T::Int64
                | T::UInt8
                | T::UInt16
                | T::UInt32
                | T::UInt64
                | T::Float32
                | T::Float64
                | T::Utf8
                | T::LargeUtf8
                | T::Utf8View
                | T::Binary
                | T::LargeBinary
                | T::BinaryView => true,
                T::Dictionary(_, values, _) => matches!(**values, T::Utf8 | T::LargeUtf8 | T::Utf8View),
                _ => false,
            }
        }
        self.types.get(position).is_some_and(plain)
    }

    /// A column's type, in words.
    pub fn type_name(&self, position: usize) -> String {
        self.types
            .get(position)
            .map(|dtype| format!("{dtype:?}"))
            .unwrap_or_default()
    }

    /// Gives every stretch of rows to `each`, in order, with the columns at `positions` in that order.
    ///
    /// # Errors
    /// What `each` returns, a column of an unreadable type, or bytes that polars cannot parse.
    pub fn for_each(
        &self,
        positions: &[usize],
        mut each: impl FnMut(DataFrame) -> Result<(), ReadError>,
    ) -> Result<(), ReadError> {
        if let Some(&position) = positions.iter().find(|&&position| !self.readable(position)) {
            return Err(ReadError::Data(Problem::of_file(
                self.name.clone(),
                format!(
                    "column {:?} is of type {}, which is not read",
                    self.raw_headers[position],
                    self.type_name(position)
                ),
                "store names as text or integers, and times and other numbers as 64-bit floats",
            )));
        }
        if self.parquet {
            self.parquet_rows(positions, each)
        } else {
            let names: Vec<String> = positions.iter().map(|&at| self.raw_headers[at].clone()).collect();
            let frame = guarded(&self.name, damaged(false), || {
                IpcReader::new(Cursor::new(self.bytes.as_slice()))
                    .with_columns(Some(names.clone()))
                    .set_rechunk(false)
                    .finish()?
                    .select(names)
            })?;
            each(frame)
        }
    }

    fn parquet_rows(
        &self,
        positions: &[usize],
        mut each: impl FnMut(DataFrame) -> Result<(), ReadError>,
    ) -> Result<(), ReadError> {
        let names: Vec<String> = positions.iter().map(|&at| self.raw_headers[at].clone()).collect();
        let metadata = guarded(&self.name, damaged(true), || {
            ParquetReader::new(Cursor::new(self.bytes.as_slice()))
                .get_metadata()
                .cloned()
        })?;
        let groups: Vec<usize> = metadata.row_groups.iter().map(|group| group.num_rows()).collect();
        let (mut start, mut next) = (0, 0);
        while next < groups.len() {
            let (mut rows, mut taken) = (0, 0);
            while next < groups.len() {
                // Two row groups at a time keep two threads busy where groups are large.
                let limit = if taken < 2 { 4 * ROWS } else { ROWS };
                if taken > 0 && rows + groups[next] > limit {
                    break;
                }
                rows += groups[next];
                taken += 1;
                next += 1;
            }
            if rows == 0 {
                continue;
            }
            let frame = guarded(&self.name, damaged(true), || {
                let mut reader = ParquetReader::new(Cursor::new(self.bytes.as_slice()));
                reader.set_metadata(metadata.clone());
                reader
                    .with_columns(Some(names.clone()))
                    .with_slice(Some((start, rows)))
                    .read_parallel(ParallelStrategy::RowGroups)
                    .finish()?
                    .select(names.iter().map(String::as_str))
            })?;
            if frame.height() != rows {
                return Err(ReadError::Data(Problem::of_file(
                    self.name.clone(),
                    format!(
                        "is damaged: {} rows where its footer promises {rows}",
                        frame.height()
                    ),
                    "copy or export the file again",
                )));
            }
            start += rows;
            each(frame)?;
        }
        Ok(())
    }
}

fn damaged(parquet: bool) -> &'static str {
    if parquet {
        "the Parquet file is damaged"
    } else {
        "the Arrow file is damaged"
    }
}

fn data(file: &TableFile, what: &str, remedy: &str) -> ReadError {
    ReadError::Data(Problem::of_file(file.name.clone(), what, remedy))
}

const AGAIN: &str = "copy or export the file again";

fn check_parquet(file: &TableFile, bytes: &[u8]) -> Result<(), ReadError> {
    if bytes.starts_with(b"PARE") {
        return Err(data(
            file,
            "is an encrypted Parquet file",
            "export it without encryption",
        ));
    }
    if !bytes.starts_with(b"PAR1") {
        return Err(data(
            file,
            "is not a Parquet file: it does not begin with PAR1",
            "correct its extension, or export it as Parquet",
        ));
    }
    let cut = |why: String| {
        Err(data(
            file,
            &format!("the Parquet file is cut off: {why} ({} bytes)", bytes.len()),
            AGAIN,
        ))
    };
    if bytes.len() < 12 || !bytes.ends_with(b"PAR1") {
        return cut("it does not end with its footer".into());
    }
    let at = bytes.len() - 8;
    let length = u32::from_le_bytes([bytes[at], bytes[at + 1], bytes[at + 2], bytes[at + 3]]) as usize;
    if length + 12 > bytes.len() {
        return cut(format!("its footer claims {length} bytes"));
    }
    Ok(())
}

fn check_arrow(file: &TableFile, bytes: &[u8]) -> Result<(), ReadError> {
    if bytes.starts_with(b"\xff\xff\xff\xff") {
        return Err(data(
            file,
            "is an Arrow stream, not an Arrow file",
            "write it in the IPC file format (Feather version 2)",
        ));
    }
    if !bytes.starts_with(b"ARROW1") {
        return Err(data(
            file,
            "is not an Arrow IPC file: it does not begin with ARROW1",
            "correct its extension, or export it as an Arrow file",
        ));
    }
    let cut = |why: String| {
        Err(data(
            file,
            &format!("the Arrow file is cut off: {why} ({} bytes)", bytes.len()),
            AGAIN,
        ))
    };
    if bytes.len() < 18 || !bytes.ends_with(b"ARROW1") {
        return cut("it does not end with its footer".into());
    }
    let at = bytes.len() - 10;
    let length = u32::from_le_bytes([bytes[at], bytes[at + 1], bytes[at + 2], bytes[at + 3]]) as usize;
    if length + 18 > bytes.len() {
        return cut(format!("its footer claims {length} bytes"));
    }
    Ok(())
}
