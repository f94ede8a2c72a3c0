//! Variable projection: with the one nonlinear coefficient given, the rest is a line; what is left
//! is a search in one dimension.

use crate::drift::family::{Coefficients, Family};
use crate::drift::outcome::{EXPONENT, EXPONENT_MIN, FitOutcome, Undetermined};
use crate::drift::refine::Data;
use crate::drift::serial::count;

/// Grid step of the exponent; must divide the width of its range.
const EXPONENT_STEP: f64 = 0.25;
/// Grid step of ln tau.
const LOG_TAU_STEP: f64 = 0.4;
/// Bounds of tau as shares of the range of ages; the lower one is raised where the second age lies
/// further off. The upper one lies past the slowest settling that calibrated instruments show as a
/// curve at all (own rule).
const TAU: (f64, f64) = (1e-6, TAU_MAX);
/// Upper bound of tau as a share of the range of ages.
pub const TAU_MAX: f64 = 1e4;
/// Golden-section steps between grid points, to the last digit that a sum of squares can tell; each
/// keeps 0.618 of the bracket.
const GOLDEN_STEPS: usize = 44;

/// tau is not looked for below this share of the distance to the second age: there only the oldest
/// readings differ from the rest, by e^−15 and less.
const SECOND_AGE_SHARE: f64 = 1.0 / 15.0;
/// Most secants of the polish; each doubles the digits, nearly.
const SECANTS_MAX: usize = 12;
const GOLDEN: f64 = 0.618_033_988_749_894_9;

/// Returns the inner coefficients with the smallest sum of squares, or why there are none.
///
/// # Arguments
/// `family` — power, offset-power or exponential; `data` — in the family's frame, or as they are.
///
/// # Numerics
/// Grid, then golden section about its best point; each evaluation is one line fitted in closed
/// form about the means, O(n). Offset-power by (u^b − 1)/b and exponential by tau (1 − e^(−u/tau)),
/// which pass smoothly into ln u and u.
///
/// # Source
/// Golub and Pereyra (1973), SIAM Journal on Numerical Analysis 10. From memory.
pub(crate) fn project(family: Family, data: &Data<'_>) -> Result<Coefficients, FitOutcome> {
    let mut profile = Profile::new(family, data);
    let undetermined = |what| Err(FitOutcome::WeaklyDetermined(what));
    if data.y.iter().all(|v| (v - profile.mean).abs() <= 0.0) {
        return undetermined(Undetermined::NoChange);
    }
    if !(profile.total.is_finite() && profile.total > 0.0) {
        return Err(FitOutcome::NonFinite);
    }
    let (low, high, step) = range(family, data);
    let found = profile.least(low, high, step);
    let margin = 1e-3 * step;
    let (at_low, at_high) = (found <= low + margin, found >= high - margin);
    match family {
        Family::Exponential if at_low => {
            return undetermined(Undetermined::Step { tau: low.exp() * data.frame.scale });
        }
        Family::Exponential if at_high => {
            return undetermined(Undetermined::Line { tau: high.exp() * data.frame.scale });
        }
        _ if at_low || at_high => return undetermined(Undetermined::Exponent { exponent: found }),
        Family::OffsetPower if found.abs() < EXPONENT_MIN => {
            return undetermined(Undetermined::Logarithmic { exponent: found });
        }
        _ => {}
    }
    let found = profile.polished(family, found, margin);
    Ok(profile.coefficients(found))
}

/// Bounds of the nonlinear coefficient (tau: of its logarithm) and the grid's step.
fn range(family: Family, data: &Data<'_>) -> (f64, f64, f64) {
    if family != Family::Exponential {
        return (EXPONENT.0, EXPONENT.1, EXPONENT_STEP);
    }
    let second = data.u.iter().copied().filter(|&u| u > 0.0).fold(f64::INFINITY, f64::min);
    let low = TAU.0.max(SECOND_AGE_SHARE * second).ln();
    (low, TAU.1.ln(), LOG_TAU_STEP)
}

/// The sum of squares as a function of the nonlinear coefficient.
struct Profile<'a> {
    family: Family,
    data: &'a Data<'a>,
    /// Mean of y where the family has an intercept, else 0.
    mean: f64,
    /// Σ (y − mean)².
    total: f64,
    column: Vec<f64>,
}

/// A line through the transformed ages.
struct Line {
    level: f64,
    slope: f64,
    left: f64,
}

impl<'a> Profile<'a> {
    fn new(family: Family, data: &'a Data<'a>) -> Profile<'a> {
        let n = count(data.y.len());
        let mean = if family == Family::Power { 0.0 } else { data.y.iter().sum::<f64>() / n };
        let total = data.y.iter().map(|v| (v - mean).powi(2)).sum();
        Profile { family, data, mean, total, column: Vec::with_capacity(data.y.len()) }
    }

    /// The line with the nonlinear coefficient at `k`; None where it is not finite.
    fn line(&mut self, k: f64) -> Option<Line> {
        let family = self.family;
        self.column.clear();
        self.column.extend(self.data.u.iter().zip(&self.data.ln_u).map(
            |(&u, &ln_u)| match family {
                Family::Exponential => {
                    let tau = k.exp();
                    -tau * (-u / tau).exp_m1()
                }
                Family::OffsetPower if k == 0.0 => ln_u,
                Family::OffsetPower => (k * ln_u).exp_m1() / k,
                _ => (k * ln_u).exp(),
            },
        ));
        let centre = if family == Family::Power {
            0.0
        } else {
            self.column.iter().sum::<f64>() / count(self.column.len())
        };
        let (mut squares, mut products) = (0.0, 0.0);
        for (g, y) in self.column.iter().zip(self.data.y) {
            squares += (g - centre) * (g - centre);
            products += (g - centre) * (y - self.mean);
        }
        let slope = products / squares;
        let left = self
            .column
            .iter()
            .zip(self.data.y)
            .map(|(g, y)| (y - self.mean - slope * (g - centre)).powi(2))
            .sum::<f64>();
        let line = Line { level: self.mean - slope * centre, slope, left };
        (line.left.is_finite() && line.level.is_finite()).then_some(line)
    }

    fn left(&mut self, k: f64) -> f64 {
        self.line(k).map_or(f64::INFINITY, |line| line.left)
    }

    /// The place of the least sum of squares in [low, high].
    fn least(&mut self, low: f64, high: f64, step: f64) -> f64 {
        let mut best = (f64::INFINITY, low);
        let mut k = low;
        while k < high + 0.5 * step {
            let at = k.min(high);
            let left = self.left(at);
            if left < best.0 {
                best = (left, at);
            }
            k += step;
        }
        let (mut a, mut b) = ((best.1 - step).max(low), (best.1 + step).min(high));
        let (mut c, mut d) = (b - GOLDEN * (b - a), a + GOLDEN * (b - a));
        let (mut at_c, mut at_d) = (self.left(c), self.left(d));
        for _ in 0..GOLDEN_STEPS {
            if at_c < at_d {
                (b, d, at_d) = (d, c, at_c);
                c = b - GOLDEN * (b - a);
                at_c = self.left(c);
            } else {
                (a, c, at_c) = (c, d, at_d);
                d = a + GOLDEN * (b - a);
                at_d = self.left(d);
            }
        }
        0.5 * (a + b)
    }

    /// Half the derivative of the sum of squares, up to a factor that does not change sign: the
    /// residuals are free of all that the line explains, so that only the nonlinear coefficient's own
    /// column is left.
    fn slope(&mut self, family: Family, k: f64) -> Option<f64> {
        let line = self.line(k)?;
        let points =
            self.column.iter().zip(self.data.y).zip(self.data.u.iter().zip(&self.data.ln_u));
        let sum: f64 = points
            .map(|((g, y), (&u, &ln_u))| {
                let own = match family {
                    Family::Exponential => u * (-u / k.exp()).exp(),
                    _ => ln_u * (k * ln_u).exp(),
                };
                (y - line.level - line.slope * g) * own
            })
            .sum();
        sum.is_finite().then_some(sum)
    }

    /// The root of the derivative next to a place that the sums of squares gave, by secants: they tell
    /// the place to half the digits only. The place itself where no root is found within `reach`.
    fn polished(&mut self, family: Family, found: f64, reach: f64) -> f64 {
        let (mut before, mut here) = (found + 1e-3 * reach, found);
        let (Some(mut at_before), Some(mut at_here)) =
            (self.slope(family, before), self.slope(family, here))
        else {
            return found;
        };
        for _ in 0..SECANTS_MAX {
            let next = here - at_here * (here - before) / (at_here - at_before);
            if !next.is_finite() || (next - found).abs() > reach {
                break;
            }
            let Some(at_next) = self.slope(family, next) else { break };
            if at_next.abs() >= at_here.abs() {
                break;
            }
            (before, at_before, here, at_here) = (here, at_here, next, at_next);
        }
        here
    }

    /// The family's own coefficients with the nonlinear one at `k`.
    fn coefficients(&mut self, k: f64) -> Coefficients {
        let Some(Line { level, slope, .. }) = self.line(k) else { return [0.0, 0.0, k, 0.0] };
        match self.family {
            Family::Exponential => [level, slope * k.exp(), k.exp(), 0.0],
            Family::OffsetPower => [level - slope / k, slope / k, k, 0.0],
            _ => [slope, k, 0.0, 0.0],
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::drift::frame::Frame;
    use crate::drift::reference::MISRA1A;

    #[test]
    fn slope_agrees_with_central_differences_of_the_sum_of_squares() {
        let (x, y): (Vec<f64>, Vec<f64>) = MISRA1A.iter().copied().unzip();
        for (family, places) in [
            (Family::Power, [-1.0, 0.5, 1.7]),
            (Family::OffsetPower, [-0.8, 0.3, 2.0]),
            (Family::Exponential, [-1.5, 0.2, 2.5]),
        ] {
            let frame = Frame::of(family, &x).unwrap();
            let data = Data::new(family, frame, &x, &y);
            let mut profile = Profile::new(family, &data);
            for k in places {
                let h = 1e-5;
                let numeric = (profile.left(k + h) - profile.left(k - h)) / (2.0 * h);
                let line = profile.line(k).unwrap().slope;
                // What stands before the nonlinear coefficient's own column in each family.
                let factor = match family {
                    Family::Exponential => -line,
                    Family::OffsetPower => line / k,
                    _ => line,
                };
                let analytic = -2.0 * factor * profile.slope(family, k).unwrap();
                let close = (analytic - numeric).abs() < 1e-6 * numeric.abs();
                assert!(close, "{family:?} at {k}: {analytic} against {numeric}");
            }
        }
    }
}
