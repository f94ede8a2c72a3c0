//! Word to the service manager: ready, alive, stopping. Nothing happens where there is none.

use crate::service::clock::Stopwatch;
use sd_notify::NotifyState;
use std::time::Duration;

/// The link to the service manager.
#[derive(Debug)]
pub struct Notify {
    ready: bool,
    /// Half of the watchdog's time, if there is a watchdog.
    every: Option<Duration>,
    last: Option<Stopwatch>,
}

impl Notify {
    /// As the environment says (`NOTIFY_SOCKET`, `WATCHDOG_USEC`).
    pub fn from_environment() -> Notify {
        let every = sd_notify::watchdog_enabled().map(|time| time / 2);
        Notify { ready: false, every, last: None }
    }

    /// The first subscription is granted.
    pub fn ready(&mut self) {
        if !self.ready {
            self.ready = true;
            tell(&[NotifyState::Ready]);
        }
    }

    /// The loop has gone round: called by its pulse.
    pub fn alive(&mut self, journaled: u64, channels: usize) {
        let due = match (self.every, &self.last) {
            (Some(every), Some(last)) => last.elapsed() + Duration::from_secs(1) >= every,
            (Some(_), None) => true,
            (None, _) => return,
        };
        if due {
            self.last = Some(Stopwatch::start());
            let status =
                format!("{channels} channels, {journaled} readings stored since the start");
            tell(&[NotifyState::Watchdog, NotifyState::Status(&status)]);
        }
    }

    /// The orderly stop has begun.
    pub fn stopping(&self) {
        tell(&[NotifyState::Stopping]);
    }
}

fn tell(states: &[NotifyState<'_>]) {
    if let Err(why) = sd_notify::notify(states) {
        tracing::debug!("the service manager did not take word: {why}");
    }
}
