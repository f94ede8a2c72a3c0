//! Confirmation: does the candidate still stand out when neighbours are more alike than usual?
//!
//! A channel whose dependence has grown looks, to a scan, as if its level had changed. So a score
//! above [`CONFIRM_ABOVE`] is computed again with the correlation that is left when the candidate is
//! part of the model, and the smaller score counts.

use crate::drift::fit::robust_scale;
use crate::drift::serial::{count, lag_correlation};
use crate::drift::structure::whitened::{CLIP, Whitened};
use crate::drift::tails::student_q;
use nalgebra::{Matrix5, Vector5};

/// Scores above this are confirmed.
pub const CONFIRM_ABOVE: f64 = 3.0;
/// Residuals are clipped at so many robust scales before correlations are estimated.
pub const CLIP_FOR_CORRELATION: f64 = 3.5;

/// The model with the candidate in it.
#[derive(Clone, Debug)]
pub struct Confirmed {
    /// Score with the correlation that is left; infinite when that is no larger than usual.
    pub score: f64,
    /// Residuals with the candidate removed, clipped.
    pub residuals: Vec<f64>,
}

/// Recomputes the score of candidate `column` (one entry per point) with re-estimated correlation.
///
/// # Source
/// Soft excess of one standard error: own rule; it keeps a correlation of 0.8 from being called a
/// step.
pub fn confirm(window: &Whitened, column: &[f64]) -> Confirmed {
    let n = window.points();
    let all = row_maker(window, column);
    let limit = CLIP_FOR_CORRELATION * robust_scale(&window.residuals);
    let clipped: Vec<f64> = window.residuals.iter().map(|e| e.clamp(-limit, limit)).collect();
    let rows: Vec<Vector5<f64>> = (0..n).map(&all).collect();
    let Some((c, _)) = solve(&rows, &clipped, window.parameters) else {
        return Confirmed { score: f64::INFINITY, residuals: clipped };
    };
    let mut residuals: Vec<f64> = (0..n).map(|j| window.residuals[j] - rows[j].dot(&c)).collect();
    let limit = CLIP_FOR_CORRELATION * robust_scale(&residuals);
    residuals.iter_mut().for_each(|r| *r = r.clamp(-limit, limit));
    let found = lag_correlation(&residuals, &window.spacing, window.parameters + 1);
    let usual = window.phi;
    let excess = found - usual - ((1.0 - usual * usual) / count(n)).sqrt();
    let phi = (usual + excess.max(0.0)).min(0.97);
    let score = if phi > usual { rescored(window, &rows, phi) } else { f64::INFINITY };
    Confirmed { score, residuals }
}

fn row_maker<'a>(window: &'a Whitened, column: &'a [f64]) -> impl Fn(usize) -> Vector5<f64> + 'a {
    let largest = column.iter().map(|d| d.abs()).fold(f64::MIN_POSITIVE, f64::max);
    move |j| {
        let g = window.gradients[j];
        Vector5::new(g[0], g[1], g[2], g[3], column[j] / largest)
    }
}

/// Ordinary least squares on five columns (unused ones stay 0); also the sum of squares explained.
fn solve(rows: &[Vector5<f64>], y: &[f64], parameters: usize) -> Option<(Vector5<f64>, f64)> {
    let (mut squares, mut right) = (Matrix5::zeros(), Vector5::zeros());
    for (row, &v) in rows.iter().zip(y) {
        squares += row * row.transpose();
        right += row * v;
    }
    for k in 0..5 {
        squares[(k, k)] =
            if (parameters..4).contains(&k) { 1.0 } else { squares[(k, k)] * (1.0 + 1e-12) };
    }
    let c = squares.cholesky()?.solve(&right);
    let explained = c.dot(&right);
    explained.is_finite().then_some((c, explained))
}

/// The added-variable score with correlation `phi`, residuals clipped after whitening.
fn rescored(window: &Whitened, rows: &[Vector5<f64>], phi: f64) -> f64 {
    let n = rows.len();
    let (mut u, mut x) = (Vec::with_capacity(n - 1), Vec::with_capacity(n - 1));
    for j in 1..n {
        let f = phi.powf(window.spacing[j]);
        let w = 1.0 / (1.0 - f * f).max(1e-12).sqrt();
        u.push(w * (window.residuals[j] - f * window.residuals[j - 1]));
        x.push((rows[j] - rows[j - 1] * f) * w);
    }
    let limit = CLIP * robust_scale(&u);
    u.iter_mut().for_each(|v| *v = v.clamp(-limit, limit));
    let total: f64 = u.iter().map(|v| v * v).sum();
    let without: Vec<Vector5<f64>> =
        x.iter().map(|r| Vector5::new(r[0], r[1], r[2], r[3], 0.0)).collect();
    // The fifth column is all 0 in the smaller model; its diagonal must not make it singular.
    let smaller = solve_without(&without, &u, window.parameters);
    let (Some((_, with)), Some(smaller)) = (solve(&x, &u, window.parameters), smaller) else {
        return 0.0;
    };
    let freedom = count(n - 1 - window.parameters - 1);
    let ratio = (with - smaller) / ((total - with).max(1e-300) / freedom);
    if ratio > 0.0 { student_q(ratio.sqrt(), freedom) } else { 0.0 }
}

fn solve_without(rows: &[Vector5<f64>], y: &[f64], parameters: usize) -> Option<f64> {
    let (mut squares, mut right) = (Matrix5::zeros(), Vector5::zeros());
    for (row, &v) in rows.iter().zip(y) {
        squares += row * row.transpose();
        right += row * v;
    }
    for k in parameters..5 {
        squares[(k, k)] = 1.0;
    }
    Some(squares.cholesky()?.solve(&right).dot(&right))
}
