//! Shift: the fast detector of a lasting change of level, fed with one-step forecast errors.
//!
//! It tells *that* something changed, soon and within a guaranteed rate of false alerts; the scans
//! for step and bend tell what and when.

use crate::drift::structure::whitened::{CLIP, Whitened};
use serde::{Deserialize, Serialize};

/// The drifts, in noise scales, that the mixture bets on.
const BETS: [f64; 8] = [0.35, 0.7, 1.4, 2.5, -0.35, -0.7, -1.4, -2.5];
/// Evidence is held below this, so that no sum overflows.
const EVIDENCE_MAX: f64 = 1e100;

/// Evidence so far, one number for each bet.
#[derive(Clone, Debug, Default, PartialEq, Serialize, Deserialize)]
pub struct ShiftDetector {
    evidence: [f64; 8],
}

impl ShiftDetector {
    /// Takes the newest point of a window in and returns q = log10 of the mean evidence.
    ///
    /// # Numerics
    /// The newest clipped residual is freed from the curve refitted to the window with it
    /// (recursive residual); R_k ← (R_k + 1) exp(d_k w − d_k²/2).
    ///
    /// # Source
    /// Shin, Ramdas and Rinaldo (2024), E-detectors, New England Journal of Statistics in Data
    /// Science; recursive residuals: Brown, Durbin and Evans (1975). From memory.
    pub fn update(&mut self, window: &Whitened) -> f64 {
        let newest = window.points() - 1;
        let column = window.columns[newest];
        let leverage = column.dot(&(window.inverse * column));
        let error =
            (window.clipped[newest] - column.dot(&window.beta)) / (1.0 - leverage).max(0.05).sqrt();
        let error = error.clamp(-CLIP, CLIP);
        for (evidence, bet) in self.evidence.iter_mut().zip(BETS) {
            *evidence =
                ((*evidence + 1.0) * (bet * error - 0.5 * bet * bet).exp()).min(EVIDENCE_MAX);
        }
        let mean = self.evidence.iter().sum::<f64>() / 8.0;
        mean.max(f64::MIN_POSITIVE).log10().max(0.0)
    }

    /// Forgets the evidence: after an alert it has been told.
    pub fn reset(&mut self) {
        self.evidence = [0.0; 8];
    }
}
