//! What one refit of a channel costs: every family the watch fits by default, the choice among them
//! and the standard errors; then each family alone, the reach and the forecast.
//!
//!     cargo bench --bench refit

use asfound::drift::choose::choose;
use asfound::drift::family::Family;
use asfound::drift::fit::{Fit, fit};
use asfound::drift::forecast::{Forecaster, fit_all};
use asfound::drift::reach::assess;
use asfound::drift::sandwich::{own_correlation, sandwich};
use asfound::drift::serial::{effective_count, spacing_of};
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
fn refit(x: &[f64], y: &[f64]) -> (Vec<Fit>, [f64; 4]) {
    let fits = fit_all(x, y, &FAMILIES);
    let (_, spacing) = spacing_of(x);
    let chosen = &fits[choose(&fits, effective_count(x.len(), RHO), None).chosen];
    let own = own_correlation(chosen, x, y, &spacing);
    let (covariance, _) = sandwich(chosen, x, &spacing, RHO.max(own)).expect("a power curve");
    let errors = chosen.standard_errors_of(&covariance);
    (fits, errors)
}

fn cold(criterion: &mut Criterion) {
    let mut group = criterion.benchmark_group("refit-cold");
    for n in [64, 128, 256, 512, 1024] {
        let (x, y) = window(n);
        group.bench_with_input(BenchmarkId::from_parameter(n), &n, |bencher, _| {
            bencher.iter(|| refit(black_box(&x), black_box(&y)));
        });
    }
    group.finish();
}

fn family(criterion: &mut Criterion) {
    let mut group = criterion.benchmark_group("family-cold-512");
    let (x, y) = window(512);
    for family in FAMILIES {
        group.bench_function(family.name(), |bencher| {
            bencher.iter(|| fit(family, black_box(&x), black_box(&y), true));
        });
    }
    group.finish();
}

fn ahead(criterion: &mut Criterion) {
    let mut group = criterion.benchmark_group("ahead");
    for n in [200, 512] {
        let (x, y) = window(n);
        group.bench_with_input(BenchmarkId::new("reach", n), &n, |bencher, _| {
            bencher.iter(|| assess(black_box(&x), black_box(&y), &FAMILIES, RHO));
        });
        group.bench_with_input(BenchmarkId::new("forecaster", n), &n, |bencher, _| {
            bencher.iter(|| Forecaster::new(black_box(&x), black_box(&y), &FAMILIES, RHO));
        });
    }
    group.finish();
}

criterion_group!(benches, cold, family, ahead);
criterion_main!(benches);
