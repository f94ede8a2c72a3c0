//! Dependence of neighbours, against the lag-1 autocorrelation that NIST certifies for series of
//! readings of one quantity.

use super::{Series, check, check_text, count, series, text_at};
use asfound::drift::serial::{PHI_MAX, durbin_watson, lag_correlation_of_clipped};

/// Series of which NIST certifies mean, standard deviation and lag-1 autocorrelation to 15 digits.
/// Michelso's mean keeps four digits fewer in its deviations, Mavro's five.
const CERTIFIED: [(&str, f64); 4] =
    [("lew", 13.0), ("lottery", 13.0), ("michelso", 10.0), ("mavro", 10.0)];

/// The readings less their certified mean, with the certified autocorrelation.
fn deviations(series: &Series) -> (Vec<f64>, f64) {
    let certified = |key: &str| series.certified(key).parse::<f64>().unwrap();
    let mean = certified("mean");
    (series.y.iter().map(|v| v - mean).collect(), certified("lag_1"))
}

#[test]
fn durbin_watson_follows_from_the_certified_lag_correlation() {
    // Σ(d_i − d_(i−1))² = 2 Σd² (1 − r) − d_1² − d_n², and Σd² = (n − 1) s²: NIST StRD, certified
    // mean, s and r of Lew, Lottery, Michelso, Mavro.
    for (name, digits) in CERTIFIED {
        let series = series(name);
        let (d, r) = deviations(&series);
        let sd: f64 = series.certified("sd").parse().unwrap();
        let square = (count(d.len()) - 1.0) * sd * sd;
        let ends = (d[0].powi(2) + d[d.len() - 1].powi(2)) / square;
        let got = durbin_watson(&d);
        check(&format!("{name} Durbin-Watson"), got, 2.0 * (1.0 - r) - ends, digits);
        let want = text_at(&series.reference["computed"]["mean"], "durbin_watson");
        check_text(&format!("{name} Durbin-Watson, 80 digits"), got, want, digits);
    }
}

#[test]
fn lag_correlation_without_its_correction_is_the_certified_one() {
    // NIST StRD, certified r = Σd_i d_(i−1)/Σd². The library counts n − 1 pairs for n squares and
    // takes the bias −2 phi/n of a known mean off.
    for (name, digits) in CERTIFIED {
        let series = series(name);
        let (d, r) = deviations(&series);
        let n = count(d.len());
        let got = lag_correlation_of_clipped(&d, &vec![1.0; d.len()], true, 0.0);
        let corrected = r * n / (n - 1.0) * n / (n - 2.0);
        if corrected > PHI_MAX {
            // Mavro: 0.938 among 50 readings is too much for the correction.
            assert_eq!((name, got.to_bits()), ("mavro", PHI_MAX.to_bits()));
            continue;
        }
        check(&format!("{name} lag 1"), got * (n - 2.0) / n * (n - 1.0) / n, r, digits);
    }
}
