//! The project's main numbers held against something outside it: values certified by NIST, and
//! textbook formulas worked out with 80 decimal digits. `tests/reference/README.md` tells where each
//! number comes from. Run with `--nocapture` to see how many digits agree.

use asfound::drift::choose::{aicc, aicc_classical, choose};
use asfound::drift::family::Family;
use asfound::drift::fit::{Fit, FitOutcome, fit};
use asfound::drift::forecast::sandwich;
use asfound::drift::serial::{durbin_watson, effective_count, lag_correlation};
use asfound::drift::tails::{normal_q, normal_q_above, student_q};
use serde_json::Value;
use std::collections::HashSet;
use std::fmt::Write as _;
use std::path::{Path, PathBuf};
use std::process::Command;

/// Families that the references solve and the library fits, with the fewest digits that must agree:
/// in the coefficients, and in sums of squares of residuals. The first are fewer for the power curve,
/// where a search for the least sum of squares cannot see half of them. DanWood has six rows, too few
/// for a cubic's AICc.
const NORRIS: [(Family, f64, f64); 5] = [
    (Family::Linear, 11.0, 12.0),
    (Family::Logarithmic, 12.0, 13.0),
    (Family::Power, 9.5, 12.0),
    (Family::Quadratic, 11.0, 12.0),
    (Family::Cubic, 11.0, 12.0),
];
const DANWOOD: [(Family, f64, f64); 4] = [
    (Family::Linear, 12.0, 12.0),
    (Family::Logarithmic, 12.0, 12.0),
    (Family::Power, 9.5, 12.0),
    (Family::Quadratic, 12.0, 12.0),
];

/// A data set with its reference values.
struct Series {
    x: Vec<f64>,
    y: Vec<f64>,
    reference: Value,
}

fn folder() -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR")).join("tests/reference")
}

fn series(name: &str) -> Series {
    let mut rows = csv::Reader::from_path(folder().join(format!("nist_{name}.csv"))).unwrap();
    let (x, y) = rows.deserialize::<(f64, f64)>().map(Result::unwrap).unzip();
    let text = std::fs::read_to_string(folder().join("nist.json")).unwrap();
    let all: Value = serde_json::from_str(&text).unwrap();
    Series { x, y, reference: all[name].clone() }
}

impl Series {
    fn fit(&self, family: Family) -> Fit {
        fitted(family, &self.x, &self.y)
    }

    fn certified(&self, key: &str) -> &str {
        text_at(&self.reference["certified"], key)
    }

    fn computed(&self, family: Family, key: &str) -> &str {
        text_at(&self.reference["computed"][family.name()], key)
    }

    fn residuals(&self, fit: &Fit) -> Vec<f64> {
        self.x.iter().zip(&self.y).map(|(&x, &y)| y - fit.family.value(&fit.theta, x)).collect()
    }
}

fn text_at<'a>(values: &'a Value, key: &str) -> &'a str {
    values[key].as_str().unwrap_or_else(|| panic!("no reference value {key}"))
}

fn fitted(family: Family, x: &[f64], y: &[f64]) -> Fit {
    match fit(family, x, y, false) {
        FitOutcome::Fitted(fit) => *fit,
        other => panic!("{family:?}: {other:?}"),
    }
}

/// Both data sets with the families to be held against them.
fn both() -> [(&'static str, Series, Vec<(Family, f64, f64)>); 2] {
    [
        ("Norris", series("norris"), NORRIS.to_vec()),
        ("DanWood", series("danwood"), DANWOOD.to_vec()),
    ]
}

fn count(n: usize) -> f64 {
    f64::from(u32::try_from(n).unwrap())
}

/// Holds a number against its reference: −log10 of the relative error must be at least `digits`.
fn check(what: &str, got: f64, want: f64, digits: f64) {
    let error = if want.abs() > 0.0 { ((got - want) / want).abs() } else { got.abs() };
    let agree = -error.max(1e-17).log10();
    println!("{agree:5.1} digits  {what}: {got:e}, reference {want:e}");
    assert!(agree >= digits, "{what}: {got:e} against {want:e}, {agree:.1} digits of {digits}");
}

/// The same against a decimal string of the reference file.
fn check_text(what: &str, got: f64, want: &str, digits: f64) {
    check(what, got, want.parse().unwrap(), digits);
}

#[test]
#[should_panic(expected = "5.0 digits of 5.5")]
fn a_number_wrong_in_its_fifth_digit_is_refused() {
    check("wrong", 1.000_01, 1.0, 5.5);
}

// ---- Curves -----------------------------------------------------------------------------------

#[test]
fn line_through_norris_has_its_certified_values() {
    // NIST StRD, Norris, certified values.
    let norris = series("norris");
    let fit = norris.fit(Family::Linear);
    for (key, got) in [
        ("b0", fit.theta[0]),
        ("b0_se", fit.standard_errors[0]),
        ("b1", fit.theta[1]),
        ("b1_se", fit.standard_errors[1]),
        ("residual_ss", fit.residual_ss),
        ("residual_sd", fit.residual_sd),
        ("r_squared", fit.r_squared.unwrap()),
    ] {
        check_text(key, got, norris.certified(key), 11.0);
    }
    assert_eq!((fit.n, fit.degrees_of_freedom), (36, 34));
}

#[test]
fn power_curve_through_danwood_has_its_certified_values() {
    // NIST StRD, DanWood, certified values, given to 11 digits.
    let danwood = series("danwood");
    let fit = danwood.fit(Family::Power);
    for (key, got) in [
        ("b1", fit.theta[0]),
        ("b1_se", fit.standard_errors[0]),
        ("b2", fit.theta[1]),
        ("b2_se", fit.standard_errors[1]),
        ("residual_ss", fit.residual_ss),
        ("residual_sd", fit.residual_sd),
    ] {
        check_text(key, got, danwood.certified(key), 9.5);
    }
    assert_eq!((fit.n, fit.degrees_of_freedom), (6, 4));
}

#[test]
fn power_fit_starts_from_the_line_through_the_logarithms() {
    for (name, series, _) in both() {
        let start = series.fit(Family::Power).start.expect("every y is above 0");
        for (k, key) in ["start.a", "start.b"].into_iter().enumerate() {
            let want = series.computed(Family::Power, key);
            check_text(&format!("{name} {key}"), start[k], want, 12.0);
        }
    }
}

#[test]
fn the_start_is_not_the_answer() {
    // On DanWood the transformed line is off by 2.5 % in a: the refinement must have moved.
    let fit = series("danwood").fit(Family::Power);
    let start = fit.start.unwrap();
    assert!((start[0] / fit.theta[0] - 1.0).abs() > 0.02, "{start:?} {:?}", fit.theta);
}

#[test]
fn every_family_agrees_with_its_80_digit_solution() {
    for (name, series, families) in both() {
        for (family, digits, digits_of_residuals) in families {
            let fit = series.fit(family);
            let what = |key: &str| format!("{name} {} {key}", family.name());
            for (k, coefficient) in family.coefficient_names().iter().enumerate() {
                for (group, got) in
                    [("estimate", fit.theta[k]), ("standard_error", fit.standard_errors[k])]
                {
                    let key = format!("{group}.{coefficient}");
                    check_text(&what(&key), got, series.computed(family, &key), digits);
                }
            }
            for (key, got) in [
                ("residual_ss", fit.residual_ss),
                ("residual_sd", fit.residual_sd),
                ("r_squared", fit.r_squared.unwrap()),
            ] {
                check_text(&what(key), got, series.computed(family, key), digits_of_residuals);
            }
        }
    }
}

#[test]
fn scaled_and_reflected_danwood_has_scaled_and_reflected_coefficients() {
    // y = a x^b with x a thousand times larger and y reflected: a becomes −a 1000^−b, b stays, and so
    // do the residuals but for their sign. Certified values of NIST StRD DanWood throughout.
    let danwood = series("danwood");
    let x: Vec<f64> = danwood.x.iter().map(|v| v * 1000.0).collect();
    let y: Vec<f64> = danwood.y.iter().map(|v| -v).collect();
    let fit = fitted(Family::Power, &x, &y);
    let certified = |key: &str| danwood.certified(key).parse::<f64>().unwrap();
    let b = certified("b2");
    // An error of b in its last certified digit (5e-12 of itself) is one of 1000^b in its tenth.
    check("a", fit.theta[0], -certified("b1") * 1000.0_f64.powf(-b), 9.0);
    check("b", fit.theta[1], b, 9.5);
    check("standard error of b", fit.standard_errors[1], certified("b2_se"), 9.5);
    check("residual sum of squares", fit.residual_ss, certified("residual_ss"), 9.5);
    check("residual sd", fit.residual_sd, certified("residual_sd"), 9.5);
}

#[test]
fn curve_and_its_standard_error_agree_inside_and_beyond_the_data() {
    for (name, series, families) in both() {
        let spacing = vec![1.0; series.x.len()];
        for (family, digits, _) in families {
            let fit = series.fit(family);
            let (covariance, noise) = sandwich(&fit, &series.x, &spacing, 0.0).unwrap();
            check(&format!("{name} {} noise", family.name()), noise, fit.residual_sd.powi(2), 9.0);
            for at in ["mid", "ahead"] {
                let reference = |key: &str| series.computed(family, &format!("{at}.{key}"));
                let x: f64 = reference("x").parse().unwrap();
                let g = family.gradient(&fit.theta, x);
                let mut variance = 0.0;
                for (i, gi) in g.iter().enumerate() {
                    for (k, gk) in g.iter().enumerate() {
                        variance += gi * covariance[(i, k)] * gk;
                    }
                }
                let what = format!("{name} {} {at}", family.name());
                check_text(&what, family.value(&fit.theta, x), reference("value"), digits);
                // Normal equations: up to half the digits may go on the polynomials.
                check_text(&what, variance.sqrt(), reference("standard_error"), 7.0);
            }
        }
    }
}

// ---- Choice -----------------------------------------------------------------------------------

#[test]
fn aicc_is_that_of_the_textbook() {
    for (name, series, families) in both() {
        for (family, _, digits) in families {
            let fit = series.fit(family);
            let want = series.computed(family, "aicc");
            let what = format!("{name} {} AICc", family.name());
            check_text(&what, aicc_classical(&fit).unwrap(), want, digits);
        }
    }
}

#[test]
fn differences_and_weights_follow_from_the_reference_aicc() {
    // Akaike weight exp(−Δ/2) over its sum: Burnham and Anderson (2002), section 2.9, from memory.
    // All data count as independent here: n_effective = n.
    for (name, series, families) in both() {
        let fits: Vec<Fit> = families.iter().map(|&(family, ..)| series.fit(family)).collect();
        let values: Vec<f64> = families
            .iter()
            .map(|&(family, ..)| series.computed(family, "aicc").parse().unwrap())
            .collect();
        let least = values.iter().copied().fold(f64::INFINITY, f64::min);
        let raw: Vec<f64> = values.iter().map(|v| (-0.5 * (v - least)).exp()).collect();
        let choice = choose(&fits, count(series.x.len()), None);
        check("AICc of the chosen", values[choice.chosen], least, 15.0);
        for (i, &(family, ..)) in families.iter().enumerate() {
            let what = format!("{name} {}", family.name());
            check(&what, choice.differences[i].unwrap(), values[i] - least, 9.0);
            check(&what, choice.weights[i], raw[i] / raw.iter().sum::<f64>(), 9.0);
        }
    }
}

#[test]
fn norris_is_a_line_and_danwood_a_power() {
    for (name, expected) in [("norris", Family::Linear), ("danwood", Family::Power)] {
        let series = series(name);
        let fits: Vec<Fit> = [Family::Linear, Family::Logarithmic, Family::Power]
            .iter()
            .map(|&family| series.fit(family))
            .collect();
        let choice = choose(&fits, count(series.x.len()), None);
        assert_eq!(fits[choice.chosen].family, expected, "{}", choice.why);
        assert_eq!(expected.name(), series.certified("family"));
        assert!(aicc(&fits[choice.chosen], count(series.x.len())).is_some());
    }
}

// ---- Dependence -------------------------------------------------------------------------------

#[test]
fn durbin_watson_agrees_with_its_80_digit_value() {
    for (name, series, families) in both() {
        for (family, digits, _) in families {
            let got = durbin_watson(&series.residuals(&series.fit(family)));
            let want = series.computed(family, "durbin_watson");
            check_text(&format!("{name} {} Durbin-Watson", family.name()), got, want, digits - 1.0);
        }
    }
}

#[test]
fn lag_correlation_is_the_sample_autocorrelation_with_its_known_bias_taken_off() {
    // E r = phi − 2 phi/n about a known mean, phi − (1 + 3 phi)/n about the sample's (Kendall 1954,
    // Marriott and Pope 1954, from memory); the sum over n − 1 pairs counts n/(n − 1) fold.
    for (name, series, families) in both() {
        let n = count(series.x.len());
        for (family, digits, _) in families {
            let mut e = series.residuals(&series.fit(family));
            let mean = e.iter().sum::<f64>() / n;
            e.iter_mut().for_each(|v| *v -= mean);
            let r: f64 = series.computed(family, "lag_1").parse().unwrap();
            let raw = r * n / (n - 1.0);
            let spacing = vec![1.0; e.len()];
            for (parameters, want) in [(0, n * raw / (n - 2.0)), (1, (n * raw + 1.0) / (n - 3.0))] {
                let got = lag_correlation(&e, &spacing, parameters);
                // No correlation is below −1, and none above 0.97 is told apart from 0.97.
                let want = want.clamp(-1.0, 0.97);
                let what = format!("{name} {} lag 1, {parameters} fitted", family.name());
                check(&what, got, want, digits - 1.5);
            }
        }
    }
}

#[test]
fn dependence_widens_the_line_as_the_written_out_matrix_says() {
    for (name, series, _) in both() {
        let reference = &series.reference["computed"]["linear-dependent"];
        let fit = series.fit(Family::Linear);
        let phi = text_at(reference, "phi").parse().unwrap();
        let spacing = vec![1.0; series.x.len()];
        let (covariance, noise) = sandwich(&fit, &series.x, &spacing, phi).unwrap();
        check_text(&format!("{name} noise"), noise, text_at(reference, "noise_variance"), 10.0);
        for (k, key) in ["standard_error.a", "standard_error.b"].into_iter().enumerate() {
            let got = covariance[(k, k)].sqrt();
            check_text(&format!("{name} {key}"), got, text_at(reference, key), 10.0);
        }
    }
}

#[test]
fn effective_count_is_how_much_the_mean_of_a_dependent_series_is_worth() {
    // From the definition: Var(mean)/σ² = (1 + 2 Σ (1 − k/n) phi^k)/n for correlation phi^k at lag k;
    // the formula of Bayley and Hammersley is its limit for long series.
    let n = 200_000;
    for phi in [0.0, 0.2, 0.5, 0.9] {
        let mut sum = 0.0;
        let mut power = 1.0;
        for k in 1..n {
            power *= phi;
            sum += (1.0 - count(k) / count(n)) * power;
        }
        let want = count(n) / (1.0 + 2.0 * sum);
        check(&format!("phi {phi}"), effective_count(n, phi), want, 4.0);
    }
}

// ---- Tails ------------------------------------------------------------------------------------

/// (distribution, freedom, deviate, sides, −log10 of the probability)
fn tails() -> Vec<(String, f64, f64, f64)> {
    let mut rows = csv::Reader::from_path(folder().join("tails.csv")).unwrap();
    rows.records()
        .map(|row| {
            let row = row.unwrap();
            let freedom = row[1].parse().unwrap_or(f64::INFINITY);
            (row[0].to_owned(), freedom, row[2].parse().unwrap(), minus_log10(&row[4]))
        })
        .collect()
}

/// −log10 of a decimal string that may lie below the smallest double.
fn minus_log10(text: &str) -> f64 {
    let (digits, exponent) = text.split_once('e').unwrap_or((text, "0"));
    -digits.parse::<f64>().unwrap().log10() - exponent.parse::<f64>().unwrap()
}

#[test]
fn normal_tail_agrees_with_its_20_digit_values() {
    let mut seen = 0;
    for (_, _, z, q_above) in tails().into_iter().filter(|row| row.0 == "normal") {
        // The documentation promises a relative error of q below 1e-4 from deviate 20 on.
        let digits = if z < 20.0 { 9.0 } else { 4.0 };
        check(&format!("above {z}"), normal_q_above(z), q_above, digits);
        check(&format!("beyond ±{z}"), normal_q(z), q_above - 2.0_f64.log10(), digits);
        seen += 1;
    }
    assert_eq!(seen, 10);
}

/// Fewest digits of Student's q: 2 % from ten degrees of freedom on, 4 % at four. The examination of
/// residuals never has fewer than fifty.
fn student_digits(freedom: f64) -> f64 {
    let share: f64 = if freedom >= 10.0 { 0.02 } else { 0.04 };
    -share.log10()
}

#[test]
fn student_tail_is_within_a_few_percent_of_its_20_digit_values() {
    let mut seen = 0;
    for (_, freedom, t, q) in tails().into_iter().filter(|row| row.0 == "student") {
        let what = format!("Student {freedom}, beyond ±{t}");
        check(&what, student_q(t, freedom), q, student_digits(freedom));
        seen += 1;
    }
    assert_eq!(seen, 18);
}

#[test]
fn p_values_of_coefficients_are_those_of_their_student_deviates() {
    for (name, series, _) in both() {
        for family in [Family::Linear, Family::Logarithmic] {
            let fit = series.fit(family);
            let freedom = count(fit.degrees_of_freedom);
            for (k, key) in ["p_value.a", "p_value.b"].into_iter().enumerate() {
                let got = student_q(fit.theta[k] / fit.standard_errors[k], freedom);
                let want = minus_log10(series.computed(family, key));
                let what = format!("{name} {} {key}", family.name());
                check(&what, got, want, student_digits(freedom));
            }
        }
    }
}

// ---- The whole program ------------------------------------------------------------------------

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

#[test]
fn standard_resistor_is_not_taken_for_a_plain_line() {
    // NIST/SEMATECH e-Handbook of Statistical Methods, 1.4.2.7: the residuals of a line through the
    // 1000 readings are strongly dependent. The readings are not part of this project.
    let Some(readings) = std::env::var_os("ASFOUND_STANDARD_RESISTOR") else {
        println!("not checked: ASFOUND_STANDARD_RESISTOR names no file, see tests/reference");
        return;
    };
    let folder = tempfile::tempdir().unwrap();
    let settings = settings(folder.path(), "ohm", "2200d", "refit_every = \"10d\"");
    let events = replay(&settings, folder.path(), Path::new(&readings), &[]);
    let mut ids = HashSet::new();
    for event in &events {
        assert_eq!(event["specversion"], "1.0", "{event}");
        assert!(ids.insert(event["id"].as_str().expect("an id")), "{event}");
    }
    let of_the_residuals = |event: &&Value| {
        event["type"] == "asfound.alert.raised"
            && ["step", "bend", "dependence"].iter().any(|kind| event["data"]["kind"] == *kind)
    };
    let raised = events.iter().filter(of_the_residuals).count();
    assert!(raised > 0, "{} events, none on the residuals", events.len());
}
