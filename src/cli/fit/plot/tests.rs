//! The picture read back as XML, by its numbers and colours, as somebody who looks at it would.

use super::axis::Axis;
use super::canvas::{RGBColor, width_px};
use super::curves::BEST;
use super::panels::{PAST, TWO_SD, ZERO};
use super::*;
use crate::cli::fit::look::look;
use crate::drift::family::Family;
use crate::drift::reference::{CENSUS, MISRA1A};
use proptest::prelude::*;
use proptest::test_runner::RngSeed;
use roxmltree::{Document, Node};

type Place = (f64, f64);

/// Six readings of NIST StRD's DanWood, US public domain.
const DANWOOD: [Place; 6] =
    [(1.309, 2.138), (1.471, 3.421), (1.49, 3.597), (1.565, 4.34), (1.611, 4.882), (1.68, 5.66)];
/// Certified by NIST: a, b, residual sd of y = a x^b.
const DANWOOD_FIT: [f64; 3] = [7.688_622_617_6e-1, 3.860_405_587_1, 3.285_311_403_9e-2];

/// Text with where it begins to be laid out, and how.
#[derive(Debug)]
struct Text {
    at: Place,
    anchor: String,
    size: f64,
    upright: bool,
    text: String,
}

/// A picture read back; places in pixels.
#[derive(Debug)]
struct Drawn {
    svg: String,
    size: Place,
    circles: Vec<Place>,
    lines: Vec<(String, Vec<Place>)>,
    areas: Vec<(String, Vec<Place>)>,
    texts: Vec<Text>,
}

fn number(node: Node<'_, '_>, name: &str) -> f64 {
    node.attribute(name).and_then(|text| text.parse().ok()).unwrap()
}

fn places(node: Node<'_, '_>) -> Vec<Place> {
    let pair = |text: &str| {
        let (x, y) = text.split_once(',').unwrap();
        (x.parse::<f64>().unwrap() / 10.0, y.parse::<f64>().unwrap() / 10.0)
    };
    node.attribute("points").unwrap().split_whitespace().map(pair).collect()
}

fn hex(colour: RGBColor) -> String {
    format!("#{:02X}{:02X}{:02X}", colour.0, colour.1, colour.2)
}

/// Draws readings as `--family … --at …` would, and reads the picture back.
fn check(readings: &[Place], families: &[Family], at: &[f64], names: Names<'_>) -> Drawn {
    let (x, y): (Vec<f64>, Vec<f64>) = readings.iter().copied().unzip();
    let look = look(&x, &y, families, at);
    let svg = svg(&look, &Series { x, y, ..Series::default() }, names);
    let (mut circles, mut lines, mut areas, mut texts) = (vec![], vec![], vec![], vec![]);
    let document = Document::parse(&svg).unwrap_or_else(|why| panic!("{why}\n{svg}"));
    let root = document.root_element();
    for node in root.children().filter(Node::is_element) {
        let colour = |name| node.attribute(name).unwrap().to_owned();
        let place = |x, y| (number(node, x) / 10.0, number(node, y) / 10.0);
        match node.tag_name().name() {
            "circle" => circles.push(place("cx", "cy")),
            "polyline" => lines.push((colour("stroke"), places(node))),
            "polygon" => areas.push((colour("fill"), places(node))),
            "text" => texts.push(Text {
                at: place("x", "y"),
                anchor: colour("text-anchor"),
                size: number(node, "font-size") / 10.0,
                upright: node.attribute("transform").is_some(),
                text: node.text().unwrap().trim().to_owned(),
            }),
            other => panic!("{other} has no place in a picture"),
        }
    }
    let size = (number(root, "width"), number(root, "height"));
    Drawn { size, circles, lines, areas, texts, svg: svg.clone() }
}

const PLAIN: Names<'_> = Names { x: "x", y: "y" };

impl Drawn {
    /// Upper and lower end of the panels, from the top: the lines that come back to where they began.
    fn panels(&self) -> Vec<(f64, f64)> {
        let frames = self.lines.iter().filter(|(_, l)| l.len() == 5 && l[0] == l[4]);
        frames.map(|(_, l)| (l[0].1, l[2].1)).collect()
    }

    fn dots(&self, panel: usize) -> Vec<Place> {
        let (top, bottom) = self.panels()[panel];
        self.circles.iter().copied().filter(|c| (top..=bottom).contains(&c.1)).collect()
    }

    /// The place of a number, from the two outermost ticks that can be read.
    fn place(ticks: &[(f64, f64)], value: f64) -> f64 {
        let (a, b) = (ticks[0], ticks[ticks.len() - 1]);
        a.1 + (value - a.0) / (b.0 - a.0) * (b.1 - a.1)
    }

    fn across(&self, x: f64) -> f64 {
        let foot = self.panels().last().unwrap().1;
        let below = self.texts.iter().filter(|t| t.at.1 > foot && t.at.1 < foot + 20.0);
        let ticks: Vec<Place> = below.map(|t| (t.text.parse().unwrap(), t.at.0)).collect();
        Drawn::place(&ticks, x)
    }

    fn upright(&self, panel: usize, y: f64) -> f64 {
        let (top, bottom) = self.panels()[panel];
        let beside = self.texts.iter().filter(|t| t.anchor == "end");
        let beside = beside.filter(|t| (top..=bottom).contains(&t.at.1));
        let ticks: Vec<Place> = beside.map(|t| (t.text.parse().unwrap(), t.at.1)).collect();
        Drawn::place(&ticks, y)
    }

    /// Height at which a line of that colour passes a place; the first such line that does.
    fn height_of(&self, colour: RGBColor, x: f64) -> f64 {
        let lines = self.lines.iter().filter(|(c, l)| *c == hex(colour) && l.len() > 8);
        lines.flat_map(|(_, l)| crossings(l, x)).next().unwrap()
    }

    fn says(&self, words: &str) -> bool {
        self.texts.iter().any(|t| t.text.contains(words))
    }
}

/// Heights at which a line passes a place.
fn crossings(line: &[Place], x: f64) -> Vec<f64> {
    let passes = |w: &[Place]| {
        let (a, b) = (w[0], w[1]);
        let inside = a.0.min(b.0) <= x && x <= a.0.max(b.0) && a.0.total_cmp(&b.0).is_ne();
        inside.then(|| a.1 + (x - a.0) / (b.0 - a.0) * (b.1 - a.1))
    };
    line.windows(2).filter_map(passes).collect()
}

fn near(got: f64, want: f64, what: &str) {
    assert!((got - want).abs() < 1.0, "{what}: {got} against {want} pixels");
}

#[test]
fn every_reading_has_a_dot_in_both_panels_where_the_axes_say() {
    let drawn = check(&DANWOOD, &Family::ALL, &[], PLAIN);
    assert_eq!((drawn.dots(0).len(), drawn.dots(1).len(), drawn.circles.len()), (6, 6, 12));
    // NIST StRD, DanWood: the certified curve gives the residuals.
    let [a, b, _] = DANWOOD_FIT;
    for (k, (x, y)) in DANWOOD.into_iter().enumerate() {
        let (reading, residual) = (drawn.dots(0)[k], drawn.dots(1)[k]);
        near(reading.0, drawn.across(x), "age");
        near(reading.1, drawn.upright(0, y), "deviation");
        near(residual.0, drawn.across(x), "age of a residual");
        near(residual.1, drawn.upright(1, y - a * x.powf(b)), "residual");
    }
}

#[test]
fn reference_the_curve_passes_where_nist_puts_it() {
    let drawn = check(&DANWOOD, &Family::ALL, &[], PLAIN);
    // NIST StRD, DanWood: certified coefficients.
    let [a, b, _] = DANWOOD_FIT;
    for x in [1.32, 1.5, 1.67] {
        let got = drawn.height_of(BEST, drawn.across(x));
        near(got, drawn.upright(0, a * x.powf(b)), "curve");
    }
}

#[test]
fn reference_the_band_ends_where_r_puts_it() {
    // predict() of R at 2015, computed again with 80 digits; see drift::interval.
    let drawn = check(&CENSUS, &[Family::Cubic], &[2015.0], PLAIN);
    let band = drawn.areas.iter().find(|(fill, _)| *fill == hex(BEST)).unwrap();
    let heights = crossings(&band.1, drawn.across(2015.0) - 0.05);
    let (low, high) = (drawn.upright(0, 295.800_820_7), drawn.upright(0, 339.167_570_98));
    let (top, bottom) =
        (heights.iter().copied().fold(f64::MAX, f64::min), heights[0].max(heights[1]));
    near(top, high, "upper end");
    near(bottom, low, "lower end");
}

#[test]
fn the_residual_panel_has_its_base_at_0_and_lines_at_two_residual_sd() {
    let drawn = check(&DANWOOD, &Family::ALL, &[], PLAIN);
    let (_, base) = drawn.lines.iter().find(|(stroke, _)| *stroke == hex(ZERO)).unwrap();
    let zero = drawn.texts.iter().rfind(|t| t.text == "0" && t.anchor == "end").unwrap();
    let (left, right) = (base[0], base[1]);
    assert_eq!((left.1.to_bits(), right.1.to_bits()), (zero.at.1.to_bits(), zero.at.1.to_bits()));
    assert!(left.0 < drawn.dots(1)[0].0 && right.0 > drawn.dots(1)[5].0);
    // NIST StRD, DanWood: certified residual sd.
    let levels: Vec<f64> =
        drawn.lines.iter().filter(|(s, _)| *s == hex(TWO_SD)).map(|(_, l)| l[0].1).collect();
    for sign in [-1.0, 1.0] {
        let want = drawn.upright(1, sign * 2.0 * DANWOOD_FIT[2]);
        assert!(levels.iter().any(|y| (y - want).abs() < 1.0), "{want} in {levels:?}");
    }
}

#[test]
fn what_lies_past_the_data_is_shaded_only_when_asked_for() {
    let within = check(&DANWOOD, &[Family::Power], &[1.4], PLAIN);
    assert!(!within.areas.iter().any(|(fill, _)| *fill == hex(PAST)) && !within.says("the data"));
    let beyond = check(&DANWOOD, &[Family::Power], &[1.9], PLAIN);
    let shade = beyond.areas.iter().filter(|(fill, _)| *fill == hex(PAST));
    let sides: Vec<f64> = shade.map(|(_, area)| area[0].0).collect();
    assert_eq!(sides.len(), 2, "one in each panel");
    near(sides[0], beyond.across(1.68), "the newest reading");
    assert!(beyond.says("past the data") && !beyond.says("before the data"));
    let before = check(&DANWOOD, &[Family::Power], &[1.0], PLAIN);
    assert!(before.says("before the data") && !before.says("past the data"));
    let far = check(&DANWOOD, &[Family::Power], &[1e9], PLAIN);
    assert!(far.says("1 of the ages asked for: too far out to be shown"));
}

#[test]
fn the_other_curves_are_thin_and_named() {
    let drawn = check(&MISRA1A, &Family::ALL, &[], PLAIN);
    for family in Family::ALL {
        let named = drawn.texts.iter().filter(|t| t.text == family.name()).count();
        assert_eq!(named, 1, "{}", family.name());
    }
    let width = |name: &str| drawn.svg.matches(&format!("stroke-width=\"{name}\"")).count();
    assert_eq!(width("24"), 2, "the chosen curve and the line beside its name");
}

/// The numbers are NIST's; R squared follows from its residual sum of squares, 0.00431731 of 7.61358.
#[test]
fn the_title_says_family_formula_and_numbers() {
    let drawn = check(&DANWOOD, &[Family::Power], &[], PLAIN);
    let lines: Vec<&str> = drawn.texts.iter().take(3).map(|t| t.text.as_str()).collect();
    assert_eq!(
        lines,
        [
            "power: y = a * x^b",
            "a = 0.768862 ± 0.018282, b = 3.86041 ± 0.0517266 (± standard error)",
            "6 readings, x 1.309 to 1.68, residual sd 0.0328531 with 4 degrees of freedom, \
             R squared 0.999433",
        ]
    );
}

#[test]
fn names_from_the_file_are_capped_and_cannot_become_markup() {
    let script = "<script>alert(1)</script>&\"'\u{1b}[2J\0\n\u{202e}\u{ffff}";
    let drawn = check(&DANWOOD, &[Family::Power], &[], Names { x: script, y: &"&<".repeat(5000) });
    assert!(!drawn.svg.contains("<script") && !drawn.svg.contains("CDATA"));
    assert!(!drawn.svg.chars().any(|c| c.is_control() && c != '\n'));
    let shown = "<script>alert(1)</script>&\"'\\u{1b}[2J\\u{0}\\n\\u{202e}\\u{ffff} (x)";
    assert!(drawn.says(shown), "{:?}", drawn.texts);
    let upright = drawn.texts.iter().find(|t| t.text.starts_with("&<&<")).unwrap();
    assert_eq!(upright.text, format!("{}… (y)", "&<".repeat(NAME_UPRIGHT_CHARS_MAX / 2)));
}

#[test]
fn no_words_are_clipped_and_none_of_a_kind_overlap() {
    let years: Vec<Place> =
        (0..40).map(|i| 1990.0 + f64::from(i) / 2.0).map(|x| (x, 0.3 * x)).collect();
    let tiny: Vec<Place> = (1..40).map(|i| f64::from(i) * 1e-7).map(|x| (x, x.sqrt())).collect();
    let long = "圧".repeat(99);
    for readings in [&years[..], &tiny, &DANWOOD, &MISRA1A, &CENSUS] {
        let drawn =
            check(readings, &Family::ALL, &[readings[0].0 * 1.001], Names { x: &long, y: &long });
        let boxes: Vec<[f64; 4]> = drawn.texts.iter().map(Text::room).collect();
        for (text, [left, top, right, bottom]) in drawn.texts.iter().zip(&boxes) {
            let inside =
                *left >= 0.0 && *top >= 0.0 && *right <= drawn.size.0 && *bottom <= drawn.size.1;
            assert!(inside, "{text:?}");
        }
        for (i, a) in boxes.iter().enumerate() {
            for (j, b) in boxes.iter().enumerate().skip(i + 1) {
                let apart = a[2] <= b[0] || b[2] <= a[0] || a[3] <= b[1] || b[3] <= a[1];
                assert!(apart, "{:?} and {:?}", drawn.texts[i], drawn.texts[j]);
            }
        }
    }
}

impl Text {
    /// Left, top, right and bottom of the room that it takes; heights without what is free.
    fn room(&self) -> [f64; 4] {
        let (wide, half) = (width_px(&self.text, self.size), 0.45 * self.size);
        let (x, y) = self.at;
        match self.anchor.as_str() {
            _ if self.upright => [x - half, y - 0.5 * wide, x + half, y + 0.5 * wide],
            "start" => [x, y - half, x + wide, y + half],
            "end" => [x - wide, y - half, x, y + half],
            _ => [x - 0.5 * wide, y - half, x + 0.5 * wide, y + half],
        }
    }
}

#[test]
fn a_long_series_is_thinned_and_keeps_its_outlier() {
    let mut readings: Vec<Place> =
        (1..=12_000).map(|i| (f64::from(i), f64::from(i * 37 % 101))).collect();
    readings[7_001].1 = 5_000.0;
    let drawn = check(&readings, &[Family::Linear], &[], PLAIN);
    let dots = drawn.dots(0);
    assert!((1_000..=thin::DOTS_MAX).contains(&dots.len()), "{}", dots.len());
    assert!(drawn.says(&format!("thinned for drawing: {} of 12000 readings", dots.len())));
    let outlier = (drawn.across(7_002.0), drawn.upright(0, 5_000.0));
    assert!(dots.iter().any(|d| (d.0 - outlier.0).abs() < 1.0 && (d.1 - outlier.1).abs() < 1.0));
}

#[test]
fn without_a_curve_the_readings_and_the_reasons_are_drawn() {
    let drawn = check(&[(1.0, 2.0), (2.0, 3.0)], &Family::ALL, &[9.0], PLAIN);
    assert_eq!((drawn.circles.len(), drawn.panels().len()), (2, 1));
    assert!(drawn.says("no curve") && drawn.says("cubic: 2 readings found, at least 5 needed"));
    let empty = check(&[], &Family::ALL, &[], PLAIN);
    assert!(empty.circles.is_empty() && empty.says("no readings"));
}

proptest! {
    #![proptest_config(ProptestConfig {
        cases: 96,
        rng_seed: RngSeed::Fixed(20_260_402),
        failure_persistence: None,
        ..ProptestConfig::default()
    })]

    #[test]
    fn any_finite_readings_have_a_picture_within_its_edges(
        mut readings in prop_oneof![
            prop::collection::vec((prop::num::f64::NORMAL, any::<f64>()), 0..9),
            prop::collection::vec((-9.0..99.0_f64, -9.0..9.0_f64), 0..30),
            prop::collection::vec((0.0..1e-300_f64, prop::num::f64::SUBNORMAL), 0..9),
        ],
        at in prop::collection::vec(prop_oneof![prop::num::f64::NORMAL, -99.0..200.0_f64], 0..3),
    ) {
        readings.retain(|(x, y)| x.is_finite() && y.is_finite());
        readings.sort_by(|a, b| a.0.total_cmp(&b.0));
        let drawn = check(&readings, &Family::ALL, &at, PLAIN);
        let inside = |p: &Place| {
            (0.0..=drawn.size.0).contains(&p.0) && (0.0..=drawn.size.1).contains(&p.1)
        };
        prop_assert!(drawn.circles.iter().all(inside));
        prop_assert!(drawn.lines.iter().chain(&drawn.areas).all(|(_, l)| l.iter().all(inside)));
    }
}

#[test]
fn numbers_are_placed_by_their_axis_to_the_end_of_the_scale() {
    let axis = Axis::new(-f64::MAX, f64::MAX, 0.0, (0.0, 100.0));
    near(axis.place(0.0), 50.0, "the middle");
    near(axis.value_at(axis.place(1e307)) / 1e305, 100.0, "there and back");
}
