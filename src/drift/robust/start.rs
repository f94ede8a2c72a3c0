//! Where the watch's refinement starts: with the one nonlinear coefficient given, the rest is a line
//! fitted in closed form; the nonlinear one is found on a grid, or known from the last time.

use crate::drift::family::{Coefficients, Family};
use crate::drift::lanes::{about, dot, sum};
use crate::drift::least_squares::solve_columns;
use crate::drift::outcome::{EXPONENT, FitOutcome, Undetermined};
use crate::drift::robust::Target;
use crate::drift::robust::shape::exponentials;
use crate::drift::serial::count;
use crate::drift::workspace::refill;

/// Grid step of the exponent; must divide the width of its range.
const EXPONENT_STEP: f64 = 0.5;
/// Bounds of tau as shares of the range of ages; the lower one is raised where the second age lies
/// further off.
const TAU: (f64, f64) = (0.02, TAU_MAX);
/// Upper bound of tau as a share of the range of ages.
pub(crate) const TAU_MAX: f64 = 10.0;
/// tau is not looked for below this share of the distance to the second age: there only the oldest
/// readings differ from the rest, by e^−15 and less.
const SECOND_AGE_SHARE: f64 = 1.0 / 15.0;
/// A start keeps so far from exponent 0, where c and a run off to infinity.
const EXPONENT_START_MIN: f64 = 0.01;
/// Golden-section steps where the best grid point is at an edge; each keeps 0.618 of the bracket.
const GOLDEN_STEPS: usize = 8;
const GOLDEN: f64 = 0.618_033_988_749_894_9;
/// Most grid points: 25 exponents, 19 time constants.
const GRID_MAX: usize = 32;

/// A grid: the nonlinear coefficient (tau: its logarithm), and what the line there explains.
struct Grid {
    points: [(f64, f64); GRID_MAX],
    filled: usize,
}

impl Grid {
    fn new() -> Grid {
        Grid { points: [(0.0, 0.0); GRID_MAX], filled: 0 }
    }

    fn push(&mut self, k: f64, explained: f64) {
        self.points[self.filled] = (k, explained);
        self.filled += 1;
    }

    /// Index of the first best point.
    fn best(&self) -> usize {
        (1..self.filled)
            .fold(0, |best, i| if self.points[i].1 > self.points[best].1 { i } else { best })
    }
}

impl Target<'_> {
    /// Least squares for a family linear in its coefficients.
    pub(super) fn line(&mut self) -> Result<Coefficients, FitOutcome> {
        let p = self.family.parameter_count();
        let solved = solve_columns(&self.columns[..p], self.y, self.scratch);
        Ok(solved.ok_or(FitOutcome::Entangled)?.coefficients)
    }

    /// ln|y| against ln x, a line, transformed back. None when y changes sign or touches 0.
    pub(super) fn log_log_line(&mut self) -> Option<Coefficients> {
        let sign = self.raw[0].signum();
        if !self.raw.iter().all(|v| v * sign > 0.0) {
            return None;
        }
        refill(self.clipped, self.raw.iter().map(|v| v.abs().ln()));
        let n = count(self.raw.len());
        let (age, level) = (sum(self.ages) / n, sum(self.clipped) / n);
        self.clipped.iter_mut().for_each(|l| *l -= level);
        let (squares, products) = about(self.ages, age, self.clipped);
        let slope = products / squares;
        let theta = [sign * (level - slope * age).exp(), slope, 0.0, 0.0];
        (theta[0].is_finite() && slope.is_finite()).then_some(theta)
    }

    /// The coefficients with the smallest sum of squares, nearly, or why there are none.
    ///
    /// # Numerics
    /// On a grid on which each power or exponential follows from another by multiplication; then a
    /// parabola through the best point and its neighbours.
    pub(super) fn project(&mut self) -> Result<Coefficients, FitOutcome> {
        let mean = self.centred();
        let total = dot(self.clipped, self.clipped);
        if self.clipped.iter().all(|v| v.abs() <= 0.0) {
            return Err(FitOutcome::WeaklyDetermined(Undetermined::NoChange));
        }
        if !(total.is_finite() && total > 0.0) {
            return Err(FitOutcome::NonFinite);
        }
        let grid = match self.family {
            Family::Exponential => self.time_constants(),
            _ => self.exponents(),
        };
        let place = self.best_place(&grid);
        let k = match self.family {
            Family::OffsetPower if place.abs() < EXPONENT_START_MIN => {
                EXPONENT_START_MIN.copysign(place)
            }
            Family::Exponential => -(-place).exp(),
            _ => place,
        };
        Ok(self.coefficients(k, mean))
    }

    /// Returns the coefficients with the smallest sum of squares with the nonlinear one given.
    ///
    /// # Arguments
    /// `k` — the nonlinear coefficient of the shape, as `Target::nonlinear` gives it.
    pub(super) fn project_at(&mut self, k: f64) -> Coefficients {
        let mean = self.centred();
        self.coefficients(k, mean)
    }

    /// Puts y less its mean, where the family has a constant, in place of clipped residuals.
    fn centred(&mut self) -> f64 {
        let n = count(self.raw.len());
        let mean = if self.family == Family::Power { 0.0 } else { sum(self.raw) / n };
        refill(self.clipped, self.raw.iter().map(|v| v - mean));
        mean
    }

    fn exponents(&mut self) -> Grid {
        let most = self.ages.iter().copied().fold(f64::NEG_INFINITY, f64::max);
        // Powers of the age's share of the largest age: none overflows.
        refill(&mut self.scratch[0], self.ages.iter().map(|l| (EXPONENT.0 * (l - most)).exp()));
        refill(&mut self.scratch[1], self.ages.iter().map(|l| (EXPONENT_STEP * (l - most)).exp()));
        let mut grid = Grid::new();
        let mut k = EXPONENT.0;
        while k < EXPONENT.1 + 0.5 * EXPONENT_STEP {
            let explained = if self.family == Family::OffsetPower && k == 0.0 {
                // Between x^−b and x^b lies ln x.
                self.explained(self.ages)
            } else {
                self.explained(&self.scratch[0])
            };
            grid.push(k, explained);
            let [column, factor, ..] = &mut *self.scratch;
            column.iter_mut().zip(&*factor).for_each(|(c, f)| *c *= f);
            k += EXPONENT_STEP;
        }
        grid
    }

    /// e^(−u/tau) for tau halved is its square: two rows of squares, √2 apart.
    fn time_constants(&mut self) -> Grid {
        let second = self.ages.iter().copied().filter(|&u| u > 0.0).fold(f64::INFINITY, f64::min);
        let low = TAU.0.max(SECOND_AGE_SHARE * second).ln();
        let mut k = TAU.1.ln();
        for j in 0..2 {
            let rate = -TAU.1.recip() * if j == 0 { 1.0 } else { std::f64::consts::SQRT_2 };
            refill(&mut self.scratch[j], self.ages.iter().map(|u| (rate * u).exp()));
        }
        let mut grid = Grid::new();
        let half = 0.5 * std::f64::consts::LN_2;
        while k > low + 0.5 * half && grid.filled < GRID_MAX - 1 {
            let column = grid.filled % 2;
            grid.push(k, self.explained(&self.scratch[column]));
            self.scratch[column].iter_mut().for_each(|e| *e *= *e);
            k -= half;
        }
        grid.push(low, self.explained_at(low));
        grid
    }

    /// The place of the best point, between its neighbours.
    fn best_place(&mut self, grid: &Grid) -> f64 {
        let best = grid.best();
        if best == 0 || best + 1 == grid.filled {
            return self.golden(grid, best);
        }
        let [(k0, e0), (k1, e1), (k2, e2)] =
            [grid.points[best - 1], grid.points[best], grid.points[best + 1]];
        // Vertex of the parabola through three points.
        let (left, right) = ((e1 - e0) / (k1 - k0), (e2 - e1) / (k2 - k1));
        let vertex = 0.5 * (k0 + k1 - left * (k2 - k0) / (right - left));
        if vertex.is_finite() { vertex.clamp(k0.min(k2), k0.max(k2)) } else { k1 }
    }

    /// Golden section between an edge and its neighbour.
    fn golden(&mut self, grid: &Grid, edge: usize) -> f64 {
        let inner = if edge == 0 { 1 } else { edge - 1 };
        let (mut a, mut b) = (grid.points[inner].0, grid.points[edge].0);
        let (mut c, mut d) = (b - GOLDEN * (b - a), a + GOLDEN * (b - a));
        let (mut at_c, mut at_d) = (self.explained_at(c), self.explained_at(d));
        for _ in 0..GOLDEN_STEPS {
            if at_c > at_d {
                (b, d, at_d) = (d, c, at_c);
                c = b - GOLDEN * (b - a);
                at_c = self.explained_at(c);
            } else {
                (a, c, at_c) = (c, d, at_d);
                d = a + GOLDEN * (b - a);
                at_d = self.explained_at(d);
            }
        }
        0.5 * (a + b)
    }

    fn explained_at(&mut self, place: f64) -> f64 {
        let k = if self.family == Family::Exponential { -(-place).exp() } else { place };
        self.scratch[0].resize(self.ages.len(), 0.0);
        exponentials(&mut self.scratch[0], self.ages, k);
        self.explained(&self.scratch[0])
    }

    /// The sum of squares that a line on this column explains; 0 where it is not finite.
    fn explained(&self, column: &[f64]) -> f64 {
        let (squares, products) = about(column, self.centre(column), self.clipped);
        let explained = products * products / squares;
        if explained.is_finite() { explained } else { 0.0 }
    }

    fn centre(&self, column: &[f64]) -> f64 {
        if self.family == Family::Power { 0.0 } else { sum(column) / count(column.len()) }
    }

    /// The shape's coefficients with the nonlinear one at `k`.
    fn coefficients(&mut self, k: f64, mean: f64) -> Coefficients {
        self.fill_columns(k);
        let column = &self.columns[self.linear() - 1];
        let centre = self.centre(column);
        let (squares, products) = about(column, centre, self.clipped);
        let slope = products / squares;
        if self.family == Family::Power {
            [slope, k, 0.0, 0.0]
        } else {
            [mean - slope * centre, slope, k, 0.0]
        }
    }
}
