//! The project's main numbers held against something outside it: values certified by NIST, and
//! textbook formulas worked out with 80 decimal digits. `tests/reference/README.md` tells where each
//! number comes from. Run with `--nocapture` to see how many digits agree.

#![expect(clippy::unwrap_used, reason = "a helper of a test may fail as the test may")]

use asfound::drift::choose::{aicc, aicc_classical, choose};
use asfound::drift::family::Family;
use asfound::drift::fit::{Fit, FitOutcome, fit};
use asfound::drift::forecast::sandwich;
use asfound::drift::serial::{PHI_MAX, durbin_watson, effective_count, lag_correlation};
use serde_json::Value;
use std::path::{Path, PathBuf};

#[path = "outside_truth/further.rs"]
mod further;
#[path = "outside_truth/program.rs"]
mod program;
#[path = "outside_truth/tails.rs"]
mod tails;
#[path = "outside_truth/univariate.rs"]
mod univariate;

/// A family with the fewest digits that must agree in its coefficients, and in its sums of squares.
type Digits = (Family, f64, f64);

/// Families that the references solve and the library fits. The power curve's coefficients agree less:
/// the sum of squares, at its least, hardly changes with them. DanWood has six rows, too few for a
/// cubic's AICc.
const NORRIS: [Digits; 5] = [
    (Family::Linear, 11.0, 12.0),
    (Family::Logarithmic, 12.0, 13.0),
    (Family::Power, 9.5, 12.0),
    (Family::Quadratic, 11.0, 12.0),
    (Family::Cubic, 11.0, 12.0),
];
const DANWOOD: [Digits; 4] = [
    (Family::Linear, 12.0, 12.0),
    (Family::Logarithmic, 12.0, 12.0),
    (Family::Power, 9.5, 12.0),
    (Family::Quadratic, 12.0, 12.0),
];
const MISRA1A: [Digits; 7] = [
    (Family::Linear, 12.5, 13.0),
    (Family::Logarithmic, 13.0, 13.0),
    (Family::Power, 11.0, 13.0),
    (Family::OffsetPower, 11.0, 12.5),
    (Family::Exponential, 11.0, 12.5),
    (Family::Quadratic, 11.5, 12.5),
    (Family::Cubic, 9.5, 12.0),
];
/// The line that NoInt1 is, and the families that contain it, are held apart.
const NOINT1: [Digits; 2] = [(Family::Logarithmic, 12.0, 12.0), (Family::Power, 11.0, 11.5)];
/// R² of the logarithmic and the power curve is 5e-4: three digits go in 1 − RSS/TSS.
const ENSO: [Digits; 5] = [
    (Family::Linear, 12.5, 12.5),
    (Family::Logarithmic, 12.0, 11.5),
    (Family::Power, 11.0, 11.5),
    (Family::Quadratic, 12.5, 12.5),
    (Family::Cubic, 12.0, 12.5),
];
/// The curves that bend leave some 0.01 % of y: four digits of y go in the residuals.
const PONTIUS: [Digits; 7] = [
    (Family::Linear, 11.5, 12.5),
    (Family::Logarithmic, 13.0, 13.0),
    (Family::Power, 11.0, 12.0),
    (Family::OffsetPower, 11.0, 12.0),
    (Family::Exponential, 11.0, 12.0),
    (Family::Quadratic, 10.5, 12.0),
    (Family::Cubic, 10.0, 12.0),
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

/// The data sets through which curves go, with the families to be held against them.
fn every_series() -> Vec<(&'static str, Series, Vec<Digits>)> {
    vec![
        ("Norris", series("norris"), NORRIS.to_vec()),
        ("DanWood", series("danwood"), DANWOOD.to_vec()),
        ("Misra1a", series("misra1a"), MISRA1A.to_vec()),
        ("NoInt1", series("noint1"), NOINT1.to_vec()),
        ("ENSO", series("enso"), ENSO.to_vec()),
        ("Pontius", series("pontius"), PONTIUS.to_vec()),
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
    for (name, series, _) in every_series() {
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
    for (name, series, families) in every_series() {
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
    for (name, series, families) in every_series() {
        let spacing = vec![1.0; series.x.len()];
        for (family, digits, _) in families {
            let fit = series.fit(family);
            let (covariance, noise) = sandwich(&fit, &series.x, &spacing, 0.0).unwrap();
            check(&format!("{name} {} noise", family.name()), noise, fit.residual_sd.powi(2), 9.0);
            for at in ["mid", "ahead"] {
                let reference = |key: &str| series.computed(family, &format!("{at}.{key}"));
                let x: f64 = reference("x").parse().unwrap();
                let g = fit.gradient(x);
                let mut variance = 0.0;
                for (i, gi) in g.iter().enumerate() {
                    for (k, gk) in g.iter().enumerate() {
                        variance += gi * covariance[(i, k)] * gk;
                    }
                }
                let what = format!("{name} {} {at}", family.name());
                check_text(&what, fit.value(x), reference("value"), digits);
                // Normal equations: up to half the digits may go on the polynomials.
                check_text(&what, variance.sqrt(), reference("standard_error"), 7.0);
            }
        }
    }
}

// ---- Choice -----------------------------------------------------------------------------------

#[test]
fn aicc_is_that_of_the_textbook() {
    for (name, series, families) in every_series() {
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
    for (name, series, families) in every_series() {
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
    for (name, series, families) in every_series() {
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
    for (name, series, families) in every_series() {
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
                // Correlations are held within ± PHI_MAX.
                let want = want.clamp(-PHI_MAX, PHI_MAX);
                let what = format!("{name} {} lag 1, {parameters} fitted", family.name());
                check(&what, got, want, digits - 1.5);
            }
        }
    }
}

#[test]
fn dependence_widens_the_line_as_the_written_out_matrix_says() {
    // NoInt1 is an exact line: nothing is left that could depend.
    for (name, series, _) in every_series().into_iter().filter(|(name, ..)| *name != "NoInt1") {
        let reference = &series.reference["computed"]["linear-dependent"];
        let fit = series.fit(Family::Linear);
        let phi = text_at(reference, "phi").parse().unwrap();
        let spacing = vec![1.0; series.x.len()];
        let (covariance, noise) = sandwich(&fit, &series.x, &spacing, phi).unwrap();
        check_text(&format!("{name} noise"), noise, text_at(reference, "noise_variance"), 10.0);
        for (k, key) in ["standard_error.a", "standard_error.b"].into_iter().enumerate() {
            let got = fit.standard_errors_of(&covariance)[k];
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
