//! A jump that nobody needs a test for: the level changes from one reading to the next by many times
//! what neighbours differ by. It settles what a large change is called, and when it came: scores of
//! step, bend and dependence all run off the scale there, and tell nothing about each other.

use super::Whitened;

/// Levels are medians of so many readings before and after.
const LEVEL_POINTS: usize = 3;
/// Its size is the difference of the medians of up to so many.
const SIZE_POINTS: usize = 5;
/// A jump is so many robust standard deviations of the difference of two neighbours (own rule: in noise
/// correlated by up to 0.95 levels three readings apart differ by less than 6).
const JUMP_SDS: f64 = 8.0;
/// Across a longer spacing than this, in medians, a change is no jump: nobody saw how it came.
const SPACING_MAX: f64 = 3.0;
/// Places whose levels differ by at least this share of the largest difference are told apart by the
/// two readings at the place itself.
const AS_LARGE: f64 = 0.8;

/// Where the readings jumped, and by how much.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(crate) struct Jump {
    /// Index of the first point after it.
    pub index: usize,
    /// y's unit, signed.
    pub size: f64,
}

/// Looks for a jump in the newer half of the window.
///
/// # Arguments
/// `w` — the whitened window; `differences` — memory to reuse.
/// # Outcomes
/// None: there is none, or neighbours never differ.
pub(crate) fn look(w: &Whitened, differences: &mut Vec<f64>) -> Option<Jump> {
    let e = |j: usize| w.points[j].e;
    let n = w.len();
    differences.clear();
    differences.extend((1..n).map(|j| (e(j) - e(j - 1)).abs()));
    let scale = 1.4826 * crate::drift::serial::median(differences);
    let level = |from: usize| median_of_three(e(from), e(from + 1), e(from + 2));
    let change = |at: usize| level(at) - level(at - LEVEL_POINTS);
    let places = (n - n / 2).max(LEVEL_POINTS)..(n + 1).saturating_sub(LEVEL_POINTS);
    let seen = |at: &usize| {
        w.points[at + 1 - LEVEL_POINTS..at + LEVEL_POINTS].iter().all(|p| p.ratio <= SPACING_MAX)
    };
    let largest = places.clone().filter(seen).map(|at| change(at).abs()).fold(0.0_f64, f64::max);
    if scale <= 0.0 || largest < JUMP_SDS * scale {
        return None;
    }
    let index = places
        .filter(seen)
        .filter(|&at| change(at).abs() >= AS_LARGE * largest)
        .max_by(|&a, &b| (e(a) - e(a - 1)).abs().total_cmp(&(e(b) - e(b - 1)).abs()))?;
    // By the levels on either side: a curve fitted across the jump leans on it, and would take its share.
    let mut level_of = |from: usize, to: usize| {
        differences.clear();
        differences.extend((from..to).map(e));
        crate::drift::serial::median(differences)
    };
    let after = level_of(index, n.min(index + SIZE_POINTS));
    let before = level_of(index.saturating_sub(SIZE_POINTS), index);
    Some(Jump { index, size: after - before })
}

fn median_of_three(a: f64, b: f64, c: f64) -> f64 {
    a.max(b).min(a.min(b).max(c))
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::drift::family::Family;
    use crate::drift::structure::simulate::noise;
    use crate::drift::structure::{Frame, Framed};

    /// What is found in 200 points about a line, with noise of 1 and what is added.
    fn check(seed: u64, phi: f64, added: impl Fn(usize) -> f64) -> Option<Jump> {
        println!("seed {seed}");
        let x: Vec<f64> = (1..=200).map(f64::from).collect();
        let y: Vec<f64> =
            noise(seed, 200, phi).iter().enumerate().map(|(i, e)| e + added(i)).collect();
        let theta = [y.iter().sum::<f64>() / 200.0, 0.0, 0.0, 0.0];
        let framed = Frame::of_series(&x, &y, Family::Linear, &theta, None, None);
        let Framed::Ready(frame) = framed else { panic!("{framed:?}") };
        look(&Whitened::new(frame, &x, &y).expect("a window"), &mut Vec::new())
    }

    #[test]
    fn a_jump_is_dated_to_the_reading_and_sized() {
        for (seed, size) in [(1, 30.0), (2, -100.0), (3, 1000.0)] {
            let jump = check(seed, 0.3, |i| if i >= 150 { size } else { 0.0 }).expect("a jump");
            assert_eq!(jump.index, 150);
            assert!((jump.size - size).abs() < 2.0, "{jump:?}");
        }
    }

    #[test]
    fn noise_however_dependent_and_a_bend_are_no_jumps() {
        for seed in 10..60 {
            for phi in [0.0, 0.3, 0.9, 0.95] {
                assert_eq!(check(seed, phi, |_| 0.0), None, "phi {phi}");
            }
            let bend = |i: usize| i.saturating_sub(120) as f64;
            assert_eq!(check(seed, 0.3, bend), None);
        }
    }

    #[test]
    fn one_wild_reading_is_no_jump() {
        assert_eq!(check(4, 0.3, |i| if i == 150 { 500.0 } else { 0.0 }), None);
    }
}
