//! Raw file and environment → checked [`Settings`], with all problems reported at once.
//!
//! Two stages: `raw` says which keys there are and of which kind; `check` and `watch` turn them into
//! values that are known to be good. Nothing is used before everything is checked.

mod cautions;
mod check;
pub mod duration;
mod layers;
mod problem;
mod raw;
mod secret;
mod section;
mod shown;
#[cfg(test)]
mod tests;
pub mod time;
mod watch;

pub use check::BrokerSection;
pub use layers::{Environment, FILE_BYTES_MAX, VARIABLE_PREFIX};
pub use problem::{Fault, PROBLEMS_MAX, Place, Problem, Problems, SettingsError};
pub use secret::Secret;

use crate::service::intake::Route;
use crate::watch::settings::SiteSettings;
use section::Section;
use std::io::Read as _;
use std::path::{Path, PathBuf};

/// Everything that is set, checked.
#[derive(Clone, Debug)]
pub struct Settings {
    /// What the engine must know.
    pub site: SiteSettings,
    /// The broker.
    pub broker: BrokerSection,
    /// Where the store is.
    pub store_directory: PathBuf,
    /// How messages become readings, one for each of `site.watches`, in the same order.
    pub routes: Vec<Route>,
}

impl Settings {
    /// Reads a settings file and lays the environment over it.
    ///
    /// # Arguments
    /// `file` — a TOML file of at most [`FILE_BYTES_MAX`] bytes; `environment` — the process's.
    pub fn load(file: &Path, environment: &Environment) -> Result<Settings, SettingsError> {
        let unreadable = |source| SettingsError::Unreadable { path: file.to_owned(), source };
        let mut bytes = Vec::new();
        std::fs::File::open(file)
            .and_then(|f| f.take(FILE_BYTES_MAX + 1).read_to_end(&mut bytes))
            .map_err(unreadable)?;
        let mut problems = Problems::new(file.to_owned());
        if bytes.len() as u64 > FILE_BYTES_MAX {
            problems.refuse(&Place::File, "", "more than 1 MiB", "a file of at most 1 MiB");
            return Err(problems.into());
        }
        match String::from_utf8(bytes) {
            Ok(text) => Ok(Settings::read(&text, file, environment)?),
            Err(error) => {
                let at = error.utf8_error().valid_up_to();
                let line = error.as_bytes()[..at].iter().filter(|b| **b == b'\n').count() + 1;
                problems.refuse(&Place::Line(line), "", "bytes that are not UTF-8", "UTF-8 text");
                Err(problems.into())
            }
        }
    }

    /// Reads the text of a settings file.
    ///
    /// # Arguments
    /// `text` — TOML; `file` — its name, for messages and as the place relative paths start from;
    /// `environment` — what to lay over it.
    pub fn read(text: &str, file: &Path, environment: &Environment) -> Result<Settings, Problems> {
        let mut problems = Problems::new(file.to_owned());
        let mut tree = layers::file_layer(text, &mut problems);
        if problems.count() > 0 {
            // What could be read of a broken file would only add problems that are not there.
            problems.sort();
            return Err(problems);
        }
        layers::environment_layer(&mut tree, environment, &mut problems);
        let raw = raw::read_settings(Section::root(&tree, &mut problems));
        let settings = check_all(&raw, file, environment, &mut problems);
        problems.sort();
        if problems.count() > 0 { Err(problems) } else { Ok(settings) }
    }

    /// The topic below which everything is published: `{topic_root}/{site}`.
    pub fn own_topics(&self) -> String {
        own_topics(&self.broker.topic_root, &self.site.site)
    }
}

fn own_topics(topic_root: &str, site: &str) -> String {
    format!("{topic_root}/{site}")
}

fn check_all(
    raw: &raw::RawSettings,
    file: &Path,
    environment: &Environment,
    problems: &mut Problems,
) -> Settings {
    // Absolute, so that the resolved settings mean the same from every folder.
    let file = std::path::absolute(file).unwrap_or_else(|_| file.to_owned());
    let base = file.parent().unwrap_or(Path::new(""));
    let site = check::check_site(&raw.site, problems);
    let broker = check::check_broker(&raw.broker, &site, base, environment, problems);
    let own_topics = own_topics(&broker.topic_root, &site);
    match raw.watches.len() {
        0 => problems.missing(&Place::File, "watch", "at least one table [[watch]]"),
        1..=raw::WATCHES_MAX => {}
        n => problems.refuse(&Place::File, "watch", format!("{n} watches"), "at most 256 watches"),
    }
    let (watches, routes) = raw
        .watches
        .iter()
        .take(raw::WATCHES_MAX)
        .filter_map(|watch| watch::check_watch(watch, &own_topics, problems))
        .unzip();
    Settings {
        site: SiteSettings {
            site,
            false_alerts_per_year: check::check_alerts(&raw.alerts, problems),
            watches,
        },
        broker,
        store_directory: check::check_store(&raw.store, base, problems),
        routes,
    }
}
