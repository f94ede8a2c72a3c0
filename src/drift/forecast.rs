//! Forecast of one window: the Akaike-weighted mean of the families, and how uncertain it is.
//!
//! The variance of a new reading at age x is the noise itself, plus each family's own uncertainty
//! (serial dependence allowed for), plus the families' disagreement, plus the disagreement of the
//! newer half of the window with the whole. It does not yet know whether the future resembles the
//! window: that is what the backtests of [`crate::drift::reach`] are for.

pub use crate::drift::sandwich::{own_correlation, sandwich, winsorised};

use crate::drift::choose::{Choice, choose};
use crate::drift::family::Family;
use crate::drift::fit::{Fit, FitOutcome};
use crate::drift::robust::fit_robust;
use crate::drift::sandwich::{decays, own_correlation_in, sandwich_in};
use crate::drift::serial::{effective_count, spacing_of};
use crate::drift::workspace::Workspace;
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
        Forecaster::new_in(x, y, families, phi, &mut Workspace::default())
    }

    /// Fits the families and prepares their uncertainties, in a workspace.
    ///
    /// # Arguments
    /// As for [`Forecaster::new`]; `workspace` — room to work in: any, it does not change the
    /// result.
    pub fn new_in(
        x: &[f64],
        y: &[f64],
        families: &[Family],
        phi: f64,
        workspace: &mut Workspace,
    ) -> Option<Forecaster> {
        let fits = fit_all_in(x, y, families, workspace);
        if fits.is_empty() || x.len() < 8 {
            return None;
        }
        let (_, spacing) = spacing_of(x);
        let best = choose(&fits, effective_count(x.len(), phi), None).chosen;
        let phi =
            phi.max(own_correlation_in(&fits[best], x, y, &spacing, workspace)).clamp(0.0, 0.97);
        let choice = choose(&fits, effective_count(x.len(), phi), None);
        let decays = decays(&spacing, phi);
        let mut noise = None;
        let mut members = Vec::new();
        for (i, fit) in fits.iter().enumerate() {
            let Some((covariance, variance)) = sandwich_in(fit, x, &decays, workspace) else {
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
        let half = newer_half(x, y, fits[choice.chosen].family, phi, workspace);
        Some(Forecaster { members, half, choice, noise: noise? })
    }

    /// Returns the forecast at an age: value and standard deviation of a new reading.
    ///
    /// # Arguments
    /// `x` — age, days; > 0 where a family needs it.
    pub fn at(&self, x: f64) -> Expected {
        let mut own = [(0.0, 0.0); Family::ALL.len()];
        for (own, member) in own.iter_mut().zip(&self.members) {
            *own = member.at(x);
        }
        let weighed = || self.members.iter().map(|m| m.weight).zip(own);
        let value: f64 = weighed().map(|(weight, (value, _))| weight * value).sum();
        let between: f64 = weighed()
            .map(|(weight, (own, variance))| weight * (variance + (own - value).powi(2)))
            .sum();
        let contrast = self.half.as_ref().map_or(0.0, |half| {
            let (newer, variance) = half.at(x);
            ((value - newer).powi(2) - variance).max(0.0)
        });
        Expected { value, sd: (self.noise + between + contrast).sqrt() }
    }
}

impl Member {
    /// The curve's value and its variance.
    fn at(&self, x: f64) -> (f64, f64) {
        let (value, gradient) = self.fit.value_and_gradient(x);
        let g = Vector4::from(gradient);
        (value, g.dot(&(self.covariance * g)).max(0.0))
    }
}

/// Fits each family robustly and keeps those that could be fitted.
///
/// # Arguments
/// `x` — ages (n), days, strictly increasing; `y` — deviations (n), in the unit; `families` — those
/// to fit.
pub fn fit_all(x: &[f64], y: &[f64], families: &[Family]) -> Vec<Fit> {
    fit_all_in(x, y, families, &mut Workspace::default())
}

/// Fits each family robustly, in a workspace, and keeps those that could be fitted.
///
/// # Arguments
/// As for [`fit_all`]; `workspace` — room to work in: any, it does not change the result.
pub fn fit_all_in(
    x: &[f64],
    y: &[f64],
    families: &[Family],
    workspace: &mut Workspace,
) -> Vec<Fit> {
    families
        .iter()
        .filter_map(|&family| match fit_robust(family, x, y, workspace) {
            FitOutcome::Fitted(fit) => Some(*fit),
            _ => None,
        })
        .collect()
}

fn newer_half(
    x: &[f64],
    y: &[f64],
    family: Family,
    phi: f64,
    workspace: &mut Workspace,
) -> Option<Member> {
    let from = x.len() / 2;
    let (x, y) = (&x[from..], &y[from..]);
    let fit = fit_all_in(x, y, &[family], workspace).pop()?;
    let (_, spacing) = spacing_of(x);
    let (covariance, _) = sandwich_in(&fit, x, &decays(&spacing, phi), workspace)?;
    Some(Member { fit, weight: 1.0, covariance })
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::drift::fit::fit;
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
