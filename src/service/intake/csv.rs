//! Readings from a table: `time,channel,value` and, where there are such columns, `reference`,
//! `quality`, in any order; other columns are not read.
//!
//! One line is one row: a stray quotation mark costs its own line, not the rest of the file. A bad row
//! is a [`Refusal`] with its line number, never the end. Only a header without a needed column, or an
//! input that cannot be read on, ends the reading.
//!
//! The deviation of a row: value minus `reference` where the row has one; else minus the watch's
//! constant reference; else the value is the deviation already. A watch that takes its reference from
//! each payload needs one in each row too.
//!
//! `quality` is good when empty, `good`, `ok` or `192` (OPC's code); a row with another is refused.

use super::payload::{NUMBER_BYTES_MAX, means_no_value, read_number};
use super::refusal::{Excerpt, Refusal, RowFault};
use super::route::{Decoded, Reference, Router, check_channel, deviation};
use crate::service::settings::time::{TimeFault, read_time};
use crate::service::shown::{Shown, shown_bytes};
use flate2::read::MultiGzDecoder;
use std::io::{self, BufRead, BufReader, Read};

/// The longest line, bytes; the rest of a longer one is skipped.
pub const LINE_BYTES_MAX: usize = 4096;

/// The columns that are read: name, whether it is needed.
const COLUMNS: [(&str, bool); 5] =
    [("time", true), ("channel", true), ("value", true), ("reference", false), ("quality", false)];
const TIME: usize = 0;
const CHANNEL: usize = 1;
const VALUE: usize = 2;
const REFERENCE: usize = 3;
const QUALITY: usize = 4;

/// Why the reading of a table ends before its end.
#[derive(Debug, thiserror::Error)]
pub enum CsvError {
    /// The header lacks columns.
    #[error(
        "the header is {found}; needed: columns time, channel and value, separated by commas (missing: {missing})"
    )]
    Header {
        /// The first line, ready to show.
        found: String,
        /// The columns that are missing.
        missing: String,
    },
    /// A column stands twice in the header.
    #[error("the header has the column {name} twice")]
    ColumnTwice {
        /// Its name.
        name: &'static str,
    },
    /// The input cannot be read on; a damaged `.gz` is one cause.
    #[error("cannot read on after line {line}: {source}")]
    Unreadable {
        /// The last line that was read.
        line: u64,
        /// What the system says.
        source: io::Error,
    },
}

/// One row of the table.
#[derive(Clone, Debug, PartialEq)]
pub struct CsvRow {
    /// Its line, from 1; the header is line 1 of most files.
    pub line: u64,
    /// The watch, by its index in the settings, and the reading; or why it is none.
    pub outcome: Result<(usize, Decoded), Refusal>,
}

/// The rows of a table, one after another; after an error there are no more.
pub struct CsvReadings<'r> {
    router: &'r Router,
    lines: Lines,
    /// For each of [`COLUMNS`] its place in a row.
    places: [Option<usize>; 5],
    columns: usize,
    ended: bool,
}

impl<'r> CsvReadings<'r> {
    /// Opens a table and reads its header.
    ///
    /// # Arguments
    /// `input` — the bytes, compressed with gzip or not, as their first two bytes tell; `router` —
    /// gives each channel its watch.
    pub fn open(input: impl Read + 'static, router: &'r Router) -> Result<Self, CsvError> {
        let unreadable = |source| CsvError::Unreadable { line: 0, source };
        let mut input = BufReader::new(input);
        let compressed = starts_gzip(&mut input).map_err(unreadable)?;
        let input: Box<dyn BufRead> = if compressed {
            Box::new(BufReader::new(MultiGzDecoder::new(input)))
        } else {
            Box::new(input)
        };
        let mut lines = Lines { input, buffer: Vec::new(), bytes: 0, number: 0 };
        let header = loop {
            match lines.next().map_err(unreadable)? {
                Some(line) if line.trim_ascii().is_empty() => {}
                Some(line) => break line.strip_prefix(b"\xef\xbb\xbf").unwrap_or(line),
                None => break b"",
            }
        };
        let (places, columns) = read_header(header)?;
        Ok(CsvReadings { router, lines, places, columns, ended: false })
    }
}

impl Iterator for CsvReadings<'_> {
    type Item = Result<CsvRow, CsvError>;

    fn next(&mut self) -> Option<Self::Item> {
        if self.ended {
            return None;
        }
        loop {
            match self.lines.next() {
                Ok(Some(line)) if line.trim_ascii().is_empty() => continue,
                Ok(Some(_)) => {}
                Ok(None) => {
                    self.ended = true;
                    return None;
                }
                Err(source) => {
                    self.ended = true;
                    return Some(Err(CsvError::Unreadable { line: self.lines.number, source }));
                }
            }
            let bytes = self.lines.bytes;
            let outcome = if bytes > LINE_BYTES_MAX {
                Err(Refusal::TooLong { bytes, most: LINE_BYTES_MAX })
            } else {
                read_row(&self.lines.buffer, &self.places, self.columns, self.router)
            };
            return Some(Ok(CsvRow { line: self.lines.number, outcome }));
        }
    }
}

/// Whether the input starts as gzip does (RFC 1952, section 2.3.1), even when it comes byte by byte.
fn starts_gzip(input: &mut BufReader<impl Read + 'static>) -> io::Result<bool> {
    // `fill_buf` shows at least one byte unless the input is empty; 0x1f begins no text.
    Ok(input.fill_buf()?.first() == Some(&0x1f))
}

fn read_header(header: &[u8]) -> Result<([Option<usize>; 5], usize), CsvError> {
    let text = String::from_utf8_lossy(header);
    let fields = split(&text).unwrap_or_default();
    let mut places = [None; 5];
    for (at, field) in fields.iter().enumerate() {
        let name = field.trim().to_ascii_lowercase();
        if let Some(column) = COLUMNS.iter().position(|(known, _)| *known == name)
            && places[column].replace(at).is_some()
        {
            return Err(CsvError::ColumnTwice { name: COLUMNS[column].0 });
        }
    }
    let missing: Vec<&str> = COLUMNS
        .iter()
        .zip(places)
        .filter(|((_, needed), place)| *needed && place.is_none())
        .map(|((name, _), _)| *name)
        .collect();
    if missing.is_empty() {
        return Ok((places, fields.len()));
    }
    let found = match header {
        [] => "missing, as the table is empty".to_owned(),
        line => format!("\"{}\"", shown_bytes(line, 80)),
    };
    Err(CsvError::Header { found, missing: missing.join(", ") })
}

fn read_row(
    line: &[u8],
    places: &[Option<usize>; 5],
    columns: usize,
    router: &Router,
) -> Result<(usize, Decoded), Refusal> {
    let text = std::str::from_utf8(line).map_err(|error| Refusal::NotUtf8 {
        at: error.valid_up_to(),
        excerpt: Excerpt::of_bytes(line),
    })?;
    let fields = split(text).ok_or(Refusal::BadRow { fault: RowFault::Quotation })?;
    if fields.len() != columns {
        let fault = RowFault::Fields { found: fields.len(), needed: columns };
        return Err(Refusal::BadRow { fault });
    }
    let field = |column: usize| places[column].map_or("", |at| fields[at].trim());
    let channel = field(CHANNEL);
    check_channel(channel)?;
    let Some(watch) = router.watch_for_channel(channel) else {
        return Err(Refusal::NoMatchingWatch { name: Excerpt::of(channel) });
    };
    let quality = field(QUALITY);
    if !["", "good", "ok", "192"].iter().any(|good| quality.eq_ignore_ascii_case(good)) {
        return Err(Refusal::BadQuality { excerpt: Excerpt::of(quality) });
    }
    let time = field(TIME);
    let time = read_time(time).map_err(|fault| match fault {
        TimeFault::OutsideYears => Refusal::TimeImplausible { excerpt: Excerpt::of(time) },
        fault => Refusal::BadTime { excerpt: Excerpt::of(time), fault },
    })?;
    let value = read_cell(field(VALUE))?;
    let reference = match (field(REFERENCE), &router.route_of(watch).reference) {
        ("", Reference::Constant(constant)) => Some(*constant),
        ("", Reference::None) => None,
        ("", Reference::Pointer(_)) => return Err(Refusal::NoReference),
        (cell, _) => Some(read_cell(cell)?),
    };
    let deviation = deviation(value, reference)?;
    Ok((watch, Decoded { channel: channel.to_owned(), time, own_time: true, deviation }))
}

/// A number of a table: as JSON has it, and also `+4`, `.5` and `4.`, which other programs write.
fn read_cell(cell: &str) -> Result<f64, Refusal> {
    if cell.is_empty() || means_no_value(cell) {
        return Err(Refusal::BadQuality { excerpt: Excerpt::of(cell) });
    }
    let plain = cell.len() <= NUMBER_BYTES_MAX
        && cell.bytes().all(|b| b.is_ascii_digit() || b"+-.eE".contains(&b));
    match cell.parse::<f64>() {
        Ok(x) if plain && x.is_finite() => Ok(x),
        Ok(_) if plain => Err(Refusal::OutOfRange { excerpt: Excerpt::of(cell) }),
        _ => read_number(cell.as_bytes()),
    }
}

/// The fields of one line, quotation marks taken off (RFC 4180, section 2, within one line); `None`
/// when a quotation mark is not closed or is followed by something else than a comma.
pub(crate) fn split(line: &str) -> Option<Vec<String>> {
    let mut fields = Vec::with_capacity(COLUMNS.len());
    let mut rest = line;
    loop {
        let Some(quoted) = rest.strip_prefix('"') else {
            match rest.split_once(',') {
                Some((field, after)) => {
                    fields.push(field.to_owned());
                    rest = after;
                    continue;
                }
                None => {
                    fields.push(rest.to_owned());
                    return Some(fields);
                }
            }
        };
        let mut field = String::new();
        rest = quoted;
        loop {
            let (part, after) = rest.split_once('"')?;
            field.push_str(part);
            match after.strip_prefix('"') {
                Some(more) => {
                    field.push('"');
                    rest = more;
                }
                None => {
                    rest = after;
                    break;
                }
            }
        }
        fields.push(field);
        match rest.strip_prefix(',') {
            Some(after) => rest = after,
            None => return rest.is_empty().then_some(fields),
        }
    }
}

/// Lines of bounded length.
struct Lines {
    input: Box<dyn BufRead>,
    /// The newest line, without its end.
    buffer: Vec<u8>,
    /// How long the newest line was, its end not counted.
    bytes: usize,
    /// Its number, from 1.
    number: u64,
}

impl Lines {
    fn next(&mut self) -> io::Result<Option<&[u8]>> {
        self.buffer.clear();
        self.bytes = 0;
        let mut any = false;
        loop {
            let chunk = match self.input.fill_buf() {
                Ok(chunk) => chunk,
                Err(error) if error.kind() == io::ErrorKind::Interrupted => continue,
                Err(error) => return Err(error),
            };
            if chunk.is_empty() {
                break;
            }
            if !any {
                any = true;
                self.number += 1;
            }
            let end = chunk.iter().position(|b| *b == b'\n');
            let part = &chunk[..end.unwrap_or(chunk.len())];
            // One byte more than allowed, for the line end of Windows.
            let room = (LINE_BYTES_MAX + 1).saturating_sub(self.buffer.len());
            self.buffer.extend_from_slice(&part[..part.len().min(room)]);
            self.bytes += part.len();
            let used = part.len() + usize::from(end.is_some());
            self.input.consume(used);
            if end.is_some() {
                break;
            }
        }
        if self.buffer.last() == Some(&b'\r') {
            self.buffer.pop();
            self.bytes -= 1;
        }
        Ok(any.then_some(self.buffer.as_slice()))
    }
}

impl std::fmt::Debug for CsvReadings<'_> {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        write!(f, "CsvReadings(after line {})", self.lines.number)
    }
}

/// A bad row in words: where, what and why.
impl std::fmt::Display for CsvRow {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        match &self.outcome {
            Ok((_, reading)) => {
                write!(f, "line {}: {}", self.line, Shown(&reading.channel, 80))
            }
            Err(refusal) => write!(f, "line {}: {refusal}", self.line),
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::service::settings::{Environment, Settings};
    use std::io::{Cursor, Write as _};
    use std::path::Path;

    const SETTINGS: &str = r#"
        site.name = "saltmarsh"
        broker.url = "mqtt://127.0.0.1"
        [[watch]]
        topic = "plant/{area}/{tag}"
        unit = "bar"
        reference = { constant = 4.0 }
        [[watch]]
        topic = "lab/{tag}"
        channel = "lab-{tag}"
        unit = "K"
        [[watch]]
        topic = "field/{tag}"
        channel = "field-{tag}"
        payload = { format = "json", value = "/v" }
        reference = { pointer = "/r" }
        unit = "K"
    "#;

    fn rows(table: &[u8]) -> Vec<String> {
        let environment = Environment::default();
        let settings = Settings::read(SETTINGS, Path::new("test.toml"), &environment).unwrap();
        let router = Router::new(&settings);
        let readings = match CsvReadings::open(Cursor::new(table.to_vec()), &router) {
            Ok(readings) => readings,
            Err(error) => return vec![error.to_string()],
        };
        readings
            .map(|row| match row {
                Ok(CsvRow { line, outcome: Ok((watch, d)) }) => {
                    format!("{line}: {watch} {} {} {}", d.channel, d.time, d.deviation)
                }
                Ok(row) => row.to_string(),
                Err(error) => error.to_string(),
            })
            .collect()
    }

    fn check(table: &str, expected: &[&str]) {
        assert_eq!(rows(table.as_bytes()), expected, "{table}");
    }

    #[test]
    fn rows_become_readings_whatever_the_order_of_columns() {
        check(
            "time,channel,value\n2026-03-01T08:00:00Z,press.PT,4.5\n2026-03-01T09:00:00+01:00,lab-7,-1e-3\n",
            &["2: 0 press.PT 2026-03-01T08:00:00Z 0.5", "3: 1 lab-7 2026-03-01T08:00:00Z -0.001"],
        );
        check(
            "\u{feff}Value, Channel ,note,TIME\r\n.5,lab-7,\"a, \"\"b\"\"\",2026-03-01T08:00:00Z",
            &["2: 1 lab-7 2026-03-01T08:00:00Z 0.5"],
        );
    }

    #[test]
    fn a_reference_in_the_row_goes_before_the_setting() {
        check(
            "time,channel,value,reference\n\
             2026-03-01T08:00:00Z,press.PT,4.5,3.5\n\
             2026-03-01T08:00:00Z,press.PT,4.5,\n\
             2026-03-01T08:00:00Z,lab-7,4.5,\n\
             2026-03-01T08:00:00Z,field-7,4.5,4\n\
             2026-03-01T08:00:00Z,field-7,4.5,\n",
            &[
                "2: 0 press.PT 2026-03-01T08:00:00Z 1",
                "3: 0 press.PT 2026-03-01T08:00:00Z 0.5",
                "4: 1 lab-7 2026-03-01T08:00:00Z 4.5",
                "5: 2 field-7 2026-03-01T08:00:00Z 0.5",
                "line 6: no reference; this watch needs one with each reading",
            ],
        );
    }

    #[test]
    fn rows_of_bad_quality_are_refused() {
        let not_valid = "the sender marks the value as not valid:";
        check(
            "time,channel,value,quality\n\
             2026-03-01T08:00:00Z,lab-7,1,\n\
             2026-03-01T08:00:00Z,lab-7,1,GOOD\n\
             2026-03-01T08:00:00Z,lab-7,1,192\n\
             2026-03-01T08:00:00Z,lab-7,1,0\n\
             2026-03-01T08:00:00Z,lab-7,,good\n\
             2026-03-01T08:00:00Z,lab-7,NaN,good\n",
            &[
                "2: 1 lab-7 2026-03-01T08:00:00Z 1",
                "3: 1 lab-7 2026-03-01T08:00:00Z 1",
                "4: 1 lab-7 2026-03-01T08:00:00Z 1",
                &format!("line 5: {not_valid} \"0\""),
                &format!("line 6: {not_valid} \"\""),
                &format!("line 7: {not_valid} \"NaN\""),
            ],
        );
    }

    #[test]
    fn a_bad_row_costs_its_own_line_only() {
        check(
            "time,channel,value\n\
             2026-03-01T08:00:00,lab-7,1\n\
             \n\
             2026-03-01T08:00:00Z,attic,1\n\
             2026-03-01T08:00:00Z,lab-7\n\
             2026-03-01T08:00:00Z,\"lab-7,1\n\
             2026-03-01T08:00:00Z,lab-7,1;5\n\
             2026-03-01T08:00:00Z,lab-7,1e999\n\
             1970-01-01T00:00:00Z,lab-7,1\n\
             2026-03-01T08:00:00Z,lab-7,1\n",
            &[
                "line 2: the time \"2026-03-01T08:00:00\" is not accepted: it has no offset from UTC; needed: RFC 3339 with offset, or s, ms, µs or ns since 1970",
                "line 4: no watch covers \"attic\"",
                "line 5: not a row of the table: 2 fields where the header has 3",
                "line 6: not a row of the table: a quotation mark is not closed on its line",
                "line 7: \"1;5\" is not a number; one JSON number such as 0.125 is needed",
                "line 8: \"1e999\" is beyond the range of a double, 1.8e308",
                "line 9: the time \"1970-01-01T00:00:00Z\" is outside 1978 to 2100 in s, ms, µs and ns",
                "10: 1 lab-7 2026-03-01T08:00:00Z 1",
            ],
        );
    }

    #[test]
    fn a_line_without_end_is_not_kept_whole() {
        let long = "x".repeat(1 << 20);
        check(
            &format!("time,channel,value\n{long}\n2026-03-01T08:00:00Z,lab-7,1"),
            &["line 2: 1048576 bytes; at most 4096 are read", "3: 1 lab-7 2026-03-01T08:00:00Z 1"],
        );
    }

    #[test]
    fn a_header_without_a_needed_column_says_what_is_there_and_what_is_not() {
        let needed = "needed: columns time, channel and value, separated by commas";
        check(
            "time;channel;value\n",
            &[&format!(
                "the header is \"time;channel;value\"; {needed} (missing: time, channel, value)"
            )],
        );
        check(
            "time,tag,value\n",
            &[&format!("the header is \"time,tag,value\"; {needed} (missing: channel)")],
        );
        check(
            "",
            &[&format!(
                "the header is missing, as the table is empty; {needed} (missing: time, channel, value)"
            )],
        );
        check("time,channel,value,time\n", &["the header has the column time twice"]);
    }

    #[test]
    fn a_compressed_table_is_read_as_the_table_itself() {
        let table = b"time,channel,value\n2026-03-01T08:00:00Z,lab-7,1\n";
        let mut zip = flate2::write::GzEncoder::new(Vec::new(), flate2::Compression::fast());
        zip.write_all(table).unwrap();
        let zipped = zip.finish().unwrap();
        assert_eq!(rows(&zipped), rows(table));
        let cut = rows(&zipped[..zipped.len() - 9]);
        assert!(cut.last().unwrap().starts_with("cannot read on after line"), "{cut:?}");
    }
}
