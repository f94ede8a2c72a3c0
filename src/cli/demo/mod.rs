//! `asfound demo`: the main job with nothing else installed.
//!
//! A broker inside this process, the same daemon as `run` on a store of its own, a made-up site whose
//! year of readings is published to that broker, and an outsider who prints the alerts that come back
//! over MQTT. Only the edges differ from `run`: the clock follows the readings.

mod board;
mod history;

use crate::cli::check::{EXIT_DONE, EXIT_FAILED};
use crate::cli::run::{Prepared, prepare, runtime, stop_signal};
use crate::service::broker::BrokerSettings;
use crate::service::broker::guest::{Guest, Heard};
use crate::service::broker::inside::InsideBroker;
use crate::service::clock::{Clock, Stopwatch};
use crate::service::daemon::{self, DaemonError, LineSink, Summary};
use crate::service::settings::{Environment, Settings};
use crate::watch::wording;
use board::Board;
use history::History;
use std::io::Write;
use std::net::{Ipv4Addr, SocketAddr};
use std::path::Path;
use tokio::sync::oneshot;
use tokio::task::JoinHandle;

/// The settings of the made-up site.
const SETTINGS: &str = include_str!("../../../config/demo.toml");
/// What the request that ends the demo asks to acknowledge; there is no such alert, and the answer
/// says that everything before it was received.
const LAST_WORD: &str = "the end of the history";

/// Show the main job on a made-up site, with a broker inside; no other program needed
#[derive(clap::Args, Clone, Copy, Debug)]
pub struct DemoArgs {}

/// Runs the demo until its history ends, or SIGINT or SIGTERM. Returns the exit code.
pub fn demo(out: &mut dyn Write, err: &mut dyn Write) -> u8 {
    let shown = runtime().map_err(Into::into).and_then(|runtime| runtime.block_on(show(out)));
    match shown {
        Ok(()) => EXIT_DONE,
        Err(why) => {
            // Where the error output is gone too there is nobody to tell.
            drop(writeln!(err, "the demo ended early: {why}"));
            EXIT_FAILED
        }
    }
}

type Trouble = Box<dyn std::error::Error>;

async fn show(out: &mut dyn Write) -> Result<(), Trouble> {
    let watch = Stopwatch::start();
    let folder = tempfile::tempdir()?;
    let broker = InsideBroker::start(SocketAddr::from((Ipv4Addr::LOCALHOST, 0)))?;
    let settings = settings(broker.address(), folder.path())?;
    let history = History::open()?;
    let own_topics = settings.own_topics();
    let Prepared { desk, writer, link } = prepare(settings, Clock::of_readings(history.starts()))?;
    writeln!(
        out,
        "A made-up site, \"saltmarsh\": {} instruments, {} readings from {} to {}. All of it is \
         invented.\nA broker inside this process listens on {}; the daemon subscribes to \
         plant/+/+/deviation there.\nAlerts, as they arrive over MQTT from {own_topics}/alert/+ :\n",
        history.channels(),
        history.len(),
        wording::minute(history.starts()),
        wording::minute(history.ends()),
        broker.address(),
    )?;
    let topics = ["alert/+", "finding/+", "standing/+", "reply/+", "service"];
    let topics = topics.map(|topic| format!("{own_topics}/{topic}")).to_vec();
    let (mut outsider, _) = Guest::connect(&link, "outsider", topics).await?;
    let (stop, stopped) = oneshot::channel();
    let no_lines: LineSink = Box::new(|_| {});
    let daemon = tokio::spawn(daemon::run(desk, writer, link.clone(), no_lines, async {
        drop(stopped.await);
    }));
    let told = tell_history(history, link, own_topics.clone());
    let publisher = tokio::spawn(async move { told.await.map_err(|why| why.to_string()) });
    let mut board = Board::default();
    let listened = listen(&mut outsider, &own_topics, &mut board, stop, out, &daemon).await;
    publisher.abort();
    let summary = daemon.await??;
    broker.stop().await;
    let finished = listened?;
    conclude(out, &board, &summary, finished, watch)?;
    Ok(())
}

fn settings(broker: SocketAddr, store: &Path) -> Result<Settings, Trouble> {
    let variables = [
        ("ASFOUND__BROKER__URL", format!("mqtt://{broker}")),
        ("ASFOUND__STORE__DIRECTORY", store.display().to_string()),
    ];
    let variables = variables.into_iter().map(|(k, v)| (k.to_owned(), v)).collect();
    let environment = Environment { variables, credentials_directory: None };
    Ok(Settings::read(SETTINGS, Path::new("config/demo.toml"), &environment)?)
}

/// Publishes the history as the site's instruments would, then asks for the sign that all came in.
async fn tell_history(
    history: History,
    link: BrokerSettings,
    own_topics: String,
) -> Result<(), String> {
    let state = vec![format!("{own_topics}/service")];
    let (mut instruments, _) = Guest::connect(&link, "instruments", state).await?;
    let gone = || "the connection to the broker ended".to_owned();
    // What is sent before anybody has subscribed is lost.
    while !board::is_state("online", &instruments.next().await.ok_or_else(gone)?.payload) {}
    for message in history {
        if !instruments.publish(message.topic, message.payload).await {
            return Err(gone());
        }
    }
    let last = serde_json::json!({ "alert": LAST_WORD }).to_string().into_bytes();
    let topic = format!("{own_topics}/request/acknowledge");
    let sent = instruments.publish(topic, last).await && instruments.settled().await;
    if sent { Ok(()) } else { Err(gone()) }
}

/// Prints alerts as they come until the daemon says that it is offline. True: the history was told
/// to its end.
async fn listen(
    outsider: &mut Guest,
    own_topics: &str,
    board: &mut Board,
    stop: oneshot::Sender<()>,
    out: &mut dyn Write,
    daemon: &JoinHandle<Result<Summary, DaemonError>>,
) -> std::io::Result<bool> {
    let mut stop = Some(stop);
    let mut finished = false;
    let mut written = Ok(());
    let interrupted = stop_signal();
    tokio::pin!(interrupted);
    loop {
        let heard = tokio::select! {
            () = &mut interrupted, if stop.is_some() => {
                drop(stop.take());
                continue;
            }
            heard = outsider.next() => heard,
        };
        let Some(Heard { topic, payload }) = heard else { break };
        let Some(rest) = topic.strip_prefix(own_topics).map(|rest| rest.trim_start_matches('/'))
        else {
            continue;
        };
        if rest.starts_with("reply/") {
            finished |= stop.is_some();
            drop(stop.take());
        }
        if rest == "service" && stop.is_none() && board::is_state("offline", &payload) {
            break;
        }
        if let Some(line) = board.hear(rest, &payload) {
            written = written.and_then(|()| writeln!(out, "{line}").and_then(|()| out.flush()));
        }
        // Nobody reads any more, or the daemon has failed: end in order.
        if written.is_err() || daemon.is_finished() {
            drop(stop.take());
        }
        if daemon.is_finished() {
            break;
        }
    }
    written.map(|()| finished)
}

fn conclude(
    out: &mut dyn Write,
    board: &Board,
    summary: &Summary,
    finished: bool,
    watch: Stopwatch,
) -> std::io::Result<()> {
    let arrivals = &summary.arrivals;
    let refused: u64 = arrivals.refused.values().sum();
    writeln!(
        out,
        "\n{} after {:.1} s: {} readings stored and acknowledged, {refused} refused, {} alert events.",
        if finished { "The history ended" } else { "Stopped" },
        watch.elapsed().as_secs_f64(),
        arrivals.journaled,
        board.events(),
    )?;
    for (why, count) in &arrivals.refused {
        writeln!(out, "  {count:>4} refused: {why}")?;
    }
    writeln!(
        out,
        "\nWhat is known at the end; (over): the condition has gone, nobody has acknowledged it."
    )?;
    writeln!(out, "\n{}", board.table())?;
    for caution in wording::CAUTIONS {
        writeln!(out, "{caution}")?;
    }
    out.flush()
}
