//! Which watch a topic or a channel belongs to, and the reading that a message is.

use super::pattern::{CHANNEL_BYTES_MAX, ChannelTemplate, TopicPattern};
use super::payload::{self, PayloadFormat};
use super::pointer::Pointer;
use super::refusal::{Excerpt, Refusal};
use crate::service::settings::Settings;
use crate::watch::time::{EventTime, ShellTime};

/// What a value is compared with.
#[derive(Clone, Debug, PartialEq)]
pub enum Reference {
    /// Nothing: the value is a deviation already.
    None,
    /// The same for all readings, finite, in the watch's unit.
    Constant(f64),
    /// A field of the same payload.
    Pointer(Pointer),
}

/// How the messages of one watch become readings.
#[derive(Clone, Debug, PartialEq)]
pub struct Route {
    /// The topics.
    pub pattern: TopicPattern,
    /// The channel's name.
    pub channel: ChannelTemplate,
    /// The payload.
    pub payload: PayloadFormat,
    /// The reference.
    pub reference: Reference,
}

/// A message or row that is a reading.
#[derive(Clone, Debug, PartialEq)]
pub struct Decoded {
    /// The channel's name, at most [`CHANNEL_BYTES_MAX`] bytes. Foreign text: show it escaped.
    pub channel: String,
    /// When the reading was taken; the time of receipt where the payload has none.
    pub time: EventTime,
    /// Whether `time` is the reading's own.
    pub own_time: bool,
    /// Value minus reference, in the watch's unit; finite.
    pub deviation: f64,
}

impl Decoded {
    /// Returns the reading, unless it was retained by the broker and has no time of its own: then it
    /// may be of any age.
    pub fn unless_stale(self, retained: bool) -> Result<Decoded, Refusal> {
        if retained && !self.own_time { Err(Refusal::Retained) } else { Ok(self) }
    }
}

/// Returns the reading that a message is.
///
/// # Arguments
/// `route` — of the watch that the topic belongs to; `topic`, `payload` — as they came;
/// `received` — when, taken for the reading's time where the payload has none.
pub fn decode(
    route: &Route,
    topic: &str,
    payload: &[u8],
    received: ShellTime,
) -> Result<Decoded, Refusal> {
    let Some(captured) = route.pattern.fit(topic) else {
        return Err(Refusal::NoMatchingWatch { name: Excerpt::of(topic) });
    };
    decode_captured(route, &captured, payload, received)
}

fn decode_captured(
    route: &Route,
    captured: &[&str],
    payload: &[u8],
    received: ShellTime,
) -> Result<Decoded, Refusal> {
    let channel = route.channel.name(captured);
    check_channel(&channel)?;
    let pointer = match &route.reference {
        Reference::Pointer(pointer) => Some(pointer),
        Reference::None | Reference::Constant(_) => None,
    };
    let content = payload::read(&route.payload, pointer, payload)?;
    let reference = match &route.reference {
        Reference::Constant(constant) => Some(*constant),
        Reference::Pointer(_) => content.reference,
        Reference::None => None,
    };
    Ok(Decoded {
        channel,
        time: content.time.unwrap_or(EventTime(received.0)),
        own_time: content.time.is_some(),
        deviation: deviation(content.value, reference)?,
    })
}

pub(super) fn check_channel(channel: &str) -> Result<(), Refusal> {
    let bytes = channel.len();
    if bytes > CHANNEL_BYTES_MAX {
        return Err(Refusal::ChannelTooLong { bytes, most: CHANNEL_BYTES_MAX });
    }
    Ok(())
}

pub(super) fn deviation(value: f64, reference: Option<f64>) -> Result<f64, Refusal> {
    let Some(reference) = reference else { return Ok(value) };
    let deviation = value - reference;
    if deviation.is_finite() {
        Ok(deviation)
    } else {
        Err(Refusal::DeviationNotFinite { value, reference })
    }
}

/// Finds the watch of a topic or channel; the first that fits, in the order of the settings.
#[derive(Clone, Debug)]
pub struct Router {
    routes: Vec<Route>,
}

impl Router {
    /// The router over all watches.
    pub fn new(settings: &Settings) -> Router {
        Router { routes: settings.routes.clone() }
    }

    /// The MQTT filters to subscribe to, each once, in the order of the watches.
    pub fn filters(&self) -> Vec<String> {
        let mut filters: Vec<String> = Vec::new();
        for filter in self.routes.iter().map(|route| route.pattern.filter()) {
            if !filters.contains(&filter) {
                filters.push(filter);
            }
        }
        filters
    }

    /// The watch of a topic, by its index in the settings, and the levels its pattern captures.
    pub fn route<'t>(&self, topic: &'t str) -> Option<(usize, Vec<&'t str>)> {
        self.routes.iter().enumerate().find_map(|(i, route)| Some((i, route.pattern.fit(topic)?)))
    }

    /// The watch of a channel name that came without a topic, by its index in the settings.
    pub fn watch_for_channel(&self, channel: &str) -> Option<usize> {
        self.routes.iter().position(|route| route.channel.fits(channel))
    }

    /// The route of a watch.
    ///
    /// # Arguments
    /// `watch` — an index below the number of watches; another one is a bug of the caller.
    pub fn route_of(&self, watch: usize) -> &Route {
        &self.routes[watch]
    }

    /// Returns the watch and the reading that a message is; [`decode`] after [`Router::route`].
    pub fn decode(
        &self,
        topic: &str,
        payload: &[u8],
        received: ShellTime,
    ) -> Result<(usize, Decoded), Refusal> {
        let Some((watch, captured)) = self.route(topic) else {
            return Err(Refusal::NoMatchingWatch { name: Excerpt::of(topic) });
        };
        decode_captured(&self.routes[watch], &captured, payload, received).map(|d| (watch, d))
    }
}
