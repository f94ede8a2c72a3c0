//! How often 95 % confidence intervals hold the truth.

use crate::args::Args;
use crate::trial::{AGES, BEYOND, Truth, Way, run};
use asfound::drift::confidence::Confidence;
use asfound::drift::family::Family;

/// The level that is claimed.
const LEVEL: f64 = 0.95;
/// Every cell covers at least so often, within two standard errors.
const COVERAGE_MIN: f64 = 0.935;
/// Readings in a window.
const SIZES: [u32; 3] = [60, 200, 1000];
/// Correlations of neighbouring readings.
const RHOS: [f64; 3] = [0.0, 0.3, 0.5];
/// Both curves rise to 10 standard deviations of the noise at age 1.
const TRUTHS: [(Family, [f64; 4]); 2] =
    [(Family::Logarithmic, [10.0, 2.0, 0.0, 0.0]), (Family::Power, [10.0, 0.5, 0.0, 0.0])];
/// What is covered: the coefficient b, the curve at the window's end, the curve beyond it.
const QUANTITIES: usize = 3;

/// Measures, prints the table, and returns what fails.
pub fn measure(args: &Args) -> Vec<String> {
    let allowed = 2.0 * (LEVEL * (1.0 - LEVEL) / f64::from(args.runs)).sqrt();
    println!(
        "\nCoverage of {:.0} % confidence intervals: coefficient b / curve at the end / curve 25 % beyond.\n\
         Claim: at least {COVERAGE_MIN} in every cell, within two standard errors ({allowed:.4}).\n",
        100.0 * LEVEL
    );
    println!("| family | fit | n | rho 0 | rho .3 | rho .5 |\n|---|---|---|---|---|---|");
    let mut failed = Vec::new();
    for (family, theta) in TRUTHS {
        for way in Way::ALL {
            for n in SIZES {
                print!("| {} | {} | {n} |", family.name(), way.name());
                for rho in RHOS {
                    let truth = Truth { family, theta, sigma: 1.0, rho };
                    let covered = coverage(args, &truth, way, n);
                    print!(" {:.3} / {:.3} / {:.3} |", covered[0], covered[1], covered[2]);
                    let least = covered.into_iter().fold(1.0, f64::min);
                    if least + allowed < COVERAGE_MIN {
                        let name = family.name();
                        failed.push(format!("{name}, {}, n {n}, rho {rho}: {least}", way.name()));
                    }
                }
                println!();
            }
        }
    }
    failed
}

/// How often each interval holds the truth; a window without a curve or an interval does not.
fn coverage(args: &Args, truth: &Truth, way: Way, n: u32) -> [f64; QUANTITIES] {
    // The same windows for both ways of fitting, so that their cells may be compared.
    let cell = format!("coverage {} {n} {}", truth.family.name(), truth.rho);
    let trials = run(args.runs, args.seed, &cell, |seed| {
        let (x, y) = truth.window(n, seed);
        covers(truth, way, &x, &y).unwrap_or([false; QUANTITIES])
    });
    let mut covered = [0.0; QUANTITIES];
    for trial in trials {
        for (sum, inside) in covered.iter_mut().zip(trial) {
            *sum += f64::from(u8::from(inside)) / f64::from(args.runs);
        }
    }
    covered
}

fn covers(truth: &Truth, way: Way, x: &[f64], y: &[f64]) -> Option<[bool; QUANTITIES]> {
    let fit = truth.fitted(x, y, way)?;
    let confidence = Confidence::new(&fit, x, y, LEVEL)?;
    let intervals = [
        (confidence.coefficient(1)?, truth.theta[1]),
        (confidence.curve_at(AGES.1)?, truth.at(AGES.1)),
        (confidence.curve_at(BEYOND)?, truth.at(BEYOND)),
    ];
    Some(intervals.map(|(interval, truth)| (interval.low..=interval.high).contains(&truth)))
}
