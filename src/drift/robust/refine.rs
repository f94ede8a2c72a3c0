//! The refinement: Newton on Huber's loss, its limit following the residuals.

use crate::drift::family::{COEFFICIENTS_MAX, Coefficients, Family};
use crate::drift::lanes::{add, dot, sum_of};
use crate::drift::outcome::FitOutcome;
use crate::drift::robust::Target;
use crate::drift::robust::scale::{CLIP_WINSOR, robust_scale_in};
use crate::drift::serial::count;
use crate::drift::workspace::refill;
use nalgebra::{Matrix4, Vector4};

/// Most steps of the refinement; it settles in about four.
const STEPS_MAX: usize = 60;
/// From then on the limit too goes by secants: it and the curve may drive each other to and fro.
const STEPS_FOLLOWED: usize = 6;
/// From then on the limit is held: a refinement that has not settled goes round in circles.
const STEPS_RESCALED: usize = 30;
/// Most halvings of one step before the fit counts as settled.
const HALVINGS_MAX: usize = 20;
/// Settled when no more than this is left to go, in standard errors.
const SETTLED: f64 = 1e-8;
/// A step is never expected to leave less than this share of itself to go.
const SHARE_LEFT_MIN: f64 = 0.05;
/// Steps shorter than this, in standard errors, are taken whole: the cost cannot tell them apart.
const NEAR: f64 = 1e-4;
/// Settled too when no coefficient moves by more than this share of itself.
const ROUNDING: f64 = 1e-14;
/// Residuals whose squares are below this share of y's are rounding noise.
const ROUNDING_SQUARED: f64 = 1e-28;
/// A step is corrected by at most these factors.
const SECANT: std::ops::Range<f64> = 0.2..5.0;
/// An exponent beyond this is out of all bounds; the step that went there is not followed.
const EXPONENT_LOST: f64 = 60.0;

/// Where the refinement ended.
#[derive(Clone, Copy, Debug)]
pub(crate) struct Refined {
    /// Coefficients of the shape.
    pub theta: Coefficients,
    pub steps: usize,
    /// Whether it went there straight: no step was halved, and it settled.
    pub straight: bool,
}

/// The nonlinear coefficient's last place and the step that was wanted there.
#[derive(Clone, Copy, Debug, Default)]
struct Secant(Option<(f64, f64)>);

impl Secant {
    /// The step to where, going by this one and the last, no step will be wanted: Newton without the
    /// curve's second derivatives, and with a limit that follows, goes too far or not far enough by
    /// about the same share each time.
    fn corrected(&mut self, place: f64, step: f64) -> f64 {
        let last = self.0.replace((place, step));
        let slope = last.map_or(-1.0, |(before, wanted)| (step - wanted) / (place - before));
        let share = -slope.recip();
        if SECANT.contains(&share) { share * step } else { step }
    }
}

impl Target<'_> {
    /// Refines to where neither curve nor limit moves.
    ///
    /// # Arguments
    /// `theta` — where to start, as the shape has it.
    ///
    /// # Numerics
    /// Newton on Huber's loss by scaled normal equations, the limit taken anew at each step; steps are
    /// halved while they raise the loss. Settled when what is left to go, judged by how fast the steps
    /// shrink, is below 10⁻⁸ standard errors. One `exp` for each reading and step.
    ///
    /// # Source
    /// Huber (1981), Robust Statistics, ch. 7. From memory.
    pub(super) fn refine(&mut self, mut theta: Coefficients) -> Result<Refined, FitOutcome> {
        let rounding = ROUNDING_SQUARED * dot(self.y, self.y);
        let p = self.family.parameter_count();
        self.evaluate(&theta);
        let (mut limit, mut last, mut straight) = (f64::INFINITY, None, true);
        let (mut secant, mut secant_limit) = (Secant::default(), Secant::default());
        for step in 1..=STEPS_MAX {
            if step <= STEPS_RESCALED {
                let fresh = self.limit();
                limit = if step > STEPS_FOLLOWED && fresh.is_finite() && limit.is_finite() {
                    (limit + secant_limit.corrected(limit, fresh - limit)).max(0.5 * fresh)
                } else {
                    fresh
                };
            }
            let before = self.cost(limit);
            if before <= rounding {
                return Ok(Refined { theta, steps: step - 1, straight });
            }
            let Some((mut change, length)) = self.newton(p, limit) else {
                return Err(FitOutcome::Entangled);
            };
            if let Some(factor) = self.factor(&theta) {
                // The nonlinear coefficient's column came without its factor.
                let whole = change[p - 1] / factor;
                change[p - 1] = secant.corrected(theta[p - 1], whole);
            }
            let sd = if limit.is_finite() {
                limit / CLIP_WINSOR
            } else {
                (before / count(self.y.len())).sqrt()
            };
            let length = length / sd;
            let Some((next, share)) = self.step(&theta, &change, before, limit, length) else {
                self.evaluate(&theta);
                return Ok(Refined { theta, steps: step, straight: false });
            };
            let moved = (0..p).any(|k| (next[k] - theta[k]).abs() > ROUNDING * next[k].abs());
            straight &= share >= 1.0;
            theta = next;
            if !moved || left_to_go(length, last) < SETTLED {
                return Ok(Refined { theta, steps: step, straight });
            }
            if self.lost(&theta) {
                return Ok(Refined { theta, steps: step, straight: false });
            }
            last = Some(length);
        }
        // What goes round in circles does so within what the data can tell.
        Ok(Refined { theta, steps: STEPS_MAX, straight: false })
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
    fn newton(&mut self, p: usize, limit: f64) -> Option<(Coefficients, f64)> {
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
            if !self.family.is_linear_in_coefficients() {
                self.settle_linear(&mut next, limit);
            }
            let after = self.cost(limit);
            if after.is_finite() && (after <= before || length < NEAR) {
                return Some((next, share));
            }
            share *= 0.5;
        }
        None
    }

    /// Takes the step to the minimum in the coefficients in which the curve is linear, the nonlinear
    /// one held: along a curved valley this saves most of the steps, and costs no `exp`.
    fn settle_linear(&mut self, theta: &mut Coefficients, limit: f64) {
        let p = self.linear();
        let Some((change, _)) = self.newton(p, limit) else { return };
        for k in 0..p {
            theta[k] += change[k];
            add(self.residuals, -change[k], &self.columns[k]);
        }
    }

    fn lost(&self, theta: &Coefficients) -> bool {
        match self.family {
            Family::Power => theta[1].abs() > EXPONENT_LOST,
            Family::OffsetPower => theta[2].abs() > EXPONENT_LOST,
            _ => false,
        }
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
