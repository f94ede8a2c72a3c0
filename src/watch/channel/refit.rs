//! One refit of a channel: curves, choice, standard errors, reach, and what the window says.

use super::{Channel, Context, Refit};
use crate::drift::choose::{Choice, SWITCH_ABOVE, TURN_ABOVE, choose, eligible};
use crate::drift::family::Family;
use crate::drift::fit::{Fit, FitOutcome};
use crate::drift::forecast::Forecaster;
use crate::drift::reach::{Limit, Reach, assess_in, cap};
use crate::drift::robust::fit_robust_weighted;
use crate::drift::sandwich::{decays, own_correlation_in, sandwich_in};
use crate::drift::serial::{count, effective_count, spacing_of};
use crate::drift::workspace::Workspace;
use crate::watch::said::{Said, asked_day};
use crate::watch::time::EventTime;
use crate::watch::weights::weights;

impl Channel {
    /// Fits every family, chooses, and assesses the reach.
    pub(super) fn refit(
        &mut self,
        context: &Context<'_>,
        at: EventTime,
        workspace: &mut Workspace,
    ) {
        let (x, y) = self.series();
        let current = self.refit.as_ref().and_then(Refit::curve).map(|fit| fit.family);
        let fresh = self.points_ever - self.points_at_refit;
        if self.refit.is_some() {
            self.stride = (0.5 * self.stride + 0.5 * points(fresh)).max(1.0);
        }
        self.points_at_refit = self.points_ever;
        self.points_in_refit = x.len();
        let weights = self.weights(&x, &y, workspace);
        let data = Data { x: &x, y: &y, weights: weights.as_deref() };
        let (mut fits, mut not_fitted) = (Vec::new(), Vec::new());
        for &family in &context.rules.families {
            match data.fit(family, workspace) {
                FitOutcome::Fitted(fit) => fits.push(*fit),
                other => {
                    not_fitted.push((family.name().to_owned(), other.why_not().unwrap_or_default()))
                }
            }
        }
        let fits = with_those_that_turn(fits, &data, self.residuals.phi(), current, workspace);
        let (_, spacing) = spacing_of(&x);
        let mut choice = None;
        let mut standard_errors = [0.0; 4];
        if !fits.is_empty() {
            let phi = self.residuals.phi();
            let best = choose(&fits, effective_count(x.len(), phi), current);
            let chosen = &fits[best.chosen];
            let own = own_correlation_in(chosen, &x, &y, &spacing, workspace);
            if chosen.is_exact() {
                // Rounding errors have structure, and mean nothing.
                self.residuals.without_curve();
            } else {
                let curve = (chosen.family, &chosen.theta);
                self.residuals.refitted(&x, &y, curve, self.points_ever, points_between(fresh));
            }
            let decays = decays(&spacing, phi.max(own).clamp(0.0, 0.97));
            if let Some((v, _)) = sandwich_in(chosen, &x, &decays, workspace) {
                standard_errors = chosen.standard_errors_of(&v);
            }
            choice = Some(best);
        } else {
            self.residuals.without_curve();
        }
        let curve = choice.as_ref().map(|best: &Choice| &fits[best.chosen]);
        let (reach, said) = self.say(context, at, (&x, &y), curve, workspace);
        self.refit = Some(Refit { at, fits, choice, standard_errors, not_fitted, reach, said });
    }

    /// How much each point weighs in the fits; None: all alike. By the points' own counts and spreads,
    /// and what scatter they have, all points alike, about the last refit's curve.
    fn weights(&self, x: &[f64], y: &[f64], workspace: &mut Workspace) -> Option<Vec<f64>> {
        let points = self.window.points();
        let first = points.front()?.count;
        if points.iter().all(|p| p.count == first) {
            return None;
        }
        let last = self.refit.as_ref().and_then(Refit::curve);
        weights(points.iter(), last.map(|fit| scatter(fit, x, y, workspace)))
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

/// What a refit's curves are fitted to.
struct Data<'a> {
    /// Ages, days.
    x: &'a [f64],
    /// Deviations, in the channel's unit.
    y: &'a [f64],
    /// None: all weigh alike.
    weights: Option<&'a [f64]>,
}

impl Data<'_> {
    fn fit(&self, family: Family, workspace: &mut Workspace) -> FitOutcome {
        fit_robust_weighted(family, self.x, self.y, self.weights, workspace)
    }
}

/// Standard deviation of points about a curve, all points alike. A curve's own residual standard
/// deviation is that of a point of mean weight, which is smaller where weights differ.
fn scatter(fit: &Fit, x: &[f64], y: &[f64], workspace: &mut Workspace) -> f64 {
    let values = &workspace.held(fit, x).residuals;
    let squares: f64 = values.iter().zip(y).map(|(value, y)| (y - value).powi(2)).sum();
    let freedom = x.len().saturating_sub(fit.family.parameter_count()).max(1);
    (squares / count(freedom)).sqrt()
}

/// The fits, and a quadratic or cubic where the data change direction inside the window and it is
/// clearly better than each of them.
fn with_those_that_turn(
    mut fits: Vec<Fit>,
    data: &Data<'_>,
    phi: f64,
    current: Option<Family>,
    workspace: &mut Workspace,
) -> Vec<Fit> {
    if let (Some(&oldest), Some(&newest)) = (data.x.first(), data.x.last())
        && !fits.is_empty()
    {
        let settled = fits.len();
        for family in [Family::Quadratic, Family::Cubic] {
            if let FitOutcome::Fitted(fit) = data.fit(family, workspace) {
                fits.push(*fit);
            }
        }
        let better_by = |f| if current == Some(f) { SWITCH_ABOVE } else { TURN_ABOVE };
        let may = eligible(&fits, effective_count(data.x.len(), phi), (oldest, newest), better_by);
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

#[cfg(test)]
mod tests {
    use super::*;
    use crate::drift::robust::fit_robust;
    use crate::drift::structure::simulate::noise;
    use crate::watch::budget::Budget;
    use crate::watch::channel::Work;
    use crate::watch::reading::Reading;
    use crate::watch::settings::WatchSettings;
    use crate::watch::settings::tests::watch_settings;
    use crate::watch::time::{DAY_US, ShellTime, Span};

    const DAYS: usize = 101;
    const A_DAY: usize = 50;
    /// Of one reading, in the unit.
    const NOISE: f64 = 0.3;

    fn truth(age: f64) -> f64 {
        1.0 + 0.5 * age.ln()
    }

    /// Daily bins, refitted at each; `calibrated` at time 0.
    fn rules() -> WatchSettings {
        WatchSettings {
            bin: Some(Span(DAY_US)),
            refit_every: Span(1),
            calibrated: Some(EventTime(0)),
            families: vec![Family::Logarithmic],
            ..watch_settings()
        }
    }

    /// Readings about the truth: so many in the bin of each day, from day 1 on.
    fn readings(seed: u64, of_day: impl Fn(usize) -> usize) -> Vec<Reading> {
        let errors = noise(seed, DAYS * A_DAY, 0.0);
        let mut readings = Vec::new();
        for day in 1..DAYS {
            for k in 0..of_day(day) {
                // Around noon, so that no bin's mean time depends on its count.
                let offset = (k as i64 * 2 + 1 - of_day(day) as i64) * 60_000_000;
                let time = EventTime(day as i64 * DAY_US + DAY_US / 2 + offset);
                let deviation =
                    truth(time.days_since(EventTime(0))) + NOISE * errors[day * A_DAY + k];
                readings.push(Reading { serial: readings.len() as u64 + 1, time, deviation });
            }
        }
        readings
    }

    /// Every tenth day one reading, else 50.
    fn gappy(day: usize) -> usize {
        if day.is_multiple_of(10) { 1 } else { A_DAY }
    }

    fn feed(channel: &mut Channel, readings: &[Reading]) {
        let (rules, mut work) = (rules(), Work::default());
        let budget = Budget { false_alerts_per_year_site: 0.5, channels: 1 };
        let context = Context { site: "saltmarsh", rules: &rules, budget };
        for reading in readings {
            channel.take(&context, reading, ShellTime(reading.time.0), &mut work);
        }
    }

    fn fed(readings: &[Reading]) -> Channel {
        let name = "press.PT-1".to_owned();
        let mut channel = Channel::new(name, 1, ShellTime(0), rules().basis());
        feed(&mut channel, readings);
        channel
    }

    /// The channel's curve, and one to which all points are alike.
    fn curves(channel: &Channel) -> (Fit, Fit) {
        let (x, y) = channel.series();
        let outcome = fit_robust(Family::Logarithmic, &x, &y, &mut Workspace::default());
        let FitOutcome::Fitted(alike) = outcome else { panic!("{outcome:?}") };
        (channel.refit.as_ref().unwrap().curve().unwrap().clone(), *alike)
    }

    #[test]
    fn bins_of_one_reading_pull_the_curve_less() {
        let (mut with, mut without) = (0.0, 0.0);
        for seed in 0..40 {
            let channel = fed(&readings(seed, gappy));
            let (weighted, alike) = curves(&channel);
            let newest = *channel.series().0.last().unwrap();
            with += (weighted.value(newest) - truth(newest)).powi(2);
            without += (alike.value(newest) - truth(newest)).powi(2);
        }
        println!("mean square off: {with} with, {without} without");
        // 100 seeds: 0.64, and 0.65 with the counts themselves as weights (own simulation).
        assert!(with < 0.85 * without, "{with}, {without}");
    }

    #[test]
    fn the_scatter_told_is_that_of_a_point_of_mean_weight() {
        // Not below the harmonic mean of variances, 45.1 readings of 0.3 to a bin on average, and clear
        // of the plain mean.
        let (weighted, alike) = curves(&fed(&readings(3, gappy)));
        let least = NOISE / 45.1_f64.sqrt();
        let told = weighted.residual_sd;
        assert!(0.8 * least < told && told < 0.7 * alike.residual_sd, "{told}");
    }

    #[test]
    fn bins_alike_give_the_same_bits_as_no_weights() {
        for a_day in [1, 20] {
            let (curve, alike) = curves(&fed(&readings(4, |_| a_day)));
            assert_eq!(curve, alike);
        }
    }

    #[test]
    fn a_restart_comes_to_the_same_weighted_curve() {
        let readings = readings(5, gappy);
        let whole = fed(&readings);
        let (weighted, alike) = curves(&whole);
        assert_ne!(weighted, alike, "weights are used");
        for cut in [900, 2500, 4321] {
            let saved = postcard::to_stdvec(&fed(&readings[..cut])).unwrap();
            let mut restored: Channel = postcard::from_bytes(&saved).unwrap();
            feed(&mut restored, &readings[cut..]);
            assert_eq!(restored, whole, "cut at {cut}");
        }
    }
}
