//! Dependence: successive residuals more alike than is this channel's norm.

use crate::drift::fit::robust_scale;
use crate::drift::serial::{count, lag_correlation};
use crate::drift::structure::Found;
use crate::drift::structure::confirm::CLIP_FOR_CORRELATION;
use crate::drift::structure::whitened::Whitened;
use crate::drift::tails::normal_q_above;

/// Fewest residuals over which a correlation is estimated here.
const POINTS_MIN: usize = 30;
/// What is allowed while the channel's norm is still unknown.
const ALLOWED_AT_FIRST: f64 = 0.5;

/// Tests the correlation of the newest n, n/2, n/4 … residuals against the norm, from above.
///
/// # Arguments
/// `residuals` — with the best other structure removed; `familiar` — 0…1, how well the norm
/// `window.phi` is known.
///
/// # Returns
/// Score; `size` is the correlation found; `index` the first residual of the stretch it was found in.
///
/// # Source
/// z = (asin phi − asin phi_ref) √((1−phi_ref²) I), I the Fisher information of the process at
/// irregular times; variance-stabilising transform, own use.
pub fn score(window: &Whitened, residuals: &[f64], familiar: f64) -> Found {
    let n = window.points();
    let known = (window.phi + 0.1).max(0.3);
    let first = known.max(ALLOWED_AT_FIRST * (1.0 - familiar) + known * familiar);
    let reference = if familiar < 1.0 { first } else { known }.min(0.9);
    let limit = CLIP_FOR_CORRELATION * robust_scale(residuals);
    let clipped: Vec<f64> = residuals.iter().map(|r| r.clamp(-limit, limit)).collect();
    let mut best = Found { score: 0.0, size: 0.0, index: 0 };
    let mut best_z = 0.0;
    let mut length = n;
    while length >= POINTS_MIN {
        let from = n - length;
        let share = window.parameters * length / n;
        let found = lag_correlation(&clipped[from..], &window.spacing[from..], share);
        let information: f64 = window.spacing[from + 1..]
            .iter()
            .map(|&d| {
                let f = reference.powf(d);
                (d * f / reference).powi(2) / (1.0 - f * f + 1e-12)
            })
            .sum();
        let z = (found.clamp(-0.99, 0.995).asin() - reference.asin())
            * ((1.0 - reference * reference) * information).sqrt();
        if z > best_z {
            best_z = z;
            best = Found { score: normal_q_above(z), size: found, index: from };
        }
        length /= 2;
    }
    debug_assert!(count(n) > 0.0);
    best
}
