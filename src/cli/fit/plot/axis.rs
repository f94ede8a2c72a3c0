//! An axis: which numbers stand where, and how they are written.

use super::canvas::width_px;

/// Numbers beyond this are drawn at it, so that the span of an axis stays finite.
const NUMBER_MAX: f64 = 4e307;
/// Numbers whose span is this share of the largest differ by rounding; the axis shows them as equal.
const SPAN_SHARE_MIN: f64 = 1e-12;
/// The smallest span at all.
const SPAN_MIN: f64 = 1e-290;
/// Widest power of ten that numbers are written out with.
const PLAIN_EXPONENTS: std::ops::RangeInclusive<i32> = -3..=6;
/// Beyond it, numbers of so many digits after the first are still written out: they would be no
/// shorter with an exponent.
const PLAIN_DIGITS: i32 = 4;
/// A tick may lie so many steps beyond the end of its axis.
const TICK_SLACK: f64 = 1e-9;
/// Free pixels between two labels along the axis.
const LABEL_GAP_PX: f64 = 16.0;

/// A number on the axis.
#[derive(Clone, Debug, PartialEq)]
pub struct Tick {
    /// The number.
    pub value: f64,
    /// As written.
    pub label: String,
}

/// An axis on the picture.
#[derive(Clone, Debug)]
pub struct Axis {
    /// The number at `from_px`.
    pub low: f64,
    /// The number at `to_px`.
    pub high: f64,
    /// Where it begins.
    pub from_px: f64,
    /// Where it ends; less than `from_px` where numbers grow upwards.
    pub to_px: f64,
}

impl Axis {
    /// Returns an axis that holds two numbers with some room.
    ///
    /// # Arguments
    /// `least`, `most` — the numbers; `room` — share of their distance left free at both ends.
    pub fn new(least: f64, most: f64, room: f64, (from_px, to_px): (f64, f64)) -> Axis {
        let (least, most) = (held(least), held(most));
        let largest = least.abs().max(most.abs());
        let half = if most - least > SPAN_SHARE_MIN * largest {
            ((0.5 + room) * (most - least)).max(SPAN_MIN)
        } else if largest > SPAN_MIN {
            0.05 * largest
        } else {
            1.0
        };
        let middle = 0.5 * least + 0.5 * most;
        Axis { low: middle - half, high: middle + half, from_px, to_px }
    }

    /// Where a number stands, pixels; beyond the ends of the axis where it is beyond them.
    pub fn place(&self, value: f64) -> f64 {
        let share = (held(value) - self.low) / (self.high - self.low);
        self.from_px + share * (self.to_px - self.from_px)
    }

    /// The number that stands at a place.
    pub fn value_at(&self, px: f64) -> f64 {
        let share = (px - self.from_px) / (self.to_px - self.from_px);
        self.low + share * (self.high - self.low)
    }

    /// Ticks at round numbers, at most about `most`.
    pub fn ticks(&self, most: usize) -> Vec<Tick> {
        let most = f64::from(u32::try_from(most.max(2)).unwrap_or(u32::MAX));
        let rough = (self.high - self.low) / most;
        let mut exponent = whole(rough.log10().floor());
        let scaled = rough / ten_to(exponent);
        let mut step = [1_i64, 2, 5, 10].into_iter().find(|&s| s as f64 >= scaled).unwrap_or(10);
        if step == 10 {
            (step, exponent) = (1, exponent + 1);
        }
        let unit = step as f64 * ten_to(exponent);
        // An end that is a round number but for rounding has its tick.
        let first = (self.low / unit - TICK_SLACK).ceil() as i64;
        let last = (self.high / unit + TICK_SLACK).floor() as i64;
        let units: Vec<i64> = (first..=last).map(|k| k * step).collect();
        let largest = units.iter().map(|n| n.unsigned_abs()).max().unwrap_or(0);
        let numerals = Numerals::of(largest, exponent);
        let tick = |&n: &i64| Tick { value: number(n, exponent), label: numerals.write(n) };
        units.iter().map(tick).collect()
    }

    /// Ticks of an axis across the page, as many as have room beside each other.
    pub fn ticks_across(&self, size_px: f64) -> Vec<Tick> {
        let length = (self.to_px - self.from_px).abs();
        for most in (3..=10).rev() {
            let ticks = self.ticks(most);
            let widest = ticks.iter().map(|t| width_px(&t.label, size_px)).fold(0.0, f64::max);
            let room = ticks.windows(2).map(|w| self.place(w[1].value) - self.place(w[0].value));
            if room.fold(length, f64::min) >= widest + LABEL_GAP_PX {
                return ticks;
            }
        }
        self.ticks(2)
    }
}

/// A number within what can be drawn.
fn held(value: f64) -> f64 {
    value.clamp(-NUMBER_MAX, NUMBER_MAX)
}

fn whole(value: f64) -> i32 {
    value as i32
}

fn ten_to(exponent: i32) -> f64 {
    10_f64.powi(exponent)
}

/// n · 10^exponent; by division where that is exact.
fn number(n: i64, exponent: i32) -> f64 {
    if exponent < 0 && exponent > -300 {
        n as f64 / ten_to(-exponent)
    } else {
        n as f64 * ten_to(exponent)
    }
}

/// How all numbers of one axis are written: alike, so that they compare at a glance.
struct Numerals {
    /// The unit of the whole numbers given is ten to this.
    unit: i32,
    /// The exponent that is written; None for numbers written out.
    exponent: Option<i32>,
}

impl Numerals {
    fn of(largest: u64, unit: i32) -> Numerals {
        let digits = i32::try_from(largest.checked_ilog10().unwrap_or(0)).unwrap_or(0);
        let exponent = digits + unit;
        let long = exponent > 0 && exponent <= 15 && digits >= PLAIN_DIGITS;
        let plain = PLAIN_EXPONENTS.contains(&exponent) || long;
        Numerals { unit, exponent: (!plain).then_some(exponent) }
    }

    fn write(&self, n: i64) -> String {
        if n == 0 {
            return "0".to_owned();
        }
        let sign = if n < 0 { "-" } else { "" };
        let shift = self.unit - self.exponent.unwrap_or(0);
        let mut digits = n.unsigned_abs().to_string();
        if let Ok(zeros) = usize::try_from(shift) {
            digits.push_str(&"0".repeat(zeros));
        } else {
            let decimals = usize::try_from(-shift).unwrap_or(0);
            digits = format!("{digits:0>width$}", width = decimals + 1);
            digits.insert(digits.len() - decimals, '.');
        }
        let power = self.exponent.map_or_else(String::new, |e| format!("e{e}"));
        format!("{sign}{digits}{power}")
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn check(least: f64, most: f64, labels: &[&str]) {
        let axis = Axis::new(least, most, 0.0, (0.0, 500.0));
        let ticks = axis.ticks(5);
        let got: Vec<&str> = ticks.iter().map(|t| t.label.as_str()).collect();
        assert_eq!(got, labels, "{least} to {most}");
        for tick in &ticks {
            let written: f64 = tick.label.parse().unwrap();
            assert!((written - tick.value).abs() <= 1e-15 * written.abs(), "{tick:?}");
        }
    }

    #[test]
    fn numbers_are_readable_for_years_and_for_millionths() {
        check(1990.0, 2030.0, &["1990", "2000", "2010", "2020", "2030"]);
        check(0.0, 4e-6, &["0", "1e-6", "2e-6", "3e-6", "4e-6"]);
        check(0.0, 1.2e-5, &["0", "0.5e-5", "1.0e-5"]);
        check(-0.2, 0.3, &["-0.2", "-0.1", "0", "0.1", "0.2", "0.3"]);
        check(0.0, 900.0, &["0", "200", "400", "600", "800"]);
        check(0.0, 5e7, &["0", "1e7", "2e7", "3e7", "4e7", "5e7"]);
        check(
            1_700_000_000.0,
            1_700_000_400.0,
            &["1700000000", "1700000100", "1700000200", "1700000300", "1700000400"],
        );
    }

    #[test]
    fn equal_numbers_and_the_ends_of_the_scale_have_an_axis() {
        check(2000.0, 2000.0, &["1900", "1950", "2000", "2050", "2100"]);
        for (least, most) in [
            (0.0, 0.0),
            (1.0, 1.0_f64.next_up()),
            (5e-324, 1e-323),
            (f64::MIN, f64::MAX),
            (f64::MAX, f64::MAX),
            (-1e-300, 1e-300),
        ] {
            let axis = Axis::new(least, most, 0.05, (500.0, 0.0));
            assert!(axis.high > axis.low, "{axis:?}");
            for most in 2..12 {
                let ticks = axis.ticks(most);
                assert!((1..=most + 1).contains(&ticks.len()), "{axis:?}: {ticks:?}");
                assert!(ticks.iter().all(|t| t.label.len() < 24), "{ticks:?}");
                assert!(ticks.iter().all(|t| (0.0..=500.0).contains(&axis.place(t.value).round())));
            }
        }
    }

    #[test]
    fn labels_across_the_page_leave_a_gap() {
        let axis = Axis::new(1_700_000_000.0, 1_700_000_001.0, 0.0, (0.0, 400.0));
        let ticks = axis.ticks_across(12.0);
        assert!(ticks.len() >= 2, "{ticks:?}");
        for pair in ticks.windows(2) {
            let apart = axis.place(pair[1].value) - axis.place(pair[0].value);
            assert!(apart >= width_px(&pair[0].label, 12.0), "{ticks:?}");
        }
    }
}
