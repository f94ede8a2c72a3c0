//! One refit of a channel: curves, choice, standard errors, reach, and what the window says.

use super::{Channel, Context, Refit};
use crate::drift::choose::{Choice, SWITCH_ABOVE, TURN_ABOVE, choose, eligible};
use crate::drift::family::Family;
use crate::drift::fit::{Fit, FitOutcome};
use crate::drift::forecast::Forecaster;
use crate::drift::reach::{Limit, Reach, assess_in, cap};
use crate::drift::robust::fit_robust;
use crate::drift::sandwich::{decays, own_correlation_in, sandwich_in};
use crate::drift::serial::{count, effective_count, spacing_of};
use crate::drift::workspace::Workspace;
use crate::watch::said::{Said, asked_day};
use crate::watch::time::EventTime;

impl Channel {
    /// Fits every family, chooses, and assesses the reach.
    pub(super) fn refit(&mut self, context: &Context<'_>, at: EventTime) {
        let (x, y) = self.series();
        let current = self.refit.as_ref().and_then(Refit::curve).map(|fit| fit.family);
        let fresh = self.points_ever - self.points_at_refit;
        if self.refit.is_some() {
            self.stride = (0.5 * self.stride + 0.5 * points(fresh)).max(1.0);
        }
        self.points_at_refit = self.points_ever;
        self.points_in_refit = x.len();
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
        let fits =
            with_those_that_turn(fits, (&x, &y), self.residuals.phi(), current, &mut workspace);
        let (_, spacing) = spacing_of(&x);
        let mut choice = None;
        let mut standard_errors = [0.0; 4];
        if !fits.is_empty() {
            let phi = self.residuals.phi();
            let best = choose(&fits, effective_count(x.len(), phi), current);
            let chosen = &fits[best.chosen];
            let own = own_correlation_in(chosen, &x, &y, &spacing, &mut workspace);
            if chosen.is_exact() {
                // Rounding errors have structure, and mean nothing.
                self.residuals.without_curve();
            } else {
                let curve = (chosen.family, &chosen.theta);
                self.residuals.refitted(&x, &y, curve, self.points_ever, points_between(fresh));
            }
            let decays = decays(&spacing, phi.max(own).clamp(0.0, 0.97));
            if let Some((v, _)) = sandwich_in(chosen, &x, &decays, &mut workspace) {
                standard_errors = chosen.standard_errors_of(&v);
            }
            choice = Some(best);
        } else {
            self.residuals.without_curve();
        }
        let curve = choice.as_ref().map(|best: &Choice| &fits[best.chosen]);
        let (reach, said) = self.say(context, at, (&x, &y), curve, &mut workspace);
        self.refit = Some(Refit { at, fits, choice, standard_errors, not_fitted, reach, said });
    }

    /// How far the window carries, and what it says of now and of the asked day.
    fn say(
        &mut self,
        context: &Context<'_>,
        at: EventTime,
        (x, y): (&[f64], &[f64]),
        curve: Option<&Fit>,
        workspace: &mut Workspace,
    ) -> (Reach, Said) {
        let turning = curve.map(|fit| fit.family).filter(|family| family.may_turn());
        let exact = curve.is_some_and(Fit::is_exact);
        let (mut reach, carried) = match turning {
            _ if exact => (Reach::none(Limit::NoScatter), false),
            Some(_) => (Reach::none(Limit::Turns), false),
            None => self.reach(context, x, y, curve.is_none(), workspace),
        };
        // A curve that turns says how large the deviation is now, and nothing of later.
        let of_now = turning.map(|family| [family]);
        let families = of_now.as_ref().map_or(&context.rules.families[..], |one| &one[..]);
        let phi = self.residuals.phi();
        let forecaster = Forecaster::new_in(x, y, families, phi, workspace);
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
            reach = self.assessed(context, x, y, workspace);
            said = says(&reach);
        }
        said.asked = said.asked.or_else(|| asked_day(context.rules, at));
        (reach, said)
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
        workspace: &mut Workspace,
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
        (self.assessed(context, x, y, workspace), false)
    }

    fn assessed(
        &mut self,
        context: &Context<'_>,
        x: &[f64],
        y: &[f64],
        workspace: &mut Workspace,
    ) -> Reach {
        self.points_at_reach = self.points_ever;
        assess_in(x, y, &context.rules.families, self.residuals.phi(), workspace)
    }
}

/// The fits, and a quadratic or cubic where the data change direction inside the window and it is
/// clearly better than each of them.
fn with_those_that_turn(
    mut fits: Vec<Fit>,
    (x, y): (&[f64], &[f64]),
    phi: f64,
    current: Option<Family>,
    workspace: &mut Workspace,
) -> Vec<Fit> {
    if let (Some(&oldest), Some(&newest)) = (x.first(), x.last())
        && !fits.is_empty()
    {
        let settled = fits.len();
        for family in [Family::Quadratic, Family::Cubic] {
            if let FitOutcome::Fitted(fit) = fit_robust(family, x, y, workspace) {
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
