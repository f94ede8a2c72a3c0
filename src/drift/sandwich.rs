//! How well a curve is known when residuals depend on each other in time: their correlation, and the
//! coefficients' covariance with it.

use crate::drift::family::COEFFICIENTS_MAX;
use crate::drift::fit::{CLIP_WINSOR, Fit};
use crate::drift::lanes::dot;
use crate::drift::robust::scale::robust_scale_in;
use crate::drift::serial::{count, lag_correlation};
use crate::drift::workspace::{Room, Workspace};
use nalgebra::Matrix4;

/// Returns the correlation of a fit's residuals, clipped at 3 robust standard deviations, at the median
/// spacing, bias-corrected.
///
/// # Arguments
/// `fit` — the curve; `x` — the ages it was fitted to (n), days; `y` — the deviations (n);
/// `spacing` — (n), ratios to the median spacing, from [`crate::drift::serial::spacing_of`].
pub fn own_correlation(fit: &Fit, x: &[f64], y: &[f64], spacing: &[f64]) -> f64 {
    own_correlation_in(fit, x, y, spacing, &mut Workspace::default())
}

/// Returns the correlation of a fit's clipped residuals at the median spacing, in a workspace.
///
/// # Arguments
/// As for [`own_correlation`]; `workspace` — room to work in: any, it does not change the result.
pub fn own_correlation_in(
    fit: &Fit,
    x: &[f64],
    y: &[f64],
    spacing: &[f64],
    workspace: &mut Workspace,
) -> f64 {
    lag_correlation(clipped(fit, x, y, workspace), spacing, fit.family.parameter_count())
}

/// Returns the residuals (n), in y's unit, clipped at 3 robust standard deviations.
///
/// # Arguments
/// `fit` — the curve; `x` — the ages it was fitted to (n), days; `y` — the deviations (n).
pub fn winsorised(fit: &Fit, x: &[f64], y: &[f64]) -> Vec<f64> {
    clipped(fit, x, y, &mut Workspace::default()).to_vec()
}

fn clipped<'a>(fit: &Fit, x: &[f64], y: &[f64], workspace: &'a mut Workspace) -> &'a [f64] {
    let Room { residuals, sizes, .. } = workspace.held(fit, x);
    residuals.iter_mut().zip(y).for_each(|(value, y)| *value = y - *value);
    let limit = CLIP_WINSOR * robust_scale_in(residuals, sizes);
    if limit > 0.0 {
        residuals.iter_mut().for_each(|r| *r = r.clamp(-limit, limit));
    }
    residuals
}

/// Returns what is left of a correlation from each reading to the next: phi^(spacing).
///
/// # Arguments
/// `spacing` — ratios to the median spacing, as [`crate::drift::serial::spacing_of`] gives them; `phi`
/// — correlation at the median spacing, 0 ≤ phi < 1.
pub fn decays(spacing: &[f64], phi: f64) -> Vec<f64> {
    let rate = phi.max(f64::MIN_POSITIVE).ln();
    spacing.iter().map(|d| (rate * d).exp()).collect()
}

/// Returns the inner coefficients' covariance with serial dependence allowed for, and the noise
/// variance; [`Fit::standard_errors_of`] turns it into the data's units.
///
/// V = s² (JᵀJ)⁻¹ JᵀRJ (JᵀJ)⁻¹, s² = RSS/(n − tr[(JᵀJ)⁻¹ JᵀRJ]), R_ij = phi^(|t_i − t_j|/δ).
///
/// # Arguments
/// `fit` — the curve; `x` — the ages it was fitted to (n), days; `spacing` — (n), ratios to the
/// median spacing δ; `phi` — correlation at δ, 0 ≤ phi < 1.
///
/// # Numerics
/// Columns scaled to unit length; JᵀRJ by forward recursion, O(n p²). None when columns are dependent.
///
/// # Source
/// Least squares with a covariance of its own: Huber (1967), White (1980), Econometrica 48; with an
/// autoregression of first order in it: own use, measured by simulation in `benches/coverage`. From
/// memory.
pub fn sandwich(fit: &Fit, x: &[f64], spacing: &[f64], phi: f64) -> Option<(Matrix4<f64>, f64)> {
    sandwich_in(fit, x, &decays(spacing, phi), &mut Workspace::default())
}

/// Returns the covariance and noise variance of [`sandwich`], in a workspace.
///
/// # Arguments
/// `fit`, `x` — as for [`sandwich`]; `decays` — (n), from [`decays`]; `workspace` — room to work
/// in: any, it does not change the result.
pub fn sandwich_in(
    fit: &Fit,
    x: &[f64],
    decays: &[f64],
    workspace: &mut Workspace,
) -> Option<(Matrix4<f64>, f64)> {
    let p = fit.family.parameter_count();
    let Room { columns, scratch, .. } = workspace.held(fit, x);
    let mut scale = [1.0; COEFFICIENTS_MAX];
    for k in 0..p {
        let length = dot(&columns[k], &columns[k]).sqrt();
        if !(length.is_finite() && length > 0.0) {
            return None;
        }
        scale[k] = length.recip();
        columns[k].iter_mut().for_each(|v| *v *= scale[k]);
    }
    sum_the_past(columns, decays, scratch);
    let (mut squares, mut meat) = (Matrix4::identity(), Matrix4::zeros());
    for i in 0..p {
        for k in 0..p {
            squares[(i, k)] = dot(&columns[i], &columns[k]);
            meat[(i, k)] =
                squares[(i, k)] + dot(&columns[i], &scratch[k]) + dot(&columns[k], &scratch[i]);
        }
    }
    let inverse = squares.try_inverse()?;
    let inner = inverse * meat;
    let freedom = (count(fit.n) - inner.trace()).max(1.0);
    let noise = fit.residual_ss / freedom;
    let mut covariance = inner * inverse * noise;
    for i in 0..COEFFICIENTS_MAX {
        for k in 0..COEFFICIENTS_MAX {
            covariance[(i, k)] *= scale[i] * scale[k];
        }
    }
    covariance.iter().all(|v| v.is_finite()).then_some((covariance, noise))
}

/// For each column and reading, the earlier entries, each times what is left of it by then.
fn sum_the_past(columns: &[Vec<f64>; COEFFICIENTS_MAX], decays: &[f64], past: &mut [Vec<f64>]) {
    for past in past.iter_mut() {
        past.clear();
        past.resize(decays.len(), 0.0);
    }
    // All columns in one go: each sum waits for its own last value only.
    let mut sums = [0.0; COEFFICIENTS_MAX];
    for j in 1..decays.len() {
        for k in 0..COEFFICIENTS_MAX {
            sums[k] = (sums[k] + columns[k][j - 1]) * decays[j];
            past[k][j] = sums[k];
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::drift::family::Family;
    use crate::drift::forecast::fit_all;
    use crate::drift::structure::simulate::noise;
    use nalgebra::DMatrix;

    #[test]
    fn the_recursion_is_the_sum_over_all_pairs() {
        let x: Vec<f64> =
            (0..40).map(|i| 3.0 + 0.7 * f64::from(i) + f64::from(i % 3) * 0.1).collect();
        let y: Vec<f64> = noise(12, 40, 0.4)
            .iter()
            .zip(&x)
            .map(|(e, x)| 2.0 + 9.0 * x.sqrt() + 0.3 * e)
            .collect();
        let (_, spacing) = crate::drift::serial::spacing_of(&x);
        let families = [Family::Linear, Family::Power, Family::OffsetPower, Family::Exponential];
        for fit in fit_all(&x, &y, &families) {
            let p = fit.family.parameter_count();
            let (got, noise) = sandwich(&fit, &x, &spacing, 0.6).unwrap();
            let j = DMatrix::from_fn(40, p, |i, k| fit.gradient(x[i])[k]);
            let apart = |i: usize, k: usize| spacing[i.min(k) + 1..=i.max(k)].iter().sum::<f64>();
            let r = DMatrix::from_fn(40, 40, |i, k| 0.6_f64.powf(apart(i, k)));
            let inverse = (j.transpose() * &j).try_inverse().unwrap();
            let want = &inverse * (j.transpose() * r * &j) * &inverse * noise;
            for i in 0..p {
                for k in 0..p {
                    let size = (want[(i, i)] * want[(k, k)]).sqrt();
                    let off = (got[(i, k)] - want[(i, k)]).abs();
                    assert!(off < 1e-6 * size, "{:?} ({i}, {k}): {got}, {want}", fit.family);
                }
            }
        }
    }

    #[test]
    fn nothing_is_left_without_correlation_except_at_the_same_time() {
        let left = decays(&[1.0, 0.0, 3.0], 0.0);
        assert!(left[0] < 1e-300 && (left[1] - 1.0).abs() < 1e-15 && left[2] < 1e-300);
        let left = decays(&[1.0, 2.0], 0.5);
        assert!((left[0] - 0.5).abs() < 1e-15 && (left[1] - 0.25).abs() < 1e-15);
    }
}
