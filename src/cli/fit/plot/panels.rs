//! The two panels, from the lowest layer up: what lies past the data, the grid, the band, the curves,
//! the readings, the frame.

use super::axis::{Axis, Tick};
use super::canvas::{Canvas, Pen, Place, RGBColor, Stands, WHITE, Words, width_px};
use super::scene::{Best, NUMBER_GAP_PX, NUMBER_PX, Scene, value};
use super::trace::{Run, cut, trace};
use super::{INK, NAME_CHARS_MAX, NAME_UPRIGHT_CHARS_MAX, Names};
use crate::cli::fit::look::Look;
use crate::cli::fit::series::Series;

/// The chosen curve; the readings; the others in turn. Okabe and Ito (2008), told apart by people
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
const READING: RGBColor = RGBColor(40, 40, 40);
/// The line at residual 0.
pub const ZERO: RGBColor = RGBColor(90, 90, 90);
/// The lines at two residual sd.
pub const TWO_SD: RGBColor = RGBColor(150, 60, 60);
/// What lies past the data.
pub const PAST: RGBColor = RGBColor(236, 232, 222);
const HATCH: RGBColor = RGBColor(205, 198, 182);
const GRID: RGBColor = RGBColor(225, 225, 225);
const BAND_OPACITY: f64 = 0.16;

const HATCH_EVERY_PX: f64 = 9.0;
const TEXT_PX: f64 = 12.0;
/// From one curve's name to the next, pixels.
const NAME_EVERY_PX: f64 = 15.0;
/// Curves that end at most so far from the panel's side are tied to their names, pixels.
const THREAD_PX: f64 = 60.0;
/// Intervals drawn at ages asked for; further ones are only in the table.
const WHISKERS_MAX: usize = 50;
const WHISKER_PX: f64 = 4.0;
/// Radius and opacity of a dot by the number of dots, pixels.
const DOTS: [(usize, f64, f64); 3] = [(150, 2.8, 0.8), (800, 2.0, 0.8), (usize::MAX, 1.3, 0.5)];
/// More dots than this lie under the lines, which they would hide.
const DOTS_ABOVE_MAX: usize = 800;

/// Widths of lines, pixels: of the chosen curve, of all others.
const BEST_PX: f64 = 2.4;
const THIN: f64 = 1.0;

fn pen(colour: RGBColor, width_px: f64) -> Pen {
    Pen { width_px, colour, opacity: 1.0 }
}

fn plain(size_px: f64) -> Words {
    Words { size_px, colour: INK, bold: false }
}

/// Draws the panels.
pub fn draw(
    canvas: &mut Canvas<'_>,
    scene: &Scene<'_>,
    look: &Look,
    series: &Series,
    names: Names<'_>,
) {
    let numbers = scene.ticks_across();
    let upright = Names::label(names.y, "y", NAME_UPRIGHT_CHARS_MAX);
    let panel = Panel { across: &scene.across, upright: &scene.upright };
    panel.past(canvas, scene);
    panel.grid(canvas, &numbers, &scene.reading_ticks(), &upright);
    let dots = |canvas: &mut Canvas<'_>| panel.dots(canvas, scene, &series.x, &series.y);
    match &scene.best {
        Some(best) => {
            let curves = panel.band(canvas, scene, best);
            let lines = |canvas: &mut Canvas<'_>| panel.curves(canvas, scene, look, &curves);
            in_order(canvas, scene, lines, dots);
            panel.whiskers(canvas, best);
        }
        None => dots(canvas),
    }
    panel.frame(canvas);
    panel.past_words(canvas, scene);
    let lowest = match &scene.best {
        Some(best) => {
            let panel = Panel { across: &scene.across, upright: &best.upright };
            panel.past(canvas, scene);
            panel.grid(canvas, &numbers, &best.ticks(), "residual");
            let dots =
                |canvas: &mut Canvas<'_>| panel.dots(canvas, scene, &series.x, &best.residuals);
            in_order(canvas, scene, |canvas| panel.levels(canvas, best), dots);
            panel.frame(canvas);
            panel
        }
        None => panel,
    };
    lowest.foot(canvas, &numbers, &Names::label(names.x, "x", NAME_CHARS_MAX));
}

/// Draws lines and dots, the more telling above.
fn in_order(
    canvas: &mut Canvas<'_>,
    scene: &Scene<'_>,
    lines: impl Fn(&mut Canvas<'_>),
    dots: impl Fn(&mut Canvas<'_>),
) {
    if scene.drawn.len() > DOTS_ABOVE_MAX {
        dots(canvas);
        lines(canvas);
    } else {
        lines(canvas);
        dots(canvas);
    }
}

struct Panel<'a> {
    across: &'a Axis,
    upright: &'a Axis,
}

impl Panel<'_> {
    fn left(&self) -> f64 {
        self.across.from_px
    }

    fn right(&self) -> f64 {
        self.across.to_px
    }

    fn top(&self) -> f64 {
        self.upright.to_px
    }

    fn bottom(&self) -> f64 {
        self.upright.from_px
    }

    /// A height within the panel.
    fn within(&self, y_px: f64) -> f64 {
        y_px.clamp(self.top(), self.bottom())
    }

    fn rectangle(&self, left: f64, right: f64) -> [Place; 4] {
        [(left, self.top()), (right, self.top()), (right, self.bottom()), (left, self.bottom())]
    }

    /// Left and right end of what lies before and past the data.
    fn past_sides(&self, scene: &Scene<'_>) -> Vec<(f64, f64, &'static str)> {
        let ((oldest, newest), (from, to)) = (scene.readings, scene.reach);
        let mut sides = Vec::new();
        if from < oldest {
            sides.push((self.left(), self.across.place(oldest), "before the data"));
        }
        if to > newest {
            sides.push((self.across.place(newest), self.right(), "past the data"));
        }
        sides
    }

    fn past(&self, canvas: &mut Canvas<'_>, scene: &Scene<'_>) {
        let height = self.bottom() - self.top();
        for (left, right, _) in self.past_sides(scene) {
            canvas.fill(&self.rectangle(left, right), PAST, 1.0);
            let mut foot = left - height + HATCH_EVERY_PX;
            while foot < right {
                // Each stroke rises to the right at 45 degrees, within the sides.
                let (begin, end) = (foot.max(left), (foot + height).min(right));
                let at = |x: f64| (x, self.bottom() - (x - foot));
                canvas.line(&[at(begin), at(end)], pen(HATCH, 0.6));
                foot += HATCH_EVERY_PX;
            }
        }
    }

    fn past_words(&self, canvas: &mut Canvas<'_>, scene: &Scene<'_>) {
        for (left, right, text) in self.past_sides(scene) {
            let (wide, middle) = (width_px(text, TEXT_PX), 0.5 * (left + right));
            let (half, stands) = if wide + 8.0 < right - left {
                ((0.5 * wide, 9.0), Stands::About)
            } else {
                ((9.0, 0.5 * wide), Stands::Upwards)
            };
            // Where the chosen curve is not.
            let high = scene.best.as_ref().and_then(|best| best.at(self.across.value_at(middle)));
            let high = high.map_or(self.bottom(), |i| self.upright.place(i.value));
            let y = if high > 0.5 * (self.top() + self.bottom()) {
                self.top() + half.1 + 6.0
            } else {
                self.bottom() - half.1 - 6.0
            };
            let place = (middle, y);
            let (l, r) = ((middle - half.0).max(left), (middle + half.0).min(right));
            let (t, b) = (place.1 - half.1, place.1 + half.1);
            canvas.fill(&[(l, t), (r, t), (r, b), (l, b)], WHITE, 0.8);
            canvas.words(text, place, stands, plain(TEXT_PX));
        }
    }

    fn grid(&self, canvas: &mut Canvas<'_>, across: &[Tick], upright: &[Tick], label: &str) {
        for tick in across {
            let x = self.across.place(tick.value);
            canvas.line(&[(x, self.top()), (x, self.bottom())], pen(GRID, THIN));
        }
        for tick in upright {
            let y = self.upright.place(tick.value);
            canvas.line(&[(self.left(), y), (self.right(), y)], pen(GRID, THIN));
            let place = (self.left() - NUMBER_GAP_PX, y);
            canvas.words(&tick.label, place, Stands::Left, plain(NUMBER_PX));
        }
        let place = (super::EDGE_PX + 4.0, 0.5 * (self.top() + self.bottom()));
        canvas.words(label, place, Stands::Upwards, plain(TEXT_PX));
    }

    fn frame(&self, canvas: &mut Canvas<'_>) {
        let [a, b, c, d] = self.rectangle(self.left(), self.right());
        canvas.line(&[a, b, c, d, a], pen(INK, THIN));
    }

    /// The numbers and the name under the lowest panel.
    fn foot(&self, canvas: &mut Canvas<'_>, ticks: &[Tick], label: &str) {
        for tick in ticks {
            let x = self.across.place(tick.value);
            canvas.line(&[(x, self.bottom()), (x, self.bottom() + 4.0)], pen(INK, THIN));
            let place = (x, self.bottom() + 14.0);
            canvas.words(&tick.label, place, Stands::About, plain(NUMBER_PX));
        }
        let place = (0.5 * (self.left() + self.right()), self.bottom() + 36.0);
        canvas.words(label, place, Stands::About, plain(TEXT_PX));
    }

    fn dots(&self, canvas: &mut Canvas<'_>, scene: &Scene<'_>, x: &[f64], y: &[f64]) {
        let many = scene.drawn.len();
        let fits = |&(most, radius, opacity): &(usize, f64, f64)| {
            (many <= most).then_some((radius, opacity))
        };
        let (radius, opacity) = DOTS.iter().find_map(fits).unwrap_or((1.0, 1.0));
        for &k in &scene.drawn {
            let place = (self.across.place(x[k]), self.upright.place(y[k]));
            canvas.dot(place, radius, READING, opacity);
        }
    }

    /// Draws the band; returns the chosen curve and the band's ends.
    fn band(&self, canvas: &mut Canvas<'_>, scene: &Scene<'_>, best: &Best<'_>) -> Vec<Run<3>> {
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

    fn curves(&self, canvas: &mut Canvas<'_>, scene: &Scene<'_>, look: &Look, chosen: &[Run<3>]) {
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
    fn whiskers(&self, canvas: &mut Canvas<'_>, best: &Best<'_>) {
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

    /// Residual 0 and two residual sd to either side.
    fn levels(&self, canvas: &mut Canvas<'_>, best: &Best<'_>) {
        let (left, right) = (self.left(), self.right());
        let zero = self.upright.place(0.0);
        canvas.line(&[(left, zero), (right, zero)], pen(ZERO, 1.2));
        let two_sd = 2.0 * best.curve.fit.residual_sd;
        for (level, text) in [(two_sd, "+2 residual sd"), (-two_sd, "-2 residual sd")] {
            let y = self.upright.place(level);
            canvas.dashes((left, y), (right, y), pen(TWO_SD, THIN));
            // Beside a far outlier the lines come so close that their words move apart.
            let apart = (y - zero).signum() * (y - zero).abs().max(0.6 * NUMBER_PX);
            canvas.words(text, (right + 6.0, zero + apart), Stands::Right, plain(NUMBER_PX));
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
