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
#[derive(Clone, Debug, Default, PartialEq)]
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
/// `fit` — by plain least squares; `x`, `y` — the ages (n), days, and deviations (n) it was fitted
/// to, in order of age.
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

#[cfg(test)]
mod tests {
    use super::*;
    use crate::drift::family::Family;
    use crate::drift::fit::{FitOutcome, fit};
    use crate::drift::reference::{CENSUS, MISRA1A, NORRIS};

    fn check(family: Family, data: &[(f64, f64)]) -> (ResidualTests, Vec<f64>) {
        let (x, y): (Vec<f64>, Vec<f64>) = data.iter().copied().unzip();
        let FitOutcome::Fitted(fit) = fit(family, &x, &y, false) else { panic!("a curve") };
        (test_residuals(&fit, &x, &y), fit.residuals(&x, &y))
    }

    /// Agreement to `digits`, relative.
    fn agree(pairs: &[(f64, f64)], digits: f64) {
        for (got, want) in pairs {
            let relative = ((got - want) / want).abs();
            assert!(relative < 10.0_f64.powf(-digits), "{got} against {want}");
        }
    }

    #[test]
    fn reference_tests_of_the_norris_line() {
        // lmtest 0.9.40, stats 4.2.2 and tseries 0.10.53 of R, computed again with 80 digits (mpmath).
        let (tests, residuals) = check(Family::Linear, &NORRIS);
        let dw = tests.durbin_watson.unwrap();
        agree(
            &[
                (dw.statistic, 2.330_794_431_660_574),
                (dw.p_positive, 0.796_808_508_207_808_1),
                (dw.p_negative, 0.203_191_491_792_191_87),
                (dw.p_value, 0.406_382_983_584_383_74),
            ],
            9.0,
        );
        let lb = ljung_box::ljung_box(&residuals, 3).unwrap();
        agree(
            &[(lb.statistic, 12.937_476_673_963_618), (lb.p_value, 0.004_773_785_219_416_193)],
            9.0,
        );
        let bp = tests.breusch_pagan.unwrap();
        agree(
            &[(bp.statistic, 7.426_888_360_339_173), (bp.p_value, 0.006_425_635_749_870_183)],
            9.0,
        );
        let reset = tests.reset.unwrap();
        agree(
            &[(reset.statistic, 0.905_891_143_507_390_4), (reset.p_value, 0.414_295_895_460_876_8)],
            8.0,
        );
        let runs = tests.runs.unwrap();
        assert_eq!((runs.positive, runs.negative, runs.runs), (17, 19, 18));
        agree(&[(runs.z, -0.320_428_961_839_983_4), (runs.p_exact, 0.883_549_469_504_878_9)], 9.0);
    }

    #[test]
    fn reference_far_tails() {
        // As above; a line through curved data: Durbin–Watson far out, RESET in the thousands.
        let (tests, _) = check(Family::Linear, &MISRA1A);
        let (dw, reset) = (tests.durbin_watson.unwrap(), tests.reset.unwrap());
        agree(
            &[(dw.p_positive, 7.883_227_848_769_343e-9), (reset.statistic, 5_977.473_200_845_276)],
            9.0,
        );
        agree(&[(reset.p_value, 4.077_990_526_885_528e-16)], 6.0);
        let (tests, _) = check(Family::Linear, &CENSUS);
        let (dw, reset) = (tests.durbin_watson.unwrap(), tests.reset.unwrap());
        agree(
            &[
                (dw.p_positive, 4.354_079_295_118_042e-12),
                (reset.statistic, 339.914_568_161_043_46),
            ],
            9.0,
        );
    }

    #[test]
    fn reference_tests_of_a_quadratic() {
        // As above; two regressors.
        let (tests, _) = check(Family::Quadratic, &MISRA1A);
        let (dw, bp) = (tests.durbin_watson.unwrap(), tests.breusch_pagan.unwrap());
        let reset = tests.reset.unwrap();
        agree(
            &[
                (dw.p_positive, 4.744_718_333_182_796e-5),
                (bp.statistic, 0.201_684_162_994_417_64),
                (bp.p_value, 0.904_075_791_908_889_8),
                (reset.statistic, 42.103_508_108_594_16),
                (reset.p_value, 0.000_027_012_984_431_166_45),
            ],
            9.0,
        );
        assert_eq!((bp.degrees_of_freedom, reset.degrees_of_freedom), (2, (2, 9)));
    }

    #[test]
    fn a_handful_of_readings_has_no_tests_that_need_more() {
        let (tests, _) = check(Family::Linear, &NORRIS[..4]);
        assert!(tests.reset.is_none(), "{tests:?}");
        assert!(tests.durbin_watson.is_some(), "{tests:?}");
    }
}
