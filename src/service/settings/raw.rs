//! The settings as they are written: every key, its kind, unit, range and default. Nothing is
//! interpreted here; `check` and `watch` turn these into checked settings.
//!
//! To add a key: a field here with its unit, range and default; one line in the `read_…` function;
//! its check; its line in `config/asfound.toml` (a test compares the two).

use super::problem::Place;
use super::section::{Located, Section};
use crate::drift::family::Family;
use crate::watch::time::{DAY_US, Span};

/// Default of `broker.topic_root`.
pub const TOPIC_ROOT_DEFAULT: &str = "asfound";
/// Default of `store.directory`.
pub const STORE_DIRECTORY_DEFAULT: &str = "/var/lib/asfound";
/// Default of `alerts.false_alerts_per_year`: one a month.
pub const FALSE_ALERTS_PER_YEAR_DEFAULT: f64 = 12.0;
/// Default of `window.span`.
pub const WINDOW_SPAN_DEFAULT: Span = Span(90 * DAY_US);
/// Default of `window.points`.
pub const WINDOW_POINTS_DEFAULT: usize = 512;
/// Default of `refit_every`.
pub const REFIT_EVERY_DEFAULT: Span = Span(DAY_US / 4);
/// Default of `lateness`.
pub const LATENESS_DEFAULT: Span = Span(0);
/// Default of `families`.
pub const FAMILIES_DEFAULT: [Family; 3] = [Family::Logarithmic, Family::Power, Family::Linear];
/// `silent_after` defaults to the window's span divided by this …
pub const SILENT_AFTER_SHARE: i64 = 10;
/// … but to no less than this.
pub const SILENT_AFTER_LEAST: Span = Span(DAY_US / 24);
/// Default port of `broker.url` for `mqtt`.
pub const MQTT_PORT: u16 = 1883;

/// Most watches in one file.
pub const WATCHES_MAX: usize = 256;
pub use crate::watch::limits::{UNIT_BYTES_MAX, WINDOW_POINTS_MAX, WINDOW_POINTS_MIN};
/// Longest site name, bytes.
pub const SITE_BYTES_MAX: usize = 64;
/// Longest client id and user name, bytes.
pub const CLIENT_ID_BYTES_MAX: usize = 128;
/// Longest topic root, bytes.
pub const TOPIC_ROOT_BYTES_MAX: usize = 128;

/// The whole file.
#[derive(Debug, Default)]
pub(super) struct RawSettings {
    /// `[site]`
    pub site: RawSite,
    /// `[broker]`
    pub broker: RawBroker,
    /// `[store]`
    pub store: RawStore,
    /// `[alerts]`
    pub alerts: RawAlerts,
    /// `[[watch]]`, at least one, at most [`WATCHES_MAX`].
    pub watches: Vec<RawWatch>,
}

/// `[site]`
#[derive(Debug)]
pub(super) struct RawSite {
    /// Where the table begins.
    pub place: Place,
    /// Name of the site, part of topics and of the source of alerts. [1–64 of `A–Z a–z 0–9 . _ -`; needed]
    pub name: Option<Located<String>>,
}

/// `[broker]`
#[derive(Debug)]
pub(super) struct RawBroker {
    /// Where the table begins.
    pub place: Place,
    /// Where the broker is. [`mqtt://host` or `mqtt://host:port`; needed]
    pub url: Option<Located<String>>,
    /// Name of this client at the broker, its own for each daemon. [1–128 bytes; default `asfound-{site.name}`]
    pub client_id: Option<Located<String>>,
    /// User name. [1–128 bytes; default none]
    pub username: Option<Located<String>>,
    /// File with the password: a credential of the service manager, or a path from the settings
    /// file's folder. [readable by its owner only; default none]
    pub password_file: Option<Located<String>>,
    /// First level of all topics that are published. [topic levels; default [`TOPIC_ROOT_DEFAULT`]]
    pub topic_root: Option<Located<String>>,
}

/// `[store]`
#[derive(Debug, Default)]
pub(super) struct RawStore {
    /// Where readings, marks and alerts are kept. [a folder; default [`STORE_DIRECTORY_DEFAULT`]]
    pub directory: Option<Located<String>>,
}

/// `[alerts]`
#[derive(Debug, Default)]
pub(super) struct RawAlerts {
    /// What the whole site may see in a year when nothing is wrong. [alerts per year, 0.01–10000; default 12]
    pub false_alerts_per_year: Option<Located<f64>>,
}

/// `[[watch]]`
#[derive(Debug)]
pub(super) struct RawWatch {
    /// Where the table begins.
    pub place: Place,
    /// Its path, `watch[1]` for the first.
    pub path: String,
    /// Topics, a whole level in braces is captured. (needed)
    pub topic: Option<Located<String>>,
    /// Name of the channel, from the captures. [default: all captures joined with `.`]
    pub channel: Option<Located<String>>,
    /// How to read a payload. [default: one number]
    pub payload: Option<RawPayload>,
    /// Unit of value, reference, deviation and tolerance, as shown. [1–16 bytes; needed]
    pub unit: Option<Located<String>>,
    /// What the value is compared with. [default: the value is a deviation already]
    pub reference: Option<RawReference>,
    /// Permissible deviation, ±. [the unit, above 0; default none: no statement on tolerance]
    pub tolerance: Option<Located<f64>>,
    /// What is looked at.
    pub window: RawWindow,
    /// How much newer the newest point must be for the next refit. [time, 1 min to the window's span; default 6h]
    pub refit_every: Option<Located<String>>,
    /// How much older than the newest a reading may be and still be put in order. [time, 0 to the window's span; default 0s]
    pub lateness: Option<Located<String>>,
    /// Families to choose from. [names of families, each once; default logarithmic, power, linear]
    pub families: Option<Located<Vec<Located<String>>>>,
    /// How far past the newest reading a statement is needed. [time, above 0; default none: no forecast]
    pub look_ahead: Option<Located<String>>,
    /// The day for which a statement is needed, instead of `look_ahead`. [RFC 3339; default none]
    pub next_visit: Option<Located<String>>,
    /// Age zero. [RFC 3339; default: the calibration mark, else the first reading]
    pub calibrated: Option<Located<String>>,
    /// A channel is silent after so long without a reading. [time, at least 1 min; default a tenth of the window's span, at least 1h]
    pub silent_after: Option<Located<String>>,
}

/// `payload = { … }`
#[derive(Debug)]
pub(super) struct RawPayload {
    /// Where it stands.
    pub place: Place,
    /// Its path.
    pub path: String,
    /// `number` or `json`. (needed)
    pub format: Option<Located<String>>,
    /// JSON Pointer to the value. [RFC 6901; needed with `json`]
    pub value: Option<Located<String>>,
    /// JSON Pointer to the reading's time. [RFC 6901; default none: the time of receipt]
    pub time: Option<Located<String>>,
}

/// `reference = { … }`
#[derive(Debug)]
pub(super) struct RawReference {
    /// Where it stands.
    pub place: Place,
    /// Its path.
    pub path: String,
    /// The same for all readings. [the unit]
    pub constant: Option<Located<f64>>,
    /// JSON Pointer to the reference in the same payload. [RFC 6901]
    pub pointer: Option<Located<String>>,
    /// Whether neither key is there, nor one of a later version.
    pub empty: bool,
}

/// `window = { … }`
#[derive(Debug, Default)]
pub(super) struct RawWindow {
    /// Points older than this, from the newest, leave. [time, 1h to 3652d; default 90d]
    pub span: Option<Located<String>>,
    /// Most points. [count, 60–4096; default 512]
    pub points: Option<Located<i64>>,
    /// Width of one bin. [time, 1s up to the span / 60; default none: each reading is a point]
    pub bin: Option<Located<String>>,
}

impl Default for RawSite {
    fn default() -> RawSite {
        RawSite { place: Place::File, name: None }
    }
}

impl Default for RawBroker {
    fn default() -> RawBroker {
        RawBroker {
            place: Place::File,
            url: None,
            client_id: None,
            username: None,
            password_file: None,
            topic_root: None,
        }
    }
}

/// What a duration looks like, for messages.
pub(super) const DURATION: &str =
    "a length of time such as \"90d\", \"6h\", \"15m\", \"30s\" or \"P90D\"";
/// What a time looks like, for messages.
pub(super) const TIME: &str = "a time with offset, 1978 to 2100, such as \"2026-03-01T08:00:00Z\"";
/// What a list of families looks like, for messages.
pub(super) const FAMILIES: &str = "a list of logarithmic, power, offset-power, linear, exponential";
/// What a topic looks like, for messages.
pub(super) const TOPIC: &str = "a topic such as \"plant/{area}/{tag}/deviation\"";
/// What a channel template looks like, for messages.
pub(super) const CHANNEL: &str = "a name made of the topic's captures, such as \"{area}.{tag}\"";
/// What a pointer looks like, for messages.
pub(super) const POINTER: &str = "a JSON Pointer (RFC 6901) such as \"/v\"";
/// What a unit looks like, for messages.
pub(super) const UNIT: &str = "a unit such as \"bar\", 1 to 16 bytes";

/// Reads the whole tree; whatever is wrong with keys and kinds is noted in the section's problems.
pub(super) fn read_settings(mut root: Section<'_>) -> RawSettings {
    let mut raw = RawSettings::default();
    if let Some(section) = root.section("site", "a table [site]") {
        raw.site = read_site(section);
    }
    if let Some(section) = root.section("broker", "a table [broker]") {
        raw.broker = read_broker(section);
    }
    if let Some(mut section) = root.section("store", "a table [store]") {
        raw.store.directory = section.text("directory", "a folder");
        section.finish();
    }
    if let Some(mut section) = root.section("alerts", "a table [alerts]") {
        raw.alerts.false_alerts_per_year =
            section.number("false_alerts_per_year", "a number from 0.01 to 10000");
        section.finish();
    }
    raw.watches = root.sections("watch", "tables [[watch]]", read_watch);
    root.later("page", "leave the table out: there is no page to listen");
    root.finish();
    raw
}

fn read_site(mut section: Section<'_>) -> RawSite {
    let raw = RawSite { place: section.place.clone(), name: section.text("name", "a name") };
    section.finish();
    raw
}

fn read_broker(mut section: Section<'_>) -> RawBroker {
    let raw = RawBroker {
        place: section.place.clone(),
        url: section.text("url", "mqtt://host or mqtt://host:port"),
        client_id: section.text("client_id", "a name of 1 to 128 bytes"),
        username: section.text("username", "a name of 1 to 128 bytes"),
        password_file: section.text("password_file", "the name of a file"),
        topic_root: section.text("topic_root", "topic levels such as \"asfound\""),
    };
    section
        .never("password", "password_file with the name of a file; a password never stands inline");
    for name in ["ca_file", "certificate_file", "key_file"] {
        section.later(name, "leave it out: only unencrypted mqtt:// is served");
    }
    section.finish();
    raw
}

fn read_watch(mut section: Section<'_>) -> RawWatch {
    let raw = RawWatch {
        place: section.place.clone(),
        path: section.path.clone(),
        topic: section.text("topic", TOPIC),
        channel: section.text("channel", CHANNEL),
        payload: section
            .section("payload", "a table such as { format = \"number\" }")
            .map(read_payload),
        unit: section.text("unit", UNIT),
        reference: section
            .section("reference", "a table such as { constant = 4.0 }")
            .map(read_reference),
        tolerance: section.number("tolerance", "a number above 0"),
        window: section
            .section("window", "a table such as { span = \"90d\", points = 512 }")
            .map(read_window)
            .unwrap_or_default(),
        refit_every: section.text("refit_every", DURATION),
        lateness: section.text("lateness", DURATION),
        families: section.texts("families", FAMILIES),
        look_ahead: section.text("look_ahead", DURATION),
        next_visit: section.time("next_visit", TIME),
        calibrated: section.time("calibrated", TIME),
        silent_after: section.text("silent_after", DURATION),
    };
    section.later("companions", "leave it out: companions are not compared");
    section.later("time_zone", "leave it out and send times with an offset");
    section.finish();
    raw
}

fn read_payload(mut section: Section<'_>) -> RawPayload {
    let raw = RawPayload {
        place: section.place.clone(),
        path: section.path.clone(),
        format: section.text("format", "\"number\" or \"json\""),
        value: section.text("value", POINTER),
        time: section.text("time", POINTER),
    };
    section.finish();
    raw
}

fn read_reference(mut section: Section<'_>) -> RawReference {
    let raw = RawReference {
        place: section.place.clone(),
        path: section.path.clone(),
        constant: section.number("constant", "a finite number"),
        pointer: section.text("pointer", POINTER),
        empty: !["constant", "pointer", "topic"].iter().any(|name| section.has(name)),
    };
    section.later("topic", "use { constant = … } or { pointer = \"/…\" }");
    section.finish();
    raw
}

fn read_window(mut section: Section<'_>) -> RawWindow {
    let raw = RawWindow {
        span: section.text("span", DURATION),
        points: section.whole("points", "a whole number from 60 to 4096"),
        bin: section.text("bin", DURATION),
    };
    section.finish();
    raw
}
