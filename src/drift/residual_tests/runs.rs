//! Runs: do the residuals' signs follow each other at random?

use crate::drift::serial::count;
use crate::drift::tails::normal_two_sided;
use statrs::function::factorial::ln_binomial;

/// Residuals below this share of the largest have no sign: they are rounding noise.
const SIGNLESS: f64 = 1e-12;

/// Runs of residuals of one sign.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Runs {
    /// Residuals above 0.
    pub positive: usize,
    /// Residuals below 0.
    pub negative: usize,
    /// Runs of one sign.
    pub runs: usize,
    /// (runs − mean)/sd, without continuity correction.
    pub z: f64,
    /// Two-sided, by the normal approximation.
    pub p_value: f64,
    /// Two-sided, twice the smaller tail of the exact distribution.
    pub p_exact: f64,
}

/// Returns the runs test about 0; residuals of no sign are left out.
///
/// # Arguments
/// `residuals` — in order of age.
///
/// # Returns
/// None when all residuals have one sign.
///
/// # Source
/// Wald and Wolfowitz (1940), Annals of Mathematical Statistics 11.
pub fn runs(residuals: &[f64]) -> Option<Runs> {
    let largest = residuals.iter().fold(0.0_f64, |m, r| m.max(r.abs()));
    let signs: Vec<bool> =
        residuals.iter().filter(|r| r.abs() > SIGNLESS * largest).map(|&r| r > 0.0).collect();
    let positive = signs.iter().filter(|&&s| s).count();
    let negative = signs.len() - positive;
    if positive == 0 || negative == 0 {
        return None;
    }
    let runs = 1 + signs.windows(2).filter(|w| w[0] != w[1]).count();
    let (a, b, n) = (count(positive), count(negative), count(signs.len()));
    let mean = 2.0 * a * b / n + 1.0;
    let variance = 2.0 * a * b * (2.0 * a * b - n) / (n * n * (n - 1.0));
    let z = if variance > 0.0 { (count(runs) - mean) / variance.sqrt() } else { 0.0 };
    let p_exact = two_sided_exact(positive, negative, runs);
    Some(Runs { positive, negative, runs, z, p_value: normal_two_sided(z), p_exact })
}

fn two_sided_exact(positive: usize, negative: usize, runs: usize) -> f64 {
    let most = 2 * positive.min(negative) + 1;
    let sum = |range: std::ops::RangeInclusive<usize>| {
        range.map(|r| probability(positive, negative, r)).sum::<f64>()
    };
    (2.0 * sum(2..=runs).min(sum(runs..=most))).min(1.0)
}

/// P(exactly r runs): 2 C(a−1, k−1) C(b−1, k−1) / C(a+b, a) for r = 2k, the mixed sum for r = 2k+1.
fn probability(a: usize, b: usize, r: usize) -> f64 {
    let choose =
        |n: usize, k: usize| if k > n { f64::NEG_INFINITY } else { ln_binomial(big(n), big(k)) };
    let all = choose(a + b, a);
    let k = r / 2;
    if r.is_multiple_of(2) {
        2.0 * (choose(a - 1, k - 1) + choose(b - 1, k - 1) - all).exp()
    } else {
        (choose(a - 1, k) + choose(b - 1, k - 1) - all).exp()
            + (choose(a - 1, k - 1) + choose(b - 1, k) - all).exp()
    }
}

fn big(n: usize) -> u64 {
    u64::try_from(n).expect("a count fits 64 bits")
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Residuals of the signs given by `+`, `-` and `0`.
    fn check(signs: &str) -> Option<Runs> {
        let sign = |c| match c {
            '+' => 1.0,
            '-' => -1.0,
            _ => 0.0,
        };
        runs(&signs.chars().map(sign).collect::<Vec<f64>>())
    }

    #[test]
    fn reference_exact_distribution() {
        // Counted by hand: of the C(4, 2) = 6 orders of two and two, 2 have two runs, 2 three, 2 four.
        for (r, share) in [(2, 2.0), (3, 2.0), (4, 2.0), (5, 0.0)] {
            assert!((probability(2, 2, r) - share / 6.0).abs() < 1e-12, "{r} runs");
        }
        // Swed and Eisenhart (1943), ten and ten: P(at most 6 runs) = 1711/92378 (rational arithmetic).
        let six = check("++++--++++--++------").unwrap();
        assert_eq!((six.positive, six.negative, six.runs), (10, 10, 6));
        assert!((six.p_exact - 2.0 * 1711.0 / 92378.0).abs() < 1e-10, "{six:?}");
        assert!((six.z + 2.297_341_458_681_703_6).abs() < 1e-12, "{six:?}");
        assert!((six.p_value - 0.021_599_298_490_998_158).abs() < 1e-12, "{six:?}");
    }

    #[test]
    fn residuals_without_sign_are_left_out() {
        assert_eq!(check("+0+-0--"), check("++---"));
        assert_eq!(check("+++"), None);
        assert_eq!(check("000"), None);
    }

    #[test]
    fn a_regular_change_of_sign_is_as_telling_as_none() {
        let (often, seldom) = (check("+-+-+-+-+-+-").unwrap(), check("++++++------").unwrap());
        assert!(often.z > 2.5 && seldom.z < -2.5, "{often:?} {seldom:?}");
        assert!((often.p_exact - 2.0 * 2.0 / 924.0).abs() < 1e-10, "{often:?}");
    }
}
