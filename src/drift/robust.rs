//! The watch's fit: least squares on the original scale with residuals clipped at three robust
//! standard deviations, as fast as it can be had, for it is done all day.
//!
//! What is found does not depend on where it started: at the end neither the curve nor the limit at
//! which its residuals are clipped moves any more.

pub mod scale;
mod start;

use start::TAU_MAX;

use crate::drift::family::{COEFFICIENTS_MAX, Coefficients, Family};
use crate::drift::fit::{Held, declined, told, within_bounds};
use crate::drift::frame::Frame;
use crate::drift::lanes::{add, dot, sum, sum_of};
use crate::drift::least_squares::solve_columns;
use crate::drift::outcome::{EXPONENT, Fit, FitOutcome};
use crate::drift::robust::scale::{CLIP_WINSOR, robust_scale_in};
use crate::drift::serial::count;
use crate::drift::workspace::{Room, Workspace, refill};
use nalgebra::{Matrix4, Vector4};

/// Most steps of the refinement; it settles in about four.
const STEPS_MAX: usize = 60;
/// From then on the limit is held: a refinement that has not settled goes round in circles.
const STEPS_RESCALED: usize = 30;
/// Most halvings of one step before the fit counts as settled.
const HALVINGS_MAX: usize = 20;
/// Settled when no more than this is left to go, in standard errors.
const SETTLED: f64 = 1e-7;
/// A step is never expected to leave less than this share of itself to go.
const SHARE_LEFT_MIN: f64 = 0.02;
/// Steps shorter than this, in standard errors, are taken whole: the cost cannot tell them apart.
const NEAR: f64 = 1e-4;
/// Settled too when no coefficient moves by more than this share of itself.
const ROUNDING: f64 = 1e-14;
/// Residuals whose squares are below this share of y's are rounding noise.
const ROUNDING_SQUARED: f64 = 1e-28;
/// Beyond these, a coefficient is out of all bounds; the step that went there is not followed.
const EXPONENT_LOST: f64 = 60.0;
const TAU_LOST: f64 = 1e4;

/// One family on one window, in its frame.
pub(crate) struct Target<'a> {
    pub family: Family,
    pub frame: Frame,
    /// Inner ages; their logarithms where the family needs them.
    ages: &'a [f64],
    pub y: &'a [f64],
    /// Derivatives to the coefficients at the curve held last.
    pub columns: &'a mut [Vec<f64>; COEFFICIENTS_MAX],
    /// y less that curve.
    pub residuals: &'a mut Vec<f64>,
    clipped: &'a mut Vec<f64>,
    sizes: &'a mut Vec<u64>,
    pub scratch: &'a mut [Vec<f64>; COEFFICIENTS_MAX + 1],
}

/// Where the refinement ended.
#[derive(Clone, Copy, Debug)]
pub(crate) struct Refined {
    pub inner: Coefficients,
    pub steps: usize,
    /// Whether it went there straight: no step was halved, and it settled.
    pub straight: bool,
}

impl<'a> Target<'a> {
    /// Prepares a family's fit; None when all ages are equal and the family needs a frame.
    pub fn new(
        family: Family,
        x: &'a [f64],
        y: &'a [f64],
        workspace: &'a mut Workspace,
    ) -> Option<Target<'a>> {
        let (ln_x, room) = if family.needs_positive_age() {
            workspace.logarithms(x)
        } else {
            (x, &mut workspace.room)
        };
        let Room { ages, columns, residuals, clipped, sizes, scratch } = room;
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
        let mut target =
            Target { family, frame, ages, y, columns, residuals, clipped, sizes, scratch };
        target.fill_constant_columns();
        Some(target)
    }

    /// The columns that do not depend on the coefficients.
    fn fill_constant_columns(&mut self) {
        let [first, second, third, fourth] = &mut *self.columns;
        if self.family != Family::Power {
            first.fill(1.0);
        }
        if self.family.is_linear_in_coefficients() {
            second.copy_from_slice(self.ages);
            refill(third, self.ages.iter().map(|u| u * u));
            refill(fourth, self.ages.iter().map(|u| u * u * u));
        }
    }

    /// Holds a curve against the data: columns and residuals.
    pub fn evaluate(&mut self, theta: &Coefficients) {
        let [t0, t1, t2, _] = *theta;
        let [first, second, third, _] = &mut *self.columns;
        let ages = self.ages;
        match self.family {
            Family::Power => {
                power(first, ages, t1);
                times(second, t0, first, ages);
            }
            Family::OffsetPower => {
                power(second, ages, t2);
                times(third, t1, second, ages);
            }
            Family::Exponential => {
                power(second, ages, -t2.recip());
                times(third, -t1 / (t2 * t2), second, ages);
                second.iter_mut().for_each(|e| *e = 1.0 - *e);
            }
            _ => {}
        }
        refill(self.residuals, self.y.iter().copied());
        for k in 0..linear_coefficients(self.family) {
            add(self.residuals, -theta[k], &self.columns[k]);
        }
    }

    /// Refines to where neither curve nor limit moves.
    ///
    /// # Numerics
    /// Newton on Huber's loss by scaled normal equations, the limit taken anew at each step; steps are
    /// halved while they raise the loss. Settled when what is left to go, judged by how fast the steps
    /// shrink, is below 10⁻⁷ standard errors. One `exp` for each reading and step.
    ///
    /// # Source
    /// Huber (1981), Robust Statistics, ch. 7. From memory.
    pub fn refine(&mut self, mut theta: Coefficients) -> Result<Refined, FitOutcome> {
        let rounding = ROUNDING_SQUARED * dot(self.y, self.y);
        let p = self.family.parameter_count();
        self.evaluate(&theta);
        let (mut limit, mut last, mut straight) = (f64::INFINITY, None, true);
        for step in 1..=STEPS_MAX {
            if step <= STEPS_RESCALED {
                limit = self.limit();
            }
            let before = self.cost(limit);
            if before <= rounding {
                return Ok(Refined { inner: theta, steps: step - 1, straight });
            }
            let Some((change, length)) = self.newton(limit) else {
                return Err(FitOutcome::Entangled);
            };
            let sd = if limit.is_finite() {
                limit / CLIP_WINSOR
            } else {
                (before / count(self.y.len())).sqrt()
            };
            let length = length / sd;
            let Some((next, share)) = self.step(&theta, &change, before, limit, length) else {
                self.evaluate(&theta);
                return Ok(Refined { inner: theta, steps: step, straight: false });
            };
            let moved = (0..p).any(|k| (next[k] - theta[k]).abs() > ROUNDING * next[k].abs());
            straight &= share >= 1.0;
            theta = next;
            if !moved || left_to_go(length, last) < SETTLED {
                return Ok(Refined { inner: theta, steps: step, straight });
            }
            if self.lost(&theta) {
                return Ok(Refined { inner: theta, steps: step, straight: false });
            }
            last = Some(length);
        }
        // What goes round in circles does so within what the data can tell.
        Ok(Refined { inner: theta, steps: STEPS_MAX, straight: false })
    }

    /// Limit at which residuals are clipped; infinite when most of them are 0.
    fn limit(&mut self) -> f64 {
        let scale = robust_scale_in(self.residuals, self.sizes);
        if scale > 0.0 { CLIP_WINSOR * scale } else { f64::INFINITY }
    }

    /// Twice Huber's loss: r² inside the limit, 2 c|r| − c² outside.
    fn cost(&self, limit: f64) -> f64 {
        sum_of(self.residuals, |r| {
            let (size, inside) = (r.abs(), r.abs().min(limit));
            inside * (2.0 * size - inside)
        })
    }

    /// The step to the minimum of the loss if the curve were straight, and its length: what it changes
    /// in the curve's values, root of the sum of squares.
    fn newton(&mut self, limit: f64) -> Option<(Coefficients, f64)> {
        let p = self.family.parameter_count();
        refill(self.clipped, self.residuals.iter().map(|r| r.max(-limit).min(limit)));
        let (mut squares, mut right) = (Matrix4::<f64>::identity(), Vector4::<f64>::zeros());
        for i in 0..p {
            right[i] = dot(&self.columns[i], self.clipped);
            for k in 0..=i {
                squares[(i, k)] = dot(&self.columns[i], &self.columns[k]);
            }
        }
        // Clipped residuals do not change with the curve; few are.
        let mut inside = squares;
        if limit.is_finite() {
            for (j, r) in self.residuals.iter().enumerate() {
                if r.abs() > limit {
                    for i in 0..p {
                        for k in 0..=i {
                            inside[(i, k)] -= self.columns[i][j] * self.columns[k][j];
                        }
                    }
                }
            }
        }
        let change =
            solve_scaled(&inside, &right, p).or_else(|| solve_scaled(&squares, &right, p))?;
        let length = right.dot(&Vector4::from(change)).max(0.0).sqrt();
        Some((change, length))
    }

    /// The first of the step, half of it, a quarter … that does not raise the cost, and which share it
    /// was. The columns and residuals are left there.
    fn step(
        &mut self,
        theta: &Coefficients,
        change: &Coefficients,
        before: f64,
        limit: f64,
        length: f64,
    ) -> Option<(Coefficients, f64)> {
        let mut share = 1.0;
        for _ in 0..HALVINGS_MAX {
            let mut next = *theta;
            for k in 0..COEFFICIENTS_MAX {
                next[k] += share * change[k];
            }
            self.evaluate(&next);
            let after = self.cost(limit);
            if after.is_finite() && (after <= before || length < NEAR) {
                return Some((next, share));
            }
            share *= 0.5;
        }
        None
    }

    fn lost(&self, theta: &Coefficients) -> bool {
        match self.family {
            Family::Power => theta[1].abs() > EXPONENT_LOST,
            Family::OffsetPower => theta[2].abs() > EXPONENT_LOST,
            Family::Exponential => theta[2] <= 0.0 || theta[2] > TAU_LOST,
            _ => false,
        }
    }
}

/// Fits one family as the watch does, without anything known beforehand.
///
/// # Arguments
/// `x` — ages (n), days, finite; `y` — deviations (n), finite, one unit; `workspace` — whatever was
/// used before, or a new one: it does not change the result.
///
/// # Outcomes
/// See [`FitOutcome`]. The curve is the one of a [`crate::drift::fit::fit`] whose residuals were
/// clipped at 3 robust standard deviations about itself; its standard errors are ordinary.
///
/// # Numerics
/// Linear, logarithmic and power curves in the ages as they are. Start: a line, through logarithms
/// where there are any, or by projection on a grid; see [`Target::refine`] for the rest. O(n p²).
pub fn fit_robust(family: Family, x: &[f64], y: &[f64], workspace: &mut Workspace) -> FitOutcome {
    if let Some(declined) = declined(family, x, y) {
        return declined;
    }
    let Some(mut target) = Target::new(family, x, y, workspace) else {
        return FitOutcome::Singular;
    };
    told(target.fit(), family, x)
}

impl Target<'_> {
    fn fit(&mut self) -> Result<Fit, FitOutcome> {
        let family = self.family;
        let through_logarithms = if family == Family::Power { self.log_log_line() } else { None };
        let first = match through_logarithms {
            _ if family.is_linear_in_coefficients() => self.line()?,
            Some(theta) if (EXPONENT.0..EXPONENT.1).contains(&theta[1]) => theta,
            _ => self.project()?,
        };
        let start = if family == Family::Power {
            through_logarithms
        } else {
            Some(self.frame.outside(family, &first).0)
        };
        let refined = self.refine(first)?;
        within_bounds(family, self.frame, &refined.inner, TAU_MAX)?;
        self.finish(&refined, start)
    }

    /// Completes the fit from the columns and residuals held last.
    fn finish(
        &mut self,
        refined: &Refined,
        start: Option<Coefficients>,
    ) -> Result<Fit, FitOutcome> {
        let (family, n) = (self.family, self.y.len());
        let p = family.parameter_count();
        let solved = solve_columns(&self.columns[..p], self.residuals, self.scratch)
            .ok_or(FitOutcome::Entangled)?;
        let mean = sum(self.y) / count(n);
        Held {
            family,
            frame: self.frame,
            inner: refined.inner,
            start,
            n,
            residual_ss: dot(self.residuals, self.residuals),
            total_ss: sum_of(self.y, |v| (v - mean) * (v - mean)),
            left: self.residuals.iter().any(|r| r.abs() > 0.0),
            factor: solved.factor,
            iterations: refined.steps,
        }
        .finish()
    }
}

/// Leading coefficients in which the curve is linear, their columns being what they multiply.
const fn linear_coefficients(family: Family) -> usize {
    match family {
        Family::Power => 1,
        Family::OffsetPower | Family::Exponential => 2,
        _ => family.parameter_count(),
    }
}

/// exp(rate age).
fn power(to: &mut [f64], ages: &[f64], rate: f64) {
    for (to, age) in to.iter_mut().zip(ages) {
        *to = (rate * age).exp();
    }
}

/// factor a b.
fn times(to: &mut [f64], factor: f64, a: &[f64], b: &[f64]) {
    for ((to, a), b) in to.iter_mut().zip(a).zip(b) {
        *to = factor * a * b;
    }
}

/// What is left after a step of that length, if steps go on to shrink as they last did.
fn left_to_go(length: f64, last: Option<f64>) -> f64 {
    let Some(last) = last else { return length };
    let share = (length / last).max(SHARE_LEFT_MIN);
    if share < 1.0 { length * share / (1.0 - share) } else { f64::INFINITY }
}

/// Solves the normal equations with columns scaled to unit length; None when they are not positive
/// definite. Only the lower triangle is read.
fn solve_scaled(squares: &Matrix4<f64>, right: &Vector4<f64>, p: usize) -> Option<Coefficients> {
    let scale = Vector4::from_fn(|k, _| if k < p { squares[(k, k)].sqrt().recip() } else { 1.0 });
    let scaled = Matrix4::from_fn(|i, k| squares[(i.max(k), i.min(k))] * scale[i] * scale[k]);
    let solution = scaled.cholesky()?.solve(&right.component_mul(&scale));
    let change: Coefficients = solution.component_mul(&scale).into();
    change.iter().all(|v| v.is_finite()).then_some(change)
}
