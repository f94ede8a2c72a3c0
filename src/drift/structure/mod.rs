//! One file per kind of structure in residuals, and the examination that runs them all.
//!
//! Each kind yields one score q = −log10 p of its best candidate. How large a score must be to count
//! is not decided here but by the budget for false alerts, one floor up.

pub mod baseline;
pub mod bend;
pub mod confirm;
pub mod dependence;
pub mod shift;
pub mod step;
pub mod whitened;

use serde::{Deserialize, Serialize};
use whitened::Whitened;

/// The best candidate of one kind.
#[derive(Clone, Copy, Debug, Default, PartialEq, Serialize, Deserialize)]
pub struct Found {
    /// −log10 p of this one candidate.
    pub score: f64,
    /// Its size: y's unit (step), y's unit per day (bend), a correlation (dependence).
    pub size: f64,
    /// Index of the point at which it begins.
    pub index: usize,
}

/// What one full look at the residuals found.
#[derive(Clone, Copy, Debug, Default, PartialEq, Serialize, Deserialize)]
pub struct Examination {
    /// Jump of level.
    pub step: Found,
    /// Change of rate.
    pub bend: Found,
    /// Dependence beyond the norm.
    pub dependence: Found,
}

impl Examination {
    /// The largest score of a change in the mean: above 5 the window is no example of the norm.
    pub fn largest_in_mean(&self) -> f64 {
        self.step.score.max(self.bend.score)
    }
}

/// Examines a window for every kind. `familiar`: how well the channel's norm is known, 0…1.
pub fn examine(window: &Whitened, familiar: f64) -> Examination {
    let step = step::scan(window);
    let bend = bend::scan(window);
    // Dependence is judged on what the best explanation of the mean leaves.
    let mut left = &window.residuals;
    let mut best = 3.5;
    for (found, confirmed) in [&step, &bend].into_iter().flatten() {
        if let Some(confirmed) = confirmed
            && found.score > best
        {
            best = found.score;
            left = &confirmed.residuals;
        }
    }
    Examination {
        dependence: dependence::score(window, left, familiar),
        step: step.as_ref().map(|(found, _)| *found).unwrap_or_default(),
        bend: bend.as_ref().map(|(found, _)| *found).unwrap_or_default(),
    }
}

#[cfg(test)]
pub(crate) mod tests {
    use super::*;
    use crate::drift::family::Family;
    use crate::drift::fit::{FitOutcome, fit};

    /// Normal noise with correlation phi from a fixed seed (splitmix64 and Box–Muller).
    pub(crate) fn noise(seed: u64, n: usize, phi: f64) -> Vec<f64> {
        let mut state = seed;
        let mut uniform = move || {
            state = state.wrapping_add(0x9E37_79B9_7F4A_7C15);
            let mut z = state;
            z = (z ^ (z >> 30)).wrapping_mul(0xBF58_476D_1CE4_E5B9);
            z = (z ^ (z >> 27)).wrapping_mul(0x94D0_49BB_1331_11EB);
            ((z ^ (z >> 31)) >> 11) as f64 / (1u64 << 53) as f64
        };
        let mut last = 0.0;
        (0..n)
            .map(|_| {
                let radius = (-2.0 * (1.0 - uniform()).ln()).sqrt();
                let normal = radius * (2.0 * std::f64::consts::PI * uniform()).cos();
                last = phi * last + (1.0 - phi * phi).sqrt() * normal;
                last
            })
            .collect()
    }

    /// Looks at 200 points of a logarithmic drift with noise of 1 and what is `added`.
    fn check(seed: u64, phi: f64, added: impl Fn(usize) -> f64) -> Examination {
        println!("seed {seed}");
        let x: Vec<f64> = (1..=200).map(|i| f64::from(i) + 20.0).collect();
        let y: Vec<f64> = noise(seed, 200, phi)
            .iter()
            .enumerate()
            .map(|(i, e)| 4.0 * x[i].ln() + e + added(i))
            .collect();
        let FitOutcome::Fitted(curve) = fit(Family::Logarithmic, &x, &y, true) else {
            panic!("a logarithmic curve can be fitted");
        };
        let window = Whitened::new(&x, &y, &curve, 0.3).unwrap();
        examine(&window, 1.0)
    }

    #[test]
    fn a_jump_is_found_dated_and_sized() {
        let found = check(1, 0.3, |i| if i >= 150 { 4.0 } else { 0.0 }).step;
        assert!(found.score > 10.0 && found.index.abs_diff(150) <= 2, "{found:?}");
        assert!((found.size - 4.0).abs() < 1.0, "{found:?}");
    }

    #[test]
    fn a_change_of_rate_is_found_dated_and_sized() {
        let found = check(2, 0.3, |i| 0.1 * i.saturating_sub(120) as f64).bend;
        assert!(found.score > 10.0 && found.index.abs_diff(120) <= 15, "{found:?}");
        assert!((found.size - 0.1).abs() < 0.04, "{found:?}");
    }

    #[test]
    fn growing_dependence_is_told_from_a_jump() {
        let slow = noise(3, 200, 0.95);
        let found = check(4, 0.3, |i| if i >= 60 { 3.0 * slow[i] } else { 0.0 });
        assert!(found.dependence.score > 5.0 && found.dependence.size > 0.7, "{found:?}");
        assert!(found.dependence.score > found.step.score, "{found:?}");
    }

    #[test]
    fn nothing_is_found_where_nothing_is() {
        let scores: Vec<f64> = (10..60)
            .map(|seed| {
                let found = check(seed, 0.3, |_| 0.0);
                found.largest_in_mean().max(found.dependence.score)
            })
            .collect();
        let high = scores.iter().filter(|&&q| q > 4.0).count();
        assert!(high <= 1, "{scores:?}");
    }

    #[test]
    fn a_window_without_scatter_is_an_outcome() {
        let x: Vec<f64> = (1..=60).map(f64::from).collect();
        let FitOutcome::Fitted(curve) = fit(Family::Linear, &x, &[0.0; 60], true) else {
            panic!("a flat line can be fitted");
        };
        assert!(Whitened::new(&x, &[0.0; 60], &curve, 0.3).is_none());
    }
}
