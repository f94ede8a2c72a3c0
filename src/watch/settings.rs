//! What the engine must know of a site and its watches: checked values only, no file syntax.
//! The raw file becomes these in `service::settings`.

use crate::drift::family::Family;
use crate::watch::time::{EventTime, Span};
use serde::{Deserialize, Serialize};

/// The settings of the whole site, as the engine needs them.
#[derive(Clone, Debug, PartialEq)]
pub struct SiteSettings {
    /// The site's name; part of topics, alert source and alert ids.
    pub site: String,
    /// How many false alerts the whole site may see in a year when nothing is wrong; > 0.
    pub false_alerts_per_year: f64,
    /// The watches, in the order of the file; a channel belongs to one of them.
    pub watches: Vec<WatchSettings>,
}

/// The settings of one group of channels.
#[derive(Clone, Debug, PartialEq)]
pub struct WatchSettings {
    /// What a deviation is here: unit, payload, reference and bin in the settings' own words. Deviations
    /// under another text are not comparable with these.
    pub measured_as: String,
    /// The unit of deviation and tolerance, as shown; at most `limits::UNIT_BYTES_MAX` bytes.
    pub unit: String,
    /// Permissible deviation, ± in the unit; > 0. None: no statement on tolerance.
    pub tolerance: Option<f64>,
    /// Points older than this, counted from the newest, leave the window.
    pub window_span: Span,
    /// The most points a window holds; the oldest leave first.
    pub window_points: usize,
    /// Width of one bin; a bin becomes one point. None: each reading is a point.
    pub bin: Option<Span>,
    /// Refit when the newest point is so much later than at the last refit (event time).
    pub refit_every: Span,
    /// Readings up to this much older than the newest are still put in order.
    pub lateness: Span,
    /// Families to choose from; never empty.
    pub families: Vec<Family>,
    /// What statement about the future is asked for. None: no forecast is asked.
    pub statement: Option<Statement>,
    /// Age zero by setting; a later calibration mark overrides.
    pub calibrated: Option<EventTime>,
    /// A channel is silent when nothing arrived for so long.
    pub silent_after: Span,
}

/// What a channel's points rest on: settings that cannot change under them.
#[derive(Clone, Debug, PartialEq, Eq, Serialize, Deserialize)]
pub struct Basis {
    /// As in [`WatchSettings::measured_as`].
    pub measured_as: String,
    /// As in [`WatchSettings::calibrated`].
    pub calibrated: Option<EventTime>,
}

impl WatchSettings {
    /// What points taken under these settings rest on.
    pub fn basis(&self) -> Basis {
        Basis { measured_as: self.measured_as.clone(), calibrated: self.calibrated }
    }
}

/// For when a statement about the future is needed.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Statement {
    /// So far past the newest reading.
    LookAhead(Span),
    /// On that day.
    NextVisit(EventTime),
}

#[cfg(test)]
pub(crate) mod tests {
    use super::*;

    /// Plain settings for tests: no bins, no lateness, a year's span, daily refits.
    pub(crate) fn watch_settings() -> WatchSettings {
        WatchSettings {
            measured_as: "unit = \"bar\"".to_owned(),
            unit: "bar".to_owned(),
            tolerance: None,
            window_span: Span::from_days(400.0),
            window_points: 512,
            bin: None,
            refit_every: Span::from_days(1.0),
            lateness: Span(0),
            families: vec![Family::Logarithmic, Family::Power, Family::Linear],
            statement: None,
            calibrated: None,
            silent_after: Span::from_days(3.0),
        }
    }
}
