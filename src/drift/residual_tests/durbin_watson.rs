//! Durbin–Watson: are neighbouring residuals correlated? With its exact distribution.

use crate::drift::family::{COEFFICIENTS_MAX, Coefficients};
use crate::drift::serial::count;
use crate::drift::tails::normal_two_sided;
use nalgebra::Complex;
use std::f64::consts::PI;

/// More residuals than these get the normal approximation, which is then good to every eye.
const EXACT_MAX: usize = 5000;
/// Golden-section steps towards the saddle point; any place near it will do.
const SADDLE_STEPS: usize = 40;
/// First step of the trapezoidal rule, and how often it is halved at most.
const FIRST_STEP: f64 = 0.5;
const HALVINGS_MAX: usize = 7;
/// Two trapezoidal sums that agree to this share are good.
const AGREED: f64 = 1e-12;
/// Terms below this share of the first are left out.
const NEGLIGIBLE: f64 = 1e-18;
const GOLDEN: f64 = 0.618_033_988_749_894_9;

/// The statistic and its probabilities.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct DurbinWatson {
    /// Σ (e_i − e_(i−1))² / Σ e_i²: 2 without correlation, towards 0 with positive, 4 with negative.
    pub statistic: f64,
    /// P(DW ≤ statistic): small when neighbours are positively correlated.
    pub p_positive: f64,
    /// P(DW ≥ statistic): small when neighbours are negatively correlated.
    pub p_negative: f64,
    /// Two-sided: twice the smaller.
    pub p_value: f64,
    /// Whether the probabilities are those of the exact distribution.
    pub exact: bool,
}

/// Returns the Durbin–Watson test of independent normal errors.
///
/// # Arguments
/// `residuals` — of a least-squares curve, in order of age; `basis` — orthonormal rows spanning the
/// curve's columns, `p` entries used. Exact for curves linear in their coefficients, else of the
/// curve's linear approximation.
///
/// # Returns
/// None when the residuals are all 0, or with one degree of freedom (the statistic is then constant).
///
/// # Numerics
/// The statistic is at most d when Q = Σ (ν_j − d) z_j² ≤ 0, z_j independent standard normal, ν_j the
/// eigenvalues of the difference matrix A within the residuals' space. The moment generating function
/// is det(B restricted)^(−1/2), B = I − 2z (A − d I), tridiagonal, and the restriction to the complement
/// of the curve's columns X costs a factor det(XᵀB⁻¹X): no eigenvalue is ever computed, O(n p²) an
/// evaluation. Inverted along a vertical line through the saddle point, trapezoidal rule after
/// y = σ sinh w, so that far tails keep their digits.
///
/// # Source
/// Durbin and Watson (1950), Biometrika 37; inversion through the saddle point: Helstrom (1996), IEEE
/// Transactions on Aerospace and Electronic Systems 32; determinants: own. From memory.
pub fn durbin_watson(residuals: &[f64], basis: &[Coefficients], p: usize) -> Option<DurbinWatson> {
    let total: f64 = residuals.iter().map(|e| e * e).sum();
    if total <= 0.0 || residuals.len() < p + 2 {
        return None;
    }
    let statistic = crate::drift::serial::durbin_watson(residuals);
    if residuals.len() > EXACT_MAX {
        return Some(approximate(statistic, basis, p));
    }
    let form = Form { d: statistic, basis, p };
    let below = form.tail(-1.0)?;
    let (p_positive, p_negative) = if below < 0.5 {
        (below, 1.0 - below)
    } else {
        let above = form.tail(1.0)?;
        (1.0 - above, above)
    };
    let p_value = (2.0 * p_positive.min(p_negative)).min(1.0);
    Some(DurbinWatson { statistic, p_positive, p_negative, p_value, exact: true })
}

/// By the normal distribution with the statistic's own mean and variance.
fn approximate(statistic: f64, basis: &[Coefficients], p: usize) -> DurbinWatson {
    let (mean, variance) = moments(basis, p);
    let z = (statistic - mean) / variance.sqrt();
    let p_value = normal_two_sided(z);
    let (near, far) = (0.5 * p_value, 1.0 - 0.5 * p_value);
    let (p_positive, p_negative) = if z < 0.0 { (near, far) } else { (far, near) };
    DurbinWatson { statistic, p_positive, p_negative, p_value, exact: false }
}

/// Mean and variance of the statistic without correlation, from the traces of M A and (M A)².
///
/// # Source
/// Durbin and Watson (1950), Biometrika 37, section 3; from memory.
fn moments(basis: &[Coefficients], p: usize) -> (f64, f64) {
    let n = basis.len();
    let difference = |i: usize, k: usize| {
        let here = basis[i][k];
        let before = if i > 0 { here - basis[i - 1][k] } else { 0.0 };
        let after = if i + 1 < n { here - basis[i + 1][k] } else { 0.0 };
        before + after
    };
    let mut once = [[0.0; COEFFICIENTS_MAX]; COEFFICIENTS_MAX];
    let mut twice = 0.0;
    for (i, row) in basis.iter().enumerate() {
        for (k, sums) in once.iter_mut().enumerate().take(p) {
            let a = difference(i, k);
            twice += a * a;
            sums.iter_mut().zip(row).for_each(|(sum, v)| *sum += a * v);
        }
    }
    let trace: f64 = (0..p).map(|k| once[k][k]).sum();
    let square: f64 = once.iter().flatten().map(|v| v * v).sum();
    let (n, freedom) = (count(n), count(n - p));
    let first = 2.0 * (n - 1.0) - trace;
    let second = 2.0 * (3.0 * n - 4.0) - 2.0 * twice + square;
    let mean = first / freedom;
    (mean, 2.0 * (second - first * mean) / (freedom * (freedom + 2.0)))
}

/// The quadratic form Q = DW numerator − d × denominator, in normal noise with the curve fitted.
struct Form<'a> {
    d: f64,
    basis: &'a [Coefficients],
    p: usize,
}

/// The logarithm of the moment generating function, and whether z is inside its domain (z real).
struct Value {
    log: Complex<f64>,
    inside: bool,
}

impl Form<'_> {
    /// P(Q ≤ 0) for `side` −1, P(Q ≥ 0) for `side` 1.
    fn tail(&self, side: f64) -> Option<f64> {
        let on_line = |s: f64| {
            let at = self.value(Complex::new(side * s, 0.0));
            if at.inside { at.log.re - s.ln() } else { f64::INFINITY }
        };
        let s = saddle(on_line)?;
        // The curvature gives the width; it need not be exact.
        let h = 1e-3 * s;
        let curvature = (on_line(s + h) - 2.0 * on_line(s) + on_line(s - h)) / (h * h);
        let width =
            if curvature.is_finite() && curvature > 0.0 { curvature.sqrt().recip() } else { s };
        let at_saddle = self.value(Complex::new(side * s, 0.0)).log.re;
        let integrand = |w: f64| {
            let z = Complex::new(side * s, width * w.sinh());
            let value = (self.value(z).log - at_saddle).exp() / (z * side);
            value.re * width * w.cosh()
        };
        // On the real line logarithms of negative pivots have no side; the value there is known.
        let integral = trapezoid(width / s, integrand)?;
        let probability = at_saddle.exp() * integral / PI;
        probability.is_finite().then_some(probability.clamp(0.0, 1.0))
    }

    /// −½ ln det(B restricted to the residuals' space).
    ///
    /// All pivots lie in one cone of less than half a turn, so that the principal logarithms add up to
    /// the continuous branch.
    fn value(&self, z: Complex<f64>) -> Value {
        let n = self.basis.len();
        let two_z = z * 2.0;
        let off = two_z;
        let diagonal = |i: usize| {
            let a = if i == 0 || i + 1 == n { 1.0 } else { 2.0 };
            Complex::new(1.0, 0.0) - two_z * (a - self.d)
        };
        // LDLᵀ of B alongside the forward solve of B W = X; XᵀB⁻¹X = Σ w wᵀ / pivot.
        let zero = Complex::new(0.0, 0.0);
        let mut gram = [[zero; COEFFICIENTS_MAX]; COEFFICIENTS_MAX];
        let mut w = [zero; COEFFICIENTS_MAX];
        let mut log = zero;
        let mut negative = (0_usize, 0_usize);
        let mut pivot = zero;
        for (i, row) in self.basis.iter().enumerate() {
            let multiplier = if i == 0 { zero } else { off / pivot };
            pivot = if i == 0 { diagonal(0) } else { diagonal(i) - multiplier * off };
            for k in 0..self.p {
                w[k] = Complex::new(row[k], 0.0) - multiplier * w[k];
            }
            for k in 0..self.p {
                for l in 0..=k {
                    gram[k][l] += w[k] * w[l] / pivot;
                }
            }
            negative.0 += usize::from(pivot.re < 0.0);
            log += pivot.ln();
        }
        for l in 0..self.p {
            for k in l + 1..self.p {
                let multiplier = gram[k][l] / gram[l][l];
                let column: Vec<Complex<f64>> = (l + 1..=k).map(|m| gram[m][l]).collect();
                for (entry, v) in gram[k][l + 1..=k].iter_mut().zip(column) {
                    *entry -= multiplier * v;
                }
            }
            negative.1 += usize::from(gram[l][l].re < 0.0);
            log += gram[l][l].ln();
        }
        // Haynsworth's inertia formula: as many negative pivots as the columns X account for.
        Value { log: log * -0.5, inside: negative.0 == negative.1 }
    }
}

/// The place of the least value of a convex function on s > 0 that is infinite past some place.
fn saddle(f: impl Fn(f64) -> f64) -> Option<f64> {
    // 1/16 is inside every domain: |ν − d| < 4.
    let (mut low, mut high) = (0.0, 1.0 / 16.0);
    let mut at_high = f(high);
    for _ in 0..60 {
        let next = f(2.0 * high);
        if next >= at_high {
            break;
        }
        low = high;
        high *= 2.0;
        at_high = next;
    }
    let (mut a, mut b) = (low, 2.0 * high);
    let (mut c, mut d) = (b - GOLDEN * (b - a), a + GOLDEN * (b - a));
    let (mut at_c, mut at_d) = (f(c), f(d));
    for _ in 0..SADDLE_STEPS {
        if at_c < at_d || !at_d.is_finite() {
            (b, d, at_d) = (d, c, at_c);
            c = b - GOLDEN * (b - a);
            at_c = f(c);
        } else {
            (a, c, at_c) = (c, d, at_d);
            d = a + GOLDEN * (b - a);
            at_d = f(d);
        }
    }
    let (s, best) = if at_c < at_d { (c, at_c) } else { (d, at_d) };
    (best.is_finite() && s > 0.0).then_some(s)
}

/// ∫ f(w) dw over w ≥ 0 of an even analytic function with that value at 0, by halved steps until two sums agree.
fn trapezoid(at_zero: f64, f: impl Fn(f64) -> f64) -> Option<f64> {
    let mut step = FIRST_STEP;
    let sum = |from: f64, by: f64| {
        let (mut sum, mut w, mut least) = (0.0, from, 0);
        // Two negligible terms in a row: the integrand may pass through 0.
        while least < 2 && w < 200.0 {
            let term = f(w);
            sum += term;
            least = if term.abs() <= NEGLIGIBLE * at_zero { least + 1 } else { 0 };
            w += by;
        }
        sum
    };
    let mut total = 0.5 * at_zero + sum(step, step);
    let mut before = total * step;
    for _ in 0..HALVINGS_MAX {
        total += sum(0.5 * step, step);
        step *= 0.5;
        let now = total * step;
        if (now - before).abs() <= AGREED * now.abs() {
            return now.is_finite().then_some(now);
        }
        before = now;
    }
    before.is_finite().then_some(before)
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Orthonormal constant and `more` of the difference matrix's own columns, slowest or fastest.
    fn own_columns(n: usize, more: usize, slowest: bool) -> Vec<Coefficients> {
        let column = |j: usize, i: usize| {
            let size = if j == 0 { 1.0 } else { 2.0 } / count(n);
            size.sqrt() * (PI * count(j) * (count(i) + 0.5) / count(n)).cos()
        };
        (0..n)
            .map(|i| {
                let mut row = [0.0; COEFFICIENTS_MAX];
                for (k, entry) in row.iter_mut().enumerate().take(more + 1) {
                    let j = if slowest || k == 0 { k } else { n - k };
                    *entry = column(j, i);
                }
                row
            })
            .collect()
    }

    #[test]
    fn reference_bounds_of_savin_and_white() {
        // Savin and White (1977), Econometrica 45, 5 % points, three decimals (from memory), with more
        // digits from the eigenvalues 4 sin²(πj/2n) and Imhof's integral: (n, regressors, dL, dU).
        for (n, k, lower, upper) in [
            (6, 1, 0.610_181_765_496_911_4, 1.400_144_854_805_714_5),
            (10, 2, 0.697_150_371_513_901_8, 1.641_341_718_468_434),
            (20, 2, 1.100_399_469_671_241_7, 1.536_681_325_443_812),
            (50, 3, 1.420_587_690_068_005, 1.673_845_488_900_251_6),
            (100, 2, 1.633_690_181_548_343, 1.715_168_473_914_555_8),
        ] {
            for (d, slowest) in [(lower, false), (upper, true)] {
                let basis = own_columns(n, k, slowest);
                let p = Form { d, basis: &basis, p: k + 1 }.tail(-1.0).unwrap();
                assert!((p - 0.05).abs() < 1e-7, "n {n}, {k} regressors, d {d}: {p}");
                let above = Form { d, basis: &basis, p: k + 1 }.tail(1.0).unwrap();
                assert!((above - 0.95).abs() < 1e-7, "n {n}, {k} regressors, d {d}: {above}");
            }
        }
    }

    #[test]
    fn moments_are_those_of_the_eigenvalues() {
        // Within own columns the eigenvalues that remain are known: 4 sin²(πj/2n).
        let (n, k) = (12, 2);
        let left: Vec<f64> =
            (k + 1..n).map(|j| 4.0 * (PI * count(j) / (2.0 * count(n))).sin().powi(2)).collect();
        let m = count(left.len());
        let mean = left.iter().sum::<f64>() / m;
        let spread: f64 = left.iter().map(|v| (v - mean).powi(2)).sum();
        let (got_mean, got_variance) = moments(&own_columns(n, k, true), k + 1);
        assert!((got_mean - mean).abs() < 1e-12, "{got_mean}, {mean}");
        assert!((got_variance - 2.0 * spread / (m * (m + 2.0))).abs() < 1e-12);
    }

    #[test]
    fn long_series_get_the_normal_approximation_which_agrees() {
        let basis = own_columns(400, 1, true);
        for d in [1.8, 1.95, 2.1] {
            let exact = Form { d, basis: &basis, p: 2 }.tail(-1.0).unwrap();
            let near = approximate(d, &basis, 2).p_positive;
            assert!((exact - near).abs() < 1e-3, "{d}: {exact}, {near}");
        }
    }

    #[test]
    fn nothing_is_said_without_scatter_or_freedom() {
        let basis = own_columns(5, 3, true);
        assert_eq!(durbin_watson(&[0.0; 5], &basis, 2), None);
        assert_eq!(durbin_watson(&[1.0, -1.0, 0.5, 0.2, -0.7], &basis, 4), None);
    }
}
