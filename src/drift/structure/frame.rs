//! What one refit leaves behind for the looks that follow it: the curve, its tangent plane, the
//! dependence and the noise. Small, serialisable, and enough to whiten any later point.

use super::baseline::Baseline;
use super::resolution::{DITHER_ABOVE_SIGMAS, dither, resolution_of};
use crate::drift::family::{COEFFICIENTS_MAX, Coefficients, Family};
use crate::drift::serial;
use serde::{Deserialize, Serialize};

/// Fewer points than this are not examined: the offsets of the budget were measured from 60 up,
/// and half of 30 points is the least in which a step can be told from the curve.
pub const POINTS_MIN: usize = 30;
/// More points than this in one window are a caller's mistake; looks cost O(n).
pub const POINTS_MAX: usize = 100_000;
/// Noise below this fraction of the largest |y| is rounding of arithmetic, not noise.
pub const NO_SCATTER: f64 = 1e-12;
/// The noise is never taken smaller than this fraction of the first noise seen (a record that goes
/// quiet for a while must not turn the next ordinary reading into an event).
pub(crate) const NOISE_FLOOR: f64 = 0.01;
/// E[min(Z², 9)] for a standard normal Z: undoes the shrinkage of clipping at 3.
const CLIPPED_VARIANCE: f64 = 0.99502;
/// Baseline dependence is held within [0, this].
pub(crate) const PHI_BASE_MAX: f64 = 0.9;
/// A tangent that is parallel to the earlier ones within this fraction carries no direction.
const PARALLEL: f64 = 1e-9;

/// What came of framing a window.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
#[expect(clippy::large_enum_variant, reason = "made and moved once a refit")]
pub enum Framed {
    /// Residuals can be examined.
    Ready(Frame),
    /// Too few points to examine.
    TooFewPoints {
        /// Points in the window.
        have: usize,
        /// Points needed.
        need: usize,
    },
    /// The readings do not scatter about the curve at all, so nothing can be judged by scatter.
    NoScatter {
        /// Largest minus smallest reading, in y's unit.
        range: f64,
    },
    /// An age, reading or coefficient is not finite, ages descend, or an age is outside the
    /// family's domain.
    Unusable {
        /// Index of the first such point; the number of points when a coefficient is at fault.
        index: usize,
    },
}

/// The linearised model about one fitted curve; see the module's paragraph.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Frame {
    /// The fitted family.
    pub family: Family,
    /// Its coefficients for the age itself.
    pub theta: Coefficients,
    /// Correlation of the noise at the median spacing that is normal for this channel.
    pub phi_baseline: f64,
    /// The same of this window alone.
    pub phi_window: f64,
    /// How far the baseline rests on the channel's own past: 0 not at all, 1 fully.
    pub settled: f64,
    /// Noise about the curve (marginal standard deviation), y's unit; > 0.
    pub noise: f64,
    /// Robust scale of the plain residuals, y's unit; > 0.
    pub residual_sigma: f64,
    /// Median spacing, days; > 0.
    pub spacing_days: f64,
    /// Age of the window's first point at the refit, days: the origin of the time axis.
    pub origin_days: f64,
    /// Step of the readings' lattice that is dithered away, y's unit; 0 when they are fine enough.
    pub dithered: f64,
    /// Points at the refit.
    pub points: usize,
    /// Ages are divided by this inside.
    scale_days: f64,
    /// Coefficients for the scaled age.
    scaled: Coefficients,
    /// Gradient × this = tangents orthonormal over the window of the refit (upper triangular).
    tangents: [[f64; COEFFICIENTS_MAX]; COEFFICIENTS_MAX],
}

impl Frame {
    /// Frames a window after a refit, with the channel's own baseline of dependence and noise.
    ///
    /// # Arguments
    /// `x` — ages, days, ascending, n values; `y` — deviations, n values; `family`, `theta` — the
    /// fitted curve; `baseline` — the channel's memory; `newest` — running number of the newest
    /// point, counted over the channel's life.
    /// # Outcomes
    /// See [`Framed`].
    pub fn at_refit(
        x: &[f64],
        y: &[f64],
        family: Family,
        theta: &Coefficients,
        baseline: &mut Baseline,
        newest: u64,
    ) -> Framed {
        let n = x.len();
        match begin(x, y, family, theta) {
            Err(outcome) => outcome,
            Ok((mut frame, e, spacing)) => {
                frame.phi_baseline = baseline.phi_at_refit(newest, n, frame.phi_window);
                frame.settled = baseline.settled(n);
                let framed = frame.finish(y, &e, &spacing, baseline.noise_floor);
                if let Framed::Ready(f) = &framed
                    && baseline.noise_floor <= 0.0
                {
                    baseline.noise_floor = NOISE_FLOOR * f.noise;
                }
                framed
            }
        }
    }

    /// Frames one series by itself: the dependence of the window is taken as normal unless given.
    ///
    /// # Arguments
    /// As [`Frame::at_refit`]; `phi` — correlation at the median spacing, or `None` to estimate;
    /// `noise` — marginal standard deviation in y's unit, or `None` to estimate.
    /// # Outcomes
    /// See [`Framed`].
    pub fn of_series(
        x: &[f64],
        y: &[f64],
        family: Family,
        theta: &Coefficients,
        phi: Option<f64>,
        noise: Option<f64>,
    ) -> Framed {
        match begin(x, y, family, theta) {
            Err(outcome) => outcome,
            Ok((mut frame, e, spacing)) => {
                let phi = phi.filter(|v| v.is_finite()).unwrap_or(frame.phi_window);
                frame.phi_baseline = phi.clamp(0.0, PHI_BASE_MAX);
                frame.settled = 1.0;
                let mut framed = frame.finish(y, &e, &spacing, 0.0);
                if let (Framed::Ready(f), Some(s)) = (&mut framed, noise)
                    && s.is_finite()
                    && s > 0.0
                {
                    f.noise = s;
                }
                framed
            }
        }
    }

    /// Number of coefficients of the curve.
    pub fn parameters(&self) -> usize {
        self.family.parameter_count()
    }

    /// Residual of one point about the framed curve, y's unit (dithered where readings are coarse).
    pub(crate) fn residual(&self, x: f64, y: f64) -> f64 {
        let d = if self.dithered > 0.0 { dither(x, self.dithered) } else { 0.0 };
        let e = y + d - self.family.value(&self.scaled, x / self.scale_days);
        if e.is_finite() { e.clamp(-1e100, 1e100) } else { 0.0 }
    }

    /// Tangents of the curve at one age, orthonormal over the refit's window.
    pub(crate) fn tangent(&self, x: f64) -> Coefficients {
        let g = self.family.gradient(&self.scaled, x / self.scale_days);
        let mut out = [0.0; COEFFICIENTS_MAX];
        for (k, v) in out.iter_mut().enumerate().take(self.parameters()) {
            let sum: f64 = (0..=k).map(|i| g[i] * self.tangents[i][k]).sum();
            *v = if sum.is_finite() { sum } else { 0.0 };
        }
        out
    }

    /// Correlation of the noise across one spacing, and the weight √((1−φ²)/(1−f²)).
    pub(crate) fn link(&self, ratio: f64) -> (f64, f64) {
        link(self.phi_baseline, ratio)
    }

    /// Estimates the noise and completes the frame.
    fn finish(mut self, y: &[f64], e: &[f64], spacing: &[f64], floor: f64) -> Framed {
        let n = e.len();
        let p = self.parameters();
        let mut u = Vec::with_capacity(n - 1);
        for j in 1..n {
            let (f, w) = self.link(spacing[j]);
            u.push(w * (e[j] - f * e[j - 1]));
        }
        let freedom = ((n - 1) as f64 / (n - 1 - p) as f64).sqrt();
        self.noise = (clipped_scale(&u) * freedom).max(floor);
        self.residual_sigma = self.residual_sigma.max(floor);
        let largest = y.iter().fold(0.0_f64, |m, v| m.max(v.abs()));
        if self.noise <= NO_SCATTER * largest || self.noise < f64::MIN_POSITIVE {
            return Framed::NoScatter { range: range(y) };
        }
        if self.residual_sigma <= NO_SCATTER * largest {
            self.residual_sigma = self.noise;
        }
        Framed::Ready(self)
    }
}

/// Correlation across one spacing and the weight that makes the innovation as large as the noise.
pub(crate) fn link(phi: f64, ratio: f64) -> (f64, f64) {
    if phi <= 1e-9 {
        return (0.0, 1.0);
    }
    let f = (phi.ln() * ratio).exp();
    (f, ((1.0 - phi * phi) / (1.0 - f * f)).sqrt())
}

/// Checks the input and makes everything of a frame but the baseline and the noise; also returns
/// the residuals and the spacing in medians.
#[expect(clippy::result_large_err, reason = "made and moved once a refit")]
fn begin(
    x: &[f64],
    y: &[f64],
    family: Family,
    theta: &Coefficients,
) -> Result<(Frame, Vec<f64>, Vec<f64>), Framed> {
    assert_eq!(x.len(), y.len(), "one deviation per age");
    assert!(x.len() <= POINTS_MAX, "windows are bounded far below {POINTS_MAX} points");
    let n = x.len();
    if n < POINTS_MIN {
        return Err(Framed::TooFewPoints { have: n, need: POINTS_MIN });
    }
    check(x, y, family, theta)?;
    let scale_days = x[n - 1].abs().max(f64::MIN_POSITIVE);
    let (spacing_days, spacing) = serial::spacing_of(x);
    let mut frame = Frame {
        family,
        theta: *theta,
        phi_baseline: 0.0,
        phi_window: 0.0,
        settled: 0.0,
        noise: 0.0,
        residual_sigma: 0.0,
        spacing_days,
        origin_days: x[0],
        dithered: 0.0,
        points: n,
        scale_days,
        scaled: rescaled(family, theta, scale_days),
        tangents: [[0.0; COEFFICIENTS_MAX]; COEFFICIENTS_MAX],
    };
    frame.tangents = orthonormal(&frame, x);
    let mut e: Vec<f64> = x.iter().zip(y).map(|(&x, &y)| frame.residual(x, y)).collect();
    let mut scratch = Vec::with_capacity(n);
    frame.residual_sigma = serial::robust_sigma(&e, &mut scratch);
    if let Some(step) = resolution_of(y)
        && step > DITHER_ABOVE_SIGMAS * frame.residual_sigma
    {
        frame.dithered = step;
        e.iter_mut().zip(x).for_each(|(e, &x)| *e += dither(x, step));
        frame.residual_sigma = serial::robust_sigma(&e, &mut scratch);
    }
    scratch.clear();
    scratch.extend_from_slice(&e);
    serial::clip_in_place(&mut scratch, frame.residual_sigma);
    let regular = serial::is_regular(&spacing);
    let p = family.parameter_count() as f64;
    frame.phi_window = serial::lag_correlation_of_clipped(&scratch, &spacing, regular, p);
    Ok((frame, e, spacing))
}

#[expect(clippy::result_large_err, reason = "made and moved once a refit")]
fn check(x: &[f64], y: &[f64], family: Family, theta: &Coefficients) -> Result<(), Framed> {
    for i in 0..x.len() {
        let ordered = i == 0 || x[i] >= x[i - 1];
        let inside = !family.needs_positive_age() || x[i] > 0.0;
        // The curve must be computable at every age; a sum of squares must not overflow.
        let fits = y[i].abs() < 1e100 && family.value(theta, x[i]).abs() < 1e100;
        if !(x[i].is_finite() && y[i].is_finite() && ordered && inside && fits) {
            return Err(Framed::Unusable { index: i });
        }
    }
    let tau_is_positive = family != Family::Exponential || theta[2] > 0.0;
    if theta.iter().all(|v| v.is_finite()) && tau_is_positive {
        Ok(())
    } else {
        Err(Framed::Unusable { index: x.len() })
    }
}

/// Coefficients of the same curve over age/scale.
fn rescaled(family: Family, theta: &Coefficients, scale: f64) -> Coefficients {
    let [t0, t1, t2, t3] = *theta;
    match family {
        Family::Linear => [t0, t1 * scale, 0.0, 0.0],
        Family::Logarithmic => [t0 + t1 * scale.ln(), t1, 0.0, 0.0],
        Family::Power => [t0 * scale.powf(t1), t1, 0.0, 0.0],
        Family::OffsetPower => [t0, t1 * scale.powf(t2), t2, 0.0],
        Family::Exponential => [t0, t1, t2 / scale, 0.0],
        Family::Quadratic => [t0, t1 * scale, t2 * scale * scale, 0.0],
        Family::Cubic => [t0, t1 * scale, t2 * scale * scale, t3 * scale.powi(3)],
    }
}

/// Gram–Schmidt, twice over, of the gradient's columns: tests for added columns do not depend on
/// the coefficients' parametrisation, so the best-conditioned one is used. A column without a
/// direction of its own (a power curve of amplitude 0) becomes zero.
fn orthonormal(frame: &Frame, x: &[f64]) -> [[f64; COEFFICIENTS_MAX]; COEFFICIENTS_MAX] {
    let p = frame.parameters();
    let n = x.len() as f64;
    let mut transform = [[0.0; COEFFICIENTS_MAX]; COEFFICIENTS_MAX];
    let gradients: Vec<Coefficients> =
        x.iter().map(|&x| frame.family.gradient(&frame.scaled, x / frame.scale_days)).collect();
    let mut done: Vec<Coefficients> = vec![[0.0; COEFFICIENTS_MAX]; x.len()];
    for k in 0..p {
        let mut column: Vec<f64> = gradients.iter().map(|g| g[k]).collect();
        let mut weights = [0.0; COEFFICIENTS_MAX];
        weights[k] = 1.0;
        let before = (column.iter().map(|v| v * v).sum::<f64>() / n).sqrt();
        for _ in 0..2 {
            for c in 0..k {
                let dot = column.iter().zip(&done).map(|(v, d)| v * d[c]).sum::<f64>() / n;
                column.iter_mut().zip(&done).for_each(|(v, d)| *v -= dot * d[c]);
                for r in 0..=c {
                    weights[r] -= dot * transform[r][c];
                }
            }
        }
        let norm = (column.iter().map(|v| v * v).sum::<f64>() / n).sqrt();
        if !(norm.is_finite() && norm > PARALLEL * before) {
            continue;
        }
        for r in 0..=k {
            transform[r][k] = weights[r] / norm;
        }
        done.iter_mut().zip(&column).for_each(|(d, v)| d[k] = v / norm);
    }
    transform
}

/// Scale of whitened residuals: from 1.4826 MAD, three passes of the clipped second moment.
fn clipped_scale(u: &[f64]) -> f64 {
    let n = u.len() as f64;
    let mut scratch = Vec::with_capacity(u.len());
    let mut s = serial::robust_sigma(u, &mut scratch);
    if s <= 0.0 {
        s = (u.iter().map(|v| v * v).sum::<f64>() / n).sqrt();
    }
    for _ in 0..3 {
        let c = 3.0 * s;
        let next =
            (u.iter().map(|v| v.clamp(-c, c).powi(2)).sum::<f64>() / n / CLIPPED_VARIANCE).sqrt();
        let settled = (next - s).abs() < 1e-4 * s;
        s = next;
        if settled {
            break;
        }
    }
    s
}

fn range(y: &[f64]) -> f64 {
    let (low, high) =
        y.iter().fold((f64::INFINITY, f64::NEG_INFINITY), |(a, b), &v| (a.min(v), b.max(v)));
    high - low
}
