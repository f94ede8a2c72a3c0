//! One look as people read it.

use super::look::{Curve, EXTRAPOLATED, LEVEL, Look, Prediction};
use super::series::Series;
use std::io::{self, Write};

/// Digits shown; standard errors rarely deserve as many.
const DIGITS: usize = 6;

/// Writes the table: what was read, what is chosen and why, every curve, what could not be had.
pub fn write(look: &Look, series: &Series, out: &mut dyn Write) -> io::Result<()> {
    match (series.x.first(), series.x.last()) {
        (Some(&oldest), Some(&newest)) => {
            writeln!(out, "{} readings, x {} to {}", look.n, short(oldest), short(newest))?;
        }
        _ => writeln!(out, "no readings")?,
    }
    let sharing = series.sharing_age();
    if sharing > 0 {
        writeln!(out, "{sharing} readings share an x: their order in the file stands for time")?;
    }
    match &look.why {
        Some(why) => writeln!(out, "chosen: {why}")?,
        None => writeln!(out, "no curve")?,
    }
    for curve in &look.curves {
        writeln!(out)?;
        write_curve(curve, out)?;
    }
    if look.curves.iter().any(|curve| curve.cautions.iter().any(|c| c == EXTRAPOLATED)) {
        writeln!(out, "\n{EXTRAPOLATED}")?;
    }
    if !look.not_fitted.is_empty() {
        writeln!(out, "\nnot fitted")?;
        for (family, why) in &look.not_fitted {
            writeln!(out, "  {}: {why}", family.name())?;
        }
    }
    Ok(())
}

fn write_curve(curve: &Curve, out: &mut dyn Write) -> io::Result<()> {
    let fit = &curve.fit;
    writeln!(out, "{}: {}", fit.family.name(), fit.family.form())?;
    writeln!(
        out,
        "  {:<6}{:>16}{:>18}{:>22}",
        "", "estimate", "standard error", "allowing for lag 1"
    )?;
    for (k, name) in fit.family.coefficient_names().iter().enumerate() {
        let serial = curve.serial_errors.map_or_else(|| "-".to_owned(), |e| short(e[k]));
        let (estimate, error) = (short(fit.theta[k]), short(fit.standard_errors[k]));
        writeln!(out, "  {name:<6}{estimate:>16}{error:>18}{serial:>22}")?;
    }
    let aicc = curve.aicc.map_or_else(|| "-".to_owned(), short);
    let r_squared = fit.r_squared.map_or_else(|| "-".to_owned(), short);
    writeln!(
        out,
        "  residual sd {} with {} degrees of freedom, R squared {r_squared}, AICc {aicc}",
        short(fit.residual_sd),
        fit.degrees_of_freedom,
    )?;
    writeln!(
        out,
        "  lag-1 correlation {:.2}: worth {:.0} independent readings",
        curve.lag1, curve.effective_n
    )?;
    writeln!(out, "  {}", tests_words(curve))?;
    for prediction in &curve.predictions {
        writeln!(out, "  {}", prediction_words(prediction))?;
    }
    for caution in curve.cautions.iter().filter(|caution| *caution != EXTRAPOLATED) {
        writeln!(out, "  caution: {caution}")?;
    }
    Ok(())
}

fn tests_words(curve: &Curve) -> String {
    let tests = &curve.tests;
    let words = [
        tests.durbin_watson.map(|t| ("Durbin-Watson", t.statistic, t.p_value)),
        tests.ljung_box.map(|t| ("Ljung-Box", t.statistic, t.p_value)),
        tests.runs.map(|t| ("runs z", t.z, t.p_exact)),
        tests.breusch_pagan.map(|t| ("Breusch-Pagan", t.statistic, t.p_value)),
        tests.reset.map(|t| ("RESET", t.statistic, t.p_value)),
    ];
    let words: Vec<String> = words
        .into_iter()
        .flatten()
        .map(|(name, statistic, p)| format!("{name} {statistic:.3} (p {})", probability(p)))
        .collect();
    if words.is_empty() {
        "too few readings for tests of residuals".to_owned()
    } else {
        words.join(", ")
    }
}

fn prediction_words(prediction: &Prediction) -> String {
    let x = short(prediction.x);
    let beyond = if prediction.extrapolated { ", beyond the readings" } else { "" };
    match prediction.interval {
        None => format!("at {x}: the curve is not defined"),
        Some(i) => format!(
            "at {x}: {}, {:.0} % of new readings from {} to {}{beyond}",
            short(i.value),
            100.0 * LEVEL,
            short(i.low),
            short(i.high)
        ),
    }
}

fn probability(p: f64) -> String {
    if p < 0.0001 { "below 0.0001".to_owned() } else { format!("{p:.4}") }
}

/// A number with [`DIGITS`] significant digits, no trailing zeros; with an exponent where it is very
/// large or very small.
pub(super) fn short(value: f64) -> String {
    let scientific = format!("{value:.*e}", DIGITS - 1);
    let exponent = scientific.rsplit('e').next().and_then(|e| e.parse::<i32>().ok()).unwrap_or(0);
    if !(-5..=9).contains(&exponent) {
        return scientific;
    }
    let decimals = usize::try_from(5 - exponent).unwrap_or(0);
    let plain = format!("{value:.decimals$}");
    if plain.contains('.') {
        plain.trim_end_matches('0').trim_end_matches('.').to_owned()
    } else {
        plain
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn numbers_carry_six_significant_digits() {
        for (value, shown) in [
            (0.768_862_261_76, "0.768862"),
            (-1234.5, "-1234.5"),
            (1_234_567.8, "1234568"),
            (0.0, "0"),
            (2.0, "2"),
            (4.611e-153, "4.61100e-153"),
            (0.000_012_345_678, "0.0000123457"),
        ] {
            assert_eq!(short(value), shown);
        }
    }
}
