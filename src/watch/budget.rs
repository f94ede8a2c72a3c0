//! The budget of false alerts: a site says how many it accepts in a year when nothing is wrong; each
//! channel and each kind of structure gets its share, and from the share follows a threshold.
//!
//! The law: threshold = log10(A / (w s)) + o(n) + slope (phi − 0.3), where A is points per budgeted
//! false alert of one channel, w the kind's share, s the points between its looks, o(n) the search
//! inside one look and the slope what dependence adds. Nothing else corrects for multiplicity: the
//! budget is already split. Offsets and slopes are our own, measured by simulation on series in
//! which nothing is wrong (achieved false alerts 0.2 to 1.2 of the budget for n ≥ 60).

use crate::drift::structure::{Examination, Kind, Score};
use serde::{Deserialize, Serialize};

/// A score up to this far below its threshold keeps an open alert open (see
/// [`Budget::keeps_open`]); an alert closes after every kind stayed lower …
pub const CLOSE_BELOW: f64 = 1.0;
/// A score that an honest window reaches once in so many of its lengths keeps no alert open.
const WINDOWS_BY_CHANCE: f64 = 2.0;
/// The first name stays when no kind is within this of its threshold at the renaming.
pub const RENAME_WITHIN: f64 = 0.5;
/// Until it is settled, a name changes only for one with so much more evidence (own rule: ten times;
/// near-equal explanations would otherwise take turns).
pub const RENAME_AHEAD: f64 = 1.0;
/// A settled break that nothing can show any more gives way to another structure that exceeds its
/// threshold by so much (own rule: ten times as unlikely).
pub const TELL_ANEW_ABOVE: f64 = 1.0;
/// No threshold is set for more false alerts than one in so many points: the offsets were not
/// measured there, and a rarely read channel would otherwise alert on next to nothing.
pub const POINTS_PER_FALSE_ALERT_MIN: f64 = 100.0;
/// Nor for fewer than one in so many points; beyond, only the shift has a theorem behind it.
pub const POINTS_PER_FALSE_ALERT_MAX: f64 = 1e9;
/// Dependence at which the offsets were measured.
const PHI_MEASURED: f64 = 0.3;
/// Dependence assumed where words speak of channels in general.
const PHI_TYPICAL: f64 = 0.3;

/// … for this share of a window: points to wait before an alert closes.
pub const fn close_after_points(window_points: usize) -> usize {
    window_points / 2
}

/// Points after opening within which a better name replaces the first.
pub const fn rename_within_points(window_points: usize) -> usize {
    window_points / 4
}

/// What the law says of one kind; rows for kinds not yet looked at are missing, their shares
/// (spread .15, outliers .10, companion .10, cycle .15, stuck .05) stay unspent.
struct Row {
    /// Share of the budget; `None`: the kind dates and names, but never raises an alert.
    share: Option<f64>,
    /// Offsets at 60 and at 200 points; linear in log10 n from 30 to 200, constant outside.
    offset: [f64; 2],
    slope: f64,
    /// Looked at only at refits.
    slow: bool,
}

impl Row {
    /// Points from one look of this kind to its next.
    fn looks_apart(&self, pace: &Pace) -> f64 {
        if self.slow { pace.stride_points.max(1) as f64 } else { 1.0 }
    }

    /// What the search inside one look and the dependence add.
    fn offset(&self, pace: &Pace, phi_b: f64) -> f64 {
        interpolated(self.offset, pace.window_points) + self.slope * (phi_b - PHI_MEASURED)
    }
}

const fn row(kind: Kind) -> Row {
    match kind {
        // The theorem gives offset 0; simulation leaves slack, of which 0.1 is used.
        Kind::Shift => Row { share: Some(0.20), offset: [-0.1, -0.1], slope: 0.0, slow: false },
        Kind::Step => Row { share: None, offset: [0.75, 0.95], slope: 1.5, slow: false },
        Kind::Bend => Row { share: Some(0.20), offset: [1.15, 1.15], slope: 1.8, slow: true },
        Kind::Dependence => Row { share: Some(0.05), offset: [0.3, -0.9], slope: 0.0, slow: true },
    }
}

/// How many false alerts are acceptable, and among how many channels.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize)]
pub struct Budget {
    /// Accepted false alerts of the whole site in a year; > 0.
    pub false_alerts_per_year_site: f64,
    /// Channels that share them; at least 1.
    pub channels: usize,
}

/// How a channel is looked at: what a threshold depends on beside the kind.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize)]
pub struct Pace {
    /// Points in the window.
    pub window_points: usize,
    /// New points between refits; at least 1.
    pub stride_points: usize,
    /// New points in a year.
    pub points_per_year: f64,
}

/// One kind's score against its threshold.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize)]
pub struct Judged {
    /// What was found.
    pub score: Score,
    /// Its threshold; `None` for a kind that never raises.
    pub threshold: Option<f64>,
    /// The score from which it keeps an open alert open; `None` as above.
    pub keeps_open: Option<f64>,
}

impl Judged {
    /// How far the score lies above (+) or below (−) the threshold.
    pub fn margin(&self) -> Option<f64> {
        self.threshold.map(|t| self.score.q - t)
    }

    /// Whether the score keeps an open alert open.
    pub fn holds_open(&self) -> bool {
        self.keeps_open.is_some_and(|t| self.score.q >= t)
    }
}

/// What the budget says of one look.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Judgement {
    /// Every kind this look reached, in the order of [`Kind::ALL`].
    pub kinds: Vec<Judged>,
    /// The kind farthest above its threshold, if any is.
    pub crossed: Option<Kind>,
    /// The largest margin over kinds that raise.
    pub margin: f64,
    /// What a crossing would be called (see [`name`]).
    pub name: Kind,
}

impl Judgement {
    /// Whether an open alert must stay open by this look.
    pub fn holds_open(&self) -> bool {
        self.kinds.iter().any(Judged::holds_open)
    }
}

impl Budget {
    /// Returns points per budgeted false alert of one channel, A = channels · points per year /
    /// budget, held within documented limits.
    pub fn points_per_false_alert(&self, points_per_year: f64) -> f64 {
        let a = self.channels.max(1) as f64 * points_per_year / self.false_alerts_per_year_site;
        if a.is_nan() {
            return POINTS_PER_FALSE_ALERT_MIN;
        }
        a.clamp(POINTS_PER_FALSE_ALERT_MIN, POINTS_PER_FALSE_ALERT_MAX)
    }

    /// Returns the score above which a kind raises an alert.
    ///
    /// # Arguments
    /// `kind`; `pace` — how the channel is looked at; `phi_b` — dependence taken as normal, 0 … 0.9.
    /// # Outcomes
    /// `None` for a kind that only names. The score is compared as it is: the slope is inside.
    pub fn threshold(&self, kind: Kind, pace: &Pace, phi_b: f64) -> Option<f64> {
        let row = row(kind);
        let a = self.points_per_false_alert(pace.points_per_year);
        Some((a / (row.share? * row.looks_apart(pace))).log10() + row.offset(pace, phi_b))
    }

    /// Returns the score from which a kind keeps an open alert open: [`CLOSE_BELOW`] under its
    /// threshold, but not so low that an honest window would reach it by chance within
    /// twice its length; else an alert under a generous budget would never close.
    ///
    /// # Arguments
    /// As [`Budget::threshold`].
    /// # Outcomes
    /// `None` for a kind that only names; never above the threshold.
    pub fn keeps_open(&self, kind: Kind, pace: &Pace, phi_b: f64) -> Option<f64> {
        let threshold = self.threshold(kind, pace, phi_b)?;
        let row = row(kind);
        let looks = WINDOWS_BY_CHANCE * pace.window_points as f64 / row.looks_apart(pace);
        let by_chance = looks.max(1.0).log10() + row.offset(pace, phi_b);
        Some((threshold - CLOSE_BELOW).max(by_chance).min(threshold))
    }

    /// Judges one look: what crosses, by how much, and what to call it.
    pub fn judge(&self, found: &Examination, pace: &Pace) -> Judgement {
        let mut kinds = Vec::with_capacity(Kind::ALL.len());
        let mut best: Option<(Kind, f64)> = None;
        for kind in Kind::ALL {
            let Some(score) = found.score(kind) else { continue };
            let threshold = self.threshold(kind, pace, found.phi);
            let keeps_open = self.keeps_open(kind, pace, found.phi);
            let judged = Judged { score: *score, threshold, keeps_open };
            kinds.push(judged);
            if let Some(margin) = judged.margin()
                && best.is_none_or(|(_, m)| margin > m)
            {
                best = Some((kind, margin));
            }
        }
        let (kind, margin) = best.expect("every look scores the shift, and the shift has a share");
        Judgement {
            kinds,
            crossed: (margin >= 0.0).then_some(kind),
            margin,
            name: name(found).unwrap_or(Kind::Step),
        }
    }

    /// Says for people what the budget means.
    ///
    /// # Arguments
    /// `window_points` — points in a full window.
    pub fn share_words(&self, window_points: usize) -> String {
        let channels = self.channels.max(1);
        let years = channels as f64 / self.false_alerts_per_year_site;
        let each = if years >= 1.5 {
            format!("one false alert in {} years", figures(years))
        } else {
            format!("{} false alerts a year", figures(1.0 / years))
        };
        let who = if channels == 1 {
            format!("with 1 channel, it may raise {each}")
        } else {
            format!("with {channels} channels, each may raise {each}")
        };
        let step = smallest_step(window_points, PHI_TYPICAL);
        format!(
            "{who} when nothing is wrong; the smallest step that can be seen at {window_points} \
             points is {} times its noise",
            figures(step)
        )
    }
}

/// Returns the kind that best explains one look: the largest search-adjusted score q − omega.
///
/// # Outcomes
/// `None` when the look holds no kind that names; a shift never names.
pub fn name(found: &Examination) -> Option<Kind> {
    if found.jumped {
        return Some(Kind::Step);
    }
    let mut best: Option<(Kind, f64)> = None;
    for candidate in Kind::ALL.into_iter().filter_map(|k| Some((k, evidence(found, k)?))) {
        if best.is_none_or(|(_, v)| candidate.1 > v) {
            best = Some(candidate);
        }
    }
    best.map(|(kind, _)| kind)
}

/// Returns a kind's search-adjusted score q − omega, by which names are weighed against each other.
///
/// # Outcomes
/// `None` when the look did not reach the kind, or the kind does not name.
pub fn evidence(found: &Examination, kind: Kind) -> Option<f64> {
    let omega = naming_allowance(kind, found.points)?;
    found.score(kind).map(|score| score.q - omega)
}

/// omega: log10 of the number of independent candidates inside one look, for naming only.
fn naming_allowance(kind: Kind, points: usize) -> Option<f64> {
    match kind {
        Kind::Shift => None,
        Kind::Step => Some(if points > 100 { 1.6 } else { 1.2 }),
        Kind::Bend => Some(0.85),
        Kind::Dependence => Some(-0.5),
    }
}

/// Estimates the smallest step, in noise sigmas, that a refitted curve leaves visible:
/// 5 √(12 (1 + phi)/(n (1 − phi))).
///
/// # Arguments
/// `window_points` — n; `phi` — correlation of neighbours, below 1.
/// # Source
/// Own rule: the information that a step keeps once a smooth curve is fitted across it is at most
/// n (1 − phi)/(12 (1 + phi)) per squared sigma; five standard errors are asked for.
pub fn smallest_step(window_points: usize, phi: f64) -> f64 {
    let phi = phi.clamp(0.0, 0.95);
    5.0 * (12.0 * (1.0 + phi) / (window_points.max(1) as f64 * (1.0 - phi))).sqrt()
}

/// Linear in log10 n through 60 and 200 points, carried on down to 30, constant outside.
fn interpolated(offset: [f64; 2], points: usize) -> f64 {
    let points = (points as f64).clamp(30.0, 200.0);
    let at = (points / 60.0).log10() / (200.0_f64 / 60.0).log10();
    offset[0] + at * (offset[1] - offset[0])
}

/// Two figures, no more than people need.
fn figures(v: f64) -> String {
    if v >= 9.95 { format!("{v:.0}") } else { format!("{v:.1}") }
}

#[cfg(test)]
mod tests;
