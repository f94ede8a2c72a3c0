//! The budget for false alerts: what the whole site may see in a year when nothing is wrong, shared
//! out over channels, kinds and looks. A score must reach the threshold that its share allows.
//!
//! There is no other control of multiplicity: no persistence, no battery-wide correction. Shares of
//! kinds that are not looked at stay unspent, so the law errs to the quiet side.

use crate::drift::serial::count;
use crate::drift::structure::step::smallest_detectable;
use crate::watch::wording;

/// A kind of score that is held against a threshold.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Score {
    /// The fast detector of a lasting change of level; looked at with every point.
    Shift,
    /// The scan for a bend; looked at with every refit.
    Bend,
    /// Dependence beyond the norm; looked at with every refit.
    Dependence,
}

impl Score {
    /// Its share of the budget (own rule; a change by a factor of two moves a threshold by 0.3).
    const fn share(self) -> f64 {
        match self {
            Score::Shift | Score::Bend => 0.20,
            Score::Dependence => 0.05,
        }
    }

    /// Allowance for the search within one look, log10 (own simulation at 60 and at 200 points,
    /// linear in log n between, constant outside).
    fn search(self, points: usize) -> f64 {
        match self {
            Score::Shift => -0.10,
            Score::Bend => 1.15,
            Score::Dependence => {
                let (low, high) = (60.0_f64.log10(), 200.0_f64.log10());
                let place = ((count(points).log10() - low) / (high - low)).clamp(0.0, 1.0);
                0.30 + place * (-0.90 - 0.30)
            }
        }
    }

    /// How much the threshold rises per unit of usual correlation above 0.3 (own simulation).
    const fn rise(self) -> f64 {
        match self {
            Score::Bend => 1.8,
            Score::Shift | Score::Dependence => 0.0,
        }
    }
}

/// A score this far below its threshold still keeps an open alert open.
pub const NEAR: f64 = 1.0;

/// The site's budget and among how many channels it is shared.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Budget {
    /// False alerts that the whole site may see in a year; > 0.
    pub false_alerts_per_year: f64,
    /// Channels that share it; ≥ 1.
    pub channels: usize,
}

/// How often a channel is looked at.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Pace {
    /// Points in the window.
    pub points: usize,
    /// Points from one refit to the next, ≥ 1.
    pub stride: f64,
    /// Points in a year.
    pub points_per_year: f64,
    /// The channel's usual correlation of neighbours.
    pub phi: f64,
}

impl Budget {
    /// Returns the score that counts as an alert.
    ///
    /// threshold = log10(A/(w s)) + o(n) + slope (phi − 0.3), with A the points per false alert that
    /// one channel may have, w the kind's share, s the points from look to look.
    pub fn threshold(&self, score: Score, pace: &Pace) -> f64 {
        let points_per_alert =
            count(self.channels.max(1)) * pace.points_per_year / self.false_alerts_per_year;
        let stride = if score == Score::Shift { 1.0 } else { pace.stride.max(1.0) };
        (points_per_alert / (score.share() * stride)).max(1.0).log10()
            + score.search(pace.points)
            + score.rise() * (pace.phi - 0.3)
    }

    /// What the budget means, for people.
    pub fn words(&self, points: usize) -> String {
        let years = count(self.channels.max(1)) / self.false_alerts_per_year;
        format!(
            "with {} channels, each may raise one false alert in {} years; the smallest step that \
             can be seen at {points} points is {} times its noise",
            self.channels,
            wording::number(years, false),
            wording::number(smallest_detectable(points, 0.3), false)
        )
    }
}

/// What the search within one look is worth when kinds are held against each other for the name
/// (log10, own simulation): step, bend, dependence.
pub fn search_of_name(points: usize) -> [f64; 3] {
    [if points <= 100 { 1.2 } else { 1.6 }, 0.85, -0.5]
}

#[cfg(test)]
mod tests {
    use super::*;

    fn pace() -> Pace {
        Pace { points: 200, stride: 20.0, points_per_year: 8760.0, phi: 0.3 }
    }

    #[test]
    fn thresholds_of_one_channel_and_one_alert_a_year_are_those_of_the_simulation() {
        // n = 200, a look every 20 hourly points, one a year: shift 4.54, bend 4.49.
        let budget = Budget { false_alerts_per_year: 1.0, channels: 1 };
        assert!((budget.threshold(Score::Shift, &pace()) - 4.54).abs() < 0.01);
        assert!((budget.threshold(Score::Bend, &pace()) - 4.49).abs() < 0.01);
    }

    #[test]
    fn ten_times_the_channels_raise_every_threshold_by_one() {
        let few = Budget { false_alerts_per_year: 12.0, channels: 40 };
        let many = Budget { false_alerts_per_year: 12.0, channels: 400 };
        for score in [Score::Shift, Score::Bend, Score::Dependence] {
            let rise = many.threshold(score, &pace()) - few.threshold(score, &pace());
            assert!((rise - 1.0).abs() < 1e-12, "{score:?}");
        }
    }

    #[test]
    fn the_budget_reads_plainly() {
        let budget = Budget { false_alerts_per_year: 12.0, channels: 400 };
        assert_eq!(
            budget.words(200),
            "with 400 channels, each may raise one false alert in 33.3 years; the smallest step \
             that can be seen at 200 points is 1.67 times its noise"
        );
    }
}
