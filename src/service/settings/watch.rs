//! One `[[watch]]`: raw values → what the engine must know and how messages become readings.

use super::check::quoted;
use super::duration::{read_span, show_span};
use super::problem::{Fault, Problems};
use super::raw::{
    CHANNEL, DURATION, FAMILIES, FAMILIES_DEFAULT, LATENESS_DEFAULT, POINTER, REFIT_EVERY_DEFAULT,
    RawPayload, RawReference, RawWatch, RawWindow, SILENT_AFTER_LEAST, SILENT_AFTER_SHARE, TIME,
    TOPIC, UNIT, UNIT_BYTES_MAX, WINDOW_POINTS_DEFAULT, WINDOW_POINTS_MAX, WINDOW_POINTS_MIN,
    WINDOW_SPAN_DEFAULT,
};
use super::section::Located;
use super::shown::measured_as;
use super::time::read_time;
use crate::drift::family::Family;
use crate::service::intake::{
    ChannelTemplate, PayloadFormat, Pointer, Reference, Route, TopicPattern,
};
use crate::watch::settings::{Statement, WatchSettings};
use crate::watch::time::{DAY_US, EventTime, Span};

const SECOND: Span = Span(DAY_US / 86_400);
const MINUTE: Span = Span(DAY_US / 1_440);
const HOUR: Span = Span(DAY_US / 24);
const TEN_YEARS: Span = Span(3_652 * DAY_US);

/// Returns the watch; `None` when it has no topic to stand on, which is noted.
pub(super) fn check_watch(
    raw: &RawWatch,
    own_topics: &str,
    problems: &mut Problems,
) -> Option<(WatchSettings, Route)> {
    let mut watch = check_statistics(raw, problems);
    let payload = check_payload(raw.payload.as_ref(), problems);
    let reference = check_reference(raw.reference.as_ref(), payload.as_ref(), problems);
    let (pattern, channel) = check_topic(raw, own_topics, problems)?;
    let route = Route { pattern, channel, payload: payload?, reference };
    watch.measured_as = measured_as(&watch, &route);
    Some((watch, route))
}

fn check_topic(
    raw: &RawWatch,
    own_topics: &str,
    problems: &mut Problems,
) -> Option<(TopicPattern, ChannelTemplate)> {
    let Some(topic) = &raw.topic else {
        problems.missing(&raw.place, &format!("{}.topic", raw.path), TOPIC);
        return None;
    };
    let pattern = match TopicPattern::parse(&topic.value) {
        Ok(pattern) => pattern,
        Err(fault) => {
            let found = format!("{} ({fault})", quoted(&topic.value));
            problems.refuse(&topic.place, &topic.key, found, TOPIC);
            return None;
        }
    };
    if pattern.reaches_below(own_topics) {
        let found = format!("{}, which covers topics published here", quoted(&topic.value));
        let allowed = format!(
            "a topic whose filter {} takes nothing below {own_topics}/; change the topic or broker.topic_root",
            pattern.filter()
        );
        problems.refuse(&topic.place, &topic.key, found, allowed);
    }
    let channel = match &raw.channel {
        Some(text) => match ChannelTemplate::parse(&text.value, &pattern) {
            Ok(channel) => channel,
            Err(fault) => {
                let found = format!("{} ({fault})", quoted(&text.value));
                problems.refuse(&text.place, &text.key, found, CHANNEL);
                return None;
            }
        },
        None => match ChannelTemplate::default_for(&pattern) {
            Some(channel) => channel,
            None => {
                let allowed = "a name, as the topic captures nothing to make one from";
                problems.missing(&raw.place, &format!("{}.channel", raw.path), allowed);
                return None;
            }
        },
    };
    Some((pattern, channel))
}

fn check_payload(raw: Option<&RawPayload>, problems: &mut Problems) -> Option<PayloadFormat> {
    let Some(raw) = raw else { return Some(PayloadFormat::Number) };
    let key = |name: &str| format!("{}.{name}", raw.path);
    let value = raw.value.as_ref().map(|p| check_pointer(p, problems));
    let time = raw.time.as_ref().map(|p| check_pointer(p, problems));
    let Some(format) = &raw.format else {
        problems.missing(&raw.place, &key("format"), "\"number\" or \"json\"");
        return None;
    };
    match format.value.as_str() {
        "number" => {
            for pointer in [&raw.value, &raw.time].into_iter().flatten() {
                let allowed = "with format = \"json\" only; a bare number has no fields";
                problems.refuse(&pointer.place, &pointer.key, quoted(&pointer.value), allowed);
            }
            Some(PayloadFormat::Number)
        }
        "json" => match value {
            Some(value) => Some(PayloadFormat::Json { value: value?, time: time.flatten() }),
            None => {
                problems.missing(&raw.place, &key("value"), POINTER);
                None
            }
        },
        "senml" => {
            let instead = "\"number\" and \"json\" are served";
            problems.push(&format.place, &format.key, Fault::NotYet { instead });
            None
        }
        other => {
            problems.refuse(&format.place, &format.key, quoted(other), "\"number\" or \"json\"");
            None
        }
    }
}

fn check_pointer(text: &Located<String>, problems: &mut Problems) -> Option<Pointer> {
    match Pointer::parse(&text.value) {
        Ok(pointer) => Some(pointer),
        Err(fault) => {
            let found = format!("{} ({fault})", quoted(&text.value));
            problems.refuse(&text.place, &text.key, found, POINTER);
            None
        }
    }
}

fn check_reference(
    raw: Option<&RawReference>,
    payload: Option<&PayloadFormat>,
    problems: &mut Problems,
) -> Reference {
    let Some(raw) = raw else { return Reference::None };
    let pointer = raw.pointer.as_ref().and_then(|p| check_pointer(p, problems));
    if let (Some(text), Some(PayloadFormat::Number)) = (&raw.pointer, payload) {
        let allowed = "with payload format = \"json\" only; a bare number has no fields";
        problems.refuse(&text.place, &text.key, quoted(&text.value), allowed);
    }
    match (&raw.constant, pointer) {
        (Some(constant), None) => Reference::Constant(constant.value),
        (None, Some(pointer)) => Reference::Pointer(pointer),
        (Some(_), Some(_)) => {
            let allowed = "one of { constant = … } and { pointer = \"/…\" }";
            problems.refuse(&raw.place, &raw.path, "both constant and pointer", allowed);
            Reference::None
        }
        (None, None) => {
            if raw.empty {
                let allowed = "{ constant = … } or { pointer = \"/…\" }";
                problems.refuse(&raw.place, &raw.path, "neither constant nor pointer", allowed);
            }
            Reference::None
        }
    }
}

fn check_statistics(raw: &RawWatch, problems: &mut Problems) -> WatchSettings {
    let unit = check_unit(raw, problems);
    if let Some(tolerance) = raw.tolerance.as_ref().filter(|t| t.value <= 0.0) {
        let found = format!("the number {}", tolerance.value);
        problems.refuse(&tolerance.place, &tolerance.key, found, "a number above 0, in the unit");
    }
    let window_span = check_span(raw.window.span.as_ref(), HOUR, (TEN_YEARS, ""), problems);
    // Where the span itself is wrong, what depends on it is not measured by another span.
    let most = match (&raw.window.span, window_span) {
        (Some(_), None) => (TEN_YEARS, ""),
        (_, span) => (span.unwrap_or(WINDOW_SPAN_DEFAULT), " (the window's span)"),
    };
    let window_span = window_span.unwrap_or(WINDOW_SPAN_DEFAULT);
    let silent_default = Span(window_span.0 / SILENT_AFTER_SHARE).max(SILENT_AFTER_LEAST);
    WatchSettings {
        measured_as: String::new(),
        unit,
        tolerance: raw.tolerance.as_ref().map(|t| t.value),
        window_span,
        window_points: check_points(raw.window.points.as_ref(), problems),
        bin: check_bin(&raw.window, most.0, problems),
        refit_every: check_span(raw.refit_every.as_ref(), MINUTE, most, problems)
            .unwrap_or(REFIT_EVERY_DEFAULT.min(window_span)),
        lateness: check_span(raw.lateness.as_ref(), Span(0), most, problems)
            .unwrap_or(LATENESS_DEFAULT),
        families: check_families(raw.families.as_ref(), problems),
        statement: check_statement(raw, problems),
        calibrated: raw.calibrated.as_ref().and_then(|t| check_time(t, problems)),
        silent_after: check_span(raw.silent_after.as_ref(), MINUTE, (TEN_YEARS, ""), problems)
            .unwrap_or(silent_default),
    }
}

fn check_unit(raw: &RawWatch, problems: &mut Problems) -> String {
    let Some(unit) = &raw.unit else {
        problems.missing(&raw.place, &format!("{}.unit", raw.path), UNIT);
        return String::new();
    };
    let text = &unit.value;
    // Said in words: what is wrong with these cannot be seen in the text as it is shown.
    let why = if text.contains(char::is_control) {
        " (a control character)"
    } else if text.trim() != text {
        " (a blank at its beginning or end)"
    } else if (1..=UNIT_BYTES_MAX).contains(&text.len()) {
        return text.clone();
    } else {
        ""
    };
    problems.refuse(&unit.place, &unit.key, format!("{}{why}", quoted(text)), UNIT);
    text.clone()
}

fn check_points(points: Option<&Located<i64>>, problems: &mut Problems) -> usize {
    let Some(points) = points else { return WINDOW_POINTS_DEFAULT };
    match usize::try_from(points.value) {
        Ok(n) if (WINDOW_POINTS_MIN..=WINDOW_POINTS_MAX).contains(&n) => n,
        _ => {
            let found = format!("the whole number {}", points.value);
            let allowed = "a whole number from 60 to 4096";
            problems.refuse(&points.place, &points.key, found, allowed);
            WINDOW_POINTS_DEFAULT
        }
    }
}

/// A bin must leave the window at least as many points as a window may be asked to hold.
fn check_bin(raw: &RawWindow, span: Span, problems: &mut Problems) -> Option<Span> {
    #[expect(clippy::cast_possible_wrap, reason = "the constant is 60")]
    let widest = Span(span.0 / WINDOW_POINTS_MIN as i64);
    check_span(raw.bin.as_ref(), SECOND, (widest, " (a 60th of the window's span)"), problems)
}

/// Returns the length of time if it is there, readable and within the limits; else notes why not.
/// The upper limit comes with words for where it is from.
fn check_span(
    text: Option<&Located<String>>,
    least: Span,
    (most, why): (Span, &str),
    problems: &mut Problems,
) -> Option<Span> {
    let text = text?;
    match read_span(&text.value) {
        Ok(span) if (least..=most).contains(&span) => Some(span),
        Ok(_) => {
            let allowed = format!("from {} to {}{why}", show_span(least), show_span(most));
            problems.refuse(&text.place, &text.key, quoted(&text.value), allowed);
            None
        }
        Err(fault) => {
            let found = format!("{} ({fault})", quoted(&text.value));
            problems.refuse(&text.place, &text.key, found, DURATION);
            None
        }
    }
}

fn check_time(text: &Located<String>, problems: &mut Problems) -> Option<EventTime> {
    match read_time(&text.value) {
        Ok(time) => Some(time),
        Err(fault) => {
            let found = format!("{} ({fault})", quoted(&text.value));
            problems.refuse(&text.place, &text.key, found, TIME);
            None
        }
    }
}

fn check_families(
    names: Option<&Located<Vec<Located<String>>>>,
    problems: &mut Problems,
) -> Vec<Family> {
    let Some(names) = names else { return FAMILIES_DEFAULT.to_vec() };
    let mut families = Vec::new();
    for name in &names.value {
        let mut refuse = |found: String| problems.refuse(&name.place, &name.key, found, FAMILIES);
        match Family::from_name(&name.value) {
            Some(family @ (Family::Quadratic | Family::Cubic)) => {
                refuse(format!(
                    "\"{}\" (it joins by itself where the data change direction)",
                    family.name()
                ));
            }
            Some(family) if families.contains(&family) => {
                refuse(format!("\"{}\" (a second time)", family.name()));
            }
            Some(family) => families.push(family),
            None => refuse(quoted(&name.value)),
        }
    }
    if names.value.is_empty() {
        problems.refuse(&names.place, &names.key, "an empty list", FAMILIES);
    }
    families
}

fn check_statement(raw: &RawWatch, problems: &mut Problems) -> Option<Statement> {
    let ahead = check_span(raw.look_ahead.as_ref(), SECOND, (TEN_YEARS, ""), problems);
    let visit = raw.next_visit.as_ref().and_then(|t| check_time(t, problems));
    if let (Some(_), Some(second)) = (&raw.look_ahead, &raw.next_visit) {
        let found = format!("{} beside look_ahead", quoted(&second.value));
        problems.refuse(&second.place, &second.key, found, "either look_ahead or next_visit");
    }
    ahead.map(Statement::LookAhead).or(visit.map(Statement::NextVisit))
}
