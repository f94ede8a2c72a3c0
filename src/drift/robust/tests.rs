//! The watch's fit held against the equations that define it, and against the plain fit.

use super::*;
use crate::drift::fit::{CLIP_WINSOR, fit, robust_scale};
use crate::drift::structure::simulate::noise;

/// What the watch chooses from, and a polynomial.
const FAMILIES: [Family; 6] = [
    Family::Linear,
    Family::Logarithmic,
    Family::Power,
    Family::OffsetPower,
    Family::Exponential,
    Family::Cubic,
];

/// Two-hourly readings from 20 days of age on: a curve that settles, and noise with wild readings.
fn window(seed: u64, n: u32) -> (Vec<f64>, Vec<f64>) {
    let x: Vec<f64> = (0..n).map(|i| 20.0 + f64::from(i) / 12.0).collect();
    let noise = noise(seed, n as usize, 0.3);
    let y = noise.iter().zip(&x).enumerate().map(|(i, (e, x))| {
        let wild = if i % 37 == 11 { 4.0 } else { 0.0 };
        2.0 + 3.0 * (1.0 - (-(x - 20.0) / 7.0).exp()) + 0.2 * (e + wild)
    });
    let y = y.collect();
    (x, y)
}

fn fitted(outcome: FitOutcome) -> Fit {
    match outcome {
        FitOutcome::Fitted(fit) => *fit,
        other => panic!("{other:?}"),
    }
}

/// Largest difference of two curves' coefficients, in standard errors of the first.
fn apart(a: &Fit, b: &Fit) -> f64 {
    let p = a.family.parameter_count();
    (0..p).map(|k| ((a.theta[k] - b.theta[k]) / a.standard_errors[k]).abs()).fold(0.0, f64::max)
}

#[test]
fn clipped_residuals_are_orthogonal_to_every_derivative() {
    // Huber's equations with the limit of these very residuals: at the end, both hold at once.
    for family in FAMILIES {
        let (x, y) = window(3, 240);
        let fit = fitted(fit_robust(family, &x, &y, &mut Workspace::default()));
        let residuals = fit.residuals(&x, &y);
        let limit = CLIP_WINSOR * robust_scale(&residuals);
        assert!(residuals.iter().any(|r| r.abs() > limit), "{family:?}: something is clipped");
        for k in 0..family.parameter_count() {
            let (mut sum, mut squares) = (0.0, 0.0);
            for (x, r) in x.iter().zip(&residuals) {
                let derivative = fit.gradient(*x)[k];
                sum += derivative * r.clamp(-limit, limit);
                squares += derivative * derivative;
            }
            let off = sum.abs() / squares.sqrt() / fit.residual_sd;
            assert!(off < 1e-6, "{family:?}, coefficient {k}: {off}");
        }
    }
}

#[test]
fn without_outliers_the_curve_is_the_plain_one() {
    // A sine's largest value is 0.48 of 3 times its 1.4826 median sizes: nothing is clipped.
    for family in FAMILIES {
        let x: Vec<f64> = (0..300).map(|i| 4.0 + f64::from(i) / 24.0).collect();
        let y: Vec<f64> = x.iter().map(|x| 1.0 + x.powf(0.6) + 0.1 * (x * 29.0).sin()).collect();
        let plain = fitted(fit(family, &x, &y, false));
        let robust = fitted(fit_robust(family, &x, &y, &mut Workspace::default()));
        assert!(apart(&plain, &robust) < 1e-7, "{family:?}: {plain:?}, {robust:?}");
        for k in 0..family.parameter_count() {
            let ratio = robust.standard_errors[k] / plain.standard_errors[k];
            assert!((ratio - 1.0).abs() < 1e-6, "{family:?}: {ratio}");
        }
    }
}

#[test]
fn the_curve_does_not_depend_on_where_the_refinement_began() {
    let mut workspace = Workspace::default();
    for family in [Family::Power, Family::OffsetPower, Family::Exponential] {
        for seed in 0..20 {
            let (x, y) = window(seed, 180);
            let found = fitted(fit_robust(family, &x, &y, &mut workspace));
            let mut target = Target::new(family, &x, &y, &mut workspace).unwrap();
            let k = target.nonlinear(&found.theta).unwrap();
            for begin in [0.7 * k, 0.95 * k, 1.1 * k, 1.4 * k] {
                let first = target.project_at(begin);
                let refined = target.refine(first).unwrap();
                let other = target.finish(&refined, None).unwrap();
                let apart = apart(&found, &other);
                assert!(apart < 1e-6, "{family:?}, seed {seed}, from {begin}: {apart}");
            }
        }
    }
}

#[test]
fn a_known_start_ends_at_the_same_curve_as_none() {
    let mut workspace = Workspace::default();
    let (mut known, mut all) = (0, 0);
    for family in [Family::Power, Family::OffsetPower, Family::Exponential] {
        for seed in 0..10 {
            let (x, y) = window(seed, 400);
            let mut previous: Option<Fit> = None;
            for from in (0..=200).step_by(20) {
                let (x, y) = (&x[from..from + 200], &y[from..from + 200]);
                let FitOutcome::Fitted(anew) = fit_robust(family, x, y, &mut workspace) else {
                    previous = None;
                    continue;
                };
                if let Some(previous) = &previous {
                    let near = fitted(fit_from(family, x, y, previous, &mut workspace));
                    let apart = apart(&anew, &near);
                    assert!(apart < 1e-6, "{family:?}, seed {seed}, from {from}: {apart}");
                    all += 1;
                    known += usize::from(near.iterations != anew.iterations || apart > 0.0);
                }
                previous = Some(*anew);
            }
        }
    }
    assert!(known > all / 2 && all > 150, "{known} of {all} began where the last one ended");
}

#[test]
fn a_used_workspace_changes_nothing_and_grows_no_more() {
    let mut used = Workspace::default();
    let (longest_x, longest_y) = window(1, 300);
    for family in FAMILIES {
        fit_robust(family, &longest_x, &longest_y, &mut used);
    }
    let room = used.capacity();
    for (seed, n) in [(2, 300), (3, 120), (4, 299), (2, 300)] {
        let (x, y) = window(seed, n);
        for family in FAMILIES {
            let fresh = fit_robust(family, &x, &y, &mut Workspace::default());
            assert_eq!(fit_robust(family, &x, &y, &mut used), fresh, "{family:?}");
        }
    }
    assert_eq!(used.capacity(), room);
}

#[test]
fn columns_are_derivatives_to_the_coefficients_of_the_shape() {
    let (x, y) = window(5, 60);
    let mut workspace = Workspace::default();
    for (family, places) in [
        (Family::Power, [-1.0, 0.4, 2.0, 1e-3]),
        (Family::OffsetPower, [-0.7, 0.5, 1e-4, 0.05]),
        (Family::Exponential, [-3.0, -0.3, -1e-4, 0.5]),
    ] {
        let mut target = Target::new(family, &x, &y, &mut workspace).unwrap();
        for k in places {
            let theta =
                if family == Family::Power { [1.3, k, 0.0, 0.0] } else { [0.8, 1.3, k, 0.0] };
            let p = family.parameter_count();
            let mut residuals_at = |step: f64| {
                let mut moved = theta;
                moved[p - 1] += step;
                target.evaluate(&moved);
                target.residuals.clone()
            };
            let h = 1e-5;
            let (up, down) = (residuals_at(h), residuals_at(-h));
            target.evaluate(&theta);
            let factor = target.factor(&theta).unwrap();
            for i in 0..x.len() {
                let numeric = (down[i] - up[i]) / (2.0 * h);
                let analytic = factor * target.columns[p - 1][i];
                let close = (numeric - analytic).abs() < 1e-7 * analytic.abs().max(1.0);
                assert!(close, "{family:?} at {k}: {numeric}, {analytic}");
                let inner = target.inner(&theta);
                let u = target.frame.inside(x[i]);
                let value = family.value(&inner, u);
                let off = (y[i] - target.residuals[i] - value).abs();
                assert!(off < 1e-9 * value.abs().max(1.0), "{family:?} at {k}: {off}");
            }
        }
    }
}
