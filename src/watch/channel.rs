//! One channel: its cycle, window, curve, residual watch and alerts; a deterministic state machine.
//!
//! Everything that raises or clears an alert here follows from the readings' own times, so that a
//! history replayed, a live feed and a restart in the middle all come to the same alerts. Only
//! silence and the shelf follow the shell's time.

use crate::drift::choose::Choice;
use crate::drift::fit::Fit;
use crate::drift::reach::{Limit, Reach};
use crate::drift::structure;
use crate::drift::workspace::Workspace;
use crate::watch::alert::{AlertBook, AlertEvent, Owner};
use crate::watch::budget::Budget;
use crate::watch::finding::Finding;
use crate::watch::incident::{Incident, Place, ResidualWatch, Turn};
use crate::watch::limits::{POINTS_AFTER_BREAK, POINTS_TO_EXAMINE, POINTS_TO_FIT};
use crate::watch::reading::{Counts, Reading, Taken};
use crate::watch::said::Said;
use crate::watch::settings::{Basis, WatchSettings};
use crate::watch::time::{EventTime, ShellTime, Span};
use crate::watch::window::Window;
use crate::watch::{judge, report};
use serde::{Deserialize, Serialize};

mod refit;

/// How age zero is known.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
pub enum KnownFrom {
    /// A calibration mark.
    Mark,
    /// The settings.
    Setting,
    /// Nobody said: the first reading.
    FirstReading,
}

/// The calibration cycle.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
pub struct Cycle {
    /// Age zero.
    pub age_zero: EventTime,
    /// How it is known.
    pub known_from: KnownFrom,
}

/// The newest refit.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Refit {
    /// The newest point that went into it.
    pub at: EventTime,
    /// The fits, and which one is chosen; empty when none could be had.
    pub fits: Vec<Fit>,
    /// The choice; None without fits.
    pub choice: Option<Choice>,
    /// Standard errors of the chosen curve, serial dependence allowed for.
    pub standard_errors: [f64; 4],
    /// Why families could not be fitted: (name, reason).
    pub not_fitted: Vec<(String, String)>,
    /// How far statements are supported.
    pub reach: Reach,
    /// What the window says of now and of the asked day.
    pub said: Said,
}

impl Refit {
    /// The chosen curve.
    pub fn curve(&self) -> Option<&Fit> {
        self.choice.as_ref().map(|choice| &self.fits[choice.chosen])
    }
}

/// One channel.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Channel {
    /// Its name.
    pub name: String,
    /// Journal row with which it began; orders the channels' arrivals.
    pub born: u64,
    /// What its points rest on: as the settings said when it began or was last reconfigured.
    pub basis: Basis,
    /// Its cycle; None before the first reading.
    pub cycle: Option<Cycle>,
    /// Its window.
    pub window: Window,
    /// The newest refit.
    pub refit: Option<Refit>,
    /// The watch over its residuals.
    pub residuals: ResidualWatch,
    /// Its alerts.
    pub alerts: AlertBook,
    /// What became of its readings.
    pub counts: Counts,
    /// When a reading that could be used last arrived; before the first, when the channel began.
    pub last_arrival: ShellTime,
    /// Why the newest arrival could not be used; None: it could.
    pub unusable: Option<Taken>,
    /// Counters for conditions that must hold several refits.
    pub patience: judge::Patience,
    points_ever: u64,
    points_at_refit: u64,
    /// Points that the window held then.
    points_in_refit: usize,
    points_at_reach: u64,
    stride: f64,
}

/// Memory that channels take turns in; what it holds never changes a result.
#[derive(Debug, Default)]
pub struct Work {
    /// For fits.
    pub fits: Workspace,
    /// For looks at residuals.
    pub looks: structure::Workspace,
}

/// What a channel needs to know of the site.
#[derive(Clone, Copy, Debug)]
pub struct Context<'a> {
    /// The site's name.
    pub site: &'a str,
    /// The channel's rules.
    pub rules: &'a WatchSettings,
    /// The site's budget at this moment.
    pub budget: Budget,
}

/// What followed from a reading.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Outcome {
    /// Alert events, in order.
    pub events: Vec<AlertEvent>,
    /// A finding for each refit, and for each event between refits; the newest is what counts.
    pub findings: Vec<Finding>,
    /// Looks at the residuals, for auditing.
    pub looks: Vec<(EventTime, u64, crate::watch::incident::Look)>,
}

impl Channel {
    /// A channel of which nothing is known yet.
    pub fn new(name: String, born: u64, now: ShellTime, basis: Basis) -> Channel {
        Channel {
            name,
            born,
            basis,
            cycle: None,
            window: Window::default(),
            refit: None,
            residuals: ResidualWatch::default(),
            alerts: AlertBook::default(),
            counts: Counts::default(),
            last_arrival: now,
            unusable: None,
            patience: judge::Patience::default(),
            points_ever: 0,
            points_at_refit: 0,
            points_in_refit: 0,
            points_at_reach: 0,
            stride: 1.0,
        }
    }

    /// Takes one reading through to whatever follows from it; `work` is memory to reuse.
    pub fn take(
        &mut self,
        context: &Context<'_>,
        reading: &Reading,
        now: ShellTime,
        work: &mut Work,
    ) -> (Taken, Outcome) {
        let mut outcome = Outcome::default();
        let began = self.cycle.is_none();
        let age_zero = self.age_zero(reading.time);
        let taken = if began && reading.time == age_zero {
            Taken::AgeZero
        } else if reading.time <= age_zero {
            Taken::BeforeAgeZero
        } else {
            self.window.take(reading.time, reading.deviation)
        };
        self.counts.note(taken);
        self.unusable = (!taken.is_used()).then_some(taken);
        if taken.is_used() {
            self.last_arrival = self.last_arrival.max(now);
            judge::no_longer_silent(self, context, reading.time, &mut outcome);
        }
        while let Some(point) = self.window.next_point(context.rules) {
            self.points_ever += 1;
            self.on_point(context, point.time, work, &mut outcome);
        }
        (taken, outcome)
    }

    /// Age zero: by mark, else by setting, else the first reading (which then has age 0 itself).
    fn age_zero(&mut self, first: EventTime) -> EventTime {
        let cycle = self.cycle.get_or_insert(match self.basis.calibrated {
            Some(age_zero) => Cycle { age_zero, known_from: KnownFrom::Setting },
            None => Cycle { age_zero: first, known_from: KnownFrom::FirstReading },
        });
        cycle.age_zero
    }

    /// Age zero, if a mark or the settings say a later one than `mark`: then that one stays.
    pub fn calibrated_later_than(&self, mark: EventTime) -> Option<Cycle> {
        self.cycle
            .filter(|cycle| cycle.known_from != KnownFrom::FirstReading && mark < cycle.age_zero)
    }

    /// A calibration mark closes the cycle: age zero moves, the window begins anew.
    pub fn calibrated(
        &mut self,
        context: &Context<'_>,
        mark: EventTime,
        as_left: Option<f64>,
    ) -> Outcome {
        self.cycle = Some(Cycle { age_zero: mark, known_from: KnownFrom::Mark });
        self.window.begin_cycle(mark);
        self.refit = None;
        self.residuals.begin_cycle();
        let mut outcome = Outcome::default();
        judge::new_cycle(self, context, mark, as_left, &mut outcome);
        outcome
    }

    /// The settings have changed what the points rest on. Measured otherwise: window, curve and what is
    /// usual here begin anew. Another age zero: a new cycle from there, unless a mark says when.
    pub fn reconfigured(
        &mut self,
        context: &Context<'_>,
        was: &Basis,
        is: &Basis,
        now: EventTime,
    ) -> Outcome {
        let mut outcome = Outcome::default();
        self.basis = is.clone();
        if was.measured_as != is.measured_as {
            self.window.begin_anew();
            self.refit = None;
            self.residuals = ResidualWatch::default();
            self.stride = 1.0;
            judge::measured_otherwise(self, now, &mut outcome);
        }
        let by_mark = self.cycle.is_some_and(|cycle| cycle.known_from == KnownFrom::Mark);
        if let Some(age_zero) =
            is.calibrated.filter(|_| was.calibrated != is.calibrated && !by_mark)
        {
            self.cycle = Some(Cycle { age_zero, known_from: KnownFrom::Setting });
            self.window.begin_cycle(age_zero);
            self.refit = None;
            self.residuals.begin_cycle();
            judge::new_cycle(self, context, now, None, &mut outcome);
        }
        outcome
    }

    /// Ages (days) and means of the window's points.
    pub fn series(&self) -> (Vec<f64>, Vec<f64>) {
        let age_zero = self.cycle.map_or(EventTime(0), |cycle| cycle.age_zero);
        self.window.points().iter().map(|p| (p.time.days_since(age_zero), p.mean)).unzip()
    }

    /// The time at which the instrument had an age of `x` days.
    pub fn time_at_age(&self, x: f64) -> EventTime {
        let age_zero = self.cycle.map_or(EventTime(0), |cycle| cycle.age_zero);
        age_zero.plus(Span::from_days(x))
    }

    /// Whose alerts these are.
    pub fn owner<'a>(&'a self, context: &Context<'a>) -> Owner<'a> {
        Owner { site: context.site, channel: &self.name }
    }

    fn on_point(
        &mut self,
        context: &Context<'_>,
        newest: EventTime,
        work: &mut Work,
        outcome: &mut Outcome,
    ) {
        if self.refit.is_some() && self.window.points().len() < POINTS_TO_FIT {
            // A pause longer than the window spans has emptied it: nothing of the old one is left.
            self.refit = None;
            self.residuals.begin_cycle();
            judge::gathers_anew(self, context, newest, outcome);
        }
        let due = match &self.refit {
            None => self.window.points().len() >= POINTS_TO_FIT,
            Some(refit) => {
                refit.at.plus(context.rules.refit_every) <= newest || self.is_first_examination()
            }
        };
        if due {
            self.refit(context, newest, &mut work.fits);
        }
        let turn = self.look(context, newest, due, work, outcome);
        self.follow(context, turn, newest, outcome);
        if due || matches!(turn, Turn::Settled { .. }) {
            self.begin_anew_at_break(context, newest, &mut work.fits);
        }
        if due {
            judge::after_refit(self, context, newest, outcome);
            outcome.findings.push(report::finding(self, context));
        }
    }

    /// Whether residuals can be examined now and could not at the last refit, whose curve and noise rest
    /// on too few points to judge by.
    fn is_first_examination(&self) -> bool {
        self.points_in_refit < POINTS_TO_EXAMINE && self.window.points().len() >= POINTS_TO_EXAMINE
    }

    fn look(
        &mut self,
        context: &Context<'_>,
        newest: EventTime,
        full: bool,
        work: &mut Work,
        outcome: &mut Outcome,
    ) -> Turn {
        let place = Place {
            newest: self.points_ever,
            stride_points: self.stride_points(),
            budget: context.budget,
            window_points: context.rules.window_points,
            window_span: context.rules.window_span,
            age_zero: self.cycle.map_or(EventTime(0), |cycle| cycle.age_zero),
            points: self.window.points(),
        };
        let Some((turn, look)) = self.residuals.look(&place, full, &mut work.looks) else {
            return Turn::Nothing;
        };
        outcome.looks.push((newest, self.points_ever, look));
        turn
    }

    #[expect(clippy::cast_possible_truncation, clippy::cast_sign_loss, reason = "a mean of counts")]
    fn stride_points(&self) -> usize {
        self.stride.round().max(1.0) as usize
    }

    /// Turns what the residual watch says into alerts, and begins the window anew after a break.
    fn follow(
        &mut self,
        context: &Context<'_>,
        turn: Turn,
        newest: EventTime,
        outcome: &mut Outcome,
    ) {
        match turn {
            Turn::Nothing => return,
            Turn::Opened(incident) => judge::opened(self, context, &incident, newest, outcome),
            Turn::Revised(incident) => judge::revised(self, context, &incident, newest, outcome),
            Turn::ToldAnew(incident) => judge::told_anew(self, context, &incident, newest, outcome),
            Turn::Settled { incident, revised } => {
                if revised {
                    judge::revised(self, context, &incident, newest, outcome);
                }
            }
            Turn::Closed => judge::closed(self, newest, outcome),
        }
        outcome.findings.push(report::finding(self, context));
    }

    /// After a settled step or bend: the window begins at the break, once enough points follow it.
    fn begin_anew_at_break(
        &mut self,
        context: &Context<'_>,
        newest: EventTime,
        fits: &mut Workspace,
    ) {
        let Some(at) = self.residuals.incident().and_then(Incident::settled_break) else { return };
        let points = self.window.points();
        let after = points.iter().filter(|p| p.time >= at).count();
        if after < POINTS_AFTER_BREAK.max(points.len() / 5) || after == points.len() {
            return;
        }
        self.window.begin_at(at);
        self.residuals.begin_anew();
        self.refit =
            self.refit.take().map(|refit| Refit { reach: Reach::none(Limit::NoCurve), ..refit });
        self.refit(context, newest, fits);
    }
}
