//! What the picture is made of: lines, areas, marks and words at places in pixels.
//!
//! The drawing crate places everything on whole numbers. The canvas therefore works in tenths of a
//! pixel and sets the shown size in the opening tag, so that gentle curves show no steps.

use plotters::prelude::*;
use plotters::style::text_anchor::{HPos, Pos, VPos};
pub use plotters::style::{RGBColor, WHITE};

/// Steps of the drawing crate in one pixel.
const STEPS_PER_PX: f64 = 10.0;
/// The drawing crate shows text smaller than it was asked to, by this factor.
const FONT_FACTOR: f64 = 1.24;
/// Width of an average letter in the height of the font, generously (DejaVu Sans, measured).
const LETTER_WIDTH: f64 = 0.62;
/// Length of a dash and of the gap after it, pixels.
const DASH_PX: f64 = 5.0;
/// Why drawing needs no error.
const IN_MEMORY: &str = "a picture in memory cannot fail";

/// A place, in pixels from the upper left corner.
pub type Place = (f64, f64);

/// Where a text stands to its place.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Stands {
    /// Begins there.
    Right,
    /// Ends there.
    Left,
    /// Its middle is there.
    About,
    /// Its middle is there, and it reads upwards.
    Upwards,
}

/// How a text looks.
#[derive(Clone, Copy, Debug)]
pub struct Words {
    /// Height of the font, pixels.
    pub size_px: f64,
    /// Colour.
    pub colour: RGBColor,
    /// Whether in bold.
    pub bold: bool,
}

/// How a line looks.
#[derive(Clone, Copy, Debug)]
pub struct Pen {
    /// Width, pixels.
    pub width_px: f64,
    /// Colour.
    pub colour: RGBColor,
    /// 0 invisible to 1 solid.
    pub opacity: f64,
}

/// A picture in the making.
pub struct Canvas<'a> {
    backend: SVGBackend<'a>,
}

fn steps(px: f64) -> i32 {
    (px * STEPS_PER_PX).round() as i32
}

fn step_place((x, y): Place) -> (i32, i32) {
    (steps(x), steps(y))
}

/// Draws a picture.
///
/// # Arguments
/// `width_px`, `height_px` — its size; `draw` — puts things on the canvas, the lowest first.
///
/// # Returns
/// A whole SVG document.
pub fn picture(width_px: u32, height_px: u32, draw: impl FnOnce(&mut Canvas<'_>)) -> String {
    let mut svg = String::new();
    let (width, height) = (steps(f64::from(width_px)), steps(f64::from(height_px)));
    {
        let size = (width.unsigned_abs(), height.unsigned_abs());
        let mut canvas = Canvas { backend: SVGBackend::with_string(&mut svg, size) };
        let (right, bottom) = (f64::from(width_px), f64::from(height_px));
        canvas.fill(&[(0.0, 0.0), (right, 0.0), (right, bottom), (0.0, bottom)], WHITE, 1.0);
        draw(&mut canvas);
        canvas.backend.present().expect(IN_MEMORY);
    }
    let (_, inside) = svg.split_once('>').expect("a picture begins with its opening tag");
    format!(
        "<svg xmlns=\"http://www.w3.org/2000/svg\" width=\"{width_px}\" height=\"{height_px}\" \
         viewBox=\"0 0 {width} {height}\">{inside}"
    )
}

impl Canvas<'_> {
    /// A line through places; nothing where they are all the same.
    pub fn line(&mut self, places: &[Place], pen: Pen) {
        let style = ShapeStyle {
            color: pen.colour.mix(pen.opacity),
            filled: false,
            stroke_width: steps(pen.width_px).unsigned_abs(),
        };
        let mut places: Vec<_> = places.iter().copied().map(step_place).collect();
        places.dedup();
        if places.len() < 2 {
            return;
        }
        self.backend.draw_path(places, &style).expect(IN_MEMORY);
    }

    /// A straight line of dashes, from the first place to the second.
    pub fn dashes(&mut self, (x0, y0): Place, (x1, y1): Place, pen: Pen) {
        let length = (x1 - x0).hypot(y1 - y0);
        let at = |along: f64| {
            let share = (along / length).min(1.0);
            (x0 + share * (x1 - x0), y0 + share * (y1 - y0))
        };
        let mut along = 0.0;
        while along < length {
            self.line(&[at(along), at(along + DASH_PX)], pen);
            along += 2.0 * DASH_PX;
        }
    }

    /// The area within places.
    pub fn fill(&mut self, places: &[Place], colour: RGBColor, opacity: f64) {
        let style = ShapeStyle { color: colour.mix(opacity), filled: true, stroke_width: 0 };
        let places = places.iter().copied().map(step_place);
        self.backend.fill_polygon(places, &style).expect(IN_MEMORY);
    }

    /// A dot, the mark of a reading; nothing else is drawn as a circle.
    pub fn dot(&mut self, place: Place, radius_px: f64, colour: RGBColor, opacity: f64) {
        let style = ShapeStyle { color: colour.mix(opacity), filled: true, stroke_width: 0 };
        let radius = steps(radius_px).unsigned_abs();
        self.backend.draw_circle(step_place(place), radius, &style, true).expect(IN_MEMORY);
    }

    /// Words on one line. The crate escapes what XML gives a meaning to.
    pub fn words(&mut self, text: &str, place: Place, stands: Stands, words: Words) {
        let across = match stands {
            Stands::Right => HPos::Left,
            Stands::Left => HPos::Right,
            Stands::About | Stands::Upwards => HPos::Center,
        };
        let weight = if words.bold { FontStyle::Bold } else { FontStyle::Normal };
        let size = words.size_px * STEPS_PER_PX * FONT_FACTOR;
        let mut font = FontDesc::new(FontFamily::SansSerif, size, weight);
        if stands == Stands::Upwards {
            font = font.transform(FontTransform::Rotate270);
        }
        let style = TextStyle::from(font).color(&words.colour).pos(Pos::new(across, VPos::Center));
        self.backend.draw_text(text, &style, step_place(place)).expect(IN_MEMORY);
    }
}

/// About how wide a text is, pixels; letters of two columns count as such.
pub fn width_px(text: &str, size_px: f64) -> f64 {
    let letters: f64 = text.chars().map(|c| if c < '\u{1100}' { LETTER_WIDTH } else { 1.0 }).sum();
    letters * size_px
}
