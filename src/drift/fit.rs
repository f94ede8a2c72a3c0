//! Transform, fit a line, transform back, then refine on the original scale.
//!
//! The reported curve is least squares on the original scale. The line through transformed data only
//! gives the start: under additive noise it is biased, by 10 % and more where y comes near zero.

pub use crate::drift::outcome::{Fit, FitOutcome};
pub use crate::drift::robust::scale::{CLIP_WINSOR, robust_scale};

use crate::drift::family::{COEFFICIENTS_MAX, Coefficients, Family};
use crate::drift::frame::Frame;
use crate::drift::least_squares::solve;
use crate::drift::outcome::{EXPONENT, EXPONENT_MIN, Undetermined};
use crate::drift::projection::{TAU_MAX, project};
use crate::drift::refine::{Data, refine_plain};
use crate::drift::robust;
use crate::drift::serial::count;
use crate::drift::workspace::Workspace;
use nalgebra::Matrix4;

/// Between age 0 and the oldest reading lie at most so many time constants: beyond e^20, c and a are
/// so large that their difference, the curve, loses the digits that a reader would need.
const TIME_CONSTANTS_MAX: f64 = 20.0;

/// Fits one family.
///
/// # Arguments
/// `family` — the curve's; `x` — ages (n), finite; `y` — deviations (n), finite, one unit; `robust`
/// — winsorise residuals at 3 robust standard deviations during refinement (for the watch), instead
/// of plain least squares.
///
/// # Outcomes
/// See [`FitOutcome`].
///
/// # Numerics
/// Plain, in the family's [`Frame`]. Families linear in their coefficients: QR. The others: projection,
/// about 100 curve values for each reading, then Gauss–Newton. Cost O(n p²) a step. Robust: see
/// [`robust::fit_robust`].
pub fn fit(family: Family, x: &[f64], y: &[f64], robust: bool) -> FitOutcome {
    if robust {
        return robust::fit_robust(family, x, y, &mut Workspace::default());
    }
    if let Some(declined) = declined(family, x, y) {
        return declined;
    }
    let Some(frame) = Frame::of(family, x) else { return FitOutcome::Singular };
    let data = Data::new(family, frame, x, y);
    told(fit_in_frame(family, x, &data), family, x)
}

/// What keeps data from being fitted at all.
pub(crate) fn declined(family: Family, x: &[f64], y: &[f64]) -> Option<FitOutcome> {
    assert_eq!(x.len(), y.len(), "one deviation per age");
    let (n, p) = (x.len(), family.parameter_count());
    if n < p + 1 {
        return Some(FitOutcome::TooFewReadings { found: n, needed: p + 1 });
    }
    if x.iter().chain(y).any(|v| !v.is_finite()) {
        return Some(FitOutcome::NonFinite);
    }
    let outside = x.iter().filter(|&&v| v <= 0.0).count();
    (family.needs_positive_age() && outside > 0)
        .then_some(FitOutcome::OutsideDomain { outside, of: n })
}

/// The outcome, with the reason where columns depend on each other.
pub(crate) fn told(result: Result<Fit, FitOutcome>, family: Family, x: &[f64]) -> FitOutcome {
    match result {
        Ok(fit) => FitOutcome::Fitted(Box::new(fit)),
        Err(FitOutcome::Entangled) => why_entangled(x, family.parameter_count()),
        Err(other) => other,
    }
}

fn fit_in_frame(family: Family, x: &[f64], data: &Data<'_>) -> Result<Fit, FitOutcome> {
    let outside = |inner: &Coefficients| data.frame.outside(family, inner).0;
    let (first, start) = if family.is_linear_in_coefficients() {
        let first = line(family, &data.u, data.y)?;
        (first, Some(outside(&first)))
    } else {
        let first = project(family, data)?;
        let start =
            if family == Family::Power { log_log_line(x, data.y) } else { Some(outside(&first)) };
        (first, start)
    };
    let (inner, iterations) = if family.is_linear_in_coefficients() {
        (first, 0)
    } else {
        refine_plain(family, data, first)?
    };
    within_bounds(family, data.frame, &inner, TAU_MAX)?;
    let rows: Vec<Coefficients> = data.u.iter().map(|&v| family.gradient(&inner, v)).collect();
    let residuals: Vec<f64> =
        data.u.iter().zip(data.y).map(|(&v, &w)| w - family.value(&inner, v)).collect();
    let solved = solve(&rows, &residuals, family.parameter_count()).ok_or(FitOutcome::Entangled)?;
    let mean = data.y.iter().sum::<f64>() / count(data.y.len());
    Held {
        family,
        frame: data.frame,
        inner,
        start,
        n: data.y.len(),
        residual_ss: residuals.iter().map(|r| r * r).sum(),
        total_ss: data.y.iter().map(|v| (v - mean).powi(2)).sum(),
        largest: data.y.iter().fold(0.0, |most: f64, v| most.max(v.abs())),
        left: residuals.iter().any(|r| r.abs() > 0.0),
        factor: solved.factor,
        iterations,
    }
    .finish()
}

/// Least squares for a family linear in its coefficients.
fn line(family: Family, u: &[f64], y: &[f64]) -> Result<Coefficients, FitOutcome> {
    let zero = [0.0; COEFFICIENTS_MAX];
    let rows: Vec<Coefficients> = u.iter().map(|&v| family.gradient(&zero, v)).collect();
    let solved = solve(&rows, y, family.parameter_count()).ok_or(FitOutcome::Entangled)?;
    Ok(solved.coefficients)
}

/// ln|y| against ln x, a line, transformed back. None when y changes sign or touches 0.
fn log_log_line(x: &[f64], y: &[f64]) -> Option<Coefficients> {
    let sign = y[0].signum();
    if !y.iter().all(|v| v * sign > 0.0) {
        return None;
    }
    let logs: Vec<f64> = y.iter().map(|v| v.abs().ln()).collect();
    let line = line(Family::Logarithmic, x, &logs).ok()?;
    let theta = [sign * line[0].exp(), line[1], 0.0, 0.0];
    theta[0].is_finite().then_some(theta)
}

/// Whether the data pin the nonlinear coefficient down; `tau_max` in inner ages.
pub(crate) fn within_bounds(
    family: Family,
    frame: Frame,
    inner: &Coefficients,
    tau_max: f64,
) -> Result<(), FitOutcome> {
    let undetermined = |what| Err(FitOutcome::WeaklyDetermined(what));
    match family {
        Family::Power if !(EXPONENT.0..EXPONENT.1).contains(&inner[1]) => {
            undetermined(Undetermined::Exponent { exponent: inner[1] })
        }
        Family::OffsetPower if !(EXPONENT.0..EXPONENT.1).contains(&inner[2]) => {
            undetermined(Undetermined::Exponent { exponent: inner[2] })
        }
        Family::OffsetPower if inner[2].abs() < EXPONENT_MIN => {
            undetermined(Undetermined::Logarithmic { exponent: inner[2] })
        }
        Family::Exponential if inner[2] <= 0.0 || inner[2] > tau_max => {
            undetermined(Undetermined::Line { tau: tau_max * frame.scale })
        }
        Family::Exponential => {
            let time_constants = frame.centre / (inner[2] * frame.scale);
            if time_constants > TIME_CONSTANTS_MAX {
                return undetermined(Undetermined::FarFromZero { time_constants });
            }
            Ok(())
        }
        _ => Ok(()),
    }
}

/// Why columns depend on each other.
fn why_entangled(x: &[f64], p: usize) -> FitOutcome {
    let mut ages = x.to_vec();
    ages.sort_by(f64::total_cmp);
    ages.dedup();
    match ages.len() {
        0 | 1 => FitOutcome::Singular,
        found if found < p => FitOutcome::TooFewAges { found, needed: p },
        _ => FitOutcome::Entangled,
    }
}

/// A curve held against the data, at the end.
pub(crate) struct Held {
    pub family: Family,
    pub frame: Frame,
    pub inner: Coefficients,
    /// In the units of the data.
    pub start: Option<Coefficients>,
    pub n: usize,
    pub residual_ss: f64,
    pub total_ss: f64,
    /// The largest |y|.
    pub largest: f64,
    /// Whether any residual is not 0.
    pub left: bool,
    /// L with (JᵀJ)⁻¹ = L Lᵀ.
    pub factor: Matrix4<f64>,
    pub iterations: usize,
}

impl Held {
    /// Completes the fit.
    pub fn finish(self) -> Result<Fit, FitOutcome> {
        let Held { family, frame, inner, start, n, residual_ss, total_ss, .. } = self;
        let p = family.parameter_count();
        let residual_sd = (residual_ss / count(n - p)).sqrt();
        let (theta, turn) = frame.outside(family, &inner);
        let factor = turn * self.factor;
        let mut standard_errors = [0.0; COEFFICIENTS_MAX];
        for (k, error) in standard_errors.iter_mut().enumerate().take(p) {
            *error = residual_sd * factor.row(k).norm();
        }
        let numbers = theta.iter().chain(&standard_errors).chain([&residual_ss, &total_ss]);
        let vanished = residual_ss <= 0.0 && self.left;
        if vanished || !numbers.into_iter().all(|v| v.is_finite()) {
            return Err(FitOutcome::NonFinite);
        }
        Ok(Fit {
            family,
            theta,
            frame,
            inner,
            start,
            standard_errors,
            residual_ss,
            residual_sd,
            r_squared: (total_ss > 0.0).then(|| 1.0 - residual_ss / total_ss),
            largest: self.largest,
            n,
            degrees_of_freedom: n - p,
            iterations: self.iterations,
        })
    }
}

#[cfg(test)]
mod properties;
#[cfg(test)]
mod tests;
