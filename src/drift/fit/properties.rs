//! What must hold for every fit, whatever the data: units, origin, order and sign do not matter.

use crate::drift::family::Family;
use crate::drift::fit::{Fit, FitOutcome, fit};
use proptest::prelude::*;
use proptest::test_runner::RngSeed;

/// A drift and its readings: monotone with a curvature that every family can follow, and noise.
fn readings() -> impl Strategy<Value = (Vec<f64>, Vec<f64>)> {
    let noise = prop::collection::vec(-1.0..1.0_f64, 20..60);
    (noise, 0.3..0.8_f64, 1.0..50.0_f64, 0.01..0.2_f64).prop_map(|(noise, bend, first, size)| {
        let n = noise.len();
        let x: Vec<f64> = (0..n).map(|i| first + 3.0 * crate::drift::serial::count(i)).collect();
        let y = x.iter().zip(&noise).map(|(x, e)| 5.0 + 2.0 * x.powf(bend) + size * e).collect();
        (x, y)
    })
}

/// The fit, where there is one: a decline is an outcome too, but has nothing to compare.
fn fitted(family: Family, x: &[f64], y: &[f64]) -> Option<Fit> {
    match fit(family, x, y, false) {
        FitOutcome::Fitted(fit) => Some(*fit),
        _ => None,
    }
}

/// Holds two fits of the same curve against each other: `b` is `a` after y was multiplied by `times`
/// and `plus` added, at ages that are `older` higher and `longer` times as long.
fn same(a: &Option<Fit>, b: &Option<Fit>, x: &[f64], [times, plus, older, longer]: [f64; 4]) {
    let (Some(a), Some(b)) = (a, b) else {
        assert_eq!(a.is_some(), b.is_some(), "{a:?} against {b:?}");
        return;
    };
    for &x in x {
        let (want, got) = (times * a.value(x) + plus, b.value(longer * (x + older)));
        let scale = (times * a.residual_sd).abs();
        assert!((want - got).abs() < 1e-6 * scale, "{:?} at {x}: {want}, {got}", a.family);
    }
    let (want, got) = (times.abs() * a.residual_sd, b.residual_sd);
    assert!((want / got - 1.0).abs() < 1e-9, "{:?}: {want}, {got}", a.family);
}

proptest! {
    #![proptest_config(ProptestConfig {
        cases: 48,
        rng_seed: RngSeed::Fixed(20_260_401),
        failure_persistence: None,
        ..ProptestConfig::default()
    })]

    #[test]
    fn scaling_and_reflecting_y_scales_and_reflects_every_curve(
        (x, y) in readings(),
        times in prop_oneof![-1000.0..-0.001_f64, 0.001..1000.0_f64],
    ) {
        let scaled: Vec<f64> = y.iter().map(|v| times * v).collect();
        for family in Family::ALL {
            let (a, b) = (fitted(family, &x, &y), fitted(family, &x, &scaled));
            same(&a, &b, &x, [times, 0.0, 0.0, 1.0]);
        }
    }

    #[test]
    fn shifting_y_shifts_every_curve_with_a_constant((x, y) in readings(), plus in -100.0..100.0_f64) {
        let shifted: Vec<f64> = y.iter().map(|v| v + plus).collect();
        for family in Family::ALL.into_iter().filter(|&family| family != Family::Power) {
            let (a, b) = (fitted(family, &x, &y), fitted(family, &x, &shifted));
            same(&a, &b, &x, [1.0, plus, 0.0, 1.0]);
        }
    }

    #[test]
    fn the_unit_of_age_does_not_matter((x, y) in readings(), longer in 0.001..1000.0_f64) {
        let scaled: Vec<f64> = x.iter().map(|v| longer * v).collect();
        for family in Family::ALL {
            let (a, b) = (fitted(family, &x, &y), fitted(family, &scaled, &y));
            same(&a, &b, &x, [1.0, 0.0, 0.0, longer]);
        }
    }

    #[test]
    fn the_origin_of_age_does_not_matter_to_polynomials((x, y) in readings(), older in 0.0..5000.0_f64) {
        let late: Vec<f64> = x.iter().map(|v| v + older).collect();
        for family in [Family::Linear, Family::Quadratic, Family::Cubic] {
            let (a, b) = (fitted(family, &x, &y), fitted(family, &late, &y));
            same(&a, &b, &x, [1.0, 0.0, older, 1.0]);
        }
    }

    #[test]
    fn the_order_of_readings_does_not_matter((x, y) in readings(), turn in 1_usize..19) {
        let (mut later_x, mut later_y) = (x.clone(), y.clone());
        later_x.rotate_left(turn);
        later_y.rotate_left(turn);
        for family in Family::ALL {
            let (a, b) = (fitted(family, &x, &y), fitted(family, &later_x, &later_y));
            same(&a, &b, &x, [1.0, 0.0, 0.0, 1.0]);
        }
    }

    #[test]
    fn residuals_of_a_curve_with_a_constant_sum_to_nothing((x, y) in readings()) {
        for family in Family::ALL.into_iter().filter(|&family| family != Family::Power) {
            let Some(fit) = fitted(family, &x, &y) else { continue };
            let sum: f64 = fit.residuals(&x, &y).iter().sum();
            prop_assert!(sum.abs() < 1e-8 * fit.residual_sd, "{family:?}: {sum}");
        }
    }

    #[test]
    fn more_coefficients_never_fit_worse((x, y) in readings()) {
        let ss = |family| fitted(family, &x, &y).map_or(f64::INFINITY, |fit| fit.residual_ss);
        let slack = 1.0 + 1e-9;
        prop_assert!(ss(Family::Quadratic) <= ss(Family::Linear) * slack);
        prop_assert!(ss(Family::Cubic) <= ss(Family::Quadratic) * slack);
        if let Some(fit) = fitted(Family::OffsetPower, &x, &y) {
            prop_assert!(fit.residual_ss <= ss(Family::Power) * slack);
            prop_assert!(fit.residual_ss <= ss(Family::Logarithmic) * slack);
        }
    }
}
