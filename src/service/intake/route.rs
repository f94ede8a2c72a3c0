//! Which watch a topic or a channel belongs to, and the reading that a message is.

use super::pattern::{CHANNEL_BYTES_MAX, ChannelTemplate, TopicPattern};
use super::payload::{self, PayloadFormat};
use super::pointer::Pointer;
use super::refusal::{Excerpt, Refusal};
use crate::service::settings::Settings;
use crate::watch::time::{DAY_US, EventTime, ShellTime, Span};

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

/// The largest deviation that is taken, ± in the unit.
const DEVIATION_MAX: f64 = 1e15;
/// A reading may be later than the clock by so much: clocks differ.
const AHEAD_MAX_US: i64 = DAY_US;

impl Decoded {
    /// Returns the reading, unless it was retained by the broker and has no time of its own: then it
    /// may be of any age.
    pub fn unless_stale(self, retained: bool) -> Result<Decoded, Refusal> {
        if retained && !self.own_time { Err(Refusal::Retained) } else { Ok(self) }
    }

    /// Returns the reading, unless its time lies further ahead of `now` than clocks may differ.
    pub fn unless_ahead_of(self, now: ShellTime) -> Result<Decoded, Refusal> {
        let ahead = Span(self.time.0.saturating_sub(now.0));
        if ahead.0 > AHEAD_MAX_US {
            Err(Refusal::FromTheFuture { days: ahead.days() })
        } else {
            Ok(self)
        }
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
    let deviation = value - reference.unwrap_or(0.0);
    if !deviation.is_finite() {
        let reference = reference.unwrap_or(0.0);
        Err(Refusal::DeviationNotFinite { value, reference })
    } else if deviation.abs() > DEVIATION_MAX {
        Err(Refusal::DeviationTooLarge { deviation, most: DEVIATION_MAX })
    } else {
        Ok(deviation)
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

#[cfg(test)]
mod tests {
    use super::*;
    use crate::service::settings::Environment;
    use proptest::prelude::*;
    use std::path::Path;

    const RECEIVED: ShellTime = ShellTime(1_772_348_400_000_000);

    fn router() -> Router {
        let text = r#"
            site.name = "saltmarsh"
            broker.url = "mqtt://127.0.0.1"
            [[watch]]
            topic = "plant/{area}/{tag}/pressure"
            channel = "{area}.{tag}"
            payload = { format = "json", value = "/v", time = "/ts" }
            reference = { pointer = "/ref" }
            unit = "bar"
            [[watch]]
            topic = "plant/{area}/{tag}/{quantity}"
            reference = { constant = 20.0 }
            unit = "K"
            [[watch]]
            topic = "lab/{tag}"
            channel = "lab/{tag}"
            unit = "K"
            [[watch]]
            topic = "lab/{bench}"
            channel = "bench-{bench}"
            unit = "K"
        "#;
        let settings = Settings::read(text, Path::new("test.toml"), &Environment::default());
        Router::new(&settings.unwrap_or_else(|problems| panic!("{problems}")))
    }

    fn check(topic: &str, payload: &str, expected: &str) {
        let text = match router().decode(topic, payload.as_bytes(), RECEIVED) {
            Ok((watch, d)) => format!(
                "{watch} {} {} {}{}",
                d.channel,
                d.time,
                d.deviation,
                if d.own_time { " own time" } else { "" }
            ),
            Err(refusal) => format!("{}: {refusal}", refusal.code()),
        };
        assert_eq!(text, expected, "{topic}");
    }

    #[test]
    fn a_message_becomes_the_reading_of_the_first_watch_that_fits() {
        check(
            "plant/press/PT-4107/pressure",
            r#"{"v":4.5,"ref":4,"ts":"2026-03-01T08:00:00Z"}"#,
            "0 press.PT-4107 2026-03-01T08:00:00Z 0.5 own time",
        );
        check(
            "plant/press/TT-1/temperature",
            "20.5",
            "1 press.TT-1.temperature 2026-03-01T07:00:00Z 0.5",
        );
        check("lab/7", "-0.25", "2 lab/7 2026-03-01T07:00:00Z -0.25");
    }

    #[test]
    fn what_no_watch_covers_is_refused_by_name() {
        check("plant/press", "1", "no-matching-watch: no watch covers \"plant/press\"");
        check("a\nb", "1", "no-matching-watch: no watch covers \"a\\nb\"");
    }

    #[test]
    fn a_channel_name_beyond_its_limit_is_refused() {
        let topic = format!("lab/{}", "x".repeat(300));
        check(
            &topic,
            "1",
            "channel-too-long: the channel's name has 304 bytes; at most 256 are allowed",
        );
    }

    #[test]
    fn a_deviation_beyond_a_double_is_refused() {
        check(
            "plant/press/PT-4107/pressure",
            r#"{"v":1e308,"ref":-1e308,"ts":"2026-03-01T08:00:00Z"}"#,
            &format!(
                "deviation-not-finite: {} minus the reference {} is beyond the range of a double",
                1e308, -1e308
            ),
        );
    }

    #[test]
    fn a_retained_message_needs_a_time_of_its_own() {
        let reading = |own_time| Decoded {
            channel: "lab/7".to_owned(),
            time: EventTime(RECEIVED.0),
            own_time,
            deviation: 0.0,
        };
        assert_eq!(reading(false).unless_stale(true), Err(Refusal::Retained));
        assert!(reading(true).unless_stale(true).is_ok());
        assert!(reading(false).unless_stale(false).is_ok());
    }

    #[test]
    fn each_filter_is_subscribed_once() {
        assert_eq!(router().filters(), ["plant/+/+/pressure", "plant/+/+/+", "lab/+"]);
    }

    #[test]
    fn a_channel_name_finds_the_first_watch_whose_template_fits() {
        let router = router();
        for (name, watch) in [
            ("press.PT-4107", Some(0)),
            ("press.TT-1.temperature", Some(0)),
            ("lab/7", Some(2)),
            ("bench-7", Some(3)),
            ("attic", None),
        ] {
            assert_eq!(router.watch_for_channel(name), watch, "{name}");
        }
    }

    proptest! {
        #[test]
        fn no_bytes_bring_the_intake_down(topic in "(plant|lab|/|[a-z]{1,4}|\\PC){0,12}", payload in prop::collection::vec(any::<u8>(), 0..200)) {
            let router = router();
            for topic in [topic.as_str(), "plant/a/b/pressure", "lab/7"] {
                match router.decode(topic, &payload, RECEIVED) {
                    Ok((_, reading)) => prop_assert!(reading.deviation.is_finite()),
                    Err(refusal) => {
                        let text = refusal.to_string();
                        prop_assert!(!text.chars().any(char::is_control) && text.len() < 600, "{text}");
                    }
                }
            }
        }

        #[test]
        fn every_number_arrives_unchanged_or_is_refused_for_its_size(x in any::<f64>().prop_filter("finite", |x| x.is_finite())) {
            let payload = serde_json::to_vec(&x).unwrap();
            match decode(&router().routes[2], "lab/7", &payload, RECEIVED) {
                Ok(reading) => prop_assert_eq!(reading.deviation.to_bits(), (x - 0.0).to_bits()),
                Err(Refusal::DeviationTooLarge { deviation, most }) => {
                    prop_assert!(deviation.abs() > most && most >= 1e15);
                }
                Err(other) => prop_assert!(false, "{other}"),
            }
        }

        #[test]
        fn a_name_made_from_a_topic_fits_its_own_template(area in "[a-z.]{1,6}", tag in "[a-zA-Z.-]{1,6}") {
            let router = router();
            let topic = format!("plant/{area}/{tag}/pressure");
            let (watch, captured) = router.route(&topic).unwrap();
            let route = router.route_of(watch);
            prop_assert!(route.channel.fits(&route.channel.name(&captured)));
        }
    }
}
