//! Ljung–Box: are residuals correlated over several lags together?

use crate::drift::serial::count;
use statrs::distribution::{ChiSquared, ContinuousCDF};

/// Most lags that are usually looked at.
const LAGS_MAX: usize = 10;

/// The statistic over so many lags.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct LjungBox {
    /// Lags, and degrees of freedom: none are taken off for the curve's coefficients.
    pub lags: usize,
    /// n (n + 2) Σ r_k² / (n − k).
    pub statistic: f64,
    /// Probability of more, residuals independent.
    pub p_value: f64,
}

/// Returns the number of lags to look at: a fifth of the residuals, 1 to 10 (common practice, no
/// source).
///
/// # Arguments
/// `n` — residuals.
pub fn usual_lags(n: usize) -> usize {
    (n / 5).clamp(1, LAGS_MAX)
}

/// Returns the Ljung–Box test over `lags` lags; autocorrelations of the residuals less their mean.
///
/// # Arguments
/// `residuals` — in order of age (n); `lags` — at least 1, below n.
///
/// # Returns
/// None when the residuals do not differ, or there are no more of them than lags.
///
/// # Source
/// Ljung and Box (1978), Biometrika 65.
pub fn ljung_box(residuals: &[f64], lags: usize) -> Option<LjungBox> {
    let n = residuals.len();
    if lags == 0 || n <= lags {
        return None;
    }
    let mean = residuals.iter().sum::<f64>() / count(n);
    let e: Vec<f64> = residuals.iter().map(|r| r - mean).collect();
    let total: f64 = e.iter().map(|v| v * v).sum();
    if total <= 0.0 {
        return None;
    }
    let sum: f64 = (1..=lags)
        .map(|k| {
            let lagged: f64 = e.iter().zip(&e[k..]).map(|(a, b)| a * b).sum();
            (lagged / total).powi(2) / count(n - k)
        })
        .sum();
    let statistic = count(n) * (count(n) + 2.0) * sum;
    let chi = ChiSquared::new(count(lags)).expect("at least one lag");
    Some(LjungBox { lags, statistic, p_value: chi.sf(statistic) })
}
