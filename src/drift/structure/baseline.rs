//! What is normal for a channel: the dependence of its noise, learned over a memory much longer
//! than the window and delayed by one window, so that what is under test has not yet been learned.

use super::frame::PHI_BASE_MAX;
use serde::{Deserialize, Serialize};
use std::collections::VecDeque;

/// Dependence taken as normal before anything is known, and its weight in points.
const PRIOR_PHI: f64 = 0.3;
const PRIOR_WEIGHT: f64 = 100.0;
/// Memory in points: so many windows, and at least so many points.
const MEMORY_WINDOWS: f64 = 5.0;
const MEMORY_POINTS_MIN: f64 = 1000.0;
/// The current window fills in until the past weighs so many windows.
const FILL_IN_WINDOWS: f64 = 2.0;
/// Most refits that wait to be absorbed; closer ones are merged.
pub const PENDING_MAX: usize = 96;

/// One refit's dependence, waiting until its window has passed.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
struct Pending {
    newest: u64,
    stride: f64,
    weight: f64,
    phi: f64,
    suspicious: bool,
}

/// A channel's memory of normal dependence and noise. Bounded: [`PENDING_MAX`] refits.
///
/// Model: phi_b = (100·0.3 + Σ w_i phi_i + w_now phi_now)/(100 + Σ w_i + w_now), w_i decaying as
/// exp(−points/memory), memory = max(5 n, 1000) points; w_now fills Σ w_i up to 2 n, at most n.
///
/// # Source
/// Exponentially weighted mean, S. W. Roberts, Technometrics 1, 1959; delay, prior and memory are
/// our own, justified by simulation.
#[derive(Clone, Debug, Default, PartialEq, Serialize, Deserialize)]
pub struct Baseline {
    pending: VecDeque<Pending>,
    weight: f64,
    sum: f64,
    last_phi: Option<f64>,
    learned_any: bool,
    frozen: bool,
    /// Noise is never taken below this, y's unit; set at the first refit, 0 before.
    pub noise_floor: f64,
}

impl Baseline {
    /// A channel of which nothing is known.
    pub fn new() -> Baseline {
        Baseline::default()
    }

    /// The dependence last taken as normal; before any refit, that of an unknown channel.
    pub fn phi(&self) -> f64 {
        self.last_phi.unwrap_or(PRIOR_PHI)
    }

    /// Absorbs refits older than a window and returns the dependence to take as normal now.
    ///
    /// # Arguments
    /// `newest` — running number of the newest point; `points` — n, points in the window;
    /// `phi_window` — this window's own phi.
    /// # Outcomes
    /// phi in [0, 0.9]; while frozen, the last one from before.
    pub fn phi_at_refit(&mut self, newest: u64, points: usize, phi_window: f64) -> f64 {
        if self.frozen
            && let Some(phi) = self.last_phi
        {
            return phi;
        }
        let n = points as f64;
        let memory = (MEMORY_WINDOWS * n).max(MEMORY_POINTS_MIN);
        while let Some(old) = self.pending.front()
            && old.newest.saturating_add(points as u64) <= newest
        {
            if !old.suspicious {
                let decay = (-old.stride / memory).exp();
                self.weight = self.weight * decay + old.weight;
                self.sum = self.sum * decay + old.weight * old.phi;
            }
            self.pending.pop_front();
        }
        let fill = (FILL_IN_WINDOWS * n - self.weight).clamp(0.0, n);
        let total = PRIOR_WEIGHT + self.weight + fill;
        let phi = (PRIOR_WEIGHT * PRIOR_PHI + self.sum + fill * phi_window) / total;
        let phi = if phi.is_finite() { phi.clamp(0.0, PHI_BASE_MAX) } else { PRIOR_PHI };
        self.last_phi = Some(phi);
        phi
    }

    /// Puts a refit in line to be learned from once its window has passed.
    ///
    /// # Arguments
    /// `newest`, `points` — as at the refit; `stride` — new points since the refit before;
    /// `phi_window` — this window's own phi; `suspicious` — from the examination: never learned.
    pub fn learn(
        &mut self,
        newest: u64,
        points: usize,
        stride: usize,
        phi_window: f64,
        suspicious: bool,
    ) {
        if self.frozen || !phi_window.is_finite() {
            return;
        }
        // The first window is all new; later ones bring only their stride.
        let stride = if self.learned_any { stride } else { points } as f64;
        self.learned_any = true;
        let room = points as u64 / (PENDING_MAX as u64 - 1) + 1;
        if let Some(last) = self.pending.back_mut()
            && newest.saturating_sub(last.newest) < room
        {
            let weight = last.weight + stride;
            if weight > 0.0 {
                last.phi = (last.phi * last.weight + phi_window * stride) / weight;
            }
            last.weight = weight;
            last.stride += stride;
            last.suspicious |= suspicious;
            return;
        }
        if self.pending.len() == PENDING_MAX {
            self.pending.pop_front();
        }
        self.pending.push_back(Pending {
            newest,
            stride,
            weight: stride,
            phi: phi_window,
            suspicious,
        });
    }

    /// Holds the baseline while an alert stands; what waits may hold its beginning and is dropped.
    pub fn freeze(&mut self) {
        if !self.frozen {
            self.pending.clear();
            self.frozen = true;
        }
    }

    /// Learning goes on.
    pub fn thaw(&mut self) {
        self.frozen = false;
    }

    /// Whether an alert holds the baseline.
    pub fn is_frozen(&self) -> bool {
        self.frozen
    }

    /// Returns how far the baseline rests on the channel's own past, 0 … 1.
    ///
    /// # Arguments
    /// `points` — n, points in the window.
    pub fn settled(&self, points: usize) -> f64 {
        (self.weight / (FILL_IN_WINDOWS * points.max(1) as f64)).min(1.0)
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// (phi of the window, baseline after it) at refits each 6 points, n = 60: independent double
    /// implementation (Python, same method, own code).
    const DOUBLE: [(f64, f64); 22] = [
        (0.2128021446464776, 0.2673008042424291),
        (0.2090563416815842, 0.2658961281305941),
        (0.34205196686229167, 0.3157694875733594),
        (0.30806961290691576, 0.3030261048400934),
        (0.31226164252793415, 0.3045981159479753),
        (0.29857789232518017, 0.2994667096219426),
        (0.27407743296480674, 0.29027903736180255),
        (0.2317535690552963, 0.2744075883957361),
        (0.26271596959803767, 0.28601848859926415),
        (0.2783166404083226, 0.291868740153121),
        (0.38691390673230686, 0.29992255946694124),
        (0.3805121207212104, 0.29377416397339584),
        (0.2644400480944259, 0.26730384448587263),
        (0.21145101256219292, 0.25817352906966157),
        (0.14963974724069898, 0.2503095863885878),
        (0.15725001441598735, 0.2552896174968361),
        (0.1684199727929225, 0.2596308729814022),
        (0.23441966646450627, 0.2675345005698211),
        (0.1091271843094919, 0.25928530619924767),
        (0.028583161953761215, 0.25970241311797504),
        (-0.05190886390370889, 0.2669705003964708),
        (-0.059864226659981354, 0.2774705955538674),
    ];

    #[test]
    fn baseline_agrees_with_the_double() {
        let mut baseline = Baseline::new();
        for (k, (phi, expected)) in DOUBLE.into_iter().enumerate() {
            let newest = 59 + 6 * k as u64;
            let got = baseline.phi_at_refit(newest, 60, phi);
            assert!((got - expected).abs() < 1e-12, "refit {k}: {got} against {expected}");
            baseline.learn(newest, 60, 6, phi, false);
        }
    }

    fn learned(baseline: &mut Baseline, from: u64, refits: u64, phi: f64, suspicious: bool) -> f64 {
        let mut last = 0.0;
        for k in 0..refits {
            last = baseline.phi_at_refit(from + 20 * k, 200, phi);
            baseline.learn(from + 20 * k, 200, 20, phi, suspicious);
        }
        last
    }

    #[test]
    fn dependence_under_test_is_not_learned_within_a_window() {
        let mut baseline = Baseline::new();
        let before = learned(&mut baseline, 200, 200, 0.3, false);
        let during = learned(&mut baseline, 4200, 10, 0.9, false);
        assert!((before - 0.3).abs() < 1e-9 && (during - 0.3).abs() < 0.01, "{before} {during}");
        assert!(learned(&mut baseline, 4400, 200, 0.9, false) > 0.8);
    }

    #[test]
    fn suspicious_refits_are_never_learned() {
        let mut baseline = Baseline::new();
        learned(&mut baseline, 200, 200, 0.3, false);
        assert!(learned(&mut baseline, 4200, 200, 0.9, true) < 0.31);
    }

    #[test]
    fn frozen_baseline_stays_and_forgets_what_waits() {
        let mut baseline = Baseline::new();
        let before = learned(&mut baseline, 200, 200, 0.3, false);
        baseline.freeze();
        let frozen = learned(&mut baseline, 4200, 100, 0.9, false);
        assert_eq!(before.to_bits(), frozen.to_bits());
        baseline.thaw();
        let after = baseline.phi_at_refit(9000, 200, 0.3);
        assert!(!baseline.is_frozen() && (after - 0.3).abs() < 0.01, "{after}");
    }

    #[test]
    fn waiting_refits_are_bounded() {
        let mut baseline = Baseline::new();
        for k in 0..50_000_u64 {
            let phi = baseline.phi_at_refit(k, 5000, 0.4);
            assert!((0.29..0.41).contains(&phi));
            baseline.learn(k, 5000, 1, 0.4, false);
            assert!(baseline.pending.len() <= PENDING_MAX);
        }
        assert!(baseline.settled(5000) > 0.9);
    }
}
