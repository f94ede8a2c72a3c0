//! The examination against an independent double implementation, and what each kind must see.

#![allow(clippy::unwrap_used)]

use super::simulate::{Noise, Sampling, least_squares};
use super::*;
use crate::drift::family::{Coefficients, Family};
use crate::drift::serial;

const N: usize = 60;

/// Score of a one-sided deviate of 0: −log10 ½.
const NO_EVIDENCE: f64 = std::f64::consts::LOG10_2;

/// n sums of twelve uniforms minus six, from a 64-bit linear congruential generator (D. E. Knuth's
/// MMIX constants): the same numbers in any language.
fn twelve_uniforms(n: usize, seed: u64) -> Vec<f64> {
    let mut state = seed;
    let mut one = || {
        let mut sum = 0.0;
        for _ in 0..12 {
            state = state
                .wrapping_mul(6_364_136_223_846_793_005)
                .wrapping_add(1_442_695_040_888_963_407);
            sum += (state >> 11) as f64 / (1_u64 << 53) as f64;
        }
        sum - 6.0
    };
    (0..n).map(|_| one()).collect()
}

/// 4 ln x + AR(1) noise of .3 at the median spacing + a change; ages from 6.
fn fixed_series(
    n: usize,
    even: bool,
    change: impl Fn(usize, &[f64]) -> f64,
) -> (Vec<f64>, Vec<f64>) {
    let w = twelve_uniforms(n, 7);
    let mut t = Vec::with_capacity(n);
    let mut sum = 0.0;
    for (i, v) in twelve_uniforms(n, 11).iter().enumerate() {
        sum += (v / 6.0 + 1.0).abs() + 0.05;
        t.push(if even { i as f64 } else { sum });
    }
    let gaps: Vec<f64> = t.windows(2).map(|p| p[1] - p[0]).collect();
    let unit = serial::median(&mut gaps.clone());
    let mut e = vec![w[0]];
    for i in 1..n {
        let f = 0.3_f64.powf(gaps[i - 1] / unit);
        e.push(f * e[i - 1] + (1.0 - f * f).sqrt() * w[i]);
    }
    let x: Vec<f64> = t.iter().map(|v| v - t[0] + 6.0).collect();
    let y = (0..n).map(|i| 4.0 * x[i].ln() + e[i] + change(i, &x)).collect();
    (x, y)
}

fn strong_dependence(n: usize) -> Vec<f64> {
    let w = twelve_uniforms(n, 23);
    let mut e = vec![0.0; n];
    for i in 1..n {
        e[i] = 0.95 * e[i - 1] + if i >= 35 { w[i] } else { 0.0 };
    }
    e
}

fn ready(framed: Framed) -> Frame {
    match framed {
        Framed::Ready(frame) => frame,
        other => panic!("expected a frame, got {other:?}"),
    }
}

fn near(what: &str, got: f64, expected: f64, tolerance: f64) {
    assert!((got - expected).abs() <= tolerance, "{what}: {got} against {expected}");
}

fn log_curve(a: f64, b: f64) -> Coefficients {
    [a, b, 0.0, 0.0]
}

/// What the double implementation says of one series: curve of the refit at point 59 and at 89,
/// (baseline phi, noise, window phi) there, (shift, step) at the quick looks 75 and 88, and
/// (shift, step, bend, dependence) at the full looks.
struct Double {
    theta: [Coefficients; 2],
    frame: [[f64; 3]; 2],
    first: [f64; 4],
    quick: [[f64; 2]; 2],
    last: [f64; 4],
}

fn check_against_double(all_x: &[f64], all_y: &[f64], double: &Double) {
    let mut baseline = Baseline::new();
    let mut shift = ShiftDetector::default();
    let mut work = Workspace::default();
    for (look, &end) in [N, 90].iter().enumerate() {
        let (x, y) = (&all_x[end - N..end], &all_y[end - N..end]);
        let newest = end as u64 - 1;
        let framed =
            Frame::at_refit(x, y, Family::Logarithmic, &double.theta[look], &mut baseline, newest);
        let frame = ready(framed);
        let got = [frame.phi_baseline, frame.noise, frame.phi_window];
        for (k, name) in ["baseline", "noise", "phi"].iter().enumerate() {
            near(name, got[k], double.frame[look][k], 1e-7);
        }
        let mut w = Whitened::new(frame, x, y).unwrap();
        let found = examine(&w, &mut shift, 1, Depth::Full, &mut work);
        let expected = [double.first, double.last][look];
        for kind in Kind::ALL {
            let q = found.score(kind).unwrap().q;
            near(&format!("look {look} {kind:?}"), q, expected[kind as usize], 2e-6);
        }
        baseline.learn(newest, N, 30, w.frame.phi_window, found.suspicious);
        for i in end..if look == 0 { 89 } else { end } {
            assert!(w.slide(all_x[i], all_y[i], N));
            let found = examine(&w, &mut shift, 1, Depth::Quick, &mut work);
            for (k, at) in [75, 88].into_iter().enumerate() {
                if i == at {
                    near(&format!("shift at {i}"), found.shift.q, double.quick[k][0], 2e-6);
                    near(&format!("step at {i}"), found.step.q, double.quick[k][1], 2e-6);
                }
            }
        }
    }
}

const FIRST: [f64; 4] =
    [0.085_813_116_927_833_53, 1.226_702_211_498_686_7, 0.803_421_471_628_295_7, NO_EVIDENCE];
const FIRST_FRAME: [f64; 3] =
    [0.267_300_804_242_429_1, 0.958_437_320_319_149_7, 0.212_802_144_647_647_6];

fn first_curve() -> Coefficients {
    log_curve(-0.715_604_999_450_729_2, 4.133_755_075_096_38)
}

// The numbers below: independent double implementation (Python, same method, own code).

#[test]
fn quiet_series_agrees_with_the_double() {
    let (x, y) = fixed_series(90, true, |_, _| 0.0);
    near("made-up series", y[89], 18.228_172_063_222_488, 1e-12);
    check_against_double(
        &x,
        &y,
        &Double {
            theta: [first_curve(), log_curve(-3.015_410_856_016_657_7, 4.673_680_856_625_885)],
            frame: [
                FIRST_FRAME,
                [0.299_466_709_621_942_6, 1.025_684_416_716_088_3, 0.298_577_892_325_180_17],
            ],
            first: FIRST,
            quick: [
                [1.070_169_748_373_508_6, 2.166_204_257_710_082_6],
                [1.016_911_369_137_070_8, 3.202_404_203_760_246],
            ],
            last: [
                1.005_620_270_210_516_7,
                3.056_283_736_928_483_7,
                0.999_967_217_163_339_4,
                NO_EVIDENCE,
            ],
        },
    );
}

#[test]
fn step_agrees_with_the_double() {
    let (x, y) = fixed_series(90, true, |i, _| if i >= 82 { 4.0 } else { 0.0 });
    check_against_double(
        &x,
        &y,
        &Double {
            theta: [first_curve(), log_curve(-13.042_776_027_686_951, 7.221_713_492_029_059_5)],
            frame: [
                FIRST_FRAME,
                [0.414_990_887_713_343_25, 1.324_446_152_157_966_2, 0.606_642_367_235_582],
            ],
            first: FIRST,
            quick: [
                [1.070_169_748_373_508_6, 2.166_204_257_710_082_6],
                [6.467_757_577_779_54, 5.812_765_389_032_903],
            ],
            last: [
                6.127_896_698_672_597,
                6.649_631_083_816_021,
                3.816_056_677_091_006,
                NO_EVIDENCE,
            ],
        },
    );
}

#[test]
fn bend_agrees_with_the_double() {
    let (x, y) = fixed_series(90, true, |i, _| (i as f64 - 70.0).max(0.0) * 0.3);
    check_against_double(
        &x,
        &y,
        &Double {
            theta: [first_curve(), log_curve(-19.420_656_257_510_668, 8.861_067_861_139_41)],
            frame: [
                FIRST_FRAME,
                [0.410_189_904_613_249_56, 1.182_180_561_075_804_3, 0.593_839_745_635_332_2],
            ],
            first: FIRST,
            quick: [
                [2.217_196_163_716_874_7, 2.798_091_603_584_806],
                [4.103_016_885_627_948, 3.382_521_123_506_512_2],
            ],
            last: [
                4.429_496_346_259_153,
                4.232_435_297_988_014,
                4.711_353_032_265_822,
                NO_EVIDENCE,
            ],
        },
    );
}

#[test]
fn dependence_agrees_with_the_double() {
    let strong = strong_dependence(90);
    let (x, y) = fixed_series(90, true, |i, _| strong[i]);
    check_against_double(
        &x,
        &y,
        &Double {
            theta: [
                log_curve(3.496_034_023_263_512, 2.625_529_358_785_047),
                log_curve(-9.816_414_941_834_985, 6.010_121_080_340_619),
            ],
            frame: [
                [0.354_888_116_662_684_6, 1.169_523_714_828_671_2, 0.446_368_311_100_492_3],
                [0.462_413_896_174_054_15, 1.670_863_920_648_803_4, 0.733_103_723_131_877_5],
            ],
            first: [
                1.153_731_720_590_746_2,
                3.672_990_928_242_367,
                4.084_029_161_975_301,
                NO_EVIDENCE,
            ],
            quick: [
                [6.146_428_078_738_415, 4.712_268_108_450_192],
                [5.385_245_532_176_324, 2.835_952_834_207_768_4],
            ],
            last: [
                5.549_679_028_573_427,
                2.594_482_567_563_365_4,
                2.724_092_405_844_452,
                1.381_128_041_938_705_3,
            ],
        },
    );
}

#[test]
fn uneven_spacing_agrees_with_the_double() {
    let strong = strong_dependence(N);
    type Change<'a> = &'a dyn Fn(usize, &[f64]) -> f64;
    let cases: [(Change, Coefficients, [f64; 3], [f64; 4]); 3] = [
        (
            &|i, _| if i >= 50 { 4.0 } else { 0.0 },
            log_curve(-4.073_934_586_306_496, 5.310_935_892_382_274_5),
            [0.499_987_826_828_251_9, 1.289_509_718_498_170_3, 0.833_300_871_542_005],
            [0.0, 5.523_612_350_046_973, 5.307_570_788_701_073, NO_EVIDENCE],
        ),
        (
            &|i, x| (x[i] - x[35]).max(0.0) * 0.3,
            log_curve(-8.114_701_503_017_79, 6.773_938_148_323_182),
            [0.543_290_980_599_260_5, 1.376_753_501_151_122_6, 0.948_775_948_264_694_7],
            [0.0, 4.760_576_310_939_759, 7.716_386_024_743_888, NO_EVIDENCE],
        ),
        (
            &|i, _| strong[i],
            log_curve(3.519_152_089_013_626_7, 2.620_442_100_595_638),
            [0.379_408_066_790_691_6, 1.157_925_152_975_245_7, 0.511_754_844_775_177_6],
            [1.150_136_294_849_987_6, 3.494_240_973_372_65, 3.911_890_753_583_406, NO_EVIDENCE],
        ),
    ];
    for (case, (change, theta, frame, scores)) in cases.into_iter().enumerate() {
        let (x, y) = fixed_series(N, false, change);
        let mut baseline = Baseline::new();
        let got = ready(Frame::at_refit(&x, &y, Family::Logarithmic, &theta, &mut baseline, 59));
        near("baseline", got.phi_baseline, frame[0], 2e-5);
        near("noise", got.noise, frame[1], 2e-5);
        near("phi", got.phi_window, frame[2], 5e-5);
        let w = Whitened::new(got, &x, &y).unwrap();
        let mut shift = ShiftDetector::default();
        let found = examine(&w, &mut shift, 1, Depth::Full, &mut Workspace::default());
        for kind in Kind::ALL {
            let q = found.score(kind).unwrap().q;
            near(&format!("case {case} {kind:?}"), q, scores[kind as usize], 1e-3);
        }
    }
}

/// A settled window of `n` hourly points about a log curve, noise 1.
fn hourly(n: usize, seed: u64) -> (Vec<f64>, Vec<f64>, Coefficients) {
    let mut noise = Noise::new(seed);
    let x = noise.ages(n, 1.0 / 24.0, Sampling::Even);
    let e = noise.dependent(&vec![1.0; n], 0.3);
    let y: Vec<f64> = x.iter().zip(e).map(|(x, e)| 4.0 * x.ln() + e).collect();
    let theta = least_squares(Family::Logarithmic, &x, &y);
    (x, y, theta)
}

#[test]
fn sliding_is_bit_for_bit_a_rebuild() {
    let (x, y, theta) = hourly(150, 0xB1);
    let mut baseline = Baseline::new();
    let first = (&x[..100], &y[..100]);
    let framed = Frame::at_refit(first.0, first.1, Family::Logarithmic, &theta, &mut baseline, 99);
    let frame = ready(framed);
    let mut sliding = Whitened::new(frame.clone(), first.0, first.1).unwrap();
    let mut one = ShiftDetector::default();
    let mut two = ShiftDetector::default();
    let mut work = Workspace::default();
    for i in 100..150 {
        assert!(sliding.slide(x[i], y[i], 100));
        let rebuilt = Whitened::new(frame.clone(), &x[i - 99..=i], &y[i - 99..=i]).unwrap();
        assert_eq!(sliding, rebuilt);
        let a = examine(&sliding, &mut one, 1, Depth::Full, &mut work);
        let b = examine(&rebuilt, &mut two, 1, Depth::Full, &mut Workspace::default());
        assert_eq!(a, b);
    }
    assert_eq!(one, two);
}

#[test]
fn state_survives_serialisation() {
    let (x, y, theta) = hourly(100, 0xB2);
    let mut baseline = Baseline::new();
    let frame = ready(Frame::at_refit(&x, &y, Family::Logarithmic, &theta, &mut baseline, 99));
    baseline.learn(99, 100, 10, frame.phi_window, false);
    let mut shift = ShiftDetector::default();
    shift.update(&Whitened::new(frame.clone(), &x, &y).unwrap());
    let text = serde_json::to_string(&(&baseline, &frame, &shift)).unwrap();
    let back: (Baseline, Frame, ShiftDetector) = serde_json::from_str(&text).unwrap();
    assert_eq!((baseline, frame, shift), back);
}

#[test]
fn scores_do_not_depend_on_units_of_either_axis() {
    let (x, y, _) = hourly(100, 0xB3);
    let score = |scale_x: f64, scale_y: f64, family: Family| {
        let x: Vec<f64> = x.iter().map(|v| v * scale_x).collect();
        let y: Vec<f64> = y.iter().map(|v| v * scale_y).collect();
        let theta = least_squares(family, &x, &y);
        let frame = ready(Frame::of_series(&x, &y, family, &theta, Some(0.3), None));
        let w = Whitened::new(frame, &x, &y).unwrap();
        let mut shift = ShiftDetector::default();
        examine(&w, &mut shift, 1, Depth::Full, &mut Workspace::default())
    };
    for family in [Family::Linear, Family::Logarithmic, Family::Quadratic] {
        let (one, other) = (score(1.0, 1.0, family), score(365.25, 1e-6, family));
        for kind in Kind::ALL {
            let (a, b) = (one.score(kind).unwrap(), other.score(kind).unwrap());
            near(&format!("{family:?} {kind:?}"), a.q, b.q, 1e-6);
            assert_eq!(a.index, b.index);
        }
        near("bend size", one.bend.unwrap().size, other.bend.unwrap().size * 365.25e6, 1e-6);
    }
}

#[test]
fn large_step_is_sized_without_shortening() {
    let (x, mut y, theta) = hourly(200, 0xB4);
    y[180..].iter_mut().for_each(|v| *v += 25.0);
    let frame = ready(Frame::of_series(&x, &y, Family::Logarithmic, &theta, Some(0.3), Some(1.0)));
    let w = Whitened::new(frame, &x, &y).unwrap();
    let mut shift = ShiftDetector::default();
    let found = examine(&w, &mut shift, 1, Depth::Full, &mut Workspace::default());
    assert_eq!(found.step.index, 180);
    near("size", found.step.size, 25.0, 1.0);
    assert!(found.step.q > 6.0 && found.suspicious, "{found:?}");
}

#[test]
fn degenerate_windows_are_outcomes() {
    let x: Vec<f64> = (1..=40).map(f64::from).collect();
    let frame = |x: &[f64], y: &[f64], theta: Coefficients, family: Family| {
        Frame::of_series(x, y, family, &theta, None, None)
    };
    let flat = frame(&x, &[4.0; 40], [4.0, 0.0, 0.0, 0.0], Family::Linear);
    assert_eq!(flat, Framed::NoScatter { range: 0.0 });
    let line: Vec<f64> = x.iter().map(|v| 0.1 * v).collect();
    let exact = frame(&x, &line, [0.0, 0.1, 0.0, 0.0], Family::Linear);
    assert!(matches!(exact, Framed::NoScatter { .. }), "{exact:?}");
    let few = frame(&x[..29], &line[..29], [0.0; 4], Family::Linear);
    assert_eq!(few, Framed::TooFewPoints { have: 29, need: 30 });
    let mut bad = line.clone();
    bad[7] = f64::NAN;
    assert_eq!(frame(&x, &bad, [0.0; 4], Family::Linear), Framed::Unusable { index: 7 });
    let mut zero = x.clone();
    zero[0] = 0.0;
    let outside = frame(&zero, &line, [0.0, 1.0, 0.0, 0.0], Family::Logarithmic);
    assert_eq!(outside, Framed::Unusable { index: 0 });
    let wild = frame(&x, &line, [f64::INFINITY, 0.0, 0.0, 0.0], Family::Linear);
    assert!(matches!(wild, Framed::Unusable { .. }), "{wild:?}");
}

#[test]
fn every_number_is_finite_on_rough_series() {
    let mut noise = Noise::new(0xB5);
    for case in 0..400 {
        let n = 30 + case % 50;
        let sampling = if case % 2 == 0 { Sampling::Even } else { Sampling::Uneven };
        let mut x = noise.ages(n, 10.0_f64.powi(case as i32 % 9 - 4), sampling);
        let mut y: Vec<f64> = (0..n).map(|_| noise.normal()).collect();
        match case % 5 {
            0 => y.iter_mut().for_each(|v| *v = v.round()),
            1 => y[n - 1] = 1e90,
            2 => (n / 2..n).for_each(|i| y[i] = y[n / 2]),
            3 => (1..n / 2).for_each(|i| x[i] = x[0]),
            _ => y.iter_mut().for_each(|v| *v = 1e6 + *v * 1e-9),
        }
        let family = Family::ALL[case % 7];
        let theta = [1.0, 0.3, if case % 3 == 0 { 1e-3 } else { 0.7 }, 0.1];
        let mut baseline = Baseline::new();
        let framed = Frame::at_refit(&x, &y, family, &theta, &mut baseline, 5);
        let Framed::Ready(frame) = framed else { continue };
        let w = Whitened::new(frame, &x, &y).unwrap();
        let mut shift = ShiftDetector::default();
        let found = examine(&w, &mut shift, n, Depth::Full, &mut Workspace::default());
        // serde_json writes what is not finite as null.
        let text = serde_json::to_string(&(&found, w.frame(), &shift, &baseline)).unwrap();
        assert!(!text.contains("null"), "seed 0xB5 case {case}: {text}");
    }
}

#[test]
fn high_polynomials_far_from_age_zero_stay_well_conditioned() {
    let mut noise = Noise::new(0xB6);
    let x: Vec<f64> = (0..100).map(|i| 1000.0 + f64::from(i) / 24.0).collect();
    let y: Vec<f64> = x.iter().map(|_| noise.normal()).collect();
    let frame = ready(Frame::of_series(&x, &y, Family::Cubic, &[0.0; 4], Some(0.0), None));
    let w = Whitened::new(frame, &x, &y).unwrap();
    // Orthonormal tangents: the four take about four degrees of freedom, no more and no less.
    let total: f64 = w.points[1..].iter().map(|p| p.uc * p.uc).sum();
    assert!(w.rss > 0.8 * total && w.rss < total, "{} of {total}", w.rss);
    let leverage: f64 = (1..100).map(|j| w.fitted(j).0).sum();
    near("leverage", leverage, 4.0, 1e-3);
}

#[test]
fn slide_refuses_what_it_cannot_use() {
    let (x, y, theta) = hourly(60, 0xB7);
    let frame = ready(Frame::of_series(&x, &y, Family::Logarithmic, &theta, None, None));
    let mut w = Whitened::new(frame, &x, &y).unwrap();
    let before = w.clone();
    assert!(!w.slide(x[59] - 1.0, 0.0, 60));
    assert!(!w.slide(x[59] + 1.0, f64::NAN, 60));
    assert!(!w.slide(x[59] + 1.0, 0.0, 10));
    assert_eq!(w, before);
    assert!(w.slide(x[59] + 1.0, 0.0, 80) && w.len() == 61);
}
