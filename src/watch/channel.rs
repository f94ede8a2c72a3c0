//! One channel: its cycle, window, curve, residual watch and alerts; a deterministic state machine.
//!
//! Everything that raises or clears an alert here follows from the readings' own times, so that a
//! history replayed, a live feed and a restart in the middle all come to the same alerts. Only
//! silence and the shelf follow the shell's time.

use crate::drift::choose::{Choice, SWITCH_ABOVE, TURN_ABOVE, choose, eligible};
use crate::drift::family::Family;
use crate::drift::fit::{Fit, FitOutcome, fit};
use crate::drift::forecast::{Forecaster, own_correlation, sandwich};
use crate::drift::reach::{Limit, Reach, assess, cap};
use crate::drift::serial::{count, effective_count, spacing_of};
use crate::drift::structure::Workspace;
use crate::watch::alert::{AlertBook, AlertEvent, Owner};
use crate::watch::budget::Budget;
use crate::watch::finding::Finding;
use crate::watch::incident::{Incident, Place, ResidualWatch, Turn};
use crate::watch::limits::{POINTS_AFTER_BREAK, POINTS_TO_FIT};
use crate::watch::reading::{Counts, Reading, Taken};
use crate::watch::said::{Said, asked_day};
use crate::watch::settings::{Basis, WatchSettings};
use crate::watch::time::{EventTime, ShellTime, Span};
use crate::watch::window::Window;
use crate::watch::{judge, report};
use serde::{Deserialize, Serialize};

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
    points_at_reach: u64,
    stride: f64,
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
        work: &mut Workspace,
    ) -> (Taken, Outcome) {
        let mut outcome = Outcome::default();
        let age_zero = self.age_zero(reading.time);
        let taken = if reading.time <= age_zero {
            Taken::BeforeAgeZero
        } else {
            self.window.take(reading.time, reading.deviation)
        };
        self.counts.note(taken);
        self.unusable = (taken != Taken::Accepted).then_some(taken);
        if taken == Taken::Accepted {
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
        work: &mut Workspace,
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
            Some(refit) => refit.at.plus(context.rules.refit_every) <= newest,
        };
        if due {
            self.refit(context, newest);
        }
        let turn = self.look(context, newest, due, work, outcome);
        self.follow(context, turn, newest, outcome);
        if due || matches!(turn, Turn::Settled { .. }) {
            self.begin_anew_at_break(context, newest);
        }
        if due {
            judge::after_refit(self, context, newest, outcome);
            outcome.findings.push(report::finding(self, context));
        }
    }

    /// Fits every family, chooses, and assesses the reach.
    fn refit(&mut self, context: &Context<'_>, at: EventTime) {
        let (x, y) = self.series();
        let current = self.refit.as_ref().and_then(Refit::curve).map(|fit| fit.family);
        let fresh = self.points_ever - self.points_at_refit;
        if self.refit.is_some() {
            self.stride = (0.5 * self.stride + 0.5 * points(fresh)).max(1.0);
        }
        self.points_at_refit = self.points_ever;
        let (mut fits, mut not_fitted) = (Vec::new(), Vec::new());
        for &family in &context.rules.families {
            match fit(family, &x, &y, true) {
                FitOutcome::Fitted(fit) => fits.push(*fit),
                other => {
                    not_fitted.push((family.name().to_owned(), other.why_not().unwrap_or_default()))
                }
            }
        }
        let fits = with_those_that_turn(fits, &x, &y, self.residuals.phi(), current);
        let (_, spacing) = spacing_of(&x);
        let mut choice = None;
        let mut standard_errors = [0.0; 4];
        if !fits.is_empty() {
            let phi = self.residuals.phi();
            let best = choose(&fits, effective_count(x.len(), phi), current);
            let chosen = &fits[best.chosen];
            let own = own_correlation(chosen, &x, &y, &spacing);
            if chosen.is_exact() {
                // Rounding errors have structure, and mean nothing.
                self.residuals.without_curve();
            } else {
                let curve = (chosen.family, &chosen.theta);
                self.residuals.refitted(&x, &y, curve, self.points_ever, points_between(fresh));
            }
            if let Some((v, _)) = sandwich(chosen, &x, &spacing, phi.max(own).clamp(0.0, 0.97)) {
                standard_errors = chosen.standard_errors_of(&v);
            }
            choice = Some(best);
        } else {
            self.residuals.without_curve();
        }
        let turning = choice.as_ref().map(|best| fits[best.chosen].family).filter(|f| f.may_turn());
        let exact = choice.as_ref().is_some_and(|best| fits[best.chosen].is_exact());
        let (mut reach, carried) = match turning {
            _ if exact => (Reach::none(Limit::NoScatter), false),
            Some(_) => (Reach::none(Limit::Turns), false),
            None => self.reach(context, &x, &y, fits.is_empty()),
        };
        // A curve that turns says how large the deviation is now, and nothing of later.
        let of_now = turning.map(|family| [family]);
        let families = of_now.as_ref().map_or(&context.rules.families[..], |one| &one[..]);
        let forecaster = Forecaster::new(&x, &y, families, self.residuals.phi());
        let newest = x.last().copied().unwrap_or(0.0);
        let says = |reach: &Reach| {
            let forecaster = forecaster.as_ref().filter(|_| !exact);
            forecaster.map_or_else(Said::default, |forecaster| {
                Said::of(forecaster, reach, context.rules, at, newest)
            })
        };
        let mut said = says(&reach);
        // Nothing is refused by an older window's reach, where this one's own could differ.
        let could_differ = |(_, days): (EventTime, f64)| {
            days <= cap(x.len()) * (newest - x.first().copied().unwrap_or(newest))
        };
        if carried && said.ahead.is_none() && said.asked.is_some_and(could_differ) {
            reach = self.assessed(context, &x, &y);
            said = says(&reach);
        }
        said.asked = said.asked.or_else(|| asked_day(context.rules, at));
        self.refit = Some(Refit { at, fits, choice, standard_errors, not_fitted, reach, said });
    }

    /// Reach is assessed anew every tenth of the window, else carried on: how far ahead of its newest
    /// point a window like this one carries does not change faster than the window itself.
    /// True: carried on.
    fn reach(
        &mut self,
        context: &Context<'_>,
        x: &[f64],
        y: &[f64],
        no_curve: bool,
    ) -> (Reach, bool) {
        if no_curve {
            return (Reach::none(Limit::NoCurve), false);
        }
        if context.rules.statement.is_none() && context.rules.tolerance.is_none() {
            return (Reach::none(Limit::NotAsked), false);
        }
        if let Some(refit) = &self.refit
            && refit.reach.days_past_newest > 0.0
            && points(self.points_ever - self.points_at_reach) < count(x.len() / 10)
        {
            return (refit.reach.clone(), true);
        }
        (self.assessed(context, x, y), false)
    }

    fn assessed(&mut self, context: &Context<'_>, x: &[f64], y: &[f64]) -> Reach {
        self.points_at_reach = self.points_ever;
        assess(x, y, &context.rules.families, self.residuals.phi())
    }

    fn look(
        &mut self,
        context: &Context<'_>,
        newest: EventTime,
        full: bool,
        work: &mut Workspace,
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
        let Some((turn, look)) = self.residuals.look(&place, full, work) else {
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
    fn begin_anew_at_break(&mut self, context: &Context<'_>, newest: EventTime) {
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
        self.refit(context, newest);
    }
}

/// The fits, and a quadratic or cubic where the data change direction inside the window and it is
/// clearly better than each of them.
fn with_those_that_turn(
    mut fits: Vec<Fit>,
    x: &[f64],
    y: &[f64],
    phi: f64,
    current: Option<Family>,
) -> Vec<Fit> {
    if let (Some(&oldest), Some(&newest)) = (x.first(), x.last())
        && !fits.is_empty()
    {
        let settled = fits.len();
        for family in [Family::Quadratic, Family::Cubic] {
            if let FitOutcome::Fitted(fit) = fit(family, x, y, true) {
                fits.push(*fit);
            }
        }
        let better_by = |f| if current == Some(f) { SWITCH_ABOVE } else { TURN_ABOVE };
        let may = eligible(&fits, effective_count(x.len(), phi), (oldest, newest), better_by);
        let mut place = 0;
        fits.retain(|_| {
            place += 1;
            place <= settled || may.contains(&(place - 1))
        });
    }
    fits
}

#[expect(clippy::cast_precision_loss, reason = "point counts are far below 2^53")]
fn points(count: u64) -> f64 {
    count as f64
}

/// Points between two refits; more than a window's are as many as one can ask about.
fn points_between(fresh: u64) -> usize {
    usize::try_from(fresh).unwrap_or(usize::MAX)
}
