//! What is read off during a run, once a second, and the table that tells it.

use crate::journal::Journal;
use crate::link::{Observer, Progress};
use crate::process::{Process, Sample};
use std::sync::atomic::Ordering;
use std::time::{Duration, Instant};

/// Seconds from one reading of the meter to the next.
const SAMPLE_EVERY: Duration = Duration::from_secs(1);
/// Samples from one line of the table to the next.
const SAMPLES_PER_LINE: u32 = 10;

/// The meter of a run. Processor time is summed over the lives of the daemon.
#[derive(Debug)]
pub struct Meter {
    started: Instant,
    samples: u32,
    /// Processor time of lives that are over, seconds.
    past_cpu_s: f64,
    newest: Sample,
    broker_cpu_s: f64,
    /// The most resident memory of any life, KiB.
    pub peak_kib: u64,
    /// Resident memory at the end of the first third of the publishing phase and now, KiB.
    pub rss_kib: (u64, u64),
    /// The most readings that the broker had taken and the journal did not hold yet.
    pub behind_max: u64,
    /// Transactions in the store, as far as they were seen.
    pub transactions: u64,
    newest_transaction: u32,
    line: (Instant, f64, f64),
}

impl Meter {
    /// Starts with a daemon that is online and a broker.
    pub fn start(daemon: &Process, broker: &Process) -> Result<Meter, String> {
        let now = Instant::now();
        let (newest, broker_cpu_s) = (daemon.sample()?, broker.sample()?.cpu_s);
        println!(
            "{:>6} {:>9} {:>9} {:>8} {:>10} {:>10} {:>9} {:>7}",
            "s", "taken", "journaled", "behind", "daemon", "broker", "resident", "alerts"
        );
        Ok(Meter {
            started: now,
            samples: 0,
            past_cpu_s: 0.0,
            newest,
            broker_cpu_s,
            peak_kib: newest.peak_kib,
            rss_kib: (newest.rss_kib, newest.rss_kib),
            behind_max: 0,
            transactions: 0,
            newest_transaction: 0,
            line: (now, newest.cpu_s, broker_cpu_s),
        })
    }

    /// Processor time of the daemon so far, seconds.
    pub fn cpu_s(&self) -> f64 {
        self.past_cpu_s + self.newest.cpu_s
    }

    /// How long the meter runs.
    pub fn elapsed(&self) -> Duration {
        self.started.elapsed()
    }

    /// Reads the daemon's processor time and memory.
    pub fn read(&mut self, daemon: &Process) -> Result<(), String> {
        self.newest = daemon.sample()?;
        self.peak_kib = self.peak_kib.max(self.newest.peak_kib);
        self.rss_kib.1 = self.newest.rss_kib;
        Ok(())
    }

    /// The daemon's life is over; what it used stays counted.
    pub fn life_over(&mut self) {
        self.past_cpu_s += self.newest.cpu_s;
        self.newest = Sample::default();
        self.newest_transaction = 0;
    }

    /// Reads everything when a second has passed; a line of the table with every tenth.
    ///
    /// # Arguments
    /// `daemon` — None while there is none; `third` — in the first third of the publishing phase.
    pub fn look(
        &mut self,
        daemon: Option<&Process>,
        broker: &Process,
        journal: &Journal,
        links: (&Progress, &Observer),
        third: bool,
    ) -> Result<(), String> {
        if self.elapsed() < SAMPLE_EVERY * (self.samples + 1) {
            return Ok(());
        }
        self.samples += 1;
        if let Some(daemon) = daemon {
            self.read(daemon)?;
            if third {
                self.rss_kib.0 = self.newest.rss_kib;
            }
            if let Some(count) = journal.transactions() {
                // A count that fell is that of a new life.
                let more = count.checked_sub(self.newest_transaction).unwrap_or(count);
                self.transactions += u64::from(more);
                self.newest_transaction = count;
            }
        }
        self.broker_cpu_s = broker.sample()?.cpu_s;
        // The broker's count first: rows that come between the two looks are not taken for a lag.
        let taken = links.0.taken.load(Ordering::Relaxed);
        let journaled = journal.newest()?;
        let behind = taken.saturating_sub(journaled);
        self.behind_max = self.behind_max.max(behind);
        if self.samples.is_multiple_of(SAMPLES_PER_LINE) {
            let (since, cpu_s, broker_s) = self.line;
            let wall_s = since.elapsed().as_secs_f64();
            println!(
                "{:>6.0} {taken:>9} {journaled:>9} {behind:>8} {:>8.0} % {:>8.0} % {:>5.1} MiB {:>7}",
                self.elapsed().as_secs_f64(),
                100.0 * (self.cpu_s() - cpu_s) / wall_s,
                100.0 * (self.broker_cpu_s - broker_s) / wall_s,
                self.newest.rss_kib as f64 / 1024.0,
                links.1.seen().events.len(),
            );
            self.line = (Instant::now(), self.cpu_s(), self.broker_cpu_s);
        }
        Ok(())
    }
}
