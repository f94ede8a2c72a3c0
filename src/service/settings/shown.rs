//! Settings as they came out, written as TOML that reads back to the same settings. Secrets withheld.

use super::Settings;
use super::duration::show_span;
use crate::service::intake::{PayloadFormat, Reference, Route};
use crate::watch::settings::{Statement, WatchSettings};
use std::fmt::{self, Write as _};

impl Settings {
    /// Returns the resolved settings as TOML: every key, defaults written out. Of a password only its
    /// file is named.
    pub fn shown(&self) -> String {
        let mut out = String::new();
        self.write(&mut out).expect("writing to a String cannot fail");
        out
    }

    fn write(&self, out: &mut String) -> fmt::Result {
        let broker = &self.broker;
        writeln!(out, "[site]\nname = {}", text(&self.site.site))?;
        let host = &broker.host;
        let host = if host.contains(':') { format!("[{host}]") } else { host.clone() };
        writeln!(out, "\n[broker]\nurl = {}", text(&format!("mqtt://{host}:{}", broker.port)))?;
        writeln!(out, "client_id = {}", text(&broker.client_id))?;
        if let Some(username) = &broker.username {
            writeln!(out, "username = {}", text(username))?;
        }
        if let Some(file) = &broker.password_file {
            let file = text(&file.display().to_string());
            writeln!(out, "password_file = {file}  # its content is withheld")?;
        }
        writeln!(out, "topic_root = {}", text(&broker.topic_root))?;
        let directory = self.store_directory.display().to_string();
        writeln!(out, "\n[store]\ndirectory = {}", text(&directory))?;
        let rate = self.site.false_alerts_per_year;
        writeln!(out, "\n[alerts]\nfalse_alerts_per_year = {}", number(rate))?;
        for (watch, route) in self.site.watches.iter().zip(&self.routes) {
            write_route(out, route)?;
            write_watch(out, watch)?;
        }
        Ok(())
    }
}

fn write_route(out: &mut String, route: &Route) -> fmt::Result {
    let filter = text(&route.pattern.filter());
    writeln!(out, "\n[[watch]]")?;
    writeln!(out, "topic = {}  # filter {filter}", text(route.pattern.as_str()))?;
    writeln!(out, "channel = {}", text(route.channel.as_str()))?;
    writeln!(out, "{}", payload(&route.payload))?;
    match reference(&route.reference) {
        Some(reference) => writeln!(out, "{reference}"),
        None => writeln!(out, "# no reference: the value is a deviation"),
    }
}

fn payload(payload: &PayloadFormat) -> String {
    match payload {
        PayloadFormat::Number => "payload = { format = \"number\" }".to_owned(),
        PayloadFormat::Json { value, time } => {
            let value = text(value.as_str());
            let time = time.as_ref().map(|time| format!(", time = {}", text(time.as_str())));
            let time = time.unwrap_or_default();
            format!("payload = {{ format = \"json\", value = {value}{time} }}")
        }
    }
}

fn reference(reference: &Reference) -> Option<String> {
    match reference {
        Reference::None => None,
        Reference::Constant(x) => Some(format!("reference = {{ constant = {} }}", number(*x))),
        Reference::Pointer(p) => Some(format!("reference = {{ pointer = {} }}", text(p.as_str()))),
    }
}

/// What a deviation is under these settings, as [`WatchSettings::measured_as`] has it. It is kept with
/// each channel, so a change of spelling here begins every window anew.
pub(super) fn measured_as(watch: &WatchSettings, route: &Route) -> String {
    let mut parts = vec![format!("unit = {}", text(&watch.unit)), payload(&route.payload)];
    parts.extend(reference(&route.reference));
    parts.extend(watch.bin.map(|bin| format!("bin = {}", text(&show_span(bin)))));
    parts.join("; ")
}

fn write_watch(out: &mut String, watch: &WatchSettings) -> fmt::Result {
    writeln!(out, "unit = {}", text(&watch.unit))?;
    match watch.tolerance {
        Some(tolerance) => writeln!(out, "tolerance = {}", number(tolerance))?,
        None => writeln!(out, "# no tolerance: no statement on it")?,
    }
    let span = |span| text(&show_span(span));
    write!(
        out,
        "window = {{ span = {}, points = {}",
        span(watch.window_span),
        watch.window_points
    )?;
    if let Some(bin) = watch.bin {
        write!(out, ", bin = {}", span(bin))?;
    }
    writeln!(out, " }}")?;
    writeln!(out, "refit_every = {}", span(watch.refit_every))?;
    writeln!(out, "lateness = {}", span(watch.lateness))?;
    let families: Vec<String> = watch.families.iter().map(|f| text(f.name())).collect();
    writeln!(out, "families = [{}]", families.join(", "))?;
    match watch.statement {
        Some(Statement::LookAhead(ahead)) => writeln!(out, "look_ahead = {}", span(ahead))?,
        Some(Statement::NextVisit(time)) => writeln!(out, "next_visit = \"{time}\"")?,
        None => writeln!(out, "# neither look_ahead nor next_visit: no forecast")?,
    }
    match watch.calibrated {
        Some(time) => writeln!(out, "calibrated = \"{time}\"")?,
        None => {
            writeln!(out, "# not calibrated by setting: a mark, else the first reading, is age 0")?
        }
    }
    writeln!(out, "silent_after = {}", span(watch.silent_after))
}

/// A TOML string, escaped as TOML has it; what TOML would let through but a terminal obeys is escaped
/// too.
fn text(text: &str) -> String {
    let mut out = String::from("\"");
    for c in text.chars() {
        match c {
            '"' => out.push_str("\\\""),
            '\\' => out.push_str("\\\\"),
            c if crate::service::shown::needs_escape(c) => {
                write!(out, "\\U{:08X}", u32::from(c)).expect("writing to a String cannot fail");
            }
            c => out.push(c),
        }
    }
    out.push('"');
    out
}

fn number(x: f64) -> String {
    toml::Value::Float(x).to_string()
}
