//! Forecast of one window: the Akaike-weighted mean of the families, and how uncertain it is.
//!
//! The variance of a new reading at age x is the noise itself, plus each family's own uncertainty
//! (serial dependence allowed for), plus the families' disagreement, plus the disagreement of the
//! newer half of the window with the whole. It does not yet know whether the future resembles the
//! window: that is what the backtests of [`crate::drift::reach`] are for.

use crate::drift::choose::{Choice, choose};
use crate::drift::family::{COEFFICIENTS_MAX, Family};
use crate::drift::fit::{CLIP_WINSOR, Fit, FitOutcome, fit, robust_scale};
use crate::drift::serial::{count, effective_count, lag_correlation, spacing_of};
use nalgebra::{Matrix4, Vector4};

/// Families with less Akaike weight than this are left out.
const WEIGHT_MIN: f64 = 1e-3;
/// Two-sided 95 % point of the normal distribution.
pub const NORMAL_95: f64 = 1.959_963_984_540_054;

/// A value and the standard deviation of a new reading about it.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Expected {
    /// Expected deviation.
    pub value: f64,
    /// Standard deviation of a new reading.
    pub sd: f64,
}

/// Everything needed to forecast from one window.
#[derive(Clone, Debug)]
pub struct Forecaster {
    members: Vec<Member>,
    /// The best family on the newer half, with its own covariance.
    half: Option<Member>,
    /// The weights and the name.
    pub choice: Choice,
    /// Variance of the noise about the chosen curve.
    noise: f64,
}

#[derive(Clone, Debug)]
struct Member {
    fit: Fit,
    weight: f64,
    covariance: Matrix4<f64>,
}

impl Forecaster {
    /// Fits the families and prepares their uncertainties.
    ///
    /// # Arguments
    /// `x` — ages, days, strictly increasing; `y` — deviations; `families` — those that may make a
    /// forecast (never quadratic or cubic); `phi` — usual correlation of neighbours; the window's own
    /// estimate counts if larger.
    ///
    /// # Returns
    /// None when no family can be fitted.
    ///
    /// # Source
    /// Akaike-weighted mean and unconditional variance: Buckland, Burnham and Augustin (1997),
    /// Biometrics 53; contrast of the halves after Hausman (1978), own use. From memory.
    pub fn new(x: &[f64], y: &[f64], families: &[Family], phi: f64) -> Option<Forecaster> {
        let fits = fit_all(x, y, families);
        if fits.is_empty() || x.len() < 8 {
            return None;
        }
        let (_, spacing) = spacing_of(x);
        let best = choose(&fits, effective_count(x.len(), phi), None).chosen;
        let phi = phi.max(own_correlation(&fits[best], x, y, &spacing)).clamp(0.0, 0.97);
        let choice = choose(&fits, effective_count(x.len(), phi), None);
        let mut noise = None;
        let mut members = Vec::new();
        for (i, fit) in fits.iter().enumerate() {
            let Some((covariance, variance)) = sandwich(fit, x, &spacing, phi) else {
                // A family whose uncertainty cannot be had makes no forecast; the others may.
                continue;
            };
            if i == choice.chosen {
                noise = Some(variance);
            }
            if choice.weights[i] >= WEIGHT_MIN || i == choice.chosen {
                members.push(Member { fit: fit.clone(), weight: choice.weights[i], covariance });
            }
        }
        let total: f64 = members.iter().map(|m| m.weight).sum();
        members.iter_mut().for_each(|m| m.weight /= total);
        let half = newer_half(x, y, fits[choice.chosen].family, phi);
        Some(Forecaster { members, half, choice, noise: noise? })
    }

    /// The forecast at age `x`, days.
    pub fn at(&self, x: f64) -> Expected {
        let value: f64 = self.members.iter().map(|m| m.weight * m.value(x)).sum();
        let between: f64 = self
            .members
            .iter()
            .map(|m| m.weight * (m.variance(x) + (m.value(x) - value).powi(2)))
            .sum();
        let contrast = self
            .half
            .as_ref()
            .map_or(0.0, |half| ((value - half.value(x)).powi(2) - half.variance(x)).max(0.0));
        Expected { value, sd: (self.noise + between + contrast).sqrt() }
    }
}

impl Member {
    fn value(&self, x: f64) -> f64 {
        self.fit.value(x)
    }

    fn variance(&self, x: f64) -> f64 {
        let g = Vector4::from(self.fit.gradient(x));
        g.dot(&(self.covariance * g)).max(0.0)
    }
}

/// Fits each family robustly and keeps those that could be fitted.
pub fn fit_all(x: &[f64], y: &[f64], families: &[Family]) -> Vec<Fit> {
    families
        .iter()
        .filter_map(|&family| match fit(family, x, y, true) {
            FitOutcome::Fitted(fit) => Some(*fit),
            _ => None,
        })
        .collect()
}

/// Returns the correlation of a fit's clipped residuals at the median spacing, bias-corrected.
pub fn own_correlation(fit: &Fit, x: &[f64], y: &[f64], spacing: &[f64]) -> f64 {
    lag_correlation(&winsorised(fit, x, y), spacing, fit.family.parameter_count())
}

/// Residuals clipped at 3 robust standard deviations.
pub fn winsorised(fit: &Fit, x: &[f64], y: &[f64]) -> Vec<f64> {
    let mut residuals = fit.residuals(x, y);
    let limit = CLIP_WINSOR * robust_scale(&residuals);
    if limit > 0.0 {
        residuals.iter_mut().for_each(|r| *r = r.clamp(-limit, limit));
    }
    residuals
}

fn newer_half(x: &[f64], y: &[f64], family: Family, phi: f64) -> Option<Member> {
    let from = x.len() / 2;
    let (x, y) = (&x[from..], &y[from..]);
    let fit = fit_all(x, y, &[family]).pop()?;
    let (_, spacing) = spacing_of(x);
    let (covariance, _) = sandwich(&fit, x, &spacing, phi)?;
    Some(Member { fit, weight: 1.0, covariance })
}

/// Returns the inner coefficients' covariance with serial dependence allowed for, and the noise
/// variance; [`Fit::standard_errors_of`] turns it into the data's units.
///
/// V = s² (JᵀJ)⁻¹ JᵀRJ (JᵀJ)⁻¹, s² = RSS/(n − tr[(JᵀJ)⁻¹ JᵀRJ]), R_ij = phi^(|t_i − t_j|/δ).
///
/// # Arguments
/// `spacing` — ratios to the median spacing δ; `phi` — correlation at δ, 0 ≤ phi < 1.
///
/// # Numerics
/// Columns scaled to unit length; JᵀRJ by forward recursion, O(n p²). None when columns are dependent.
pub fn sandwich(fit: &Fit, x: &[f64], spacing: &[f64], phi: f64) -> Option<(Matrix4<f64>, f64)> {
    let p = fit.family.parameter_count();
    let mut rows: Vec<Vector4<f64>> = x.iter().map(|&v| Vector4::from(fit.gradient(v))).collect();
    let mut scale = Vector4::repeat(1.0);
    for k in 0..p {
        let length = rows.iter().map(|row| row[k] * row[k]).sum::<f64>().sqrt();
        if !(length.is_finite() && length > 0.0) {
            return None;
        }
        scale[k] = 1.0 / length;
        rows.iter_mut().for_each(|row| row[k] *= scale[k]);
    }
    let (mut squares, mut meat) = (Matrix4::zeros(), Matrix4::zeros());
    let mut past = Vector4::zeros();
    for (j, row) in rows.iter().enumerate() {
        if j > 0 {
            past = (past + rows[j - 1]) * phi.powf(spacing[j]);
        }
        squares += row * row.transpose();
        meat += row * row.transpose() + row * past.transpose() + past * row.transpose();
    }
    for k in p..COEFFICIENTS_MAX {
        squares[(k, k)] = 1.0;
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

#[cfg(test)]
mod tests {
    use super::*;
    use crate::drift::structure::simulate::noise;

    #[test]
    fn without_dependence_the_sandwich_is_the_ordinary_covariance() {
        let x: Vec<f64> = (1..=50).map(f64::from).collect();
        let y: Vec<f64> = noise(7, 50, 0.0).iter().zip(&x).map(|(e, x)| x + e).collect();
        let FitOutcome::Fitted(fit) = fit(Family::Linear, &x, &y, false) else { panic!() };
        let (v, _) = sandwich(&fit, &x, &[1.0; 50], 0.0).unwrap();
        let errors = fit.standard_errors_of(&v);
        for (got, want) in errors.iter().zip(fit.standard_errors).take(2) {
            assert!((got / want - 1.0).abs() < 1e-9, "{got} against {want}");
        }
    }

    #[test]
    fn every_monotone_family_forecasts_from_ages_far_from_zero() {
        let families = [
            Family::Linear,
            Family::Logarithmic,
            Family::Power,
            Family::OffsetPower,
            Family::Exponential,
        ];
        let x: Vec<f64> = (0..120).map(|i| 400.0 + 0.5 * f64::from(i)).collect();
        let y: Vec<f64> = noise(11, 120, 0.3)
            .iter()
            .zip(&x)
            .map(|(e, x)| 8.0 * (1.0 - (-(x - 400.0) / 25.0).exp()) + 0.2 * e)
            .collect();
        let forecaster = Forecaster::new(&x, &y, &families, 0.3).unwrap();
        let expected = forecaster.at(x[119] + 10.0);
        let truth = 8.0 * (1.0 - (-69.5_f64 / 25.0).exp());
        assert!((expected.value - truth).abs() < 3.0 * expected.sd, "{expected:?}, {truth}");
        assert!(expected.sd < 0.5, "{expected:?}");
    }

    #[test]
    fn dependence_widens_the_standard_errors() {
        let x: Vec<f64> = (1..=100).map(f64::from).collect();
        let y: Vec<f64> = noise(8, 100, 0.5).iter().zip(&x).map(|(e, x)| x + e).collect();
        let fit = fit_all(&x, &y, &[Family::Linear]).pop().unwrap();
        let plain = sandwich(&fit, &x, &[1.0; 100], 0.0).unwrap().0;
        let wide = sandwich(&fit, &x, &[1.0; 100], 0.5).unwrap().0;
        assert!(wide[(1, 1)] > 2.0 * plain[(1, 1)]);
    }

    #[test]
    fn a_new_reading_lies_within_the_interval_as_often_as_claimed() {
        let (mut inside, mut all) = (0, 0);
        for seed in 100..300 {
            let e = noise(seed, 130, 0.3);
            let x: Vec<f64> = (1..=130).map(|i| f64::from(i) * 0.5).collect();
            let y: Vec<f64> = x.iter().zip(&e).map(|(x, e)| 5.0 * x.sqrt() + e).collect();
            let families = [Family::Logarithmic, Family::Power, Family::Linear];
            let forecaster = Forecaster::new(&x[..100], &y[..100], &families, 0.3).unwrap();
            let expected = forecaster.at(x[120]);
            inside += usize::from((y[120] - expected.value).abs() <= NORMAL_95 * expected.sd);
            all += 1;
        }
        // 95 % claimed; 200 trials have a standard error of 1.5 %.
        assert!(inside * 100 >= 91 * all, "{inside} of {all}");
    }
}
