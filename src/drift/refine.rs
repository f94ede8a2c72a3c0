//! Gauss–Newton on the original scale: plain until no digit changes, or robust for the watch.

use crate::drift::family::{COEFFICIENTS_MAX, Coefficients, Family};
use crate::drift::frame::Frame;
use crate::drift::least_squares::{solve, solve_fast};
use crate::drift::outcome::FitOutcome;

/// Most Gauss–Newton steps of the refinement; it settles in about six.
const STEPS_MAX: usize = 60;
/// Most halvings of one step before the fit counts as settled.
const HALVINGS_MAX: usize = 40;
/// Plain refinement is settled when a step changes no coefficient by more than this share of itself.
const SETTLED: f64 = 1e-15;
/// The same for the watch's robust refinement, far below what its data can tell.
const SETTLED_ROBUST: f64 = 1e-7;
/// Relative offset below which sums of squares can no longer tell a good step from a bad one, for
/// they change by its square: whole steps are taken as long as the offset shrinks.
const NEAR: f64 = 1e-5;
/// Relative offset that a fit must have reached when its steps run out.
const NEAR_ENOUGH: f64 = 1e-4;
/// Residuals whose squares are below this share of y's are rounding noise.
const ROUNDING: f64 = 1e-28;
/// Winsorising limit of the robust refinement, in robust standard deviations (Huber 1981).
pub const CLIP_WINSOR: f64 = 3.0;
/// Robust reweighting passes.
const ROBUST_PASSES: usize = 6;
/// An exponent beyond this is out of all bounds; the step that went there is not followed further.
const EXPONENT_LOST: f64 = 60.0;

/// The data of one fit in its frame, with the logarithms of the ages taken once.
#[derive(Clone, Debug)]
pub struct Data<'a> {
    /// The frame.
    pub frame: Frame,
    /// Inner ages.
    pub u: Vec<f64>,
    /// Their logarithms where the family needs them, else 0.
    pub ln_u: Vec<f64>,
    /// Deviations.
    pub y: &'a [f64],
}

/// A curve held against the data.
struct Evaluated {
    residuals: Vec<f64>,
    rows: Vec<Coefficients>,
}

impl<'a> Data<'a> {
    /// Takes the data into a frame.
    pub fn new(family: Family, frame: Frame, x: &[f64], y: &'a [f64]) -> Data<'a> {
        let u: Vec<f64> = x.iter().map(|&v| frame.inside(v)).collect();
        let ln_u = if family.needs_positive_age() {
            u.iter().map(|v| v.ln()).collect()
        } else {
            vec![0.0; u.len()]
        };
        Data { frame, u, ln_u, y }
    }

    fn evaluate(&self, family: Family, theta: &Coefficients) -> Evaluated {
        let n = self.u.len();
        let mut at = Evaluated { residuals: Vec::with_capacity(n), rows: Vec::with_capacity(n) };
        for i in 0..n {
            let (value, row) = family.value_and_gradient(theta, self.u[i], self.ln_u[i]);
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

/// Refines by plain least squares until no digit changes. Returns the inner coefficients and the
/// number of steps.
///
/// # Numerics
/// Gauss–Newton by QR; steps are halved while they raise the sum of squares. Near the optimum the
/// relative offset decides: the share of the residuals that the curve's columns still explain.
///
/// # Source
/// Gauss–Newton with QR: Björck (1996), Numerical Methods for Least Squares Problems, ch. 9; relative
/// offset: Bates and Watts (1981), Technometrics 23. From memory.
pub fn refine_plain(
    family: Family,
    data: &Data<'_>,
    mut theta: Coefficients,
) -> Result<(Coefficients, usize), FitOutcome> {
    let p = family.parameter_count();
    let rounding = ROUNDING * data.y.iter().map(|v| v * v).sum::<f64>();
    let mut here = data.evaluate(family, &theta);
    let mut last_offset = f64::INFINITY;
    for step in 1..=STEPS_MAX {
        let Some(solved) = solve(&here.rows, &here.residuals, p) else {
            return Err(FitOutcome::Entangled);
        };
        let before = here.cost(f64::INFINITY);
        let offset = solved.explained / before.sqrt();
        let near = offset < NEAR;
        if before <= rounding || (near && offset > 0.5 * last_offset) {
            return Ok((theta, step - 1));
        }
        let change = &solved.coefficients;
        let next = if near { whole(family, data, &theta, change) } else { None };
        let next = next.or_else(|| halved(family, data, &theta, change, before, f64::INFINITY));
        let Some((next, there)) = next else { return Ok((theta, step)) };
        let moved = (0..p).any(|k| (next[k] - theta[k]).abs() > SETTLED * next[k].abs());
        (theta, here, last_offset) = (next, there, offset);
        if !moved {
            return Ok((theta, step));
        }
    }
    let settled = last_offset < NEAR_ENOUGH;
    if settled {
        Ok((theta, STEPS_MAX))
    } else {
        Err(FitOutcome::NotConverged { iterations: STEPS_MAX })
    }
}

/// Refines with step halving, residuals winsorised after the first pass, for the watch: it refits
/// all day, and the scaled normal equations are far exact enough for it.
///
/// # Source
/// Huber (1981), Robust Statistics, modified residuals. From memory.
pub fn refine_robust(
    family: Family,
    data: &Data<'_>,
    mut theta: Coefficients,
) -> Result<(Coefficients, usize), FitOutcome> {
    let p = family.parameter_count();
    let mut here = data.evaluate(family, &theta);
    let mut clipped = here.residuals.clone();
    let mut sorted = Vec::with_capacity(data.u.len());
    let mut limit = f64::INFINITY;
    for step in 1..=STEPS_MAX {
        if step > 1 && step <= ROBUST_PASSES {
            let scale = robust_scale_in(&here.residuals, &mut sorted);
            limit = if scale > 0.0 { CLIP_WINSOR * scale } else { f64::INFINITY };
        }
        let before = here.cost(limit);
        for (to, r) in clipped.iter_mut().zip(&here.residuals) {
            *to = r.clamp(-limit, limit);
        }
        let Some(change) = solve_fast(&here.rows, &clipped, p) else {
            return Err(FitOutcome::Entangled);
        };
        let Some((next, there)) = halved(family, data, &theta, &change, before, limit) else {
            return Ok((theta, step));
        };
        let moved = (0..p).any(|k| (next[k] - theta[k]).abs() > SETTLED_ROBUST * next[k].abs());
        (theta, here) = (next, there);
        if family == Family::Power && theta[1].abs() > EXPONENT_LOST {
            return Ok((theta, step));
        }
        if !moved && step > 2 {
            return Ok((theta, step));
        }
    }
    // Steps at the level of rounding may go on for ever without changing anything that is reported.
    Ok((theta, STEPS_MAX))
}

/// The whole step; None where the curve is not finite after it.
fn whole(
    family: Family,
    data: &Data<'_>,
    theta: &Coefficients,
    change: &Coefficients,
) -> Option<(Coefficients, Evaluated)> {
    let mut next = *theta;
    for k in 0..COEFFICIENTS_MAX {
        next[k] += change[k];
    }
    let there = data.evaluate(family, &next);
    there.cost(f64::INFINITY).is_finite().then_some((next, there))
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
