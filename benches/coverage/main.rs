//! Whether what is claimed of curves holds: simulated windows with a known truth, confidence
//! intervals held against it, and forecasts of the power curve held against those of a straight line
//! through logarithms. A measurement to be run by hand, or briefly before a release:
//!
//!     cargo bench --bench coverage -- [--runs 2000] [--seed N] [--short]
//!
//! Ends with exit code 1 when a claim does not hold within its statistical error.

mod args;
mod forecasts;
mod intervals;
// Shared with the demonstration's history; its own tests run there.
#[allow(dead_code, unused_imports)]
#[path = "../../demo-data/noise.rs"]
mod noise;
mod trial;

use args::Args;
use std::fs;
use std::process::ExitCode;
use std::time::Instant;

fn main() -> ExitCode {
    // `cargo bench` says so; `cargo test --all-targets` starts bench programs too, but to try them.
    if !std::env::args().any(|word| word == "--bench") {
        println!("a measurement, not a test; {}", args::USAGE);
        return ExitCode::SUCCESS;
    }
    let args = match Args::read(std::env::args().skip(1)) {
        Ok(args) => args,
        Err(why) => {
            eprintln!("{why}");
            return ExitCode::from(2);
        }
    };
    introduce(&args);
    let begun = Instant::now();
    let mut failed = intervals::measure(&args);
    failed.extend(forecasts::measure(&args));
    println!("\ntook {:.1} s", begun.elapsed().as_secs_f64());
    for claim in &failed {
        println!("does not hold: {claim}");
    }
    if failed.is_empty() {
        println!("every claim holds");
        ExitCode::SUCCESS
    } else {
        ExitCode::FAILURE
    }
}

fn introduce(args: &Args) {
    let cpuinfo = fs::read_to_string("/proc/cpuinfo").unwrap_or_default();
    let model = cpuinfo.lines().find(|line| line.starts_with("model name"));
    let model = model.and_then(|line| line.split(": ").nth(1)).unwrap_or("unknown processor");
    println!(
        "{model}, {} cores; seed {}, {} windows in each cell{}",
        std::thread::available_parallelism().map_or(0, usize::from),
        args.seed,
        args.runs,
        if args.short { ", a short look" } else { "" },
    );
}
