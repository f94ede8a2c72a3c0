//! The two panels, from the lowest layer up: what lies past the data, the grid, curves and band, the
//! readings, the frame.

use super::axis::{Axis, Tick};
use super::canvas::{Canvas, Pen, Place, RGBColor, Stands, WHITE, Words, width_px};
use super::scene::{Best, NUMBER_GAP_PX, NUMBER_PX, Scene};
use super::{INK, NAME_CHARS_MAX, NAME_UPRIGHT_CHARS_MAX, Names};
use crate::cli::fit::look::Look;
use crate::cli::fit::series::Series;

const READING: RGBColor = RGBColor(40, 40, 40);
/// The line at residual 0.
pub const ZERO: RGBColor = RGBColor(90, 90, 90);
/// The lines at two residual sd.
pub const TWO_SD: RGBColor = RGBColor(150, 60, 60);
/// What lies past the data.
pub const PAST: RGBColor = RGBColor(236, 232, 222);
const HATCH: RGBColor = RGBColor(205, 198, 182);
const GRID: RGBColor = RGBColor(225, 225, 225);

const HATCH_EVERY_PX: f64 = 9.0;
/// Height of the font of words, pixels.
pub const TEXT_PX: f64 = 12.0;
/// Radius and opacity of a dot by the number of dots, pixels.
const DOTS: [(usize, f64, f64); 3] = [(150, 2.8, 0.8), (800, 2.0, 0.8), (usize::MAX, 1.3, 0.5)];
/// More dots than this lie under the lines, which they would hide.
const DOTS_ABOVE_MAX: usize = 800;

/// Width of all lines but the chosen curve, pixels.
pub const THIN: f64 = 1.0;

/// A solid pen.
pub fn pen(colour: RGBColor, width_px: f64) -> Pen {
    Pen { width_px, colour, opacity: 1.0 }
}

/// Words in plain ink.
pub fn plain(size_px: f64) -> Words {
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

/// One panel.
pub struct Panel<'a> {
    /// Its ages.
    pub across: &'a Axis,
    /// Its heights.
    pub upright: &'a Axis,
}

impl Panel<'_> {
    /// Where it begins.
    pub fn left(&self) -> f64 {
        self.across.from_px
    }

    /// Where it ends.
    pub fn right(&self) -> f64 {
        self.across.to_px
    }

    /// Its upper end.
    pub fn top(&self) -> f64 {
        self.upright.to_px
    }

    /// Its lower end.
    pub fn bottom(&self) -> f64 {
        self.upright.from_px
    }

    /// A height within the panel.
    pub fn within(&self, y_px: f64) -> f64 {
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
