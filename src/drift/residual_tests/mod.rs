//! The classical tests of residuals, for the one look at one series, where people expect them and
//! cross-check them. The watch uses none of them: on overlapping windows of dependent residuals they
//! raise alerts without end.

pub mod breusch_pagan;
pub mod durbin_watson;
pub mod ljung_box;
pub mod reset;
pub mod runs;

use crate::drift::fit::Fit;
use crate::drift::interval::Intervals;

/// All tests of one curve's residuals; what cannot be had is None.
#[derive(Clone, Debug, PartialEq)]
pub struct ResidualTests {
    /// Correlation of neighbours.
    pub durbin_watson: Option<durbin_watson::DurbinWatson>,
    /// Correlation over several lags.
    pub ljung_box: Option<ljung_box::LjungBox>,
    /// Order of signs.
    pub runs: Option<runs::Runs>,
    /// Scatter that changes along the curve.
    pub breusch_pagan: Option<breusch_pagan::BreuschPagan>,
    /// A wrong shape.
    pub reset: Option<reset::Reset>,
}

/// Tests the residuals of a curve.
///
/// # Arguments
/// `fit` — by plain least squares; `x`, `y` — what it was fitted to, in order of age.
pub fn test_residuals(fit: &Fit, x: &[f64], y: &[f64]) -> ResidualTests {
    let residuals = fit.residuals(x, y);
    let basis = Intervals::new(fit, x, 0.95).map(|intervals| intervals.orthonormal_rows(x));
    let p = fit.family.parameter_count();
    ResidualTests {
        durbin_watson: basis
            .as_ref()
            .and_then(|basis| durbin_watson::durbin_watson(&residuals, basis, p)),
        ljung_box: ljung_box::ljung_box(&residuals, ljung_box::usual_lags(residuals.len())),
        runs: runs::runs(&residuals),
        breusch_pagan: breusch_pagan::breusch_pagan(fit, x, &residuals),
        reset: basis.as_ref().and_then(|basis| reset::reset(fit, x, &residuals, basis)),
    }
}
