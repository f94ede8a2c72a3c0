//! The shipped settings, the layers, and what is shown of settings. Mistakes: `tests/settings_mistakes.rs`.

use super::raw;
use super::*;
use crate::drift::family::Family;
use crate::service::intake::{PayloadFormat, Pointer, Reference};
use crate::watch::settings::{Statement, WatchSettings};
use crate::watch::time::{DAY_US, EventTime, ShellTime, Span};

const SHIPPED: &str = include_str!("../../../config/asfound.toml");

const LEAST: &str = "site.name = \"saltmarsh\"\nbroker.url = \"mqtt://broker.example\"\n\
                     [[watch]]\ntopic = \"plant/{tag}\"\nunit = \"bar\"\n";

fn environment(variables: &[(&str, &str)]) -> Environment {
    let variables = variables.iter().map(|(k, v)| ((*k).to_owned(), (*v).to_owned())).collect();
    Environment { variables, credentials_directory: None }
}

fn read(text: &str, variables: &[(&str, &str)]) -> Settings {
    Settings::read(text, Path::new("/etc/asfound/asfound.toml"), &environment(variables))
        .unwrap_or_else(|problems| panic!("{problems}"))
}

#[test]
fn defaults_are_the_documented_ones() {
    let settings = read(LEAST, &[]);
    let expected = WatchSettings {
        measured_as: "unit = \"bar\"; payload = { format = \"number\" }".to_owned(),
        unit: "bar".to_owned(),
        tolerance: None,
        window_span: Span(90 * DAY_US),
        window_points: 512,
        bin: None,
        refit_every: Span(DAY_US / 4),
        lateness: Span(0),
        families: vec![Family::Logarithmic, Family::Power, Family::Linear],
        statement: None,
        calibrated: None,
        silent_after: Span(9 * DAY_US),
    };
    assert_eq!(settings.site.watches, [expected]);
    assert!((settings.site.false_alerts_per_year - 12.0).abs() < f64::EPSILON);
    assert_eq!((settings.broker.host.as_str(), settings.broker.port), ("broker.example", 1883));
    assert_eq!(settings.broker.client_id, "asfound-saltmarsh");
    assert_eq!(settings.own_topics(), "asfound/saltmarsh");
    assert_eq!(settings.store_directory, Path::new("/var/lib/asfound"));
    let route = &settings.routes[0];
    assert_eq!(route.channel.as_str(), "{tag}");
    assert_eq!((&route.payload, &route.reference), (&PayloadFormat::Number, &Reference::None));
}

#[test]
fn a_short_window_shortens_what_depends_on_it() {
    let settings = read(&format!("{LEAST}window.span = \"2h\"\n"), &[]);
    let watch = &settings.site.watches[0];
    assert_eq!((watch.refit_every, watch.silent_after), (Span(DAY_US / 12), Span(DAY_US / 24)));
}

#[test]
fn every_key_of_a_watch_arrives() {
    let text = LEAST.to_owned()
        + "channel = \"x-{tag}\"\npayload = { format = \"json\", value = \"\", time = \"/a~1b\" }\n\
           reference = { pointer = \"/r\" }\ntolerance = 1\n\
           window = { span = \"P10D\", points = 60, bin = \"1h\" }\nrefit_every = \"1d\"\n\
           lateness = \"1h\"\nfamilies = [\"exponential\", \"offset-power\"]\n\
           next_visit = 2026-09-01T08:00:00+02:00\ncalibrated = \"2026-03-01T08:00:00Z\"\n\
           silent_after = \"2d\"\n";
    let settings = read(&text, &[]);
    let expected = WatchSettings {
        measured_as:
            "unit = \"bar\"; payload = { format = \"json\", value = \"\", time = \"/a~1b\" }; \
                      reference = { pointer = \"/r\" }; bin = \"1h\""
                .to_owned(),
        unit: "bar".to_owned(),
        tolerance: Some(1.0),
        window_span: Span(10 * DAY_US),
        window_points: 60,
        bin: Some(Span(DAY_US / 24)),
        refit_every: Span(DAY_US),
        lateness: Span(DAY_US / 24),
        families: vec![Family::Exponential, Family::OffsetPower],
        // 2026-09-01T06:00:00Z and 2026-03-01T08:00:00Z, from the calendar.
        statement: Some(Statement::NextVisit(EventTime(1_788_242_400_000_000))),
        calibrated: Some(EventTime(1_772_352_000_000_000)),
        silent_after: Span(2 * DAY_US),
    };
    assert_eq!(settings.site.watches, [expected]);
    let pointer = |text| Pointer::parse(text).unwrap();
    let format = PayloadFormat::Json { value: pointer(""), time: Some(pointer("/a~1b")) };
    assert_eq!(settings.routes[0].payload, format);
    assert_eq!(settings.routes[0].reference, Reference::Pointer(pointer("/r")));
}

#[test]
fn the_environment_goes_before_the_file() {
    let settings = read(
        LEAST,
        &[
            ("ASFOUND__BROKER__URL", "mqtt://[::1]:2883"),
            ("ASFOUND__ALERTS__FALSE_ALERTS_PER_YEAR", "4.5"),
            ("ASFOUND__STORE__DIRECTORY", "data"),
            ("ASFOUND__BROKER__CLIENT_ID", "1234"),
        ],
    );
    assert_eq!((settings.broker.host.as_str(), settings.broker.port), ("::1", 2883));
    assert!((settings.site.false_alerts_per_year - 4.5).abs() < f64::EPSILON);
    assert_eq!(settings.store_directory, Path::new("/etc/asfound/data"));
    assert_eq!(settings.broker.client_id, "1234");
}

#[test]
fn settings_read_back_from_what_is_shown() {
    let escapes = LEAST.replace("unit = \"bar\"", "unit = \"µ\\\"\\\\°\"");
    for text in [SHIPPED, LEAST, &escapes, &LEAST.replace("broker.example", "[2001:db8::7]:1884")] {
        let settings = read(text, &[]);
        let shown = settings.shown();
        let again = read(&shown, &[]);
        assert_eq!(again.site, settings.site, "{shown}");
        assert_eq!(again.routes, settings.routes, "{shown}");
        assert_eq!(again.shown(), shown);
    }
}

#[test]
fn the_shipped_settings_are_good_and_write_the_defaults_as_they_are() {
    let plain = read(SHIPPED, &[]).shown();
    // The commented lines that state a default: taking the comment sign off must change nothing.
    let stated = [
        "client_id",
        "topic_root",
        "directory",
        "false_alerts_per_year",
        "channel",
        "refit_every",
        "lateness",
        "families",
        "silent_after",
    ];
    let mut text = SHIPPED.to_owned();
    for key in stated {
        let comment = format!("\n# {key} = ");
        assert_eq!(text.matches(&comment).count(), 1, "{key}");
        text = text.replace(&comment, &format!("\n{key} = "));
    }
    assert_eq!(read(&text, &[]).shown(), plain);
}

#[test]
fn every_key_stands_in_the_shipped_settings() {
    let text = "zz = 1\n[site]\nzz = 1\n[broker]\nzz = 1\n[store]\nzz = 1\n[alerts]\nzz = 1\n\
                [[watch]]\nzz = 1\npayload = { zz = 1 }\nreference = { zz = 1 }\nwindow = { zz = 1 }\n";
    let problems = Settings::read(text, Path::new("x.toml"), &Environment::default()).unwrap_err();
    let mut keys = 0;
    for problem in problems.list() {
        let Fault::Unknown { known, .. } = &problem.fault else { continue };
        for key in known {
            keys += 1;
            let forms = [
                format!("\n{key} = "),
                format!("\n# {key} = "),
                format!("[{key}]"),
                format!("\n#   {key} "),
                format!("{{ {key} = "),
                format!(", {key} = "),
            ];
            assert!(forms.iter().any(|form| SHIPPED.contains(form)), "{}: {key}", problem.key);
        }
    }
    // site, broker, store, alerts, watch and what is in them: none was missed by a table not reached.
    assert_eq!(keys, 5 + 1 + 5 + 1 + 1 + 14 + 3 + 2 + 3);
}

#[test]
fn the_password_is_read_from_its_file_and_never_shown() {
    use std::os::unix::fs::PermissionsExt as _;
    let folder = tempfile::tempdir().unwrap();
    let credentials = tempfile::tempdir().unwrap();
    let file = folder.path().join("asfound.toml");
    let password = folder.path().join("password");
    let broker = "broker = { url = \"mqtt://h\", username = \"u\", password_file = \"password\" }";
    std::fs::write(&file, LEAST.replace("broker.url = \"mqtt://broker.example\"", broker)).unwrap();
    std::fs::write(&password, "canary-7\n").unwrap();
    let load = |directory: Option<&Path>| {
        let credentials_directory = directory.map(Path::to_owned);
        Settings::load(&file, &Environment { variables: Default::default(), credentials_directory })
    };

    std::fs::set_permissions(&password, std::fs::Permissions::from_mode(0o644)).unwrap();
    let refused = load(None).unwrap_err().to_string();
    assert!(refused.contains("others may read or write (mode 644)"), "{refused}");

    std::fs::set_permissions(&password, std::fs::Permissions::from_mode(0o600)).unwrap();
    let settings = load(None).unwrap();
    assert_eq!(settings.broker.password.as_ref().map(Secret::expose), Some("canary-7"));
    let all = format!("{settings:?} {} {:?}", settings.shown(), settings.cautions(ShellTime(0)));
    assert!(all.contains("its content is withheld") && !all.contains("canary"), "{all}");

    std::fs::write(credentials.path().join("password"), "from the manager").unwrap();
    let settings = load(Some(credentials.path())).unwrap();
    assert_eq!(settings.broker.password.as_ref().map(Secret::expose), Some("from the manager"));
}

#[test]
fn files_that_are_not_text_name_the_line() {
    let folder = tempfile::tempdir().unwrap();
    let file = folder.path().join("asfound.toml");
    std::fs::write(&file, b"[site]\nname = \"\xff\"\n").unwrap();
    let refused = Settings::load(&file, &Environment::default()).unwrap_err().to_string();
    assert!(
        refused.ends_with("asfound.toml:2: found bytes that are not UTF-8; allowed: UTF-8 text")
    );
    std::fs::write(&file, vec![b'#'; 2 << 20]).unwrap();
    let refused = Settings::load(&file, &Environment::default()).unwrap_err().to_string();
    assert!(
        refused.ends_with("found more than 1 MiB; allowed: a file of at most 1 MiB"),
        "{refused}"
    );
}

#[test]
fn the_number_of_watches_is_bounded() {
    let watch = "[[watch]]\ntopic = \"plant/{tag}\"\nunit = \"bar\"\n";
    let text = LEAST.to_owned() + &watch.repeat(raw::WATCHES_MAX);
    let refused = Settings::read(&text, Path::new("x.toml"), &Environment::default()).unwrap_err();
    assert_eq!(
        refused.to_string(),
        "x.toml: watch: found 257 watches; allowed: at most 256 watches"
    );
}

#[test]
fn a_flood_of_problems_is_counted_not_printed() {
    let text: String = (0..500).map(|i| format!("key{i} = 1\n")).collect();
    let refused = Settings::read(&text, Path::new("x.toml"), &Environment::default()).unwrap_err();
    assert_eq!((refused.list().len(), refused.count()), (100, 503));
    assert!(refused.to_string().ends_with("\nand 403 more"));
}

#[test]
fn only_a_loopback_connection_goes_without_a_caution() {
    for (host, expected) in [("127.0.0.1", 0), ("localhost", 0), ("[::1]", 0), ("10.0.0.7", 1)] {
        let settings = read(&LEAST.replace("broker.example", host), &[]);
        assert_eq!(settings.cautions(ShellTime(0)).len(), expected, "{host}");
    }
}

proptest::proptest! {
    #[test]
    fn no_text_brings_the_reader_down(text in "(\\[{0,2}(site|broker|watch|window)?\\]{0,2}|[a-z_]{0,6}|[=.{}\\[\\]\"'#,0-9 -]|\\n|\\PC){0,60}") {
        let _ = Settings::read(&text, Path::new("x.toml"), &Environment::default());
    }
}
