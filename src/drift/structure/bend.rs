//! Bend: a change of the rate of drift inside the window, or a curve of the wrong family.

use crate::drift::structure::Found;
use crate::drift::structure::confirm::{CONFIRM_ABOVE, Confirmed, confirm};
use crate::drift::structure::whitened::Whitened;
use nalgebra::Vector4;

/// Scans for the hinge (x − x_h)₊ that explains most; None when nothing can be tested.
///
/// # Returns
/// Score, size in y's unit per day, index of the hinge's point; and the residuals with the hinge
/// removed, when it was clear enough to be confirmed.
///
/// # Source
/// Broken-line likelihood ratio; an added term as test of form: Ramsey (1969). From memory.
pub fn scan(window: &Whitened) -> Option<(Found, Option<Confirmed>)> {
    let n = window.points();
    let (lowest, highest) = ((n / 10).max(5), n - 1 - (n / 12).max(4));
    // Ages relative to the newest keep the sums from cancelling where ages are large.
    let origin = window.x[n - 1];
    let age = |j: usize| window.x[j] - origin;
    let (mut a1, mut a2, mut b11, mut b12, mut b22) = (0.0, 0.0, 0.0, 0.0, 0.0);
    let (mut j1, mut j2) = (Vector4::zeros(), Vector4::zeros());
    let mut best: Option<(usize, f64, f64)> = None;
    for hinge in (lowest..n).rev() {
        if hinge <= highest {
            let h = age(hinge);
            let squares = b11 - 2.0 * h * b12 + h * h * b22;
            let found = window.candidate(a1 - h * a2, squares, &(j1 - j2 * h));
            if let Some(found) = found
                && best.is_none_or(|(_, gain, _)| found.gain > gain)
            {
                best = Some((hinge, found.gain, found.size));
            }
        }
        // Whitened age: w (x_j − f x_(j−1)) = w (1−f) x_(j−1) + w (x_j − x_(j−1)).
        let (w, c) = (window.weight[hinge], window.constant[hinge]);
        let t = c * age(hinge - 1) + w * (age(hinge) - age(hinge - 1));
        let (u, column) = (window.clipped[hinge], window.columns[hinge]);
        a1 += t * u;
        a2 += c * u;
        b11 += t * t;
        b12 += t * c;
        b22 += c * c;
        j1 += column * t;
        j2 += column * c;
    }
    let (hinge, gain, size) = best?;
    let mut score = window.score(gain);
    let mut confirmed = None;
    if score > CONFIRM_ABOVE {
        let column: Vec<f64> = (0..n).map(|j| (window.x[j] - window.x[hinge]).max(0.0)).collect();
        let again = confirm(window, &column);
        score = score.min(again.score);
        confirmed = Some(again);
    }
    Some((Found { score, size, index: hinge }, confirmed))
}
