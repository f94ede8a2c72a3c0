//! Dependence beyond the channel's norm: neighbours have become more alike than they used to be
//! (a clogging line, a slowing loop, a filter that was turned on).

use super::confirm::Workspace;
use super::whitened::Whitened;
use super::{Kind, Score};
use crate::drift::serial;
use crate::drift::tails::{SCORE_MAX, normal_score_upper};

/// Shortest stretch whose dependence is estimated.
const STRETCH_MIN: usize = 30;
/// The reference is at least this, and at least so much above the baseline.
const REFERENCE_MIN: f64 = 0.3;
const REFERENCE_MARGIN: f64 = 0.1;
/// The reference of a channel without a past, and the most any reference may be.
const REFERENCE_COLD: f64 = 0.5;
const REFERENCE_MAX: f64 = 0.9;

/// Compares the dependence of the newest n, n/2, n/4 … points with the channel's reference.
///
/// Model: z = (asin phi_L − asin phi_ref) √((1 − phi_ref²) I), I = Σ (spacing f/phi_ref)²/(1 − f²),
/// f = phi_ref^spacing; one-sided, the largest z over L ≥ 30.
///
/// # Arguments
/// `work.best` — n residuals with the best structure of the mean removed; `work` loaded from `w`.
/// # Outcomes
/// Score, size = phi of that stretch (a pure number), place of the stretch's first point.
/// # Numerics
/// With an even spacing I ≈ L/(1 − phi_ref²). Scores stay below 300 or so: asin is bounded.
/// # Source
/// Variance-stabilised lag-1 correlation, G. M. Jenkins, Biometrika 41, 1954; the reference and
/// the stretches are our own, justified by simulation.
pub(crate) fn look(w: &Whitened, work: &mut Workspace) -> Score {
    let n = w.len();
    let p = w.frame.parameters() as f64;
    let reference = reference(w.frame.phi_baseline, w.frame.settled);
    let sigma = serial::robust_sigma(&work.best, &mut work.scratch);
    let (mut best_z, mut best_phi, mut best_length) = (0.0, 0.0, n);
    let mut length = n;
    while length >= STRETCH_MIN {
        let from = n - length;
        work.scratch.clear();
        work.scratch.extend_from_slice(&work.best[from..]);
        serial::clip_in_place(&mut work.scratch, sigma);
        let spacing = &work.spacing[from..];
        let share = p * (length as f64 / n as f64);
        let phi = serial::lag_correlation_of_clipped(&work.scratch, spacing, w.regular, share);
        let weight = ((1.0 - reference * reference) * information(reference, spacing)).sqrt();
        let z = (phi.asin() - reference.asin()) * weight;
        if length == n {
            best_phi = phi;
        }
        if z > best_z {
            (best_z, best_phi, best_length) = (z, phi, length);
        }
        length /= 2;
    }
    let q = normal_score_upper(best_z).min(SCORE_MAX);
    let from = n - best_length;
    Score::new(Kind::Dependence, q, best_phi, from, w.points[from].x)
}

/// What counts as normal dependence for the channel.
fn reference(phi_baseline: f64, settled: f64) -> f64 {
    let own = (phi_baseline + REFERENCE_MARGIN).max(REFERENCE_MIN);
    let blended = REFERENCE_COLD * (1.0 - settled) + own * settled;
    let reference = if settled < 1.0 { own.max(blended) } else { own };
    reference.min(REFERENCE_MAX)
}

/// Fisher information about phi in the spacings after the first.
fn information(phi: f64, spacing: &[f64]) -> f64 {
    let ln_phi = phi.ln();
    let term = |r: &f64| {
        let f = (ln_phi * r).exp();
        (r * f / phi).powi(2) / (1.0 - f * f + 1e-12)
    };
    spacing.iter().skip(1).map(term).sum()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn cold_channel_is_judged_against_one_half() {
        assert!((reference(0.3, 0.0) - 0.5).abs() < 1e-12);
        assert!((reference(0.3, 1.0) - 0.4).abs() < 1e-12);
        assert!((reference(0.0, 1.0) - 0.3).abs() < 1e-12);
        assert!((reference(0.9, 1.0) - 0.9).abs() < 1e-12);
    }

    #[test]
    fn information_on_even_spacing_is_the_textbook_value() {
        // (L − 1)/(1 − phi²), Jenkins 1954.
        let got = information(0.5, &[1.0; 101]);
        assert!((got - 100.0 / 0.75).abs() < 1e-6, "{got}");
    }
}
