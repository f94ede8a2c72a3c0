//! The curve families: formula, derivatives, domain, names. One line in [`Family::ALL`] adds one.
//!
//! Throughout, x is the **age** (days since calibration, as a rule) and y the **deviation** (in the
//! channel's own unit). Coefficients travel in a fixed array of [`COEFFICIENTS_MAX`] numbers, unused
//! places zero, in the order of [`Family::coefficient_names`].

use serde::{Deserialize, Serialize};

/// The most coefficients that any family has: the cubic's four. The watch never goes past the cubic.
pub const COEFFICIENTS_MAX: usize = 4;

/// Coefficients of one curve, in the order of [`Family::coefficient_names`]; unused places are 0.
pub type Coefficients = [f64; COEFFICIENTS_MAX];

/// A shape that drift may follow.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Hash, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Family {
    /// y = a + b x
    Linear,
    /// y = a + b ln x, x > 0
    Logarithmic,
    /// y = a x^b, x > 0
    Power,
    /// y = c + a x^b, x > 0
    OffsetPower,
    /// y = c + a (1 − exp(−x/tau)), tau > 0
    Exponential,
    /// y = a + b1 x + b2 x², only where the data change direction
    Quadratic,
    /// y = a + b1 x + b2 x² + b3 x³, only where the data change direction
    Cubic,
}

impl Family {
    /// Every family, plainest first.
    pub const ALL: [Family; 7] = [
        Family::Linear,
        Family::Logarithmic,
        Family::Power,
        Family::OffsetPower,
        Family::Exponential,
        Family::Quadratic,
        Family::Cubic,
    ];

    /// The name in settings, findings and on the command line.
    pub const fn name(self) -> &'static str {
        match self {
            Family::Linear => "linear",
            Family::Logarithmic => "logarithmic",
            Family::Power => "power",
            Family::OffsetPower => "offset-power",
            Family::Exponential => "exponential",
            Family::Quadratic => "quadratic",
            Family::Cubic => "cubic",
        }
    }

    /// Returns the family of that name, or `None`.
    ///
    /// # Arguments
    /// `name` — as [`Family::name`] gives it.
    pub fn from_name(name: &str) -> Option<Family> {
        Family::ALL.into_iter().find(|f| f.name() == name)
    }

    /// The formula as shown to people.
    pub const fn form(self) -> &'static str {
        match self {
            Family::Linear => "y = a + b * x",
            Family::Logarithmic => "y = a + b * ln(x)",
            Family::Power => "y = a * x^b",
            Family::OffsetPower => "y = c + a * x^b",
            Family::Exponential => "y = c + a * (1 - exp(-x / tau))",
            Family::Quadratic => "y = a + b1 * x + b2 * x^2",
            Family::Cubic => "y = a + b1 * x + b2 * x^2 + b3 * x^3",
        }
    }

    /// Names of the coefficients, in the order in which they stand in [`Coefficients`].
    pub const fn coefficient_names(self) -> &'static [&'static str] {
        match self {
            Family::Linear | Family::Logarithmic | Family::Power => &["a", "b"],
            Family::OffsetPower => &["c", "a", "b"],
            Family::Exponential => &["c", "a", "tau"],
            Family::Quadratic => &["a", "b1", "b2"],
            Family::Cubic => &["a", "b1", "b2", "b3"],
        }
    }

    /// Number of coefficients p.
    pub const fn parameter_count(self) -> usize {
        self.coefficient_names().len()
    }

    /// Whether the curve is linear in its coefficients (one exact least-squares step suffices).
    pub const fn is_linear_in_coefficients(self) -> bool {
        !matches!(self, Family::Power | Family::OffsetPower | Family::Exponential)
    }

    /// Whether the formula is defined only for ages above 0.
    pub const fn needs_positive_age(self) -> bool {
        matches!(self, Family::Logarithmic | Family::Power | Family::OffsetPower)
    }

    /// Returns the curve's value f(x; theta), in y's unit.
    ///
    /// # Arguments
    /// `theta` — coefficients, in the order of [`Family::coefficient_names`]; `x` — age, in the
    /// unit of the coefficients, > 0 where [`Family::needs_positive_age`].
    pub fn value(self, theta: &Coefficients, x: f64) -> f64 {
        let [t0, t1, t2, t3] = *theta;
        match self {
            Family::Linear => t0 + t1 * x,
            Family::Logarithmic => t0 + t1 * x.ln(),
            Family::Power => t0 * x.powf(t1),
            Family::OffsetPower => t0 + t1 * x.powf(t2),
            Family::Exponential => t0 - t1 * (-x / t2).exp_m1(),
            Family::Quadratic => t0 + x * (t1 + x * t2),
            Family::Cubic => t0 + x * (t1 + x * (t2 + x * t3)),
        }
    }

    /// Returns value and gradient at once, the logarithm of x given: one `exp` where a power or an
    /// exponential is needed, none elsewhere. For the inner loop of a fit.
    ///
    /// # Arguments
    /// `theta`, `x` — as for [`Family::value`]; `ln_x` — ln x where [`Family::needs_positive_age`];
    /// not read otherwise.
    pub fn value_and_gradient(
        self,
        theta: &Coefficients,
        x: f64,
        ln_x: f64,
    ) -> (f64, Coefficients) {
        let [t0, t1, t2, t3] = *theta;
        match self {
            Family::Linear => (t0 + t1 * x, [1.0, x, 0.0, 0.0]),
            Family::Logarithmic => (t0 + t1 * ln_x, [1.0, ln_x, 0.0, 0.0]),
            Family::Power => {
                let g = (t1 * ln_x).exp();
                (t0 * g, [g, t0 * g * ln_x, 0.0, 0.0])
            }
            Family::OffsetPower => {
                let g = (t2 * ln_x).exp();
                (t0 + t1 * g, [1.0, g, t1 * g * ln_x, 0.0])
            }
            Family::Exponential => {
                let rise = -(-x / t2).exp_m1();
                (t0 + t1 * rise, [1.0, rise, -t1 * (1.0 - rise) * x / (t2 * t2), 0.0])
            }
            Family::Quadratic => (t0 + x * (t1 + x * t2), [1.0, x, x * x, 0.0]),
            Family::Cubic => (t0 + x * (t1 + x * (t2 + x * t3)), [1.0, x, x * x, x * x * x]),
        }
    }

    /// Whether the curve may change direction: such a one is taken only where the data do, and never
    /// makes a forecast.
    pub fn may_turn(self) -> bool {
        matches!(self, Family::Quadratic | Family::Cubic)
    }

    /// Returns the gradient ∂f/∂theta at x, unused places 0.
    ///
    /// # Arguments
    /// `theta`, `x` — as for [`Family::value`].
    pub fn gradient(self, theta: &Coefficients, x: f64) -> Coefficients {
        let [_, t1, t2, _] = *theta;
        match self {
            Family::Linear => [1.0, x, 0.0, 0.0],
            Family::Logarithmic => [1.0, x.ln(), 0.0, 0.0],
            Family::Power => {
                let l = x.ln();
                let g = (t1 * l).exp();
                [g, theta[0] * g * l, 0.0, 0.0]
            }
            Family::OffsetPower => {
                let l = x.ln();
                let g = (t2 * l).exp();
                [1.0, g, t1 * g * l, 0.0]
            }
            Family::Exponential => {
                let g = (-x / t2).exp();
                [1.0, -(-x / t2).exp_m1(), -t1 * g * x / (t2 * t2), 0.0]
            }
            Family::Quadratic => [1.0, x, x * x, 0.0],
            Family::Cubic => [1.0, x, x * x, x * x * x],
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn gradient_agrees_with_central_differences() {
        let theta = [0.7, 1.3, 0.6, -0.2];
        for family in Family::ALL {
            for x in [0.2, 1.0, 7.5, 40.0] {
                let analytic = family.gradient(&theta, x);
                for k in 0..family.parameter_count() {
                    let h = 1e-6 * theta[k].abs();
                    let (mut up, mut down) = (theta, theta);
                    up[k] += h;
                    down[k] -= h;
                    let numeric = (family.value(&up, x) - family.value(&down, x)) / (2.0 * h);
                    let scale = numeric.abs().max(1.0);
                    assert!(
                        (analytic[k] - numeric).abs() < 1e-6 * scale,
                        "{family:?} d/d{} at {x}: {} against {numeric}",
                        family.coefficient_names()[k],
                        analytic[k]
                    );
                }
            }
        }
    }

    #[test]
    fn value_and_gradient_at_once_are_those_apart() {
        let theta = [0.7, 1.3, 0.6, -0.2];
        for family in Family::ALL {
            for x in [0.2_f64, 1.0, 7.5, 40.0] {
                let (value, gradient) = family.value_and_gradient(&theta, x, x.ln());
                assert!((value - family.value(&theta, x)).abs() < 1e-9 * value.abs().max(1.0));
                for (a, b) in gradient.iter().zip(family.gradient(&theta, x)) {
                    assert!((a - b).abs() < 1e-9 * b.abs().max(1.0), "{family:?} at {x}");
                }
            }
        }
    }

    #[test]
    fn every_name_reads_back() {
        for family in Family::ALL {
            assert_eq!(Family::from_name(family.name()), Some(family));
        }
    }
}
