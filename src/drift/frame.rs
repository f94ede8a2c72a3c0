//! The frame in which a curve is fitted: ages shifted and scaled so that no two columns nearly
//! coincide, whatever the user's origin and unit (raw years, ages in thousands of days).
//!
//! In its frame a curve is of the same family, in the inner age u = (x − centre)/scale; only its
//! coefficients differ. Fitting, curve values and covariances use the frame; people read the
//! coefficients in the units of the data.

use crate::drift::family::{COEFFICIENTS_MAX, Coefficients, Family};
use crate::drift::lanes::sum;
use crate::drift::serial::count;
use nalgebra::Matrix4;
use serde::{Deserialize, Serialize};

/// Inner age u = (x − centre)/scale.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize)]
pub struct Frame {
    /// What is taken off an age, in the unit of the ages.
    pub centre: f64,
    /// What it is then divided by, > 0, in the unit of the ages.
    pub scale: f64,
}

impl Frame {
    /// The ages as they are.
    pub const AS_IS: Frame = Frame { centre: 0.0, scale: 1.0 };

    /// Returns the frame for a family on these ages.
    ///
    /// Polynomials: mean and largest distance from it. Exponential: oldest age and range. Families
    /// with ln x: the geometric mean, for they know no shift.
    ///
    /// # Arguments
    /// `family` — the curve's; `x` — ages, days, finite, at least one; > 0 where
    /// [`Family::needs_positive_age`].
    ///
    /// # Returns
    /// None when all ages are equal.
    pub fn of(family: Family, x: &[f64]) -> Option<Frame> {
        let least = x.iter().copied().fold(f64::INFINITY, f64::min);
        let most = x.iter().copied().fold(f64::NEG_INFINITY, f64::max);
        if most <= least {
            return None;
        }
        let frame = match family {
            Family::Linear | Family::Quadratic | Family::Cubic => {
                // Distances from the oldest age first: their sum keeps more digits than that of ages.
                let centre = least + x.iter().map(|v| v - least).sum::<f64>() / count(x.len());
                Frame { centre, scale: (most - centre).max(centre - least) }
            }
            Family::Exponential => Frame { centre: least, scale: most - least },
            Family::Logarithmic | Family::Power | Family::OffsetPower => {
                let ln_x: Vec<f64> = x.iter().map(|v| v.ln()).collect();
                return Frame::of_logarithms(&ln_x);
            }
        };
        (frame.centre.is_finite() && frame.scale.is_finite() && frame.scale > 0.0).then_some(frame)
    }

    /// The same for families with ln x, from the logarithms of the ages.
    pub(crate) fn of_logarithms(ln_x: &[f64]) -> Option<Frame> {
        let varied = ln_x.iter().any(|l| (l - ln_x[0]).abs() > 0.0);
        let frame = Frame { centre: 0.0, scale: (sum(ln_x) / count(ln_x.len())).exp() };
        (varied && frame.scale.is_finite() && frame.scale > 0.0).then_some(frame)
    }

    /// Returns the inner age (x − centre)/scale, a pure number.
    ///
    /// # Arguments
    /// `x` — age, days.
    pub fn inside(&self, x: f64) -> f64 {
        (x - self.centre) / self.scale
    }

    /// Returns the coefficients in the units of the data, and how each depends on the inner ones:
    /// entry (i, k) is ∂ outer_i / ∂ inner_k.
    ///
    /// # Arguments
    /// `family` — the curve's; `inner` — coefficients in this frame, in the order of
    /// [`Family::coefficient_names`].
    pub fn outside(&self, family: Family, inner: &Coefficients) -> (Coefficients, Matrix4<f64>) {
        if *self == Frame::AS_IS {
            return (*inner, Matrix4::identity());
        }
        match family {
            Family::Linear | Family::Quadratic | Family::Cubic => self.shift_polynomial(inner),
            Family::Logarithmic => self.outside_logarithmic(inner),
            Family::Power => {
                let [a, b, ..] = *inner;
                let ln_scale = self.scale.ln();
                let shrink = (-b * ln_scale).exp();
                let mut turn = Matrix4::identity();
                turn[(0, 0)] = shrink;
                turn[(0, 1)] = -a * shrink * ln_scale;
                ([a * shrink, b, 0.0, 0.0], turn)
            }
            Family::OffsetPower => {
                let [c, a, b, _] = *inner;
                let ln_scale = self.scale.ln();
                let shrink = (-b * ln_scale).exp();
                let mut turn = Matrix4::identity();
                turn[(1, 1)] = shrink;
                turn[(1, 2)] = -a * shrink * ln_scale;
                ([c, a * shrink, b, 0.0], turn)
            }
            Family::Exponential => self.outside_exponential(inner),
        }
    }

    fn outside_logarithmic(&self, inner: &Coefficients) -> (Coefficients, Matrix4<f64>) {
        let ln_scale = self.scale.ln();
        let mut turn = Matrix4::identity();
        turn[(0, 1)] = -ln_scale;
        ([inner[0] - inner[1] * ln_scale, inner[1], 0.0, 0.0], turn)
    }

    /// c' + a' (1 − e^(−(x−x0)/tau)) = c + a (1 − e^(−x/tau)), a = a' e^(x0/tau), c = c' + a' − a.
    fn outside_exponential(&self, inner: &Coefficients) -> (Coefficients, Matrix4<f64>) {
        let [c, a, tau, _] = *inner;
        let outer_tau = tau * self.scale;
        let begun = self.centre / outer_tau;
        let growth = begun.exp();
        let mut turn = Matrix4::identity();
        // c' + a' − a = c' − a' (e^(x0/tau) − 1), without cancellation where x0 is small.
        turn[(0, 1)] = -begun.exp_m1();
        turn[(1, 1)] = growth;
        turn[(1, 2)] = -a * growth * begun / tau;
        turn[(0, 2)] = -turn[(1, 2)];
        turn[(2, 2)] = self.scale;
        ([c - a * begun.exp_m1(), a * growth, outer_tau, 0.0], turn)
    }

    /// Σ c_k u^k = Σ_i x^i Σ_(k ≥ i) c_k binom(k, i) (−centre)^(k−i) / scale^k.
    fn shift_polynomial(&self, inner: &Coefficients) -> (Coefficients, Matrix4<f64>) {
        const BINOMIAL: [[f64; COEFFICIENTS_MAX]; COEFFICIENTS_MAX] = [
            [1.0, 0.0, 0.0, 0.0],
            [1.0, 1.0, 0.0, 0.0],
            [1.0, 2.0, 1.0, 0.0],
            [1.0, 3.0, 3.0, 1.0],
        ];
        let shift = -self.centre / self.scale;
        let mut turn = Matrix4::zeros();
        let mut per_scale = 1.0;
        for i in 0..COEFFICIENTS_MAX {
            let mut power = per_scale;
            for k in i..COEFFICIENTS_MAX {
                turn[(i, k)] = BINOMIAL[k][i] * power;
                power *= shift;
            }
            per_scale /= self.scale;
        }
        let mut outer = [0.0; COEFFICIENTS_MAX];
        for i in 0..COEFFICIENTS_MAX {
            // Largest powers first: neighbouring terms of opposite sign meet while still exact.
            outer[i] = (i..COEFFICIENTS_MAX).rev().map(|k| turn[(i, k)] * inner[k]).sum();
        }
        (outer, turn)
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    const INNER: [f64; 4] = [0.7, 1.3, 0.6, -0.2];

    /// The inner curve at the inner age is the outer curve at the age.
    fn check(family: Family, x: &[f64]) {
        let frame = Frame::of(family, x).unwrap();
        let mut inner = INNER;
        inner[family.parameter_count()..].fill(0.0);
        let (outer, turn) = frame.outside(family, &inner);
        for &v in x {
            let (a, b) = (family.value(&inner, frame.inside(v)), family.value(&outer, v));
            assert!((a - b).abs() < 1e-8 * a.abs().max(1.0), "{family:?} at {v}: {a}, {b}");
        }
        for k in 0..family.parameter_count() {
            let h = 1e-6 * inner[k].abs();
            let (mut up, mut down) = (inner, inner);
            up[k] += h;
            down[k] -= h;
            let (up, down) = (frame.outside(family, &up).0, frame.outside(family, &down).0);
            for i in 0..family.parameter_count() {
                let numeric = (up[i] - down[i]) / (2.0 * h);
                let size = outer[i].abs() / inner[k].abs();
                assert!(
                    (turn[(i, k)] - numeric).abs() < 1e-6 * numeric.abs().max(size),
                    "{family:?} ({i}, {k}): {} against {numeric}",
                    turn[(i, k)]
                );
            }
        }
    }

    #[test]
    fn a_curve_is_the_same_inside_and_outside_its_frame() {
        for family in Family::ALL {
            check(family, &[3.0, 4.5, 7.0, 8.0, 11.0]);
        }
        for family in [Family::Linear, Family::Quadratic, Family::Cubic] {
            check(family, &[1790.0, 1800.0, 1850.0, 1970.0]);
        }
    }

    #[test]
    fn equal_ages_have_no_frame() {
        for family in Family::ALL {
            assert_eq!(Frame::of(family, &[2.0; 5]), None);
        }
    }

    #[test]
    fn ages_as_they_are_leave_coefficients_untouched() {
        for family in Family::ALL {
            let (outer, turn) = Frame::AS_IS.outside(family, &INNER);
            assert_eq!((outer, turn), (INNER, Matrix4::identity()));
        }
    }
}
