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
            let mut target = Target::new(family, &x, &y, None, &mut workspace).unwrap();
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
        let mut target = Target::new(family, &x, &y, None, &mut workspace).unwrap();
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

/// Ages, deviations about a curve of the family and readings behind each, 1 to 4: a sine by the roots of
/// these stays below 3 times 1.4826 median sizes, so nothing is clipped.
fn counted(family: Family) -> (Vec<f64>, Vec<f64>, Vec<u32>) {
    let x: Vec<f64> = (0..240).map(|i| 4.0 + f64::from(i) / 12.0).collect();
    let theta = match family {
        Family::Exponential => [1.0, 1.5, 9.0, 0.0],
        Family::OffsetPower => [1.0, 1.5, 0.6, 0.0],
        Family::Quadratic | Family::Cubic => [1.0, 0.3, -0.02, 4e-4],
        _ => [1.5, 0.6, 0.0, 0.0],
    };
    let y = x.iter().map(|&x| family.value(&theta, x) + 1e-3 * (x * 29.0).sin()).collect();
    let readings = (0..240).map(|i| 1 + (i * i + 2 * i) % 7 % 4).collect();
    (x, y, readings)
}

/// Weights of mean 1.
fn of_mean_one(readings: &[u32]) -> Vec<f64> {
    let mean = f64::from(readings.iter().sum::<u32>()) / count(readings.len());
    readings.iter().map(|&k| f64::from(k) / mean).collect()
}

fn weighted(family: Family, x: &[f64], y: &[f64], weights: &[f64]) -> Fit {
    fitted(fit_robust_weighted(family, x, y, Some(weights), &mut Workspace::default()))
}

fn same_coefficients(a: &Fit, b: &Fit, within: f64) {
    for k in 0..a.family.parameter_count() {
        let off = (a.theta[k] / b.theta[k] - 1.0).abs();
        assert!(off < within, "{:?}: {:?}, {:?}", a.family, a.theta, b.theta);
    }
}

#[test]
fn a_weighted_line_is_the_one_of_the_closed_form() {
    // Slope Σ w (x − x̄)(y − ȳ) / Σ w (x − x̄)², means weighted (textbook, from memory).
    let (x, y, readings) = counted(Family::Linear);
    let w = of_mean_one(&readings);
    let total = |f: &dyn Fn(usize) -> f64| (0..x.len()).map(|i| w[i] * f(i)).sum::<f64>();
    let (age, level) = (total(&|i| x[i]) / total(&|_| 1.0), total(&|i| y[i]) / total(&|_| 1.0));
    let squares = total(&|i| (x[i] - age).powi(2));
    let slope = total(&|i| (x[i] - age) * (y[i] - level)) / squares;
    let residual_ss = total(&|i| (y[i] - level - slope * (x[i] - age)).powi(2));
    let total_ss = total(&|i| (y[i] - level).powi(2));
    let fit = weighted(Family::Linear, &x, &y, &w);
    let near = |got: f64, want: f64| assert!((got / want - 1.0).abs() < 1e-9, "{got}, {want}");
    near(fit.theta[1], slope);
    near(fit.theta[0], level - slope * age);
    near(fit.residual_ss, residual_ss);
    near(fit.r_squared.unwrap(), 1.0 - residual_ss / total_ss);
    near(fit.standard_errors[1], (residual_ss / (count(x.len()) - 2.0) / squares).sqrt());
}

#[test]
fn a_point_of_weight_k_is_k_readings() {
    for (family, within) in [
        (Family::Linear, 1e-9),
        (Family::Logarithmic, 1e-9),
        (Family::Power, 1e-9),
        (Family::Quadratic, 1e-9),
        (Family::Cubic, 1e-9),
        (Family::OffsetPower, 1e-7),
        (Family::Exponential, 1e-7),
    ] {
        let (x, y, readings) = counted(family);
        let times = |v: &[f64]| -> Vec<f64> {
            let each = v.iter().zip(&readings);
            each.flat_map(|(&v, &k)| std::iter::repeat_n(v, k as usize)).collect()
        };
        let w = of_mean_one(&readings);
        let mean = count(times(&x).len()) / count(x.len());
        let repeated = fitted(fit(family, &times(&x), &times(&y), false));
        let once = weighted(family, &x, &y, &w);
        same_coefficients(&once, &repeated, within);
        let off = once.residual_ss * mean / repeated.residual_ss - 1.0;
        assert!(off.abs() < 1e-7, "{family:?}: {off}");
        // And the weights matter.
        let alike = fitted(fit_robust(family, &x, &y, &mut Workspace::default()));
        assert!((alike.theta[0] / once.theta[0] - 1.0).abs() > 1e-7, "{family:?}");
    }
}

#[test]
fn clipped_weighted_residuals_are_orthogonal_to_every_derivative() {
    for family in FAMILIES {
        let (x, y) = window(3, 240);
        let w = of_mean_one(&counted(family).2);
        let fit = weighted(family, &x, &y, &w);
        let own = fit.residuals(&x, &y);
        let residuals: Vec<f64> = own.iter().zip(&w).map(|(r, w)| r * w.sqrt()).collect();
        let limit = CLIP_WINSOR * robust_scale(&residuals);
        assert!(residuals.iter().any(|r| r.abs() > limit), "{family:?}: something is clipped");
        for k in 0..family.parameter_count() {
            let (mut sum, mut squares) = (0.0, 0.0);
            for ((x, r), w) in x.iter().zip(&residuals).zip(&w) {
                let derivative = w.sqrt() * fit.gradient(*x)[k];
                sum += derivative * r.clamp(-limit, limit);
                squares += derivative * derivative;
            }
            let off = sum.abs() / squares.sqrt() / fit.residual_sd;
            assert!(off < 1e-6, "{family:?}, coefficient {k}: {off}");
        }
    }
}

#[test]
fn weights_follow_their_data_and_the_unit() {
    for family in FAMILIES {
        let (x, y) = window(3, 240);
        let w = of_mean_one(&counted(family).2);
        let fit = weighted(family, &x, &y, &w);
        let other = |v: &[f64], times: f64| -> Vec<f64> {
            (0..v.len()).map(|i| times * v[(i * 77 + 5) % v.len()]).collect()
        };
        let shuffled = weighted(family, &other(&x, 1.0), &other(&y, 1.0), &other(&w, 1.0));
        assert!(apart(&fit, &shuffled) < 1e-6, "{family:?}");
        let scaled = weighted(family, &x, &y.iter().map(|y| 1e3 * y).collect::<Vec<_>>(), &w);
        let off = scaled.residual_sd / fit.residual_sd / 1e3 - 1.0;
        assert!(off.abs() < 1e-9, "{family:?}: {off}");
        let last = family.parameter_count() - 1;
        let factor = if family.is_linear_in_coefficients() { 1e3 } else { 1.0 };
        let off = (scaled.theta[last] / factor - fit.theta[last]) / fit.standard_errors[last];
        assert!(off.abs() < 1e-6, "{family:?}: {off}");
    }
}

#[test]
fn weights_of_one_change_no_bit() {
    let mut workspace = Workspace::default();
    for family in FAMILIES {
        let (x, y) = window(3, 240);
        let alike = fit_robust(family, &x, &y, &mut workspace);
        let ones = fitted(fit_robust_weighted(family, &x, &y, Some(&[1.0; 240]), &mut workspace));
        let alike_fit = fitted(alike.clone());
        assert_eq!(ones.theta.map(f64::to_bits), alike_fit.theta.map(f64::to_bits), "{family:?}");
        assert_eq!(ones.residual_ss.to_bits(), alike_fit.residual_ss.to_bits(), "{family:?}");
        // Nor does a weighted fit before it.
        fit_robust_weighted(family, &x, &y, Some(&of_mean_one(&counted(family).2)), &mut workspace);
        assert_eq!(fit_robust(family, &x, &y, &mut workspace), alike, "{family:?}");
    }
}
