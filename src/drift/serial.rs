//! Dependence of residuals in time, as one number: phi, the correlation of the noise at the median
//! spacing of the series (an Ornstein–Uhlenbeck process, so gaps and uneven spacing are exact).
//!
//! Deliberately absent: standard errors under dependence live with the fit; whether dependence is
//! *unusual* for a channel is judged in [`crate::drift::structure`].

/// Spacings below this fraction of the median count as this fraction. Two readings at (nearly) the
/// same time share their slow noise, yet each carries noise of its own that phi cannot express;
/// without a floor their tiny difference would be magnified without bound.
pub const SPACING_RATIO_MIN: f64 = 0.02;
/// Largest spacing, in medians, that is told apart: beyond it nothing of the correlation is left.
pub const SPACING_RATIO_MAX: f64 = 1.0e6;
/// A series is regular when no spacing departs from the median by more than this fraction. Below
/// it the moment estimator errs by less than its own sampling error.
pub const REGULAR_TOLERANCE: f64 = 0.05;
/// Residuals are clipped at so many robust standard deviations before phi is estimated.
pub const CLIP_SIGMAS: f64 = 3.5;
/// Correlations are held within ± this.
pub const PHI_MAX: f64 = 0.995;

/// From so many residuals on the correction for bias is smaller than what it corrects (own rule).
pub const CORRECTED_FROM: usize = 20;
/// 1/Φ⁻¹(3/4): makes the median absolute deviation consistent for normal noise.
const MAD_TO_SIGMA: f64 = 1.4826;
/// Search range of the likelihood estimate and its number of golden-section steps (width 2e-5).
const LIKELIHOOD_PHI_MAX: f64 = 0.97;
const GOLDEN_STEPS: usize = 22;
const GOLDEN: f64 = 0.618_033_988_749_894_9;

/// Returns the median spacing of `x` and each spacing in units of it.
///
/// # Arguments
/// `x` — ages, ascending, days; repeats allowed.
/// # Outcomes
/// `(median, ratios)`: the median in days, always > 0; `ratios` of the length of `x`, the first
/// unused (1), the others held within [[`SPACING_RATIO_MIN`], [`SPACING_RATIO_MAX`]].
/// When more than half the spacings are zero the mean spacing serves; when all are, 1 day.
pub fn spacing_of(x: &[f64]) -> (f64, Vec<f64>) {
    let mut gaps: Vec<f64> = x.windows(2).map(|w| (w[1] - w[0]).max(0.0)).collect();
    let mut unit = median(&mut gaps);
    if unit <= 0.0 || !unit.is_finite() {
        let span = x.last().copied().unwrap_or(0.0) - x.first().copied().unwrap_or(0.0);
        unit = span / gaps.len().max(1) as f64;
    }
    if unit <= 0.0 || !unit.is_finite() {
        unit = 1.0;
    }
    let ratios =
        (0..x.len()).map(|i| if i == 0 { 1.0 } else { spacing_ratio(x[i] - x[i - 1], unit) });
    (unit, ratios.collect())
}

/// Returns one spacing in units of the median, held within the documented limits.
///
/// # Arguments
/// `gap_days` — one spacing, days; `median_days` — the median spacing, days, > 0.
pub(crate) fn spacing_ratio(gap_days: f64, median_days: f64) -> f64 {
    let ratio = gap_days / median_days;
    if ratio.is_nan() { 1.0 } else { ratio.clamp(SPACING_RATIO_MIN, SPACING_RATIO_MAX) }
}

/// Returns whether the series counts as evenly spaced (see [`REGULAR_TOLERANCE`]).
///
/// # Arguments
/// `spacing` — from [`spacing_of`].
pub(crate) fn is_regular(spacing: &[f64]) -> bool {
    spacing.iter().skip(1).all(|r| (r - 1.0).abs() <= REGULAR_TOLERANCE)
}

/// Estimates phi, the correlation of the noise at the median spacing, corrected for bias.
///
/// Model: e_i = f_i e_(i−1) + √(1 − f_i²) w_i, f_i = phi^spacing_i.
///
/// # Arguments
/// `residuals` — n residuals in time order, any unit; clipped here at ± 3.5 robust sigmas;
/// `spacing` — from [`spacing_of`], same length; `parameters` — coefficients of the fitted curve.
/// # Outcomes
/// phi in ± [`PHI_MAX`]; 0 when n is too small to say, or all residuals vanish.
/// # Numerics
/// Regular series: moments, n/(n−1) Σ e_i e_(i−1) / Σ e_i². Irregular: minimum of the profile
/// likelihood n ln mean(v_i) + Σ ln(1 − f_i²), v_i = (e_i − f_i e_(i−1))²/(1 − f_i²), over
/// [0, 0.97] by golden section. Both then (n phi + p)/(n − p − 2), which undoes the downward bias
/// −(p + (p+2) phi)/n that a fitted smooth curve of p coefficients brings.
/// # Source
/// M. G. Kendall, Note on bias in the estimation of autocorrelation, Biometrika 41, 1954; F. H. C.
/// Marriott and J. A. Pope, ibid.; P. M. Robinson, Estimation of a time series model from unequally
/// spaced data, Stochastic Processes and their Applications 6, 1977; M. Mudelsee, TAUEST, Computers
/// & Geosciences 28, 2002. The extension of the bias to p > 1 is our own, checked by simulation.
pub fn lag_correlation(residuals: &[f64], spacing: &[f64], parameters: usize) -> f64 {
    lag_correlation_of_clipped(&clipped(residuals), spacing, is_regular(spacing), count(parameters))
}

/// Estimates phi as [`lag_correlation`], for residuals already clipped and a count of coefficients
/// that may be a fraction (a part of the window bears a part of the curve).
///
/// # Arguments
/// `residuals` — clipped already, in time order (n); `spacing` — from [`spacing_of`] (n); `regular`
/// — whether it counts as even; `parameters` — coefficients, may be a fraction.
pub fn lag_correlation_of_clipped(
    residuals: &[f64],
    spacing: &[f64],
    regular: bool,
    parameters: f64,
) -> f64 {
    let n = count(residuals.len());
    if n - parameters - 2.0 <= 0.0 {
        return 0.0;
    }
    let Some(phi) = raw_phi(residuals, spacing, regular) else { return 0.0 };
    let phi = (n * phi + parameters) / (n - parameters - 2.0);
    if phi.is_finite() { phi.clamp(-PHI_MAX, PHI_MAX) } else { 0.0 }
}

/// Estimates phi as [`lag_correlation`], for one short series: below 20 residuals the correction,
/// which is right to the order of 1/n, would be all there is, and is left out.
///
/// # Arguments
/// As for [`lag_correlation`].
pub fn lag_correlation_short(residuals: &[f64], spacing: &[f64], parameters: usize) -> f64 {
    if residuals.len() >= CORRECTED_FROM {
        return lag_correlation(residuals, spacing, parameters);
    }
    if residuals.len() < parameters + 4 {
        return 0.0;
    }
    let clipped = clipped(residuals);
    let phi = raw_phi(&clipped, spacing, is_regular(spacing));
    phi.map_or(0.0, |phi| phi.clamp(-PHI_MAX, PHI_MAX))
}

/// The estimate without correction; `None` when there are too few residuals or all vanish.
fn raw_phi(residuals: &[f64], spacing: &[f64], regular: bool) -> Option<f64> {
    assert_eq!(residuals.len(), spacing.len(), "one spacing per residual");
    let square: f64 = residuals.iter().map(|v| v * v).sum();
    if residuals.len() < 3 || square <= f64::MIN_POSITIVE {
        return None;
    }
    Some(if regular { moment_phi(residuals, square) } else { likelihood_phi(residuals, spacing) })
}

/// Returns the Durbin–Watson statistic Σ (e_i − e_(i−1))² / Σ e_i²; 2 when all are 0.
///
/// # Arguments
/// `residuals` — in time order, any unit.
///
/// # Source
/// J. Durbin and G. S. Watson, Testing for serial correlation in least squares regression I,
/// Biometrika 37, 1950.
pub fn durbin_watson(residuals: &[f64]) -> f64 {
    let total: f64 = residuals.iter().map(|e| e * e).sum();
    if total <= 0.0 {
        return 2.0;
    }
    residuals.windows(2).map(|w| (w[1] - w[0]).powi(2)).sum::<f64>() / total
}

/// A count as a number: exact below 2^53.
#[expect(clippy::cast_precision_loss, reason = "counts are far below 2^53")]
pub(crate) fn count(n: usize) -> f64 {
    n as f64
}

/// Returns the number of independent readings that carry as much about a mean as n dependent ones.
///
/// Model: n (1 − phi)/(1 + phi), held within [1, n] (negative phi earns no bonus).
///
/// # Arguments
/// `n` — readings; `phi` — correlation of neighbours.
/// # Source
/// G. V. Bayley and J. M. Hammersley, The "effective" number of independent observations in an
/// autocorrelated time series, Supplement to the JRSS 8, 1946.
pub fn effective_count(n: usize, phi: f64) -> f64 {
    let n = n as f64;
    let phi = if phi.is_nan() { 0.0 } else { phi.clamp(0.0, PHI_MAX) };
    (n * (1.0 - phi) / (1.0 + phi)).max(1.0_f64.min(n))
}

/// Returns the median, reordering `values`; 0 of an empty slice.
///
/// # Arguments
/// `values` — any unit and order; their order is lost.
pub fn median(values: &mut [f64]) -> f64 {
    let m = values.len();
    if m == 0 {
        return 0.0;
    }
    let (left, mid, _) = values.select_nth_unstable_by(m / 2, f64::total_cmp);
    let upper = *mid;
    if m % 2 == 1 {
        return upper;
    }
    let lower = left.iter().copied().fold(f64::NEG_INFINITY, f64::max);
    0.5 * (lower + upper)
}

/// Returns 1.4826 times the median absolute deviation from the median.
///
/// # Arguments
/// `values` — any unit; `scratch` — overwritten.
/// # Source
/// F. R. Hampel, The influence curve and its role in robust estimation, JASA 69, 1974.
pub fn robust_sigma(values: &[f64], scratch: &mut Vec<f64>) -> f64 {
    scratch.clear();
    scratch.extend_from_slice(values);
    let centre = median(scratch);
    for v in scratch.iter_mut() {
        *v = (*v - centre).abs();
    }
    MAD_TO_SIGMA * median(scratch)
}

/// Clips at ± [`CLIP_SIGMAS`] s; leaves all as it is when s is 0 (more than half are equal).
pub(crate) fn clip_in_place(values: &mut [f64], s: f64) {
    if s > 0.0 {
        let c = CLIP_SIGMAS * s;
        values.iter_mut().for_each(|v| *v = v.clamp(-c, c));
    }
}

fn clipped(residuals: &[f64]) -> Vec<f64> {
    let mut scratch = Vec::with_capacity(residuals.len());
    let s = robust_sigma(residuals, &mut scratch);
    scratch.clear();
    scratch.extend_from_slice(residuals);
    clip_in_place(&mut scratch, s);
    scratch
}

fn moment_phi(e: &[f64], square: f64) -> f64 {
    let n = count(e.len());
    let cross: f64 = e.windows(2).map(|w| w[1] * w[0]).sum();
    cross / square * n / (n - 1.0)
}

fn likelihood_phi(e: &[f64], spacing: &[f64]) -> f64 {
    let (mut a, mut b) = (0.0, LIKELIHOOD_PHI_MAX);
    let (mut c, mut d) = (b - GOLDEN * (b - a), a + GOLDEN * (b - a));
    let (mut at_c, mut at_d) = (deviance(e, spacing, c), deviance(e, spacing, d));
    for _ in 0..GOLDEN_STEPS {
        if at_c < at_d {
            b = d;
            (d, at_d) = (c, at_c);
            c = b - GOLDEN * (b - a);
            at_c = deviance(e, spacing, c);
        } else {
            a = c;
            (c, at_c) = (d, at_d);
            d = a + GOLDEN * (b - a);
            at_d = deviance(e, spacing, d);
        }
    }
    0.5 * (a + b)
}

/// The profile likelihood of an Ornstein–Uhlenbeck process, −2 ln L up to a constant.
fn deviance(e: &[f64], spacing: &[f64], phi: f64) -> f64 {
    let ln_phi = phi.max(1e-9).ln();
    let mut sum = e[0] * e[0];
    let mut logs = 0.0;
    for i in 1..e.len() {
        let f = (ln_phi * spacing[i]).exp();
        let v = (1.0 - f * f).max(1e-9);
        let r = e[i] - f * e[i - 1];
        sum += r * r / v;
        logs += v.ln();
    }
    let n = e.len() as f64;
    n * (sum / n).max(f64::MIN_POSITIVE).ln() + logs
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::drift::structure::simulate::{Noise, Sampling};

    fn mean_phi(rho: f64, sampling: Sampling, n: usize, runs: usize) -> f64 {
        let mut noise = Noise::new(0xA5F0_u64 + n as u64);
        let mut total = 0.0;
        for _ in 0..runs {
            let x = noise.ages(n, 1.0, sampling);
            let (_, spacing) = spacing_of(&x);
            let e = noise.dependent(&spacing, rho);
            // One coefficient: the mean.
            let mean = e.iter().sum::<f64>() / n as f64;
            let e: Vec<f64> = e.iter().map(|v| v - mean).collect();
            total += lag_correlation(&e, &spacing, 1);
        }
        total / runs as f64
    }

    #[test]
    fn phi_is_unbiased_on_even_spacing() {
        for rho in [0.0, 0.3, 0.6] {
            let got = mean_phi(rho, Sampling::Even, 100, 400);
            assert!((got - rho).abs() < 0.02, "seed 0xA5F0+100: phi {got} against {rho}");
        }
    }

    #[test]
    fn phi_is_nearly_unbiased_on_uneven_spacing() {
        for rho in [0.3, 0.6] {
            let got = mean_phi(rho, Sampling::Uneven, 200, 150);
            assert!((got - rho).abs() < 0.03, "seed 0xA5F0+200: phi {got} against {rho}");
        }
    }

    #[test]
    fn zero_spacings_are_floored() {
        let (unit, ratios) = spacing_of(&[1.0, 2.0, 2.0, 3.0, 4.0]);
        assert!((unit - 1.0).abs() < 1e-15);
        assert_eq!(ratios, vec![1.0, 1.0, SPACING_RATIO_MIN, 1.0, 1.0]);
        assert!(!is_regular(&ratios));
    }

    #[test]
    fn all_equal_ages_give_a_finite_spacing() {
        let (unit, ratios) = spacing_of(&[2.0; 5]);
        assert!(unit > 0.0 && ratios.iter().all(|r| r.is_finite()));
        let (unit, ratios) = spacing_of(&[]);
        assert!(unit > 0.0 && ratios.is_empty());
    }

    #[test]
    fn mostly_repeated_ages_fall_back_to_the_mean_spacing() {
        let (unit, _) = spacing_of(&[1.0, 1.0, 1.0, 1.0, 3.0]);
        assert!((unit - 0.5).abs() < 1e-15);
    }

    #[test]
    fn degenerate_residuals_have_no_dependence() {
        let spacing = [1.0; 40];
        assert_eq!(lag_correlation(&[0.0; 40], &spacing, 2).to_bits(), 0.0_f64.to_bits());
        assert_eq!(lag_correlation_short(&[0.0; 9], &[1.0; 9], 2).to_bits(), 0.0_f64.to_bits());
        assert_eq!(lag_correlation(&[1.0, -1.0], &[1.0, 1.0], 2).to_bits(), 0.0_f64.to_bits());
    }

    #[test]
    fn effective_count_matches_hand_values() {
        assert!((effective_count(200, 0.5) - 200.0 / 3.0).abs() < 1e-12);
        assert!((effective_count(200, -0.5) - 200.0).abs() < 1e-12);
        assert!(effective_count(3, 0.999) >= 1.0);
        assert!(effective_count(0, 0.3).abs() < 1e-12);
    }

    #[test]
    fn alternating_residuals_are_negatively_correlated() {
        let e: Vec<f64> = (0..100).map(|i| if i % 2 == 0 { 1.0 } else { -1.0 }).collect();
        assert!(lag_correlation(&e, &[1.0; 100], 2) < -0.9);
        assert!(durbin_watson(&e) > 3.9);
    }

    #[test]
    fn moments_and_likelihood_agree_on_a_slow_wave() {
        let e: Vec<f64> = (0..200).map(|i| (f64::from(i) * 0.7).sin()).collect();
        let square = e.iter().map(|v| v * v).sum();
        let (regular, irregular) = (moment_phi(&e, square), likelihood_phi(&e, &[1.0; 200]));
        assert!((regular - irregular).abs() < 0.05, "{regular} against {irregular}");
    }

    #[test]
    fn a_gap_does_not_count_as_a_pair() {
        let mut e: Vec<f64> = (0..100).map(|i| (f64::from(i) * 0.5).cos()).collect();
        let whole = lag_correlation(&e, &[1.0; 100], 2);
        e.iter_mut().skip(50).for_each(|v| *v = -*v);
        let mut spacing = [1.0; 100];
        spacing[50] = 40.0;
        assert!((lag_correlation(&e, &spacing, 2) - whole).abs() < 0.05);
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
    fn median_of_even_count_is_the_middle_mean() {
        assert!((median(&mut [4.0, 1.0, 3.0, 2.0]) - 2.5).abs() < 1e-15);
        assert!((median(&mut [3.0, 1.0, 2.0]) - 2.0).abs() < 1e-15);
    }
}
