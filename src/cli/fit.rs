//! `asfound fit`: one look at one series. Every family that the data allow, best first.
//!
//! Plain least squares, the classical tests, Student's t: what people cross-check with other programs.
//! The watch fits robustly and judges differently.

pub mod look;
pub mod plot;
pub mod save;
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
    /// Also draw readings, curves and residuals into this file; one that is there is replaced
    #[arg(long, value_name = "OUT.svg", value_parser = picture)]
    pub plot: Option<PathBuf>,
}

fn family(name: &str) -> Result<Family, String> {
    Family::from_name(name)
        .ok_or_else(|| format!("one of {}", Family::ALL.map(Family::name).join(", ")))
}

fn picture(path: &str) -> Result<PathBuf, String> {
    match path {
        "-" => Err("a file is needed; stdout has the numbers".to_owned()),
        path => Ok(path.into()),
    }
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
/// 0: the series was read; families that could not be had say why. 1: the output or the picture cannot
/// be written.
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
    let mut asked: Vec<Family> = Vec::new();
    for &family in &args.family {
        if !asked.contains(&family) {
            asked.push(family);
        }
    }
    let families = if asked.is_empty() { &Family::ALL[..] } else { &asked[..] };
    let look = look::look(&series.x, &series.y, families, &args.at);
    // First, for a reader of the numbers may go away early.
    let mut code = EXIT_DONE;
    if let Some(path) = &args.plot {
        let names = plot::Names { x: &args.x, y: &args.y };
        if let Err(why) = save::save(path, &plot::svg(&look, &series, names), &args.file) {
            writeln!(err, "{}: the picture cannot be written: {why}", path.display())?;
            code = EXIT_FAILED;
        }
    }
    if args.json {
        serde_json::to_writer_pretty(&mut *out, &look.json())?;
        writeln!(out)?;
    } else {
        table::write(&look, &series, out)?;
    }
    Ok(code)
}

#[cfg(test)]
mod tests {
    use super::*;
    use clap::Parser;

    #[derive(Debug, Parser)]
    struct Line {
        #[command(flatten)]
        args: FitArgs,
    }

    /// Six readings of NIST StRD's DanWood, US public domain, rows out of order.
    const DANWOOD: &str = "x,y\n1.309,2.138\n1.680,5.660\n1.471,3.421\n1.490,3.597\n\
                           1.565,4.340\n1.611,4.882\n";

    /// Runs the command on a table: (exit code, output, errors).
    fn check(table: &str, options: &[&str]) -> (u8, String, String) {
        let folder = tempfile::tempdir().unwrap();
        let file = folder.path().join("series.csv");
        std::fs::write(&file, table).unwrap();
        let words = ["fit", file.to_str().unwrap()].into_iter().chain(options.iter().copied());
        let args = Line::try_parse_from(words).unwrap().args;
        let (mut out, mut err) = (Vec::new(), Vec::new());
        let code = fit(&args, &mut out, &mut err);
        let folder = format!("{}/", folder.path().display());
        let text = |bytes| String::from_utf8(bytes).unwrap().replace(&folder, "");
        (code, text(out), text(err))
    }

    fn json(table: &str, options: &[&str]) -> serde_json::Value {
        let (code, out, err) = check(table, &[options, &["--json"]].concat());
        assert_eq!((code, err.as_str()), (EXIT_DONE, ""));
        serde_json::from_str(&out).unwrap()
    }

    #[test]
    fn reference_strd_danwood_in_json() {
        let look = json(DANWOOD, &["--family", "power", "--at", "1.49", "--at", "2"]);
        assert_eq!((&look["n"], &look["chosen"]), (&6.into(), &"power".into()));
        let fit = &look["fits"][0];
        // NIST StRD, DanWood: certified values.
        for (path, want) in [
            ("/coefficients/a", 7.688_622_617_6e-1),
            ("/coefficients/b", 3.860_405_587_1),
            ("/standard_errors/a", 1.828_197_386_0e-2),
            ("/standard_errors/b", 5.172_661_091_3e-2),
            ("/residual_ss", 4.317_308_408_3e-3),
            ("/residual_sd", 3.285_311_403_9e-2),
        ] {
            let got = fit.pointer(path).and_then(serde_json::Value::as_f64).unwrap();
            assert!((got / want - 1.0).abs() < 1e-9, "{path}: {got} against {want}");
        }
        let (near, far) = (&fit["predictions"][0], &fit["predictions"][1]);
        assert_eq!((&near["extrapolated"], &far["extrapolated"]), (&false.into(), &true.into()));
        assert!(
            near["low"].as_f64() < near["y"].as_f64() && near["y"].as_f64() < near["high"].as_f64()
        );
        assert_eq!(fit["form"], "y = a * x^b");
        assert!(fit["residual_tests"]["durbin_watson"]["statistic"].is_number());
    }

    #[test]
    fn every_family_is_fitted_or_says_why_not() {
        let look = json("x,y\n0,1\n1,2.1\n2,2.9\n3,4.2\n4,4.8\n5,6.1\n6,7.0\n7,7.9\n", &[]);
        let names = |list: &str, key: &str| -> Vec<String> {
            let list = look[list].as_array().unwrap();
            list.iter().map(|entry| entry[key].as_str().unwrap().to_owned()).collect()
        };
        let (fits, not) = (names("fits", "family"), names("not_fitted", "family"));
        assert_eq!(fits.len() + not.len(), Family::ALL.len());
        assert_eq!((fits[0].as_str(), &look["chosen"]), ("linear", &"linear".into()));
        let why = "age must be above 0; 1 of 8 are not";
        assert_eq!(names("not_fitted", "why").iter().filter(|&w| w == why).count(), 3);
    }

    #[test]
    fn a_family_that_cannot_be_had_leaves_no_fit_and_exit_code_0() {
        let look = json("x,y\n1,1\n2,1\n", &["--family", "cubic"]);
        assert_eq!((&look["fits"], &look["chosen"]), (&serde_json::json!([]), &().into()));
        assert_eq!(look["not_fitted"][0]["why"], "2 readings found, at least 5 needed");
        assert_eq!(json("x,y\n", &[])["n"], 0);
    }

    #[test]
    fn the_table_says_what_is_chosen_and_why() {
        let (code, out, err) = check(DANWOOD, &["--at", "-1", "--at", "2"]);
        assert_eq!((code, err.as_str()), (EXIT_DONE, ""));
        for words in [
            "6 readings, x 1.309 to 1.68\nchosen: power, ",
            "\npower: y = a * x^b\n",
            "  a             0.768862          0.018282",
            "  at -1: the curve is not defined\n",
            "of new readings from ",
            ", beyond the readings\n",
            "\nnot fitted\n  exponential: the data do not determine tau: ",
        ] {
            assert!(out.contains(words), "{words:?} is not in\n{out}");
        }
    }

    #[test]
    fn other_columns_and_bad_rows_are_named() {
        let table = "age,drift\n1,2\n2,broken\n3,6.1\n4,8\n";
        let (code, out, err) = check(table, &["--x", "age", "--y", "drift", "--family", "linear"]);
        assert_eq!(code, EXIT_DONE);
        assert_eq!(err, "line 3: drift is \"broken\", not a finite number\n");
        assert!(out.starts_with("3 readings, x 1 to 4\nchosen: linear, "), "{out}");
        let (code, out, err) = check(table, &[]);
        assert_eq!((code, out.as_str()), (EXIT_WRONG_USE, ""));
        assert!(err.starts_with("series.csv: the header is \"age,drift\"; the column x "), "{err}");
    }

    #[test]
    fn unknown_families_and_numbers_are_refused_with_what_is_allowed() {
        let refusal = |options: &[&str]| {
            Line::try_parse_from(["fit", "a.csv"].into_iter().chain(options.iter().copied()))
                .unwrap_err()
                .to_string()
        };
        assert!(refusal(&["--family", "spline"]).contains("one of linear, logarithmic, power"));
        assert!(refusal(&["--at", "NaN"]).contains("a finite number is needed"));
        assert!(refusal(&["--plot", "-"]).contains("a file is needed"));
    }

    #[test]
    fn the_picture_is_written_beside_the_numbers() {
        let folder = tempfile::tempdir().unwrap();
        let picture = folder.path().join("out.svg");
        let (code, out, err) = check(DANWOOD, &["--json", "--plot", picture.to_str().unwrap()]);
        assert_eq!((code, err.as_str()), (EXIT_DONE, ""));
        assert!(serde_json::from_str::<serde_json::Value>(&out).is_ok(), "{out}");
        let svg = std::fs::read_to_string(&picture).unwrap();
        assert!(svg.starts_with("<svg ") && svg.ends_with("</svg>\n"), "{svg}");
    }

    #[test]
    fn a_picture_that_cannot_be_written_leaves_the_numbers_and_exit_code_1() {
        let (code, out, err) = check(DANWOOD, &["--plot", "/dev/null"]);
        assert_eq!(code, EXIT_FAILED);
        let why = "/dev/null: the picture cannot be written: what stands there is not a file\n";
        assert_eq!(err, why);
        assert!(out.starts_with("6 readings, "), "{out}");
    }

    #[test]
    fn a_family_is_not_passed_over_for_having_more_coefficients() {
        // NIST StRD, Misra1a (US public domain): residuals so alike that few readings are independent.
        let rows = crate::drift::reference::MISRA1A.map(|(x, y)| format!("{x},{y}\n")).concat();
        let look = json(&format!("x,y\n{rows}"), &[]);
        assert_eq!(look["chosen"], "exponential", "{}", look["why"]);
        let why = look["why"].as_str().unwrap();
        assert!(why.contains("; compared as if the readings were independent"), "{why}");
    }

    #[test]
    fn among_curves_through_every_reading_the_plainest_is_chosen() {
        let flat = json("x,y\n1,3\n2,3\n3,3\n4,3\n5,3\n6,3\n", &[]);
        let line = json("x,y\n1,2\n2,4\n3,6\n4,8\n5,10\n6,12\n7,14\n", &[]);
        for look in [flat, line] {
            let why = "linear, the plainest curve that passes through every reading";
            assert_eq!((&look["chosen"], &look["why"]), (&"linear".into(), &why.into()));
            assert_eq!(look["fits"][0]["residual_tests"]["runs"], serde_json::Value::Null);
            let caution =
                "the curve passes through every reading: its errors are those of rounding";
            assert_eq!(look["fits"][0]["cautions"], serde_json::json!([caution]));
        }
    }
}
