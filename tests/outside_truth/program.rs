//! The whole program against NIST: settings and a CSV in, events and findings out.

use super::{check, series};
use serde_json::Value;
use std::fmt::Write as _;
use std::path::Path;
use std::process::Command;

/// Settings for one instrument whose deviations are its readings.
fn settings(store: &Path, unit: &str, window: &str, further: &str) -> String {
    format!(
        r#"
[site]
name = "bench"
[broker]
url = "mqtt://127.0.0.1:18830"
[store]
directory = "{}"
[alerts]
false_alerts_per_year = 1
[[watch]]
topic = "lab/{{tag}}/value"
channel = "{{tag}}"
payload = {{ format = "json", value = "/v", time = "/ts" }}
unit = "{unit}"
window = {{ span = "{window}", points = 512 }}
look_ahead = "90d"
{further}
"#,
        store.display()
    )
}

/// Replays a file twice, checks that both runs say the same, and returns the lines as JSON.
fn replay(settings: &str, folder: &Path, readings: &Path, options: &[&str]) -> Vec<Value> {
    let config = folder.join("bench.toml");
    std::fs::write(&config, settings).unwrap();
    let run = || {
        let output = Command::new(env!("CARGO_BIN_EXE_asfound"))
            .args(["replay", "--json", "--config"])
            .arg(&config)
            .args(options)
            .arg(readings)
            .output()
            .unwrap();
        let errors = String::from_utf8(output.stderr).unwrap();
        assert!(output.status.success(), "{errors}");
        (String::from_utf8(output.stdout).unwrap(), errors)
    };
    let (first, second) = (run(), run());
    assert_eq!(first, second, "two runs on the same readings");
    println!("{}", first.1);
    first.0.lines().map(|line| serde_json::from_str(line).unwrap()).collect()
}

#[test]
fn replay_of_norris_finds_the_certified_line() {
    // x counts as days since calibration, y as the deviation; every reading asks for a refit. One more
    // reading, a month later on another channel, moves the clock past all lateness.
    let norris = series("norris");
    let calibrated: jiff::Timestamp = "2020-01-01T00:00:00Z".parse().unwrap();
    let at = |days: f64| {
        calibrated + jiff::SignedDuration::try_from_secs_f64((days * 86_400.0).round()).unwrap()
    };
    let mut text = String::from("time,channel,value\n");
    let mut before = f64::NAN;
    for (&x, &y) in norris.x.iter().zip(&norris.y) {
        // Of two readings of one time the second would count as a duplicate: it comes a second later.
        let x = if (x - before).abs() < 1e-9 { x + 1.0 / 86_400.0 } else { x };
        writeln!(text, "{},ozone,{y}", at(x)).unwrap();
        before = x;
    }
    writeln!(text, "{},other,0", at(1030.0)).unwrap();
    let folder = tempfile::tempdir().unwrap();
    let readings = folder.path().join("norris.csv");
    std::fs::write(&readings, text).unwrap();
    let further = "refit_every = \"1m\"\ncalibrated = \"2020-01-01T00:00:00Z\"";
    let settings = settings(folder.path(), "ppb", "1100d", further);
    let lines = replay(&settings, folder.path(), &readings, &["--findings"]);

    let last = lines
        .iter()
        .filter_map(|line| line.get("finding"))
        .rfind(|finding| finding["channel"] == "ozone")
        .expect("a finding of the channel");
    assert_eq!(last["window"]["points"], 36);
    let curve = &last["curve"];
    assert_eq!(curve["family"], "linear");
    let certified = |key: &str| norris.certified(key).parse::<f64>().unwrap();
    // The start is plain least squares; the second that one reading was moved costs some digits.
    check("start a", curve["start"]["a"].as_f64().unwrap(), certified("b0"), 5.0);
    check("start b", curve["start"]["b"].as_f64().unwrap(), certified("b1"), 8.0);
    // The curve itself is fitted robustly: within the certified standard errors of the certified line.
    for (name, key) in [("a", "b0"), ("b", "b1")] {
        let off = (curve["coefficients"][name].as_f64().unwrap() - certified(key)).abs();
        let se = certified(&format!("{key}_se"));
        println!("{name} is {:.2} standard errors from the certified value", off / se);
        assert!(off < se, "{name}: {off} against {se}");
    }
}
