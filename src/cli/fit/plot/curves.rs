//! The curves in the panel of the readings: the band, the lines, their names, and the intervals asked
//! for.

use super::canvas::{Canvas, Pen, Place, RGBColor, Stands, Words};
use super::panels::{Panel, TEXT_PX, THIN, pen, plain};
use super::scene::{Best, Scene, value};
use super::trace::{Run, cut, trace};
use crate::cli::fit::look::Look;

/// The chosen curve, and the others in turn. Okabe and Ito (2008), told apart by people
/// who see fewer colours; from memory.
pub const BEST: RGBColor = RGBColor(0, 114, 178);
const OTHERS: [RGBColor; 6] = [
    RGBColor(230, 159, 0),
    RGBColor(0, 158, 115),
    RGBColor(204, 121, 167),
    RGBColor(213, 94, 0),
    RGBColor(86, 180, 233),
    RGBColor(120, 120, 120),
];
const BAND_OPACITY: f64 = 0.16;
/// From one curve's name to the next, pixels.
const NAME_EVERY_PX: f64 = 15.0;
/// Curves that end at most so far from the panel's side are tied to their names, pixels.
const THREAD_PX: f64 = 60.0;
/// Intervals drawn at ages asked for; further ones are only in the table.
const WHISKERS_MAX: usize = 50;
const WHISKER_PX: f64 = 4.0;
/// Width of the chosen curve, pixels.
const BEST_PX: f64 = 2.4;

impl Panel<'_> {
    /// Draws the band; returns the chosen curve and the band's ends.
    pub fn band(&self, canvas: &mut Canvas<'_>, scene: &Scene<'_>, best: &Best<'_>) -> Vec<Run<3>> {
        let (from, to) = scene.reach;
        let ends =
            |x: f64| best.at(x).map(|i| [i.value, i.low, i.high].map(|y| self.upright.place(y)));
        let chosen = trace(&ends, from, to);
        for run in &chosen {
            let edge = |k: usize| {
                move |&(x, ys): &(f64, [f64; 3])| (self.across.place(x), self.within(ys[k]))
            };
            let around: Vec<Place> =
                run.iter().map(edge(2)).chain(run.iter().rev().map(edge(1))).collect();
            canvas.fill(&around, BEST, BAND_OPACITY);
        }
        chosen
    }

    /// Draws all curves, the chosen one by what [`Panel::band`] returned, and their names.
    pub fn curves(
        &self,
        canvas: &mut Canvas<'_>,
        scene: &Scene<'_>,
        look: &Look,
        chosen: &[Run<3>],
    ) {
        let (from, to) = scene.reach;
        let mut ends = Vec::new();
        // The best of the others last, on top; the chosen one above all.
        let others: Vec<_> = look.curves.iter().skip(1).zip(OTHERS).collect();
        for (curve, colour) in others.into_iter().rev() {
            let line = |x: f64| value(&curve.fit, x).map(|y| [self.upright.place(y)]);
            let end = self.curve(canvas, &trace(&line, from, to), pen(colour, THIN));
            ends.push(End { name: curve.fit.family.name(), end, pen: pen(colour, THIN) });
        }
        let end = self.curve(canvas, chosen, pen(BEST, BEST_PX));
        let name = look.curves[0].fit.family.name();
        ends.push(End { name, end, pen: pen(BEST, BEST_PX) });
        self.curve_names(canvas, ends);
    }

    /// Draws the first of some curves; returns where it was last seen.
    fn curve<const N: usize>(
        &self,
        canvas: &mut Canvas<'_>,
        runs: &[Run<N>],
        pen: Pen,
    ) -> Option<Place> {
        let mut end = None;
        for run in runs {
            let line: Vec<Place> =
                run.iter().map(|&(x, ys)| (self.across.place(x), ys[0])).collect();
            for part in cut(&line, self.top(), self.bottom()) {
                canvas.line(&part, pen);
                end = part.last().copied();
            }
        }
        end
    }

    /// Names beside the panel, each as near to the end of its curve as the others allow.
    fn curve_names(&self, canvas: &mut Canvas<'_>, mut ends: Vec<End>) {
        let height = |end: &End| end.end.map_or(self.bottom(), |(_, y)| y);
        ends.sort_by(|a, b| height(a).total_cmp(&height(b)));
        let wanted: Vec<f64> = ends.iter().map(height).collect();
        let room = (self.top() + 8.0, self.bottom() - 8.0);
        for (end, y) in ends.iter().zip(apart(&wanted, NAME_EVERY_PX, room)) {
            let right = self.right();
            // A thread to a curve that left the panel earlier would cross the others.
            if let Some(place) = end.end.filter(|&(x, _)| x > right - THREAD_PX) {
                let thread = Pen { width_px: 0.7, colour: end.pen.colour, opacity: 0.6 };
                canvas.line(&[place, (right + 6.0, y)], thread);
            }
            canvas.line(&[(right + 6.0, y), (right + 22.0, y)], end.pen);
            let bold = end.pen.width_px > THIN;
            let words = Words { bold, ..plain(TEXT_PX) };
            canvas.words(end.name, (right + 27.0, y), Stands::Right, words);
        }
    }

    /// The intervals at ages asked for.
    pub fn whiskers(&self, canvas: &mut Canvas<'_>, best: &Best<'_>) {
        let shown = best.curve.predictions.iter().take(WHISKERS_MAX);
        for (x, interval) in shown.filter_map(|p| Some((p.x, p.interval?))) {
            let x = self.across.place(x);
            if !(self.left()..=self.right()).contains(&x) {
                continue;
            }
            let [low, value, high] =
                [interval.low, interval.value, interval.high].map(|y| self.upright.place(y));
            canvas.line(&[(x, self.within(low)), (x, self.within(high))], pen(BEST, 1.4));
            for (y, half) in [(low, WHISKER_PX), (value, 1.5 * WHISKER_PX), (high, WHISKER_PX)] {
                if (self.top()..=self.bottom()).contains(&y) {
                    canvas.line(&[(x - half, y), (x + half, y)], pen(BEST, 1.4));
                }
            }
        }
    }
}

/// The end of a curve, and how it looks.
struct End {
    name: &'static str,
    /// Where it was last seen; None for one that is wholly outside.
    end: Option<Place>,
    pen: Pen,
}

/// Moves heights apart.
///
/// # Arguments
/// `wanted` — in order; `every` — least distance; `room` — upper and lower end, enough for all.
fn apart(wanted: &[f64], every: f64, (top, bottom): (f64, f64)) -> Vec<f64> {
    let mut heights = Vec::with_capacity(wanted.len());
    let mut next = top;
    for &y in wanted {
        heights.push(y.max(next));
        next = heights[heights.len() - 1] + every;
    }
    let mut most = bottom;
    for y in heights.iter_mut().rev() {
        *y = y.min(most);
        most = *y - every;
    }
    heights
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn names_move_apart_and_stay_beside_the_panel() {
        assert_eq!(apart(&[10.0, 50.0], 15.0, (8.0, 90.0)), [10.0, 50.0]);
        assert_eq!(apart(&[10.0, 11.0, 12.0], 15.0, (8.0, 90.0)), [10.0, 25.0, 40.0]);
        assert_eq!(apart(&[88.0, 89.0, 95.0], 15.0, (8.0, 90.0)), [60.0, 75.0, 90.0]);
        assert_eq!(apart(&[-900.0, 900.0], 15.0, (8.0, 90.0)), [8.0, 90.0]);
    }
}
