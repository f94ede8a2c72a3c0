//! `asfound replay`: a history through the same engine, in the readings' own time, without a broker.

use crate::cli::check::{EXIT_DONE, EXIT_FAILED, EXIT_WRONG_USE};
use crate::drift::structure::Kind as Structure;
use crate::service::clock;
use crate::service::envelope::{self, Surroundings};
use crate::service::intake::csv::CsvReadings;
use crate::service::intake::{Decoded, Refusal, Router};
use crate::service::line::line;
use crate::service::settings::time::read_time;
use crate::service::settings::{Environment, Settings};
use crate::service::shown::Shown;
use crate::watch::budget::Judged;
use crate::watch::channel::{Channel, KnownFrom};
use crate::watch::engine::{Effect, Engine};
use crate::watch::reading::{Reading, Taken};
use crate::watch::time::{EventTime, ShellTime};
use serde_json::json;
use std::collections::BTreeMap;
use std::io::{self, Read, Write};
use std::path::PathBuf;

/// Bad rows named one by one on the error output; further ones are only counted.
const BAD_ROWS_SHOWN_MAX: u64 = 20;

/// Run a history of readings through the engine and print what it would have alerted
#[derive(clap::Args, Clone, Debug)]
pub struct ReplayArgs {
    /// The settings file (TOML)
    #[arg(long, value_name = "FILE")]
    pub config: PathBuf,
    /// Readings: CSV with the columns time,channel,value and optionally reference, quality; .gz welcome; - is stdin
    #[arg(value_name = "READINGS.csv")]
    pub readings: PathBuf,
    /// Print events as JSON, one a line, instead of the technician's lines
    #[arg(long)]
    pub json: bool,
    /// With --json: also each finding, as {"finding":{…}}
    #[arg(long, requires = "json")]
    pub findings: bool,
    /// With --json: also each look at the residuals, as {"look":{…}}
    #[arg(long, requires = "json")]
    pub scores: bool,
    /// Leave out readings later than this time (RFC 3339 with offset)
    #[arg(long, value_name = "TIME")]
    pub until: Option<String>,
}

/// What a replay came to.
#[derive(Debug, Default)]
struct Tally {
    rows: u64,
    refused: BTreeMap<&'static str, u64>,
    bad_rows: u64,
    events: BTreeMap<(&'static str, &'static str), u64>,
    unmatched: BTreeMap<String, u64>,
}

/// Distinct unmatched channel names that are remembered; further ones are counted together.
const UNMATCHED_MAX: usize = 20;

/// Runs the command. Returns the exit code.
///
/// # Arguments
/// `out` takes events, `err` the bad rows and the summary; `progress` is told (bytes read, in all).
pub fn replay(
    args: &ReplayArgs,
    environment: &Environment,
    out: &mut dyn Write,
    err: &mut dyn Write,
    progress: impl Fn(u64, Option<u64>) + 'static,
) -> u8 {
    match run(args, environment, out, err, progress) {
        Ok(code) => code,
        // A reader that went away, such as `head`, is no reason for words that nobody sees.
        Err(_) => EXIT_FAILED,
    }
}

fn run(
    args: &ReplayArgs,
    environment: &Environment,
    out: &mut dyn Write,
    err: &mut dyn Write,
    progress: impl Fn(u64, Option<u64>) + 'static,
) -> io::Result<u8> {
    let settings = match Settings::load(&args.config, environment) {
        Ok(settings) => settings,
        Err(error) => return writeln!(err, "{error}").map(|()| EXIT_WRONG_USE),
    };
    let until = match args.until.as_deref().map(read_time).transpose() {
        Ok(until) => until,
        Err(why) => return writeln!(err, "--until: {why}").map(|()| EXIT_WRONG_USE),
    };
    let input: Box<dyn Read> = if args.readings.as_os_str() == "-" {
        Box::new(io::stdin())
    } else {
        match std::fs::File::open(&args.readings) {
            Ok(file) => {
                let size = file.metadata().ok().map(|m| m.len());
                Box::new(Counted { inner: file, read: 0, size, progress })
            }
            Err(why) => {
                writeln!(err, "{}: {why}", args.readings.display())?;
                return Ok(EXIT_WRONG_USE);
            }
        }
    };
    let router = Router::new(&settings);
    let rows = match CsvReadings::open(input, &router) {
        Ok(rows) => rows,
        Err(why) => {
            writeln!(err, "{}: {why}", args.readings.display())?;
            return Ok(EXIT_WRONG_USE);
        }
    };
    let mut replaying = Replaying {
        engine: Engine::new(settings.site.clone(), ShellTime(i64::MIN / 2)),
        args,
        tally: Tally::default(),
        clock: i64::MIN / 2,
        out,
        err,
    };
    let mut code = EXIT_DONE;
    for row in rows {
        let row = match row {
            Ok(row) => row,
            Err(why) => {
                writeln!(replaying.err, "{}: {why}", args.readings.display())?;
                code = EXIT_FAILED;
                break;
            }
        };
        if let Ok((_, decoded)) = &row.outcome
            && until.is_some_and(|until| decoded.time > until)
        {
            continue;
        }
        replaying.row(row.line, row.outcome)?;
    }
    replaying.summary()?;
    Ok(code)
}

struct Replaying<'a> {
    engine: Engine,
    args: &'a ReplayArgs,
    tally: Tally,
    /// The newest event time so far, µs: what stands for the shell's clock here.
    clock: i64,
    out: &'a mut dyn Write,
    err: &'a mut dyn Write,
}

impl Replaying<'_> {
    fn row(&mut self, number: u64, outcome: Result<(usize, Decoded), Refusal>) -> io::Result<()> {
        self.tally.rows += 1;
        match outcome {
            Ok((watch, decoded)) => match decoded.unless_ahead_of(clock::now()) {
                Ok(decoded) => self.reading(watch, &decoded),
                Err(refusal) => self.refused(number, &refusal),
            },
            Err(refusal) => self.refused(number, &refusal),
        }
    }

    fn reading(&mut self, watch: usize, decoded: &Decoded) -> io::Result<()> {
        self.clock = self.clock.max(decoded.time.0);
        let now = ShellTime(self.clock);
        while let Some(due) = self.engine.next_due().filter(|due| *due <= now) {
            self.engine.tick(due);
            let effects = self.engine.effects();
            self.print(effects, due)?;
        }
        let reading =
            Reading { serial: self.tally.rows, time: decoded.time, deviation: decoded.deviation };
        self.engine.take(&decoded.channel, watch, &reading, now);
        let effects = self.engine.effects();
        self.print(effects, now)
    }

    fn refused(&mut self, number: u64, refusal: &Refusal) -> io::Result<()> {
        *self.tally.refused.entry(refusal.code()).or_default() += 1;
        if let Refusal::NoMatchingWatch { name } = refusal {
            let name = name.to_string();
            let full = self.tally.unmatched.len() >= UNMATCHED_MAX;
            let key = if full && !self.tally.unmatched.contains_key(&name) {
                "further channels".to_owned()
            } else {
                name
            };
            *self.tally.unmatched.entry(key).or_default() += 1;
            return Ok(());
        }
        self.tally.bad_rows += 1;
        if self.tally.bad_rows <= BAD_ROWS_SHOWN_MAX {
            writeln!(self.err, "line {number}: {refusal}")?;
        }
        Ok(())
    }

    fn print(&mut self, effects: Vec<Effect>, now: ShellTime) -> io::Result<()> {
        for effect in effects {
            match effect {
                Effect::Alert { channel, event, finding } => {
                    let key = (event.episode.claim.kind.name(), event.transition.name());
                    *self.tally.events.entry(key).or_default() += 1;
                    if self.args.json {
                        let around = Surroundings {
                            site: &self.engine.settings().site,
                            channel: &channel,
                            unit: self.engine.unit_of(&channel),
                            finding: finding.as_deref(),
                        };
                        writeln!(self.out, "{}", envelope::alert_event(&around, &event, now))?;
                    } else {
                        writeln!(self.out, "{}", line(&channel, &event))?;
                    }
                }
                Effect::Finding(finding) if self.args.findings => {
                    writeln!(self.out, "{{\"finding\":{}}}", envelope::finding(&finding))?;
                }
                Effect::Looked { channel, at, index, look } if self.args.scores => {
                    writeln!(self.out, "{}", look_json(&channel, at, index, &look))?;
                }
                Effect::Finding(_) | Effect::Looked { .. } | Effect::Standing { .. } => {}
            }
        }
        Ok(())
    }

    fn summary(&mut self) -> io::Result<()> {
        let counts = self.engine.counts();
        writeln!(self.err, "{} rows read", self.tally.rows)?;
        for taken in Taken::ALL {
            if counts.of(taken) > 0 {
                writeln!(self.err, "  {:>9}  {}", counts.of(taken), taken.words())?;
            }
        }
        let unsorted =
            self.engine.overview().filter(|(channel, _)| began_too_late(channel)).count();
        if unsorted > 0 {
            writeln!(
                self.err,
                "             age zero is the first row and older ones came after it, in so many channels: \
                 {unsorted}; sort the table by time, or set `calibrated`"
            )?;
        }
        for (code, count) in &self.tally.refused {
            writeln!(self.err, "  {count:>9}  refused: {code}")?;
        }
        for (name, count) in &self.tally.unmatched {
            writeln!(self.err, "  {count:>9}  no watch for channel {}", Shown(name, 60))?;
        }
        if self.tally.bad_rows > BAD_ROWS_SHOWN_MAX {
            let more = self.tally.bad_rows - BAD_ROWS_SHOWN_MAX;
            writeln!(self.err, "  ({more} further bad rows not listed one by one)")?;
        }
        let events: u64 = self.tally.events.values().sum();
        writeln!(self.err, "{events} alert events")?;
        for ((kind, transition), count) in &self.tally.events {
            writeln!(self.err, "  {count:>9}  {kind} {transition}")?;
        }
        Ok(())
    }
}

/// Whether a channel took its age zero from its first row and older rows came after that one.
fn began_too_late(channel: &Channel) -> bool {
    channel.cycle.is_some_and(|cycle| cycle.known_from == KnownFrom::FirstReading)
        && channel.counts.of(Taken::BeforeAgeZero) > 0
}

/// One look at the residuals, as `--scores` writes it; null where this look did not go, and for the
/// threshold of a step, which names but never raises.
fn look_json(
    channel: &str,
    at: EventTime,
    index: u64,
    look: &crate::watch::incident::Look,
) -> serde_json::Value {
    let told = |number: fn(&Judged) -> Option<f64>| -> serde_json::Value {
        ["shift", "step", "bend", "dependence"]
            .into_iter()
            .zip(Structure::ALL)
            .map(|(name, kind)| (name.to_owned(), json!(look.of(kind).and_then(number))))
            .collect::<serde_json::Map<_, _>>()
            .into()
    };
    json!({"look": {
        "channel": channel,
        "at": at.to_string(),
        "index": index,
        "phi": look.phi,
        "q": told(|kind| Some(kind.score.q)),
        "threshold": told(|kind| kind.threshold),
    }})
}

/// A file that tells how much of it was read.
struct Counted<R, F> {
    inner: R,
    read: u64,
    size: Option<u64>,
    progress: F,
}

impl<R: Read, F: Fn(u64, Option<u64>)> Read for Counted<R, F> {
    fn read(&mut self, buffer: &mut [u8]) -> io::Result<usize> {
        let got = self.inner.read(buffer)?;
        self.read += got as u64;
        (self.progress)(self.read, self.size);
        Ok(got)
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Replays rows under settings with this line more; what stands on the error output.
    fn check(further: &str, rows: &str) -> String {
        let folder = tempfile::tempdir().unwrap();
        let (config, readings) = (folder.path().join("a.toml"), folder.path().join("a.csv"));
        let settings = format!(
            "site.name = \"saltmarsh\"\nbroker.url = \"mqtt://127.0.0.1\"\n\
             [[watch]]\ntopic = \"plant/{{tag}}\"\nunit = \"bar\"\n{further}\n"
        );
        std::fs::write(&config, settings).unwrap();
        std::fs::write(&readings, format!("time,channel,value\n{rows}")).unwrap();
        let args = ReplayArgs {
            config,
            readings,
            json: false,
            findings: false,
            scores: false,
            until: None,
        };
        let mut err = Vec::new();
        let environment = Environment::default();
        let code = replay(&args, &environment, &mut Vec::new(), &mut err, |_, _| {});
        let err = String::from_utf8(err).unwrap();
        assert_eq!(code, EXIT_DONE, "{err}");
        err
    }

    const SORTED: &str = "2026-01-01T00:00:00Z,a,1\n2026-01-02T00:00:00Z,a,2\n\
                          2026-01-03T00:00:00Z,a,3\n";
    const REVERSED: &str = "2026-01-03T00:00:00Z,a,3\n2026-01-02T00:00:00Z,a,2\n\
                            2026-01-01T00:00:00Z,a,1\n";
    const HINT: &str = "sort the table by time, or set `calibrated`";

    #[test]
    fn a_table_that_is_not_sorted_is_told_how_to_help_itself() {
        let said = check("", REVERSED);
        assert!(said.contains("        2  not after age zero\n"), "{said}");
        assert!(said.contains(HINT), "{said}");
    }

    #[test]
    fn a_sorted_table_or_a_set_age_zero_gets_no_such_hint() {
        assert!(!check("", SORTED).contains(HINT));
        assert!(!check("calibrated = \"2026-01-02T12:00:00Z\"", SORTED).contains(HINT));
    }
}
