//! Tail probabilities as scores: q = −log10(p), finite however far out, so that evidence of any
//! strength can be compared, stored and printed. Where statrs is accurate it does the work.

use statrs::function::erf::erfc;
use std::f64::consts::{LN_10, SQRT_2};

/// No score leaves this module larger: far beyond any threshold, and finite in JSON.
pub const SCORE_MAX: f64 = 1.0e6;

/// Above this deviate `erfc` nears the smallest normal double; the asymptotic series takes over.
/// There its first neglected term, 105/z⁸, is below 1e-10.
const ASYMPTOTIC_FROM: f64 = 36.0;

/// Returns −log10 of the two-sided tail P(|Z| ≥ |z|) of the standard normal distribution.
///
/// # Arguments
/// `z` — normal deviate; not-a-number counts as 0 (no evidence).
/// # Outcomes
/// A score in [0, [`SCORE_MAX`]].
/// # Numerics
/// `erfc` (statrs, good to about 1e-10) up to 36, beyond it ln P = −z²/2 − ln z + ln √(2/π) + ln(1 − 1/z² + 3/z⁴ − 15/z⁶).
/// # Source
/// M. Abramowitz and I. A. Stegun, Handbook of Mathematical Functions, 1964, 7.1.23.
pub fn normal_score_two_sided(z: f64) -> f64 {
    if z.is_nan() {
        return 0.0;
    }
    let z = z.abs();
    if z < ASYMPTOTIC_FROM {
        return (-erfc(z / SQRT_2).log10()).max(0.0);
    }
    far_score(z, 0.5 * std::f64::consts::FRAC_PI_2.ln())
}

/// Returns the two-sided normal tail P(|Z| ≥ |z|) itself; 0 from about |z| = 38 on.
///
/// # Arguments
/// `z` — normal deviate, sign ignored.
pub fn normal_two_sided(z: f64) -> f64 {
    erfc(z.abs() / SQRT_2)
}

/// Returns −log10 of the upper tail P(Z ≥ z) of the standard normal distribution.
///
/// # Arguments
/// `z` — normal deviate; not-a-number counts as no evidence (score of a deviate of 0).
/// # Outcomes
/// A score in [0, [`SCORE_MAX`]].
/// # Numerics
/// As [`normal_score_two_sided`], half the probability.
pub fn normal_score_upper(z: f64) -> f64 {
    let z = if z.is_nan() { 0.0 } else { z };
    if z < ASYMPTOTIC_FROM {
        return (-(0.5 * erfc(z / SQRT_2)).log10()).max(0.0);
    }
    far_score(z, 0.5 * (2.0 * std::f64::consts::PI).ln())
}

/// −log10 of exp(−z²/2 − ln z − constant) times the asymptotic series.
fn far_score(z: f64, constant: f64) -> f64 {
    let z = z.min(1.0e6);
    let v = 1.0 / (z * z);
    let series = 1.0 - v * (1.0 - v * (3.0 - 15.0 * v));
    ((0.5 * z * z + z.ln() + constant - series.ln()) / LN_10).min(SCORE_MAX)
}

/// Returns the normal deviate whose two-sided tail is nearly that of Student's t.
///
/// Model: z = (8ν + 1)/(8ν + 3) · √(ν ln(1 + t²/ν)).
///
/// # Arguments
/// `t` — statistic, sign ignored; `nu` — degrees of freedom, > 0.
/// # Numerics
/// Within 1 % in −log10 p for ν ≥ 20 and p down to 1e-140 (see the tests); 0 for ν ≤ 0.
/// # Source
/// D. L. Wallace, Bounds on normal approximations to Student's and the chi-square distributions,
/// Annals of Mathematical Statistics 30, 1959.
pub fn wallace_deviate(t: f64, nu: f64) -> f64 {
    if t.is_nan() || nu.is_nan() || nu <= 0.0 {
        return 0.0;
    }
    let t = t.abs().min(1.0e150);
    (8.0 * nu + 1.0) / (8.0 * nu + 3.0) * (nu * (t * t / nu).ln_1p()).sqrt()
}

/// Returns −log10 of the two-sided tail of Student's t, through [`wallace_deviate`].
///
/// # Arguments
/// `t` — statistic, sign ignored; `nu` — degrees of freedom, > 0.
/// # Outcomes
/// A score in [0, [`SCORE_MAX`]].
pub fn student_score_two_sided(t: f64, nu: f64) -> f64 {
    normal_score_two_sided(wallace_deviate(t, nu))
}

/// Returns the probability of a score, 10^−q, never below the smallest normal double.
///
/// # Arguments
/// `score` — −log10 p; below 0 counts as 0.
pub fn probability(score: f64) -> f64 {
    10.0_f64.powf(-score.max(0.0)).max(f64::MIN_POSITIVE)
}

#[cfg(test)]
mod tests {
    #![allow(clippy::unwrap_used)]

    use super::*;

    fn check(what: &str, got: f64, expected: f64, relative: f64) {
        let error = (got - expected).abs() / expected.abs().max(1e-3);
        assert!(error <= relative, "{what}: {got} against {expected}");
    }

    // Computed with mpmath 1.4.1 at 80 digits (erfc): upper tail of the standard normal.
    const NORMAL: [(f64, f64); 6] = [
        (0.0, 0.5),
        (1.0, 0.158_655_253_931_457_05),
        (2.5758, 0.005_000_423_737_778_683),
        (4.0, 3.167_124_183_311_992e-5),
        (8.0, 6.220_960_574_271_784e-16),
        (20.0, 2.753_624_118_606_234e-89),
    ];

    #[test]
    fn normal_scores_agree_with_mpmath() {
        for (z, upper) in NORMAL {
            check(&format!("upper {z}"), normal_score_upper(z), -upper.log10(), 1e-9);
            let two = (-(2.0 * upper).log10()).max(0.0);
            check(&format!("two-sided {z}"), normal_score_two_sided(z), two, 1e-9);
            check(&format!("two-sided -{z}"), normal_score_two_sided(-z), two, 1e-9);
        }
    }

    #[test]
    fn asymptotic_part_joins_erfc_without_a_step() {
        for score in [normal_score_two_sided as fn(f64) -> f64, normal_score_upper] {
            let (below, above) = (score(ASYMPTOTIC_FROM - 1e-9), score(ASYMPTOTIC_FROM));
            check("at the seam", below, above, 1e-9);
        }
    }

    #[test]
    fn student_scores_agree_with_mpmath() {
        // Two-sided tails computed with mpmath 1.4.1 at 80 digits (betainc).
        for (nu, t, p, tolerance) in [
            (10.0, 3.5, 0.005_726_505_429_885_216_f64, 0.01),
            (10.0, 12.0, 2.921_408_824_769_987e-7, 0.02),
            (34.0, 2.0, 0.053_539_835_470_450_43, 0.002),
            (34.0, 6.0, 8.612_259_484_670_564e-7, 0.002),
            (34.0, 30.0, 4.784_647_772_259_491_4e-26, 0.005),
            (98.0, 3.5, 0.000_701_761_770_719_710_9, 0.001),
            (98.0, 12.0, 6.000_153_201_837_828e-21, 0.001),
            (1000.0, 6.0, 2.755_369_173_377_469e-9, 0.001),
            (1000.0, 30.0, 1.537_468_744_404_348_3e-141, 0.001),
        ] {
            check(&format!("t {t} nu {nu}"), student_score_two_sided(t, nu), -p.log10(), tolerance);
        }
    }

    #[test]
    fn student_scores_agree_with_statrs() {
        use statrs::distribution::{ContinuousCDF, StudentsT};
        for nu in [30.0, 60.0, 200.0] {
            let exact = StudentsT::new(0.0, 1.0, nu).unwrap();
            for t in [0.5, 1.0, 2.0, 3.0, 4.0, 5.0] {
                let expected = -(2.0 * exact.sf(t)).log10();
                check(&format!("t {t} nu {nu}"), student_score_two_sided(t, nu), expected, 0.005);
            }
        }
    }

    #[test]
    fn every_score_is_finite() {
        for v in [0.0, 1e-300, 37.0, 1e9, 1e300, f64::INFINITY, f64::NAN, -f64::INFINITY] {
            for score in [normal_score_two_sided(v), normal_score_upper(v), normal_score_upper(-v)]
            {
                assert!(score.is_finite() && score >= 0.0, "score of {v} is {score}");
            }
            for nu in [-1.0, 0.0, 3.0, 1e9, f64::NAN] {
                let score = student_score_two_sided(v, nu);
                assert!(score.is_finite() && score >= 0.0, "score of {v}, {nu} is {score}");
            }
        }
        assert!(probability(1e6) > 0.0);
    }
}
