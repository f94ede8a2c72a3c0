//! `asfound fit`: one look at one series. Every family that the data allow, best first.
//!
//! Plain least squares, the classical tests, Student's t: what people cross-check with other programs.
//! The watch fits robustly and judges differently.

pub mod look;
pub mod series;
pub mod table;

use crate::cli::check::{EXIT_DONE, EXIT_FAILED, EXIT_WRONG_USE};
use crate::drift::family::Family;
use series::Series;
use std::io::{self, Write};
use std::path::PathBuf;

/// Fit drift curves to one series and say what they are worth
#[derive(clap::Args, Clone, Debug)]
pub struct FitArgs {
    /// The series: CSV with a header; - is stdin
    #[arg(value_name = "FILE.csv")]
    pub file: PathBuf,
    /// Only this family; may be given several times
    #[arg(long, value_name = "NAME", value_parser = family)]
    pub family: Vec<Family>,
    /// Also the curve and the interval of a new reading at this x; may be given several times
    #[arg(long, value_name = "X", value_parser = number, allow_hyphen_values = true)]
    pub at: Vec<f64>,
    /// The column with the ages
    #[arg(long, value_name = "NAME", default_value = "x")]
    pub x: String,
    /// The column with the deviations
    #[arg(long, value_name = "NAME", default_value = "y")]
    pub y: String,
    /// Print JSON
    #[arg(long)]
    pub json: bool,
}

fn family(name: &str) -> Result<Family, String> {
    Family::from_name(name)
        .ok_or_else(|| format!("one of {}", Family::ALL.map(Family::name).join(", ")))
}

fn number(text: &str) -> Result<f64, String> {
    match text.trim().parse::<f64>() {
        Ok(number) if number.is_finite() => Ok(number),
        _ => Err("a finite number is needed".to_owned()),
    }
}

/// Runs the command. Returns the exit code.
///
/// # Outcomes
/// 0: the series was read; families that could not be had say why. 1: the output cannot be written.
/// 2: the file cannot be read as a series.
pub fn fit(args: &FitArgs, out: &mut dyn Write, err: &mut dyn Write) -> u8 {
    // A reader that went away, such as `head`, is no reason for words that nobody sees.
    run(args, out, err).unwrap_or(EXIT_FAILED)
}

fn run(args: &FitArgs, out: &mut dyn Write, err: &mut dyn Write) -> io::Result<u8> {
    let series = match Series::open(&args.file, &args.x, &args.y) {
        Ok(series) => series,
        Err(why) => {
            writeln!(err, "{}: {why}", args.file.display())?;
            return Ok(EXIT_WRONG_USE);
        }
    };
    for bad in &series.bad_rows {
        writeln!(err, "{bad}")?;
    }
    if series.bad_rows_unnamed > 0 {
        writeln!(err, "and {} more rows that are no readings", series.bad_rows_unnamed)?;
    }
    let families = if args.family.is_empty() { &Family::ALL[..] } else { &args.family };
    let look = look::look(&series.x, &series.y, families, &args.at);
    if args.json {
        serde_json::to_writer_pretty(&mut *out, &look.json())?;
        writeln!(out)?;
    } else {
        table::write(&look, &series, out)?;
    }
    Ok(EXIT_DONE)
}
