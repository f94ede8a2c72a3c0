//! Step: a jump of level within the newer half of the window; dates it and sizes it.

use crate::drift::serial::count;
use crate::drift::structure::Found;
use crate::drift::structure::confirm::{CONFIRM_ABOVE, Confirmed, confirm};
use crate::drift::structure::whitened::Whitened;
use nalgebra::Vector4;

/// Points that must lie after the jump.
const POINTS_AFTER: usize = 2;
/// Weight, in points, of the window's own variance against that after the jump.
const GUARD_POINTS: f64 = 10.0;

/// Scans for the jump that explains most; None when nothing can be tested.
///
/// # Returns
/// Score, size in y's unit, index of the first point after the jump; and the residuals with the jump
/// removed, when it was clear enough to be confirmed.
///
/// # Source
/// Generalised likelihood ratio: Willsky and Jones (1976); Siegmund and Venkatraman (1995). The
/// guard against a mere growth of scatter after the jump is an own rule. From memory.
pub fn scan(window: &Whitened) -> Option<(Found, Option<Confirmed>)> {
    let n = window.points();
    let (mut after_u, mut after_d, mut after_j) = (0.0, 0.0, Vector4::zeros());
    let mut best: Option<(usize, f64, f64, Vector4<f64>)> = None;
    for first in (n - n / 2..n).rev() {
        let (w, c) = (window.weight[first], window.constant[first]);
        let (u, column) = (window.clipped[first], window.columns[first]);
        if n - first >= POINTS_AFTER {
            let with_columns = after_j + column * w;
            let found = window.candidate(after_u + w * u, after_d + w * w, &with_columns);
            if let Some(found) = found
                && best.is_none_or(|(_, gain, ..)| found.gain > gain)
            {
                best = Some((first, found.gain, found.size, with_columns));
            }
        }
        after_u += c * u;
        after_d += c * c;
        after_j += column * c;
    }
    let (first, gain, size, with_columns) = best?;
    let mut score = window.score(gain);
    let mut confirmed = None;
    if score > CONFIRM_ABOVE {
        score = guarded(window, first, gain, size, &with_columns);
    }
    if score > CONFIRM_ABOVE {
        let column: Vec<f64> = (0..n).map(|j| if j >= first { 1.0 } else { 0.0 }).collect();
        let again = confirm(window, &column);
        score = score.min(again.score);
        confirmed = Some(again);
    }
    Some((Found { score, size, index: first }, confirmed))
}

/// The score with t divided by how much larger the scatter is after the jump.
fn guarded(window: &Whitened, first: usize, gain: f64, size: f64, s: &Vector4<f64>) -> f64 {
    let beta = window.beta - window.inverse * s * size;
    let own = (window.left - gain) / window.freedom;
    let (mut sum, mut points) = (0.0, 0.0);
    for j in first + 1..window.points() {
        let r = window.clipped[j] - size * window.constant[j] - window.columns[j].dot(&beta);
        sum += r * r;
        points += 1.0;
    }
    let local = (GUARD_POINTS * own + sum) / (GUARD_POINTS + points);
    let inflation = (local / own.max(1e-12)).max(1.0).sqrt();
    crate::drift::tails::student_q(window.t_of(gain) / inflation, window.freedom)
}

/// Returns the smallest jump, in noise scales, that a window of n points with correlation phi can
/// show: 5 √(12 (1+phi)/(n (1−phi))) (own derivation from the information a refit leaves).
pub fn smallest_detectable(n: usize, phi: f64) -> f64 {
    5.0 * (12.0 * (1.0 + phi) / (count(n) * (1.0 - phi))).sqrt()
}
