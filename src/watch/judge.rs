//! From what is known of a channel to its alerts: raise, revise, lower.
//!
//! Conditions that hang on a single refit must hold for several before they count, so that none
//! chatters; the residual watch has its own rule.

use crate::watch::alert::{AlertEvent, Claim, Concern, Ending, Evidence, Kind};
use crate::watch::channel::{Channel, Context, Outcome};
use crate::watch::finding::Decision;
use crate::watch::incident::Incident;
use crate::watch::report;
use crate::watch::time::{EventTime, ShellTime};
use crate::watch::wording::{self, Words};
use serde::{Deserialize, Serialize};

/// Scores above this are not told as smaller probabilities: simulation went no further.
const SCORE_TRUSTED_MAX: f64 = 10.0;
/// Refits in a row before a refused statement counts as an alert, and before a supported one lowers it.
const REFITS_FOR_REACH: u32 = 3;
/// Refits in a row for tolerance ahead, and for no curve.
const REFITS_FOR_AHEAD: u32 = 2;
/// The value must come back inside the limit by this share of its guard band.
const RETURN_SHARE: f64 = 0.25;
/// An open out-of-tolerance alert is revised when the deviation has changed by this share of what was
/// told, and by more than its guard band.
const REVISE_SHARE: f64 = 0.25;

/// How often in a row something held: positive counts of it, negative of its opposite.
#[derive(Clone, Debug, Default, PartialEq, Eq, Serialize, Deserialize)]
pub struct Patience {
    refused: i32,
    ahead: i32,
    unfit: i32,
}

/// Counts on, or starts over in the other direction; true when `needed` in a row are reached.
fn counted(tally: &mut i32, holds: bool, needed: u32) -> Option<bool> {
    *tally = match (holds, *tally) {
        (true, t) if t > 0 => t.saturating_add(1),
        (true, _) => 1,
        (false, t) if t < 0 => t.saturating_sub(1),
        (false, _) => -1,
    };
    (tally.unsigned_abs() >= needed).then_some(holds)
}

/// 10^−score, but no smaller than what the method was ever held against.
pub fn probability(score: f64) -> f64 {
    10f64.powf(-score.clamp(0.0, SCORE_TRUSTED_MAX))
}

fn push(outcome: &mut Outcome, event: Option<AlertEvent>) {
    outcome.events.extend(event);
}

fn claim_of(channel: &Channel, context: &Context<'_>, incident: &Incident) -> Claim {
    let unit = &context.rules.unit;
    let words = match incident.kind {
        Kind::Bend => {
            let family = channel
                .refit
                .as_ref()
                .and_then(|refit| refit.curve())
                .map_or(crate::drift::family::Family::Linear, |fit| fit.family);
            wording::bend(incident.size, unit, incident.at, family)
        }
        Kind::Dependence => wording::dependence(incident.size, channel.residuals.look.phi),
        _ => wording::step(incident.size, unit, incident.at),
    };
    let evidence = Evidence {
        statistic: Some(incident.score),
        p: Some(probability(incident.score)),
        size: Some(incident.size),
        at: Some(incident.at),
    };
    Claim { kind: incident.kind, evidence, words }
}

/// The residuals show structure.
pub fn opened(
    channel: &mut Channel,
    context: &Context<'_>,
    incident: &Incident,
    time: EventTime,
    outcome: &mut Outcome,
) {
    let claim = claim_of(channel, context, incident);
    raise(channel, context, claim, time, outcome);
}

/// The structure is known better.
pub fn revised(
    channel: &mut Channel,
    context: &Context<'_>,
    incident: &Incident,
    time: EventTime,
    outcome: &mut Outcome,
) {
    let claim = claim_of(channel, context, incident);
    push(outcome, channel.alerts.revise(claim, time));
}

/// Another structure has taken the place of the one that was told.
pub fn told_anew(
    channel: &mut Channel,
    context: &Context<'_>,
    incident: &Incident,
    time: EventTime,
    outcome: &mut Outcome,
) {
    let claim = claim_of(channel, context, incident);
    push(outcome, channel.alerts.tell_anew(claim, time));
}

/// The residuals show none any more.
pub fn closed(channel: &mut Channel, time: EventTime, outcome: &mut Outcome) {
    push(outcome, channel.alerts.lower(Concern::Residuals, time));
}

/// What hangs on the readings in the window.
const OF_THE_WINDOW: [Concern; 4] =
    [Concern::Residuals, Concern::Reach, Concern::ToleranceAhead, Concern::Curve];

/// A new calibration cycle: what was said of the old one is over. `as_left`: the deviation after it, if
/// the person told it; outside the tolerance, that alert stands.
pub fn new_cycle(
    channel: &mut Channel,
    context: &Context<'_>,
    mark: EventTime,
    as_left: Option<f64>,
    outcome: &mut Outcome,
) {
    channel.patience = Patience::default();
    for concern in OF_THE_WINDOW {
        push(outcome, channel.alerts.end(concern, mark, Ending::Calibrated));
    }
    match as_left.zip(context.rules.tolerance).filter(|(value, limit)| value.abs() > *limit) {
        Some((value, limit)) => {
            let words = wording::left_outside(value, limit, &context.rules.unit);
            let evidence = Evidence { size: Some(value), at: Some(mark), ..Evidence::default() };
            raise_or_revise(
                channel,
                context,
                Kind::OutOfTolerance,
                (evidence, words),
                mark,
                outcome,
            );
        }
        None => push(outcome, channel.alerts.end(Concern::Tolerance, mark, Ending::Calibrated)),
    }
    outcome.findings.extend(report::finding_if_any(channel, context));
}

/// Readings are measured otherwise from now on: what was said of those before is over.
pub fn measured_otherwise(channel: &mut Channel, time: EventTime, outcome: &mut Outcome) {
    channel.patience = Patience::default();
    for concern in OF_THE_WINDOW.into_iter().chain([Concern::Tolerance]) {
        push(outcome, channel.alerts.end(concern, time, Ending::Reconfigured));
    }
}

/// The window has too few points for anything: it gathers anew, and what rested on it is over.
pub fn gathers_anew(
    channel: &mut Channel,
    context: &Context<'_>,
    time: EventTime,
    outcome: &mut Outcome,
) {
    channel.patience = Patience::default();
    for concern in OF_THE_WINDOW {
        push(outcome, channel.alerts.end(concern, time, Ending::WindowAnew));
    }
    outcome.findings.extend(report::finding_if_any(channel, context));
}

/// Something arrived.
pub fn no_longer_silent(
    channel: &mut Channel,
    _context: &Context<'_>,
    time: EventTime,
    outcome: &mut Outcome,
) {
    push(outcome, channel.alerts.lower(Concern::Silence, time));
}

/// Nothing arrived for too long, as the shell's time goes. The event's time is the first moment of
/// silence on the readings' own axis, so that it does not depend on when somebody looked.
pub fn silence(
    channel: &mut Channel,
    context: &Context<'_>,
    now: ShellTime,
    listening_since: ShellTime,
    outcome: &mut Outcome,
) {
    let newest = channel.window.newest_reading();
    let heard = channel.last_arrival.max(listening_since);
    if heard.plus(context.rules.silent_after) > now
        || channel.alerts.holding(Concern::Silence).is_some()
    {
        return;
    }
    let allowed = context.rules.silent_after.days();
    let words = match (channel.unusable, newest) {
        (Some(last), _) => wording::unusable(newest, allowed, last.words()),
        (None, Some(newest)) => wording::silent(newest, allowed),
        // A channel begins with a reading; one that has neither has just been born.
        (None, None) => return,
    };
    let evidence = Evidence { at: newest, ..Evidence::default() };
    let time = newest.unwrap_or(EventTime(heard.0)).plus(context.rules.silent_after);
    raise(channel, context, Claim { kind: Kind::Silent, evidence, words }, time, outcome);
    outcome.findings.extend(report::finding_if_any(channel, context));
}

/// Everything that hangs on the newest refit.
pub fn after_refit(
    channel: &mut Channel,
    context: &Context<'_>,
    time: EventTime,
    outcome: &mut Outcome,
) {
    no_curve(channel, context, time, outcome);
    tolerance_now(channel, context, time, outcome);
    statement(channel, context, time, outcome);
}

fn no_curve(channel: &mut Channel, context: &Context<'_>, time: EventTime, outcome: &mut Outcome) {
    let Some(refit) = &channel.refit else { return };
    let unfit = refit.curve().is_none();
    let why = report::why_no_curve(refit);
    match counted(&mut channel.patience.unfit, unfit, REFITS_FOR_AHEAD) {
        Some(true) => {
            let words = wording::no_curve(&why);
            let claim = Claim { kind: Kind::NoCurve, evidence: Evidence::default(), words };
            raise(channel, context, claim, time, outcome);
        }
        Some(false) => push(outcome, channel.alerts.lower(Concern::Curve, time)),
        None => {}
    }
}

fn tolerance_now(
    channel: &mut Channel,
    context: &Context<'_>,
    time: EventTime,
    outcome: &mut Outcome,
) {
    let (Some(limit), Some((value, guard))) =
        (context.rules.tolerance, report::deviation_now(channel))
    else {
        return;
    };
    match Decision::of_known(value, guard, limit) {
        Decision::Fail | Decision::ConditionalFail => {
            if let Some(open) = channel.alerts.holding(Concern::Tolerance) {
                let told = open.claim.evidence.size.unwrap_or(0.0);
                let known_better = (REVISE_SHARE * told.abs()).max(guard.unwrap_or(0.0));
                if (value - told).abs() <= known_better {
                    return;
                }
            }
            let words = wording::out_of_tolerance(value, guard, limit, &context.rules.unit);
            let evidence = Evidence { size: Some(value), at: Some(time), ..Evidence::default() };
            raise_or_revise(
                channel,
                context,
                Kind::OutOfTolerance,
                (evidence, words),
                time,
                outcome,
            );
        }
        Decision::Pass | Decision::ConditionalPass
            if value.abs() <= limit - RETURN_SHARE * guard.unwrap_or(0.0).min(limit) =>
        {
            push(outcome, channel.alerts.lower(Concern::Tolerance, time));
        }
        _ => {}
    }
}

/// Whether the statement that is asked for can be made, and what it says.
fn statement(channel: &mut Channel, context: &Context<'_>, time: EventTime, outcome: &mut Outcome) {
    // While structure stands, that alert says all there is to say: no second one for the same event.
    if channel.residuals.incident().is_some() {
        return;
    }
    let Some(refit) = &channel.refit else { return };
    let said = refit.said.clone();
    let Some((day, needs)) = said.asked else {
        push(outcome, channel.alerts.end(Concern::Reach, time, Ending::DayPassed));
        push(outcome, channel.alerts.end(Concern::ToleranceAhead, time, Ending::DayPassed));
        return;
    };
    let (supported, limit) = (refit.reach.days_past_newest, refit.reach.limit);
    if report::gathering(channel, context).is_some() {
        return;
    }
    match counted(&mut channel.patience.refused, said.ahead.is_none(), REFITS_FOR_REACH) {
        Some(true) => {
            let words = wording::beyond_reach(day, needs, supported, &limit);
            let evidence =
                Evidence { statistic: Some(needs), size: Some(supported), ..Evidence::default() };
            let evidence = Evidence { at: Some(day), ..evidence };
            let claim = Claim { kind: Kind::BeyondReach, evidence, words };
            raise(channel, context, claim, time, outcome);
        }
        Some(false) => push(outcome, channel.alerts.lower(Concern::Reach, time)),
        None => {}
    }
    let (Some((value, half)), Some(limit)) = (said.ahead, context.rules.tolerance) else { return };
    let decision = Decision::of(value, half, limit);
    let leaves = matches!(decision, Decision::Fail | Decision::ConditionalFail)
        && channel.alerts.holding(Concern::Tolerance).is_none();
    match counted(&mut channel.patience.ahead, leaves, REFITS_FOR_AHEAD) {
        Some(true) => {
            let forecast = (value, value - half, value + half);
            let unit = &context.rules.unit;
            let words = wording::tolerance_ahead(forecast, limit, unit, day, said.within_until);
            let evidence = Evidence { size: Some(value), at: Some(day), ..Evidence::default() };
            let claim = Claim { kind: Kind::ToleranceAhead, evidence, words };
            raise(channel, context, claim, time, outcome);
        }
        Some(false) => {
            let outside = channel.alerts.holding(Concern::Tolerance).is_some();
            let ending = if outside { Ending::OutsideNow } else { Ending::ByReadings };
            push(outcome, channel.alerts.end(Concern::ToleranceAhead, time, ending));
        }
        None => {}
    }
}

/// Raises an alert, or tells the open one of its concern anew with what is known now.
fn raise_or_revise(
    channel: &mut Channel,
    context: &Context<'_>,
    kind: Kind,
    (evidence, words): (Evidence, Words),
    time: EventTime,
    outcome: &mut Outcome,
) {
    let claim = Claim { kind, evidence, words };
    match channel.alerts.revise(claim.clone(), time) {
        Some(event) => outcome.events.push(event),
        None => raise(channel, context, claim, time, outcome),
    }
}

fn raise(
    channel: &mut Channel,
    context: &Context<'_>,
    claim: Claim,
    time: EventTime,
    outcome: &mut Outcome,
) {
    let name = channel.name.clone();
    let owner = crate::watch::alert::Owner { site: context.site, channel: &name };
    let event = channel.alerts.raise(owner, claim, time);
    push(outcome, event);
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_condition_counts_only_after_several_refits_in_a_row() {
        let mut tally = 0;
        let seen: Vec<_> = [true, true, false, true, true, true, false, false, false]
            .map(|holds| counted(&mut tally, holds, 3))
            .to_vec();
        assert_eq!(seen, [None, None, None, None, None, Some(true), None, None, Some(false)]);
    }
}
