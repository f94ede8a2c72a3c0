//! What is usual for a channel: the correlation of neighbouring residuals, learned late and slowly.
//!
//! Late: a refit's estimate counts only when the window has moved on by its whole length, so that the
//! structure being tested has not contaminated the norm. Slowly: over several windows.

use crate::drift::serial::count;
use serde::{Deserialize, Serialize};
use std::collections::VecDeque;

/// Correlation assumed before anything is known, and its weight in points.
const PRIOR: (f64, f64) = (0.3, 100.0);
/// Estimates waiting to become old enough; when full, the oldest is dropped unlearned.
const WAITING_MAX: usize = 512;
/// The norm stays within these.
const PHI_RANGE: (f64, f64) = (0.0, 0.9);

/// The learned norm of one channel.
#[derive(Clone, Debug, Default, PartialEq, Serialize, Deserialize)]
pub struct Baseline {
    /// (index of the newest point, points since the refit before, estimate).
    waiting: VecDeque<(u64, f64, f64)>,
    weight: f64,
    sum: f64,
}

impl Baseline {
    /// Takes in a refit's estimate, unless the window is no example of the norm.
    pub fn learn(&mut self, newest: u64, stride: f64, phi: f64, exemplary: bool) {
        if exemplary && phi.is_finite() {
            if self.waiting.len() == WAITING_MAX {
                self.waiting.pop_front();
            }
            self.waiting.push_back((newest, stride, phi));
        }
    }

    /// Absorbs what has become old enough: seen at least `points` points ago.
    pub fn absorb(&mut self, newest: u64, points: usize) {
        let memory = (5.0 * count(points)).max(1000.0);
        while let Some(&(index, stride, phi)) = self.waiting.front()
            && index + u64::try_from(points).unwrap_or(u64::MAX) <= newest
        {
            self.waiting.pop_front();
            let keep = (-stride / memory).exp();
            let gained = if self.weight > 0.0 { stride } else { count(points) };
            self.weight = self.weight * keep + gained;
            self.sum = self.sum * keep + gained * phi;
        }
    }

    /// Returns the norm; while little is known, the present window's own estimate fills in.
    pub fn phi(&self, points: usize, present: f64) -> f64 {
        let n = count(points);
        let fill = if self.weight > 0.0 { (2.0 * n - self.weight).clamp(0.0, n) } else { n };
        let total = PRIOR.1 + self.weight + fill;
        ((PRIOR.0 * PRIOR.1 + self.sum + fill * present) / total).clamp(PHI_RANGE.0, PHI_RANGE.1)
    }

    /// How well the norm is known, 0…1: the older weight over two windows.
    pub fn familiar(&self, points: usize) -> f64 {
        (self.weight / (2.0 * count(points))).min(1.0)
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn an_estimate_counts_only_after_a_whole_window() {
        let mut baseline = Baseline::default();
        baseline.learn(100, 10.0, 0.8, true);
        baseline.absorb(199, 100);
        assert!(baseline.familiar(100).abs() < f64::EPSILON);
        baseline.absorb(200, 100);
        assert!(baseline.familiar(100) > 0.4);
    }

    #[test]
    fn the_norm_goes_from_the_prior_to_what_was_seen() {
        let mut baseline = Baseline::default();
        assert!((baseline.phi(100, 0.3) - 0.3).abs() < 1e-12);
        for k in 0..400 {
            baseline.learn(k * 10, 10.0, 0.7, true);
            baseline.absorb(k * 10, 100);
        }
        assert!((baseline.phi(100, 0.0) - 0.7).abs() < 0.06);
    }

    #[test]
    fn a_window_with_structure_teaches_nothing() {
        let mut baseline = Baseline::default();
        baseline.learn(0, 10.0, 0.9, false);
        baseline.absorb(1000, 100);
        assert!(baseline.familiar(100).abs() < f64::EPSILON);
    }
}
