//! The whole daemon under load, through a real broker: how much it takes, what that costs, and that
//! nothing is lost or told twice. A measurement to be run by hand, not a test:
//!
//!     cargo bench --bench load -- --channels 1000 --rate 5000 --seconds 60 [--kill-at 30]
//!
//! Needs `mosquitto` and Linux. Ends with exit code 1 when a claim does not hold. The store lies on
//! the disk of the build folder, so that a commit costs what it costs there.

mod args;
mod journal;
mod link;
mod meter;
// Shared with the demonstration's history; its own tests run there.
#[allow(dead_code, unused_imports)]
#[path = "../../demo-data/noise.rs"]
mod noise;
mod plant;
mod process;
mod run;
mod verify;

use args::Args;
use journal::Journal;
use plant::{Plant, REFIT_EVERY};
use run::Figures;
use std::fs;
use std::path::Path;
use std::process::ExitCode;
use verify::{Verdict, alerts_came, journal_is_whole, replay_agrees};

/// Less of the asked rate than this is another measurement than the one that was asked for.
const RATE_PART_MIN: f64 = 0.95;
/// Lines of the daemon's log that are shown after a failure.
const LOG_LINES: usize = 15;

fn main() -> ExitCode {
    // `cargo bench` says so; `cargo test --all-targets` starts bench programs too, but to try them.
    if !std::env::args().any(|word| word == "--bench") {
        println!("a measurement, not a test; {}", args::USAGE);
        return ExitCode::SUCCESS;
    }
    let (args, plant) = match Args::read(std::env::args().skip(1))
        .and_then(|args| Plant::new(&args).map(|plant| (args, plant)))
    {
        Ok(read) => read,
        Err(why) => {
            eprintln!("{why}");
            return ExitCode::from(2);
        }
    };
    let home = match tempfile::tempdir_in(env!("CARGO_TARGET_TMPDIR")) {
        Ok(home) => home,
        Err(why) => {
            eprintln!("no folder for the run: {why}");
            return ExitCode::FAILURE;
        }
    };
    introduce(&args, &plant);
    let trouble = match measure(&args, &plant, home.path()) {
        Ok(0) => None,
        Ok(failed) => Some(format!("{failed} claims fail")),
        Err(why) => Some(format!("given up: {why}")),
    };
    if let Some(trouble) = &trouble {
        println!("{trouble}");
        log_tail(home.path());
    }
    if args.keep {
        println!("kept       {}", home.keep().display());
    }
    if trouble.is_none() { ExitCode::SUCCESS } else { ExitCode::FAILURE }
}

fn introduce(args: &Args, plant: &Plant) {
    let read = |path: &str| fs::read_to_string(path).unwrap_or_default();
    let cpuinfo = read("/proc/cpuinfo");
    let model = cpuinfo.lines().find(|line| line.starts_with("model name"));
    let model = model.and_then(|line| line.split(": ").nth(1)).unwrap_or("unknown processor");
    println!(
        "machine    {model}, {} cores, Linux {}, load average before: {}",
        std::thread::available_parallelism().map_or(0, usize::from),
        read("/proc/sys/kernel/osrelease").trim(),
        read("/proc/loadavg").split(' ').take(3).collect::<Vec<_>>().join(" "),
    );
    println!(
        "readings   {} channels × {} = {} at {} a second, seed {}; knocked channels: {}",
        plant.channels,
        plant.rounds,
        plant.total(),
        args.rate,
        args.seed,
        plant.knocked.len(),
    );
    println!(
        "event time {:.0} s from one reading of a channel to the next, {} h in all: one point an hour, \
         refit every {REFIT_EVERY}, about {:.0} refits a second on average; all channels begin \
         together, so their refits come together",
        plant.step_us as f64 / 1e6,
        args.hours,
        plant.channels as f64 * args.hours as f64 / 24.0 / args.seconds as f64,
    );
}

/// Runs, tells the figures and verifies. Returns how many claims fail.
fn measure(args: &Args, plant: &Plant, home: &Path) -> Result<usize, String> {
    let journal = Journal::new(home);
    let (figures, observer) = run::run(args, plant, home, &journal)?;
    tell(args, plant, &figures);
    log_summary(home);
    println!("claims");
    let mut verdict = Verdict::default();
    let rate = plant.total() as f64 / figures.publishing.as_secs_f64();
    verdict.claim(
        rate >= RATE_PART_MIN * args.rate as f64,
        &format!("the broker was given {rate:.0} readings a second, asked: {}", args.rate),
    );
    verdict.claim(figures.stopped.0, "the daemon stopped on SIGTERM with exit code 0");
    journal_is_whole(plant, &journal.rows()?, &mut verdict);
    let unsent = journal.unsent()?;
    verdict.claim(unsent == 0, &format!("the outbox is empty: {unsent} messages in it"));
    if args.kill_at.is_some() {
        verdict.claim(figures.recovery.is_some(), "the daemon went on after the kill");
    }
    let seen = observer.seen();
    alerts_came(plant, &journal, &seen, &mut verdict);
    replay_agrees(plant, home, &seen, &mut verdict);
    Ok(verdict.failed)
}

fn tell(args: &Args, plant: &Plant, figures: &Figures) {
    let Figures { publishing, catching_up, emptying, cpu_s, meter, recovery, stopped, .. } =
        figures;
    let readings = plant.total() as f64;
    let mib = |kib: u64| kib as f64 / 1024.0;
    println!(
        "rate       {:.0} readings a second over {:.1} s",
        readings / publishing.as_secs_f64(),
        publishing.as_secs_f64()
    );
    println!(
        "lag        journal complete {:.2} s after the last reading, outbox empty {:.2} s later; at \
         most {} readings behind (looked at once a second)",
        catching_up.as_secs_f64(),
        emptying.as_secs_f64(),
        meter.behind_max
    );
    println!(
        "processor  {:.0} % of one core while publishing; {:.1} s in all, {:.0} µs a reading, refits \
         and publishing included",
        100.0 * cpu_s.0 / publishing.as_secs_f64(),
        cpu_s.1,
        1e6 * cpu_s.1 / readings
    );
    println!(
        "memory     {:.1} MiB at most; {:.1} MiB after a third, {:.1} MiB at the end",
        mib(meter.peak_kib),
        mib(meter.rss_kib.0),
        mib(meter.rss_kib.1)
    );
    println!(
        "store      {:.1} MiB, {:.0} bytes a reading; about {} transactions",
        figures.store_bytes as f64 / 1_048_576.0,
        figures.store_bytes as f64 / readings,
        meter.transactions
    );
    if let (Some(at), Some((took, rows))) = (args.kill_at, recovery) {
        println!(
            "kill       after {at} s with {rows} rows; from the restart to the first new row {:.2} s",
            took.as_secs_f64()
        );
    }
    println!("stop       {:.2} s from SIGTERM to the end", stopped.1.as_secs_f64());
}

/// What the daemon's log says of itself: its last words and its long turns.
fn log_summary(home: &Path) {
    let log = fs::read_to_string(home.join("asfound.log")).unwrap_or_default();
    let lines = |what: &str| log.lines().filter(|line| line.contains(what)).collect::<Vec<_>>();
    for line in lines("recovered from the store").iter().chain(&lines("stopped; nothing")) {
        println!("log        {}", line.split(" INFO ").last().unwrap_or(line));
    }
    let turns = lines("a turn of the loop took long");
    let ms = turns.iter().filter_map(|line| line.rsplit("ms=").next()?.trim().parse::<u64>().ok());
    println!(
        "log        {} turns of the loop over 250 ms; the longest {} ms",
        turns.len(),
        ms.max().unwrap_or(0)
    );
    let known = ["a turn of the loop took long", "not encrypted"];
    let warnings = log.lines().filter(|l| l.contains(" WARN ") || l.contains("ERROR "));
    for line in warnings.filter(|l| !known.iter().any(|k| l.contains(k))).take(LOG_LINES) {
        println!("log        {line}");
    }
}

fn log_tail(home: &Path) {
    let log = fs::read_to_string(home.join("asfound.log")).unwrap_or_default();
    let lines: Vec<&str> = log.lines().collect();
    for line in &lines[lines.len().saturating_sub(LOG_LINES)..] {
        println!("log        {line}");
    }
}
