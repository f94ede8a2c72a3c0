//! The words above the picture: what was chosen, its numbers, what to be careful about.

use super::canvas::width_px;
use crate::cli::fit::look::{Curve, LEVEL, Look};
use crate::cli::fit::series::Series;
use crate::cli::fit::table::short;

/// Height of the font of all but the title, pixels.
pub const SIZE_PX: f64 = 12.0;

/// What a line of words is.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Kind {
    /// The title.
    Title,
    /// A plain statement.
    Plain,
    /// Something to be careful about.
    Caution,
}

/// What the picture could not show as it is.
#[derive(Clone, Copy, Debug, Default)]
pub struct Limits {
    /// Readings drawn.
    pub drawn: usize,
    /// Whether the chosen curve or its band is cut at the edge.
    pub cut: bool,
    /// Ages that were asked for and lie outside the picture.
    pub ages_outside: usize,
}

/// Returns the lines, each no wider than `width` pixels.
pub fn lines(look: &Look, series: &Series, limits: Limits, width: f64) -> Vec<(Kind, String)> {
    let mut said = match look.curves.first() {
        Some(best) => of_curve(best, look, series),
        None => of_no_curve(look, series),
    };
    if limits.drawn < look.n {
        said.insert(
            1,
            (
                Kind::Title,
                format!(
                    "thinned for drawing: {} of {} readings, among them the highest and lowest of \
                     every pixel column",
                    limits.drawn, look.n
                ),
            ),
        );
    }
    if limits.cut {
        let words = "the chosen curve or its band goes on beyond the edge of the picture";
        said.push((Kind::Caution, words.to_owned()));
    }
    if limits.ages_outside > 0 {
        let n = limits.ages_outside;
        said.push((Kind::Caution, format!("{n} of the ages asked for: too far out to be shown")));
    }
    let wrapped = said
        .into_iter()
        .flat_map(|(kind, text)| wrap(&text, width).into_iter().map(move |line| (kind, line)));
    wrapped.collect()
}

fn of_curve(best: &Curve, look: &Look, series: &Series) -> Vec<(Kind, String)> {
    let fit = &best.fit;
    let mut said = vec![(Kind::Title, format!("{}: {}", fit.family.name(), fit.family.form()))];
    let coefficients: Vec<String> = (0..)
        .zip(fit.family.coefficient_names())
        .map(|(k, name): (usize, _)| {
            format!("{name} = {} ± {}", short(fit.theta[k]), short(fit.standard_errors[k]))
        })
        .collect();
    said.push((Kind::Plain, format!("{} (± standard error)", coefficients.join(", "))));
    let r_squared = fit.r_squared.map_or_else(String::new, |r| format!(", R squared {}", short(r)));
    said.push((
        Kind::Plain,
        format!(
            "{}, residual sd {} with {} of freedom{r_squared}",
            readings(series),
            short(fit.residual_sd),
            several(fit.degrees_of_freedom, "degree"),
        ),
    ));
    if let Some(why) = &look.why {
        said.push((Kind::Plain, format!("chosen: {why}")));
    }
    said.push((
        Kind::Plain,
        format!(
            "band: holds a new reading at any one age with {:.0} % probability, if residuals are \
             independent",
            100.0 * LEVEL
        ),
    ));
    said.extend(best.cautions.iter().map(|c| (Kind::Caution, format!("caution: {c}"))));
    said
}

fn of_no_curve(look: &Look, series: &Series) -> Vec<(Kind, String)> {
    let mut said = vec![(Kind::Title, "no curve".to_owned()), (Kind::Plain, readings(series))];
    let reason = |(family, why): &(crate::drift::family::Family, String)| {
        (Kind::Plain, format!("{}: {why}", family.name()))
    };
    said.extend(look.not_fitted.iter().map(reason));
    said
}

fn readings(series: &Series) -> String {
    match (series.x.first(), series.x.last()) {
        (Some(&oldest), Some(&newest)) => {
            let readings = several(series.x.len(), "reading");
            format!("{readings}, x {} to {}", short(oldest), short(newest))
        }
        _ => "no readings".to_owned(),
    }
}

fn several(n: usize, what: &str) -> String {
    if n == 1 { format!("1 {what}") } else { format!("{n} {what}s") }
}

/// Breaks a text between words.
fn wrap(text: &str, width: f64) -> Vec<String> {
    let mut lines: Vec<String> = Vec::new();
    for word in text.split(' ') {
        match lines.last_mut() {
            Some(line) if width_px(&format!("{line} {word}"), SIZE_PX) <= width => {
                line.push(' ');
                line.push_str(word);
            }
            _ => lines.push(word.to_owned()),
        }
    }
    lines
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn words_are_broken_between_lines_and_none_is_lost() {
        let text = "the residuals follow a shape that this curve does not have ".repeat(9);
        let lines = wrap(text.trim(), 600.0);
        assert!(lines.len() > 3 && lines.iter().all(|line| width_px(line, SIZE_PX) <= 600.0));
        assert_eq!(lines.join(" "), text.trim());
    }
}
