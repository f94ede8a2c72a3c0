//! The window in whitened form: innovations of an AR(1)/Ornstein–Uhlenbeck noise about the framed
//! curve, their tangents, and the normal equations that every added-column test shares.

use super::frame::Frame;
use super::small::{Matrix, ORDER_MAX, inverse};
use crate::drift::family::{COEFFICIENTS_MAX, Coefficients};
use crate::drift::serial;

/// Innovations are clipped at ± this many noise sigmas (P. J. Huber, Robust estimation of a
/// location parameter, 1964).
pub const CLIP: f64 = 3.0;

/// One point of the window. All but the first depend on the point before.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(crate) struct Point {
    /// Age, days.
    pub x: f64,
    /// Age from the frame's origin in median spacings.
    pub t: f64,
    /// Spacing from the point before, in medians.
    pub ratio: f64,
    /// Residual, y's unit.
    pub e: f64,
    /// Orthonormal tangents of the curve.
    pub tangent: Coefficients,
    /// Innovation, noise sigmas.
    pub u: f64,
    /// Innovation clipped at ± [`CLIP`].
    pub uc: f64,
    /// Whitened tangents.
    pub jt: Coefficients,
    /// Whitened image of 1 here and 0 before: w.
    pub a1: f64,
    /// Whitened image of the constant 1: w (1 − f).
    pub b1: f64,
    /// Whitened image of t: w (t − f t before).
    pub t1: f64,
}

impl Point {
    /// The same point as the first of a window.
    fn without_past(&self) -> Point {
        Point {
            ratio: 1.0,
            u: 0.0,
            uc: 0.0,
            jt: [0.0; COEFFICIENTS_MAX],
            a1: 0.0,
            b1: 0.0,
            t1: 0.0,
            ..*self
        }
    }
}

/// The whitened window; rebuilt in place by [`Whitened::refill`], moved on by [`Whitened::slide`].
#[derive(Clone, Debug, PartialEq)]
pub struct Whitened {
    pub(crate) frame: Frame,
    pub(crate) points: Vec<Point>,
    /// Whether the spacing of the whole window counts as even.
    pub(crate) regular: bool,
    /// Inverse of G = Jtᵀ Jt.
    pub(crate) g_inverse: Matrix,
    /// G⁻¹ Jtᵀ uc: what the clipped innovations would move the curve by.
    pub(crate) beta: [f64; ORDER_MAX],
    /// Residual sum of squares of uc on Jt, noise sigmas².
    pub(crate) rss: f64,
    /// Degrees of freedom of an added-column test, n − 2 − p.
    pub(crate) nu: f64,
}

impl Whitened {
    /// Builds the whitened window.
    ///
    /// # Arguments
    /// `frame` — from the last refit; `x` — ages, days, ascending; `y` — deviations; at least
    /// [`super::frame::POINTS_MIN`] points, the same bounds as for the frame.
    /// # Outcomes
    /// `None` when there are too few points or one is not finite.
    pub fn new(frame: Frame, x: &[f64], y: &[f64]) -> Option<Whitened> {
        let mut w = Whitened {
            frame,
            points: Vec::with_capacity(x.len()),
            regular: true,
            g_inverse: [[0.0; ORDER_MAX]; ORDER_MAX],
            beta: [0.0; ORDER_MAX],
            rss: 0.0,
            nu: 1.0,
        };
        w.fill(x, y).then_some(w)
    }

    /// Rebuilds the window for a new frame in the same memory; `false` as `None` of [`Self::new`].
    ///
    /// # Arguments
    /// As for [`Self::new`].
    pub fn refill(&mut self, frame: Frame, x: &[f64], y: &[f64]) -> bool {
        self.frame = frame;
        self.fill(x, y)
    }

    /// Appends one point and drops the oldest beyond `keep`; bit for bit what a rebuild gives.
    ///
    /// # Arguments
    /// `x` — age, days, not below the newest; `y` — deviation; `keep` — points to stay.
    /// # Outcomes
    /// `false` (nothing changed) when the point is not finite, goes back in time, or `keep` is
    /// below [`super::frame::POINTS_MIN`].
    pub fn slide(&mut self, x: f64, y: f64, keep: usize) -> bool {
        let Some(last) = self.points.last().copied() else { return false };
        let ok = x.is_finite() && y.is_finite() && x >= last.x && keep >= super::frame::POINTS_MIN;
        if !ok {
            return false;
        }
        self.points.push(self.point(x, y, Some(&last)));
        let surplus = self.points.len().saturating_sub(keep);
        self.points.drain(..surplus);
        if surplus > 0 {
            self.points[0] = self.points[0].without_past();
        }
        self.solve();
        true
    }

    /// Points in the window.
    pub fn len(&self) -> usize {
        self.points.len()
    }

    /// Whether the window holds no point (it never does once built).
    pub fn is_empty(&self) -> bool {
        self.points.is_empty()
    }

    /// Age of the newest point, days.
    pub fn newest_age(&self) -> f64 {
        self.points.last().map_or(f64::NEG_INFINITY, |point| point.x)
    }

    /// The frame of the last refit.
    pub fn frame(&self) -> &Frame {
        &self.frame
    }

    /// Leverage and fitted innovation of point j in the window's own regression.
    pub(crate) fn fitted(&self, j: usize) -> (f64, f64) {
        let p = self.frame.parameters();
        let jt = &self.points[j].jt;
        let mut leverage = 0.0;
        let mut fit = 0.0;
        for a in 0..p {
            fit += jt[a] * self.beta[a];
            for c in 0..p {
                leverage += jt[a] * self.g_inverse[a][c] * jt[c];
            }
        }
        (leverage, fit)
    }

    /// Projects a candidate column out of the curve: returns numerator Dᵀuc − Sᵀbeta and
    /// denominator DᵀD − SᵀG⁻¹S, where S = JtᵀD.
    pub(crate) fn project(&self, cross: f64, square: f64, s: &Coefficients) -> (f64, f64) {
        let p = self.frame.parameters();
        let mut numerator = cross;
        let mut denominator = square;
        for a in 0..p {
            numerator -= s[a] * self.beta[a];
            for c in 0..p {
                denominator -= s[a] * self.g_inverse[a][c] * s[c];
            }
        }
        (numerator, denominator)
    }

    /// t² of a candidate that lowers the residual sum of squares by `gain`.
    pub(crate) fn t_of_gain(&self, gain: f64) -> f64 {
        (gain / ((self.rss - gain) / self.nu).max(1e-12)).sqrt()
    }

    /// Estimates the size of a candidate effect with large residuals clipped *about the
    /// alternative* (the scan clips about the curve, which shortens large effects).
    ///
    /// # Arguments
    /// `column` — whitened candidate value of point j ≥ 1.
    /// # Numerics
    /// Huber's modified residuals at fixed scale: convex, ten Gauss–Newton steps.
    pub(crate) fn effect(&self, column: impl Fn(usize) -> f64) -> f64 {
        let p = self.frame.parameters();
        let mut s: Coefficients = [0.0; COEFFICIENTS_MAX];
        let mut square = 0.0;
        for j in 1..self.points.len() {
            let d = column(j);
            square += d * d;
            for a in 0..p {
                s[a] += d * self.points[j].jt[a];
            }
        }
        let (_, denominator) = self.project(0.0, square, &s);
        if denominator <= 1e-10 * square {
            return 0.0;
        }
        let (mut size, mut beta) = (0.0, [0.0; COEFFICIENTS_MAX]);
        for step in 0..10 {
            let mut cross = 0.0;
            let mut b = [0.0; COEFFICIENTS_MAX];
            for j in 1..self.points.len() {
                let point = &self.points[j];
                let d = column(j);
                let mut r = point.u - size * d;
                for a in 0..p {
                    r -= beta[a] * point.jt[a];
                }
                // The first step starts from plain least squares, so that no effect is clipped.
                let r = if step == 0 { r } else { r.clamp(-CLIP, CLIP) };
                cross += d * r;
                for a in 0..p {
                    b[a] += point.jt[a] * r;
                }
            }
            let mut move_ = cross;
            let mut g_b = [0.0; COEFFICIENTS_MAX];
            for a in 0..p {
                g_b[a] = (0..p).map(|c| self.g_inverse[a][c] * b[c]).sum();
                move_ -= s[a] * g_b[a];
            }
            move_ /= denominator;
            size += move_;
            for a in 0..p {
                let g_s: f64 = (0..p).map(|c| self.g_inverse[a][c] * s[c]).sum();
                beta[a] += g_b[a] - g_s * move_;
            }
        }
        if size.is_finite() { size } else { 0.0 }
    }

    fn fill(&mut self, x: &[f64], y: &[f64]) -> bool {
        assert_eq!(x.len(), y.len(), "one deviation per age");
        let finite = x.iter().chain(y).all(|v| v.is_finite());
        if x.len() < super::frame::POINTS_MIN || !finite || x.windows(2).any(|w| w[1] < w[0]) {
            return false;
        }
        self.points.clear();
        let mut last: Option<Point> = None;
        for (&x, &y) in x.iter().zip(y) {
            let point = self.point(x, y, last.as_ref());
            self.points.push(point);
            last = Some(point);
        }
        self.solve();
        true
    }

    fn point(&self, x: f64, y: f64, last: Option<&Point>) -> Point {
        let frame = &self.frame;
        let t = (x - frame.origin_days) / frame.spacing_days;
        let mut point = Point {
            x,
            t,
            ratio: 1.0,
            e: frame.residual(x, y),
            tangent: frame.tangent(x),
            u: 0.0,
            uc: 0.0,
            jt: [0.0; COEFFICIENTS_MAX],
            a1: 0.0,
            b1: 0.0,
            t1: 0.0,
        };
        if let Some(last) = last {
            point.ratio = serial::spacing_ratio(x - last.x, frame.spacing_days);
            let (f, weight) = frame.link(point.ratio);
            let w = weight / frame.noise;
            // ± 1e6 sigmas: sums of squares stay finite whatever arrives.
            point.u = (w * (point.e - f * last.e)).clamp(-1e6, 1e6);
            point.uc = point.u.clamp(-CLIP, CLIP);
            for a in 0..frame.parameters() {
                point.jt[a] = w * (point.tangent[a] - f * last.tangent[a]);
            }
            (point.a1, point.b1, point.t1) = (w, w * (1.0 - f), w * (t - f * last.t));
        }
        point
    }

    fn solve(&mut self) {
        let p = self.frame.parameters();
        let mut g: Matrix = [[0.0; ORDER_MAX]; ORDER_MAX];
        let mut b = [0.0; ORDER_MAX];
        let mut square = 0.0;
        self.regular = true;
        for point in &self.points[1..] {
            self.regular &= (point.ratio - 1.0).abs() <= serial::REGULAR_TOLERANCE;
            square += point.uc * point.uc;
            for a in 0..p {
                b[a] += point.jt[a] * point.uc;
                for c in 0..=a {
                    g[a][c] += point.jt[a] * point.jt[c];
                }
            }
        }
        for a in 0..p {
            for c in 0..a {
                g[c][a] = g[a][c];
            }
            // A tangent without a direction of its own takes no part.
            g[a][a] = if g[a][a] > 0.0 { g[a][a] * (1.0 + 1e-13) } else { 1.0 };
        }
        self.g_inverse = inverse(&g, p).unwrap_or([[0.0; ORDER_MAX]; ORDER_MAX]);
        self.rss = square;
        for a in 0..p {
            self.beta[a] = (0..p).map(|c| self.g_inverse[a][c] * b[c]).sum();
            self.rss -= b[a] * self.beta[a];
        }
        self.rss = self.rss.max(0.0);
        self.nu = (self.points.len() - 2 - p) as f64;
    }
}
