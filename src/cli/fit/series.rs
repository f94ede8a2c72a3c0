//! A series from a table: two of its columns, sorted by the first.

use crate::service::intake::csv::split;
use crate::service::shown::Shown;
use std::fs::File;
use std::io::{self, Read};
use std::path::Path;

/// The largest file that is read, bytes; a larger one is refused.
pub const BYTES_MAX: u64 = 64 << 20;
/// Most readings; a longer series is refused, for a curve through more is no better known.
pub const READINGS_MAX: usize = 100_000;
/// Bad rows named one by one; further ones are only counted.
const BAD_ROWS_SHOWN_MAX: usize = 20;

/// Readings in order of age; those of equal age as they stand in the table.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Series {
    /// Ages.
    pub x: Vec<f64>,
    /// Deviations.
    pub y: Vec<f64>,
    /// The first rows that are no readings, each with its line and what is wrong.
    pub bad_rows: Vec<String>,
    /// Further ones.
    pub bad_rows_unnamed: usize,
}

/// Why a file is no series.
#[derive(Debug, thiserror::Error)]
pub enum SeriesError {
    /// The file cannot be read.
    #[error("{0}")]
    Unreadable(#[from] io::Error),
    /// A column is missing or stands twice.
    #[error("the header is \"{header}\"; the column {name} must stand in it once (see --x, --y)")]
    Column {
        /// The header, ready to show.
        header: String,
        /// The column, ready to show.
        name: String,
    },
    /// More bytes than are read.
    #[error("more than {} MiB", BYTES_MAX >> 20)]
    TooLarge,
    /// More readings than are taken.
    #[error("more than {READINGS_MAX} readings; thin the series out first")]
    TooLong,
}

impl Series {
    /// Reads a file, or stdin for `-`.
    pub fn open(path: &Path, x_name: &str, y_name: &str) -> Result<Series, SeriesError> {
        if path.as_os_str() == "-" {
            Series::read(io::stdin().lock(), x_name, y_name)
        } else {
            Series::read(File::open(path)?, x_name, y_name)
        }
    }

    /// Reads a table. A row without two finite numbers is named and left out.
    pub fn read(input: impl Read, x_name: &str, y_name: &str) -> Result<Series, SeriesError> {
        // One byte more than allowed tells a full file from a cut one.
        let mut limited = input.take(BYTES_MAX + 1);
        let mut bytes = Vec::new();
        limited.read_to_end(&mut bytes)?;
        if limited.limit() == 0 {
            return Err(SeriesError::TooLarge);
        }
        let text = String::from_utf8_lossy(&bytes);
        let text = text.strip_prefix('\u{feff}').unwrap_or(&text);
        let mut lines = (1..).zip(text.lines()).filter(|(_, line)| !line.trim().is_empty());
        let header = lines.next().map_or("", |(_, line)| line);
        let (x_at, y_at) = (column(header, x_name)?, column(header, y_name)?);
        let (mut series, mut readings) = (Series::default(), Vec::new());
        for (number, line) in lines {
            match reading(line, (x_at, x_name), (y_at, y_name)) {
                Ok(reading) => readings.push(reading),
                Err(why) => series.note(format!("line {number}: {why}")),
            }
            if readings.len() > READINGS_MAX {
                return Err(SeriesError::TooLong);
            }
        }
        readings.sort_by(|a, b| a.0.total_cmp(&b.0));
        (series.x, series.y) = readings.into_iter().unzip();
        Ok(series)
    }

    fn note(&mut self, bad_row: String) {
        if self.bad_rows.len() < BAD_ROWS_SHOWN_MAX {
            self.bad_rows.push(bad_row);
        } else {
            self.bad_rows_unnamed += 1;
        }
    }

    /// Readings whose age another one shares.
    pub fn sharing_age(&self) -> usize {
        let x = &self.x;
        (0..x.len())
            .filter(|&i| (i > 0 && x[i - 1] >= x[i]) || (i + 1 < x.len() && x[i + 1] <= x[i]))
            .count()
    }
}

/// The place of a column in the header.
fn column(header: &str, name: &str) -> Result<usize, SeriesError> {
    let fields = split(header).unwrap_or_default();
    let mut places = (0..).zip(&fields).filter(|(_, field)| field.trim() == name);
    match (places.next(), places.next()) {
        (Some((at, _)), None) => Ok(at),
        _ => Err(SeriesError::Column {
            header: Shown(header, 200).to_string(),
            name: Shown(name, 80).to_string(),
        }),
    }
}

/// Two numbers of a row, each column by its place and name.
fn reading(line: &str, x: (usize, &str), y: (usize, &str)) -> Result<(f64, f64), String> {
    let fields =
        split(line).ok_or("a quotation mark is not closed, or stands inside a field".to_owned())?;
    let number = |(at, name): (usize, &str)| {
        let text = fields.get(at).map_or("", |field| field.trim());
        let name = Shown(name, 80);
        match text.parse::<f64>() {
            Ok(number) if number.is_finite() => Ok(number),
            _ if text.is_empty() => Err(format!("{name} is missing")),
            _ => Err(format!("{name} is \"{}\", not a finite number", Shown(text, 40))),
        }
    };
    Ok((number(x)?, number(y)?))
}

#[cfg(test)]
mod tests {
    use super::*;

    fn check(table: &str) -> Result<Series, String> {
        Series::read(table.as_bytes(), "x", "y").map_err(|why| why.to_string())
    }

    #[test]
    fn rows_are_sorted_by_age_and_ties_keep_their_order() {
        let series = check("y,t,x\n1,a,3\n2,b,1\n3,c,3\n4,d,2\n").unwrap();
        assert_eq!(
            (series.x.clone(), series.y.clone()),
            (vec![1., 2., 3., 3.], vec![2., 4., 1., 3.])
        );
        assert_eq!(series.sharing_age(), 2);
    }

    #[test]
    fn bad_rows_are_named_with_their_line_and_left_out() {
        let series = check("x,y\n1,2\n\n,3\n4,inf\n5,\u{1b}[2J\n6\n7,8\n").unwrap();
        assert_eq!(series.x, [1.0, 7.0]);
        assert_eq!(
            series.bad_rows,
            [
                "line 4: x is missing",
                "line 5: y is \"inf\", not a finite number",
                "line 6: y is \"\\u{1b}[2J\", not a finite number",
                "line 7: y is missing",
            ]
        );
        let many = check(&format!("x,y\n{}", "a,1\n".repeat(25))).unwrap();
        assert_eq!((many.bad_rows.len(), many.bad_rows_unnamed), (20, 5));
    }

    #[test]
    fn a_missing_or_doubled_column_is_refused_with_the_header() {
        for table in ["a,y\n1,2\n", "x,x,y\n1,1,2\n", ""] {
            let why = check(table).unwrap_err();
            assert!(why.contains("the column x must stand in it once"), "{why}");
        }
    }

    #[test]
    fn a_series_that_is_too_long_is_refused() {
        let why = check(&format!("x,y\n{}", "1,1\n".repeat(READINGS_MAX + 1))).unwrap_err();
        assert_eq!(why, "more than 100000 readings; thin the series out first");
    }
}
