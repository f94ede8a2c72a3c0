//! The desk: the daemon's state between events, without any waiting in it.
//!
//! Messages come in, are decoded and put down for the journal; committed rows go through the engine;
//! what follows is bundled for the store. The loop around it is in [`crate::service::daemon`].

use crate::service::clock::Clock;
use crate::service::intake::{Decoded, Excerpt, Refusal, Router};
use crate::service::outbox::{Told, tell};
use crate::service::recall::{Recall, key_of_message, key_of_reading};
use crate::service::recover::{Applied, Recovered, apply, state_bytes};
use crate::service::request;
use crate::service::settings::Settings;
use crate::service::store::{Bundle, NewMessage, NewRow};
use crate::watch::engine::{Action, Effect, Engine};
use crate::watch::reading::Taken;
use crate::watch::time::ShellTime;
use std::collections::BTreeMap;

/// The longest topic for a reply that is accepted, bytes and levels; else the reply goes to ours.
const REPLY_TOPIC_BYTES_MAX: usize = 256;
const REPLY_TOPIC_LEVELS_MAX: usize = 16;
/// Readings stored and not fitted that are named in one turn; further ones are only counted.
const UNFITTED_NAMED_MAX: usize = 64;
/// States saved in one transaction when nothing urgent is to be saved.
const STATES_AT_A_TIME: usize = 256;

/// A message as it came, whatever connection it came over.
#[derive(Clone, Debug)]
pub struct Arrival<'a> {
    /// Its topic. Foreign text.
    pub topic: &'a str,
    /// Its payload.
    pub payload: &'a [u8],
    /// The broker marks it as delivered before.
    pub duplicate: bool,
    /// The broker had kept it.
    pub retained: bool,
    /// Its packet id on this connection.
    pub packet_id: u16,
    /// Where a reply goes, for requests.
    pub response_topic: Option<&'a str>,
    /// What that reply must carry.
    pub correlation: Option<&'a [u8]>,
}

/// What to do with a message.
#[derive(Clone, Debug, PartialEq)]
pub enum Put {
    /// Journal this row, then acknowledge.
    Journal(Box<Entry>),
    /// Acknowledge: it adds nothing.
    Nothing,
}

/// A row for the journal, with what the engine needs besides.
#[derive(Clone, Debug, PartialEq)]
pub struct Entry {
    /// The row.
    pub row: NewRow,
    /// The watch, index into the settings.
    pub watch: usize,
    /// Where a reply goes, once done.
    pub reply_to: Option<ReplyTo>,
}

/// Where a reply goes, and what makes the asker know it again.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct ReplyTo {
    topic: String,
    correlation: Option<Vec<u8>>,
}

/// Counts of what arrived, for the summary and the log.
#[derive(Clone, Debug, Default, PartialEq, Eq)]
pub struct Arrivals {
    /// Messages received.
    pub received: u64,
    /// Rows journaled.
    pub journaled: u64,
    /// Messages known already.
    pub duplicates: u64,
    /// Readings stored and not fitted, by reason.
    pub unfitted: BTreeMap<&'static str, u64>,
    /// Messages refused, by reason.
    pub refused: BTreeMap<&'static str, u64>,
}

/// The daemon's state between events.
#[derive(Debug)]
pub struct Desk {
    settings: Settings,
    clock: Clock,
    router: Router,
    engine: Engine,
    recall: Recall,
    own_topics: String,
    /// First journal row that is not in the saved state, by channel.
    unsaved: BTreeMap<String, i64>,
    newest_row: i64,
    /// The watch of each channel that the engine will know once what waits is committed.
    first_waiting: BTreeMap<String, usize>,
    subscribed_before: bool,
    told: Told,
    unfitted: Vec<(String, Taken)>,
    /// What arrived.
    pub arrivals: Arrivals,
}

impl Desk {
    /// A desk over what was recovered; `newest_row` is the journal's last.
    pub fn new(
        settings: Settings,
        clock: Clock,
        router: Router,
        recovered: Recovered,
        newest_row: i64,
    ) -> Desk {
        let mut desk = Desk {
            own_topics: settings.own_topics(),
            settings,
            clock,
            router,
            engine: recovered.engine,
            recall: recovered.recall,
            unsaved: recovered.unsaved,
            newest_row,
            first_waiting: BTreeMap::new(),
            subscribed_before: recovered.subscribed_before,
            told: Told::default(),
            unfitted: Vec::new(),
            arrivals: Arrivals::default(),
        };
        desk.tell(recovered.effects);
        desk
    }

    /// The time, by the clock this desk goes by.
    pub fn now(&self) -> ShellTime {
        self.clock.now()
    }

    /// The engine, to look at.
    pub fn engine(&self) -> &Engine {
        &self.engine
    }

    /// The filters to subscribe to: the watches' topics, and people's requests.
    pub fn filters(&self) -> Vec<String> {
        let mut filters = self.router.filters();
        filters.push(format!("{}/request/+", self.own_topics));
        filters
    }

    /// Decides what a message is. The refusal, if any, is for the log.
    pub fn receive(&mut self, arrival: &Arrival<'_>) -> (Put, Option<Refusal>) {
        self.arrivals.received += 1;
        if let Some(verb) = arrival
            .topic
            .strip_prefix(&self.own_topics)
            .and_then(|rest| rest.strip_prefix("/request/"))
        {
            return (self.request(verb, arrival), None);
        }
        let decoded = self
            .router
            .decode(arrival.topic, arrival.payload, self.now())
            .and_then(|(watch, decoded)| Ok((watch, decoded.unless_stale(arrival.retained)?)));
        let decoded = decoded.and_then(|(watch, decoded)| {
            self.clock.saw(decoded.time);
            Ok((watch, decoded.unless_ahead_of(self.now())?))
        });
        let decoded = decoded.and_then(|(watch, decoded)| self.of_its_watch(watch, decoded));
        match decoded {
            Ok((watch, decoded)) => (self.reading(arrival, watch, decoded), None),
            Err(refusal) => {
                *self.arrivals.refused.entry(refusal.code()).or_default() += 1;
                (Put::Nothing, Some(refusal))
            }
        }
    }

    /// The reading, unless its channel is another watch's: one whose first reading waits for its commit
    /// included. A row names its channel only, so such a reading must not come into the journal.
    fn of_its_watch(&self, watch: usize, decoded: Decoded) -> Result<(usize, Decoded), Refusal> {
        let channel = &decoded.channel;
        let owner = self.engine.watch_of(channel).or(self.first_waiting.get(channel).copied());
        match owner.filter(|owner| *owner != watch) {
            Some(owner) => Err(Refusal::OtherWatch {
                channel: Excerpt::of(channel),
                owner: Excerpt::of(self.router.route_of(owner).pattern.as_str()),
            }),
            None => Ok((watch, decoded)),
        }
    }

    fn reading(&mut self, arrival: &Arrival<'_>, watch: usize, decoded: Decoded) -> Put {
        let Decoded { channel, time, own_time, deviation } = decoded;
        let key = if own_time {
            key_of_reading(&channel, time.0, deviation)
        } else {
            key_of_message(arrival.topic, arrival.payload, arrival.packet_id)
        };
        if self.recall.knows(key) && (own_time || arrival.duplicate) {
            self.arrivals.duplicates += 1;
            return Put::Nothing;
        }
        self.recall.remember(key);
        if self.engine.watch_of(&channel).is_none() {
            self.first_waiting.insert(channel.clone(), watch);
        }
        let row = NewRow {
            channel,
            watch: self.pattern_of(watch),
            time: time.0,
            value: deviation,
            got: self.now().0,
            message: if own_time { 0 } else { key },
            action: None,
        };
        Put::Journal(Box::new(Entry { row, watch, reply_to: None }))
    }

    fn pattern_of(&self, watch: usize) -> String {
        self.router.route_of(watch).pattern.as_str().to_owned()
    }

    fn request(&mut self, verb: &str, arrival: &Arrival<'_>) -> Put {
        let reply_to = self.reply_to(verb, arrival);
        if arrival.retained {
            // An old request that the broker keeps is nobody's wish of today.
            return Put::Nothing;
        }
        match request::read(verb, arrival.payload, &self.engine, self.now()) {
            Ok((channel, action)) => {
                let watch = self.engine.watch_of(&channel).unwrap_or(0);
                let row = NewRow {
                    watch: self.pattern_of(watch),
                    channel,
                    time: 0,
                    value: 0.0,
                    got: self.now().0,
                    message: 0,
                    action: Some(
                        serde_json::to_string(&action).expect("plain data serialises to memory"),
                    ),
                };
                Put::Journal(Box::new(Entry { row, watch, reply_to: Some(reply_to) }))
            }
            Err(fault) => {
                self.reply(reply_to, false, &fault.to_string());
                Put::Nothing
            }
        }
    }

    /// The topic that the request asks its answer on, if an answer may go there; else ours. Not below
    /// the topic root: what is published there passes for this service's own word, or another site's.
    fn reply_to(&self, verb: &str, arrival: &Arrival<'_>) -> ReplyTo {
        let asked = arrival.response_topic.filter(|topic| {
            is_plain_topic(topic)
                && self.router.route(topic).is_none()
                && !topic.starts_with(&format!("{}/", self.settings.broker.topic_root))
        });
        let own = || format!("{}/reply/{verb}", self.own_topics);
        let correlation = arrival.correlation.map(|data| data[..data.len().min(256)].to_vec());
        ReplyTo { topic: asked.map_or_else(own, str::to_owned), correlation }
    }

    fn reply(&mut self, to: ReplyTo, done: bool, why: &str) {
        let ReplyTo { topic, correlation } = to;
        self.told.bundle.messages.push(NewMessage {
            topic,
            correlation,
            payload: serde_json::json!({"done": done, "why": why}).to_string().into_bytes(),
            retained: false,
            content_type: Some("application/json".to_owned()),
            event_id: None,
        });
    }

    /// Takes rows that are durable now, the first of them journal row `first`.
    pub fn committed(&mut self, first: i64, entries: Vec<Entry>) {
        for (id, entry) in (first..).zip(entries) {
            let Entry { row, watch, reply_to } = entry;
            self.attend(ShellTime(row.got));
            self.arrivals.journaled += 1;
            self.newest_row = id;
            self.first_waiting.remove(&row.channel);
            self.unsaved.entry(row.channel.clone()).or_insert(id);
            let applied =
                apply(&mut self.engine, id, watch, &row.channel, &row, ShellTime(row.got));
            self.note_unfitted(&row.channel, applied);
            let done = matches!(applied, Applied::Action(true));
            if let Some(to) = reply_to {
                let why = if done { "done" } else { why_not(&row) };
                self.reply(to, done, why);
            }
        }
        self.collect();
    }

    fn note_unfitted(&mut self, channel: &str, applied: Applied) {
        let Applied::Reading(taken) = applied else { return };
        if taken.is_used() {
            return;
        }
        *self.arrivals.unfitted.entry(taken.code()).or_default() += 1;
        if self.unfitted.len() < UNFITTED_NAMED_MAX {
            self.unfitted.push((channel.to_owned(), taken));
        }
    }

    /// Readings since the last call that were stored and not fitted: channel and why, for the log.
    pub fn unfitted(&mut self) -> Vec<(String, Taken)> {
        std::mem::take(&mut self.unfitted)
    }

    /// Does what is due by the clock.
    pub fn tick(&mut self) {
        // A clock that follows the readings is ahead of those that are not committed yet; there their
        // own turn attends to what is due.
        if matches!(self.clock, Clock::System) {
            self.attend(self.now());
        }
        self.collect();
    }

    /// Does what was due at each moment up to `now`, in its order.
    fn attend(&mut self, now: ShellTime) {
        while let Some(due) = self.engine.next_due().filter(|due| *due <= now) {
            self.engine.tick(due);
        }
    }

    /// Turns waiting effects into what is to be told.
    pub fn collect(&mut self) {
        let effects = self.engine.effects();
        self.tell(effects);
    }

    fn tell(&mut self, effects: Vec<Effect>) {
        if effects.is_empty() {
            return;
        }
        let told = tell(&self.engine, effects, &self.own_topics, self.now());
        self.told.bundle.messages.extend(told.bundle.messages);
        self.told.bundle.alerts.extend(told.bundle.alerts);
        self.told.changed.extend(told.changed);
        self.told.lines.extend(told.lines);
    }

    /// Tells once more, retained, the finding and the open alerts of each channel: for a broker that
    /// has forgotten them.
    pub fn tell_all_again(&mut self) {
        let mut effects = Vec::new();
        for (channel, finding) in self.engine.overview() {
            let standing = channel.alerts.open().to_vec();
            effects.push(Effect::Standing { channel: channel.name.clone(), open: standing });
            effects.extend(finding.map(|finding| Effect::Finding(Box::new(finding))));
        }
        let told = tell(&self.engine, effects, &self.own_topics, self.now());
        self.told.bundle.messages.extend(told.bundle.messages);
    }

    /// Whether a broker should have a session of ours from before this start.
    pub fn subscribed_before(&self) -> bool {
        self.subscribed_before
    }

    /// The technician's lines since the last call.
    pub fn lines(&mut self) -> Vec<String> {
        std::mem::take(&mut self.told.lines)
    }

    /// What is to be saved now, in one transaction; None when there is nothing. With `everything`,
    /// all states that are behind are saved too (some of them at a time without it, by `routine`).
    pub fn bundle(&mut self, routine: bool, everything: bool) -> Option<Bundle> {
        let mut bundle = std::mem::take(&mut self.told.bundle);
        let mut channels: Vec<String> = std::mem::take(&mut self.told.changed);
        if routine || everything {
            let most = if everything { usize::MAX } else { STATES_AT_A_TIME };
            // Longest behind first, so that the journal need not be read from far back.
            let mut behind: Vec<(i64, &String)> =
                self.unsaved.iter().map(|(name, &first)| (first, name)).collect();
            behind.sort();
            channels.extend(behind.into_iter().take(most).map(|(_, name)| name.clone()));
        }
        channels.sort();
        channels.dedup();
        for name in channels {
            if let Some(channel) = self.engine.observe(&name) {
                bundle.states.push((name.clone(), self.newest_row, state_bytes(channel)));
            }
            self.unsaved.remove(&name);
        }
        if !bundle.states.is_empty() {
            let from = self.unsaved.values().min().map_or(self.newest_row, |first| first - 1);
            bundle.replay_from = Some(from);
        }
        let empty =
            bundle.states.is_empty() && bundle.messages.is_empty() && bundle.alerts.is_empty();
        (!empty).then_some(bundle)
    }

    /// The topic of the service's own state.
    pub fn service_topic(&self) -> String {
        format!("{}/service", self.own_topics)
    }

    /// The settings in force.
    pub fn settings(&self) -> &Settings {
        &self.settings
    }
}

/// Whether a topic that somebody else names can be published to: a broker ends the connection over
/// some, and a message that ends the connection would keep all others from going out.
fn is_plain_topic(topic: &str) -> bool {
    let levels = topic.split('/').count();
    !topic.is_empty()
        && topic.len() <= REPLY_TOPIC_BYTES_MAX
        && levels <= REPLY_TOPIC_LEVELS_MAX
        && !topic.starts_with('$')
        && !topic.contains(|c: char| c == '+' || c == '#' || c.is_control())
}

/// Why a request that was journaled changed nothing: what it needs was there when it was read.
fn why_not(row: &NewRow) -> &'static str {
    match row.action.as_deref().map(serde_json::from_str) {
        Some(Ok(Action::Calibrated { .. })) => {
            "not done: a later calibration is on record by now, and age zero does not move back"
        }
        _ => "nothing to change: no such open alert",
    }
}
