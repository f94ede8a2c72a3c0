//! Writes the history of the made-up site "saltmarsh": `readings.csv.gz`, the file that the demo
//! replays. Everything in it is invented; the same seed gives the same bytes.
//!
//! ```text
//! cargo run --release --example demo-data -- demo-data
//! ```

mod noise;
mod saltmarsh;

use std::io::Write;
use std::path::PathBuf;
use std::process::ExitCode;

const FILE: &str = "readings.csv.gz";

/// Returns the whole file before compression.
fn csv() -> String {
    let mut text = String::from("time,channel,value\n");
    for row in saltmarsh::history() {
        let time = jiff::Timestamp::from_second(row.time_s).expect("within one year of 2026");
        text.push_str(&format!("{time},{},{}\n", row.channel, row.value));
    }
    text
}

fn write(directory: PathBuf) -> std::io::Result<()> {
    let text = csv();
    let file = std::fs::File::create(directory.join(FILE))?;
    // No file name and no time in the gzip header: nothing but the readings decides the bytes.
    let mut gz = flate2::GzBuilder::new().mtime(0).write(file, flate2::Compression::best());
    gz.write_all(text.as_bytes())?;
    let bytes = gz.finish()?.metadata()?.len();
    println!("{FILE}: {} readings, {bytes} bytes", text.lines().count() - 1);
    Ok(())
}

fn main() -> ExitCode {
    let mut arguments = std::env::args_os().skip(1);
    let (Some(directory), None) = (arguments.next(), arguments.next()) else {
        eprintln!("needs one argument: the folder to write {FILE} into");
        return ExitCode::from(2);
    };
    match write(PathBuf::from(&directory)) {
        Ok(()) => ExitCode::SUCCESS,
        Err(error) => {
            eprintln!("{}: cannot write {FILE}: {error}", directory.display());
            ExitCode::FAILURE
        }
    }
}

#[cfg(test)]
mod tests {
    use super::{FILE, csv, saltmarsh};
    use std::collections::BTreeMap;
    use std::io::Read;

    fn committed() -> (u64, String) {
        let path = std::path::Path::new(env!("CARGO_MANIFEST_DIR")).join("demo-data").join(FILE);
        let file = std::fs::File::open(&path).expect("the history is committed");
        let bytes = file.metadata().expect("a plain file").len();
        let mut text = String::new();
        flate2::read::GzDecoder::new(file).read_to_string(&mut text).expect("gzip of UTF-8 text");
        (bytes, text)
    }

    fn values(text: &str, channel: &str) -> Vec<(i64, String)> {
        let rows = text.lines().skip(1).map(|line| line.split(',').collect::<Vec<_>>());
        let mine = rows.filter(|row| row[1] == channel);
        mine.map(|row| (saltmarsh::seconds(row[0]), row[2].to_owned())).collect()
    }

    /// Mean of the deviations read within `days` days from `from` on.
    fn mean(text: &str, channel: &str, from: &str, days: i64) -> f64 {
        let from = saltmarsh::seconds(from);
        let within = from..from + days * 86_400;
        let found: Vec<f64> = values(text, channel)
            .iter()
            .filter(|(time, _)| within.contains(time))
            .map(|(_, value)| value.parse().expect("this channel sends numbers"))
            .collect();
        found.iter().sum::<f64>() / found.len() as f64
    }

    #[test]
    fn generating_again_gives_the_committed_history() {
        let (_, text) = committed();
        let again = csv();
        let differs = text.lines().zip(again.lines()).position(|(a, b)| a != b);
        assert_eq!(differs.map(|i| i + 1), None, "first line that differs");
        assert!(text == again, "{} bytes committed, {} generated", text.len(), again.len());
    }

    #[test]
    fn history_is_small_ordered_and_of_every_instrument() {
        let (bytes, text) = committed();
        assert!(bytes <= 1_000_000, "{bytes} bytes");
        let mut rows_of = BTreeMap::new();
        let mut last = String::new();
        for line in text.lines().skip(1) {
            let row: Vec<&str> = line.split(',').collect();
            assert!(*last <= *row[0], "{line} comes after {last}");
            last = row[0].to_owned();
            *rows_of.entry(row[1].to_owned()).or_insert(0) += 1;
        }
        assert!(rows_of.values().sum::<i32>() <= 60_000);
        let known: Vec<_> = saltmarsh::INSTRUMENTS.iter().map(|i| i.channel).collect();
        assert_eq!(rows_of.len(), known.len());
        assert!(known.iter().all(|channel| rows_of[*channel] > 1_000), "{rows_of:?}");
    }

    #[test]
    fn stories_stand_in_the_readings_as_told() {
        let (_, text) = committed();
        let knocked = mean(&text, "press.PT-4107", "2026-04-15T00:00:00Z", 14)
            - mean(&text, "press.PT-4107", "2026-03-31T00:00:00Z", 14);
        assert!((knocked - 0.06).abs() < 0.01, "jump {knocked}");

        let within = mean(&text, "dose.AT-7103", "2026-09-15T00:00:00Z", 7);
        let past = mean(&text, "dose.AT-7103", "2026-10-20T00:00:00Z", 7);
        assert!(within < 0.2 && past > 0.2, "tolerance 0.2: {within} before, {past} after");

        let (died, _) = values(&text, "level.LT-6102").pop().expect("it sent readings");
        assert!(died < saltmarsh::seconds("2026-08-09T14:00:00Z"));

        let garbage = values(&text, "level.LT-6105")
            .into_iter()
            .filter(|(_, value)| !value.parse::<f64>().is_ok_and(f64::is_finite))
            .count();
        assert!((10..=50).contains(&garbage), "{garbage} readings are no number");
    }
}
