//! The law by hand values, the words, and a short seeded trial on series in which nothing is wrong.

#![allow(clippy::unwrap_used)]

use super::*;
use crate::drift::family::Family;
use crate::drift::structure::simulate::{Noise, Sampling, least_squares};
use crate::drift::structure::{
    Baseline, Depth, Frame, Framed, ShiftDetector, Whitened, Workspace, examine,
};

const ONE_A_YEAR: Budget = Budget { false_alerts_per_year_site: 1.0, channels: 1 };

fn hourly(window_points: usize, stride_points: usize) -> Pace {
    Pace { window_points, stride_points, points_per_year: 8760.0 }
}

fn check(kind: Kind, pace: Pace, phi: f64, expected: f64) {
    let got = ONE_A_YEAR.threshold(kind, &pace, phi).unwrap();
    assert!((got - expected).abs() < 0.005, "{kind:?}: {got} against {expected}");
}

#[test]
fn thresholds_match_hand_values() {
    // log10(8760/.2) − .1, log10(8760/(.2·20)) + 1.15, log10(8760/(.05·20)) − .9.
    check(Kind::Shift, hourly(200, 20), 0.3, 4.541);
    check(Kind::Bend, hourly(200, 20), 0.3, 4.490);
    check(Kind::Dependence, hourly(200, 20), 0.3, 3.043);
    check(Kind::Dependence, hourly(60, 6), 0.3, 4.766);
    check(Kind::Bend, hourly(200, 20), 0.5, 4.850);
    // Half-way between 60 and 200 in log10 n: √(60·200) = 109.5 points.
    let pace = hourly(110, 20);
    check(Kind::Dependence, pace, 0.3, 8760.0_f64.log10() - 0.303);
}

#[test]
fn step_never_raises_but_names() {
    assert_eq!(ONE_A_YEAR.threshold(Kind::Step, &hourly(200, 20), 0.3), None);
}

#[test]
fn score_that_chance_alone_brings_keeps_no_alert_open() {
    // A tight budget: one below the threshold. A loose one (24 a year, n = 60, stride 6): the bend
    // of one honest look in 20 (two windows), log10 20 + 1.15, lies less than one below it.
    let pace = hourly(200, 20);
    let keeps = ONE_A_YEAR.keeps_open(Kind::Shift, &pace, 0.3).unwrap();
    assert!((keeps - 3.541).abs() < 0.005, "{keeps}");
    let loose = Budget { false_alerts_per_year_site: 240.0, channels: 1 };
    let pace = hourly(60, 6);
    let keeps = loose.keeps_open(Kind::Bend, &pace, 0.3).unwrap();
    let threshold = loose.threshold(Kind::Bend, &pace, 0.3).unwrap();
    assert!((keeps - 2.451).abs() < 0.005 && threshold - keeps < CLOSE_BELOW, "{keeps}");
    assert_eq!(loose.keeps_open(Kind::Step, &pace, 0.3), None);
}

#[test]
fn ten_times_the_channels_raise_every_threshold_by_one() {
    let few = Budget { false_alerts_per_year_site: 12.0, channels: 40 };
    let many = Budget { false_alerts_per_year_site: 12.0, channels: 400 };
    for kind in [Kind::Shift, Kind::Bend, Kind::Dependence] {
        let at = |budget: &Budget| budget.threshold(kind, &hourly(200, 20), 0.3).unwrap();
        assert!((at(&many) - at(&few) - 1.0).abs() < 1e-12, "{kind:?}");
    }
}

#[test]
fn shares_add_up_to_no_more_than_one() {
    let spent: f64 = Kind::ALL.into_iter().filter_map(|k| row(k).share).sum();
    assert!((spent - 0.45).abs() < 1e-12);
}

#[test]
fn threshold_is_finite_for_odd_budgets() {
    for (per_year, channels, points) in
        [(1e-12, 1, 1e12), (1e12, 1, 0.0), (f64::MIN_POSITIVE, usize::MAX, 1e300), (0.0, 0, 0.0)]
    {
        let budget = Budget { false_alerts_per_year_site: per_year, channels };
        let pace = Pace { window_points: 0, stride_points: 0, points_per_year: points };
        let t = budget.threshold(Kind::Shift, &pace, 0.3).unwrap();
        assert!(t.is_finite() && t > 2.0, "{t}");
    }
}

#[test]
fn words_tell_the_share_and_the_smallest_step() {
    let budget = Budget { false_alerts_per_year_site: 12.0, channels: 400 };
    assert_eq!(
        budget.share_words(200),
        "with 400 channels, each may raise one false alert in 33 years when nothing is wrong; the \
         smallest step that can be seen at 200 points is 1.7 times its noise"
    );
    let few = Budget { false_alerts_per_year_site: 12.0, channels: 1 };
    assert!(few.share_words(60).starts_with("with 1 channel, it may raise 12 false alerts a year"));
    assert!(few.share_words(60).ends_with("at 60 points is 3.0 times its noise"));
}

/// What one made-up channel went through.
#[derive(Default, Debug)]
struct Run {
    incidents: usize,
    /// (point, what it was called) at each opening.
    opened: Vec<(usize, Kind)>,
    /// Looks of `from..`, the last full one.
    last_full: Option<Examination>,
    points: usize,
}

/// Runs one channel through frames, looks and budget as the watch does: refit each `stride`.
fn run(x: &[f64], y: &[f64], family: Family, n: usize, stride: usize, budget: &Budget) -> Run {
    let pace = hourly(n, stride);
    let mut baseline = Baseline::new();
    let mut shift = ShiftDetector::default();
    let mut work = Workspace::default();
    let mut window: Option<Whitened> = None;
    let (mut last_slow, mut last_near) = (0_usize, None::<usize>);
    let mut out = Run::default();
    for i in n - 1..x.len() {
        let refit = (i - (n - 1)).is_multiple_of(stride);
        let (xs, ys) = (&x[i + 1 - n..=i], &y[i + 1 - n..=i]);
        if refit {
            let theta = least_squares(family, xs, ys);
            let framed = Frame::at_refit(xs, ys, family, &theta, &mut baseline, i as u64);
            let Framed::Ready(frame) = framed else { panic!("{framed:?}") };
            window = Whitened::new(frame, xs, ys);
        }
        let w = window.as_mut().unwrap();
        assert!(refit || w.slide(x[i], y[i], n));
        let depth = match refit {
            true => Depth::Full,
            false if i - last_slow >= (stride / 4).max(1) => Depth::QuickUnlessWarned,
            false => Depth::Quick,
        };
        let found = examine(w, &mut shift, 1, depth, &mut work);
        if refit {
            let phi = w.frame().phi_window;
            baseline.learn(i as u64, n, stride, phi, found.suspicious);
        }
        out.points += 1;
        let judgement = budget.judge(&found, &pace);
        if judgement.crossed.is_some() {
            if last_near.is_none() {
                out.incidents += 1;
                out.opened.push((i, judgement.name));
            }
            last_near = Some(i);
        } else if judgement.holds_open() && last_near.is_some() {
            last_near = Some(i);
        }
        if last_near.is_some_and(|at| i - at >= close_after_points(n)) {
            last_near = None;
        }
        if found.is_full() {
            last_slow = i;
            out.last_full = Some(found);
        }
    }
    out
}

/// Smallest count that a Poisson variable of that mean exceeds with probability below 1 in 1000.
fn poisson_bound(mean: f64) -> usize {
    let (mut term, mut sum, mut k) = ((-mean).exp(), (-mean).exp(), 0_usize);
    while sum < 0.999 {
        k += 1;
        term *= mean / k as f64;
        sum += term;
    }
    k
}

/// Incidents and their budget over channel-years in which nothing is wrong.
fn null_trial(n: usize, rho: f64, sampling: Sampling, years: u64, seed: u64, budget: &Budget) {
    let (mut incidents, mut points) = (0, 0);
    for year in 0..years {
        let mut noise = Noise::new(seed ^ (year << 32));
        let x: Vec<f64> = noise.ages(8760 + n, 1.0 / 24.0, sampling);
        let (_, spacing) = crate::drift::serial::spacing_of(&x);
        let e = noise.dependent(&spacing, rho);
        let y: Vec<f64> = x.iter().zip(e).map(|(x, e)| 4.0 * x.ln() + e).collect();
        let run = run(&x, &y, Family::Logarithmic, n, n / 10, budget);
        incidents += run.incidents;
        points += run.points;
    }
    let expected = points as f64 / budget.points_per_false_alert(8760.0);
    let bound = poisson_bound(1.2 * expected);
    println!(
        "n {n} rho {rho} seed {seed:#x}: {incidents} incidents, budget {expected:.1}, bound {bound}"
    );
    assert!(
        incidents <= bound,
        "seed {seed:#x}: {incidents} incidents against {expected} budgeted"
    );
}

#[test]
fn sim_budget_is_kept_when_nothing_is_wrong() {
    let two_a_month = Budget { false_alerts_per_year_site: 24.0, channels: 1 };
    for (n, rho, seed) in [(60, 0.0, 0x51_u64), (60, 0.3, 0x52), (200, 0.0, 0x53), (200, 0.3, 0x54)]
    {
        null_trial(n, rho, Sampling::Even, 2, seed, &two_a_month);
        null_trial(n, rho, Sampling::Even, 3, seed + 0x100, &ONE_A_YEAR);
    }
}

#[test]
fn sim_budget_is_kept_on_uneven_spacing() {
    let two_a_month = Budget { false_alerts_per_year_site: 24.0, channels: 1 };
    null_trial(60, 0.3, Sampling::Uneven, 1, 0x61, &two_a_month);
    null_trial(200, 0.3, Sampling::Uneven, 1, 0x62, &two_a_month);
}

/// A channel of n = 200, stride 20, noise 0.5 (AR .3), long settled, then changed at point `tau`.
fn changed(seed: u64, after: usize, change: impl Fn(usize, f64) -> f64, rho_after: f64) -> Run {
    let (n, tau) = (200, 800);
    let mut noise = Noise::new(seed);
    let x = noise.ages(tau + after, 1.0 / 24.0, Sampling::Even);
    let mut e = noise.dependent(&vec![1.0; tau], 0.3);
    for i in tau..tau + after {
        e.push(rho_after * e[i - 1] + (1.0 - rho_after * rho_after).sqrt() * noise.normal());
    }
    let y: Vec<f64> = (0..x.len())
        .map(|i| 4.0 * x[i].ln() + 0.5 * e[i] + if i >= tau { change(i - tau, x[i]) } else { 0.0 })
        .collect();
    run(&x, &y, Family::Logarithmic, n, 20, &ONE_A_YEAR)
}

/// Delay of the first opening after the change at 800 and the name given then; panics if none.
fn delay(run: &Run, seed: u64) -> usize {
    let first = run.opened.iter().find(|(i, _)| *i >= 800);
    first.unwrap_or_else(|| panic!("seed {seed:#x}: not seen")).0 - 800
}

#[test]
fn sim_step_of_four_sigma_is_seen_dated_and_sized_at_once() {
    let mut delays = Vec::new();
    let (mut first, mut settled) = (0, 0);
    for seed in 0x700..0x70C_u64 {
        // 55 points later the name has settled: a quarter window after opening.
        let run = changed(seed, 55, |_, _| -2.0, 0.3);
        delays.push(delay(&run, seed));
        first += usize::from(run.opened.iter().any(|o| o.0 >= 800 && o.1 == Kind::Step));
        let found = run.last_full.as_ref().unwrap();
        settled += usize::from(name(found) == Some(Kind::Step));
        assert!((found.step.size + 2.0).abs() < 0.6, "seed {seed:#x}: {}", found.step.size);
        let age = (0.1 * 855.0 + 800.0) / 24.0;
        assert!((found.step.x - age).abs() < 2.1 / 24.0, "seed {seed:#x}: {}", found.step.x);
    }
    println!("step of 4 sigma: delays {delays:?}, named step {first} then {settled} of 12");
    delays.sort_unstable();
    assert!(delays[6] <= 4 && delays[11] <= 8, "{delays:?}");
    assert!(first >= 10 && settled >= 11, "{first} {settled}");
}

#[test]
fn sim_change_of_rate_is_seen_and_called_a_bend() {
    let mut delays = Vec::new();
    let mut named = 0;
    // 4 sigma (2 units) within a quarter window of 50 hours: 0.96 a day.
    for seed in 0x800..0x80C_u64 {
        let run = changed(seed, 81, |k, _| 0.04 * k as f64, 0.3);
        delays.push(delay(&run, seed));
        let found = run.last_full.as_ref().unwrap();
        named += usize::from(name(found) == Some(Kind::Bend));
        let bend = found.bend.unwrap();
        assert!((bend.size - 0.96).abs() < 0.4, "seed {seed:#x}: {}", bend.size);
        let age = (0.1 * 881.0 + 800.0) / 24.0;
        assert!((bend.x - age).abs() < 20.0 / 24.0, "seed {seed:#x}: {}", bend.x);
    }
    println!("rate change: delays {delays:?}, named bend {named} of 12");
    delays.sort_unstable();
    assert!(delays[6] <= 35 && delays[11] <= 60 && named >= 11, "{delays:?} {named}");
}

#[test]
fn sim_growing_dependence_is_seen_and_named() {
    let mut delays = Vec::new();
    let mut named = 0;
    for seed in 0x900..0x90C_u64 {
        let run = changed(seed, 150, |_, _| 0.0, 0.9);
        delays.push(delay(&run, seed));
        named += usize::from(name(run.last_full.as_ref().unwrap()) == Some(Kind::Dependence));
    }
    println!("dependence .3 to .9: delays {delays:?}, named {named} of 12");
    delays.sort_unstable();
    assert!(delays[6] <= 60 && delays[11] <= 120 && named >= 9, "{delays:?} {named}");
}

#[test]
fn sim_coarse_readings_keep_the_budget() {
    let two_a_month = Budget { false_alerts_per_year_site: 24.0, channels: 1 };
    for (n, coarse, seed) in [(60, 1.0, 0xA1_u64), (200, 1.0, 0xA2), (200, 3.0, 0xA3)] {
        let mut noise = Noise::new(seed);
        let x = noise.ages(8760, 1.0 / 24.0, Sampling::Even);
        let e = noise.dependent(&vec![1.0; 8760], 0.0);
        let y: Vec<f64> =
            x.iter().zip(e).map(|(x, e)| ((4.0 * x.ln() + e) / coarse).round() * coarse).collect();
        let run = run(&x, &y, Family::Logarithmic, n, n / 10, &two_a_month);
        println!("seed {seed:#x} step {coarse} n {n}: {} incidents of 24", run.incidents);
        assert!(run.incidents <= poisson_bound(1.2 * 24.0), "seed {seed:#x}: {}", run.incidents);
    }
}
