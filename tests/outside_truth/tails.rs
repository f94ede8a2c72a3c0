//! Tail probabilities against values of 20 digits.

use super::{check, count, every_series, folder};
use asfound::drift::family::Family;
use asfound::drift::tails::{normal_score_two_sided, normal_score_upper, student_score_two_sided};

/// One row of `tails.csv`.
struct Tail {
    distribution: String,
    /// Degrees of freedom; not read for the normal distribution.
    freedom: f64,
    deviate: f64,
    /// −log10 of the probability.
    q: f64,
}

fn tails(distribution: &str) -> Vec<Tail> {
    let mut rows = csv::Reader::from_path(folder().join("tails.csv")).unwrap();
    rows.records()
        .map(|row| {
            let row = row.unwrap();
            Tail {
                distribution: row[0].to_owned(),
                freedom: row[1].parse().unwrap_or(f64::INFINITY),
                deviate: row[2].parse().unwrap(),
                q: minus_log10(&row[4]),
            }
        })
        .filter(|tail| tail.distribution == distribution)
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
    for Tail { deviate: z, q: q_above, .. } in tails("normal") {
        let beyond = q_above - 2.0_f64.log10();
        check(&format!("above {z}"), normal_score_upper(z), q_above, 9.0);
        check(&format!("beyond ±{z}"), normal_score_two_sided(z), beyond, 9.0);
        seen += 1;
    }
    assert_eq!(seen, 10);
}

/// Fewest digits of Student's q: 2 % from ten degrees of freedom on, 4 % at four. The examination of
/// residuals never has fewer than fifty; see `drift::tails` for how close it is there.
fn student_digits(freedom: f64) -> f64 {
    let share: f64 = if freedom >= 10.0 { 0.02 } else { 0.04 };
    -share.log10()
}

#[test]
fn student_tail_is_within_a_few_percent_of_its_20_digit_values() {
    let mut seen = 0;
    for Tail { freedom, deviate: t, q, .. } in tails("student") {
        let what = format!("Student {freedom}, beyond ±{t}");
        check(&what, student_score_two_sided(t, freedom), q, student_digits(freedom));
        seen += 1;
    }
    assert_eq!(seen, 18);
}

#[test]
fn p_values_of_coefficients_are_those_of_their_student_deviates() {
    for (name, series, families) in every_series() {
        let held = |family: &Family| families.iter().any(|(of, ..)| of == family);
        for family in [Family::Linear, Family::Logarithmic].into_iter().filter(held) {
            let fit = series.fit(family);
            let freedom = count(fit.degrees_of_freedom);
            for (k, key) in ["p_value.a", "p_value.b"].into_iter().enumerate() {
                let got = student_score_two_sided(fit.theta[k] / fit.standard_errors[k], freedom);
                let want = minus_log10(series.computed(family, key));
                let what = format!("{name} {} {key}", family.name());
                check(&what, got, want, student_digits(freedom));
            }
        }
    }
}
