//! Interval for one new reading about one fitted curve, as statistics packages give it: residuals
//! independent, Student's t. The watch does not use it; see [`crate::drift::forecast`].

use crate::drift::family::COEFFICIENTS_MAX;
use crate::drift::fit::Fit;
use crate::drift::least_squares::solve;
use crate::drift::serial::count;
use nalgebra::{Matrix4, Vector4};
use statrs::distribution::{ContinuousCDF, StudentsT};

/// The curve's value at an age, with the interval of a new reading.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Interval {
    /// The curve's value.
    pub value: f64,
    /// Lower end.
    pub low: f64,
    /// Upper end.
    pub high: f64,
}

/// What is needed for intervals at any age.
#[derive(Clone, Debug)]
pub struct Intervals<'a> {
    fit: &'a Fit,
    factor: Matrix4<f64>,
    quantile: f64,
}

impl<'a> Intervals<'a> {
    /// Prepares intervals about a curve.
    ///
    /// # Arguments
    /// `fit` — by plain least squares; `x` — the ages it was fitted to (n), days; `level` — between
    /// 0 and 1, such as 0.95.
    ///
    /// # Returns
    /// None when the curve's columns are dependent.
    pub fn new(fit: &'a Fit, x: &[f64], level: f64) -> Option<Intervals<'a>> {
        let rows: Vec<_> = x.iter().map(|&v| fit.gradient(v)).collect();
        let zero = vec![0.0; rows.len()];
        let factor = solve(&rows, &zero, fit.family.parameter_count())?.factor;
        let quantile = student_quantile(0.5 + 0.5 * level, count(fit.degrees_of_freedom));
        Some(Intervals { fit, factor, quantile })
    }

    /// Returns value ± t √(s² + g' V g) at an age; None where the curve is not defined or not finite.
    ///
    /// # Arguments
    /// `x` — age, days.
    ///
    /// # Source
    /// Draper and Smith (1998), Applied Regression Analysis, ch. 3; delta method for curves nonlinear
    /// in their coefficients: Bates and Watts (1988), ch. 2. From memory.
    pub fn at(&self, x: f64) -> Option<Interval> {
        if self.fit.family.needs_positive_age() && x <= 0.0 {
            return None;
        }
        let value = self.fit.value(x);
        let spread = self.factor.transpose() * Vector4::from(self.fit.gradient(x));
        let half_width = self.quantile * self.fit.residual_sd * spread.norm().hypot(1.0);
        let interval = Interval { value, low: value - half_width, high: value + half_width };
        (interval.low.is_finite() && interval.high.is_finite()).then_some(interval)
    }

    /// Returns orthonormal rows (n) that span what the curve's columns span; unused places 0.
    ///
    /// # Arguments
    /// `x` — the ages the curve was fitted to (n), days.
    pub fn orthonormal_rows(&self, x: &[f64]) -> Vec<[f64; COEFFICIENTS_MAX]> {
        x.iter()
            .map(|&v| (self.factor.transpose() * Vector4::from(self.fit.gradient(v))).into())
            .collect()
    }
}

/// Returns the quantile of Student's t, polished to the last digits.
///
/// # Arguments
/// `probability` — 0.5 to 1, exclusive; `freedom` — degrees of freedom, at least 1.
pub(crate) fn student_quantile(probability: f64, freedom: f64) -> f64 {
    let student = StudentsT::new(0.0, 1.0, freedom).expect("at least one degree of freedom");
    student.inverse_cdf(probability)
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::drift::family::Family;
    use crate::drift::fit::{FitOutcome, fit};
    use crate::drift::reference::{CENSUS, MISRA1A, NORRIS};

    /// (value, low, high) of a new reading at `x`.
    fn check(family: Family, data: &[(f64, f64)], at: f64, want: [f64; 3]) {
        let (x, y): (Vec<f64>, Vec<f64>) = data.iter().copied().unzip();
        let FitOutcome::Fitted(fit) = fit(family, &x, &y, false) else { panic!("a curve") };
        let interval = Intervals::new(&fit, &x, 0.95).unwrap().at(at).unwrap();
        for (got, want) in [interval.value, interval.low, interval.high].into_iter().zip(want) {
            assert!((got / want - 1.0).abs() < 1e-9, "{family:?}: {got} against {want}");
        }
    }

    #[test]
    fn reference_prediction_intervals() {
        // predict() of R, computed again with 80 digits (mpmath); raw years keep their digits too.
        let line = [1_251.080_947_588_367_4, 1_249.119_308_674_206_5, 1_253.042_586_502_528_4];
        check(Family::Linear, &NORRIS, 1248.7, line);
        let cubic = [317.484_195_838_024_8, 295.800_820_693_068, 339.167_570_982_980_84];
        check(Family::Cubic, &CENSUS, 2015.0, cubic);
        let settling = [95.972_237_583_090_79, 95.692_070_940_604_57, 96.252_404_225_577_01];
        check(Family::Exponential, &MISRA1A, 930.6, settling);
    }

    #[test]
    fn a_curve_has_no_value_outside_its_domain() {
        let (x, y): (Vec<f64>, Vec<f64>) = MISRA1A.iter().copied().unzip();
        let FitOutcome::Fitted(fit) = fit(Family::Power, &x, &y, false) else { panic!("a curve") };
        assert_eq!(Intervals::new(&fit, &x, 0.95).unwrap().at(0.0), None);
    }

    #[test]
    fn student_quantiles_have_their_table_values() {
        // Exact: t(1) = tan(π(p − ½)), t(2) = (2p − 1)/√(2p(1 − p)).
        let p = 0.975_f64;
        let one = (std::f64::consts::PI * (p - 0.5)).tan();
        let two = (2.0 * p - 1.0) / (2.0 * p * (1.0 - p)).sqrt();
        assert!((student_quantile(p, 1.0) / one - 1.0).abs() < 1e-12);
        assert!((student_quantile(p, 2.0) / two - 1.0).abs() < 1e-12);
        // Abramowitz and Stegun (1964), table 26.10, t(0.975): 10 → 2.228, 120 → 1.980.
        assert!((student_quantile(p, 10.0) - 2.228_138_85).abs() < 1e-7);
        assert!((student_quantile(p, 120.0) - 1.980).abs() < 1e-3);
    }
}
