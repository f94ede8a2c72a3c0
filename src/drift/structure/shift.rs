//! The fast layer: a shift of the newest readings against what curve and past predict. It warns
//! first and names nothing; step, bend and the others of the same look give the name.

use super::whitened::{CLIP, Whitened};
use serde::{Deserialize, Serialize};

/// Shifts of the standardised forecast error that are betted on, in sigmas.
const DELTAS: [f64; 8] = [0.35, 0.7, 1.4, 2.5, -0.35, -0.7, -1.4, -2.5];
/// A statistic is held below this, so that it stays finite in a record that never returns.
const R_MAX: f64 = 1e100;
/// One minus leverage is held above this: the very newest point of a bent curve carries much of it.
const FREE_MIN: f64 = 0.05;

/// A mixture of Shiryaev–Roberts statistics over eight shifts; state of eight numbers.
///
/// Model: w = clip((uc − Jt beta)/√(1 − h), ± 3), the newest innovation's standardised
/// leave-nothing-out residual; R_k ← (R_k + 1) exp(d_k w − d_k²/2); score log10(mean R_k).
///
/// # Source
/// A. N. Shiryaev, On optimum methods in quickest detection problems, Theory of Probability and
/// its Applications 8, 1963; S. W. Roberts, A comparison of some control chart procedures,
/// Technometrics 8, 1966. That the mean time between false alerts is at least the threshold:
/// J. Shin, A. Ramdas and A. Rinaldo, E-detectors, New England Journal of Statistics in Data
/// Science 2, 2024. Recursive residuals: R. L. Brown, J. Durbin and J. M. Evans, JRSS B 37, 1975.
#[derive(Clone, Debug, Default, PartialEq, Serialize, Deserialize)]
pub struct ShiftDetector {
    /// The eight statistics, each in [0, 1e100].
    pub r: [f64; 8],
}

impl ShiftDetector {
    /// Takes the newest point of the window; returns the score, in [0, 100].
    ///
    /// # Arguments
    /// `w` — the whitened window, the newest point in it.
    pub fn update(&mut self, w: &Whitened) -> f64 {
        self.take(w, 1)
    }

    /// Takes the newest `count` points in turn, at most the window; returns the score after them.
    ///
    /// # Arguments
    /// `w` — the whitened window; `count` — newest points not yet taken.
    pub fn take(&mut self, w: &Whitened, count: usize) -> f64 {
        let n = w.len();
        for j in n - count.min(n - 1)..n {
            let (leverage, fit) = w.fitted(j);
            let free = (1.0 - leverage).max(FREE_MIN).sqrt();
            let error = ((w.points[j].uc - fit) / free).clamp(-CLIP, CLIP);
            for (r, d) in self.r.iter_mut().zip(DELTAS) {
                *r = ((*r + 1.0) * (d * error - 0.5 * d * d).exp()).min(R_MAX);
            }
        }
        self.score()
    }

    /// Returns log10 of the mean statistic, never below 0.
    pub fn score(&self) -> f64 {
        let mean = self.r.iter().sum::<f64>() / DELTAS.len() as f64;
        mean.max(1e-30).log10().max(0.0)
    }

    /// Forgets all evidence; called when an alert opens and when a new cycle begins.
    pub fn reset(&mut self) {
        self.r = [0.0; 8];
    }
}
