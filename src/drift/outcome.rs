//! What comes of a fit: a curve, or the reason why there is none.

use crate::drift::family::{COEFFICIENTS_MAX, Coefficients, Family};
use crate::drift::frame::Frame;
use nalgebra::Matrix4;
use serde::{Deserialize, Serialize};

/// Range of the exponent; an optimum at its edge is not determined by the data.
pub const EXPONENT: (f64, f64) = (-4.0, 8.0);
/// An exponent nearer to 0 than this makes c + a x^b a logarithmic curve.
pub const EXPONENT_MIN: f64 = 1e-3;

/// A curve fitted by least squares on the original scale.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Fit {
    /// Which family.
    pub family: Family,
    /// Coefficients, in the units of the data.
    pub theta: Coefficients,
    /// The frame in which the curve was fitted.
    pub frame: Frame,
    /// Coefficients in that frame.
    pub inner: Coefficients,
    /// The transform-then-line estimate; None where the data allow no transform.
    pub start: Option<Coefficients>,
    /// Ordinary standard errors √diag(s² (JᵀJ)⁻¹) of `theta`.
    pub standard_errors: Coefficients,
    /// Residual sum of squares, unit².
    pub residual_ss: f64,
    /// Residual standard deviation √(RSS/(n−p)), in the unit.
    pub residual_sd: f64,
    /// 1 − RSS/TSS on the original scale; None when all y are equal.
    pub r_squared: Option<f64>,
    /// The largest |y|, in the unit.
    pub largest: f64,
    /// Number of data.
    pub n: usize,
    /// n − p.
    pub degrees_of_freedom: usize,
    /// Refinement steps taken.
    pub iterations: usize,
}

impl Fit {
    /// Returns the curve's value at an age, in y's unit; by the frame, so that it keeps its digits
    /// where the coefficients alone would cancel.
    ///
    /// # Arguments
    /// `x` — age, days; > 0 where the family needs it.
    pub fn value(&self, x: f64) -> f64 {
        self.family.value(&self.inner, self.frame.inside(x))
    }

    /// Returns the gradient of the curve to its inner coefficients.
    ///
    /// # Arguments
    /// `x` — age, days; > 0 where the family needs it.
    pub fn gradient(&self, x: f64) -> Coefficients {
        self.family.gradient(&self.inner, self.frame.inside(x))
    }

    /// Returns value and gradient at once, in a third of the time; their last digit may differ.
    ///
    /// # Arguments
    /// `x` — age, days; > 0 where the family needs it.
    pub fn value_and_gradient(&self, x: f64) -> (f64, Coefficients) {
        let u = self.frame.inside(x);
        let ln_u = if self.family.needs_positive_age() { u.ln() } else { 0.0 };
        self.family.value_and_gradient(&self.inner, u, ln_u)
    }

    /// Returns the standard errors of `theta` that follow from a covariance of the inner coefficients.
    ///
    /// # Arguments
    /// `covariance` — of `inner`, its leading p rows and columns used.
    pub fn standard_errors_of(&self, covariance: &Matrix4<f64>) -> Coefficients {
        let (_, turn) = self.frame.outside(self.family, &self.inner);
        let outer = turn * covariance * turn.transpose();
        let mut errors = [0.0; COEFFICIENTS_MAX];
        for k in 0..self.family.parameter_count() {
            errors[k] = outer[(k, k)].max(0.0).sqrt();
        }
        errors
    }

    /// Whether the curve passes through every reading to rounding.
    pub fn is_exact(&self) -> bool {
        self.residual_sd <= ROUNDING * self.largest
    }

    /// Returns y less the curve (n), in y's unit.
    ///
    /// # Arguments
    /// `x` — ages (n), days; `y` — deviations (n), in the unit.
    pub fn residuals(&self, x: &[f64], y: &[f64]) -> Vec<f64> {
        x.iter().zip(y).map(|(&v, &w)| w - self.value(v)).collect()
    }
}

/// A residual standard deviation below this share of the largest |y| is rounding, not scatter.
const ROUNDING: f64 = 1e-13;

/// What became of a fit. Data quality is an outcome, not an error.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub enum FitOutcome {
    /// A curve.
    Fitted(Box<Fit>),
    /// Fewer data than the family needs.
    TooFewReadings {
        /// Data given.
        found: usize,
        /// Data needed.
        needed: usize,
    },
    /// Fewer different ages than the family has coefficients.
    TooFewAges {
        /// Different ages given.
        found: usize,
        /// Different ages needed.
        needed: usize,
    },
    /// Ages outside the family's domain.
    OutsideDomain {
        /// Ages not above 0.
        outside: usize,
        /// Of so many.
        of: usize,
    },
    /// All ages are equal.
    Singular,
    /// The coefficients' effects cannot be told apart on these ages.
    Entangled,
    /// The refinement did not settle.
    NotConverged {
        /// Steps taken.
        iterations: usize,
    },
    /// A number that is not finite came in or would have come out.
    NonFinite,
    /// The data do not pin the curve down.
    WeaklyDetermined(Undetermined),
}

/// What the data leave open.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize)]
pub enum Undetermined {
    /// The exponent runs to the edge of [`EXPONENT`].
    Exponent {
        /// Where it stands.
        exponent: f64,
    },
    /// c + a x^b with b so near to 0 that it is logarithmic.
    Logarithmic {
        /// Where the exponent stands.
        exponent: f64,
    },
    /// The time constant runs to its upper bound: the curve is a line.
    Line {
        /// The bound, in the unit of the ages.
        tau: f64,
    },
    /// The time constant runs to its lower bound: only the oldest readings differ.
    Step {
        /// The bound, in the unit of the ages.
        tau: f64,
    },
    /// The deviations do not change at all.
    NoChange,
    /// So many time constants lie between age 0 and the oldest reading that c and a cannot be told.
    FarFromZero {
        /// How many.
        time_constants: f64,
    },
}

impl Undetermined {
    fn words(self) -> String {
        match self {
            Undetermined::Exponent { exponent } => format!(
                "the data do not determine the exponent: it runs to {exponent:.2}, the edge of {} \
                 to {}",
                EXPONENT.0, EXPONENT.1
            ),
            Undetermined::Logarithmic { exponent } => format!(
                "the exponent is {exponent:.4}, 0 within {EXPONENT_MIN}: the curve is logarithmic"
            ),
            Undetermined::Line { tau } => format!(
                "the data do not determine tau: it runs past {tau:.3}, where the curve is a line"
            ),
            Undetermined::Step { tau } => format!(
                "the data do not determine tau: it runs below {tau:.3}, where the change is over \
                 within the first readings"
            ),
            Undetermined::NoChange => "the deviations do not change".to_owned(),
            Undetermined::FarFromZero { time_constants } => format!(
                "the first reading comes {time_constants:.0} time constants after age 0: what the \
                 curve was there cannot be told"
            ),
        }
    }
}

impl FitOutcome {
    /// The reason in plain words; None for a fitted curve.
    pub fn why_not(&self) -> Option<String> {
        Some(match self {
            FitOutcome::Fitted(_) => return None,
            FitOutcome::TooFewReadings { found, needed } => {
                format!("{found} readings found, at least {needed} needed")
            }
            FitOutcome::TooFewAges { found, needed } => {
                format!("{found} different ages found, at least {needed} needed")
            }
            FitOutcome::OutsideDomain { outside, of } => {
                format!("age must be above 0; {outside} of {of} are not")
            }
            FitOutcome::Singular => "all ages are equal".to_owned(),
            FitOutcome::Entangled => {
                "the effects of the coefficients cannot be told apart on these ages".to_owned()
            }
            FitOutcome::NotConverged { iterations } => {
                format!("the fit did not settle in {iterations} steps")
            }
            FitOutcome::NonFinite => "a number is not finite, or too large or small".to_owned(),
            FitOutcome::WeaklyDetermined(what) => what.words(),
        })
    }
}
