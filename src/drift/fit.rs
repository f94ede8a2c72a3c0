//! Transform, fit a line, transform back, then refine on the original scale.
//!
//! The reported curve is least squares on the original scale. The line through transformed data only
//! gives the start: under additive noise it is biased, by 10 % and more where y comes near zero.
//! Ages are scaled by the largest one inside, so that ages in thousands of days do no harm.

use crate::drift::family::{COEFFICIENTS_MAX, Coefficients, Family};
use crate::drift::serial::count;
use nalgebra::{DMatrix, DVector, Matrix4, Vector4};
use serde::{Deserialize, Serialize};

/// Most Gauss–Newton steps of the refinement; it settles in about six.
const STEPS_MAX: usize = 60;
/// Most halvings of one step before the fit counts as settled.
const HALVINGS_MAX: usize = 40;
/// The refinement is settled when a step changes no coefficient by more than this share of itself.
const SETTLED: f64 = 1e-14;
/// The same for the watch's robust refinement, far below what its data can tell.
const SETTLED_ROBUST: f64 = 1e-7;
/// Range of the power family's exponent; an optimum at its edge is not determined by the data.
const EXPONENT: (f64, f64) = (-4.0, 8.0);
/// Points of the grid on which the exponent is looked for when no logarithms can be taken.
const GRID_POINTS: i32 = 49;
/// Winsorising limit of the robust refinement, in robust standard deviations (Huber 1981).
pub const CLIP_WINSOR: f64 = 3.0;
/// Robust reweighting passes.
const ROBUST_PASSES: usize = 6;

/// A curve fitted by least squares on the original scale.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Fit {
    /// Which family.
    pub family: Family,
    /// Coefficients, in the units of the data.
    pub theta: Coefficients,
    /// The transform-then-line estimate; None where the data allow no transform.
    pub start: Option<Coefficients>,
    /// Ordinary standard errors √diag(s² (JᵀJ)⁻¹).
    pub standard_errors: Coefficients,
    /// Residual sum of squares, unit².
    pub residual_ss: f64,
    /// Residual standard deviation √(RSS/(n−p)), in the unit.
    pub residual_sd: f64,
    /// 1 − RSS/TSS on the original scale; None when all y are equal.
    pub r_squared: Option<f64>,
    /// Number of data.
    pub n: usize,
    /// n − p.
    pub degrees_of_freedom: usize,
    /// Refinement steps taken.
    pub iterations: usize,
}

/// What became of a fit. Data quality is an outcome, not an error.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub enum FitOutcome {
    /// A curve.
    Fitted(Box<Fit>),
    /// Fewer data than the family needs.
    TooFewReadings {
        /// Data given.
        found: usize,
        /// Data needed.
        needed: usize,
    },
    /// Ages outside the family's domain.
    OutsideDomain {
        /// Ages not above 0.
        outside: usize,
        /// Of so many.
        of: usize,
    },
    /// All ages (or their transforms) are equal.
    Singular,
    /// The refinement did not settle.
    NotConverged {
        /// Steps taken.
        iterations: usize,
    },
    /// A number that is not finite came in or would have come out.
    NonFinite,
    /// The data do not pin the curve down: the exponent runs to the edge of its range.
    WeaklyDetermined {
        /// Where the exponent stands.
        exponent: f64,
    },
}

impl FitOutcome {
    /// The reason in plain words; None for a fitted curve.
    pub fn why_not(&self) -> Option<String> {
        Some(match self {
            FitOutcome::Fitted(_) => return None,
            FitOutcome::TooFewReadings { found, needed } => {
                format!("{found} readings found, at least {needed} needed")
            }
            FitOutcome::OutsideDomain { outside, of } => {
                format!("age must be above 0; {outside} of {of} are not")
            }
            FitOutcome::Singular => "all ages are equal".to_owned(),
            FitOutcome::NotConverged { iterations } => {
                format!("the fit did not settle in {iterations} steps")
            }
            FitOutcome::NonFinite => "a number is not finite or too large".to_owned(),
            FitOutcome::WeaklyDetermined { exponent } => format!(
                "the data do not determine the exponent: it runs to {exponent:.2}, the edge of {} \
                 to {}",
                EXPONENT.0, EXPONENT.1
            ),
        })
    }
}

/// Fits one family.
///
/// # Arguments
/// `x` — ages (n), finite; `y` — deviations (n), finite, one unit; `robust` — winsorise residuals at
/// 3 robust standard deviations during refinement (for the watch), instead of plain least squares.
///
/// # Outcomes
/// See [`FitOutcome`]. Families linear in their coefficients and the power family are fitted.
///
/// # Numerics
/// Columns scaled by the largest age; QR on nalgebra; power: log–log start, then Gauss–Newton with
/// step halving on (ln|a| scale kept linear). Cost O(n p²) a step.
///
/// # Source
/// Gauss–Newton with QR: Björck (1996), Numerical Methods for Least Squares Problems, ch. 9; robust
/// step: Huber (1981), Robust Statistics, modified residuals. From memory.
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
    let first = match begin(family, x, y) {
        Ok(first) => first,
        Err(outcome) => return outcome,
    };
    let mut theta = first.theta;
    let mut iterations = 0;
    if robust || !family.is_linear_in_coefficients() {
        match refine(family, x, y, theta, robust) {
            Ok((refined, steps)) => (theta, iterations) = (refined, steps),
            Err(outcome) => return outcome,
        }
    }
    if family == Family::Power && !(EXPONENT.0..EXPONENT.1).contains(&theta[1]) {
        return FitOutcome::WeaklyDetermined { exponent: theta[1] };
    }
    finish(family, x, y, theta, first.start, iterations)
}

/// Where the refinement starts.
struct Beginning {
    theta: Coefficients,
    start: Option<Coefficients>,
}

fn begin(family: Family, x: &[f64], y: &[f64]) -> Result<Beginning, FitOutcome> {
    if family.is_linear_in_coefficients() {
        let theta = solve_linear(family, x, y).ok_or(FitOutcome::Singular)?;
        return Ok(Beginning { theta, start: Some(theta) });
    }
    if family != Family::Power {
        return Err(FitOutcome::NotConverged { iterations: 0 });
    }
    let start = log_log_line(x, y);
    let theta = match start {
        Some(theta) if (EXPONENT.0..EXPONENT.1).contains(&theta[1]) => theta,
        _ => best_on_grid(x, y).ok_or(FitOutcome::Singular)?,
    };
    Ok(Beginning { theta, start })
}

/// Least squares for a family linear in its coefficients, columns scaled to unit length.
fn solve_linear(family: Family, x: &[f64], y: &[f64]) -> Option<Coefficients> {
    let zero = [0.0; COEFFICIENTS_MAX];
    let rows: Vec<Coefficients> = x.iter().map(|&v| family.gradient(&zero, v)).collect();
    least_squares(&rows, y, family.parameter_count()).map(|(theta, _)| theta)
}

/// Solves min ‖A c − r‖ by QR with columns scaled; also returns diag((AᵀA)⁻¹). None when rank fails.
fn least_squares(
    rows: &[Coefficients],
    r: &[f64],
    p: usize,
) -> Option<(Coefficients, Coefficients)> {
    let mut a = DMatrix::from_fn(rows.len(), p, |i, k| rows[i][k]);
    let mut scale = [1.0; COEFFICIENTS_MAX];
    for (k, mut column) in a.column_iter_mut().enumerate() {
        scale[k] = column.norm();
        if !(scale[k].is_finite() && scale[k] > 0.0) {
            return None;
        }
        column /= scale[k];
    }
    let qr = a.qr();
    let upper = qr.r();
    let smallest = (0..p).map(|k| upper[(k, k)].abs()).fold(f64::INFINITY, f64::min);
    if smallest < 1e-13 {
        return None;
    }
    let mut right = DVector::from_column_slice(r);
    qr.q_tr_mul(&mut right);
    let solution = upper.solve_upper_triangular(&right.rows(0, p).into_owned())?;
    let inverse = upper.solve_upper_triangular(&DMatrix::identity(p, p))?;
    let (mut c, mut d) = ([0.0; COEFFICIENTS_MAX], [0.0; COEFFICIENTS_MAX]);
    for k in 0..p {
        c[k] = solution[k] / scale[k];
        d[k] = inverse.row(k).norm_squared() / (scale[k] * scale[k]);
    }
    (c.iter().chain(&d).all(|v| v.is_finite())).then_some((c, d))
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
    let line = solve_linear(Family::Logarithmic, x, &logs)?;
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

/// Gauss–Newton with step halving; residuals winsorised after the first passes when `robust`.
fn refine(
    family: Family,
    x: &[f64],
    y: &[f64],
    mut theta: Coefficients,
    robust: bool,
) -> Result<(Coefficients, usize), FitOutcome> {
    let p = family.parameter_count();
    let data = Data::new(family, x, y);
    let mut here = data.evaluate(family, &theta);
    let mut clipped = here.residuals.clone();
    let mut sorted = Vec::with_capacity(x.len());
    let mut limit = f64::INFINITY;
    let settled = if robust { SETTLED_ROBUST } else { SETTLED };
    for step in 1..=STEPS_MAX {
        if robust && step > 1 && step <= ROBUST_PASSES {
            let scale = robust_scale_in(&here.residuals, &mut sorted);
            limit = if scale > 0.0 { CLIP_WINSOR * scale } else { f64::INFINITY };
        }
        let before = here.cost(limit);
        for (to, r) in clipped.iter_mut().zip(&here.residuals) {
            *to = r.clamp(-limit, limit);
        }
        // The watch refits all day: the scaled normal equations are far exact enough for it.
        let solved = if robust {
            normal_equations(&here.rows, &clipped, p)
        } else {
            least_squares(&here.rows, &clipped, p).map(|(change, _)| change)
        };
        let Some(change) = solved else { return Err(FitOutcome::Singular) };
        let Some((next, there)) = halved(family, &data, &theta, &change, before, limit) else {
            return Ok((theta, step));
        };
        let moved = (0..p).any(|k| (next[k] - theta[k]).abs() > settled * next[k].abs());
        (theta, here) = (next, there);
        if family == Family::Power && theta[1].abs() > 60.0 {
            return Err(FitOutcome::WeaklyDetermined { exponent: theta[1] });
        }
        if !moved && (!robust || step > 2) {
            return Ok((theta, step));
        }
    }
    // Steps at the level of rounding may go on for ever without changing anything that is reported.
    Ok((theta, STEPS_MAX))
}

/// The data of one fit, with the logarithms of the ages taken once.
struct Data<'a> {
    x: &'a [f64],
    y: &'a [f64],
    ln_x: Vec<f64>,
}

/// A curve held against the data.
struct Evaluated {
    residuals: Vec<f64>,
    rows: Vec<Coefficients>,
}

impl<'a> Data<'a> {
    fn new(family: Family, x: &'a [f64], y: &'a [f64]) -> Data<'a> {
        let ln_x = if family.needs_positive_age() {
            x.iter().map(|v| v.ln()).collect()
        } else {
            vec![0.0; x.len()]
        };
        Data { x, y, ln_x }
    }

    fn evaluate(&self, family: Family, theta: &Coefficients) -> Evaluated {
        let n = self.x.len();
        let mut at = Evaluated { residuals: Vec::with_capacity(n), rows: Vec::with_capacity(n) };
        for i in 0..n {
            let (value, row) = family.value_and_gradient(theta, self.x[i], self.ln_x[i]);
            at.residuals.push(self.y[i] - value);
            at.rows.push(row);
        }
        at
    }
}

impl Evaluated {
    fn cost(&self, limit: f64) -> f64 {
        self.residuals.iter().map(|r| loss(r.abs(), limit)).sum()
    }
}

/// Solves min ‖A c − r‖ by the normal equations, columns scaled to a largest entry of 1. None when
/// they are not positive definite.
fn normal_equations(rows: &[Coefficients], r: &[f64], p: usize) -> Option<Coefficients> {
    let mut scale = [0.0_f64; COEFFICIENTS_MAX];
    for row in rows {
        for k in 0..p {
            scale[k] = scale[k].max(row[k].abs());
        }
    }
    let (mut squares, mut right) = (Matrix4::<f64>::zeros(), Vector4::<f64>::zeros());
    for (row, &v) in rows.iter().zip(r) {
        for i in 0..p {
            let a = row[i] / scale[i];
            right[i] += a * v;
            for k in 0..=i {
                squares[(i, k)] += a * row[k] / scale[k];
            }
        }
    }
    for i in 0..COEFFICIENTS_MAX {
        if i >= p {
            squares[(i, i)] = 1.0;
        }
        for k in 0..i {
            squares[(k, i)] = squares[(i, k)];
        }
    }
    let solution = squares.cholesky()?.solve(&right);
    let mut c = [0.0; COEFFICIENTS_MAX];
    for k in 0..p {
        c[k] = solution[k] / scale[k];
    }
    c.iter().all(|v| v.is_finite()).then_some(c)
}

/// The first of the step, half of it, a quarter … that does not raise the cost.
fn halved(
    family: Family,
    data: &Data<'_>,
    theta: &Coefficients,
    change: &Coefficients,
    before: f64,
    limit: f64,
) -> Option<(Coefficients, Evaluated)> {
    let mut share = 1.0;
    for _ in 0..HALVINGS_MAX {
        let mut next = *theta;
        for k in 0..COEFFICIENTS_MAX {
            next[k] += share * change[k];
        }
        let there = data.evaluate(family, &next);
        let after = there.cost(limit);
        if after.is_finite() && after <= before {
            return Some((next, there));
        }
        share *= 0.5;
    }
    None
}

/// Twice Huber's loss: r² inside the limit, 2 c|r| − c² outside.
fn loss(r: f64, limit: f64) -> f64 {
    if r <= limit { r * r } else { limit * (2.0 * r - limit) }
}

/// Returns 1.4826 times the median of |r|: the standard deviation of normal noise, outliers or not.
pub fn robust_scale(residuals: &[f64]) -> f64 {
    robust_scale_in(residuals, &mut Vec::with_capacity(residuals.len()))
}

fn robust_scale_in(residuals: &[f64], sizes: &mut Vec<f64>) -> f64 {
    if residuals.is_empty() {
        return 0.0;
    }
    sizes.clear();
    sizes.extend(residuals.iter().map(|r| r.abs()));
    let middle = sizes.len() / 2;
    let (_, median, _) = sizes.select_nth_unstable_by(middle, f64::total_cmp);
    1.4826 * *median
}

fn finish(
    family: Family,
    x: &[f64],
    y: &[f64],
    theta: Coefficients,
    start: Option<Coefficients>,
    iterations: usize,
) -> FitOutcome {
    let (n, p) = (x.len(), family.parameter_count());
    let rows: Vec<Coefficients> = x.iter().map(|&v| family.gradient(&theta, v)).collect();
    let residuals: Vec<f64> = x.iter().zip(y).map(|(&v, &w)| w - family.value(&theta, v)).collect();
    let Some((_, inverse)) = least_squares(&rows, &residuals, p) else {
        return FitOutcome::Singular;
    };
    let residual_ss: f64 = residuals.iter().map(|r| r * r).sum();
    let mean = y.iter().sum::<f64>() / count(n);
    let total_ss: f64 = y.iter().map(|v| (v - mean).powi(2)).sum();
    let residual_sd = (residual_ss / count(n - p)).sqrt();
    let standard_errors = inverse.map(|d| residual_sd * d.sqrt());
    if !(residual_ss.is_finite() && total_ss.is_finite()) {
        return FitOutcome::NonFinite;
    }
    FitOutcome::Fitted(Box::new(Fit {
        family,
        theta,
        start,
        standard_errors,
        residual_ss,
        residual_sd,
        r_squared: (total_ss > 0.0).then(|| 1.0 - residual_ss / total_ss),
        n,
        degrees_of_freedom: n - p,
        iterations,
    }))
}

#[cfg(test)]
mod tests {
    use super::*;

    /// NIST StRD, DanWood (Daniel and Wood 1980; US public domain): certified values.
    const DANWOOD: [(f64, f64); 6] = [
        (1.309, 2.138),
        (1.471, 3.421),
        (1.490, 3.597),
        (1.565, 4.340),
        (1.611, 4.882),
        (1.680, 5.660),
    ];

    fn fitted(family: Family, data: &[(f64, f64)], robust: bool) -> Fit {
        let (x, y): (Vec<f64>, Vec<f64>) = data.iter().copied().unzip();
        match fit(family, &x, &y, robust) {
            FitOutcome::Fitted(fit) => *fit,
            other => panic!("{other:?}"),
        }
    }

    fn digits(got: f64, want: f64) -> f64 {
        -((got - want) / want).abs().max(1e-17).log10()
    }

    #[test]
    fn reference_strd_danwood_power() {
        let fit = fitted(Family::Power, &DANWOOD, false);
        for (got, want) in [
            (fit.theta[0], 7.688_622_617_6e-1),
            (fit.theta[1], 3.860_405_587_1),
            (fit.standard_errors[0], 1.828_197_386_0e-2),
            (fit.standard_errors[1], 5.172_661_091_3e-2),
            (fit.residual_ss, 4.317_308_408_3e-3),
            (fit.residual_sd, 3.285_311_403_9e-2),
        ] {
            assert!(digits(got, want) > 9.0, "{got} against certified {want}");
        }
    }

    #[test]
    fn fit_recovers_an_exact_logarithmic_curve() {
        let data: Vec<(f64, f64)> =
            (1..200).map(|i| f64::from(i) * 30.0).map(|x| (x, -2.0 + 0.5 * x.ln())).collect();
        let fit = fitted(Family::Logarithmic, &data, false);
        assert!(digits(fit.theta[0], -2.0) > 11.0 && digits(fit.theta[1], 0.5) > 11.0);
    }

    #[test]
    fn power_fit_of_reflected_data_is_the_reflected_fit() {
        let reflected = DANWOOD.map(|(x, y)| (x, -y));
        let (fit, mirror) =
            (fitted(Family::Power, &DANWOOD, false), fitted(Family::Power, &reflected, false));
        assert!(digits(mirror.theta[0], -fit.theta[0]) > 10.0);
        assert!(digits(mirror.theta[1], fit.theta[1]) > 10.0);
    }

    #[test]
    fn power_curve_is_found_when_some_readings_are_not_positive() {
        let data: Vec<(f64, f64)> = (1..=120)
            .map(|i| {
                let x = f64::from(i);
                (x, 0.1 * x.sqrt() + if i % 2 == 0 { 0.3 } else { -0.3 })
            })
            .collect();
        let fit = fitted(Family::Power, &data, false);
        assert!(fit.start.is_none() && (fit.theta[1] - 0.5).abs() < 0.1, "{fit:?}");
    }

    #[test]
    fn a_wild_reading_hardly_moves_the_robust_fit() {
        let mut data: Vec<(f64, f64)> = (1..=100)
            .map(|i| (f64::from(i), 2.0 * f64::from(i) + f64::from(i * 7 % 11) * 0.1))
            .collect();
        let clean = fitted(Family::Linear, &data, true);
        data[90].1 += 1000.0;
        let robust = fitted(Family::Linear, &data, true);
        assert!((robust.theta[1] - clean.theta[1]).abs() < 0.002, "{:?}", robust.theta);
    }

    #[test]
    fn data_that_cannot_carry_a_curve_say_why() {
        let check = |family, x: &[f64], y: &[f64]| fit(family, x, y, false).why_not().unwrap();
        assert_eq!(check(Family::Linear, &[1.0], &[1.0]), "1 readings found, at least 3 needed");
        assert_eq!(
            check(Family::Power, &[0.0, 1.0, 2.0], &[1.0; 3]),
            "age must be above 0; 1 of 3 are not"
        );
        assert_eq!(check(Family::Linear, &[2.0; 5], &[1.0; 5]), "all ages are equal");
        assert_eq!(
            check(Family::Linear, &[1.0, 2.0, f64::NAN], &[1.0; 3]),
            "a number is not finite or too large"
        );
    }
}
