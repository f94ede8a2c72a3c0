//! Dependence of residuals in time: one number, the correlation at the median spacing.

/// Longest memory considered: correlations above this are held there.
pub const PHI_MAX: f64 = 0.97;

/// From so many residuals on the correction for bias is smaller than what it corrects (own rule).
const CORRECTED_FROM: usize = 20;

/// A spacing whose ratio to the median stays within this of 1 counts as regular.
const REGULAR_WITHIN: f64 = 0.1;
/// With at least this share of regular spacings, those pairs alone give the correlation.
const REGULAR_SHARE: f64 = 0.8;

/// Golden-section steps for the irregular estimate; narrows [0, 0.97] to below 1e-4.
const SEARCH_STEPS: usize = 22;

/// Returns the median spacing of ages and each spacing's ratio to it.
///
/// # Arguments
/// `x` — ages in days, strictly increasing, at least two.
///
/// # Returns
/// Median spacing in days (> 0), and ratios of the length of `x`; the first is 1 by convention.
pub fn spacing_of(x: &[f64]) -> (f64, Vec<f64>) {
    assert!(x.len() >= 2, "spacing needs two ages");
    let raw: Vec<f64> = x.windows(2).map(|w| w[1] - w[0]).collect();
    let mut sorted = raw.clone();
    let middle = sorted.len() / 2;
    let (_, median, _) = sorted.select_nth_unstable_by(middle, f64::total_cmp);
    let median = median.max(f64::MIN_POSITIVE);
    let ratios = std::iter::once(1.0).chain(raw.iter().map(|d| d / median)).collect();
    (median, ratios)
}

/// Estimates the correlation of residuals one median spacing apart, corrected for the bias that
/// fitting `parameters` coefficients brings.
///
/// # Arguments
/// `residuals` — in any unit, already winsorised; `spacing` — ratios to the median spacing, as
/// [`spacing_of`] gives them; `parameters` — p, coefficients fitted. More than p + 3 residuals.
///
/// # Returns
/// phi, between −1 and 0.97; 0 when the residuals are all 0 or too few.
///
/// # Numerics
/// Regular spacing, gaps allowed: moment estimator n/m Σ e_i e_(i−1) / Σ e² over the m pairs one median
/// spacing apart. Irregular: profile likelihood of an Ornstein–Uhlenbeck process by golden section on
/// [0, 0.97], about fifty times as costly. Then (n phi + p)/(n − p − 2).
///
/// # Source
/// Bias: Kendall (1954), Marriott and Pope (1954), extended to p parameters (own simulation);
/// irregular: Robinson (1977), Mudelsee (2002). From memory.
pub fn lag_correlation(residuals: &[f64], spacing: &[f64], parameters: usize) -> f64 {
    let Some(raw) = raw_correlation(residuals, spacing, parameters) else { return 0.0 };
    let (n, p) = (count(residuals.len()), count(parameters));
    ((n * raw + p) / (n - p - 2.0)).clamp(-1.0, PHI_MAX)
}

/// The same for one short series: below `CORRECTED_FROM` residuals the correction, which is right
/// to the order of 1/n, would be all there is, and is left out.
pub fn lag_correlation_short(residuals: &[f64], spacing: &[f64], parameters: usize) -> f64 {
    if residuals.len() >= CORRECTED_FROM {
        return lag_correlation(residuals, spacing, parameters);
    }
    raw_correlation(residuals, spacing, parameters).map_or(0.0, |raw| raw.clamp(-1.0, PHI_MAX))
}

/// The estimate without correction; None when the residuals are all 0 or too few.
fn raw_correlation(residuals: &[f64], spacing: &[f64], parameters: usize) -> Option<f64> {
    assert_eq!(residuals.len(), spacing.len(), "one spacing per residual");
    let sum_squares: f64 = residuals.iter().map(|e| e * e).sum();
    if residuals.len() < parameters + 4 || sum_squares <= f64::MIN_POSITIVE {
        return None;
    }
    let n = count(residuals.len());
    let (mut lagged, mut pairs) = (0.0, 0.0);
    for (w, d) in residuals.windows(2).zip(&spacing[1..]) {
        if (d - 1.0).abs() <= REGULAR_WITHIN {
            lagged += w[0] * w[1];
            pairs += 1.0;
        }
    }
    Some(if pairs >= REGULAR_SHARE * (n - 1.0) {
        lagged / sum_squares * n / pairs
    } else {
        irregular_correlation(residuals, spacing)
    })
}

/// Minimises the profile likelihood over phi by golden section.
fn irregular_correlation(residuals: &[f64], spacing: &[f64]) -> f64 {
    const GOLDEN: f64 = 0.618_033_988_749_894_9;
    let cost = |phi: f64| ornstein_uhlenbeck_cost(residuals, spacing, phi);
    let (mut a, mut b) = (0.0, PHI_MAX);
    let (mut c, mut d) = (b - GOLDEN * (b - a), a + GOLDEN * (b - a));
    let (mut at_c, mut at_d) = (cost(c), cost(d));
    for _ in 0..SEARCH_STEPS {
        if at_c < at_d {
            (b, d, at_d) = (d, c, at_c);
            c = b - GOLDEN * (b - a);
            at_c = cost(c);
        } else {
            (a, c, at_c) = (c, d, at_d);
            d = a + GOLDEN * (b - a);
            at_d = cost(d);
        }
    }
    0.5 * (a + b)
}

/// −2 log profile likelihood, up to a constant: n ln(mean v) + Σ ln(1 − f²).
fn ornstein_uhlenbeck_cost(residuals: &[f64], spacing: &[f64], phi: f64) -> f64 {
    let log_phi = phi.max(1e-9).ln();
    let mut sum = residuals[0] * residuals[0];
    let mut log_sum = 0.0;
    for i in 1..residuals.len() {
        let f = (log_phi * spacing[i]).exp();
        let variance = (1.0 - f * f).max(1e-9);
        let step = residuals[i] - f * residuals[i - 1];
        sum += step * step / variance;
        log_sum += variance.ln();
    }
    let n = count(residuals.len());
    n * (sum / n + f64::MIN_POSITIVE).ln() + log_sum
}

/// Returns how many independent residuals `n` dependent ones are worth, at least 1.
///
/// # Source
/// Bayley and Hammersley (1946): n (1 − phi)/(1 + phi) for a first-order process. From memory.
pub fn effective_count(n: usize, phi: f64) -> f64 {
    let phi = phi.clamp(0.0, PHI_MAX);
    (count(n) * (1.0 - phi) / (1.0 + phi)).max(1.0)
}

/// A count as a number: exact below 2^53.
#[expect(clippy::cast_precision_loss, reason = "counts are far below 2^53")]
pub(crate) fn count(n: usize) -> f64 {
    n as f64
}

/// Returns the Durbin–Watson statistic Σ (e_i − e_(i−1))² / Σ e_i²; NaN-free: 2 when all are 0.
///
/// # Source
/// Durbin and Watson (1950), Biometrika 37.
pub fn durbin_watson(residuals: &[f64]) -> f64 {
    let total: f64 = residuals.iter().map(|e| e * e).sum();
    if total <= 0.0 {
        return 2.0;
    }
    residuals.windows(2).map(|w| (w[1] - w[0]).powi(2)).sum::<f64>() / total
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn alternating_residuals_are_negatively_correlated() {
        let e: Vec<f64> = (0..100).map(|i| if i % 2 == 0 { 1.0 } else { -1.0 }).collect();
        assert!(lag_correlation(&e, &[1.0; 100], 2) < -0.9);
        assert!(durbin_watson(&e) > 3.9);
    }

    #[test]
    fn regular_and_irregular_estimates_agree_on_a_slow_wave() {
        let e: Vec<f64> = (0..200).map(|i| (f64::from(i) * 0.7).sin()).collect();
        let regular = lag_correlation(&e, &[1.0; 200], 2);
        let irregular = irregular_correlation(&e, &[1.0; 200]);
        assert!((regular - irregular).abs() < 0.05, "{regular} against {irregular}");
    }

    #[test]
    fn a_gap_does_not_count_as_a_pair() {
        let mut e: Vec<f64> = (0..100).map(|i| (f64::from(i) * 0.5).cos()).collect();
        let whole = lag_correlation(&e, &[1.0; 100], 2);
        e.iter_mut().skip(50).for_each(|v| *v = -*v);
        let mut spacing = [1.0; 100];
        spacing[50] = 40.0;
        assert!((lag_correlation(&e, &spacing, 2) - whole).abs() < 0.02);
    }

    #[test]
    fn spacing_is_relative_to_the_median() {
        let (median, ratios) = spacing_of(&[0.0, 1.0, 2.0, 4.0]);
        assert_eq!((median, ratios), (1.0, vec![1.0, 1.0, 1.0, 2.0]));
    }

    #[test]
    fn a_handful_of_residuals_is_not_corrected() {
        let e = [1.0, -0.5, 0.7, -1.2, 0.3, -0.3];
        let raw =
            e.windows(2).map(|w| w[0] * w[1]).sum::<f64>() / e.map(|v| v * v).iter().sum::<f64>();
        let got = lag_correlation_short(&e, &[1.0; 6], 2);
        assert!((got - raw * 6.0 / 5.0).abs() < 1e-12, "{got}, {raw}");
        let wave: Vec<f64> = (0..40).map(|i| (f64::from(i) * 0.7).sin()).collect();
        let (a, b) =
            (lag_correlation(&wave, &[1.0; 40], 2), lag_correlation_short(&wave, &[1.0; 40], 2));
        assert!((a - b).abs() < f64::EPSILON);
    }

    #[test]
    fn constant_zero_residuals_have_no_correlation() {
        assert!(lag_correlation(&[0.0; 50], &[1.0; 50], 2).abs() < f64::EPSILON);
    }
}
