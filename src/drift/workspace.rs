//! Room for the watch's fits: it refits all day, and after the first time allocates nothing.

use crate::drift::family::COEFFICIENTS_MAX;
use crate::drift::outcome::Fit;

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
    /// Roots of the weights; empty without weights.
    pub roots: Vec<f64>,
    /// y times these.
    pub weighted_y: Vec<f64>,
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
    /// The logarithms of some ages. They are taken anew only for ages that are not among those of the
    /// last time, in a row.
    pub(crate) fn logarithms(&mut self, x: &[f64]) -> (&[f64], &mut Room) {
        let same = |(a, b): (&f64, &f64)| a.to_bits() == b.to_bits();
        let begins = |known: &f64| x.first().is_some_and(|first| same((known, first)));
        let from = self.known_x.iter().position(begins).unwrap_or(0);
        let known = self.known_x.get(from..from + x.len());
        if known.is_some_and(|known| known.iter().zip(x).all(same)) {
            return (&self.ln_x[from..from + x.len()], &mut self.room);
        }
        refill(&mut self.known_x, x.iter().copied());
        refill(&mut self.ln_x, x.iter().map(|v| v.ln()));
        (&self.ln_x, &mut self.room)
    }

    /// Holds a curve against some ages: its values are left in place of residuals, its gradients to
    /// the inner coefficients in the columns.
    pub(crate) fn held(&mut self, fit: &Fit, x: &[f64]) -> &mut Room {
        let (ln_x, room) =
            if fit.family.needs_positive_age() { self.logarithms(x) } else { (x, &mut self.room) };
        let ln_scale = fit.frame.scale.ln();
        for column in &mut room.columns {
            column.resize(x.len(), 0.0);
        }
        room.residuals.resize(x.len(), 0.0);
        for (i, (&x, &ln_x)) in x.iter().zip(ln_x).enumerate() {
            let u = fit.frame.inside(x);
            let (value, row) = fit.family.value_and_gradient(&fit.inner, u, ln_x - ln_scale);
            room.residuals[i] = value;
            for (column, v) in room.columns.iter_mut().zip(row) {
                column[i] = v;
            }
        }
        room
    }

    /// Numbers for which there is room, all buffers together.
    pub fn capacity(&self) -> usize {
        let Room { ages, columns, roots, weighted_y, residuals, clipped, sizes, scratch } =
            &self.room;
        [&self.known_x, &self.ln_x, ages, roots, weighted_y, residuals, clipped]
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
