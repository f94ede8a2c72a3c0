//! Room for the watch's fits: it refits all day, and after the first time allocates nothing.

use crate::drift::family::COEFFICIENTS_MAX;

/// Buffers of one window's length each, kept from one fit to the next.
///
/// What they hold never changes a result; the only thing that is remembered, the logarithms of the
/// ages, is checked against the ages. About a dozen numbers a reading; a window holds a few thousand
/// readings at most.
#[derive(Clone, Debug, Default)]
pub struct Workspace {
    /// The ages whose logarithms are in `ln_x`.
    known_x: Vec<f64>,
    /// ln x.
    ln_x: Vec<f64>,
    /// The rest, to be used apart from each other.
    pub(crate) room: Room,
}

/// Buffers without memory.
#[derive(Clone, Debug, Default)]
pub(crate) struct Room {
    /// Inner ages, or their logarithms.
    pub ages: Vec<f64>,
    /// The curve's derivative to each coefficient.
    pub columns: [Vec<f64>; COEFFICIENTS_MAX],
    /// y less the curve.
    pub residuals: Vec<f64>,
    /// The same, clipped.
    pub clipped: Vec<f64>,
    /// Their sizes, for a median.
    pub sizes: Vec<u64>,
    /// Whatever is needed for a moment.
    pub scratch: [Vec<f64>; COEFFICIENTS_MAX + 1],
}

impl Workspace {
    /// The logarithms of some ages, taken anew only for new ages.
    pub(crate) fn logarithms(&mut self, x: &[f64]) -> (&[f64], &mut Room) {
        let same = |a: &f64, b: &f64| a.to_bits() == b.to_bits();
        let known =
            self.known_x.len() == x.len() && self.known_x.iter().zip(x).all(|(a, b)| same(a, b));
        if !known {
            refill(&mut self.known_x, x.iter().copied());
            refill(&mut self.ln_x, x.iter().map(|v| v.ln()));
        }
        (&self.ln_x, &mut self.room)
    }

    /// Numbers for which there is room, all buffers together.
    pub fn capacity(&self) -> usize {
        let Room { ages, columns, residuals, clipped, sizes, scratch } = &self.room;
        [&self.known_x, &self.ln_x, ages, residuals, clipped]
            .into_iter()
            .chain(columns)
            .chain(scratch)
            .map(Vec::capacity)
            .sum::<usize>()
            + sizes.capacity()
    }
}

/// Replaces what a buffer holds.
pub(crate) fn refill<T>(buffer: &mut Vec<T>, values: impl Iterator<Item = T>) {
    buffer.clear();
    buffer.extend(values);
}
