//! One file per kind of structure in residuals, and the examination that runs them all.
//!
//! A look works on the *whitened* window ([`whitened`]): innovations about the curve of the last
//! refit ([`frame`]), in which every change of the mean is an added-column test. The fast part
//! ([`shift`], `step`) is cheap enough for each new point; the slow part (`bend`,
//! `dependence`) runs at a refit, or at once when the fast part warns. Scores are −log10 p of one
//! look's best candidate; how often looks may be wrong by chance is the business of the budget, not
//! of this folder.
//!
//! To add a kind: a file with `look(&Whitened, &mut Workspace) -> Score`, a variant in [`Kind`], a
//! line in [`examine`], a row in the budget's table.

#![expect(
    clippy::needless_range_loop,
    reason = "index notation as in the formulas; several small arrays share one index"
)]

pub mod baseline;
mod bend;
mod confirm;
mod dependence;
pub mod frame;
mod jump;
pub mod resolution;
pub mod shift;
#[cfg(test)]
pub(crate) mod simulate;
mod small;
mod step;
pub mod whitened;

pub use baseline::Baseline;
pub use confirm::Workspace;
pub use frame::{Frame, Framed};
pub use shift::ShiftDetector;
pub use whitened::Whitened;

use crate::drift::tails::probability;
use serde::{Deserialize, Serialize};

/// A fast score above this calls the slow part at once.
const SHIFT_WARNS_ABOVE: f64 = 4.0;
const STEP_WARNS_ABOVE: f64 = 5.5;
/// A confirmed change of the mean above this keeps the refit out of the channel's baseline.
const SUSPICIOUS_ABOVE: f64 = 5.0;
/// Weaker structure is left in the residuals when dependence is judged.
const REMOVE_ABOVE: f64 = 3.5;

/// A kind of structure in residuals.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Hash, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Kind {
    /// The newest readings are off; warns first, names nothing.
    Shift,
    /// A lasting jump.
    Step,
    /// A lasting change of rate.
    Bend,
    /// Neighbours more alike than they used to be.
    Dependence,
}

impl Kind {
    /// Every kind, in the order of the scores.
    pub const ALL: [Kind; 4] = [Kind::Shift, Kind::Step, Kind::Bend, Kind::Dependence];

    /// The name under which people and JSON know the kind; a shift is an unnamed step.
    pub const fn name(self) -> &'static str {
        match self {
            Kind::Shift | Kind::Step => "step",
            Kind::Bend => "bend",
            Kind::Dependence => "dependence",
        }
    }

    /// Returns what [`Score::size`] is measured in, given the channel's unit; empty for a pure
    /// number.
    ///
    /// # Arguments
    /// `unit` — the channel's.
    pub fn size_unit(self, unit: &str) -> String {
        match self {
            Kind::Shift | Kind::Step => unit.to_owned(),
            Kind::Bend => format!("{unit}/d"),
            Kind::Dependence => String::new(),
        }
    }
}

/// What one look found of one kind.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize)]
pub struct Score {
    /// The kind.
    pub kind: Kind,
    /// −log10 p of the best candidate of this look (for a shift: of the mixture statistic).
    pub q: f64,
    /// 10^−q, never 0.
    pub p: f64,
    /// Step: y's unit, signed. Bend: change of slope, y's unit per day. Dependence: correlation at
    /// the median spacing. 0 where nothing was found.
    pub size: f64,
    /// Index in the window of the first point after the change (bend: of the hinge).
    pub index: usize,
    /// Age of that point, days.
    pub x: f64,
}

impl Score {
    pub(crate) fn new(kind: Kind, q: f64, size: f64, index: usize, x: f64) -> Score {
        let q = if q.is_finite() { q.max(0.0) } else { 0.0 };
        let size = if size.is_finite() { size } else { 0.0 };
        Score { kind, q, p: probability(q), size, index, x }
    }

    /// The score of a look without a candidate.
    pub(crate) fn none(kind: Kind, w: &Whitened) -> Score {
        let last = w.len() - 1;
        Score::new(kind, 0.0, 0.0, last, w.points[last].x)
    }
}

/// How deep to look.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Depth {
    /// The fast part only.
    Quick,
    /// The slow part too if the fast part warns; at most each quarter of a refit stride.
    QuickUnlessWarned,
    /// Everything: at each refit.
    Full,
}

/// What one look at the residuals found.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Examination {
    /// The fast layer's warning; size and date are those of the best step.
    pub shift: Score,
    /// The best step.
    pub step: Score,
    /// The best bend; `None` where the look was quick.
    pub bend: Option<Score>,
    /// Dependence beyond the norm; `None` where the look was quick.
    pub dependence: Option<Score>,
    /// Points in the window.
    pub points: usize,
    /// Dependence taken as normal.
    pub phi: f64,
    /// Whether the step is a jump that needs no test: then it is what happened, whatever else scores.
    pub jumped: bool,
    /// Noise about the curve, y's unit.
    pub noise: f64,
    /// Whether a change of the mean is likely enough that the window must not become baseline.
    pub suspicious: bool,
}

impl Examination {
    /// Returns the score of a kind, `None` where this look did not reach it.
    ///
    /// # Arguments
    /// `kind` — of structure.
    pub fn score(&self, kind: Kind) -> Option<&Score> {
        match kind {
            Kind::Shift => Some(&self.shift),
            Kind::Step => Some(&self.step),
            Kind::Bend => self.bend.as_ref(),
            Kind::Dependence => self.dependence.as_ref(),
        }
    }

    /// Whether the slow part ran.
    pub fn is_full(&self) -> bool {
        self.dependence.is_some()
    }

    /// Whether the fast part calls for the slow one.
    pub fn warns(&self) -> bool {
        warns(&self.shift, &self.step)
    }
}

fn warns(shift: &Score, step: &Score) -> bool {
    shift.q > SHIFT_WARNS_ABOVE || step.q > STEP_WARNS_ABOVE
}

/// Examines the residuals of one window.
///
/// # Arguments
/// `w` — the whitened window; `shift` — the channel's running detector; `new_points` — newest
/// points the detector has not yet taken (0 at a refit without a new point); `depth` — how deep;
/// `work` — memory to reuse.
/// # Outcomes
/// One [`Score`] a kind; every number finite.
/// # Numerics
/// Quick O(n p²/2) on top of the window's own O(n p²); confirmations and the slow part O(n p²)
/// each, with up to 24 passes of `exp` where spacing is uneven.
pub fn examine(
    w: &Whitened,
    shift: &mut ShiftDetector,
    new_points: usize,
    depth: Depth,
    work: &mut Workspace,
) -> Examination {
    let q_shift = shift.take(w, new_points);
    let found = step::look(w, work);
    let step = found.score;
    let shift = Score::new(Kind::Shift, q_shift, step.size, step.index, step.x);
    let deep = match depth {
        Depth::Quick => false,
        Depth::QuickUnlessWarned => warns(&shift, &step),
        Depth::Full => true,
    };
    let mut strongest = if found.removed { step.q } else { 0.0 };
    let mut examination = Examination {
        shift,
        step,
        bend: None,
        dependence: None,
        points: w.len(),
        phi: w.frame.phi_baseline,
        jumped: false,
        noise: w.frame.noise,
        suspicious: false,
    };
    if let Some(jump) = jump::look(w, &mut work.scratch) {
        let (q, x) = (examination.step.q, w.points[jump.index].x);
        examination.step = Score::new(Kind::Step, q, jump.size, jump.index, x);
        examination.jumped = true;
    }
    if deep {
        // The best explanation of the mean is taken out before neighbours are compared.
        work.load(w);
        let mut removed_above = REMOVE_ABOVE;
        if found.removed && step.q > removed_above {
            removed_above = step.q;
        } else {
            work.best.clone_from(&work.residuals);
        }
        let bend = bend::look(w, work);
        if bend.q > confirm::CONFIRM_ABOVE && bend.q > removed_above {
            std::mem::swap(&mut work.best, &mut work.removed);
        }
        if bend.q > confirm::CONFIRM_ABOVE {
            strongest = strongest.max(bend.q);
        }
        examination.bend = Some(bend);
        examination.dependence = Some(dependence::look(w, work));
    }
    examination.suspicious = strongest > SUSPICIOUS_ABOVE;
    examination
}

#[cfg(test)]
mod tests;
