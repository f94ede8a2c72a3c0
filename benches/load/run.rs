//! One run: broker, daemon, readings, perhaps a kill, until the journal holds everything.

use crate::args::Args;
use crate::journal::Journal;
use crate::link::{Observer, Progress, publish};
use crate::meter::Meter;
use crate::plant::Plant;
use crate::process::{LOOK_AGAIN, Process, await_event};
use std::path::Path;
use std::sync::Arc;
use std::time::{Duration, Instant};

/// The journal must hold everything so long after the last reading was published.
const CATCH_UP: Duration = Duration::from_secs(120);
/// The outbox must be empty so long after that.
const OUTBOX: Duration = Duration::from_secs(60);
/// How long a killed daemon stays away.
const AWAY: Duration = Duration::from_secs(2);
/// An orderly stop takes at most so long.
const STOP: Duration = Duration::from_secs(30);

/// What a run came to.
#[derive(Debug)]
pub struct Figures {
    /// From the first reading until the broker had taken the last.
    pub publishing: Duration,
    /// From then until the journal held everything.
    pub catching_up: Duration,
    /// From then until the outbox was empty.
    pub emptying: Duration,
    /// Processor time of the daemon in the publishing phase, and until the outbox was empty, seconds.
    pub cpu_s: (f64, f64),
    /// What was read off on the way.
    pub meter: Meter,
    /// From the restart after the kill until the journal grew, and rows at the kill.
    pub recovery: Option<(Duration, u64)>,
    /// Whether the stop asked for ended with exit code 0, and how long it took.
    pub stopped: (bool, Duration),
    /// The store on disk after the stop, bytes.
    pub store_bytes: u64,
}

/// Where the daemon is in a run with a kill.
enum Life {
    /// Running; to be killed then.
    Up(Option<Duration>),
    /// Killed; comes back then.
    Away(Instant),
    /// Started again at that moment; the journal has not grown yet.
    Back(Instant),
}

struct Run<'a> {
    folder: &'a Path,
    journal: &'a Journal,
    daemon: Option<Process>,
    broker: Process,
    life: Life,
    rows_at_kill: u64,
    recovery: Option<(Duration, u64)>,
    meter: Meter,
}

/// Runs the plant's readings through a broker and a daemon with `folder` as their home.
pub fn run(
    args: &Args,
    plant: &Plant,
    folder: &Path,
    journal: &Journal,
) -> Result<(Figures, Observer), String> {
    let (broker, port) = Process::broker(folder)?;
    std::fs::write(folder.join("asfound.toml"), plant.settings(port))
        .map_err(|why| why.to_string())?;
    let observer = Observer::start(port)?;
    let daemon = Process::daemon(folder)?;
    observer.wait_online(1)?;
    let meter = Meter::start(&daemon, &broker)?;
    let mut run = Run {
        folder,
        journal,
        daemon: Some(daemon),
        broker,
        life: Life::Up(args.kill_at.map(Duration::from_secs)),
        rows_at_kill: 0,
        recovery: None,
        meter,
    };
    let progress = Arc::new(Progress::default());
    let publisher = publish(port, plant, args.rate, Arc::clone(&progress));
    let third = Duration::from_secs(args.seconds) / 3;
    let turn = |run: &mut Run<'_>| {
        run.live()?;
        let early = run.meter.elapsed() <= third;
        let Run { daemon, broker, journal, meter, .. } = run;
        meter.look(daemon.as_ref(), broker, journal, (&progress, &observer), early)
    };
    while !publisher.is_finished() {
        turn(&mut run)?;
        std::thread::sleep(LOOK_AGAIN);
    }
    let publishing = publisher.join().map_err(|_| "the publisher panicked")??;
    run.read()?;
    let cpu_publishing_s = run.meter.cpu_s();
    let since = Instant::now();
    await_event("every reading in the journal", CATCH_UP, || {
        turn(&mut run)?;
        Ok((journal.newest()? >= plant.total()).then_some(()))
    })?;
    let catching_up = since.elapsed();
    let since = Instant::now();
    await_event("an empty outbox", OUTBOX, || {
        turn(&mut run)?;
        Ok((journal.unsent()? == 0).then_some(()))
    })?;
    let emptying = since.elapsed();
    run.read()?;
    let cpu_s = (cpu_publishing_s, run.meter.cpu_s());
    let since = Instant::now();
    let status = run.daemon.as_mut().ok_or("the daemon is away")?.terminate(STOP)?;
    let stopped = (status.code() == Some(0), since.elapsed());
    observer.wait_stopped()?;
    let Run { meter, recovery, .. } = run;
    let store_bytes = journal.bytes();
    let figures =
        Figures { publishing, catching_up, emptying, cpu_s, meter, recovery, stopped, store_bytes };
    Ok((figures, observer))
}

impl Run<'_> {
    /// Kills the daemon, brings it back, and notes when the journal grows again, each at its time.
    fn live(&mut self) -> Result<(), String> {
        match self.life {
            Life::Up(Some(at)) if self.meter.elapsed() >= at => {
                self.read()?;
                if let Some(mut daemon) = self.daemon.take() {
                    daemon.kill()?;
                }
                self.meter.life_over();
                self.rows_at_kill = self.journal.newest()?;
                println!("       killed with {} rows in the journal", self.rows_at_kill);
                self.life = Life::Away(Instant::now() + AWAY);
            }
            Life::Away(until) if Instant::now() >= until => {
                self.life = Life::Back(Instant::now());
                self.daemon = Some(Process::daemon(self.folder)?);
            }
            Life::Back(since) if self.journal.newest()? > self.rows_at_kill => {
                self.recovery = Some((since.elapsed(), self.rows_at_kill));
                self.life = Life::Up(None);
            }
            _ => {}
        }
        self.broker.must_live()?;
        self.daemon.as_mut().map_or(Ok(()), Process::must_live)
    }

    fn read(&mut self) -> Result<(), String> {
        match &self.daemon {
            Some(daemon) => self.meter.read(daemon),
            None => Ok(()),
        }
    }
}
