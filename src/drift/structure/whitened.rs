//! The whitened, winsorised, linearised model: what every kind of structure is tested against.
//!
//! Residuals of a curve refitted to the same data are neither independent nor free of the curve's
//! own uncertainty. Both are taken out once, here: neighbours' correlation phi is removed (whitening),
//! wild readings are clipped at three noise scales, and a candidate for structure is judged only by
//! what the curve's own coefficients could not have absorbed (added-variable test).

use crate::drift::family::COEFFICIENTS_MAX;
use crate::drift::fit::{Fit, robust_scale};
use crate::drift::serial::{count, spacing_of};
use crate::drift::tails::student_q;
use nalgebra::{Matrix4, Vector4};

/// Whitened residuals are clipped at so many noise scales.
pub const CLIP: f64 = 3.0;
/// The mean square of a standard normal deviate clipped at 3.
const CLIPPED_VARIANCE: f64 = 0.995_02;

/// A window ready for examination.
#[derive(Clone, Debug)]
pub struct Whitened {
    /// Ages, days.
    pub x: Vec<f64>,
    /// Residuals of the curve, in y's unit.
    pub residuals: Vec<f64>,
    /// Gradients of the curve, each column scaled to a largest size of 1.
    pub gradients: Vec<Vector4<f64>>,
    /// Spacings over their median; the first is 1.
    pub spacing: Vec<f64>,
    /// The correlation that was taken out.
    pub phi: f64,
    /// Marginal noise scale s, in y's unit.
    pub scale: f64,
    /// Whitened, scaled, clipped residuals; entry 0 unused (0).
    pub clipped: Vec<f64>,
    /// Whitened gradients; entry 0 unused (0).
    pub columns: Vec<Vector4<f64>>,
    /// Weight w_j of a whitened entry; entry 0 unused.
    pub weight: Vec<f64>,
    /// w_j (1 − f_j): what a constant becomes; entry 0 unused.
    pub constant: Vec<f64>,
    /// (JᵀJ)⁻¹ of the whitened columns; unused places are those of the identity.
    pub inverse: Matrix4<f64>,
    /// Coefficients that the clipped residuals still ask for.
    pub beta: Vector4<f64>,
    /// Sum of squares left after them.
    pub left: f64,
    /// Degrees of freedom left with one candidate added.
    pub freedom: f64,
    /// Number of the curve's coefficients.
    pub parameters: usize,
}

impl Whitened {
    /// Whitens the residuals of a curve.
    ///
    /// # Arguments
    /// `x` — ages, days, strictly increasing, at least p + 4; `y` — deviations; `curve` —
    /// fitted to them; `phi` — the channel's usual correlation at the median spacing, 0 ≤ phi < 1.
    ///
    /// # Returns
    /// None when the residuals have no scatter at all, or the curve's columns are dependent.
    ///
    /// # Source
    /// f_j = phi^(Δt_j/δ), w_j = √((1−phi²)/(1−f_j²))/s, u_j = w_j (e_j − f_j e_(j−1)):
    /// Ornstein–Uhlenbeck process at irregular times. Scale: iterated winsorised mean square.
    pub fn new(x: &[f64], y: &[f64], curve: &Fit, phi: f64) -> Option<Whitened> {
        let parameters = curve.family.parameter_count();
        assert!(x.len() == y.len() && x.len() >= parameters + 4, "enough points, one y each");
        let residuals = curve.residuals(x, y);
        let gradients = scaled_gradients(x, curve);
        let (_, spacing) = spacing_of(x);
        let mut whitened = Whitened {
            x: x.to_vec(),
            residuals,
            gradients,
            spacing,
            phi,
            scale: 1.0,
            clipped: Vec::new(),
            columns: Vec::new(),
            weight: Vec::new(),
            constant: Vec::new(),
            inverse: Matrix4::identity(),
            beta: Vector4::zeros(),
            left: 0.0,
            freedom: count(x.len() - 2 - parameters),
            parameters,
        };
        whitened.whiten()?;
        Some(whitened)
    }

    /// Number of points.
    pub fn points(&self) -> usize {
        self.x.len()
    }

    fn whiten(&mut self) -> Option<()> {
        let n = self.points();
        let f: Vec<f64> = self.spacing.iter().map(|d| self.phi.powf(*d)).collect();
        let relative: Vec<f64> = f
            .iter()
            .map(|f| ((1.0 - self.phi * self.phi) / (1.0 - f * f).max(1e-12)).sqrt())
            .collect();
        let raw: Vec<f64> = (1..n)
            .map(|j| relative[j] * (self.residuals[j] - f[j] * self.residuals[j - 1]))
            .collect();
        let lost = count(n - 1) / count(n - 1 - self.parameters);
        self.scale = winsorised_scale(&raw)? * lost.sqrt();
        self.weight = relative.iter().map(|w| w / self.scale).collect();
        self.constant = (0..n).map(|j| self.weight[j] * (1.0 - f[j])).collect();
        self.clipped = vec![0.0; n];
        self.columns = vec![Vector4::zeros(); n];
        let mut squares = Matrix4::zeros();
        let (mut right, mut total) = (Vector4::zeros(), 0.0);
        for j in 1..n {
            self.clipped[j] = (raw[j - 1] / self.scale).clamp(-CLIP, CLIP);
            self.columns[j] = (self.gradients[j] - self.gradients[j - 1] * f[j]) * self.weight[j];
            squares += self.columns[j] * self.columns[j].transpose();
            right += self.columns[j] * self.clipped[j];
            total += self.clipped[j] * self.clipped[j];
        }
        for k in self.parameters..COEFFICIENTS_MAX {
            squares[(k, k)] = 1.0;
        }
        self.inverse = squares.try_inverse()?;
        self.beta = self.inverse * right;
        self.left = total - self.beta.dot(&right);
        (self.left.is_finite() && self.left > 0.0).then_some(())
    }

    /// Judges one candidate column D by its sums over the whitened window.
    ///
    /// # Arguments
    /// `with_residuals` — Dᵀu; `squares` — DᵀD; `with_columns` — JᵀD.
    ///
    /// # Returns
    /// The gain in sum of squares and the coefficient of D in y's units per unit of D; None when the
    /// curve's own columns leave nothing of D.
    pub fn candidate(
        &self,
        with_residuals: f64,
        squares: f64,
        with_columns: &Vector4<f64>,
    ) -> Option<Gain> {
        let numerator = with_residuals - with_columns.dot(&self.beta);
        let denominator = squares - with_columns.dot(&(self.inverse * with_columns));
        (denominator > 1e-8 * squares && denominator > 0.0).then(|| Gain {
            gain: numerator * numerator / denominator,
            size: numerator / denominator,
        })
    }

    /// The score q = −log10 p of a gain, against Student's t.
    pub fn score(&self, gain: f64) -> f64 {
        student_q(self.t_of(gain), self.freedom)
    }

    /// The t statistic of a gain.
    pub fn t_of(&self, gain: f64) -> f64 {
        (gain / ((self.left - gain) / self.freedom).max(1e-12)).sqrt()
    }
}

/// What a candidate explains.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Gain {
    /// Reduction of the whitened sum of squares.
    pub gain: f64,
    /// The candidate's coefficient; in y's unit per unit of the candidate.
    pub size: f64,
}

fn scaled_gradients(x: &[f64], curve: &Fit) -> Vec<Vector4<f64>> {
    let mut rows: Vec<Vector4<f64>> = x.iter().map(|&v| Vector4::from(curve.gradient(v))).collect();
    for k in 0..curve.family.parameter_count() {
        let largest = rows.iter().map(|row| row[k].abs()).fold(0.0, f64::max);
        if largest > 0.0 {
            rows.iter_mut().for_each(|row| row[k] /= largest);
        }
    }
    rows
}

/// Starts at 1.4826 MAD, then three times the root of the mean clipped square. None without scatter.
fn winsorised_scale(u: &[f64]) -> Option<f64> {
    let largest = u.iter().map(|v| v.abs()).fold(0.0, f64::max);
    let mut scale = robust_scale(u).max(1e-3 * largest);
    if !(scale.is_finite() && scale > 0.0) {
        return None;
    }
    for _ in 0..3 {
        let sum: f64 = u.iter().map(|v| v.clamp(-CLIP * scale, CLIP * scale).powi(2)).sum();
        scale = (sum / count(u.len()) / CLIPPED_VARIANCE).sqrt();
    }
    Some(scale)
}
