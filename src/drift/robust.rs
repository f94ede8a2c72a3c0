//! The watch's fit: least squares on the original scale with residuals clipped at three robust
//! standard deviations, as fast as it can be had, for it is done all day.
//!
//! What is found does not depend on where it started: at the end neither the curve nor the limit at
//! which its residuals are clipped moves any more.

mod refine;
pub mod scale;
mod shape;
mod start;

use crate::drift::family::{COEFFICIENTS_MAX, Coefficients, Family};
use crate::drift::fit::{Held, declined, told, within_bounds};
use crate::drift::frame::Frame;
use crate::drift::lanes::{dot, sum, sum_of};
use crate::drift::least_squares::solve_columns;
use crate::drift::outcome::{EXPONENT, Fit, FitOutcome};
use crate::drift::robust::refine::Refined;
use crate::drift::robust::start::TAU_MAX;
use crate::drift::serial::count;
use crate::drift::workspace::{Room, Workspace, refill};

/// A refinement that takes more steps than this did not begin near its end.
const STEPS_NEAR_MAX: usize = 12;

/// One family on one window, in its frame.
pub(crate) struct Target<'a> {
    pub family: Family,
    pub frame: Frame,
    /// Inner ages; their logarithms where the family needs them.
    ages: &'a [f64],
    /// The deviations as they are: starts go by them.
    raw: &'a [f64],
    /// Roots of the weights; None: all weigh 1.
    roots: Option<&'a [f64]>,
    /// The deviations, by the roots of their weights.
    pub y: &'a [f64],
    /// Derivatives to the shape's coefficients at the curve held last, by the roots.
    pub columns: &'a mut [Vec<f64>; COEFFICIENTS_MAX],
    /// y less that curve, by the roots.
    pub residuals: &'a mut Vec<f64>,
    clipped: &'a mut Vec<f64>,
    sizes: &'a mut Vec<u64>,
    pub scratch: &'a mut [Vec<f64>; COEFFICIENTS_MAX + 1],
}

impl<'a> Target<'a> {
    /// Prepares a family's fit; None when all ages are equal and the family needs a frame.
    ///
    /// # Arguments
    /// `family` — the curve's; `x` — ages (n), days; `raw` — deviations (n), in the unit; `weights`
    /// — (n), above 0, None: all 1; `workspace` — room to work in.
    pub(crate) fn new(
        family: Family,
        x: &'a [f64],
        raw: &'a [f64],
        weights: Option<&[f64]>,
        workspace: &'a mut Workspace,
    ) -> Option<Target<'a>> {
        let (ln_x, room) = if family.needs_positive_age() {
            workspace.logarithms(x)
        } else {
            (x, &mut workspace.room)
        };
        let Room { ages, columns, roots, weighted_y, residuals, clipped, sizes, scratch } = room;
        let (frame, ages): (Frame, &[f64]) = match family {
            // Well conditioned in any days since calibration.
            Family::Linear => (Frame::AS_IS, x),
            Family::Logarithmic | Family::Power => (Frame::AS_IS, ln_x),
            Family::OffsetPower => {
                let frame = Frame::of_logarithms(ln_x)?;
                let centre = frame.scale.ln();
                refill(ages, ln_x.iter().map(|l| l - centre));
                (frame, ages)
            }
            Family::Exponential | Family::Quadratic | Family::Cubic => {
                let frame = Frame::of(family, x)?;
                refill(ages, x.iter().map(|&v| frame.inside(v)));
                (frame, ages)
            }
        };
        for column in columns.iter_mut() {
            column.resize(x.len(), 0.0);
        }
        let roots = weights.map(|weights| {
            refill(roots, weights.iter().map(|w| w.sqrt()));
            refill(weighted_y, raw.iter().zip(&*roots).map(|(y, root)| root * y));
            &roots[..]
        });
        let y = if roots.is_some() { &weighted_y[..] } else { raw };
        let mut target = Target {
            family,
            frame,
            ages,
            raw,
            roots,
            y,
            columns,
            residuals,
            clipped,
            sizes,
            scratch,
        };
        target.fill_constant_columns();
        Some(target)
    }
}

/// Fits one family as the watch does, without anything known beforehand.
///
/// # Arguments
/// `family` — the curve's; `x` — ages (n), days, finite; `y` — deviations (n), finite, one unit;
/// `workspace` — whatever was used before, or a new one: it does not change the result.
///
/// # Outcomes
/// See [`FitOutcome`]. The curve is the one of a [`crate::drift::fit::fit`] whose residuals were
/// clipped at 3 robust standard deviations about itself; its standard errors are ordinary.
///
/// # Numerics
/// Linear, logarithmic and power curves in the ages as they are. Start: a line, through logarithms
/// where there are any, or by projection on a grid; see `Target::refine` for the rest. O(n p²).
pub fn fit_robust(family: Family, x: &[f64], y: &[f64], workspace: &mut Workspace) -> FitOutcome {
    fit_robust_weighted(family, x, y, None, workspace)
}

/// Fits one family as the watch does, some data weighing more than others.
///
/// # Arguments
/// As for [`fit_robust`]; `weights` — (n), finite, above 0, of mean 1; None: all alike, to the same
/// bits as [`fit_robust`].
///
/// # Outcomes
/// Those of [`fit_robust`]. Sums of squares are Σ w r²; the residual standard deviation is in y's unit,
/// that of a datum of weight 1.
///
/// # Numerics
/// Residuals and derivatives by √w; clipped at 3 robust standard deviations of √w r, which scatter
/// alike where weights are right. Starts go by the data as they are.
///
/// # Source
/// Aitken (1935), Proceedings of the Royal Society of Edinburgh 55. From memory.
pub fn fit_robust_weighted(
    family: Family,
    x: &[f64],
    y: &[f64],
    weights: Option<&[f64]>,
    workspace: &mut Workspace,
) -> FitOutcome {
    if let Some(weights) = weights {
        assert_eq!(weights.len(), x.len(), "one weight per age");
        assert!(weights.iter().all(|w| w.is_finite() && *w > 0.0), "weights are above 0");
    }
    if let Some(declined) = declined(family, x, y) {
        return declined;
    }
    let Some(mut target) = Target::new(family, x, y, weights, workspace) else {
        return FitOutcome::Singular;
    };
    told(target.fit(), family, x)
}

/// Fits one family as the watch does, beginning where the fit of an earlier window ended.
///
/// # Arguments
/// As for [`fit_robust`]; `previous` — a fit of the channel's window as it was at the last refit. Only
/// its exponent or time constant is used: the rest follows from it by a line.
///
/// # Outcomes
/// Those of [`fit_robust`], the coefficients the same within 10⁻⁶ standard errors, unless the sum of
/// squares has two minima and the better one has changed sides. Whatever is not plain is fitted anew:
/// another family, a curve near the bounds of its family, a refinement that does not go straight.
///
/// # Numerics
/// Saves the grid, a sixth of the cost of all five curves; families linear in their coefficients need
/// no start and gain nothing.
pub fn fit_from(
    family: Family,
    x: &[f64],
    y: &[f64],
    previous: &Fit,
    workspace: &mut Workspace,
) -> FitOutcome {
    if let Some(declined) = declined(family, x, y) {
        return declined;
    }
    if previous.family == family
        && let Some(mut target) = Target::new(family, x, y, None, workspace)
        && let Some(fit) = target.fit_near(previous)
    {
        return FitOutcome::Fitted(Box::new(fit));
    }
    fit_robust(family, x, y, workspace)
}

impl Target<'_> {
    /// The fit whose start is known; None where it had better be looked for.
    fn fit_near(&mut self, previous: &Fit) -> Option<Fit> {
        let first = self.project_at(self.nonlinear(&previous.theta)?);
        let refined = self.refine(first).ok()?;
        let plain = refined.straight && refined.steps <= STEPS_NEAR_MAX;
        if !plain || !self.well_within_bounds(&refined.theta) {
            return None;
        }
        let power = self.family == Family::Power;
        let start = if power { self.log_log_line() } else { self.told(&first) };
        self.finish(&refined, start).ok()
    }

    fn fit(&mut self) -> Result<Fit, FitOutcome> {
        let family = self.family;
        let through_logarithms = if family == Family::Power { self.log_log_line() } else { None };
        let first = match through_logarithms {
            _ if family.is_linear_in_coefficients() => self.line()?,
            Some(theta) if (EXPONENT.0..EXPONENT.1).contains(&theta[1]) => theta,
            _ => self.project()?,
        };
        let refined = self.refine(first)?;
        let start = if family == Family::Power { through_logarithms } else { self.told(&first) };
        self.finish(&refined, start)
    }

    /// Coefficients of the shape in the units of the data; None where they are not finite there.
    fn told(&self, theta: &Coefficients) -> Option<Coefficients> {
        let (outer, _) = self.frame.outside(self.family, &self.inner(theta));
        outer.iter().all(|v| v.is_finite()).then_some(outer)
    }

    /// Completes the fit from the columns and residuals held last.
    fn finish(
        &mut self,
        refined: &Refined,
        start: Option<Coefficients>,
    ) -> Result<Fit, FitOutcome> {
        let (family, n) = (self.family, self.y.len());
        let p = family.parameter_count();
        let inner = self.inner(&refined.theta);
        within_bounds(family, self.frame, &inner, TAU_MAX)?;
        self.own_columns(&inner);
        let solved = solve_columns(&self.columns[..p], self.residuals, self.scratch)
            .ok_or(FitOutcome::Entangled)?;
        let total_ss = self.total_ss();
        Held {
            family,
            frame: self.frame,
            inner,
            start,
            n,
            residual_ss: dot(self.residuals, self.residuals),
            total_ss,
            largest: self.raw.iter().fold(0.0, |most: f64, v| most.max(v.abs())),
            left: self.residuals.iter().any(|r| r.abs() > 0.0),
            factor: solved.factor,
            iterations: refined.steps,
        }
        .finish()
    }

    /// The sum of squares about the mean; of both, each datum by its weight.
    fn total_ss(&self) -> f64 {
        let Some(roots) = self.roots else {
            let mean = sum(self.y) / count(self.y.len());
            return sum_of(self.y, |v| (v - mean) * (v - mean));
        };
        let mean = dot(roots, self.y) / dot(roots, roots);
        let off = |(root, y): (&f64, &f64)| (root * (y - mean)).powi(2);
        roots.iter().zip(self.raw).map(off).sum()
    }
}

#[cfg(test)]
mod tests;
