//! Confidence intervals of one fitted curve and of its coefficients, residuals dependent in time.
//!
//! They say how well the curve is known, not where the next reading will lie: for that see
//! [`crate::drift::forecast`], and [`crate::drift::interval`] for independent residuals.

use crate::drift::family::Coefficients;
use crate::drift::fit::Fit;
use crate::drift::interval::{Interval, student_quantile};
use crate::drift::sandwich::{own_correlation, sandwich};
use crate::drift::serial::{PHI_MAX, count, effective_count, spacing_of};
use nalgebra::{Matrix4, Vector4};

/// What is needed for confidence intervals at any age.
#[derive(Clone, Debug)]
pub struct Confidence<'a> {
    fit: &'a Fit,
    /// Of the inner coefficients.
    covariance: Matrix4<f64>,
    /// Correlation of residuals one median spacing apart, corrected for bias; 0 where negative.
    pub phi: f64,
    /// Degrees of freedom of the noise variance.
    pub freedom: f64,
    /// Half widths are so many standard errors.
    pub quantile: f64,
}

impl<'a> Confidence<'a> {
    /// Prepares intervals about a curve.
    ///
    /// # Arguments
    /// `fit` — a curve, by plain or robust least squares; `x` — the ages it was fitted to (n), days,
    /// strictly increasing; `y` — the deviations (n), in the unit; `level` — such as 0.95.
    ///
    /// # Outcomes
    /// None when the curve's columns are dependent, or when less than one degree of freedom is left
    /// once dependence is allowed for: then the window cannot say how well the curve is known.
    ///
    /// # Numerics
    /// Half width t √(g' V g), V the covariance of [`sandwich`] with phi from the clipped residuals,
    /// t the quantile with n_v − p degrees of freedom, n_v = n (1 − phi²)/(1 + phi²) the number of
    /// independent residuals whose variance is known as well. O(n p²).
    ///
    /// # Source
    /// n_v: Bayley and Hammersley (1946), Supplement to the Journal of the Royal Statistical Society
    /// 8, for the variance of a first-order process; t with it: own rule, measured by simulation in
    /// `benches/coverage`. From memory.
    pub fn new(fit: &'a Fit, x: &[f64], y: &[f64], level: f64) -> Option<Confidence<'a>> {
        let (_, spacing) = spacing_of(x);
        let phi = own_correlation(fit, x, y, &spacing).clamp(0.0, PHI_MAX);
        let (covariance, _) = sandwich(fit, x, &spacing, phi)?;
        let freedom = effective_count(fit.n, phi * phi) - count(fit.family.parameter_count());
        if freedom < 1.0 {
            return None;
        }
        let quantile = student_quantile(0.5 + 0.5 * level, freedom);
        Some(Confidence { fit, covariance, phi, freedom, quantile })
    }

    /// Returns the curve at an age with its interval; None where the curve is not defined or not
    /// finite.
    ///
    /// # Arguments
    /// `x` — age, days; > 0 where the family needs it.
    pub fn curve_at(&self, x: f64) -> Option<Interval> {
        if self.fit.family.needs_positive_age() && x <= 0.0 {
            return None;
        }
        let g = Vector4::from(self.fit.gradient(x));
        self.about(self.fit.value(x), g.dot(&(self.covariance * g)).max(0.0).sqrt())
    }

    /// Returns a coefficient with its interval, in the units of the data; None where it is not
    /// finite.
    ///
    /// # Arguments
    /// `k` — its place in the order of [`crate::drift::family::Family::coefficient_names`].
    pub fn coefficient(&self, k: usize) -> Option<Interval> {
        assert!(k < self.fit.family.parameter_count(), "the family has a coefficient {k}");
        self.about(self.fit.theta[k], self.standard_errors()[k])
    }

    /// Standard errors of the coefficients, in the units of the data; unused places 0.
    pub fn standard_errors(&self) -> Coefficients {
        self.fit.standard_errors_of(&self.covariance)
    }

    fn about(&self, value: f64, standard_error: f64) -> Option<Interval> {
        let half_width = self.quantile * standard_error;
        let interval = Interval { value, low: value - half_width, high: value + half_width };
        (interval.low.is_finite() && interval.high.is_finite()).then_some(interval)
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::drift::family::Family;
    use crate::drift::fit::{FitOutcome, fit};
    use crate::drift::reference::{MISRA1A, NORRIS};
    use crate::drift::structure::simulate::noise;

    fn curve(family: Family, x: &[f64], y: &[f64]) -> Fit {
        let FitOutcome::Fitted(fit) = fit(family, x, y, false) else { panic!("a curve") };
        *fit
    }

    #[test]
    fn without_dependence_the_intervals_are_the_certified_ones() {
        // NIST StRD Norris: b0 = −0.262323073774029, sd 0.232818234301152; b1 = 1.00211681802045,
        // sd 0.429796848199937e-3; 34 degrees of freedom.
        const QUANTILE: f64 = 2.0;
        let (x, y): (Vec<f64>, Vec<f64>) = NORRIS.iter().copied().unzip();
        let fit = curve(Family::Linear, &x, &y);
        let (covariance, _) = sandwich(&fit, &x, &[1.0; NORRIS.len()], 0.0).unwrap();
        let confidence =
            Confidence { fit: &fit, covariance, phi: 0.0, freedom: 34.0, quantile: QUANTILE };
        for (k, (value, sd)) in [
            (0, (-0.262_323_073_774_029, 0.232_818_234_301_152)),
            (1, (1.002_116_818_020_45, 0.429_796_848_199_937e-3)),
        ] {
            let interval = confidence.coefficient(k).unwrap();
            assert!((interval.value / value - 1.0_f64).abs() < 1e-9, "{interval:?}");
            for half_width in [interval.high - value, value - interval.low] {
                assert!((half_width / (QUANTILE * sd) - 1.0).abs() < 1e-9, "{interval:?}");
            }
        }
    }

    #[test]
    fn degrees_of_freedom_shrink_with_dependence() {
        let x: Vec<f64> = (1..=200).map(f64::from).collect();
        let y: Vec<f64> = noise(8, 200, 0.6).iter().zip(&x).map(|(e, x)| x + e).collect();
        let fit = curve(Family::Linear, &x, &y);
        let confidence = Confidence::new(&fit, &x, &y, 0.95).unwrap();
        let phi = confidence.phi;
        assert!((0.4..0.8).contains(&phi), "{phi}");
        // By hand: n (1 − phi²)/(1 + phi²) − p.
        let freedom = 200.0 * (1.0 - phi * phi) / (1.0 + phi * phi) - 2.0;
        assert!((confidence.freedom - freedom).abs() < 1e-9);
        assert!(confidence.standard_errors()[1] > 1.5 * fit.standard_errors[1]);
    }

    #[test]
    fn a_curve_has_no_interval_outside_its_domain() {
        let (x, y): (Vec<f64>, Vec<f64>) = NORRIS.iter().copied().unzip();
        let fit = curve(Family::Logarithmic, &x, &y);
        let (covariance, _) = sandwich(&fit, &x, &[1.0; NORRIS.len()], 0.0).unwrap();
        let confidence =
            Confidence { fit: &fit, covariance, phi: 0.0, freedom: 34.0, quantile: 2.0 };
        assert_eq!(confidence.curve_at(0.0), None);
        assert!(confidence.curve_at(x[0]).is_some());
    }

    #[test]
    fn residuals_that_all_hang_together_leave_no_confidence() {
        // Fourteen points about a curve of the wrong family: their residuals are one wave.
        let (x, y): (Vec<f64>, Vec<f64>) = MISRA1A.iter().copied().unzip();
        let fit = curve(Family::Power, &x, &y);
        assert!(Confidence::new(&fit, &x, &y, 0.95).is_none());
    }
}
