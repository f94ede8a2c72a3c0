//! Alerts of one channel: episodes, their states, and the events that tell of each transition.
//!
//! One concern has at most one open episode; an episode keeps its id through all its transitions,
//! whatever its kind is revised to. Ids are made of durable state only (site, channel, concern,
//! episode number, the time of its first transition), so a restart never mints a second one.
//!
//! States and their edges follow the alarm-management standards' terms (IEC 62682, ANSI/ISA-18.2;
//! from memory): unacknowledged → acknowledged → normal, unacknowledged → returned-unacknowledged →
//! normal, any open state ↔ shelved.

use crate::watch::time::{EventTime, ShellTime};
use crate::watch::wording::Words;
use serde::{Deserialize, Serialize};
use sha2::{Digest, Sha256};

/// What an alert is about; others rely on the names.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Hash, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Kind {
    /// The residuals jumped.
    Step,
    /// The rate of drift changed, or the family is wrong.
    Bend,
    /// Successive residuals move together more than is this channel's norm.
    Dependence,
    /// A statement is needed further ahead than the window supports.
    BeyondReach,
    /// The forecast leaves the tolerance before the asked day.
    ToleranceAhead,
    /// The deviation is outside the tolerance now.
    OutOfTolerance,
    /// No family describes the window.
    NoCurve,
    /// Nothing arrived for too long.
    Silent,
}

impl Kind {
    /// The name in topics, lines and JSON.
    pub const fn name(self) -> &'static str {
        match self {
            Kind::Step => "step",
            Kind::Bend => "bend",
            Kind::Dependence => "dependence",
            Kind::BeyondReach => "beyond-reach",
            Kind::ToleranceAhead => "tolerance-ahead",
            Kind::OutOfTolerance => "out-of-tolerance",
            Kind::NoCurve => "no-curve",
            Kind::Silent => "silent",
        }
    }

    /// Every kind.
    pub const ALL: [Kind; 8] = [
        Kind::Step,
        Kind::Bend,
        Kind::Dependence,
        Kind::BeyondReach,
        Kind::ToleranceAhead,
        Kind::OutOfTolerance,
        Kind::NoCurve,
        Kind::Silent,
    ];

    /// The concern under which it is raised.
    pub const fn concern(self) -> Concern {
        match self {
            Kind::Step | Kind::Bend | Kind::Dependence => Concern::Residuals,
            Kind::BeyondReach => Concern::Reach,
            Kind::ToleranceAhead => Concern::ToleranceAhead,
            Kind::OutOfTolerance => Concern::Tolerance,
            Kind::NoCurve => Concern::Curve,
            Kind::Silent => Concern::Silence,
        }
    }

    /// The NAMUR NE 107 letter to suggest, as an outside estimate: S (out of specification) or
    /// M (maintenance required); never F, since the device's own state is not known here.
    pub const fn suggested_status(self) -> Option<&'static str> {
        match self {
            Kind::Step | Kind::Bend | Kind::Dependence | Kind::OutOfTolerance => Some("S"),
            Kind::ToleranceAhead => Some("M"),
            Kind::BeyondReach | Kind::NoCurve | Kind::Silent => None,
        }
    }
}

/// A question that may be open about a channel; each has at most one open episode.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Concern {
    /// Do the residuals show structure?
    Residuals,
    /// Can the statement that is needed be made?
    Reach,
    /// Will it leave the tolerance?
    ToleranceAhead,
    /// Is it outside the tolerance?
    Tolerance,
    /// Is there a curve at all?
    Curve,
    /// Does anything arrive?
    Silence,
}

impl Concern {
    const fn name(self) -> &'static str {
        match self {
            Concern::Residuals => "residuals",
            Concern::Reach => "reach",
            Concern::ToleranceAhead => "tolerance-ahead",
            Concern::Tolerance => "tolerance",
            Concern::Curve => "curve",
            Concern::Silence => "silence",
        }
    }
}

/// State of an episode.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum State {
    /// The condition holds, nobody has confirmed seeing it.
    Unacknowledged,
    /// The condition holds, somebody has confirmed seeing it.
    Acknowledged,
    /// The condition is gone, nobody has confirmed seeing it.
    ReturnedUnacknowledged,
    /// Put aside by a person until a stated time.
    Shelved,
    /// Over; the episode is closed.
    Normal,
}

/// A step in the life of an episode.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Transition {
    /// The condition began to hold (or holds again before anybody acknowledged).
    Raised,
    /// Kind, size, date or severity of the same episode known better.
    Revised,
    /// A person confirmed seeing it.
    Acknowledged,
    /// A person put it aside.
    Shelved,
    /// The time on the shelf is over.
    Unshelved,
    /// The condition is gone, not yet acknowledged.
    Returned,
    /// The episode is closed.
    Cleared,
}

impl Transition {
    /// The name in event types and lines.
    pub const fn name(self) -> &'static str {
        match self {
            Transition::Raised => "raised",
            Transition::Revised => "revised",
            Transition::Acknowledged => "acknowledged",
            Transition::Shelved => "shelved",
            Transition::Unshelved => "unshelved",
            Transition::Returned => "returned",
            Transition::Cleared => "cleared",
        }
    }
}

/// The numbers behind an alert.
#[derive(Clone, Copy, Debug, Default, PartialEq, Serialize, Deserialize)]
pub struct Evidence {
    /// The score −log10 p for structure; days needed for reach; else absent.
    pub statistic: Option<f64>,
    /// Probability of a score as large if nothing were wrong.
    pub p: Option<f64>,
    /// Size, in the unit (a bend: unit per day; dependence: a correlation).
    pub size: Option<f64>,
    /// When the change is dated.
    pub at: Option<EventTime>,
}

/// What is raised: kind, numbers, words.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Claim {
    /// What it is about.
    pub kind: Kind,
    /// The numbers.
    pub evidence: Evidence,
    /// The words.
    pub words: Words,
}

/// Why a condition no longer holds.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize, Deserialize)]
pub enum Ending {
    /// The readings say so.
    #[default]
    ByReadings,
    /// A calibration is on record: the alert belonged to the cycle before.
    Calibrated,
    /// The day for which a statement was needed has passed.
    DayPassed,
    /// The window began anew, and what the alert rested on is no longer in it.
    WindowAnew,
    /// The deviation is outside the tolerance by now, which has its own alert.
    OutsideNow,
    /// By the settings, readings are measured otherwise from now on.
    Reconfigured,
}

/// One alert from raising to clearing.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Episode {
    /// The alert's id; the same through all transitions.
    pub alert: String,
    /// What it is about now.
    pub claim: Claim,
    /// Since when the condition holds.
    pub since: EventTime,
    /// Where it stands.
    pub state: State,
    /// Until when it is shelved, and the state it had before.
    pub shelf: Option<(ShellTime, bool)>,
    /// Transitions so far; part of each event's id.
    pub transitions: u32,
    /// Why the condition no longer holds, once it does not.
    pub ending: Ending,
}

/// An event in the life of an episode: what is published, logged and kept.
#[derive(Clone, Debug, PartialEq)]
pub struct AlertEvent {
    /// Unique, stable, from durable state only.
    pub id: String,
    /// What happened.
    pub transition: Transition,
    /// When, on the readings' time axis.
    pub time: EventTime,
    /// The episode after it.
    pub episode: Episode,
}

/// The alerts of one channel.
#[derive(Clone, Debug, Default, PartialEq, Serialize, Deserialize)]
pub struct AlertBook {
    open: Vec<Episode>,
    episodes_ever: u64,
}

/// Whose book it is: what goes into the ids.
#[derive(Clone, Copy, Debug)]
pub struct Owner<'a> {
    /// The site's name.
    pub site: &'a str,
    /// The channel's name.
    pub channel: &'a str,
}

impl AlertBook {
    /// The open episodes, in the order in which they were raised.
    pub fn open(&self) -> &[Episode] {
        &self.open
    }

    /// The episode of a concern whose condition holds, shelved or not.
    pub fn holding(&self, concern: Concern) -> Option<&Episode> {
        self.open
            .iter()
            .find(|e| e.claim.kind.concern() == concern && e.state != State::ReturnedUnacknowledged)
    }

    /// The condition holds: opens an episode, or brings a returned one back. None if it is open.
    pub fn raise(&mut self, owner: Owner<'_>, claim: Claim, time: EventTime) -> Option<AlertEvent> {
        let concern = claim.kind.concern();
        if self.holding(concern).is_some() {
            return None;
        }
        let returned = self.open.iter_mut().find(|e| e.claim.kind.concern() == concern);
        if let Some(episode) = returned {
            episode.claim = claim;
            episode.since = time;
            return Some(episode.step(Transition::Raised, State::Unacknowledged, time));
        }
        self.episodes_ever += 1;
        let alert = alert_id(owner, concern, self.episodes_ever, time);
        self.open.push(Episode {
            alert,
            claim,
            since: time,
            state: State::Unacknowledged,
            shelf: None,
            transitions: 0,
            ending: Ending::default(),
        });
        let episode = self.open.last_mut().expect("pushed just before");
        Some(episode.step(Transition::Raised, State::Unacknowledged, time))
    }

    /// The same episode is known better. None if its condition does not hold.
    pub fn revise(&mut self, claim: Claim, time: EventTime) -> Option<AlertEvent> {
        let concern = claim.kind.concern();
        let episode = self.open.iter_mut().find(|e| {
            e.claim.kind.concern() == concern && e.state != State::ReturnedUnacknowledged
        })?;
        episode.claim = claim;
        let state = episode.state;
        Some(episode.step(Transition::Revised, state, time))
    }

    /// Another condition has taken the place of the one that was told: as [`AlertBook::revise`], but
    /// nobody has seen this one yet.
    pub fn tell_anew(&mut self, claim: Claim, time: EventTime) -> Option<AlertEvent> {
        let concern = claim.kind.concern();
        for episode in self.open.iter_mut().filter(|e| e.claim.kind.concern() == concern) {
            if episode.state == State::Acknowledged {
                episode.state = State::Unacknowledged;
            }
            if let Some((_, acknowledged)) = &mut episode.shelf {
                *acknowledged = false;
            }
        }
        self.revise(claim, time)
    }

    /// The condition is gone, by the readings. None if there was none.
    pub fn lower(&mut self, concern: Concern, time: EventTime) -> Option<AlertEvent> {
        self.end(concern, time, Ending::ByReadings)
    }

    /// The condition is gone, for that reason. None if there was none.
    pub fn end(&mut self, concern: Concern, time: EventTime, ending: Ending) -> Option<AlertEvent> {
        let place = self.open.iter().position(|e| {
            e.claim.kind.concern() == concern && e.state != State::ReturnedUnacknowledged
        })?;
        self.open[place].ending = ending;
        let seen = match self.open[place].state {
            State::Unacknowledged => false,
            State::Shelved => self.open[place].shelf.is_some_and(|(_, acknowledged)| acknowledged),
            _ => true,
        };
        if seen {
            return Some(self.open.remove(place).step(Transition::Cleared, State::Normal, time));
        }
        self.open[place].shelf = None;
        Some(self.open[place].step(Transition::Returned, State::ReturnedUnacknowledged, time))
    }

    /// A person confirms seeing it. None: no open alert of that id, or acknowledged already.
    pub fn acknowledge(&mut self, alert: &str, time: EventTime) -> Option<AlertEvent> {
        let place = self.open.iter().position(|e| e.alert == alert)?;
        match self.open[place].state {
            State::Unacknowledged => {
                Some(self.open[place].step(Transition::Acknowledged, State::Acknowledged, time))
            }
            State::ReturnedUnacknowledged => {
                Some(self.open.remove(place).step(Transition::Cleared, State::Normal, time))
            }
            State::Acknowledged | State::Shelved | State::Normal => None,
        }
    }

    /// A person puts it aside until `until`. None: no open alert of that id that could be shelved.
    pub fn shelve(&mut self, alert: &str, until: ShellTime, time: EventTime) -> Option<AlertEvent> {
        let episode = self.open.iter_mut().find(|e| e.alert == alert)?;
        let acknowledged = match episode.state {
            State::Unacknowledged => false,
            State::Acknowledged => true,
            State::ReturnedUnacknowledged | State::Shelved | State::Normal => return None,
        };
        episode.shelf = Some((until, acknowledged));
        Some(episode.step(Transition::Shelved, State::Shelved, time))
    }

    /// The earliest end of a time on the shelf.
    pub fn next_unshelving(&self) -> Option<ShellTime> {
        self.open.iter().filter_map(|e| e.shelf.map(|(until, _)| until)).min()
    }

    /// Takes off the shelf what has been there long enough.
    pub fn unshelve(&mut self, now: ShellTime, time: EventTime) -> Vec<AlertEvent> {
        let mut events = Vec::new();
        for episode in &mut self.open {
            if let Some((until, acknowledged)) = episode.shelf
                && until <= now
            {
                episode.shelf = None;
                let state = if acknowledged { State::Acknowledged } else { State::Unacknowledged };
                events.push(episode.step(Transition::Unshelved, state, time));
            }
        }
        events
    }
}

impl Episode {
    fn step(&mut self, transition: Transition, state: State, time: EventTime) -> AlertEvent {
        self.state = state;
        self.transitions += 1;
        AlertEvent {
            id: format!("{}-{}", self.alert, self.transitions),
            transition,
            time,
            episode: self.clone(),
        }
    }
}

/// 16 hexadecimal digits of SHA-256 over the durable facts, each closed by a byte that names cannot
/// hold (0x1F), so that no two lists of facts run together.
fn alert_id(owner: Owner<'_>, concern: Concern, episode: u64, time: EventTime) -> String {
    let facts =
        [owner.site, owner.channel, concern.name(), &episode.to_string(), &time.0.to_string()];
    let mut hash = Sha256::new();
    for fact in facts {
        hash.update(fact.as_bytes());
        hash.update([0x1F]);
    }
    hash.finalize()[..8].iter().map(|byte| format!("{byte:02x}")).collect()
}

#[cfg(test)]
mod tests {
    use super::*;

    const OWNER: Owner<'static> = Owner { site: "saltmarsh", channel: "press.PT-4107" };

    fn claim(kind: Kind) -> Claim {
        Claim { kind, evidence: Evidence::default(), words: Words::default() }
    }

    /// Runs the verbs over one book and returns `transition/state` of each event.
    fn check(verbs: &[&str]) -> Vec<String> {
        let mut book = AlertBook::default();
        let mut id = String::new();
        let mut seen = Vec::new();
        for (k, verb) in verbs.iter().enumerate() {
            let time = EventTime(k as i64);
            let events: Vec<AlertEvent> = match *verb {
                "raise" => book.raise(OWNER, claim(Kind::Step), time).into_iter().collect(),
                "revise" => book.revise(claim(Kind::Bend), time).into_iter().collect(),
                "anew" => book.tell_anew(claim(Kind::Bend), time).into_iter().collect(),
                "lower" => book.lower(Concern::Residuals, time).into_iter().collect(),
                "ack" => book.acknowledge(&id, time).into_iter().collect(),
                "shelve" => book.shelve(&id, ShellTime(100), time).into_iter().collect(),
                "unshelve" => book.unshelve(ShellTime(100), time),
                other => unreachable!("{other}"),
            };
            for event in events {
                id.clone_from(&event.episode.alert);
                seen.push(format!("{}/{:?}", event.transition.name(), event.episode.state));
            }
        }
        seen
    }

    #[test]
    fn acknowledged_alert_clears_when_the_condition_goes() {
        assert_eq!(
            check(&["raise", "ack", "lower"]),
            ["raised/Unacknowledged", "acknowledged/Acknowledged", "cleared/Normal"]
        );
    }

    #[test]
    fn unseen_alert_stands_as_returned_until_acknowledged() {
        assert_eq!(
            check(&["raise", "lower", "lower", "ack", "ack"]),
            ["raised/Unacknowledged", "returned/ReturnedUnacknowledged", "cleared/Normal"]
        );
    }

    #[test]
    fn one_concern_has_one_open_episode() {
        assert_eq!(
            check(&["raise", "raise", "revise"]),
            ["raised/Unacknowledged", "revised/Unacknowledged"]
        );
    }

    #[test]
    fn what_is_told_anew_nobody_has_seen_yet() {
        assert_eq!(
            check(&["raise", "ack", "anew", "ack"]),
            [
                "raised/Unacknowledged",
                "acknowledged/Acknowledged",
                "revised/Unacknowledged",
                "acknowledged/Acknowledged"
            ]
        );
        assert_eq!(
            check(&["raise", "ack", "shelve", "anew", "unshelve"])[3..],
            ["revised/Shelved", "unshelved/Unacknowledged"]
        );
        assert_eq!(check(&["raise", "lower", "anew"]).len(), 2);
    }

    #[test]
    fn shelved_alert_comes_back_as_it_was() {
        assert_eq!(
            check(&["raise", "ack", "shelve", "unshelve"]),
            [
                "raised/Unacknowledged",
                "acknowledged/Acknowledged",
                "shelved/Shelved",
                "unshelved/Acknowledged"
            ]
        );
    }

    #[test]
    fn ids_rest_on_durable_facts_and_differ_between_episodes() {
        let mut book = AlertBook::default();
        let first = book.raise(OWNER, claim(Kind::Step), EventTime(5)).unwrap();
        let mut twin = AlertBook::default();
        let same = twin.raise(OWNER, claim(Kind::Step), EventTime(5)).unwrap();
        assert_eq!(first.id, same.id);
        book.acknowledge(&first.episode.alert, EventTime(6));
        book.lower(Concern::Residuals, EventTime(7));
        let second = book.raise(OWNER, claim(Kind::Step), EventTime(8)).unwrap();
        assert_ne!(first.episode.alert, second.episode.alert);
    }
}
