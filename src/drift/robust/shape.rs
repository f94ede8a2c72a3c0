//! How a curve is written while it is refined: so that nothing runs off to infinity where the family
//! passes into a plainer one (c + a x^b into a + b ln x, an exponential into a line).
//!
//! Straight families: their own coefficients. Power: a and b. Offset-power and exponential:
//! level + slope h(t; k), h = (e^(kt) − 1)/k, with t = ln u and k = b, or t = u and k = −1/tau. The last
//! column is the derivative to the nonlinear coefficient without the factor a, or slope, before it.

use crate::drift::family::{Coefficients, Family};
use crate::drift::lanes::add;
use crate::drift::outcome::EXPONENT;
use crate::drift::robust::Target;
use crate::drift::robust::start::TAU_MAX;
use crate::drift::workspace::refill;

/// Below this size of kt, h and its derivative are summed as series: six terms leave 10⁻¹⁴.
const SERIES_BELOW: f64 = 0.02;
/// Distance from the bounds of the exponent, and from 0, within which a curve is fitted anew.
const CLEAR: f64 = 0.5;
const CLEAR_OF_ZERO: f64 = 0.02;
/// Time constants outside of these shares of the range of ages are looked for anew.
const TAU_CLEAR: (f64, f64) = (0.04, 0.5 * TAU_MAX);

impl Target<'_> {
    /// Number of leading coefficients in which the curve is linear.
    pub(super) fn linear(&self) -> usize {
        match self.family {
            Family::Power => 1,
            Family::OffsetPower | Family::Exponential => 2,
            _ => self.family.parameter_count(),
        }
    }

    /// Returns what stands before the nonlinear coefficient's column; None in straight families.
    ///
    /// # Arguments
    /// `theta` — coefficients of the shape, in the frame, unused places 0.
    pub(super) fn factor(&self, theta: &Coefficients) -> Option<f64> {
        (!self.family.is_linear_in_coefficients()).then(|| theta[self.linear() - 1])
    }

    /// The columns that do not depend on the coefficients.
    pub(super) fn fill_constant_columns(&mut self) {
        let [first, second, third, fourth] = &mut *self.columns;
        if self.family != Family::Power {
            first.fill(1.0);
        }
        if self.family.is_linear_in_coefficients() {
            second.copy_from_slice(self.ages);
        }
        if matches!(self.family, Family::Quadratic | Family::Cubic) {
            refill(third, self.ages.iter().map(|u| u * u));
            refill(fourth, self.ages.iter().map(|u| u * u * u));
        }
        self.weigh(0..self.family.parameter_count());
    }

    /// Columns by the roots of the weights. Those that depend on the nonlinear coefficient come as
    /// they are, and the exponentials stay so.
    fn weigh(&mut self, columns: std::ops::Range<usize>) {
        let Some(roots) = self.roots else { return };
        for column in &mut self.columns[columns] {
            column.iter_mut().zip(roots).for_each(|(v, root)| *v *= root);
        }
    }

    /// The columns that depend on the nonlinear coefficient.
    fn curved(&self) -> std::ops::Range<usize> {
        self.linear() - 1..self.family.parameter_count()
    }

    /// Holds a curve against the data: columns and residuals.
    ///
    /// # Arguments
    /// `theta` — coefficients of the shape, in the frame, unused places 0.
    pub(super) fn evaluate(&mut self, theta: &Coefficients) {
        if let Some(k) = self.factor(theta).map(|_| theta[self.linear()]) {
            self.fill_columns(k);
            self.weigh(self.curved());
        }
        refill(self.residuals, self.y.iter().copied());
        for (theta, column) in theta.iter().zip(&*self.columns).take(self.linear()) {
            add(self.residuals, -theta, column);
        }
    }

    /// Fills the columns that depend on the nonlinear coefficient, not weighted yet; one `exp` for
    /// each reading. The exponentials themselves stay in the first column of the power, the last of
    /// the others.
    ///
    /// # Arguments
    /// `k` — the nonlinear coefficient, finite, may be 0.
    pub(super) fn fill_columns(&mut self, k: f64) {
        let [first, second, third, fourth] = &mut *self.columns;
        if self.family == Family::Power {
            exponentials(first, self.ages, k);
            for ((to, g), age) in second.iter_mut().zip(&*first).zip(self.ages) {
                *to = g * age;
            }
            return;
        }
        exponentials(fourth, self.ages, k);
        let per_k = k.recip();
        let columns = second.iter_mut().zip(third.iter_mut());
        for (((h, slope), &e), &t) in columns.zip(&*fourth).zip(self.ages) {
            let z = k * t;
            (*h, *slope) = if z.abs() < SERIES_BELOW {
                near_zero(t, z)
            } else {
                let h = (e - 1.0) * per_k;
                (h, (t * e - h) * per_k)
            };
        }
    }

    /// Returns the family's own inner coefficients, not finite or not positive where it has passed
    /// into a plainer one.
    ///
    /// # Arguments
    /// `theta` — coefficients of the shape, in the frame, unused places 0.
    pub(super) fn inner(&self, theta: &Coefficients) -> Coefficients {
        let [level, slope, k, _] = *theta;
        match self.family {
            Family::OffsetPower => [level - slope / k, slope / k, k, 0.0],
            Family::Exponential => [level, -slope / k, -k.recip(), 0.0],
            _ => *theta,
        }
    }

    /// Returns the nonlinear coefficient of the shape, from the family's own in the units of the
    /// data.
    ///
    /// # Arguments
    /// `outer` — coefficients in the units of the data.
    pub(super) fn nonlinear(&self, outer: &Coefficients) -> Option<f64> {
        match self.family {
            Family::Power => Some(outer[1]),
            Family::OffsetPower => Some(outer[2]),
            Family::Exponential => Some(-self.frame.scale / outer[2]),
            _ => None,
        }
    }

    /// Whether the nonlinear coefficient keeps clear of where the family's bounds are.
    ///
    /// # Arguments
    /// `theta` — coefficients of the shape, in the frame, unused places 0.
    pub(super) fn well_within_bounds(&self, theta: &Coefficients) -> bool {
        let [_, b, k, _] = *theta;
        let clear = |k: f64| EXPONENT.0 + CLEAR < k && k < EXPONENT.1 - CLEAR;
        match self.family {
            Family::Power => clear(b),
            Family::OffsetPower => clear(k) && k.abs() > CLEAR_OF_ZERO,
            Family::Exponential => (TAU_CLEAR.0..TAU_CLEAR.1).contains(&-k.recip()),
            _ => true,
        }
    }

    /// Turns the columns into derivatives to the family's own inner coefficients.
    ///
    /// # Arguments
    /// `inner` — the family's own inner coefficients, from `Target::inner`.
    pub(super) fn own_columns(&mut self, inner: &Coefficients) {
        let a = inner[self.linear() - 1];
        let [_, second, third, fourth] = &mut *self.columns;
        match self.family {
            Family::Power => second.iter_mut().for_each(|v| *v *= a),
            Family::OffsetPower => {
                second.copy_from_slice(fourth);
                for ((to, e), t) in third.iter_mut().zip(&*fourth).zip(self.ages) {
                    *to = a * e * t;
                }
            }
            Family::Exponential => {
                let rate = -a / (inner[2] * inner[2]);
                refill(second, fourth.iter().map(|e| 1.0 - e));
                for ((to, e), t) in third.iter_mut().zip(&*fourth).zip(self.ages) {
                    *to = rate * e * t;
                }
            }
            _ => return,
        }
        if self.family != Family::Power {
            self.weigh(self.curved());
        }
    }
}

/// e^(rate age).
pub(super) fn exponentials(to: &mut [f64], ages: &[f64], rate: f64) {
    for (to, age) in to.iter_mut().zip(ages) {
        *to = (rate * age).exp();
    }
}

/// (e^z − 1)/k and its derivative to k, z = kt small: t Σ z^m/(m+1)!, t² Σ (m+1) z^m/(m+2)!.
fn near_zero(t: f64, z: f64) -> (f64, f64) {
    let h = 1.0 / 120.0 + z * (1.0 / 720.0);
    let h = 1.0 + z * (0.5 + z * (1.0 / 6.0 + z * (1.0 / 24.0 + z * h)));
    let slope = 1.0 / 30.0 + z * (1.0 / 144.0 + z * (1.0 / 840.0));
    let slope = 0.5 + z * (1.0 / 3.0 + z * (0.125 + z * slope));
    (t * h, t * t * slope)
}
