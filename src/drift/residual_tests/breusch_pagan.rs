//! Breusch–Pagan in Koenker's studentised form: does the scatter change along the curve?

use crate::drift::family::{Coefficients, Family};
use crate::drift::fit::Fit;
use crate::drift::least_squares::solve;
use crate::drift::serial::count;
use statrs::distribution::{ChiSquared, ContinuousCDF};

/// The statistic and its degrees of freedom.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct BreuschPagan {
    /// n R² of the squared residuals on the regressors.
    pub statistic: f64,
    /// Number of regressors.
    pub degrees_of_freedom: usize,
    /// Probability of more, scatter constant.
    pub p_value: f64,
}

/// Returns the studentised test. Regressors: the curve's own, without the constant, where it is
/// linear in its coefficients; else its fitted values.
///
/// # Arguments
/// `fit` — the curve; `x` — the ages it was fitted to (n), days; `residuals` — y less the curve
/// (n).
///
/// # Returns
/// None when the squared residuals do not differ, or the regressors do not.
///
/// # Source
/// Breusch and Pagan (1979), Econometrica 47; Koenker (1981), Journal of Econometrics 17.
pub fn breusch_pagan(fit: &Fit, x: &[f64], residuals: &[f64]) -> Option<BreuschPagan> {
    let squares: Vec<f64> = residuals.iter().map(|e| e * e).collect();
    let mean = squares.iter().sum::<f64>() / count(squares.len());
    let about: Vec<f64> = squares.iter().map(|s| s - mean).collect();
    let total: f64 = about.iter().map(|v| v * v).sum();
    if total <= 0.0 {
        return None;
    }
    let (rows, regressors) = regressors(fit, x);
    let explained = solve(&rows, &about, regressors + 1)?.explained;
    let statistic = count(x.len()) * explained * explained / total;
    let chi = ChiSquared::new(count(regressors)).expect("at least one regressor");
    Some(BreuschPagan { statistic, degrees_of_freedom: regressors, p_value: chi.sf(statistic) })
}

/// Rows beginning with 1, and how many regressors follow it.
fn regressors(fit: &Fit, x: &[f64]) -> (Vec<Coefficients>, usize) {
    if fit.family.is_linear_in_coefficients() {
        let rows = x.iter().map(|&v| fit.gradient(v)).collect();
        return (rows, fit.family.parameter_count() - 1);
    }
    let values: Vec<f64> = x.iter().map(|&v| fit.value(v)).collect();
    let mean = values.iter().sum::<f64>() / count(values.len());
    (values.iter().map(|v| [1.0, v - mean, 0.0, 0.0]).collect(), 1)
}

/// Whether the constant is among the columns that the curve's coefficients span.
pub(super) fn has_constant(family: Family) -> bool {
    family != Family::Power
}
