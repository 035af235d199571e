//! CSV and TSV: bytes are checked and unpacked here, then parsed by polars a few megabytes at a time, every column as
//! text, so that a bad value costs its row and can be quoted.

use std::io::{Cursor, Read};
use std::sync::Arc;

use polars::prelude::{
    BooleanChunked, Column, CsvParseOptions, CsvReadOptions, DataFrame, DataType, Field, NewChunkedArray,
    PlSmallStr, Schema, SerReader,
};

use super::batch::has_decimal_comma;
use super::columns::match_headers;
use super::error::{Problem, ReadError};
use super::files::{Format, Packing, TableFile};
use super::guard::guarded;
use super::set_file::{SET_FILE, SetFile};

/// Bytes handed to the parser at a time.
const CHUNK: usize = 8 << 20;

/// Columns beyond the header that are looked at, so that a row with more fields is seen.
const SURPLUS: usize = 3;

/// A text file ready to be parsed.
pub struct TextFile {
    name: String,
    bytes: Vec<u8>,
    separator: u8,
    quoted: bool,
    /// Ends of the stretches to parse; the first stretch starts where the header ends.
    ends: Vec<usize>,
    body: usize,
    /// The headers, trimmed.
    pub headers: Vec<String>,
    /// Whether `[tables]` says that numbers have a decimal comma.
    pub decimal_comma: bool,
}

/// A stretch of rows.
pub struct TextRows {
    /// One column of text a header.
    pub frame: DataFrame,
    /// Rows with more fields than headers, each with the first surplus field.
    pub ragged: Vec<(usize, String)>,
    /// Blank lines left out.
    pub blank: usize,
}

impl TextFile {
    /// Unpacks and checks a file's bytes and reads its header.
    ///
    /// # Errors
    /// `Data`, for everything that makes the file something other than the UTF-8 table its name promises.
    pub fn open(file: &TableFile, raw: Vec<u8>, set: &SetFile) -> Result<Self, ReadError> {
        let Format::Text { tab, packing } = file.format else {
            return Err(data(
                file,
                "is not a text file",
                "this is a fault of halfrise; please report it",
            ));
        };
        let bytes = unpack(file, raw, packing)?;
        check_encoding(file, &bytes)?;
        let separator = match set.tables.separator {
            Some(mark) if !tab => mark.0,
            _ if tab => b'\t',
            _ => b',',
        };
        let decimal_comma = set.tables.decimal.is_some_and(|mark| mark.0 == b',');
        let start = if bytes.starts_with(b"\xef\xbb\xbf") { 3 } else { 0 };
        let blank = bytes[start..]
            .iter()
            .take_while(|b| b.is_ascii_whitespace() && **b != b'\t')
            .count();
        let start = start + blank;
        if start == bytes.len() {
            return Err(data(
                file,
                "holds nothing but blank lines",
                "write the header and the rows",
            ));
        }
        let layout = Layout::of(file, &bytes, start, separator);
        let mut text = Self {
            name: file.name.clone(),
            separator,
            quoted: false,
            ends: Vec::new(),
            body: bytes
                .iter()
                .skip(start)
                .position(|b| *b == b'\n')
                .map_or(bytes.len(), |at| start + at + 1),
            headers: Vec::new(),
            decimal_comma,
            bytes,
        };
        match layout {
            Ok(layout) => {
                text.quoted = layout.quoted;
                text.ends = layout.ends;
                text.body = layout.header_end;
            }
            // Quotes look broken when fields are cut at the wrong mark: that is then the trouble to name.
            Err(broken) => return Err(text.other_separator(file, set, start).unwrap_or(broken)),
        }
        text.headers = text.read_header(start)?;
        text.check_separator(file, set, start)?;
        Ok(text)
    }

    fn read_header(&self, start: usize) -> Result<Vec<String>, ReadError> {
        let line = &self.bytes[start..self.body];
        let columns = line.iter().filter(|&&b| b == self.separator).count() + 1;
        let frame = self.parse(start, self.body, columns)?;
        let mut headers = Vec::with_capacity(columns);
        for column in frame.columns() {
            let field = match column.str() {
                Ok(text) => text.get(0).unwrap_or_default().trim().to_owned(),
                Err(error) => return Err(super::batch::internal(&self.name, &error)),
            };
            headers.push(field);
        }
        while headers.last().is_some_and(String::is_empty) {
            headers.pop();
        }
        Ok(headers)
    }

    /// Names a separator other than the one expected, with the lines that read it.
    fn check_separator(&self, file: &TableFile, set: &SetFile, start: usize) -> Result<(), ReadError> {
        match match_headers(file, &self.headers, set) {
            Ok(_) => Ok(()),
            Err(error) => Err(self.other_separator(file, set, start).unwrap_or(error)),
        }
    }

    /// The error that names another separator, where one makes sense of the header.
    fn other_separator(&self, file: &TableFile, set: &SetFile, start: usize) -> Option<ReadError> {
        let line = String::from_utf8_lossy(&self.bytes[start..self.body]);
        for (separator, name) in [
            (b';', "semicolons"),
            (b'\t', "tabs"),
            (b',', "commas"),
            (b'|', "bars"),
        ] {
            if separator == self.separator {
                continue;
            }
            let headers: Vec<String> = line
                .trim()
                .split(char::from(separator))
                .map(|header| header.trim().trim_matches('"').trim().to_owned())
                .collect();
            if headers.len() < 2 || match_headers(file, &headers, set).is_err() {
                continue;
            }
            let after = &self.bytes[self.body..self.bytes.len().min(self.body + (1 << 16))];
            let comma = String::from_utf8_lossy(after)
                .lines()
                .flat_map(|line| line.split(char::from(separator)))
                .any(|field| has_decimal_comma(field.trim_matches('"')));
            let mut what = format!("its fields are separated by {name}");
            let mut lines = format!("[tables]\nseparator = {:?}", char::from(separator).to_string());
            if comma {
                what.push_str(" and its numbers have decimal commas, as some spreadsheets export them");
                lines.push_str("\ndecimal = \",\"");
            }
            return Some(data(
                file,
                &what,
                &format!("to read it so, add to {SET_FILE}:\n{lines}"),
            ));
        }
        None
    }

    /// Gives every stretch of rows to `each`, in order.
    ///
    /// # Errors
    /// What `each` returns, or bytes that polars cannot parse.
    pub fn for_each(&self, mut each: impl FnMut(TextRows) -> Result<(), ReadError>) -> Result<(), ReadError> {
        let mut start = self.body;
        for &end in &self.ends {
            if end > start {
                each(self.rows(start, end)?)?;
            }
            start = end;
        }
        Ok(())
    }

    fn rows(&self, start: usize, end: usize) -> Result<TextRows, ReadError> {
        // Polars takes a text that begins with x and a control-like byte for a compressed one; a newline before it
        // prevents that and adds one blank line.
        let guard = usize::from(self.bytes[start] == b'x' && start > 0 && self.bytes[start - 1] == b'\n');
        let width = self.headers.len().max(1);
        let mut frame = self.parse(start - guard, end, width + SURPLUS)?;
        let mut blank = 0;
        // A blank line leaves its fields null, save for the blanks it may hold itself.
        let ours = &frame.columns()[..width];
        if width == 1
            || ours
                .first()
                .into_iter()
                .chain(ours.last())
                .any(|column| column.null_count() > 0)
        {
            let height = frame.height();
            let mut keep = vec![false; height];
            for column in frame.columns() {
                if column.null_count() == height {
                    continue;
                }
                let text = column
                    .str()
                    .map_err(|error| super::batch::internal(&self.name, &error))?;
                for (keep, field) in keep.iter_mut().zip(text.iter()) {
                    *keep = *keep || field.is_some_and(|field| !field.trim().is_empty());
                }
            }
            blank = keep.iter().filter(|keep| !**keep).count();
            if blank > 0 {
                let mask = BooleanChunked::from_slice(PlSmallStr::from_static("keep"), &keep);
                frame = frame
                    .filter(&mask)
                    .map_err(|error| super::batch::internal(&self.name, &error))?;
            }
        }
        let mut ragged = Vec::new();
        for column in &frame.columns()[width..] {
            if column.null_count() == frame.height() {
                continue;
            }
            let text = column
                .str()
                .map_err(|error| super::batch::internal(&self.name, &error))?;
            for (row, field) in text.iter().enumerate() {
                if let Some(field) = field
                    && !field.trim().is_empty()
                {
                    ragged.push((row, field.to_owned()));
                }
            }
        }
        ragged.sort_by_key(|(row, _)| *row);
        ragged.dedup_by_key(|(row, _)| *row);
        let columns: Vec<Column> = frame.columns()[..width].to_vec();
        let frame = DataFrame::new(frame.height(), columns)
            .map_err(|error| super::batch::internal(&self.name, &error))?;
        Ok(TextRows {
            frame,
            ragged,
            blank: blank - guard.min(blank),
        })
    }

    /// Bytes parsed by polars into `width` columns of text, missing fields null.
    fn parse(&self, start: usize, end: usize, width: usize) -> Result<DataFrame, ReadError> {
        let schema: Schema = (0..width)
            .map(|i| Field::new(PlSmallStr::from_string(i.to_string()), DataType::String))
            .collect();
        let options = CsvReadOptions::default()
            .with_has_header(false)
            .with_schema(Some(Arc::new(schema)))
            .with_infer_schema_length(Some(0))
            .with_raise_if_empty(false)
            .with_rechunk(false)
            .with_parse_options(
                CsvParseOptions::default()
                    .with_separator(self.separator)
                    .with_quote_char(self.quoted.then_some(b'"'))
                    .with_truncate_ragged_lines(true),
            );
        let bytes = &self.bytes[start..end];
        guarded(&self.name, "is not a table of separated text", || {
            options.into_reader_with_file_handle(Cursor::new(bytes)).finish()
        })
    }
}

fn data(file: &TableFile, what: &str, remedy: &str) -> ReadError {
    ReadError::Data(Problem::of_file(file.name.clone(), what, remedy))
}

fn unpack(file: &TableFile, raw: Vec<u8>, packing: Packing) -> Result<Vec<u8>, ReadError> {
    if packing == Packing::Plain {
        return Ok(raw);
    }
    let mut bytes = Vec::with_capacity(raw.len().saturating_mul(4));
    let (name, outcome) = match packing {
        Packing::Gzip => (
            "gzip",
            flate2::read::MultiGzDecoder::new(raw.as_slice()).read_to_end(&mut bytes),
        ),
        _ => (
            "zstd",
            zstd::stream::read::Decoder::new(raw.as_slice())
                .and_then(|mut decoder| decoder.read_to_end(&mut bytes)),
        ),
    };
    match outcome {
        Ok(_) if bytes.is_empty() => Err(data(
            file,
            &format!("the {name} archive is empty"),
            "write the header and the rows",
        )),
        Ok(_) => Ok(bytes),
        Err(error)
            if error.kind() == std::io::ErrorKind::UnexpectedEof
                || error.to_string().contains("incomplete") =>
        {
            Err(data(
                file,
                &format!(
                    "the {name} file is cut off: it ends before its data do ({} bytes)",
                    raw.len()
                ),
                "copy or export the file again",
            ))
        }
        Err(error) => Err(data(
            file,
            &format!("is not a valid {name} file: {error}"),
            "pack the file again, or correct its extension",
        )),
    }
}

/// Refuses bytes that are no UTF-8 text, and says what they probably are.
fn check_encoding(file: &TableFile, bytes: &[u8]) -> Result<(), ReadError> {
    const AS_UTF8: &str = "save it again as UTF-8 (in a spreadsheet: \"CSV UTF-8\")";
    for (magic, what) in [
        (&b"PAR1"[..], "a Parquet file"),
        (b"ARROW1", "an Arrow file"),
        (b"\x1f\x8b", "a gzip file"),
        (b"\x28\xb5\x2f\xfd", "a zstd file"),
        (b"PK\x03\x04", "a zip archive or a spreadsheet workbook"),
        (b"\xd0\xcf\x11\xe0", "an old spreadsheet workbook"),
        (b"\x89HDF", "an HDF5 file"),
    ] {
        if bytes.starts_with(magic) {
            return Err(data(
                file,
                &format!("is {what}, not text (byte offset 0)"),
                "give it its own extension, or export the table as CSV",
            ));
        }
    }
    if bytes.starts_with(b"\xff\xfe") || bytes.starts_with(b"\xfe\xff") {
        return Err(data(
            file,
            "is UTF-16 text (byte order mark at byte offset 0)",
            AS_UTF8,
        ));
    }
    if let Some(offset) = bytes.iter().position(|&b| b == 0) {
        let head = &bytes[..bytes.len().min(4096)];
        let (even, odd) = (
            head.iter().step_by(2).filter(|&&b| b == 0).count(),
            head.iter().skip(1).step_by(2).filter(|&&b| b == 0).count(),
        );
        // In UTF-16 nearly every second byte of plain text is zero.
        if even.max(odd) * 5 > head.len() * 2 && even.min(odd) * 20 < head.len() {
            return Err(data(
                file,
                &format!("looks like UTF-16 text (zero bytes from byte offset {offset})"),
                AS_UTF8,
            ));
        }
        return Err(data(
            file,
            &format!("is not text: a zero byte at byte offset {offset}"),
            "give a binary file its own extension, or export the table as CSV",
        ));
    }
    if let Err(error) = std::str::from_utf8(bytes) {
        let offset = error.valid_up_to();
        let byte = bytes.get(offset).copied().unwrap_or_default();
        return Err(data(
            file,
            &format!(
                "is not UTF-8 text: byte 0x{byte:02x} at byte offset {offset}; it may be Latin-1 (Windows-1252)"
            ),
            AS_UTF8,
        ));
    }
    if !bytes.contains(&b'\n') && bytes.contains(&b'\r') {
        return Err(data(
            file,
            "has carriage returns as line ends",
            "save it again with line ends LF or CRLF",
        ));
    }
    Ok(())
}

/// Where records end, found in one pass.
struct Layout {
    header_end: usize,
    ends: Vec<usize>,
    /// Whether quotes enclose fields; without any such field a quote is a character like others.
    quoted: bool,
}

impl Layout {
    fn of(file: &TableFile, bytes: &[u8], start: usize, separator: u8) -> Result<Self, ReadError> {
        if bytes[start..].contains(&b'"') {
            Self::with_quotes(file, bytes, start, separator)
        } else {
            Ok(Self::without_quotes(bytes, start))
        }
    }

    /// Every newline ends a record.
    fn without_quotes(bytes: &[u8], start: usize) -> Self {
        let next = |from: usize| {
            bytes[from..]
                .iter()
                .position(|&b| b == b'\n')
                .map_or(bytes.len(), |at| from + at + 1)
        };
        let header_end = next(start);
        let mut ends = Vec::new();
        let mut at = header_end;
        while at < bytes.len() {
            at = next((at + CHUNK).min(bytes.len()));
            ends.push(at);
        }
        Self {
            header_end,
            ends,
            quoted: false,
        }
    }

    /// Follows RFC 4180 byte by byte: a quote opens a field only at its start, and is doubled within.
    fn with_quotes(file: &TableFile, bytes: &[u8], start: usize, separator: u8) -> Result<Self, ReadError> {
        #[derive(PartialEq)]
        enum State {
            FieldStart,
            Plain,
            Quoted,
            AfterQuote,
        }
        let mut state = State::FieldStart;
        let (mut header_end, mut ends) = (None, Vec::new());
        // Record numbers as the user counts them: 0 is the header, blank lines do not count.
        let (mut record, mut opened, mut record_start) = (0_u64, 0_u64, start);
        let (mut any_quoted, mut first_stray, mut broken) = (false, None, None);
        let mut last_end = start;
        for (at, &byte) in bytes.iter().enumerate().skip(start) {
            state = match (state, byte) {
                (State::FieldStart, b'"') => {
                    any_quoted = true;
                    opened = record;
                    State::Quoted
                }
                (State::Quoted, b'"') => State::AfterQuote,
                (State::Quoted, _) | (State::AfterQuote, b'"') => State::Quoted,
                (_, b'\n') => {
                    let is_blank = bytes[record_start..at]
                        .iter()
                        .all(|&b| matches!(b, b'\r' | b' ' | b'\t') || b == separator);
                    record += u64::from(!is_blank || header_end.is_none());
                    record_start = at + 1;
                    if header_end.is_none() {
                        header_end = Some(at + 1);
                        last_end = at + 1;
                    } else if at + 1 - last_end >= CHUNK {
                        ends.push(at + 1);
                        last_end = at + 1;
                    }
                    State::FieldStart
                }
                (_, byte) if byte == separator => State::FieldStart,
                (State::AfterQuote, b'\r') => State::AfterQuote,
                (State::AfterQuote, _) => {
                    broken = broken.or(Some(record));
                    State::Plain
                }
                (_, b'"') => {
                    first_stray = first_stray.or(Some(record));
                    State::Plain
                }
                _ => State::Plain,
            };
        }
        let header_end = header_end.unwrap_or(bytes.len());
        if last_end < bytes.len() {
            ends.push(bytes.len());
        }
        if state == State::Quoted {
            broken = broken.or(Some(opened));
        }
        if any_quoted && let Some(record) = broken.or(first_stray) {
            let problem = Problem::of_file(
                file.name.clone(),
                "the quotes do not pair up: a quote opens or closes within a field, or is never closed",
                "enclose such a field in quotes and double the quotes within: \"a \"\"b\"\" c\"",
            );
            return Err(ReadError::Data(if record == 0 {
                problem
            } else {
                problem.at_row(record)
            }));
        }
        Ok(Self {
            header_end,
            ends,
            quoted: any_quoted,
        })
    }
}
