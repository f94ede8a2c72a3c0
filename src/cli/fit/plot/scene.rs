//! What is on the picture and on which axes, before anything is drawn.

use super::axis::{Axis, Tick};
use super::canvas::width_px;
use super::thin;
use crate::cli::fit::look::{Curve, LEVEL, Look};
use crate::cli::fit::series::Series;
use crate::drift::fit::Fit;
use crate::drift::interval::{Interval, Intervals};

/// An age asked for further than so many times the range of the readings beyond them is not shown:
/// the readings would shrink to a stroke.
const REACH_MAX: f64 = 4.0;
/// The curve and its band widen the upright axis by at most so many times what the readings take, at
/// either end: among them, and beyond them.
const BAND_AMONG_MAX: f64 = 1.0;
const BAND_BEYOND_MAX: f64 = 2.0;
/// Places at which the curve is looked at for the axes.
const LOOKS: u32 = 256;
/// Share of an axis that stays free at either end.
const ROOM: f64 = 0.04;
/// Ticks of the upright axes.
const TICKS_READINGS: usize = 7;
const TICKS_RESIDUALS: usize = 6;
/// Height of the font of the numbers, pixels.
pub const NUMBER_PX: f64 = 11.0;
/// From a number to its axis, pixels.
pub const NUMBER_GAP_PX: f64 = 7.0;
/// Space for an upright label, for the names of curves, pixels.
const UPRIGHT_PX: f64 = 24.0;
const CURVE_NAMES_PX: f64 = 118.0;

/// The picture as numbers.
pub struct Scene<'a> {
    /// Across the page, for both panels.
    pub across: Axis,
    /// Of the readings.
    pub upright: Axis,
    /// The chosen curve and what it leaves.
    pub best: Option<Best<'a>>,
    /// Places in the series of the readings that are drawn.
    pub drawn: Vec<usize>,
    /// Oldest and newest reading.
    pub readings: (f64, f64),
    /// Where curves begin and end: the readings, and ages asked for beyond them.
    pub reach: (f64, f64),
    /// Whether the chosen curve or its band is cut at the edge.
    pub cut: bool,
    /// Ages asked for that are not shown.
    pub ages_outside: usize,
}

/// The chosen curve.
pub struct Best<'a> {
    /// As found.
    pub curve: &'a Curve,
    intervals: Option<Intervals<'a>>,
    /// y less the curve.
    pub residuals: Vec<f64>,
    /// Of the residuals; shares the ages with the readings.
    pub upright: Axis,
}

impl Best<'_> {
    /// The curve and a new reading's interval; both ends on the curve where there is none.
    pub fn at(&self, x: f64) -> Option<Interval> {
        match &self.intervals {
            Some(intervals) => intervals.at(x),
            None => {
                value(&self.curve.fit, x).map(|value| Interval { value, low: value, high: value })
            }
        }
    }
}

/// The curve at an age, where it is defined.
pub fn value(fit: &Fit, x: f64) -> Option<f64> {
    let defined = x > 0.0 || !fit.family.needs_positive_age();
    defined.then(|| fit.value(x)).filter(|value| value.is_finite())
}

impl<'a> Scene<'a> {
    /// Puts the axes about what has to be seen.
    ///
    /// # Arguments
    /// `sides` — where the picture may begin and end, pixels; heights follow with
    /// [`Scene::lay_out`].
    pub fn of(look: &'a Look, series: &Series, sides: (f64, f64)) -> Scene<'a> {
        let (x, y) = (&series.x, &series.y);
        let readings = (x.first().copied().unwrap_or(0.0), x.last().copied().unwrap_or(0.0));
        let best = look.curves.first().map(|curve| Best::of(curve, x, y));
        let asked: Vec<f64> =
            best.iter().flat_map(|b| b.curve.predictions.iter().map(|p| p.x)).collect();
        let (reach, ages_outside) = reach(readings, &asked);
        let (shown, all) = extent(y, best.as_ref(), readings, reach);
        let upright = Axis::new(shown.0, shown.1, ROOM, (1.0, 0.0));
        let cut = all.0 < upright.low || all.1 > upright.high;
        let mut numbers = upright.ticks(TICKS_READINGS);
        numbers.extend(best.iter().flat_map(|b| b.upright.ticks(TICKS_RESIDUALS)));
        let widest = numbers.iter().map(|t| width_px(&t.label, NUMBER_PX)).fold(0.0, f64::max);
        let left = sides.0 + UPRIGHT_PX + widest + NUMBER_GAP_PX;
        let right = sides.1 - if best.is_some() { CURVE_NAMES_PX } else { 0.0 };
        let across = Axis::new(reach.0, reach.1, ROOM, (left, right));
        let x_px: Vec<f64> = x.iter().map(|&v| across.place(v)).collect();
        let mut panels: Vec<&[f64]> = vec![y];
        panels.extend(best.iter().map(|b| &b.residuals[..]));
        let drawn = thin::drawn(&x_px, &panels);
        Scene { across, upright, best, drawn, readings, reach, cut, ages_outside }
    }

    /// Puts the panels in their heights.
    ///
    /// # Returns
    /// Where the lowest panel ends.
    pub fn lay_out(&mut self, top: f64, readings: f64, between: f64, residuals: f64) -> f64 {
        let foot = top + readings;
        (self.upright.from_px, self.upright.to_px) = (foot, top);
        match &mut self.best {
            Some(best) => {
                let axis = &mut best.upright;
                (axis.from_px, axis.to_px) = (foot + between + residuals, foot + between);
                axis.from_px
            }
            None => foot,
        }
    }

    /// Ticks of the readings' upright axis; none where there are no readings to measure.
    pub fn reading_ticks(&self) -> Vec<Tick> {
        if self.drawn.is_empty() { Vec::new() } else { self.upright.ticks(TICKS_READINGS) }
    }

    /// Ticks across the page, as [`Scene::reading_ticks`].
    pub fn ticks_across(&self) -> Vec<Tick> {
        if self.drawn.is_empty() { Vec::new() } else { self.across.ticks_across(NUMBER_PX) }
    }
}

impl<'a> Best<'a> {
    fn of(curve: &'a Curve, x: &[f64], y: &[f64]) -> Best<'a> {
        let residuals = curve.fit.residuals(x, y);
        let largest = residuals.iter().fold(2.0 * curve.fit.residual_sd, |m, r| m.max(r.abs()));
        Best {
            curve,
            intervals: Intervals::new(&curve.fit, x, LEVEL),
            residuals,
            upright: Axis::new(-largest, largest, ROOM, (1.0, 0.0)),
        }
    }

    /// Ticks of the residuals' axis.
    pub fn ticks(&self) -> Vec<Tick> {
        self.upright.ticks(TICKS_RESIDUALS)
    }
}

/// From where to where the picture goes, and how many ages asked for are outside.
fn reach((oldest, newest): (f64, f64), asked: &[f64]) -> ((f64, f64), usize) {
    let furthest = REACH_MAX * (newest - oldest);
    let within = |x: &&f64| (oldest - furthest..=newest + furthest).contains(*x);
    let outside = asked.iter().filter(|x| !within(x)).count();
    let (mut from, mut to) = (oldest, newest);
    for &x in asked.iter().filter(within) {
        (from, to) = (from.min(x), to.max(x));
    }
    ((from, to), outside)
}

/// Least and most of what the upright axis shows, and of all that there is.
fn extent(
    y: &[f64],
    best: Option<&Best<'_>>,
    (oldest, newest): (f64, f64),
    (from, to): (f64, f64),
) -> ((f64, f64), (f64, f64)) {
    let fold = |(low, high): (f64, f64), v: f64| (low.min(v), high.max(v));
    let least = y.iter().copied().fold((f64::INFINITY, f64::NEG_INFINITY), fold);
    let (mut low, mut high) = if y.is_empty() { (0.0, 0.0) } else { least };
    let Some(best) = best else { return ((low, high), (low, high)) };
    let between = |from: f64, to: f64| {
        (0..=LOOKS).map(move |k| {
            let share = f64::from(k) / f64::from(LOOKS);
            from * (1.0 - share) + to * share
        })
    };
    let among: Vec<Interval> = between(oldest, newest).filter_map(|x| best.at(x)).collect();
    (low, high) = among.iter().map(|i| i.value).fold((low, high), fold);
    let taken = high - low;
    let ends = |intervals: &[Interval]| {
        intervals.iter().flat_map(|i| [i.low, i.high]).fold((low, high), fold)
    };
    let held = |(least, most): (f64, f64), share: f64| {
        (least.max(low - share * taken), most.min(high + share * taken))
    };
    let beyond: Vec<Interval> = between(from, to).filter_map(|x| best.at(x)).collect();
    let (all_among, all_beyond) = (ends(&among), ends(&beyond));
    let (a, b) = (held(all_among, BAND_AMONG_MAX), held(all_beyond, BAND_BEYOND_MAX));
    let wide = if from < oldest || to > newest { (a.0.min(b.0), a.1.max(b.1)) } else { a };
    (wide, all_beyond)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_picture_reaches_ages_asked_for_but_not_any() {
        assert_eq!(reach((0.0, 10.0), &[]), ((0.0, 10.0), 0));
        assert_eq!(reach((0.0, 10.0), &[5.0, 12.0, -3.0]), ((-3.0, 12.0), 0));
        assert_eq!(reach((0.0, 10.0), &[50.0, 51.0, 1e300]), ((0.0, 50.0), 2));
        // All readings of one age: there is no range that an age could be beyond.
        assert_eq!(reach((7.0, 7.0), &[8.0]), ((7.0, 7.0), 1));
    }
}
