//! RESET: would powers of the fitted values explain what the curve leaves?

use super::breusch_pagan::has_constant;
use crate::drift::family::{COEFFICIENTS_MAX, Coefficients};
use crate::drift::fit::Fit;
use crate::drift::least_squares::solve;
use crate::drift::serial::count;
use statrs::distribution::{ContinuousCDF, FisherSnedecor};

/// Number of powers added: the square and the cube.
const POWERS: usize = 2;

/// The F test of the square and the cube of the fitted values.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Reset {
    /// F.
    pub statistic: f64,
    /// Degrees of freedom above and below.
    pub degrees_of_freedom: (usize, usize),
    /// Probability of more, the curve's shape right.
    pub p_value: f64,
}

/// Returns the RESET test; of the linear approximation where the curve is nonlinear in its
/// coefficients.
///
/// # Arguments
/// `fit` — the curve; `x` — the ages it was fitted to (n), days; `residuals` — y less the curve
/// (n); `basis` — orthonormal rows (n) spanning the curve's columns.
///
/// # Returns
/// None with too few readings, or when the powers add nothing to the columns.
///
/// # Numerics
/// Fitted values are centred (where the constant is among the columns) and scaled before their powers
/// are taken, which changes nothing but the digits. What the columns explain is taken out twice.
///
/// # Source
/// Ramsey (1969), Journal of the Royal Statistical Society B 31.
pub fn reset(fit: &Fit, x: &[f64], residuals: &[f64], basis: &[Coefficients]) -> Option<Reset> {
    let below = fit.degrees_of_freedom.checked_sub(POWERS).filter(|&f| f > 0)?;
    let mut values: Vec<f64> = x.iter().map(|&v| fit.value(v)).collect();
    if has_constant(fit.family) {
        let mean = values.iter().sum::<f64>() / count(values.len());
        values.iter_mut().for_each(|v| *v -= mean);
    }
    let largest = values.iter().fold(0.0_f64, |m, v| m.max(v.abs()));
    if largest <= 0.0 {
        return None;
    }
    let powers = [2, 3].map(|power| {
        let column: Vec<f64> = values.iter().map(|v| (v / largest).powi(power)).collect();
        free_of(basis, &free_of(basis, &column))
    });
    let rows: Vec<Coefficients> =
        powers[0].iter().zip(&powers[1]).map(|(&a, &b)| [a, b, 0.0, 0.0]).collect();
    let residuals = free_of(basis, residuals);
    let total: f64 = residuals.iter().map(|e| e * e).sum();
    let explained = solve(&rows, &residuals, POWERS)?.explained.powi(2);
    let statistic = explained / count(POWERS) / ((total - explained) / count(below));
    if !statistic.is_finite() || statistic < 0.0 {
        return None;
    }
    let f = FisherSnedecor::new(count(POWERS), count(below)).expect("positive degrees of freedom");
    Some(Reset { statistic, degrees_of_freedom: (POWERS, below), p_value: f.sf(statistic) })
}

/// Takes out what orthonormal rows explain.
fn free_of(basis: &[Coefficients], column: &[f64]) -> Vec<f64> {
    let mut share = [0.0; COEFFICIENTS_MAX];
    for (row, v) in basis.iter().zip(column) {
        for k in 0..COEFFICIENTS_MAX {
            share[k] += row[k] * v;
        }
    }
    basis
        .iter()
        .zip(column)
        .map(|(row, v)| v - row.iter().zip(share).map(|(a, b)| a * b).sum::<f64>())
        .collect()
}
