//! Confirmation of a candidate: a change of the mean and strong dependence look alike from close by,
//! so a candidate must stand even when the dependence is re-estimated with the candidate removed.

use super::small::{Matrix, ORDER_MAX, solve};
use super::whitened::{CLIP, Whitened};
use crate::drift::serial;
use crate::drift::tails::student_score_two_sided;

/// Candidates with a score up to this are not worth the work of confirming.
pub(crate) const CONFIRM_ABOVE: f64 = 3.0;
/// The dependence used to confirm never exceeds this.
const PHI_CONFIRM_MAX: f64 = 0.97;

/// Reusable memory of the looks at one window; holds nothing between looks.
#[derive(Clone, Debug, Default)]
pub struct Workspace {
    /// Residuals, y's unit.
    pub(crate) residuals: Vec<f64>,
    /// Spacing in medians.
    pub(crate) spacing: Vec<f64>,
    /// Candidate column, not whitened.
    pub(crate) column: Vec<f64>,
    /// Residuals with the best candidate of the look removed.
    pub(crate) best: Vec<f64>,
    /// Residuals with the candidate at hand removed.
    pub(crate) removed: Vec<f64>,
    innovations: Vec<f64>,
    rows: Vec<[f64; ORDER_MAX]>,
    pub(crate) scratch: Vec<f64>,
}

impl Workspace {
    /// Copies residuals and spacing of the window out, in time order.
    pub(crate) fn load(&mut self, w: &Whitened) {
        self.residuals.clear();
        self.residuals.extend(w.points.iter().map(|p| p.e));
        self.spacing.clear();
        self.spacing.extend(w.points.iter().map(|p| p.ratio));
    }
}

/// Returns the dependence with which a candidate is confirmed: the baseline plus what the
/// candidate's own residuals show beyond one standard error of it.
pub(crate) fn soft_phi(phi_alternative: f64, phi_baseline: f64, n: usize) -> f64 {
    let se = ((1.0 - phi_baseline * phi_baseline) / n as f64).sqrt();
    (phi_baseline + (phi_alternative - phi_baseline - se).max(0.0)).min(PHI_CONFIRM_MAX)
}

/// Confirms the candidate in `work.column`: removes it by least squares of the clipped residuals
/// on curve and candidate, re-estimates phi, and scores it again under [`soft_phi`].
///
/// # Arguments
/// `work` — loaded from `w`, with the column set; `work.removed` receives the residuals.
/// # Outcomes
/// The score under the softer dependence; `None` when the baseline needs no softening (the raw
/// score stands).
pub(crate) fn confirmed_score(w: &Whitened, work: &mut Workspace) -> Option<f64> {
    remove_candidate(w, work);
    let s = serial::robust_sigma(&work.removed, &mut work.scratch);
    work.scratch.clear();
    work.scratch.extend_from_slice(&work.removed);
    serial::clip_in_place(&mut work.scratch, s);
    let parameters = (w.frame.parameters() + 1) as f64;
    let phi =
        serial::lag_correlation_of_clipped(&work.scratch, &work.spacing, w.regular, parameters);
    softened_score(w, work, phi)
}

/// Scores `work.column` under the dependence softened towards `phi`; `None` as above.
pub(crate) fn softened_score(w: &Whitened, work: &mut Workspace, phi: f64) -> Option<f64> {
    let base = w.frame.phi_baseline;
    let soft = soft_phi(phi, base, w.len());
    (soft > base).then(|| score_under(w, work, soft))
}

/// `work.removed` = residuals about the least-squares fit of curve and candidate.
fn remove_candidate(w: &Whitened, work: &mut Workspace) {
    let p = w.frame.parameters();
    let clip = serial::CLIP_SIGMAS * w.frame.residual_sigma;
    let mut h: Matrix = [[0.0; ORDER_MAX]; ORDER_MAX];
    let mut g = [0.0; ORDER_MAX];
    for (point, &d) in w.points.iter().zip(&work.column) {
        let row = row_of(&point.tangent, d, p);
        accumulate(&mut h, &mut g, &row, point.e.clamp(-clip, clip), p + 1);
    }
    complete(&mut h, p + 1);
    let c = solve(&h, &g, p + 1).unwrap_or([0.0; ORDER_MAX]);
    work.removed.clear();
    work.removed.extend(w.points.iter().zip(&work.column).map(|(point, &d)| {
        let row = row_of(&point.tangent, d, p);
        point.e - (0..=p).map(|a| c[a] * row[a]).sum::<f64>()
    }));
}

/// Score of the added column in the model whitened by `phi`, innovations clipped at 3 robust
/// sigmas.
fn score_under(w: &Whitened, work: &mut Workspace, phi: f64) -> f64 {
    let p = w.frame.parameters();
    work.innovations.clear();
    work.rows.clear();
    for j in 1..w.points.len() {
        let (point, last) = (&w.points[j], &w.points[j - 1]);
        let (f, weight) = super::frame::link(phi, point.ratio);
        // As `link` gives √((1−φ²)/(1−f²)); the common factor cancels in the ratio of sums.
        work.innovations.push(weight * (point.e - f * last.e));
        let now = row_of(&point.tangent, work.column[j], p);
        let before = row_of(&last.tangent, work.column[j - 1], p);
        let mut row = [0.0; ORDER_MAX];
        for a in 0..=p {
            row[a] = weight * (now[a] - f * before[a]);
        }
        work.rows.push(row);
    }
    let s = serial::robust_sigma(&work.innovations, &mut work.scratch);
    if s <= 0.0 {
        return 0.0;
    }
    let mut h: Matrix = [[0.0; ORDER_MAX]; ORDER_MAX];
    let mut g = [0.0; ORDER_MAX];
    let mut square = 0.0;
    for (row, &u) in work.rows.iter().zip(&work.innovations) {
        let u = (u / s).clamp(-CLIP, CLIP);
        square += u * u;
        accumulate(&mut h, &mut g, row, u, p + 1);
    }
    complete(&mut h, p + 1);
    let (Some(full), Some(plain)) = (solve(&h, &g, p + 1), solve(&h, &g, p)) else { return 0.0 };
    let rss_full = square - (0..=p).map(|a| full[a] * g[a]).sum::<f64>();
    let rss_plain = square - (0..p).map(|a| plain[a] * g[a]).sum::<f64>();
    let nu = (work.rows.len() - p - 1) as f64;
    if rss_full <= 1e-300 || rss_plain <= rss_full {
        return 0.0;
    }
    student_score_two_sided(((rss_plain - rss_full) / (rss_full / nu)).sqrt(), nu)
}

fn row_of(tangent: &[f64], candidate: f64, p: usize) -> [f64; ORDER_MAX] {
    let mut row = [0.0; ORDER_MAX];
    row[..p].copy_from_slice(&tangent[..p]);
    row[p] = candidate;
    row
}

fn accumulate(h: &mut Matrix, g: &mut [f64; ORDER_MAX], row: &[f64; ORDER_MAX], v: f64, q: usize) {
    for a in 0..q {
        g[a] += row[a] * v;
        for c in 0..=a {
            h[a][c] += row[a] * row[c];
        }
    }
}

/// Mirrors the lower triangle; a hair of ridge, and 1 for a column without a direction.
fn complete(h: &mut Matrix, q: usize) {
    for a in 0..q {
        for c in 0..a {
            h[c][a] = h[a][c];
        }
        h[a][a] = if h[a][a] > 0.0 { h[a][a] * (1.0 + 1e-12) } else { 1.0 };
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn softening_begins_beyond_one_standard_error() {
        // √((1 − .09)/100) = .0954
        assert!((soft_phi(0.35, 0.3, 100) - 0.3).abs() < 1e-12);
        assert!((soft_phi(0.6, 0.3, 100) - (0.6 - 0.091_f64.sqrt() * 0.316_227_766)).abs() < 1e-9);
        assert!((soft_phi(1.4, 0.3, 100) - PHI_CONFIRM_MAX).abs() < 1e-12);
    }
}
