//! A step: all readings from some point on are higher or lower by the same amount.

use super::confirm::{CONFIRM_ABOVE, Workspace, softened_score};
use super::whitened::Whitened;
use super::{Kind, Score};
use crate::drift::family::{COEFFICIENTS_MAX, Coefficients};
use crate::drift::serial;
use crate::drift::tails::student_score_two_sided;

/// Weight, in points, of the window's noise when the noise after the step is judged.
const GUARD_POINTS: f64 = 10.0;

/// The best step of one scan.
struct Best {
    tau: usize,
    gain: f64,
    size: f64,
    s: Coefficients,
}

/// A scored step, and whether `Workspace::best` holds the residuals with it removed.
pub(crate) struct StepLook {
    pub score: Score,
    pub removed: bool,
}

/// Scans the newer half of the window for a step and confirms what it finds.
///
/// Model: D_j = 1 from point tau on; generalised likelihood ratio over tau, each an added-column
/// test in the whitened linearised model, so that the curve's own uncertainty is projected out.
///
/// # Arguments
/// `w` — the window; at least two points lie after a candidate's first.
/// # Outcomes
/// Score at the best tau, size in y's unit (positive: up), place of the first point after.
/// # Numerics
/// One backward pass of running sums, O(n p²/2). A candidate above 3 meets two guards: the
/// statistic is deflated where the points after the step scatter more than the window,
/// (10 s² + ss)/(10 + d); and it must stand under the dependence that remains once it is removed.
/// # Source
/// A. S. Willsky and H. L. Jones, A generalized likelihood ratio approach, IEEE Transactions on
/// Automatic Control 21, 1976; D. Siegmund and E. S. Venkatraman, Annals of Statistics 23, 1995.
/// The two guards are our own, justified by simulation.
pub(crate) fn look(w: &Whitened, work: &mut Workspace) -> StepLook {
    let Some(best) = scan(w) else {
        return StepLook { score: Score::none(Kind::Step, w), removed: false };
    };
    let t = w.t_of_gain(best.gain);
    let mut q = student_score_two_sided(t, w.nu);
    let mut size = best.size;
    let mut removed = false;
    if q > CONFIRM_ABOVE {
        let beta = beta_beside(w, &best);
        q = student_score_two_sided(t / inflation(w, &best, &beta), w.nu);
        size = w.effect(|j| column(w, best.tau, j));
        if q > CONFIRM_ABOVE {
            q = q.min(confirm(w, &best, &beta, work));
            removed = true;
        }
    }
    StepLook { score: Score::new(Kind::Step, q, size, best.tau, w.points[best.tau].x), removed }
}

fn column(w: &Whitened, tau: usize, j: usize) -> f64 {
    match j.cmp(&tau) {
        std::cmp::Ordering::Less => 0.0,
        std::cmp::Ordering::Equal => w.points[j].a1,
        std::cmp::Ordering::Greater => w.points[j].b1,
    }
}

fn scan(w: &Whitened) -> Option<Best> {
    let n = w.len();
    let p = w.frame.parameters();
    let mut best: Option<Best> = None;
    let (mut cross, mut square) = (0.0, 0.0);
    let mut running: Coefficients = [0.0; COEFFICIENTS_MAX];
    for tau in (n - n / 2..n).rev() {
        let point = &w.points[tau];
        if tau < n - 1 {
            let total = square + point.a1 * point.a1;
            let mut s = running;
            for a in 0..p {
                s[a] += point.a1 * point.jt[a];
            }
            let (num, den) = w.project(cross + point.a1 * point.uc, total, &s);
            if den > 1e-10 * total {
                let gain = num * num / den;
                if best.as_ref().is_none_or(|b| gain > b.gain) {
                    best = Some(Best { tau, gain, size: num / den, s });
                }
            }
        }
        cross += point.b1 * point.uc;
        square += point.b1 * point.b1;
        for a in 0..p {
            running[a] += point.b1 * point.jt[a];
        }
    }
    best
}

/// What the innovations would move the curve by once the step stands beside it.
fn beta_beside(w: &Whitened, best: &Best) -> Coefficients {
    let p = w.frame.parameters();
    let mut beta = [0.0; COEFFICIENTS_MAX];
    for (a, b) in beta.iter_mut().enumerate().take(p) {
        let pull: f64 = (0..p).map(|c| w.g_inverse[a][c] * best.s[c]).sum();
        *b = w.beta[a] - pull * best.size;
    }
    beta
}

/// √ of the scatter after the step against the window's, at least 1.
fn inflation(w: &Whitened, best: &Best, beta: &Coefficients) -> f64 {
    let p = w.frame.parameters();
    let mut ss = 0.0;
    let after = &w.points[best.tau + 1..];
    for point in after {
        let fit: f64 = (0..p).map(|a| point.jt[a] * beta[a]).sum();
        ss += (point.uc - best.size * point.b1 - fit).powi(2);
    }
    let s2 = (w.rss - best.gain) / w.nu;
    let local = (GUARD_POINTS * s2 + ss) / (GUARD_POINTS + after.len() as f64);
    (local / s2.max(1e-12)).max(1.0).sqrt()
}

fn confirm(w: &Whitened, best: &Best, beta: &Coefficients, work: &mut Workspace) -> f64 {
    let p = w.frame.parameters();
    let clip = serial::CLIP_SIGMAS * w.frame.residual_sigma;
    work.load(w);
    work.best.clear();
    work.column.clear();
    for (j, point) in w.points.iter().enumerate() {
        let after = j >= best.tau;
        let fit: f64 = (0..p).map(|a| point.tangent[a] * beta[a]).sum();
        let rest = point.e - fit - if after { best.size } else { 0.0 };
        work.best.push(rest.clamp(-clip, clip));
        work.column.push(if after { 1.0 } else { 0.0 });
    }
    let phi =
        serial::lag_correlation_of_clipped(&work.best, &work.spacing, w.regular, (p + 1) as f64);
    softened_score(w, work, phi).unwrap_or(f64::INFINITY)
}
