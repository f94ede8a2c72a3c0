//! Site, broker, store and alerts: raw values → checked ones. What is wrong is noted, and a stand-in
//! takes the value's place so that the rest can still be checked; nobody sees a stand-in, because
//! settings with problems are never handed out.

use super::layers::Environment;
use super::problem::Problems;
use super::raw::{
    CLIENT_ID_BYTES_MAX, FALSE_ALERTS_PER_YEAR_DEFAULT, MQTT_PORT, RawAlerts, RawBroker, RawSite,
    RawStore, SITE_BYTES_MAX, STORE_DIRECTORY_DEFAULT, TOPIC_ROOT_BYTES_MAX, TOPIC_ROOT_DEFAULT,
};
use super::secret::{Secret, read_secret};
use super::section::Located;
use crate::service::shown::Shown;
use std::path::{Path, PathBuf};

/// Where the broker is and as whom to talk to it.
#[derive(Clone, Debug)]
pub struct BrokerSection {
    /// Host name or address, IPv6 without brackets.
    pub host: String,
    /// TCP port.
    pub port: u16,
    /// Client identifier.
    pub client_id: String,
    /// User name.
    pub username: Option<String>,
    /// Password, as read from `password_file`.
    pub password: Option<Secret>,
    /// Where the password was read from.
    pub password_file: Option<PathBuf>,
    /// First levels of everything that is published, without slash at either end.
    pub topic_root: String,
}

const SITE_NAME: &str = "1 to 64 letters A-Z a-z, digits, . _ -";
const URL: &str = "mqtt://host or mqtt://host:port";

pub(super) fn check_site(raw: &RawSite, problems: &mut Problems) -> String {
    let Some(name) = &raw.name else {
        problems.missing(&raw.place, "site.name", SITE_NAME);
        return "site".to_owned();
    };
    let good = (1..=SITE_BYTES_MAX).contains(&name.value.len())
        && name.value.chars().all(|c| c.is_ascii_alphanumeric() || "._-".contains(c));
    if !good {
        problems.refuse(&name.place, &name.key, quoted(&name.value), SITE_NAME);
        return "site".to_owned();
    }
    name.value.clone()
}

pub(super) fn check_broker(
    raw: &RawBroker,
    site: &str,
    base: &Path,
    environment: &Environment,
    problems: &mut Problems,
) -> BrokerSection {
    let (host, port) = match &raw.url {
        Some(url) => check_url(url, problems).unwrap_or_default(),
        None => {
            problems.missing(&raw.place, "broker.url", URL);
            Default::default()
        }
    };
    let client_id = raw.client_id.as_ref().map_or_else(
        || format!("asfound-{site}"),
        |id| {
            check_name(id, problems);
            id.value.clone()
        },
    );
    if let Some(username) = &raw.username {
        check_name(username, problems);
    }
    let password = raw.password_file.as_ref().and_then(|file| {
        if raw.username.is_none() {
            let allowed = "broker.username beside it; a password needs a user name";
            problems.refuse(&file.place, &file.key, quoted(&file.value), allowed);
        }
        check_password(file, base, environment, problems)
    });
    let (password_file, password) = password.unzip();
    BrokerSection {
        host,
        port,
        client_id,
        username: raw.username.as_ref().map(|u| u.value.clone()),
        password,
        password_file,
        topic_root: check_topic_root(raw.topic_root.as_ref(), problems),
    }
}

fn check_name(name: &Located<String>, problems: &mut Problems) {
    let good = (1..=CLIENT_ID_BYTES_MAX).contains(&name.value.len())
        && !name.value.contains(char::is_control);
    if !good {
        let allowed = "1 to 128 bytes without control characters";
        problems.refuse(&name.place, &name.key, quoted(&name.value), allowed);
    }
}

fn check_url(url: &Located<String>, problems: &mut Problems) -> Option<(String, u16)> {
    let mut refuse = |found: String, allowed: &'static str| {
        problems.refuse(&url.place, &url.key, found, allowed);
        None
    };
    let Some((scheme, rest)) = url.value.split_once("://") else {
        // A text with @ may be a user and password in a spelling we do not know: do not show it.
        let found = if url.value.contains('@') {
            "an address with @".to_owned()
        } else {
            quoted(&url.value)
        };
        return refuse(found, URL);
    };
    if let Some((_, after)) = rest.rsplit_once('@') {
        let found = format!("{}://(withheld)@{}", Shown(scheme, 16), Shown(after, 80));
        return refuse(found, "no user or password in the address; use username and password_file");
    }
    match scheme {
        "mqtt" => {}
        "mqtts" | "ws" | "wss" => {
            let allowed =
                "mqtt:// only; encrypted and WebSocket connections are not in this version yet";
            return refuse(quoted(&url.value), allowed);
        }
        _ => return refuse(quoted(&url.value), URL),
    }
    match host_and_port(rest.strip_suffix('/').unwrap_or(rest)) {
        Some(found) => Some(found),
        None => {
            refuse(quoted(&url.value), "mqtt://host or mqtt://host:port, port 1 to 65535, no path")
        }
    }
}

fn host_and_port(text: &str) -> Option<(String, u16)> {
    let (host, port) = if let Some(inside) = text.strip_prefix('[') {
        let (address, after) = inside.split_once(']')?;
        address.parse::<std::net::Ipv6Addr>().ok()?;
        (address, after.strip_prefix(':').or(if after.is_empty() { Some("") } else { None })?)
    } else {
        let (host, port) = text.split_once(':').unwrap_or((text, ""));
        let good = (1..=253).contains(&host.len())
            && host.chars().all(|c| c.is_ascii_alphanumeric() || ".-_".contains(c));
        good.then_some((host, port))?
    };
    // `mqtt://host:` has a colon and no port: a slip, not a wish for the default.
    let port = match port {
        "" if text.ends_with(':') => return None,
        "" => MQTT_PORT,
        digits if digits.bytes().all(|b| b.is_ascii_digit()) => {
            digits.parse().ok().filter(|p| *p > 0)?
        }
        _ => return None,
    };
    Some((host.to_owned(), port))
}

/// The password and where it was read: as a credential of the service manager if there is one of that
/// name, else as a file, counted from the folder of the settings file.
fn check_password(
    file: &Located<String>,
    base: &Path,
    environment: &Environment,
    problems: &mut Problems,
) -> Option<(PathBuf, Secret)> {
    let credential = environment
        .credentials_directory
        .as_ref()
        .filter(|_| !file.value.contains('/'))
        .map(|directory| directory.join(&file.value))
        .filter(|path| path.is_file());
    let guarded = credential.is_some();
    let path = credential.unwrap_or_else(|| base.join(&file.value));
    match read_secret(&path, guarded) {
        Ok(secret) => Some((path, secret)),
        Err(fault) => {
            let found = format!("{fault} at {}", quoted(&path.display().to_string()));
            let allowed = "a text file that only its owner may read (mode 600 or 400)";
            problems.refuse(&file.place, &file.key, found, allowed);
            None
        }
    }
}

fn check_topic_root(root: Option<&Located<String>>, problems: &mut Problems) -> String {
    let Some(root) = root else { return TOPIC_ROOT_DEFAULT.to_owned() };
    let text = &root.value;
    let good = text.len() <= TOPIC_ROOT_BYTES_MAX
        && text.split('/').all(|level| !level.is_empty())
        && !text.starts_with('$')
        && !text.contains(|c: char| c.is_control() || "+#{}".contains(c));
    if !good {
        let allowed = "topic levels such as \"asfound\" or \"site/asfound\", without + # { }, empty levels or $ in front";
        problems.refuse(&root.place, &root.key, quoted(text), allowed);
        return TOPIC_ROOT_DEFAULT.to_owned();
    }
    text.clone()
}

pub(super) fn check_store(raw: &RawStore, base: &Path, problems: &mut Problems) -> PathBuf {
    let Some(directory) = &raw.directory else { return PathBuf::from(STORE_DIRECTORY_DEFAULT) };
    if directory.value.is_empty() || directory.value.contains('\0') {
        let found = quoted(&directory.value);
        problems.refuse(&directory.place, &directory.key, found, "a folder");
    }
    base.join(&directory.value)
}

pub(super) fn check_alerts(raw: &RawAlerts, problems: &mut Problems) -> f64 {
    let Some(rate) = &raw.false_alerts_per_year else { return FALSE_ALERTS_PER_YEAR_DEFAULT };
    if !(0.01..=10_000.0).contains(&rate.value) {
        let found = format!("the number {}", rate.value);
        problems.refuse(&rate.place, &rate.key, found, "a number from 0.01 to 10000");
    }
    rate.value
}

/// Foreign text in quotation marks, ready to show.
pub(super) fn quoted(text: &str) -> String {
    format!("\"{}\"", Shown(text, 80))
}

#[cfg(test)]
mod tests {
    use super::*;

    fn check(text: &str, expected: Option<(&str, u16)>) {
        let expected = expected.map(|(host, port)| (host.to_owned(), port));
        assert_eq!(host_and_port(text), expected, "{text}");
    }

    #[test]
    fn hosts_and_ports_are_read() {
        check("broker.plant.example", Some(("broker.plant.example", 1883)));
        check("127.0.0.1:21883", Some(("127.0.0.1", 21883)));
        check("[::1]", Some(("::1", 1883)));
        check("[2001:db8::7]:1884", Some(("2001:db8::7", 1884)));
    }

    #[test]
    fn addresses_with_slips_are_refused() {
        for text in [
            "",
            ":1883",
            "host:",
            "host:0",
            "host:65536",
            "host:+1",
            "host:1883/x",
            "::1",
            "[::1",
            "[::1]x",
            "[host]",
            "ho st",
            "host?x=1",
            "[::1]:",
        ] {
            check(text, None);
        }
    }
}
