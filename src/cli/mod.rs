//! One file per command.

pub mod check;
pub mod connect;
pub mod demo;
pub mod fit;
pub mod replay;
pub mod run;

use crate::service::settings::Environment;
use crate::service::settings::Settings;
use crate::watch::budget::Budget;
use clap::{Parser, Subcommand};
use std::io;

/// Keeps watch over instrument drift: refits drift curves, examines their residuals, and says how far
/// the statement may be trusted. Advisory only; never a safety function.
#[derive(Debug, Parser)]
#[command(name = "asfound", version, max_term_width = 100)]
struct Arguments {
    #[command(subcommand)]
    command: Command,
}

#[derive(Debug, Subcommand)]
enum Command {
    Check(check::CheckArgs),
    Demo(demo::DemoArgs),
    Fit(fit::FitArgs),
    Replay(replay::ReplayArgs),
    Run(run::RunArgs),
}

/// Runs the program with these arguments. Returns the exit code.
pub fn run(arguments: impl IntoIterator<Item = std::ffi::OsString>) -> u8 {
    let arguments = match Arguments::try_parse_from(arguments) {
        Ok(arguments) => arguments,
        Err(error) => {
            // Asking for help is no mistake; clap writes it to the right output by itself.
            drop(error.print());
            return if error.use_stderr() { check::EXIT_WRONG_USE } else { check::EXIT_DONE };
        }
    };
    let environment = Environment::of_process();
    let (mut out, mut err) = (io::BufWriter::new(io::stdout().lock()), io::stderr());
    let code = match arguments.command {
        Command::Check(args) => {
            check::check(&args, &environment, budget_words, connect::try_all, &mut out, &mut err)
        }
        Command::Demo(_) => demo::demo(&mut out, &mut err),
        Command::Fit(args) => fit::fit(&args, &mut out, &mut err),
        Command::Run(args) => {
            drop(out);
            return run::run(&args, &environment, &mut err);
        }
        Command::Replay(args) => {
            replay::replay(&args, &environment, &mut out, &mut err, progress_bar())
        }
    };
    drop(io::Write::flush(&mut out));
    code
}

/// What the budget of false alerts means for one and for many channels.
fn budget_words(settings: &Settings) -> String {
    let points = settings.site.watches.iter().map(|w| w.window_points).max().unwrap_or(0);
    [10, 100, 1000]
        .map(|channels| {
            let false_alerts_per_year_site = settings.site.false_alerts_per_year;
            Budget { false_alerts_per_year_site, channels }.share_words(points)
        })
        .join("\n")
}

/// A bar over the bytes read, on a terminal only.
fn progress_bar() -> impl Fn(u64, Option<u64>) + 'static {
    let bar = indicatif::ProgressBar::hidden();
    if io::IsTerminal::is_terminal(&io::stderr()) && !io::IsTerminal::is_terminal(&io::stdout()) {
        bar.set_draw_target(indicatif::ProgressDrawTarget::stderr());
    }
    move |read, size| {
        if let Some(size) = size {
            bar.set_length(size);
            bar.set_position(read);
            if read >= size {
                bar.finish_and_clear();
            }
        }
    }
}
