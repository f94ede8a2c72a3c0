//! How far off the power curve's forecast is on average: fitted on the original scale, and as a
//! straight line through logarithms turned back.

use crate::args::Args;
use crate::trial::{BEYOND, Truth, Way, run};
use asfound::drift::family::Family;
use asfound::drift::fit::{FitOutcome, fit};

/// Readings in a window.
const READINGS: u32 = 400;
/// Correlation of neighbouring readings.
const RHO: f64 = 0.3;
/// Exponent, and the curve at age 1 over the noise's standard deviation.
const ROWS: [(f64, f64); 7] =
    [(0.5, 30.0), (0.5, 10.0), (0.5, 3.0), (1.5, 30.0), (1.5, 10.0), (1.5, 3.0), (-0.4, 3.0)];
/// The transformed line counts as off from this mean error on, %.
const OFF_FROM: f64 = 10.0;
/// There, the fit's mean error is at most this, %, within two standard errors, or at most that share
/// of its root mean square: least squares on a curve nonlinear in its coefficients has a mean error
/// that grows with the square of its scatter (Box 1971, Journal of the Royal Statistical Society B
/// 33, from memory). By that formula it is 0.61 % of the curve where b is 1.5 and the noise a third
/// of it, 0.2 % and less in the other rows.
const BIAS_MAX: f64 = 0.3;
const BIAS_SHARE_MAX: f64 = 0.1;

/// Mean and root mean square of relative errors, %, and the mean's standard error.
#[derive(Clone, Copy, Debug)]
struct Errors {
    bias: f64,
    bias_error: f64,
    rmse: f64,
    /// Windows without a curve.
    none: usize,
}

impl Errors {
    fn of(trials: &[Option<f64>]) -> Errors {
        let known: Vec<f64> = trials.iter().flatten().copied().collect();
        let n = known.len() as f64;
        let bias = known.iter().sum::<f64>() / n;
        let square = known.iter().map(|e| e * e).sum::<f64>() / n;
        Errors {
            bias,
            bias_error: ((square - bias * bias) / n).sqrt(),
            rmse: square.sqrt(),
            none: trials.len() - known.len(),
        }
    }

    fn cell(&self) -> String {
        let none = if self.none > 0 { format!(", {} without", self.none) } else { String::new() };
        format!("{:+.2} ± {:.2} ({:.1}){none}", self.bias, self.bias_error, self.rmse)
    }
}

/// Measures, prints the table, and returns what fails.
pub fn measure(args: &Args) -> Vec<String> {
    println!(
        "\nForecast of a x^b at x = {BEYOND}, n {READINGS}, rho {RHO}: mean error ± standard error (root mean \
         square), %.\nClaim: where the transformed line is off by {OFF_FROM} % or more, the fit's mean \
         error is at most {BIAS_MAX} %, or {BIAS_SHARE_MAX} of its root mean square, within two standard \
         errors.\n"
    );
    println!("| b | y(1)/sigma | plain | robust | line through logarithms | readings dropped |");
    println!("|---|---|---|---|---|---|");
    let (mut failed, mut rows_off) = (Vec::new(), 0);
    for (b, ratio) in ROWS {
        let truth = Truth {
            family: Family::Power,
            theta: [1.0, b, 0.0, 0.0],
            sigma: ratio.recip(),
            rho: RHO,
        };
        let cell = format!("forecast {b} {ratio}");
        let trials = run(args.runs, args.seed, &cell, |seed| trial(&truth, seed));
        let column = |k: usize| Errors::of(&trials.iter().map(|t| t.0[k]).collect::<Vec<_>>());
        let ways = [column(0), column(1)];
        let line = column(2);
        let dropped = trials.iter().map(|t| t.1).sum::<f64>() / f64::from(args.runs);
        println!(
            "| {b} | {ratio} | {} | {} | {} | {:.1} % |",
            ways[0].cell(),
            ways[1].cell(),
            line.cell(),
            100.0 * dropped
        );
        if line.bias.abs() < OFF_FROM {
            continue;
        }
        rows_off += 1;
        for (way, errors) in Way::ALL.iter().zip(ways) {
            let allowed = BIAS_MAX.max(BIAS_SHARE_MAX * errors.rmse) + 2.0 * errors.bias_error;
            if errors.none > 0 || errors.bias.abs() > allowed {
                failed.push(format!("b {b}, y/sigma {ratio}, {}: {}", way.name(), errors.cell()));
            }
        }
    }
    if rows_off == 0 {
        failed.push("the transformed line is off in no row: nothing was compared".to_owned());
    }
    failed
}

/// Relative errors, %, of plain fit, robust fit and transformed line; and the share of readings that
/// the line could not use.
fn trial(truth: &Truth, seed: u64) -> ([Option<f64>; 3], f64) {
    let (x, y) = truth.window(READINGS, seed);
    let off = |value: f64| 100.0 * (value / truth.at(BEYOND) - 1.0);
    let [plain, robust] =
        Way::ALL.map(|way| truth.fitted(&x, &y, way).map(|fit| off(fit.value(BEYOND))));
    let (line, used) = line_through_logarithms(&x, &y);
    ([plain, robust, line.map(off)], 1.0 - used as f64 / f64::from(READINGS))
}

/// The forecast at [`BEYOND`] of a line through ln y against ln x, readings that have no logarithm
/// left out, and how many were used.
fn line_through_logarithms(x: &[f64], y: &[f64]) -> (Option<f64>, usize) {
    let (x, logs): (Vec<f64>, Vec<f64>) =
        x.iter().zip(y).filter(|&(_, &y)| y > 0.0).map(|(&x, &y)| (x, y.ln())).unzip();
    let FitOutcome::Fitted(line) = fit(Family::Logarithmic, &x, &logs, false) else {
        return (None, x.len());
    };
    (Some(line.value(BEYOND).exp()), x.len())
}
