//! The engine: all channels, the budget they share, and what the shell must do.
//!
//! Readings and actions go in with their journal numbers, effects come out. The same readings in the
//! same order give the same effects, whether live, replayed or continued after a restart.

use crate::watch::alert::{AlertEvent, Concern, Episode};
use crate::watch::budget::Budget;
use crate::watch::channel::{Channel, Context, Outcome, Work};
use crate::watch::finding::Finding;
use crate::watch::incident::Look;
use crate::watch::judge;
use crate::watch::limits::CHANNELS_MAX;
use crate::watch::reading::{Counts, Reading, Taken};
use crate::watch::report;
use crate::watch::settings::{Basis, SiteSettings};
use crate::watch::time::{EventTime, ShellTime};
use serde::{Deserialize, Serialize};
use std::collections::BTreeMap;

/// What the shell must do.
#[derive(Clone, Debug, PartialEq)]
pub enum Effect {
    /// Publish, retained: the newest finding of a channel.
    Finding(Box<Finding>),
    /// Publish, log and keep: a transition of an alert.
    Alert {
        /// The channel.
        channel: String,
        /// What happened.
        event: Box<AlertEvent>,
        /// The finding at that moment, for the event's context.
        finding: Option<Box<Finding>>,
    },
    /// Publish, retained: the alerts that stand now.
    Standing {
        /// The channel.
        channel: String,
        /// In the order in which they were raised.
        open: Vec<Episode>,
    },
    /// For auditing: a look at the residuals.
    Looked {
        /// The channel.
        channel: String,
        /// The newest point's time.
        at: EventTime,
        /// The newest point's index.
        index: u64,
        /// Scores and thresholds.
        look: Box<Look>,
    },
}

/// Something that a person tells the engine; journaled like a reading.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub enum Action {
    /// The channel was calibrated: age zero is there.
    Calibrated {
        /// When.
        at: EventTime,
        /// Deviation before any adjustment, in the channel's unit.
        as_found: Option<f64>,
        /// Deviation after it.
        as_left: Option<f64>,
        /// What the person wrote.
        note: Option<String>,
    },
    /// An alert was seen.
    Acknowledge {
        /// Its id.
        alert: String,
    },
    /// An alert is put aside.
    Shelve {
        /// Its id.
        alert: String,
        /// Until when.
        until: ShellTime,
    },
    /// The settings have changed what the channel's points rest on. Journaled at the start that saw it,
    /// so that what follows from the journal stays the same.
    Reconfigured {
        /// What they rested on.
        was: Basis,
        /// What those to come rest on.
        is: Basis,
    },
}

/// All channels and what they share.
#[derive(Debug)]
pub struct Engine {
    settings: SiteSettings,
    channels: Vec<Channel>,
    /// The watch of each channel, index into the settings.
    watches: Vec<usize>,
    index: BTreeMap<String, usize>,
    /// What the points of channels rest on that are still to be rebuilt, where not on the settings.
    to_be_born: BTreeMap<String, Basis>,
    /// Journal numbers at which channels began, rising.
    births: Vec<u64>,
    listening_since: ShellTime,
    /// No channel wants attention before this; absent: none ever.
    due: Option<ShellTime>,
    effects: Vec<Effect>,
    refused: Counts,
    /// Memory that the looks share; holds nothing between them.
    work: Work,
}

impl Engine {
    /// An engine that knows no channel yet.
    pub fn new(settings: SiteSettings, now: ShellTime) -> Engine {
        Engine {
            settings,
            channels: Vec::new(),
            watches: Vec::new(),
            index: BTreeMap::new(),
            to_be_born: BTreeMap::new(),
            births: Vec::new(),
            listening_since: now,
            due: None,
            effects: Vec::new(),
            refused: Counts::default(),
            work: Work::default(),
        }
    }

    /// Continues with a channel saved earlier; `watch` is its index in the present settings.
    pub fn restore(&mut self, channel: Channel, watch: usize) {
        let place = self.births.partition_point(|&born| born <= channel.born);
        self.births.insert(place, channel.born);
        self.index.insert(channel.name.clone(), self.channels.len());
        self.channels.push(channel);
        self.watches.push(watch);
        self.note_due(self.channels.len() - 1);
    }

    /// A channel that is rebuilt from the journal began under other settings than the present ones.
    pub fn begins_on(&mut self, channel: String, basis: Basis) {
        self.to_be_born.insert(channel, basis);
    }

    /// A channel that is rebuilt was silent here, as the log of alerts has it: when the service listened
    /// is not in the journal.
    pub fn was_silent(&mut self, channel: &str) {
        let Some(&place) = self.index.get(channel) else { return };
        let context = context(&self.settings, self.watches[place], &self.births, u64::MAX);
        let known = &mut self.channels[place];
        let (always, never_heard) = (ShellTime(i64::MAX), known.last_arrival);
        let mut outcome = Outcome::default();
        judge::silence(known, &context, always, never_heard, &mut outcome);
        self.tell(place, outcome);
        self.note_due(place);
    }

    /// What the points of each channel rest on where that is not what the settings say now: channel,
    /// watch, what it was, what it is.
    pub fn unlike_the_settings(&self) -> Vec<(String, usize, Basis, Basis)> {
        let known = self.index.iter().map(|(name, &place)| (name, place));
        known
            .filter_map(|(name, place)| {
                let (was, watch) = (&self.channels[place].basis, self.watches[place]);
                let is = self.settings.watches[watch].basis();
                (*was != is).then(|| (name.clone(), watch, was.clone(), is))
            })
            .collect()
    }

    /// Takes a reading that is already durable.
    pub fn take(
        &mut self,
        channel: &str,
        watch: usize,
        reading: &Reading,
        now: ShellTime,
    ) -> Taken {
        let Some(place) = self.place_of(channel, watch, reading.serial, now) else {
            self.refused.note(Taken::TooManyChannels);
            return Taken::TooManyChannels;
        };
        if self.watches[place] != watch {
            self.channels[place].counts.note(Taken::OtherWatch);
            return Taken::OtherWatch;
        }
        let context = context(&self.settings, self.watches[place], &self.births, reading.serial);
        let (taken, outcome) = self.channels[place].take(&context, reading, now, &mut self.work);
        self.tell(place, outcome);
        self.note_due(place);
        taken
    }

    /// Does what a person says. False: no such channel or alert, nothing to change, or a calibration
    /// mark that is older than age zero.
    pub fn act(&mut self, channel: &str, action: &Action, serial: u64, now: ShellTime) -> bool {
        let Some(&place) = self.index.get(channel) else { return false };
        let context = context(&self.settings, self.watches[place], &self.births, serial);
        let known = &mut self.channels[place];
        let time = known.window.newest_reading().unwrap_or(EventTime(now.0));
        let mut outcome = Outcome::default();
        match action {
            Action::Calibrated { at, .. } if known.calibrated_later_than(*at).is_some() => {
                return false;
            }
            Action::Calibrated { at, as_left, .. } => {
                outcome = known.calibrated(&context, *at, *as_left);
            }
            Action::Reconfigured { was, is } => {
                outcome = known.reconfigured(&context, was, is, time);
            }
            Action::Acknowledge { alert } => {
                outcome.events.extend(known.alerts.acknowledge(alert, time));
            }
            Action::Shelve { alert, until } => {
                outcome.events.extend(known.alerts.shelve(alert, *until, time));
            }
        }
        let always = matches!(action, Action::Calibrated { .. } | Action::Reconfigured { .. });
        let changed = always || !outcome.events.is_empty();
        self.tell(place, outcome);
        self.note_due(place);
        changed
    }

    /// The earliest moment, by the shell's time, at which something may want attention: silence, the
    /// end of a shelf. A [`Engine::tick`] then puts it off where nothing did.
    pub fn next_due(&self) -> Option<ShellTime> {
        self.due
    }

    fn note_due(&mut self, place: usize) {
        self.due = self.due.into_iter().chain(self.due_of(place)).min();
    }

    fn due_of(&self, place: usize) -> Option<ShellTime> {
        let channel = &self.channels[place];
        let rules = &self.settings.watches[self.watches[place]];
        let heard = channel.last_arrival.max(self.listening_since);
        let speaks = channel.alerts.holding(Concern::Silence).is_none();
        let silent = speaks.then(|| heard.plus(rules.silent_after));
        silent.into_iter().chain(channel.alerts.next_unshelving()).min()
    }

    /// Does what is due by the shell's time.
    pub fn tick(&mut self, now: ShellTime) {
        for place in 0..self.channels.len() {
            let context = context(&self.settings, self.watches[place], &self.births, u64::MAX);
            let channel = &mut self.channels[place];
            let mut outcome = Outcome::default();
            judge::silence(channel, &context, now, self.listening_since, &mut outcome);
            let time = channel.window.newest_reading().unwrap_or(EventTime(now.0));
            outcome.events.extend(channel.alerts.unshelve(now, time));
            self.tell(place, outcome);
        }
        let due = (0..self.channels.len()).filter_map(|place| self.due_of(place));
        // What was due has been done: only what is to come is left.
        self.due = due.filter(|due| *due > now).min();
    }

    /// What the shell must do since the last call, in order.
    pub fn effects(&mut self) -> Vec<Effect> {
        std::mem::take(&mut self.effects)
    }

    /// One channel, as it is.
    pub fn observe(&self, channel: &str) -> Option<&Channel> {
        self.index.get(channel).map(|&place| &self.channels[place])
    }

    /// The watch of a channel, index into the settings.
    pub fn watch_of(&self, channel: &str) -> Option<usize> {
        self.index.get(channel).map(|&place| self.watches[place])
    }

    /// The channel whose open alert has that id.
    pub fn channel_of_alert(&self, alert: &str) -> Option<&str> {
        self.channels
            .iter()
            .find(|channel| channel.alerts.open().iter().any(|episode| episode.alert == alert))
            .map(|channel| channel.name.as_str())
    }

    /// All channels, in the order of their names.
    pub fn overview(&self) -> impl Iterator<Item = (&Channel, Option<Finding>)> {
        self.index.values().map(|&place| {
            let context = context(&self.settings, self.watches[place], &self.births, u64::MAX);
            let channel = &self.channels[place];
            (channel, report::finding_if_any(channel, &context))
        })
    }

    /// How many channels there are.
    pub fn overview_count(&self) -> usize {
        self.channels.len()
    }

    /// What became of all readings.
    pub fn counts(&self) -> Counts {
        let mut sum = self.refused.clone();
        self.channels.iter().for_each(|channel| sum.add(&channel.counts));
        sum
    }

    /// The unit of a channel; empty for one that is not known.
    pub fn unit_of(&self, channel: &str) -> &str {
        self.index
            .get(channel)
            .map_or("", |&place| &self.settings.watches[self.watches[place]].unit)
    }

    /// The settings in force.
    pub fn settings(&self) -> &SiteSettings {
        &self.settings
    }

    fn place_of(&mut self, name: &str, watch: usize, serial: u64, now: ShellTime) -> Option<usize> {
        if let Some(&place) = self.index.get(name) {
            return Some(place);
        }
        if self.channels.len() >= CHANNELS_MAX {
            return None;
        }
        let basis = self.to_be_born.remove(name);
        let basis = basis.unwrap_or_else(|| self.settings.watches[watch].basis());
        self.restore(Channel::new(name.to_owned(), serial, now, basis), watch);
        Some(self.channels.len() - 1)
    }

    /// Turns what followed from an input into effects.
    fn tell(&mut self, place: usize, outcome: Outcome) {
        let channel = &self.channels[place];
        let name = &channel.name;
        for (at, index, look) in outcome.looks {
            let look = Box::new(look);
            self.effects.push(Effect::Looked { channel: name.clone(), at, index, look });
        }
        let finding = outcome.findings.into_iter().next_back();
        let any = !outcome.events.is_empty();
        for event in outcome.events {
            self.effects.push(Effect::Alert {
                channel: name.clone(),
                event: Box::new(event),
                finding: finding.clone().map(Box::new),
            });
        }
        if any {
            self.effects.push(Effect::Standing {
                channel: name.clone(),
                open: channel.alerts.open().to_vec(),
            });
        }
        self.effects.extend(finding.map(|finding| Effect::Finding(Box::new(finding))));
    }
}

/// The budget counts the channels that existed when this journal number was made, so that a restart,
/// which knows all of them at once, comes to the same thresholds.
fn context<'a>(
    settings: &'a SiteSettings,
    watch: usize,
    births: &[u64],
    serial: u64,
) -> Context<'a> {
    Context {
        site: &settings.site,
        rules: &settings.watches[watch],
        budget: Budget {
            false_alerts_per_year_site: settings.false_alerts_per_year,
            channels: births.partition_point(|&born| born <= serial).max(1),
        },
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::drift::reach::{Limit, Reach};
    use crate::drift::structure::simulate::noise;
    use crate::watch::alert::Ending;
    use crate::watch::channel::{Cycle, KnownFrom};
    use crate::watch::settings::tests::watch_settings;
    use crate::watch::settings::{Statement, WatchSettings};
    use crate::watch::time::{DAY_US, Span};

    const START: i64 = 1_780_000_000_000_000;
    const STEP_US: i64 = DAY_US / 4;

    fn site(watch: WatchSettings) -> SiteSettings {
        SiteSettings {
            site: "saltmarsh".to_owned(),
            false_alerts_per_year: 0.5,
            watches: vec![watch],
        }
    }

    fn feed(engine: &mut Engine, from: usize, values: &[f64]) -> Vec<String> {
        let mut lines = Vec::new();
        for (i, &deviation) in values.iter().enumerate() {
            let k = from + i;
            let time = START + (k as i64 + 1) * STEP_US;
            let reading = Reading { serial: k as u64 + 1, time: EventTime(time), deviation };
            engine.take("press.PT-1", 0, &reading, ShellTime(time));
            for effect in engine.effects() {
                if let Effect::Alert { event, .. } = effect {
                    let day = (event.time.0 - START) / DAY_US;
                    let kind = event.episode.claim.kind.name();
                    lines.push(format!("{} {kind} d{day} {}", event.transition.name(), event.id));
                }
            }
        }
        lines
    }

    fn curve(n: usize, seed: u64, added: impl Fn(usize) -> f64) -> Vec<f64> {
        noise(seed, n, 0.3)
            .iter()
            .enumerate()
            .map(|(i, e)| 0.5 * ((i as f64 + 1.0) / 4.0).ln() + 0.02 * e + added(i))
            .collect()
    }

    fn rules() -> WatchSettings {
        WatchSettings {
            window_span: Span::from_days(90.0),
            window_points: 360,
            calibrated: Some(EventTime(START)),
            statement: Some(Statement::LookAhead(Span::from_days(20.0))),
            tolerance: Some(4.0),
            ..watch_settings()
        }
    }

    #[test]
    fn honest_drift_raises_no_alert() {
        let mut engine = Engine::new(site(rules()), ShellTime(START));
        let lines = feed(&mut engine, 0, &curve(400, 11, |_| 0.0));
        assert!(lines.is_empty(), "{lines:#?}");
        let finding = engine.overview().next().unwrap().1.unwrap();
        assert_eq!(finding.curve.unwrap().family, "logarithmic");
        assert!(finding.forecast.unwrap().supported);
    }

    #[test]
    fn a_knock_raises_one_step_alert_that_returns() {
        let mut engine = Engine::new(site(rules()), ShellTime(START));
        let values = curve(1600, 12, |i| if i >= 600 { 0.12 } else { 0.0 });
        let lines = feed(&mut engine, 0, &values);
        assert!(lines[0].starts_with("raised step d15"), "{lines:#?}");
        assert!(lines.iter().filter(|l| l.starts_with("raised")).count() == 1, "{lines:#?}");
        assert!(lines.last().unwrap().starts_with("returned step"), "{lines:#?}");
    }

    /// Time of the k-th reading.
    fn reading_at(k: i64) -> EventTime {
        EventTime(START + (k + 1) * STEP_US)
    }

    fn standing(engine: &Engine) -> Option<(Episode, EventTime)> {
        let episode = engine.observe("press.PT-1")?.alerts.open().first()?.clone();
        let at = episode.claim.evidence.at?;
        Some((episode, at))
    }

    #[test]
    fn a_second_knock_while_the_first_still_stands_is_told_anew() {
        let mut engine = Engine::new(site(rules()), ShellTime(START));
        let values = curve(1600, 21, |i| match i {
            0..600 => 0.0,
            600..780 => 0.12,
            _ => 0.30,
        });
        feed(&mut engine, 0, &values[..770]);
        let (first, at) = standing(&engine).unwrap();
        assert!((at.0 - reading_at(600).0).abs() <= 2 * STEP_US, "{at}");
        let seen = Action::Acknowledge { alert: first.alert.clone() };
        assert!(engine.act("press.PT-1", &seen, 771, ShellTime(START)));
        engine.effects();
        let lines = feed(&mut engine, 770, &values[770..900]);
        assert!(lines[0].starts_with("revised step d19"), "{lines:#?}");
        let (second, at) = standing(&engine).unwrap();
        assert!((at.0 - reading_at(780).0).abs() <= 2 * STEP_US, "{at}");
        assert_eq!(second.alert, first.alert);
        assert_eq!(second.state, crate::watch::alert::State::Unacknowledged);
        let lines = feed(&mut engine, 900, &values[900..]);
        assert!(lines.last().unwrap().starts_with("returned step"), "{lines:#?}");
    }

    #[test]
    fn dependence_stands_as_long_as_it_is_seen() {
        let slow = noise(22, 600, 0.95);
        let mut values = curve(2000, 23, |_| 0.0);
        for (i, e) in slow.iter().enumerate() {
            let k = 600 + i;
            values[k] = 0.5 * ((k as f64 + 1.0) / 4.0).ln() + 0.02 * e;
        }
        let mut engine = Engine::new(site(rules()), ShellTime(START));
        let lines = feed(&mut engine, 0, &values[..1200]);
        assert!(lines.iter().all(|l| !l.starts_with("returned")), "{lines:#?}");
        assert_eq!(standing(&engine).unwrap().0.claim.kind.name(), "dependence", "{lines:#?}");
        let lines = feed(&mut engine, 1200, &values[1200..]);
        assert!(lines.last().unwrap().starts_with("returned"), "{lines:#?}");
    }

    #[test]
    fn a_short_window_begins_anew_once_enough_points_follow_the_break() {
        let rules = WatchSettings { window_points: 100, ..rules() };
        let mut engine = Engine::new(site(rules), ShellTime(START));
        let values = curve(480, 24, |i| if i >= 400 { 0.3 } else { 0.0 });
        // Settled a quarter of the window after it opened, when 40 points do not follow yet.
        feed(&mut engine, 0, &values[..435]);
        assert_eq!(engine.observe("press.PT-1").unwrap().window.points().len(), 100);
        feed(&mut engine, 435, &values[435..]);
        let points = engine.observe("press.PT-1").unwrap().window.points();
        let begins = points.front().unwrap().time;
        assert!((begins.0 - reading_at(400).0).abs() <= 2 * STEP_US, "{begins}");
    }

    #[test]
    fn slow_refits_do_not_put_the_first_look_off() {
        let rules = WatchSettings { refit_every: Span::from_days(60.0), ..rules() };
        let mut engine = Engine::new(site(rules), ShellTime(START));
        let lines = feed(&mut engine, 0, &curve(160, 26, |i| if i >= 120 { 0.2 } else { 0.0 }));
        assert!(lines[0].starts_with("raised") && lines[0].contains(" d30 "), "{lines:#?}");
    }

    #[test]
    fn what_is_usual_survives_a_calibration_mark() {
        let mut engine = Engine::new(site(rules()), ShellTime(START));
        let values = curve(1100, 25, |i| if i >= 600 { 0.12 } else { 0.0 });
        feed(&mut engine, 0, &values[..700]);
        let phi = |engine: &Engine| engine.observe("press.PT-1").unwrap().residuals.phi();
        let (frozen, mark) = (phi(&engine), reading_at(699));
        assert!(standing(&engine).is_some());
        let action = Action::Calibrated { at: mark, as_found: None, as_left: None, note: None };
        assert!(engine.act("press.PT-1", &action, 701, ShellTime(mark.0)));
        let channel = engine.observe("press.PT-1").unwrap();
        assert!(channel.residuals.incident().is_none());
        assert_eq!(phi(&engine).to_bits(), frozen.to_bits());
        feed(&mut engine, 700, &values[700..]);
        // It is learned from again.
        assert_ne!(phi(&engine).to_bits(), frozen.to_bits());
    }

    #[test]
    fn snapshot_restored_and_continued_equals_never_stopped() {
        let values = curve(1200, 13, |i| if i >= 600 { 0.12 } else { 0.0 });
        let mut whole = Engine::new(site(rules()), ShellTime(START));
        let expected = feed(&mut whole, 0, &values);
        for cut in [599, 603, 640, 700, 1100] {
            let mut first = Engine::new(site(rules()), ShellTime(START));
            let mut lines = feed(&mut first, 0, &values[..cut]);
            let bytes = postcard::to_stdvec(first.observe("press.PT-1").unwrap()).unwrap();
            let mut second = Engine::new(site(rules()), ShellTime(START));
            second.restore(postcard::from_bytes(&bytes).unwrap(), 0);
            lines.extend(feed(&mut second, cut, &values[cut..]));
            assert_eq!(lines, expected, "cut at {cut}");
            assert_eq!(second.observe("press.PT-1"), whole.observe("press.PT-1"));
        }
    }

    #[test]
    fn honest_channels_keep_the_budget_through_the_whole_engine() {
        // 24 a year for each of two channel-years; every further alert is one too many.
        let hour = Span(DAY_US / 24);
        let mut raised = 0;
        for (points, seed) in [(60_i64, 0xC1_u64), (200, 0xC2)] {
            let watch = WatchSettings {
                window_points: points as usize,
                refit_every: Span(hour.0 * points / 10),
                calibrated: Some(EventTime(START - 20 * hour.0)),
                ..watch_settings()
            };
            let site = SiteSettings { false_alerts_per_year: 24.0, ..site(watch) };
            let mut engine = Engine::new(site, ShellTime(START));
            for (k, e) in noise(seed, 8760, 0.3).into_iter().enumerate() {
                let time = START + (k as i64 + 1) * hour.0;
                let deviation = 4.0 * ((k as f64 + 21.0) / 24.0).ln() + e;
                let reading = Reading { serial: k as u64 + 1, time: EventTime(time), deviation };
                engine.take("press.PT-1", 0, &reading, ShellTime(time));
                raised += engine
                    .effects()
                    .iter()
                    .filter(|effect| {
                        matches!(effect, Effect::Alert { event, .. }
                            if event.transition.name() == "raised")
                    })
                    .count();
            }
        }
        println!("{raised} of 48");
        assert!(raised <= 48, "{raised} alerts");
    }

    #[test]
    fn silence_is_raised_by_the_shells_time_and_lowered_by_a_reading() {
        let mut engine = Engine::new(site(rules()), ShellTime(START));
        feed(&mut engine, 0, &[0.1, 0.2]);
        // The first reading's due time has been put off by the second: a tick then finds nothing.
        engine.tick(engine.next_due().unwrap());
        assert!(engine.effects().is_empty());
        let due = engine.next_due().unwrap();
        assert_eq!(due, ShellTime(START + 2 * STEP_US).plus(Span::from_days(3.0)));
        engine.tick(due);
        let raised = engine.effects();
        assert!(matches!(&raised[0], Effect::Alert { event, .. }
            if event.episode.claim.kind.name() == "silent"));
        engine.tick(due);
        assert!(engine.effects().is_empty());
        let lines = feed(&mut engine, 40, &[0.3]);
        assert!(lines[0].starts_with("returned silent"), "{lines:?}");
    }

    #[test]
    fn a_statement_further_than_the_window_carries_is_refused_with_both_numbers() {
        let rules = WatchSettings {
            statement: Some(Statement::LookAhead(Span::from_days(80.0))),
            ..rules()
        };
        let mut engine = Engine::new(site(rules), ShellTime(START));
        let lines = feed(&mut engine, 0, &curve(800, 14, |_| 0.0));
        assert!(lines[0].starts_with("raised beyond-reach"), "{lines:#?}");
        let forecast = engine.overview().next().unwrap().1.unwrap().forecast.unwrap();
        assert!(!forecast.supported && forecast.deviation.is_none());
        assert!(forecast.refused.unwrap().starts_with("needs 80 d past the newest reading"));
    }

    #[test]
    fn drift_that_changes_direction_gets_a_curve_that_turns_and_no_forecast() {
        let mut engine = Engine::new(site(rules()), ShellTime(START));
        // So do 21 of the seeds 1 to 24; in three a second bend is told first, and the window cut there.
        let values: Vec<f64> = noise(18, 360, 0.3)
            .iter()
            .enumerate()
            .map(|(i, e)| {
                let day = i as f64 / 4.0;
                0.1 * day - 0.0011 * day * day + 0.05 * e
            })
            .collect();
        feed(&mut engine, 0, &values);
        let finding = engine.overview().next().unwrap().1.unwrap();
        let family = finding.curve.unwrap().family;
        assert!(["quadratic", "cubic"].contains(&family), "{family}");
        let forecast = finding.forecast.unwrap();
        assert!(!forecast.supported && forecast.deviation.is_none());
        let refit = engine.observe("press.PT-1").unwrap().refit.clone().unwrap();
        assert_eq!(refit.reach, Reach::none(Limit::Turns));
        let (now, half) = refit.said.now.unwrap();
        let truth = 0.1 * 90.0 - 0.0011 * 90.0 * 90.0;
        assert!((now - truth).abs() < half && half < 0.25, "{now} ± {half} against {truth}");
    }

    #[test]
    fn outrunning_the_tolerance_is_told_ahead_and_then_now() {
        let rules = WatchSettings { tolerance: Some(3.0), ..rules() };
        let mut engine = Engine::new(site(rules), ShellTime(START));
        let values: Vec<f64> = noise(15, 1200, 0.3)
            .iter()
            .enumerate()
            .map(|(i, e)| 0.015 * (i as f64 / 4.0) + 0.02 * e)
            .collect();
        let lines = feed(&mut engine, 0, &values);
        let kinds: Vec<&str> = lines.iter().map(|l| l.split(' ').nth(1).unwrap()).collect();
        assert_eq!(kinds[0], "tolerance-ahead", "{lines:#?}");
        assert!(kinds.contains(&"out-of-tolerance"), "{lines:#?}");
    }

    /// Feeds readings after these pauses (hours), each followed by five hourly ones.
    fn feed_with_pauses(pauses_h: &[u32]) {
        let span = Span::from_days(1.0);
        let rules = WatchSettings {
            window_span: span,
            window_points: 60,
            refit_every: Span::from_days(0.1),
            ..rules()
        };
        let mut engine = Engine::new(site(rules), ShellTime(START));
        let (mut time, mut serial) = (START, 0);
        for pause in pauses_h {
            time += i64::from(*pause) * 3_600_000_000;
            for k in 0..30 {
                time += 600_000_000 + i64::from(k);
                serial += 1;
                let deviation = 0.01 * f64::from(serial % 7) + f64::from(*pause) * 1e-3;
                let reading =
                    Reading { serial: u64::from(serial as u32), time: EventTime(time), deviation };
                engine.take("press.PT-1", 0, &reading, ShellTime(time));
                engine.tick(ShellTime(time));
            }
        }
        drop(engine.effects());
    }

    proptest::proptest! {
        #[test]
        fn no_pause_brings_the_engine_down(pauses_h in proptest::collection::vec(0_u32..2000, 1..12)) {
            feed_with_pauses(&pauses_h);
        }
    }

    #[test]
    fn a_pause_longer_than_the_window_begins_it_anew_and_says_so() {
        let mut engine = Engine::new(site(rules()), ShellTime(START));
        let values = curve(700, 12, |i| if i >= 600 { 0.12 } else { 0.0 });
        feed(&mut engine, 0, &values);
        let lines = feed(&mut engine, 700 + 91 * 4, &[0.3]);
        assert!(lines.iter().any(|l| l.starts_with("returned step")), "{lines:#?}");
        let (channel, finding) = engine.overview().next().unwrap();
        let ending = channel.alerts.open().iter().find(|e| e.claim.kind.name() == "step");
        assert_eq!(ending.unwrap().ending, Ending::WindowAnew);
        let finding = finding.unwrap();
        assert!(finding.curve.is_none() && finding.no_curve.unwrap().starts_with("gathering"));
    }

    #[test]
    fn honest_drift_of_short_reach_is_not_refused_when_the_window_grows() {
        let statement = Some(Statement::LookAhead(Span::from_days(6.0)));
        for seed in 20..30 {
            let rules = WatchSettings { statement, ..rules() };
            let mut engine = Engine::new(site(rules), ShellTime(START));
            let lines = feed(&mut engine, 0, &curve(200, seed, |_| 0.0));
            assert!(lines.is_empty(), "{lines:#?}");
        }
    }

    #[test]
    fn readings_that_cannot_be_used_end_in_an_alert_that_says_so() {
        let mut engine = Engine::new(site(rules()), ShellTime(START));
        feed(&mut engine, 0, &[0.1, 0.2, 0.3]);
        for k in 0..20 {
            let now = ShellTime(START + (4 + k) * STEP_US);
            let reading = Reading { serial: 100, time: EventTime(START + STEP_US), deviation: 0.1 };
            engine.take("press.PT-1", 0, &reading, now);
            engine.tick(now);
        }
        let channel = engine.observe("press.PT-1").unwrap();
        let says = &channel.alerts.open()[0].claim.words.says;
        assert!(says.starts_with("Readings arrive, but none since"), "{says}");
    }

    #[test]
    fn a_curve_without_scatter_is_named_and_claims_nothing() {
        let mut engine = Engine::new(site(rules()), ShellTime(START));
        let ramp: Vec<f64> = (0..300).map(|i| 0.001 * f64::from(i)).collect();
        let lines = feed(&mut engine, 0, &ramp);
        let structure = lines.iter().filter(|l| !l.contains("beyond-reach")).count();
        assert_eq!(structure, 0, "{lines:#?}");
        let finding = engine.overview().next().unwrap().1.unwrap();
        assert_eq!(finding.curve.unwrap().family, "linear");
        assert!(!finding.forecast.unwrap().supported);
        assert!(finding.reach.why.contains("do not scatter"), "{}", finding.reach.why);
        let now = finding.now.unwrap();
        assert!(now.low.is_none() && (now.deviation - 0.297).abs() < 1e-9, "{now:?}");
    }

    #[test]
    fn an_instrument_left_outside_its_tolerance_is_told_by_the_mark_itself() {
        let rules = WatchSettings { tolerance: Some(0.5), ..rules() };
        let mut engine = Engine::new(site(rules), ShellTime(START));
        feed(&mut engine, 0, &[0.1, 0.2, 0.3]);
        let at = EventTime(START + 3 * STEP_US);
        let mark = Action::Calibrated { at, as_found: None, as_left: Some(-0.9), note: None };
        assert!(engine.act("press.PT-1", &mark, 4, ShellTime(at.0)));
        let says = &engine.observe("press.PT-1").unwrap().alerts.open()[0].claim.words.says;
        assert!(says.contains("left the deviation at -0.900 bar"), "{says}");
    }

    #[test]
    fn a_calibration_mark_moves_age_zero_and_begins_anew() {
        let mut engine = Engine::new(site(rules()), ShellTime(START));
        feed(&mut engine, 0, &curve(400, 16, |_| 0.0));
        let mark = EventTime(START + 300 * STEP_US);
        let done = engine.act(
            "press.PT-1",
            &Action::Calibrated { at: mark, as_found: None, as_left: None, note: None },
            401,
            ShellTime(mark.0),
        );
        assert!(done);
        let channel = engine.observe("press.PT-1").unwrap();
        assert_eq!(channel.cycle.unwrap().age_zero, mark);
        assert_eq!(channel.window.points().len(), 100);
    }

    #[test]
    fn a_reading_of_another_watch_than_its_channel_is_counted_not_fitted() {
        let kelvin = WatchSettings { unit: "K".to_owned(), ..rules() };
        let settings = SiteSettings { watches: vec![rules(), kelvin], ..site(rules()) };
        let mut engine = Engine::new(settings, ShellTime(START));
        feed(&mut engine, 0, &curve(30, 18, |_| 0.0));
        let before = engine.observe("press.PT-1").cloned().unwrap();
        let time = EventTime(START + 40 * STEP_US);
        let reading = Reading { serial: 41, time, deviation: 290.0 };
        let taken = engine.take("press.PT-1", 1, &reading, ShellTime(time.0));
        assert_eq!(taken, Taken::OtherWatch);
        let after = engine.observe("press.PT-1").unwrap();
        assert_eq!((&after.window, &after.refit), (&before.window, &before.refit));
        assert_eq!(after.counts.of(Taken::OtherWatch), 1);
        assert_eq!(engine.counts().of(Taken::OtherWatch), 1);
    }

    /// An engine with 400 readings and a step alert, then reconfigured; the lines that followed.
    fn reconfigured(before: WatchSettings, is: Basis) -> (Engine, Vec<String>) {
        let was = before.basis();
        let mut engine = Engine::new(site(before), ShellTime(START));
        feed(&mut engine, 0, &curve(400, 12, |i| if i >= 330 { 0.12 } else { 0.0 }));
        assert_eq!(engine.observe("press.PT-1").unwrap().alerts.open().len(), 1);
        assert!(engine.act("press.PT-1", &Action::Reconfigured { was, is }, 401, ShellTime(START)));
        let effects = engine.effects();
        let lines = effects.iter().filter_map(|effect| match effect {
            Effect::Alert { event, .. } => {
                Some(format!("{} {:?}", event.transition.name(), event.episode.ending))
            }
            _ => None,
        });
        let lines = lines.collect();
        (engine, lines)
    }

    #[test]
    fn readings_measured_otherwise_do_not_join_those_before() {
        let is = Basis { measured_as: "unit = \"mbar\"".to_owned(), ..rules().basis() };
        let (mut engine, lines) = reconfigured(rules(), is.clone());
        assert_eq!(lines, ["returned Reconfigured"]);
        let channel = engine.observe("press.PT-1").unwrap();
        assert_eq!((channel.window.points().len(), &channel.refit), (0, &None));
        assert_eq!(channel.residuals, crate::watch::incident::ResidualWatch::default());
        assert_eq!(channel.basis, is);
        assert_eq!(channel.cycle.unwrap().age_zero, EventTime(START), "the cycle goes on");
        feed(&mut engine, 400, &[500.0, 500.5]);
        let channel = engine.observe("press.PT-1").unwrap();
        assert_eq!(channel.window.points().len(), 2);
        assert!(channel.window.points().iter().all(|p| p.mean >= 500.0));
    }

    #[test]
    fn another_calibrated_moves_age_zero_unless_a_mark_says_when() {
        let day = |d: i64| EventTime(START + d * DAY_US);
        let is = Basis { calibrated: Some(day(90)), ..rules().basis() };
        for calibrated in [Some(day(0)), None] {
            let before = WatchSettings { calibrated, ..rules() };
            let (engine, lines) = reconfigured(before, is.clone());
            assert_eq!(lines, ["returned Calibrated"]);
            let channel = engine.observe("press.PT-1").unwrap();
            let cycle = channel.cycle.unwrap();
            assert_eq!((cycle.age_zero, cycle.known_from), (day(90), KnownFrom::Setting));
            assert_eq!(channel.window.points().len(), 40);
        }

        let mut engine = Engine::new(site(rules()), ShellTime(START));
        feed(&mut engine, 0, &curve(400, 16, |_| 0.0));
        let at = day(75);
        let mark = Action::Calibrated { at, as_found: None, as_left: None, note: None };
        engine.act("press.PT-1", &mark, 401, ShellTime(START));
        let change = Action::Reconfigured { was: rules().basis(), is };
        engine.act("press.PT-1", &change, 402, ShellTime(START));
        let channel = engine.observe("press.PT-1").unwrap();
        assert_eq!(channel.cycle.unwrap(), Cycle { age_zero: at, known_from: KnownFrom::Mark });
        assert_eq!(channel.window.points().len(), 100);
    }

    #[test]
    fn a_mark_older_than_age_zero_leaves_the_channel_as_it_is() {
        let calibrated = |day: i64| Action::Calibrated {
            at: EventTime(START + day * DAY_US),
            as_found: None,
            as_left: None,
            note: None,
        };
        let mut engine = Engine::new(site(rules()), ShellTime(START));
        feed(&mut engine, 0, &curve(400, 16, |_| 0.0));
        // Age zero is from the settings, then from a mark: neither moves back.
        for (serial, day, done) in [(401, -1, false), (402, 75, true), (403, 74, false)] {
            let before = engine.observe("press.PT-1").cloned();
            assert_eq!(engine.act("press.PT-1", &calibrated(day), serial, ShellTime(START)), done);
            assert_eq!(engine.observe("press.PT-1").cloned() != before, done, "day {day}");
        }
        assert_eq!(
            engine.observe("press.PT-1").unwrap().cycle.unwrap().age_zero.0,
            START + 75 * DAY_US
        );
    }

    #[test]
    fn a_mark_older_than_the_first_reading_is_taken() {
        let rules = WatchSettings { calibrated: None, ..rules() };
        let mut engine = Engine::new(site(rules), ShellTime(START));
        feed(&mut engine, 0, &[0.1, 0.2]);
        let at = EventTime(START - DAY_US);
        let mark = Action::Calibrated { at, as_found: None, as_left: None, note: None };
        assert!(engine.act("press.PT-1", &mark, 3, ShellTime(START)));
        assert_eq!(engine.observe("press.PT-1").unwrap().cycle.unwrap().age_zero, at);
    }
}
