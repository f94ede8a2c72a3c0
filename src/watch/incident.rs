//! The watch over one channel's residuals: looks, thresholds, and the one incident that may stand.
//!
//! An incident opens when any score crosses its threshold, may be renamed while evidence gathers (a
//! quarter of the window), is settled then (after a step or bend the window begins anew there), and
//! closes when every score has stayed clearly below for half a window.

use crate::drift::structure::baseline::Baseline;
use crate::drift::structure::shift::ShiftDetector;
use crate::drift::structure::whitened::Whitened;
use crate::drift::structure::{Examination, Found, examine};
use crate::watch::alert::Kind;
use crate::watch::budget::{Budget, NEAR, Pace, Score, search_of_name};
use crate::watch::time::EventTime;
use serde::{Deserialize, Serialize};

/// A refit whose residuals score above this teaches the norm nothing.
const NOT_EXEMPLARY_ABOVE: f64 = 5.0;
/// The fast detector above this asks for a full look before the next refit.
const LOOK_EARLY_ABOVE: f64 = 4.0;
/// Within so much of its threshold a score still counts as live when an incident is settled.
const LIVE_WITHIN: f64 = 0.5;

/// The scores and thresholds of the newest look.
#[derive(Clone, Copy, Debug, Default, PartialEq, Serialize, Deserialize)]
pub struct Look {
    /// The fast detector's score and its threshold.
    pub shift: (f64, f64),
    /// The newest full examination.
    pub found: Examination,
    /// Thresholds for bend and dependence.
    pub bend_threshold: f64,
    /// See above.
    pub dependence_threshold: f64,
    /// The correlation that was taken for usual.
    pub phi: f64,
}

/// What stands.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize)]
pub struct Incident {
    /// What it is, as far as is known.
    pub kind: Kind,
    /// Index of the point at which it opened.
    opened: u64,
    /// Points in the window then.
    points: usize,
    /// Index of the newest point at which a score was near its threshold.
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

/// What the newest point or refit did to the incident.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Turn {
    /// Nothing new.
    Nothing,
    /// It opened.
    Opened(Incident),
    /// It is known better.
    Revised(Incident),
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
    /// What is usual here.
    pub baseline: Baseline,
    shift: ShiftDetector,
    /// The newest look.
    pub look: Look,
    incident: Option<Incident>,
    /// Own estimate of the newest refit, to fill in while the norm is young.
    own_phi: f64,
    last_full: u64,
}

/// Where in the life of the channel a look takes place.
#[derive(Clone, Copy, Debug)]
pub struct Place<'a> {
    /// Index of the newest point, counted from the channel's first.
    pub newest: u64,
    /// Points from refit to refit.
    pub stride: f64,
    /// Points in a year.
    pub points_per_year: f64,
    /// The site's budget.
    pub budget: Budget,
    /// Times of the window's points.
    pub times: &'a [EventTime],
}

impl ResidualWatch {
    /// What stands now.
    pub fn incident(&self) -> Option<&Incident> {
        self.incident.as_ref()
    }

    /// The correlation of neighbours that is usual here.
    pub fn phi(&self, points: usize) -> f64 {
        self.baseline.phi(points, self.own_phi)
    }

    /// Notes a refit's own correlation, before the look that follows it.
    pub fn refitted(&mut self, place: &Place<'_>, points: usize, own_phi: f64) {
        self.own_phi = own_phi;
        if self.incident.is_none() {
            self.baseline.absorb(place.newest, points);
        }
    }

    /// Looks at the window after a new point; `full` after a refit.
    pub fn look(&mut self, window: &Whitened, place: &Place<'_>, full: bool) -> Turn {
        let points = window.points();
        let pace = Pace {
            points,
            stride: place.stride,
            points_per_year: place.points_per_year,
            phi: window.phi,
        };
        let threshold = |score| place.budget.threshold(score, &pace);
        self.look.phi = window.phi;
        self.look.shift = (self.shift.update(window), threshold(Score::Shift));
        self.look.bend_threshold = threshold(Score::Bend);
        self.look.dependence_threshold = threshold(Score::Dependence);
        let early = self.look.shift.0 > LOOK_EARLY_ABOVE
            && count_of(place.newest - self.last_full) >= (place.stride / 4.0).max(1.0);
        let looked = full || early || self.look.shift.0 >= self.look.shift.1;
        if looked {
            self.last_full = place.newest;
            self.look.found = examine(window, self.baseline.familiar(points));
        }
        if full && self.incident.is_none() {
            let exemplary = self.look.found.largest_in_mean() <= NOT_EXEMPLARY_ABOVE;
            self.baseline.learn(place.newest, place.stride, self.own_phi, exemplary);
        }
        self.decide(place, points, looked)
    }

    /// How far the strongest score is above its threshold.
    fn excess(&self, looked: bool) -> f64 {
        let shift = self.look.shift.0 - self.look.shift.1;
        if !looked {
            return shift;
        }
        let bend = self.look.found.bend.score - self.look.bend_threshold;
        let dependence = self.look.found.dependence.score - self.look.dependence_threshold;
        shift.max(bend).max(dependence)
    }

    fn decide(&mut self, place: &Place<'_>, points: usize, looked: bool) -> Turn {
        let excess = self.excess(looked);
        let (kind, found) = self.best_name(points);
        let at = place.times.get(found.index).copied().unwrap_or(EventTime(0));
        let Some(mut incident) = self.incident else {
            if excess < 0.0 {
                return Turn::Nothing;
            }
            self.shift.reset();
            let incident = Incident {
                kind,
                opened: place.newest,
                points,
                last_near: place.newest,
                settled: false,
                size: found.size,
                at,
                score: found.score,
            };
            self.incident = Some(incident);
            return Turn::Opened(incident);
        };
        if excess >= -NEAR {
            incident.last_near = place.newest;
        }
        let since = place.newest - incident.opened;
        let quarter = index_of(incident.points / 4);
        let mut turn = Turn::Nothing;
        if !incident.settled && looked {
            let settles = since >= quarter;
            let renamed = kind != incident.kind;
            if excess >= -LIVE_WITHIN && (renamed || settles) {
                let resized = !close(incident.size, found.size);
                let known_better = renamed || resized || incident.at != at;
                (incident.kind, incident.size) = (kind, found.size);
                (incident.at, incident.score) = (at, found.score);
                if known_better {
                    turn = Turn::Revised(incident);
                }
            }
            if settles {
                incident.settled = true;
                turn = Turn::Settled { incident, revised: matches!(turn, Turn::Revised(_)) };
            }
        }
        self.incident = Some(incident);
        if incident.settled && place.newest - incident.last_near >= index_of(incident.points / 2) {
            self.incident = None;
            self.shift.reset();
            return Turn::Closed;
        }
        turn
    }

    /// The kind with the most evidence beyond what the search within one look is worth.
    fn best_name(&self, points: usize) -> (Kind, Found) {
        let found = &self.look.found;
        let [step, bend, dependence] = search_of_name(points);
        let mut best = (Kind::Step, found.step, found.step.score - step);
        for (kind, candidate, worth) in
            [(Kind::Bend, found.bend, bend), (Kind::Dependence, found.dependence, dependence)]
        {
            if candidate.score - worth > best.2 {
                best = (kind, candidate, candidate.score - worth);
            }
        }
        (best.0, best.1)
    }

    /// A new calibration cycle: only what is usual here is remembered.
    pub fn begin_cycle(&mut self) {
        let baseline = std::mem::take(&mut self.baseline);
        *self = ResidualWatch { baseline, ..ResidualWatch::default() };
    }

    /// The window begins anew: what was seen before the break says nothing any more.
    pub fn begin_anew(&mut self) {
        self.shift.reset();
        self.look = Look::default();
    }
}

/// Within a tenth of each other.
fn close(a: f64, b: f64) -> bool {
    (a - b).abs() <= 0.1 * a.abs().max(b.abs())
}

#[expect(clippy::cast_precision_loss, reason = "point counts are far below 2^53")]
fn count_of(points: u64) -> f64 {
    points as f64
}

fn index_of(points: usize) -> u64 {
    u64::try_from(points).unwrap_or(u64::MAX)
}
