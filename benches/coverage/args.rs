//! The options of the measurement, from the command line.

/// What is measured, and how hard.
#[derive(Clone, Copy, Debug)]
pub struct Args {
    /// Simulated windows in each cell of the tables.
    pub runs: u32,
    /// Seed of all noise.
    pub seed: u64,
    /// Whether only a short look was asked for.
    pub short: bool,
}

/// How to call it.
pub const USAGE: &str = "usage: cargo bench --bench coverage -- [--runs 2000] [--seed N] [--short]";

/// Windows in each cell unless said otherwise: a coverage of 95 % then has a standard error of 0.5 %.
const RUNS: u32 = 2000;
/// The same for a short look: 1.5 %.
const RUNS_SHORT: u32 = 200;
/// Fewer say nothing; more take hours.
const RUNS_RANGE: (u32, u32) = (50, 1_000_000);

impl Args {
    /// Reads the options; the error is one sentence for the user.
    pub fn read(words: impl Iterator<Item = String>) -> Result<Args, String> {
        let (mut runs, mut seed, mut short) = (None, 4109, false);
        let mut words = words;
        while let Some(word) = words.next() {
            match word.as_str() {
                // `cargo bench` adds this one to every bench program.
                "--bench" => {}
                "--short" => short = true,
                "--runs" => runs = Some(number(&word, words.next())?),
                "--seed" => seed = number(&word, words.next())?,
                _ => return Err(format!("{word} is no option; {USAGE}")),
            }
        }
        let runs = runs.unwrap_or(if short { RUNS_SHORT } else { RUNS });
        let (least, most) = RUNS_RANGE;
        if !(least..=most).contains(&runs) {
            return Err(format!("--runs must be {least} to {most}, not {runs}"));
        }
        Ok(Args { runs, seed, short })
    }
}

fn number<T: std::str::FromStr>(word: &str, text: Option<String>) -> Result<T, String> {
    text.and_then(|text| text.parse().ok())
        .ok_or_else(|| format!("{word} needs a whole number; {USAGE}"))
}
