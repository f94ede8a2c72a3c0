//! `asfound run`: the daemon.

use crate::cli::check::{EXIT_DONE, EXIT_FAILED, EXIT_WRONG_USE};
use crate::service::broker::BrokerSettings;
use crate::service::clock::{Clock, Stopwatch};
use crate::service::daemon::{self, LineSink, Summary};
use crate::service::desk::Desk;
use crate::service::intake::Router;
use crate::service::recover::recover;
use crate::service::settings::{Environment, Settings};
use crate::service::shown::Shown;
use crate::service::store::{Store, Writer};
use std::io::Write;
use std::path::PathBuf;

/// Keep watch: subscribe, store, refit, publish alerts
#[derive(clap::Args, Clone, Debug)]
pub struct RunArgs {
    /// The settings file (TOML)
    #[arg(long, value_name = "FILE")]
    pub config: PathBuf,
}

/// Runs the daemon until SIGTERM or SIGINT. Returns the exit code.
pub fn run(args: &RunArgs, environment: &Environment, err: &mut dyn Write) -> u8 {
    let settings = match Settings::load(&args.config, environment) {
        Ok(settings) => settings,
        Err(error) => {
            // Where the error output is gone too there is nobody to tell.
            drop(writeln!(err, "{error}"));
            return EXIT_WRONG_USE;
        }
    };
    start_log();
    for caution in settings.cautions() {
        tracing::warn!("{caution}");
    }
    let lines: LineSink = Box::new(|line| {
        // A closed output must not stop the watch: the alert is published and stored all the same.
        drop(writeln!(std::io::stdout().lock(), "{line}"));
    });
    match keep_watch(settings, lines) {
        Ok(summary) => {
            tracing::info!(
                received = summary.arrivals.received,
                stored = summary.arrivals.journaled,
                duplicates = summary.arrivals.duplicates,
                not_fitted = summary.arrivals.unfitted.values().sum::<u64>(),
                refused = summary.arrivals.refused.values().sum::<u64>(),
                published = summary.published,
                "stopped; nothing received was lost"
            );
            EXIT_DONE
        }
        Err(why) => {
            tracing::error!("{why}");
            EXIT_FAILED
        }
    }
}

/// Everything that the loop needs, made ready.
pub struct Prepared {
    /// Over what was recovered.
    pub desk: Desk,
    /// Owns the store.
    pub writer: Writer,
    /// How to reach the broker.
    pub link: BrokerSettings,
}

/// Opens the store and recovers from it.
pub fn prepare(settings: Settings, clock: Clock) -> Result<Prepared, Box<dyn std::error::Error>> {
    let recovering = Stopwatch::start();
    let router = Router::new(&settings);
    let store = Store::open(&settings.store_directory)?;
    let newest_row = store.newest_row()?;
    let recovered = recover(&store, &settings, &router, clock.now())?;
    for channel in &recovered.unwatched {
        tracing::warn!(
            "no watch speaks of channel {} any more; its history stays in the store",
            Shown(channel, 80)
        );
    }
    tracing::info!(
        channels = recovered.engine.overview_count(),
        rows_replayed = recovered.replayed,
        ms = recovering.elapsed().as_millis(),
        "recovered from the store"
    );
    let link = BrokerSettings::of(&settings.broker);
    let writer = Writer::start(store)?;
    let desk = Desk::new(settings, clock, router, recovered, newest_row);
    Ok(Prepared { desk, writer, link })
}

/// Prepares, and runs the daemon on a runtime of its own until it is told to stop.
fn keep_watch(settings: Settings, lines: LineSink) -> Result<Summary, Box<dyn std::error::Error>> {
    let runtime = runtime()?;
    // Before anything else: a signal during a long recovery is an orderly stop too.
    let stop = {
        let _inside = runtime.enter();
        stop_signal()
    };
    let Prepared { desk, writer, link } = prepare(settings, Clock::System)?;
    Ok(runtime.block_on(daemon::run(desk, writer, link, lines, stop))?)
}

/// The runtime: one thread for the loop, one for what waits beside it.
pub fn runtime() -> std::io::Result<tokio::runtime::Runtime> {
    tokio::runtime::Builder::new_multi_thread()
        .worker_threads(2)
        .thread_name("asfound")
        .enable_all()
        .build()
}

/// Takes the signals in charge at once; what is returned ends with the first SIGTERM or SIGINT.
/// To be called inside a runtime.
pub fn stop_signal() -> impl Future<Output = ()> {
    use tokio::signal::unix::{SignalKind, signal};
    let term = signal(SignalKind::terminate());
    let interrupt = signal(SignalKind::interrupt());
    async move { first_of(term, interrupt).await }
}

async fn first_of(
    term: std::io::Result<tokio::signal::unix::Signal>,
    interrupt: std::io::Result<tokio::signal::unix::Signal>,
) {
    match (term, interrupt) {
        (Ok(mut term), Ok(mut interrupt)) => {
            tokio::select! {
                _ = term.recv() => {}
                _ = interrupt.recv() => {}
            }
        }
        // Without handlers the signals end the process at once, which loses nothing either.
        _ => std::future::pending().await,
    }
}

/// Log lines on the error output; `ASFOUND_LOG` chooses what (default `info`).
fn start_log() {
    let filter = tracing_subscriber::EnvFilter::try_from_env("ASFOUND_LOG")
        .unwrap_or_else(|_| tracing_subscriber::EnvFilter::new("info"));
    // A second start of the log in one process, as in tests, is no failure.
    drop(
        tracing_subscriber::fmt()
            .with_env_filter(filter)
            .with_writer(std::io::stderr)
            .with_target(false)
            .with_ansi(std::io::IsTerminal::is_terminal(&std::io::stderr()))
            .try_init(),
    );
}
