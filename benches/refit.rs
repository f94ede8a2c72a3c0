//! What one refit of a channel costs: every family the watch fits by default, the choice among them
//! and the standard errors; then each family alone, the reach and the forecast.
//!
//!     cargo bench --bench refit

use asfound::drift::choose::choose;
use asfound::drift::family::Family;
use asfound::drift::fit::{Fit, FitOutcome};
use asfound::drift::forecast::{Forecaster, fit_all_in};
use asfound::drift::reach::assess_in;
use asfound::drift::robust::{fit_from, fit_robust};
use asfound::drift::sandwich::{decays, own_correlation_in, sandwich_in};
use asfound::drift::serial::{effective_count, spacing_of};
use asfound::drift::workspace::Workspace;
use criterion::{BenchmarkId, Criterion, criterion_group, criterion_main};
use fastrand::Rng;
use std::hint::black_box;

/// The families of the watch's default settings, in their order.
const FAMILIES: [Family; 5] =
    [Family::Logarithmic, Family::Power, Family::OffsetPower, Family::Linear, Family::Exponential];
/// Correlation of neighbouring points, of the noise and as the channel knows it.
const RHO: f64 = 0.3;
/// Seed of all noise.
const SEED: u64 = 4108;

/// Hourly points from 30 days of age on, 0.5 √age plus noise of standard deviation 0.1.
fn window(n: u32) -> (Vec<f64>, Vec<f64>) {
    let mut rng = Rng::with_seed(SEED);
    let mut noise = 0.0;
    let x: Vec<f64> = (0..n).map(|i| 30.0 + f64::from(i) / 24.0).collect();
    let y = x.iter().map(|age| {
        // The sum of twelve uniforms less six: standard deviation 1, normal enough for a clock.
        let fresh = (0..12).map(|_| rng.f64()).sum::<f64>() - 6.0;
        noise = RHO * noise + 0.1 * (1.0 - RHO * RHO).sqrt() * fresh;
        0.5 * age.sqrt() + noise
    });
    let y = y.collect();
    (x, y)
}

/// All that a refit computes about the curve.
fn refit(x: &[f64], y: &[f64], workspace: &mut Workspace) -> (Vec<Fit>, [f64; 4]) {
    let fits = fit_all_in(x, y, &FAMILIES, workspace);
    let errors = errors(&fits, x, y, workspace);
    (fits, errors)
}

/// Chooses, and returns the chosen curve's standard errors with dependence.
fn errors(fits: &[Fit], x: &[f64], y: &[f64], workspace: &mut Workspace) -> [f64; 4] {
    let (_, spacing) = spacing_of(x);
    let chosen = &fits[choose(fits, effective_count(x.len(), RHO), None).chosen];
    let own = own_correlation_in(chosen, x, y, &spacing, workspace);
    let decays = decays(&spacing, RHO.max(own));
    let (covariance, _) = sandwich_in(chosen, x, &decays, workspace).expect("a power curve");
    chosen.standard_errors_of(&covariance)
}

/// Has a workspace know the logarithms of other ages, as the window of another channel leaves it.
fn forget(workspace: &mut Workspace) {
    let ages = [1.0, 2.0, 3.0, 4.0];
    let _ = fit_robust(Family::Logarithmic, &ages, &ages, workspace);
}

fn cold(criterion: &mut Criterion) {
    let mut group = criterion.benchmark_group("refit");
    let mut workspace = Workspace::default();
    for n in [64, 128, 256, 512, 1024] {
        let (x, y) = window(n);
        group.bench_with_input(BenchmarkId::from_parameter(n), &n, |bencher, _| {
            bencher.iter(|| {
                forget(&mut workspace);
                refit(black_box(&x), black_box(&y), &mut workspace)
            });
        });
    }
    group.finish();
}

/// A refit whose starts are known from the window as it was a day ago.
fn known(criterion: &mut Criterion) {
    let mut group = criterion.benchmark_group("refit-known-start");
    let mut workspace = Workspace::default();
    let (x, y) = window(536);
    let previous = fit_all_in(&x[..512], &y[..512], &FAMILIES, &mut workspace);
    let (x, y) = (&x[24..], &y[24..]);
    group.bench_function("512", |bencher| {
        bencher.iter(|| {
            forget(&mut workspace);
            let mut fits = Vec::with_capacity(FAMILIES.len());
            for previous in &previous {
                let family = previous.family;
                if let FitOutcome::Fitted(fit) = fit_from(family, x, y, previous, &mut workspace) {
                    fits.push(*fit);
                }
            }
            errors(&fits, x, y, &mut workspace)
        });
    });
    group.bench_function("512 anew", |bencher| {
        bencher.iter(|| {
            forget(&mut workspace);
            refit(x, y, &mut workspace)
        });
    });
    group.finish();
}

fn family(criterion: &mut Criterion) {
    let mut group = criterion.benchmark_group("family-512");
    let mut workspace = Workspace::default();
    let (x, y) = window(512);
    for family in FAMILIES {
        group.bench_function(family.name(), |bencher| {
            bencher.iter(|| fit_robust(family, black_box(&x), black_box(&y), &mut workspace));
        });
    }
    group.finish();
}

fn ahead(criterion: &mut Criterion) {
    let mut group = criterion.benchmark_group("ahead");
    let mut workspace = Workspace::default();
    for n in [200, 512] {
        let (x, y) = window(n);
        group.bench_with_input(BenchmarkId::new("reach", n), &n, |bencher, _| {
            bencher
                .iter(|| assess_in(black_box(&x), black_box(&y), &FAMILIES, RHO, &mut workspace));
        });
        group.bench_with_input(BenchmarkId::new("forecaster", n), &n, |bencher, _| {
            bencher.iter(|| {
                Forecaster::new_in(black_box(&x), black_box(&y), &FAMILIES, RHO, &mut workspace)
            });
        });
    }
    group.finish();
}

criterion_group!(benches, cold, known, family, ahead);
criterion_main!(benches);
