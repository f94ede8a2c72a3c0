//! Transform, fit a line, transform back, then refine on the original scale.
//!
//! The reported curve is least squares on the original scale. The line through transformed data only
//! gives the start: under additive noise it is biased, by 10 % and more where y comes near zero.

pub use crate::drift::outcome::{Fit, FitOutcome};
pub use crate::drift::refine::{CLIP_WINSOR, robust_scale};

use crate::drift::family::{COEFFICIENTS_MAX, Coefficients, Family};
use crate::drift::frame::Frame;
use crate::drift::least_squares::solve;
use crate::drift::outcome::{EXPONENT, EXPONENT_MIN, Undetermined};
use crate::drift::projection::{SEARCH_FULL, SEARCH_QUICK, project};
use crate::drift::refine::{Data, refine_plain, refine_robust};
use crate::drift::serial::count;

/// Between age 0 and the oldest reading lie at most so many time constants: beyond e^20, c and a are
/// so large that their difference, the curve, loses the digits that a reader would need.
const TIME_CONSTANTS_MAX: f64 = 20.0;
/// Points of the grid on which the watch looks for the exponent when no logarithms can be taken.
const GRID_POINTS: i32 = 49;

/// Fits one family.
///
/// # Arguments
/// `x` — ages (n), finite; `y` — deviations (n), finite, one unit; `robust` — winsorise residuals at
/// 3 robust standard deviations during refinement (for the watch), instead of plain least squares.
///
/// # Outcomes
/// See [`FitOutcome`].
///
/// # Numerics
/// Ages in the family's [`Frame`]. Families linear in their coefficients: QR. Power: log–log start
/// (robust) or projection. Offset-power and exponential: projection. Then Gauss–Newton. Cost O(n p²) a
/// step, about 100 curve values per reading for a projection, 30 for a robust one.
pub fn fit(family: Family, x: &[f64], y: &[f64], robust: bool) -> FitOutcome {
    assert_eq!(x.len(), y.len(), "one deviation per age");
    let (n, p) = (x.len(), family.parameter_count());
    if n < p + 1 {
        return FitOutcome::TooFewReadings { found: n, needed: p + 1 };
    }
    if x.iter().chain(y).any(|v| !v.is_finite()) {
        return FitOutcome::NonFinite;
    }
    let outside = x.iter().filter(|&&v| v <= 0.0).count();
    if family.needs_positive_age() && outside > 0 {
        return FitOutcome::OutsideDomain { outside, of: n };
    }
    // For the watch these three are well conditioned in any days since calibration.
    let plain_ages = matches!(family, Family::Linear | Family::Logarithmic | Family::Power);
    let frame = if robust && plain_ages { Some(Frame::AS_IS) } else { Frame::of(family, x) };
    let Some(frame) = frame else { return FitOutcome::Singular };
    let data = Data::new(family, frame, x, y);
    match fit_in_frame(family, x, &data, robust) {
        Ok(fit) => FitOutcome::Fitted(Box::new(fit)),
        Err(FitOutcome::Entangled) => why_entangled(x, p),
        Err(other) => other,
    }
}

fn fit_in_frame(
    family: Family,
    x: &[f64],
    data: &Data<'_>,
    robust: bool,
) -> Result<Fit, FitOutcome> {
    let first = begin(family, x, data, robust)?;
    let (mut inner, mut iterations) = (first.inner, 0);
    if robust {
        (inner, iterations) = refine_robust(family, data, inner)?;
    } else if !family.is_linear_in_coefficients() {
        (inner, iterations) = refine_plain(family, data, inner)?;
    }
    let tau_max = if robust { SEARCH_QUICK.tau_max() } else { SEARCH_FULL.tau_max() };
    within_bounds(family, data, &inner, tau_max)?;
    finish(family, data, inner, first.start, iterations)
}

/// Where the refinement starts.
struct Beginning {
    inner: Coefficients,
    /// In the units of the data.
    start: Option<Coefficients>,
}

fn begin(
    family: Family,
    x: &[f64],
    data: &Data<'_>,
    robust: bool,
) -> Result<Beginning, FitOutcome> {
    let outside = |inner: &Coefficients| data.frame.outside(family, inner).0;
    if family.is_linear_in_coefficients() {
        let inner = line(family, &data.u, data.y)?;
        return Ok(Beginning { inner, start: Some(outside(&inner)) });
    }
    let search = if robust { SEARCH_QUICK } else { SEARCH_FULL };
    if family != Family::Power {
        let inner = project(family, data, search)?;
        return Ok(Beginning { inner, start: Some(outside(&inner)) });
    }
    let start = log_log_line(x, data.y);
    let inner = match start {
        _ if !robust => project(family, data, search)?,
        Some(theta) if (EXPONENT.0..EXPONENT.1).contains(&theta[1]) => theta,
        _ => best_on_grid(x, data.y).ok_or(FitOutcome::Entangled)?,
    };
    Ok(Beginning { inner, start })
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
    let sign = if y.iter().all(|&v| v > 0.0) {
        1.0
    } else if y.iter().all(|&v| v < 0.0) {
        -1.0
    } else {
        return None;
    };
    let logs: Vec<f64> = y.iter().map(|v| v.abs().ln()).collect();
    let line = line(Family::Logarithmic, x, &logs).ok()?;
    let theta = [sign * line[0].exp(), line[1], 0.0, 0.0];
    theta[0].is_finite().then_some(theta)
}

/// The exponent of a coarse grid with the smallest sum of squares, a by projection.
fn best_on_grid(x: &[f64], y: &[f64]) -> Option<Coefficients> {
    let largest = x.iter().copied().fold(0.0, f64::max);
    let step = (EXPONENT.1 - EXPONENT.0) / f64::from(GRID_POINTS - 1);
    let mut best: Option<(f64, Coefficients)> = None;
    for k in 0..GRID_POINTS {
        let b = EXPONENT.0 + step * f64::from(k);
        let (mut gg, mut gy) = (0.0, 0.0);
        for (&v, &w) in x.iter().zip(y) {
            let g = (v / largest).powf(b);
            gg += g * g;
            gy += g * w;
        }
        let explained = gy * gy / gg;
        let theta = [gy / gg * largest.powf(-b), b, 0.0, 0.0];
        let usable = explained.is_finite() && theta[0].is_finite();
        if usable && best.is_none_or(|(most, _)| explained > most) {
            best = Some((explained, theta));
        }
    }
    best.map(|(_, theta)| theta)
}

/// Whether the data pin the nonlinear coefficient down; `tau_max` in inner ages.
fn within_bounds(
    family: Family,
    data: &Data<'_>,
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
            undetermined(Undetermined::Line { tau: tau_max * data.frame.scale })
        }
        Family::Exponential => {
            let time_constants = data.frame.centre / (inner[2] * data.frame.scale);
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

fn finish(
    family: Family,
    data: &Data<'_>,
    inner: Coefficients,
    start: Option<Coefficients>,
    iterations: usize,
) -> Result<Fit, FitOutcome> {
    let (n, p, y) = (data.y.len(), family.parameter_count(), data.y);
    let rows: Vec<Coefficients> = data.u.iter().map(|&v| family.gradient(&inner, v)).collect();
    let residuals: Vec<f64> =
        data.u.iter().zip(y).map(|(&v, &w)| w - family.value(&inner, v)).collect();
    let solved = solve(&rows, &residuals, p).ok_or(FitOutcome::Entangled)?;
    let residual_ss: f64 = residuals.iter().map(|r| r * r).sum();
    let mean = y.iter().sum::<f64>() / count(n);
    let total_ss: f64 = y.iter().map(|v| (v - mean).powi(2)).sum();
    let residual_sd = (residual_ss / count(n - p)).sqrt();
    let (theta, turn) = data.frame.outside(family, &inner);
    let factor = turn * solved.factor;
    let mut standard_errors = [0.0; COEFFICIENTS_MAX];
    for (k, error) in standard_errors.iter_mut().enumerate().take(p) {
        *error = residual_sd * factor.row(k).norm();
    }
    let numbers = theta.iter().chain(&standard_errors).chain([&residual_ss, &total_ss]);
    let vanished = residual_ss <= 0.0 && residuals.iter().any(|r| r.abs() > 0.0);
    if vanished || !numbers.into_iter().all(|v| v.is_finite()) {
        return Err(FitOutcome::NonFinite);
    }
    Ok(Fit {
        family,
        theta,
        frame: data.frame,
        inner,
        start,
        standard_errors,
        residual_ss,
        residual_sd,
        r_squared: (total_ss > 0.0).then(|| 1.0 - residual_ss / total_ss),
        largest: y.iter().fold(0.0, |most: f64, v| most.max(v.abs())),
        n,
        degrees_of_freedom: n - p,
        iterations,
    })
}

#[cfg(test)]
mod properties;
#[cfg(test)]
mod tests;
