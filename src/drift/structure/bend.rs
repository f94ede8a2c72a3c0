//! A bend: from some point on the deviation drifts at another rate than the curve says. Wrong
//! families show here too.

use super::confirm::{CONFIRM_ABOVE, Workspace, confirmed_score};
use super::whitened::Whitened;
use super::{Kind, Score};
use crate::drift::family::{COEFFICIENTS_MAX, Coefficients};
use crate::drift::tails::student_score_two_sided;

/// The best hinge of one scan.
struct Best {
    tau: usize,
    gain: f64,
    /// Change of slope per median spacing.
    slope: f64,
}

/// Scans for a hinge and confirms what it finds.
///
/// Model: D_j = max(t_j − t_tau, 0), tau from a tenth of the window to a twelfth before its end.
///
/// # Arguments
/// `w` — the window; `work.removed` receives the residuals with the bend removed if it is above 3.
/// # Outcomes
/// Score at the best hinge, size = change of slope in y's unit per day, place of the hinge.
/// # Numerics
/// One backward pass of running sums; time in median spacings from the frame's origin.
/// # Source
/// D. V. Hinkley, Inference in two-phase regression, JASA 66, 1971 (the hinge); J. B. Ramsey, JRSS
/// B 31, 1969 (added terms against a wrong form). Confirmation: our own, see `confirm`.
pub(crate) fn look(w: &Whitened, work: &mut Workspace) -> Score {
    let Some(best) = scan(w) else { return Score::none(Kind::Bend, w) };
    let mut q = student_score_two_sided(w.t_of_gain(best.gain), w.nu);
    let mut slope = best.slope;
    let hinge = &w.points[best.tau];
    if q > CONFIRM_ABOVE {
        work.load(w);
        work.column.clear();
        work.column.extend(w.points.iter().map(|p| (p.t - hinge.t).max(0.0)));
        if let Some(confirmed) = confirmed_score(w, work) {
            q = q.min(confirmed);
        }
        let column = |j: usize| if j > best.tau { hinged(w, hinge.t, j) } else { 0.0 };
        slope = w.effect(column);
    }
    Score::new(Kind::Bend, q, slope / w.frame.spacing_days, best.tau, hinge.x)
}

/// Whitened value of a hinge that lies before point j.
fn hinged(w: &Whitened, t: f64, j: usize) -> f64 {
    w.points[j].t1 - t * w.points[j].b1
}

fn scan(w: &Whitened) -> Option<Best> {
    let n = w.len();
    let p = w.frame.parameters();
    let (low, high) = (5.max(n / 10), n - 1 - 4.max(n / 12));
    let mut best: Option<Best> = None;
    // Sums over the points after the hinge, for D = t1 − t·b1 with t still open.
    let (mut t_u, mut b_u, mut t_t, mut t_b, mut b_b) = (0.0, 0.0, 0.0, 0.0, 0.0);
    let (mut t_j, mut b_j) = ([0.0; COEFFICIENTS_MAX], [0.0; COEFFICIENTS_MAX]);
    for tau in (low..n).rev() {
        let point = &w.points[tau];
        if tau <= high {
            let t = point.t;
            let square = t_t - 2.0 * t * t_b + t * t * b_b;
            let mut s: Coefficients = [0.0; COEFFICIENTS_MAX];
            for a in 0..p {
                s[a] = t_j[a] - t * b_j[a];
            }
            let (num, den) = w.project(t_u - t * b_u, square, &s);
            if den > 1e-8 * square {
                let gain = num * num / den;
                if best.as_ref().is_none_or(|b| gain > b.gain) {
                    best = Some(Best { tau, gain, slope: num / den });
                }
            }
        }
        t_u += point.t1 * point.uc;
        b_u += point.b1 * point.uc;
        t_t += point.t1 * point.t1;
        t_b += point.t1 * point.b1;
        b_b += point.b1 * point.b1;
        for a in 0..p {
            t_j[a] += point.t1 * point.jt[a];
            b_j[a] += point.b1 * point.jt[a];
        }
    }
    best
}
