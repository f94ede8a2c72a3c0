//! The finding of one channel, drawn from its state.

use crate::drift::fit::Fit;
use crate::drift::forecast::NORMAL_95;
use crate::drift::structure::{Kind as Structure, Score};
use crate::watch::alert::Concern;
use crate::watch::budget::{CLOSE_BELOW, Judged};
use crate::watch::channel::{Channel, Context, KnownFrom, Refit};
use crate::watch::finding::{
    CurveFound, CycleFound, Decision, Finding, ForecastFound, NowFound, OtherFound, ReachFound,
    StructureFound, ToleranceFound, Verdict, WindowFound,
};
use crate::watch::incident::alert_kind;
use crate::watch::judge::probability;
use crate::watch::limits::{POINTS_TO_EXAMINE, POINTS_TO_FIT};
use crate::watch::reading::Taken;
use crate::watch::said::{Interval, asked_day};
use crate::watch::settings::WatchSettings;
use crate::watch::time::{EventTime, Span};
use crate::watch::wording;
use std::collections::BTreeMap;

/// So much of its span a window carries a statement ahead at the best: the backtests' origins allow
/// a half, a little less is counted on.
const SHARE_AT_BEST: f64 = 0.45;
/// Points whose median stands for the deviation while no curve can be trusted.
const NEWEST_POINTS: usize = 5;

/// The finding, if the channel has a cycle yet.
pub fn finding_if_any(channel: &Channel, context: &Context<'_>) -> Option<Finding> {
    channel.cycle.is_some().then(|| finding(channel, context))
}

/// Everything known of a channel that has had a reading.
pub fn finding(channel: &Channel, context: &Context<'_>) -> Finding {
    let points = channel.window.points();
    let cycle = channel.cycle.expect("a channel has a cycle from its first reading on");
    // Without points the cycle has just begun.
    let newest = points.back().map_or(cycle.age_zero, |p| p.time);
    let oldest = points.front().map_or(newest, |p| p.time);
    let refit = channel.refit.as_ref();
    let reach = reach_found(channel, newest);
    Finding {
        channel: channel.name.clone(),
        at: newest,
        unit: context.rules.unit.clone(),
        cycle: CycleFound {
            age_zero: cycle.age_zero,
            known_from: match cycle.known_from {
                KnownFrom::Mark => "calibration mark",
                KnownFrom::Setting => "setting",
                KnownFrom::FirstReading => "first reading",
            },
        },
        window: WindowFound {
            from: oldest,
            to: newest,
            points: points.len(),
            readings: channel.window.readings(),
            arrived: arrived(channel),
            age_from_d: oldest.days_since(cycle.age_zero),
            age_to_d: newest.days_since(cycle.age_zero),
        },
        now: now_found(channel),
        curve: refit.and_then(curve_found),
        no_curve: no_curve_words(channel),
        structure: structure_found(channel),
        forecast: forecast_found(channel, context.rules, newest, &reach),
        reach,
        tolerance: tolerance_found(channel, context.rules),
        cautions: cautions(channel, context),
    }
}

fn curve_found(refit: &Refit) -> Option<CurveFound> {
    let choice = refit.choice.as_ref()?;
    let fit = refit.curve()?;
    let named = |values: &[f64; 4]| -> BTreeMap<&'static str, f64> {
        fit.family.coefficient_names().iter().copied().zip(values.iter().copied()).collect()
    };
    let others = refit
        .fits
        .iter()
        .zip(&choice.differences)
        .enumerate()
        .filter(|&(i, _)| i != choice.chosen)
        .map(|(_, (other, &aicc_difference))| OtherFound {
            family: other.family.name(),
            aicc_difference,
        })
        .collect();
    Some(CurveFound {
        family: fit.family.name(),
        form: fit.family.form(),
        coefficients: named(&fit.theta),
        standard_errors: named(&refit.standard_errors),
        residual_sd: fit.residual_sd,
        r_squared: fit.r_squared,
        start: fit.start.as_ref().map(named).unwrap_or_default(),
        others,
        why: choice.why.clone(),
    })
}

/// Why no family could be fitted, in words.
pub fn why_no_curve(refit: &Refit) -> String {
    refit
        .not_fitted
        .iter()
        .map(|(family, why)| format!("{family}: {why}"))
        .collect::<Vec<_>>()
        .join("; ")
}

fn no_curve_words(channel: &Channel) -> Option<String> {
    match &channel.refit {
        None => {
            Some(format!("gathering: {} of {POINTS_TO_FIT} points", channel.window.points().len()))
        }
        Some(refit) => refit.curve().is_none().then(|| why_no_curve(refit)),
    }
}

fn structure_found(channel: &Channel) -> Vec<StructureFound> {
    if channel.window.points().len() < POINTS_TO_EXAMINE {
        return Vec::new();
    }
    let look = &channel.residuals.look;
    // A shift says that there is a jump, the step of the same look which.
    [
        (Structure::Step, Structure::Shift),
        (Structure::Bend, Structure::Bend),
        (Structure::Dependence, Structure::Dependence),
    ]
    .into_iter()
    .filter_map(|(told, raised_by)| {
        Some(structure_entry(channel, &look.of(told)?.score, look.of(raised_by)?))
    })
    .collect()
}

fn structure_entry(channel: &Channel, found: &Score, raised_by: &Judged) -> StructureFound {
    let standing = channel.residuals.incident();
    let kind = alert_kind(found.kind);
    let incident = standing.filter(|incident| incident.kind == kind);
    let margin = raised_by.margin().unwrap_or(f64::NEG_INFINITY);
    let verdict = if incident.is_some() || (margin >= 0.0 && standing.is_none()) {
        Verdict::Present
    } else if margin >= -CLOSE_BELOW {
        Verdict::Watching
    } else {
        Verdict::Absent
    };
    let shown = verdict != Verdict::Absent;
    // What stands is told by the evidence it is named after, not by the newest look.
    let (score, size, at) = incident.map_or_else(
        || (found.q, found.size, channel.time_at_age(found.x)),
        |i| (i.score, i.size, i.at),
    );
    StructureFound {
        kind,
        verdict,
        statistic: Some(score),
        p: Some(probability(score)),
        size: shown.then_some(size),
        at: shown.then_some(at),
    }
}

/// Why nothing can be said ahead for now, when the reason is that the window is still filling.
pub fn gathering(channel: &Channel, context: &Context<'_>) -> Option<String> {
    let points = channel.window.points();
    if points.len() < POINTS_TO_EXAMINE {
        return Some(format!("gathering: {} of {POINTS_TO_EXAMINE} points", points.len()));
    }
    let (oldest, newest) = (points.front()?.time, points.back()?.time);
    let (_, needs) = asked_day(context.rules, newest)?;
    let span = newest.days_since(oldest);
    let full_span = context.rules.window_span.days();
    let growing = points.len() < context.rules.window_points && span < 0.98 * full_span;
    let enough = needs / SHARE_AT_BEST;
    let share = SHARE_AT_BEST.min(crate::drift::reach::cap(points.len()));
    let too_young = span * share < needs;
    (growing && too_young && enough <= full_span).then(|| {
        format!(
            "gathering: the window spans {} of the {} that this statement needs",
            wording::days(span),
            wording::days(enough)
        )
    })
}

fn reach_found(channel: &Channel, newest: EventTime) -> ReachFound {
    let (days, why) = match (&channel.refit, channel.residuals.incident()) {
        _ if is_silent(channel) => (0.0, "nothing usable arrives any more".to_owned()),
        (_, Some(incident)) => {
            (0.0, format!("the residuals show structure ({})", incident.kind.name()))
        }
        (Some(refit), None) => (refit.reach.days_past_newest, refit.reach.limit.words()),
        (None, None) => (0.0, "no curve yet".to_owned()),
    };
    ReachFound { days_past_newest: days, until: newest.plus(Span::from_days(days)), why }
}

fn forecast_found(
    channel: &Channel,
    rules: &WatchSettings,
    newest: EventTime,
    reach: &ReachFound,
) -> Option<ForecastFound> {
    let (at, needs) = asked_day(rules, newest)?;
    let ahead = channel
        .refit
        .as_ref()
        .filter(|_| channel.residuals.incident().is_none() && !is_silent(channel))
        .and_then(|refit| refit.said.ahead);
    let refused = ahead.is_none().then(|| {
        let (needs, supports) = wording::unequal_days(needs, reach.days_past_newest);
        format!(
            "needs {needs} past the newest reading; the window supports {supports}: {}",
            reach.why
        )
    });
    Some(ForecastFound {
        at,
        needs_days_past_newest: needs,
        supported: ahead.is_some(),
        deviation: ahead.map(|(value, _)| value),
        low: ahead.map(|(value, half)| value - half),
        high: ahead.map(|(value, half)| value + half),
        level: 0.95,
        refused,
    })
}

fn tolerance_found(channel: &Channel, rules: &WatchSettings) -> Option<ToleranceFound> {
    let limit = rules.tolerance?;
    let decision = deviation_now(channel)
        .filter(|_| !is_silent(channel))
        .map_or(Decision::Undetermined, |(value, guard)| Decision::of_known(value, guard, limit));
    let within_until = channel
        .refit
        .as_ref()
        .filter(|_| channel.residuals.incident().is_none() && !is_silent(channel))
        .and_then(|refit| refit.said.within_until);
    Some(ToleranceFound { limit, decision, within_until })
}

fn now_found(channel: &Channel) -> Option<NowFound> {
    let (deviation, guard) = deviation_now(channel)?;
    let drawn_from = if by_the_curve(channel).is_some() { "curve" } else { "newest points" };
    let (low, high) = (guard.map(|guard| deviation - guard), guard.map(|guard| deviation + guard));
    Some(NowFound { deviation, low, high, level: 0.95, drawn_from })
}

fn arrived(channel: &Channel) -> BTreeMap<&'static str, u64> {
    let counts = Taken::ALL.map(|taken| (taken.code(), channel.counts.of(taken)));
    counts.into_iter().filter(|(_, count)| *count > 0).collect()
}

fn is_silent(channel: &Channel) -> bool {
    channel.alerts.holding(Concern::Silence).is_some()
}

fn by_the_curve(channel: &Channel) -> Option<Interval> {
    let trusted = channel.residuals.incident().is_none();
    channel.refit.as_ref().filter(|_| trusted).and_then(|refit| refit.said.now)
}

/// The deviation now and its guard band: by the curve where it can be trusted, else by the newest
/// points themselves. The guard band is None where nothing shows how far readings scatter. None before
/// there are enough points for either.
pub fn deviation_now(channel: &Channel) -> Option<(f64, Option<f64>)> {
    if let Some((value, guard)) = by_the_curve(channel) {
        return Some((value, Some(guard)));
    }
    let points = channel.window.points();
    if points.len() < NEWEST_POINTS {
        return None;
    }
    let mut newest: Vec<f64> = points.iter().rev().take(NEWEST_POINTS).map(|p| p.mean).collect();
    newest.sort_by(f64::total_cmp);
    // Of readings without a curve, or without any scatter, nobody knows how far they can be trusted.
    let curve = channel.refit.as_ref().and_then(Refit::curve);
    let scatter = curve.filter(|fit: &&Fit| !fit.is_exact()).map(|fit| fit.residual_sd);
    Some((newest[NEWEST_POINTS / 2], scatter.map(|sd| NORMAL_95 * sd)))
}

fn cautions(channel: &Channel, context: &Context<'_>) -> Vec<String> {
    let mut cautions: Vec<String> = wording::CAUTIONS.map(str::to_owned).to_vec();
    if channel.cycle.is_some_and(|cycle| cycle.known_from == KnownFrom::FirstReading) {
        cautions.push(
            "Age zero is taken from the first reading: no calibration is on record here."
                .to_owned(),
        );
    }
    cautions.extend(gathering(channel, context));
    cautions
}
