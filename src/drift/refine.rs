//! Gauss–Newton on the original scale, until no digit changes.

use crate::drift::family::{COEFFICIENTS_MAX, Coefficients, Family};
use crate::drift::frame::Frame;
use crate::drift::least_squares::solve;
use crate::drift::outcome::FitOutcome;

/// Most Gauss–Newton steps of the refinement; it settles in about six.
const STEPS_MAX: usize = 60;
/// Most halvings of one step before the fit counts as settled.
const HALVINGS_MAX: usize = 40;
/// Plain refinement is settled when a step changes no coefficient by more than this share of itself.
const SETTLED: f64 = 1e-15;
/// Relative offset below which sums of squares can no longer tell a good step from a bad one, for
/// they change by its square: whole steps are taken as long as the offset shrinks.
const NEAR: f64 = 1e-5;
/// Relative offset that a fit must have reached when its steps run out.
const NEAR_ENOUGH: f64 = 1e-4;
/// Residuals whose squares are below this share of y's are rounding noise.
const ROUNDING: f64 = 1e-28;

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
    ///
    /// # Arguments
    /// `family` — the curve's; `frame` — its frame; `x` — ages (n), days; `y` — deviations (n), in
    /// the unit.
    pub(crate) fn new(family: Family, frame: Frame, x: &[f64], y: &'a [f64]) -> Data<'a> {
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
    fn cost(&self) -> f64 {
        self.residuals.iter().map(|r| r * r).sum()
    }
}

/// Refines by plain least squares until no digit changes. Returns the inner coefficients and the
/// number of steps.
///
/// # Arguments
/// `family` — the curve's; `data` — in its frame; `theta` — where to start, in that frame.
///
/// # Numerics
/// Gauss–Newton by QR; steps are halved while they raise the sum of squares. Near the optimum the
/// relative offset decides: the share of the residuals that the curve's columns still explain.
///
/// # Source
/// Gauss–Newton with QR: Björck (1996), Numerical Methods for Least Squares Problems, ch. 9; relative
/// offset: Bates and Watts (1981), Technometrics 23. From memory.
pub(crate) fn refine_plain(
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
        let before = here.cost();
        let offset = solved.explained / before.sqrt();
        let near = offset < NEAR;
        if before <= rounding || (near && offset > 0.5 * last_offset) {
            return Ok((theta, step - 1));
        }
        let change = &solved.coefficients;
        let next = if near { whole(family, data, &theta, change) } else { None };
        let next = next.or_else(|| halved(family, data, &theta, change, before));
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
    there.cost().is_finite().then_some((next, there))
}

/// The first of the step, half of it, a quarter … that does not raise the cost.
fn halved(
    family: Family,
    data: &Data<'_>,
    theta: &Coefficients,
    change: &Coefficients,
    before: f64,
) -> Option<(Coefficients, Evaluated)> {
    let mut share = 1.0;
    for _ in 0..HALVINGS_MAX {
        let mut next = *theta;
        for k in 0..COEFFICIENTS_MAX {
            next[k] += share * change[k];
        }
        let there = data.evaluate(family, &next);
        let after = there.cost();
        if after.is_finite() && after <= before {
            return Some((next, there));
        }
        share *= 0.5;
    }
    None
}
