//! The watch over one channel's residuals: looks, thresholds, and the one incident that may stand.
//!
//! An incident opens when any score crosses its threshold, may be renamed while evidence gathers (a
//! quarter of the window), is settled then (after a step or bend the window begins anew there), and
//! closes when half a window brought no more evidence of it.
//!
//! It lives on evidence of what it tells. Once its break has left the window, a score clearly above its
//! threshold is another structure, and the incident is told anew with that one's name, size and
//! date; after a cut at the break, a clear jump is so at once. Dependence is seen in its own score.

use crate::drift::family::{Coefficients, Family};
use crate::drift::structure::{
    Baseline, Depth, Examination, Frame, Framed, Kind as Structure, Score, ShiftDetector,
    Workspace, examine,
};
use crate::watch::alert::Kind;
use crate::watch::budget::{
    Budget, Judged, Judgement, Pace, RENAME_AHEAD, RENAME_WITHIN, TELL_ANEW_ABOVE,
    close_after_points, evidence, rename_within_points,
};
use crate::watch::limits::POINTS_TO_EXAMINE;
use crate::watch::time::{EventTime, Span};
use crate::watch::whitening::Whitening;
use crate::watch::window::Point;
use serde::{Deserialize, Serialize};
use std::collections::VecDeque;

/// Median days in a year.
const DAYS_IN_YEAR: f64 = 365.25;

/// The newest score of each kind, and its threshold.
#[derive(Clone, Copy, Debug, Default, PartialEq, Serialize, Deserialize)]
pub struct Look {
    /// The correlation that was taken for usual.
    pub phi: f64,
    /// In the order of [`Structure::ALL`]; `None` for a kind not looked at yet.
    kinds: [Option<Judged>; Structure::ALL.len()],
}

impl Look {
    /// The newest score of a kind against its threshold.
    pub fn of(&self, kind: Structure) -> Option<&Judged> {
        self.kinds[kind as usize].as_ref()
    }

    fn note(&mut self, judged: &[Judged]) {
        for kind in judged {
            self.kinds[kind.score.kind as usize] = Some(*kind);
        }
    }
}

/// What stands.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize)]
pub struct Incident {
    /// What it is, as far as is known.
    pub kind: Kind,
    /// Index of the point at which it opened, or was told anew.
    opened: u64,
    /// Points in the window then.
    points: usize,
    /// Index of the newest point that brought evidence of it.
    last_near: u64,
    /// Whether its name is final.
    settled: bool,
    /// Its size and date.
    pub size: f64,
    /// When it began.
    pub at: EventTime,
    /// Score of the kind it is named after.
    pub score: f64,
}

impl Incident {
    /// When the break was that is now known for good; `None` for what is no break, or not settled.
    pub fn settled_break(&self) -> Option<EventTime> {
        (self.settled && self.kind != Kind::Dependence).then_some(self.at)
    }
}

/// Whether the window can still show what an incident tells.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
enum Sight {
    /// It can, or it must: not settled yet, or dependence.
    Shown,
    /// The window began anew at the break. A bend in it may well be a curve that does not fit yet, as
    /// long as the window has not filled again; a jump is a jump.
    CutOff,
    /// Even a full window would no longer reach back to the break.
    Gone,
}

impl Sight {
    fn of(incident: &Incident, place: &Place<'_>) -> Sight {
        let Some(at) = incident.settled_break() else { return Sight::Shown };
        let (Some(oldest), Some(newest)) = (place.points.front(), place.points.back()) else {
            return Sight::Shown;
        };
        let filled = place.newest - incident.opened >= index_of(place.window_points)
            || at.plus(place.window_span) <= newest.time;
        match (at <= oldest.time, filled) {
            (false, _) => Sight::Shown,
            (true, false) => Sight::CutOff,
            (true, true) => Sight::Gone,
        }
    }
}

/// What the newest point or refit did to the incident.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Turn {
    /// Nothing new.
    Nothing,
    /// It opened.
    Opened(Incident),
    /// It is known better.
    Revised(Incident),
    /// Another structure has taken its place.
    ToldAnew(Incident),
    /// Its name is final; after a step or bend the window should begin anew there.
    Settled {
        /// The incident.
        incident: Incident,
        /// Whether it is known better than before.
        revised: bool,
    },
    /// It is over.
    Closed,
}

/// The watch over one channel's residuals.
#[derive(Clone, Debug, Default, PartialEq, Serialize, Deserialize)]
pub struct ResidualWatch {
    baseline: Baseline,
    shift: ShiftDetector,
    /// Of the newest refit; none without a curve, or where nothing can be judged.
    frame: Option<Frame>,
    #[serde(skip)]
    whitening: Whitening,
    /// The newest look.
    pub look: Look,
    incident: Option<Incident>,
    /// Points that the newest refit brought.
    fresh_points: usize,
    /// Index of the newest point at which the slow part looked.
    last_full: u64,
}

/// Where in the life of the channel a look takes place.
#[derive(Clone, Copy, Debug)]
pub struct Place<'a> {
    /// Index of the newest point, counted from the channel's first.
    pub newest: u64,
    /// Points from refit to refit, ≥ 1.
    pub stride_points: usize,
    /// The site's budget.
    pub budget: Budget,
    /// The most points the window may hold.
    pub window_points: usize,
    /// The longest it may reach back.
    pub window_span: Span,
    /// Age zero.
    pub age_zero: EventTime,
    /// The window's points.
    pub points: &'a VecDeque<Point>,
}

impl ResidualWatch {
    /// What stands now.
    pub fn incident(&self) -> Option<&Incident> {
        self.incident.as_ref()
    }

    /// The correlation of neighbours that is usual here.
    pub fn phi(&self) -> f64 {
        self.baseline.phi()
    }

    /// Takes a refit's curve over, before the look that follows it.
    ///
    /// # Arguments
    /// `x`, `y` — the window's ages (days) and deviations; `curve` — family and coefficients;
    /// `newest` — index of the newest point; `fresh_points` — points since the refit before.
    pub fn refitted(
        &mut self,
        x: &[f64],
        y: &[f64],
        curve: (Family, &Coefficients),
        newest: u64,
        fresh_points: usize,
    ) {
        let (family, theta) = curve;
        self.fresh_points = fresh_points;
        self.whitening.forget();
        self.frame = match Frame::at_refit(x, y, family, theta, &mut self.baseline, newest) {
            Framed::Ready(frame) => Some(frame),
            _ => None,
        };
    }

    /// A refit found no curve: there are no residuals to look at.
    pub fn without_curve(&mut self) {
        self.frame = None;
        self.whitening.forget();
    }

    /// Looks at the window after a new point; `full` after a refit. `None`: nothing to look at.
    pub fn look(
        &mut self,
        place: &Place<'_>,
        full: bool,
        work: &mut Workspace,
    ) -> Option<(Turn, Look)> {
        let points = place.points.len();
        if points < POINTS_TO_EXAMINE {
            return None;
        }
        let frame = self.frame.as_ref()?;
        let aged = place.points.iter().map(|p| (p.time.days_since(place.age_zero), p.mean));
        let window = self.whitening.of(frame, aged)?;
        let pace = Pace {
            window_points: points,
            stride_points: place.stride_points,
            points_per_year: DAYS_IN_YEAR / frame.spacing_days,
        };
        let rested = place.newest - self.last_full >= index_of((place.stride_points / 4).max(1));
        let depth = match (full, rested) {
            (true, _) => Depth::Full,
            (false, true) => Depth::QuickUnlessWarned,
            (false, false) => Depth::Quick,
        };
        let mut found = examine(window, &mut self.shift, 1, depth, work);
        let mut judgement = place.budget.judge(&found, &pace);
        if judgement.crossed.is_some() && !found.is_full() && self.incident.is_none() {
            // The crossing stands; this look only names it, and costs the budget nothing.
            found = examine(window, &mut self.shift, 0, Depth::Full, work);
            judgement = place.budget.judge(&found, &pace);
        }
        if full {
            let (fresh, phi) = (self.fresh_points, frame.phi_window);
            self.baseline.learn(place.newest, points, fresh, phi, found.suspicious);
        }
        if found.is_full() {
            self.last_full = place.newest;
        }
        let mut seen = Look { phi: found.phi, ..Look::default() };
        seen.note(&judgement.kinds);
        self.look.phi = found.phi;
        self.look.note(&judgement.kinds);
        Some((self.decide(place, &found, &judgement), seen))
    }

    fn decide(&mut self, place: &Place<'_>, found: &Examination, judgement: &Judgement) -> Turn {
        let crossed = judgement.crossed.is_some();
        let Some(mut incident) = self.incident else {
            if !crossed {
                return Turn::Nothing;
            }
            self.baseline.freeze();
            return Turn::Opened(self.begin(place, found, judgement));
        };
        let sight = Sight::of(&incident, place);
        let near = match sight {
            Sight::Gone => crossed,
            Sight::Shown | Sight::CutOff => brings_evidence(&incident, judgement),
        };
        if near {
            incident.last_near = place.newest;
        }
        self.incident = Some(incident);
        let wait = index_of(close_after_points(incident.points));
        let quiet = place.newest - incident.last_near >= wait;
        let clearly = judgement.margin >= TELL_ANEW_ABOVE;
        // A jump since then is news, whatever stands.
        if found.jumped && number_of(found.step.index, place) > incident.opened {
            return Turn::ToldAnew(self.begin(place, found, judgement));
        }
        let another = match sight {
            Sight::Shown => crossed && quiet,
            Sight::CutOff => clearly && is_clearly_a_step(found),
            Sight::Gone => clearly,
        };
        if another && incident.settled && found.is_full() {
            return Turn::ToldAnew(self.begin(place, found, judgement));
        }
        if quiet && incident.settled && found.is_full() {
            self.incident = None;
            self.shift.reset();
            self.baseline.thaw();
            return Turn::Closed;
        }
        if incident.settled || !found.is_full() {
            return Turn::Nothing;
        }
        let (turn, known) = known_better(incident, place, found, judgement);
        self.incident = Some(known);
        turn
    }

    /// The incident begins, named after the newest look.
    fn begin(&mut self, place: &Place<'_>, found: &Examination, judgement: &Judgement) -> Incident {
        let score = best_of(found, judgement);
        // What it has shown has been told; evidence of a further change starts from nothing.
        self.shift.reset();
        let incident = Incident {
            kind: alert_kind(score.kind),
            opened: place.newest,
            points: place.points.len(),
            last_near: place.newest,
            settled: false,
            size: score.size,
            at: time_of(&score, place),
            score: score.q,
        };
        self.incident = Some(incident);
        incident
    }

    /// A new calibration cycle: only what is usual here is remembered.
    pub fn begin_cycle(&mut self) {
        let mut baseline = std::mem::take(&mut self.baseline);
        baseline.thaw();
        *self = ResidualWatch { baseline, ..ResidualWatch::default() };
    }

    /// The window begins anew: what was seen before the break says nothing any more.
    pub fn begin_anew(&mut self) {
        self.shift.reset();
        self.look = Look::default();
        self.whitening.forget();
    }
}

/// Names an unsettled incident again by a full look, and settles it when its time has come.
fn known_better(
    before: Incident,
    place: &Place<'_>,
    found: &Examination,
    judgement: &Judgement,
) -> (Turn, Incident) {
    let mut incident = before;
    let settles = place.newest - incident.opened >= index_of(rename_within_points(incident.points));
    let score = best_of(found, judgement);
    let (kind, at) = (alert_kind(score.kind), time_of(&score, place));
    let renamed = kind != incident.kind
        && (settles || found.jumped || is_clearly_ahead(score.kind, &incident, found));
    let mut revised = false;
    // A jump is sized as soon as its level is seen, not only at the end.
    let resized = found.jumped && kind == Kind::Step && !close(incident.size, score.size);
    if judgement.margin >= -RENAME_WITHIN && (renamed || settles || resized) {
        revised = renamed || at != incident.at || !close(incident.size, score.size);
        incident = Incident { kind, at, size: score.size, score: score.q, ..incident };
    }
    incident.settled = settles;
    let turn = match (settles, revised) {
        (true, revised) => Turn::Settled { incident, revised },
        (false, true) => Turn::Revised(incident),
        (false, false) => Turn::Nothing,
    };
    (turn, incident)
}

/// Whether a look speaks more clearly for a kind than for the name that stands.
fn is_clearly_ahead(kind: Structure, incident: &Incident, found: &Examination) -> bool {
    let standing = Structure::ALL.into_iter().filter(|&k| alert_kind(k) == incident.kind);
    let for_name = standing.filter_map(|k| evidence(found, k)).fold(f64::NEG_INFINITY, f64::max);
    evidence(found, kind).is_some_and(|score| score - for_name >= RENAME_AHEAD)
}

/// Whether a look speaks clearly for a step, against every other name.
fn is_clearly_a_step(found: &Examination) -> bool {
    let Some(step) = evidence(found, Structure::Step) else { return false };
    let others = [Structure::Bend, Structure::Dependence];
    others.into_iter().filter_map(|k| evidence(found, k)).all(|other| step - other >= RENAME_AHEAD)
}

/// Whether a look shows what the incident tells: a break shows in every score, dependence (which
/// makes the other scores restless too) in its own.
fn brings_evidence(incident: &Incident, judgement: &Judgement) -> bool {
    if incident.settled && incident.kind == Kind::Dependence {
        let own = judgement.kinds.iter().find(|k| k.score.kind == Structure::Dependence);
        return own.is_some_and(Judged::holds_open);
    }
    judgement.holds_open()
}

fn best_of(found: &Examination, judgement: &Judgement) -> Score {
    *found.score(judgement.name).unwrap_or(&found.step)
}

/// A point's running number, counted over the channel's life.
fn number_of(index: usize, place: &Place<'_>) -> u64 {
    let newer = place.points.len().saturating_sub(index + 1);
    place.newest.saturating_sub(index_of(newer))
}

fn time_of(score: &Score, place: &Place<'_>) -> EventTime {
    place.points.get(score.index).map_or(place.age_zero, |point| point.time)
}

/// Under which alert a kind of structure is told.
pub fn alert_kind(kind: Structure) -> Kind {
    match kind {
        Structure::Shift | Structure::Step => Kind::Step,
        Structure::Bend => Kind::Bend,
        Structure::Dependence => Kind::Dependence,
    }
}

/// Within a tenth of each other.
fn close(a: f64, b: f64) -> bool {
    (a - b).abs() <= 0.1 * a.abs().max(b.abs())
}

fn index_of(points: usize) -> u64 {
    u64::try_from(points).unwrap_or(u64::MAX)
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::drift::tails::probability;

    const WINDOW: usize = 100;
    const PACE: Pace =
        Pace { window_points: WINDOW, stride_points: 1, points_per_year: DAYS_IN_YEAR };
    const BUDGET: Budget = Budget { false_alerts_per_year_site: 1.0, channels: 1 };

    /// A watch that sees made-up scores, a point a day.
    struct Seen {
        watch: ResidualWatch,
        points: VecDeque<Point>,
        newest: u64,
    }

    impl Seen {
        fn new() -> Seen {
            let mut seen = Seen { watch: ResidualWatch::default(), points: [].into(), newest: 0 };
            (0..WINDOW).for_each(|_| seen.take_point());
            seen
        }

        fn take_point(&mut self) {
            self.newest += 1;
            let time = EventTime::plus(EventTime(0), Span::from_days(self.newest as f64));
            self.points.push_back(Point { time, mean: 0.0, count: 1, spread: 0.0 });
            if self.points.len() > WINDOW {
                self.points.pop_front();
            }
        }

        /// One point and a full look with these scores over their thresholds; the break is `ago`
        /// points old. The step has no threshold: its score itself.
        fn look(&mut self, shift: f64, step: f64, bend: f64, ago: usize) -> Turn {
            self.take_point();
            let index = self.points.len() - 1 - ago;
            let over = |kind| BUDGET.threshold(kind, &PACE, 0.3).unwrap_or(0.0);
            let score =
                |kind, q: f64| Score { kind, q, p: probability(q), size: 1.0, index, x: 0.0 };
            let found = Examination {
                shift: score(Structure::Shift, over(Structure::Shift) + shift),
                step: score(Structure::Step, step),
                bend: Some(score(Structure::Bend, over(Structure::Bend) + bend)),
                dependence: Some(score(Structure::Dependence, 0.3)),
                points: self.points.len(),
                phi: 0.3,
                jumped: false,
                noise: 1.0,
                suspicious: false,
            };
            let place = Place {
                newest: self.newest,
                stride_points: 1,
                budget: BUDGET,
                window_points: WINDOW,
                window_span: Span::from_days(1e4),
                age_zero: EventTime(0),
                points: &self.points,
            };
            let judgement = BUDGET.judge(&found, &PACE);
            self.watch.decide(&place, &found, &judgement)
        }

        /// The same look so many times; what came of it but nothing.
        fn looks(&mut self, times: usize, shift: f64, step: f64, bend: f64) -> Vec<Turn> {
            let turns = (0..times).map(|_| self.look(shift, step, bend, 0));
            turns.filter(|turn| *turn != Turn::Nothing).collect()
        }

        /// A bend that is settled, with the window begun anew there.
        fn settled_bend() -> Seen {
            let mut seen = Seen::new();
            assert!(matches!(seen.look(0.0, 0.0, 2.0, 10), Turn::Opened(_)));
            let turns = seen.looks(WINDOW / 4, -3.0, 0.0, -0.8);
            assert!(matches!(turns[..], [Turn::Settled { .. }]), "{turns:?}");
            let at = seen.watch.incident().unwrap().settled_break().unwrap();
            seen.points.retain(|point| point.time >= at);
            seen
        }
    }

    #[test]
    fn a_second_bend_after_the_cut_is_not_told_while_the_window_fills() {
        let mut seen = Seen::settled_bend();
        assert!(seen.looks(20, -3.0, 0.0, 5.0).is_empty());
    }

    #[test]
    fn a_clear_step_after_the_cut_is_told_at_once() {
        let mut seen = Seen::settled_bend();
        let turn = seen.look(2.0, 15.0, 0.0, 1);
        let Turn::ToldAnew(incident) = turn else { panic!("{turn:?}") };
        assert_eq!((incident.kind, incident.settled_break()), (Kind::Step, None));
        assert_eq!(incident.at, seen.points[seen.points.len() - 2].time);
    }

    #[test]
    fn a_break_that_has_left_the_window_gives_way_to_what_is_clearly_there() {
        let mut seen = Seen::settled_bend();
        // Near its threshold, the bend keeps the incident open until the window has filled …
        assert!(seen.looks(WINDOW - WINDOW / 4 - 1, -3.0, 0.0, -0.5).is_empty());
        // … then what lies above it does, and what is clearly above is told.
        assert!(seen.looks(WINDOW, -3.0, 0.0, 0.5).is_empty());
        let turn = seen.look(-3.0, 0.0, 1.5, 7);
        let Turn::ToldAnew(incident) = turn else { panic!("{turn:?}") };
        assert_eq!(incident.at, seen.points[seen.points.len() - 8].time);
        assert!(seen.watch.baseline.is_frozen());
    }

    #[test]
    fn a_break_that_has_left_the_window_is_not_kept_by_scores_below_their_thresholds() {
        let mut seen = Seen::settled_bend();
        let turns = seen.looks(2 * WINDOW, -3.0, 0.0, -0.5);
        assert_eq!(turns, [Turn::Closed]);
        assert!(!seen.watch.baseline.is_frozen());
    }

    #[test]
    fn a_name_changes_only_for_ten_times_the_evidence_until_it_is_settled() {
        let mut seen = Seen::new();
        assert!(matches!(seen.look(0.0, 0.0, 2.0, 10), Turn::Opened(_)));
        let bend = BUDGET.threshold(Structure::Bend, &PACE, 0.3).unwrap() + 2.0 - 0.85;
        let step = |ahead: f64| bend + 1.2 + ahead;
        assert_eq!(seen.look(0.0, step(0.9), 2.0, 10), Turn::Nothing);
        let turn = seen.look(0.0, step(1.1), 2.0, 10);
        assert!(matches!(turn, Turn::Revised(Incident { kind: Kind::Step, .. })), "{turn:?}");
        let turns = seen.looks(WINDOW / 4, 0.0, step(-0.5), 2.0);
        assert!(
            matches!(turns[..], [Turn::Settled { incident, .. }] if incident.kind == Kind::Bend),
            "{turns:?}"
        );
    }
}
