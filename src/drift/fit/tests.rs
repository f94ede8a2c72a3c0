//! Fits held against certified and high-precision values.

use super::*;
use crate::drift::reference::{CENSUS, DANWOOD, MISRA1A, NORRIS};

fn fitted(family: Family, data: &[(f64, f64)], robust: bool) -> Fit {
    let (x, y): (Vec<f64>, Vec<f64>) = data.iter().copied().unzip();
    match fit(family, &x, &y, robust) {
        FitOutcome::Fitted(fit) => *fit,
        other => panic!("{other:?}"),
    }
}

fn digits(got: f64, want: f64) -> f64 {
    -((got - want) / want).abs().max(1e-17).log10()
}

#[test]
fn reference_strd_danwood_power() {
    let fit = fitted(Family::Power, &DANWOOD, false);
    for (got, want) in [
        (fit.theta[0], 7.688_622_617_6e-1),
        (fit.theta[1], 3.860_405_587_1),
        (fit.standard_errors[0], 1.828_197_386_0e-2),
        (fit.standard_errors[1], 5.172_661_091_3e-2),
        (fit.residual_ss, 4.317_308_408_3e-3),
        (fit.residual_sd, 3.285_311_403_9e-2),
    ] {
        assert!(digits(got, want) > 9.0, "{got} against certified {want}");
    }
}

#[test]
fn fit_recovers_an_exact_logarithmic_curve() {
    let data: Vec<(f64, f64)> =
        (1..200).map(|i| f64::from(i) * 30.0).map(|x| (x, -2.0 + 0.5 * x.ln())).collect();
    let fit = fitted(Family::Logarithmic, &data, false);
    assert!(digits(fit.theta[0], -2.0) > 11.0 && digits(fit.theta[1], 0.5) > 11.0);
}

#[test]
fn power_fit_of_reflected_data_is_the_reflected_fit() {
    let reflected = DANWOOD.map(|(x, y)| (x, -y));
    let (fit, mirror) =
        (fitted(Family::Power, &DANWOOD, false), fitted(Family::Power, &reflected, false));
    assert!(digits(mirror.theta[0], -fit.theta[0]) > 10.0);
    assert!(digits(mirror.theta[1], fit.theta[1]) > 10.0);
}

#[test]
fn power_curve_is_found_when_some_readings_are_not_positive() {
    let data: Vec<(f64, f64)> = (1..=120)
        .map(|i| {
            let x = f64::from(i);
            (x, 0.1 * x.sqrt() + if i % 2 == 0 { 0.3 } else { -0.3 })
        })
        .collect();
    let fit = fitted(Family::Power, &data, false);
    assert!(fit.start.is_none() && (fit.theta[1] - 0.5).abs() < 0.1, "{fit:?}");
}

#[test]
fn a_wild_reading_hardly_moves_the_robust_fit() {
    let mut data: Vec<(f64, f64)> = (1..=100)
        .map(|i| (f64::from(i), 2.0 * f64::from(i) + f64::from(i * 7 % 11) * 0.1))
        .collect();
    let clean = fitted(Family::Linear, &data, true);
    data[90].1 += 1000.0;
    let robust = fitted(Family::Linear, &data, true);
    assert!((robust.theta[1] - clean.theta[1]).abs() < 0.002, "{:?}", robust.theta);
}

#[test]
fn data_that_cannot_carry_a_curve_say_why() {
    let check = |family, x: &[f64], y: &[f64]| fit(family, x, y, false).why_not().unwrap();
    assert_eq!(check(Family::Linear, &[1.0], &[1.0]), "1 readings found, at least 3 needed");
    assert_eq!(
        check(Family::Power, &[0.0, 1.0, 2.0], &[1.0; 3]),
        "age must be above 0; 1 of 3 are not"
    );
    assert_eq!(check(Family::Linear, &[2.0; 5], &[1.0; 5]), "all ages are equal");
    assert_eq!(
        check(Family::Linear, &[1.0, 2.0, f64::NAN], &[1.0; 3]),
        "a number is not finite, or too large or small"
    );
    for (size, family) in
        [(1e200, Family::Cubic), (1e200, Family::Power), (1e-200, Family::Logarithmic)]
    {
        let x = [1.0, 2.0, 3.0, 4.0, 5.0, 6.0].map(|v| size * v);
        let y = [1.0, 3.0, 2.0, 5.0, 4.0, 7.0].map(|v| size * v);
        assert_eq!(check(family, &x, &y), "a number is not finite, or too large or small");
    }
}

/// Holds every coefficient, its standard error and the residual sum of squares against the values of
/// a source, to so many digits.
fn check(
    family: Family,
    data: &[(f64, f64)],
    coefficients: &[f64],
    standard_errors: &[f64],
    residual_ss: f64,
    needed: f64,
) {
    let fit = fitted(family, data, false);
    let wanted = coefficients.iter().chain(standard_errors).chain([&residual_ss]);
    let got = fit.theta[..coefficients.len()]
        .iter()
        .chain(&fit.standard_errors[..standard_errors.len()])
        .chain([&fit.residual_ss]);
    for (got, want) in got.zip(wanted) {
        assert!(digits(*got, *want) > needed, "{family:?}: {got} against {want}");
    }
}

#[test]
fn reference_strd_norris_linear() {
    // NIST StRD, Norris: certified values, 15 digits.
    check(
        Family::Linear,
        &NORRIS,
        &[-0.262_323_073_774_029, 1.002_116_818_020_45],
        &[0.232_818_234_301_152, 0.429_796_848_199_937e-3],
        26.617_398_529_422_4,
        12.0,
    );
}

#[test]
fn reference_norris_offset_power() {
    // Computed with 80 digits (mpmath): the exponent is almost 1, the curve almost a line.
    check(
        Family::OffsetPower,
        &NORRIS,
        &[-0.457_748_304_940_661_66, 1.009_847_549_770_847, 0.998_881_649_804_950_3],
        &[0.294_621_873_604_886_6, 0.007_204_817_435_592_622, 0.001_036_416_451_367_998],
        25.710_291_303_618_907,
        10.0,
    );
}

#[test]
fn reference_misra_curves() {
    // Computed with 80 digits (mpmath) on NIST StRD's Misra1a.
    check(
        Family::Power,
        &MISRA1A,
        &[0.226_939_533_907_256_1, 0.888_995_477_016_835_3],
        &[0.009_971_964_887_314_977, 0.007_017_260_521_648_358],
        3.081_382_852_413_656_6,
        11.0,
    );
    check(
        Family::OffsetPower,
        &MISRA1A,
        &[-3.299_870_706_402_869_6, 0.366_164_712_628_635, 0.821_808_354_558_487_2],
        &[0.359_147_496_840_736_5, 0.018_556_025_730_475_49, 0.007_164_356_626_193_77],
        0.313_034_344_261_467_75,
        11.0,
    );
    let rate = 0.000_522_289_802_812_543_7;
    check(
        Family::Exponential,
        &MISRA1A,
        &[0.278_018_766_904_026_77, 248.592_201_208_274_1, 1.0 / rate],
        &[
            0.072_801_535_796_929_7,
            3.365_135_322_770_225,
            0.000_008_842_925_328_693_002 / rate / rate,
        ],
        0.053_739_250_537_005_777,
        10.0,
    );
}

#[test]
fn reference_polynomials_in_raw_years() {
    // Computed with 80 digits (mpmath): the columns of raw years nearly coincide, their powers reach 10^10.
    check(
        Family::Quadratic,
        &CENSUS,
        &[20_447.050_357_363_998, -22.776_931_637_918_325, 0.006_344_589_414_713_254],
        &[843.099_273_835_411_8, 0.897_448_743_363_119_9, 0.000_238_663_088_354_606_76],
        123.635_248_981_276_72,
        11.0,
    );
    check(
        Family::Cubic,
        &CENSUS,
        &[
            -559.684_814_978_623,
            10.778_523_234_333_606,
            -0.011_513_117_687_266_294,
            0.000_003_166_260_124_464_459,
        ],
        &[
            33_958.511_094_969_88,
            54.234_520_056_988_15,
            0.028_859_709_783_286_854,
            0.000_005_116_787_825_082_798,
        ],
        120.557_720_130_540_25,
        11.0,
    );
}

#[test]
fn an_exact_curve_is_recovered_in_every_family() {
    let ages: Vec<f64> = (1..=60).map(|i| 2000.0 + 13.0 * f64::from(i)).collect();
    let theta = [
        (Family::Linear, [3.0, -0.25, 0.0, 0.0]),
        (Family::Logarithmic, [-2.0, 0.5, 0.0, 0.0]),
        (Family::Power, [0.3, 0.6, 0.0, 0.0]),
        (Family::OffsetPower, [4.0, -0.2, 0.5, 0.0]),
        (Family::Exponential, [1.0, -6.0, 900.0, 0.0]),
        (Family::Quadratic, [1.0, 2e-3, -3e-7, 0.0]),
        (Family::Cubic, [1.0, 2e-3, -3e-7, 4e-11]),
    ];
    for (family, theta) in theta {
        let data: Vec<(f64, f64)> = ages.iter().map(|&x| (x, family.value(&theta, x))).collect();
        for robust in [false, true] {
            let fit = fitted(family, &data, robust);
            for (x, y) in &data {
                assert!((fit.value(*x) - y).abs() < 1e-9 * y.abs(), "{family:?} {robust}: {fit:?}");
            }
            let both = fit.theta.iter().zip(theta).take(family.parameter_count());
            for (got, want) in both {
                assert!(digits(*got, want) > 6.0, "{family:?} {robust}: {fit:?}");
            }
        }
    }
}

#[test]
fn curves_that_the_data_do_not_pin_down_are_declined_with_the_reason() {
    let ages: Vec<f64> = (1..=40).map(f64::from).collect();
    let check = |family, curve: &dyn Fn(f64) -> f64| {
        let wobble = |x: f64| 1e-3 * (x * 2.4).sin();
        let y: Vec<f64> = ages.iter().map(|&x| curve(x) + wobble(x)).collect();
        fit(family, &ages, &y, false).why_not().unwrap()
    };
    let why = check(Family::Exponential, &|x| 2.0 + 0.1 * x + 1e-4 * x * x);
    assert_eq!(
        why,
        "the data do not determine tau: it runs past 390000.000, where the curve is a line"
    );
    let step: Vec<f64> = ages.iter().map(|&x| if x < 2.0 { 1.0 } else { 5.0 }).collect();
    let why = fit(Family::Exponential, &ages, &step, false).why_not().unwrap();
    assert!(why.contains("where the change is over within the first readings"), "{why}");
    let why = check(Family::OffsetPower, &|x| 1.0 + (x / 4.0).exp());
    assert_eq!(why, "the data do not determine the exponent: it runs to 8.00, the edge of -4 to 8");
    let why = check(Family::Power, &|x| if x < 2.0 { 1.0 } else { 0.0 });
    assert!(why.ends_with("it runs to -4.00, the edge of -4 to 8"), "{why}");
    let log: Vec<f64> = ages.iter().map(|x| 1.0 + x.ln()).collect();
    let why = fit(Family::OffsetPower, &ages, &log, false).why_not().unwrap();
    assert!(why.ends_with("0 within 0.001: the curve is logarithmic"), "{why}");
    for family in [Family::OffsetPower, Family::Exponential, Family::Power] {
        let why = fit(family, &ages, &[0.0; 40], false).why_not().unwrap();
        assert_eq!(why, "the deviations do not change", "{family:?}");
    }
    let late: Vec<f64> = ages.iter().map(|x| x + 500.0).collect();
    let y: Vec<f64> = ages.iter().map(|x| 3.0 - (-x / 10.0).exp()).collect();
    let why = fit(Family::Exponential, &late, &y, false).why_not().unwrap();
    assert!(why.starts_with("the first reading comes 50 time constants after age 0"), "{why}");
    let why = fit(Family::Cubic, &[1.0, 1.0, 2.0, 2.0, 3.0], &[1.0; 5], false).why_not().unwrap();
    assert_eq!(why, "3 different ages found, at least 4 needed");
}

#[test]
fn robust_curves_shrug_off_a_wild_reading() {
    for (family, theta) in [
        (Family::OffsetPower, [4.0, 2.0, 0.5, 0.0]),
        (Family::Exponential, [1.0, 6.0, 30.0, 0.0]),
        (Family::Quadratic, [1.0, 0.2, -1e-3, 0.0]),
    ] {
        let mut data: Vec<(f64, f64)> = (1..=100)
            .map(f64::from)
            .map(|x| (x, family.value(&theta, x) + 0.05 * (x * 2.4).sin()))
            .collect();
        let clean = fitted(family, &data, true);
        data[70].1 += 500.0;
        let wild = fitted(family, &data, true);
        for &(x, _) in &data {
            assert!((wild.value(x) - clean.value(x)).abs() < 0.05, "{family:?} at {x}: {wild:?}");
        }
    }
}
