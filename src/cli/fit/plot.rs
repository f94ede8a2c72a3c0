//! One look as a picture: the readings, the curves, the band of new readings, the residuals below.
//!
//! Text goes in, an SVG document comes out; nothing here touches a file.

pub mod axis;
pub mod canvas;
pub mod curves;
pub mod header;
pub mod panels;
pub mod scene;
pub mod thin;
pub mod trace;

use crate::cli::fit::look::Look;
use crate::cli::fit::series::Series;
use crate::service::shown::Shown;
use canvas::{RGBColor, Stands, Words, picture};
use header::{Kind, Limits};
use scene::Scene;

/// Width of the picture, pixels.
const WIDTH_PX: u32 = 1_000;
/// Free space at the edges, pixels.
const EDGE_PX: f64 = 20.0;
/// From one line of the header to the next, pixels.
const LINE_PX: f64 = 17.0;
/// Heights, pixels: the panel of the readings, that of the residuals, the space between them, what
/// stands under them.
const READINGS_PX: f64 = 420.0;
const RESIDUALS_PX: f64 = 150.0;
const BETWEEN_PX: f64 = 18.0;
const UNDER_PX: f64 = 56.0;
/// Letters of a column's name that are shown, and of that which stands upright.
const NAME_CHARS_MAX: usize = 60;
const NAME_UPRIGHT_CHARS_MAX: usize = 30;

const INK: RGBColor = RGBColor(34, 34, 34);
const CAUTION: RGBColor = RGBColor(138, 75, 0);

/// The names of the columns, as they stand in the file.
#[derive(Clone, Copy, Debug)]
pub struct Names<'a> {
    /// Of the ages.
    pub x: &'a str,
    /// Of the deviations.
    pub y: &'a str,
}

impl Names<'_> {
    /// What stands at an axis: the column's name, and what the formula calls it.
    fn label(name: &str, letter: &str, cap: usize) -> String {
        let shown = Shown(name, cap).to_string();
        if name == letter { shown } else { format!("{shown} ({letter})") }
    }
}

/// Draws a look at a series.
///
/// # Returns
/// A whole SVG document.
pub fn svg(look: &Look, series: &Series, names: Names<'_>) -> String {
    let mut scene = Scene::of(look, series, (EDGE_PX, f64::from(WIDTH_PX) - EDGE_PX));
    let limits =
        Limits { drawn: scene.drawn.len(), cut: scene.cut, ages_outside: scene.ages_outside };
    let lines = header::lines(look, series, limits, f64::from(WIDTH_PX) - 2.0 * EDGE_PX);
    let top = EDGE_PX + LINE_PX * (lines.len() as f64 + 0.5);
    let bottom = scene.lay_out(top, READINGS_PX, BETWEEN_PX, RESIDUALS_PX);
    let height = (bottom + UNDER_PX).ceil() as u32;
    picture(WIDTH_PX, height, |canvas| {
        for (k, (kind, text)) in lines.iter().enumerate() {
            let words = Words {
                size_px: if *kind == Kind::Title { 14.0 } else { header::SIZE_PX },
                colour: if *kind == Kind::Caution { CAUTION } else { INK },
                bold: *kind == Kind::Title,
            };
            let place = (EDGE_PX, EDGE_PX + LINE_PX * k as f64);
            canvas.words(text, place, Stands::Right, words);
        }
        panels::draw(canvas, &scene, look, series, names);
    })
}

#[cfg(test)]
mod tests;
