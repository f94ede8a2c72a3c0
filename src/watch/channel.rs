//! One channel: its cycle, window, curve, residual watch and alerts; a deterministic state machine.
//!
//! Everything that raises or clears an alert here follows from the readings' own times, so that a
//! history replayed, a live feed and a restart in the middle all come to the same alerts. Only
//! silence and the shelf follow the shell's time.

use crate::drift::choose::{Choice, choose};
use crate::drift::fit::{Fit, FitOutcome};
use crate::drift::forecast::Forecaster;
use crate::drift::reach::{Limit, Reach, assess_in};
use crate::drift::robust::fit_robust;
use crate::drift::sandwich::{decays, own_correlation_in, sandwich_in};
use crate::drift::serial::{count, effective_count, spacing_of};
use crate::drift::structure::whitened::Whitened;
use crate::drift::workspace::Workspace;
use crate::watch::alert::{AlertBook, AlertEvent, Owner};
use crate::watch::budget::Budget;
use crate::watch::finding::Finding;
use crate::watch::incident::{Incident, Place, ResidualWatch, Turn};
use crate::watch::limits::{POINTS_AFTER_BREAK, POINTS_TO_EXAMINE, POINTS_TO_FIT};
use crate::watch::reading::{Counts, Reading, Taken};
use crate::watch::said::Said;
use crate::watch::settings::WatchSettings;
use crate::watch::time::{EventTime, ShellTime};
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
    /// When something last arrived.
    pub last_arrival: ShellTime,
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
    pub fn new(name: String, born: u64, now: ShellTime) -> Channel {
        Channel {
            name,
            born,
            cycle: None,
            window: Window::default(),
            refit: None,
            residuals: ResidualWatch::default(),
            alerts: AlertBook::default(),
            counts: Counts::default(),
            last_arrival: now,
            patience: judge::Patience::default(),
            points_ever: 0,
            points_at_refit: 0,
            points_at_reach: 0,
            stride: 1.0,
        }
    }

    /// Takes one reading through to whatever follows from it.
    pub fn take(
        &mut self,
        context: &Context<'_>,
        reading: &Reading,
        now: ShellTime,
    ) -> (Taken, Outcome) {
        self.last_arrival = self.last_arrival.max(now);
        let mut outcome = Outcome::default();
        judge::no_longer_silent(self, context, reading.time, &mut outcome);
        let age_zero = self.age_zero(context, reading.time);
        let taken = if reading.time <= age_zero {
            Taken::BeforeAgeZero
        } else {
            self.window.take(reading.time, reading.deviation)
        };
        self.counts.note(taken);
        while let Some(point) = self.window.next_point(context.rules) {
            self.points_ever += 1;
            self.on_point(context, point.time, &mut outcome);
        }
        (taken, outcome)
    }

    /// Age zero: by mark, else by setting, else the first reading (which then has age 0 itself).
    fn age_zero(&mut self, context: &Context<'_>, first: EventTime) -> EventTime {
        let cycle = self.cycle.get_or_insert(match context.rules.calibrated {
            Some(age_zero) => Cycle { age_zero, known_from: KnownFrom::Setting },
            None => Cycle { age_zero: first, known_from: KnownFrom::FirstReading },
        });
        cycle.age_zero
    }

    /// A calibration mark closes the cycle: age zero moves, the window begins anew.
    pub fn calibrated(&mut self, context: &Context<'_>, mark: EventTime) -> Outcome {
        self.cycle = Some(Cycle { age_zero: mark, known_from: KnownFrom::Mark });
        self.window.begin_cycle(mark);
        self.refit = None;
        self.residuals.begin_cycle();
        let mut outcome = Outcome::default();
        judge::new_cycle(self, context, mark, &mut outcome);
        outcome
    }

    /// Ages (days) and means of the window's points.
    pub fn series(&self) -> (Vec<f64>, Vec<f64>) {
        let age_zero = self.cycle.map_or(EventTime(0), |cycle| cycle.age_zero);
        self.window.points().iter().map(|p| (p.time.days_since(age_zero), p.mean)).unzip()
    }

    /// Whose alerts these are.
    pub fn owner<'a>(&'a self, context: &Context<'a>) -> Owner<'a> {
        Owner { site: context.site, channel: &self.name }
    }

    fn on_point(&mut self, context: &Context<'_>, newest: EventTime, outcome: &mut Outcome) {
        let due = match &self.refit {
            None => self.window.points().len() >= POINTS_TO_FIT,
            Some(refit) => refit.at.plus(context.rules.refit_every) <= newest,
        };
        if due {
            self.refit(context, newest);
        }
        let turn = self.look(context, newest, due, outcome);
        self.follow(context, turn, newest, outcome);
        if due {
            judge::after_refit(self, context, newest, outcome);
            outcome.findings.push(report::finding(self, context));
        }
    }

    /// Fits every family, chooses, and assesses the reach.
    fn refit(&mut self, context: &Context<'_>, at: EventTime) {
        let (x, y) = self.series();
        let current = self.refit.as_ref().and_then(Refit::curve).map(|fit| fit.family);
        if self.refit.is_some() {
            self.stride =
                (0.5 * self.stride + 0.5 * points(self.points_ever, self.points_at_refit)).max(1.0);
        }
        self.points_at_refit = self.points_ever;
        let mut workspace = Workspace::default();
        let (mut fits, mut not_fitted) = (Vec::new(), Vec::new());
        for &family in &context.rules.families {
            match fit_robust(family, &x, &y, &mut workspace) {
                FitOutcome::Fitted(fit) => fits.push(*fit),
                other => {
                    not_fitted.push((family.name().to_owned(), other.why_not().unwrap_or_default()))
                }
            }
        }
        let (_, spacing) = spacing_of(&x);
        let mut choice = None;
        let mut standard_errors = [0.0; 4];
        if !fits.is_empty() {
            let phi = self.residuals.phi(x.len());
            let best = choose(&fits, effective_count(x.len(), phi), current);
            let chosen = &fits[best.chosen];
            let own = own_correlation_in(chosen, &x, &y, &spacing, &mut workspace);
            let place = self.place_free(context);
            self.residuals.refitted(&place, x.len(), own);
            let decays = decays(&spacing, phi.max(own).clamp(0.0, 0.97));
            if let Some((v, _)) = sandwich_in(chosen, &x, &decays, &mut workspace) {
                standard_errors = chosen.standard_errors_of(&v);
            }
            choice = Some(best);
        }
        let reach = self.reach(context, &x, &y, fits.is_empty(), &mut workspace);
        let phi = self.residuals.phi(x.len());
        let forecaster = Forecaster::new_in(&x, &y, &context.rules.families, phi, &mut workspace);
        let said = forecaster.map_or_else(Said::default, |forecaster| {
            Said::of(&forecaster, &reach, context.rules, at, *x.last().unwrap_or(&0.0))
        });
        self.refit = Some(Refit { at, fits, choice, standard_errors, not_fitted, reach, said });
    }

    /// Reach is assessed anew every tenth of the window, else carried on: how far ahead of its newest
    /// point a window like this one carries does not change faster than the window itself.
    fn reach(
        &mut self,
        context: &Context<'_>,
        x: &[f64],
        y: &[f64],
        no_curve: bool,
        workspace: &mut Workspace,
    ) -> Reach {
        if no_curve {
            return Reach::none(Limit::NoCurve);
        }
        if context.rules.statement.is_none() && context.rules.tolerance.is_none() {
            return Reach::none(Limit::NotAsked);
        }
        if let Some(refit) = &self.refit
            && refit.reach.days_past_newest > 0.0
            && points(self.points_ever, self.points_at_reach) < count(x.len() / 10)
        {
            return refit.reach.clone();
        }
        self.points_at_reach = self.points_ever;
        assess_in(x, y, &context.rules.families, self.residuals.phi(x.len()), workspace)
    }

    fn place_free(&self, context: &Context<'_>) -> Place<'static> {
        Place {
            newest: self.points_ever,
            stride: self.stride,
            points_per_year: self.points_per_year(),
            budget: context.budget,
            times: &[],
        }
    }

    fn points_per_year(&self) -> f64 {
        let (x, _) = self.series();
        if x.len() < 2 { 1.0 } else { 365.25 / spacing_of(&x).0.max(1e-9) }
    }

    fn look(
        &mut self,
        context: &Context<'_>,
        newest: EventTime,
        full: bool,
        outcome: &mut Outcome,
    ) -> Turn {
        let (x, y) = self.series();
        let Some(curve) = self.refit.as_ref().and_then(Refit::curve) else { return Turn::Nothing };
        if x.len() < POINTS_TO_EXAMINE {
            return Turn::Nothing;
        }
        let phi = self.residuals.phi(x.len());
        let Some(window) = Whitened::new(&x, &y, curve, phi) else {
            return Turn::Nothing;
        };
        let times: Vec<EventTime> = self.window.points().iter().map(|p| p.time).collect();
        let place = Place { times: &times, ..self.place_free(context) };
        let turn = self.residuals.look(&window, &place, full);
        outcome.looks.push((newest, self.points_ever, self.residuals.look));
        turn
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
            Turn::Settled { incident, revised } => {
                if revised {
                    judge::revised(self, context, &incident, newest, outcome);
                }
                self.begin_anew_at(context, &incident, newest);
            }
            Turn::Closed => judge::closed(self, newest, outcome),
        }
        outcome.findings.push(report::finding(self, context));
    }

    /// After a settled step or bend: the window begins at the break, if enough points follow it.
    fn begin_anew_at(&mut self, context: &Context<'_>, incident: &Incident, newest: EventTime) {
        if incident.kind == crate::watch::alert::Kind::Dependence {
            return;
        }
        let points = self.window.points();
        let after = points.iter().filter(|p| p.time >= incident.at).count();
        if after < POINTS_AFTER_BREAK.max(points.len() / 5) || after == points.len() {
            return;
        }
        self.window.begin_at(incident.at);
        self.residuals.begin_anew();
        self.refit =
            self.refit.take().map(|refit| Refit { reach: Reach::none(Limit::NoCurve), ..refit });
        self.refit(context, newest);
    }
}

#[expect(clippy::cast_precision_loss, reason = "point counts are far below 2^53")]
fn points(now: u64, before: u64) -> f64 {
    (now - before) as f64
}
