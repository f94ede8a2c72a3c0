//! The whitened window from one look to the next: kept, so that a new point costs one step and not
//! a rebuild of the whole window.
//!
//! A cache and nothing else: it is not saved and never compared. What a restart lacks is rebuilt from
//! the saved frame and the window's points, to the same bits.

use crate::drift::structure::{Frame, Whitened};

/// The kept window.
#[derive(Clone, Debug, Default)]
pub struct Whitening {
    kept: Option<Whitened>,
    /// Whether `kept` is of the present frame; if not, only its memory is used again.
    current: bool,
}

/// Equal to any other: it holds nothing that its channel's frame and points do not determine.
impl PartialEq for Whitening {
    fn eq(&self, _: &Whitening) -> bool {
        true
    }
}

impl Whitening {
    /// The frame or the points have changed by more than new points at the end.
    pub fn forget(&mut self) {
        self.current = false;
    }

    /// Returns the whitened form of a window.
    ///
    /// # Arguments
    /// `frame` — of the last refit; `points` — the window's points: age in days and deviation.
    ///
    /// # Outcomes
    /// `None` when there are too few points or one is not finite.
    ///
    /// # Numerics
    /// Slid when exactly one point is new, else rebuilt; both give the same bits.
    pub fn of(
        &mut self,
        frame: &Frame,
        points: impl DoubleEndedIterator<Item = (f64, f64)> + ExactSizeIterator + Clone,
    ) -> Option<&Whitened> {
        self.current = self.current && self.slide(points.clone());
        if !self.current {
            let (x, y): (Vec<f64>, Vec<f64>) = points.unzip();
            match &mut self.kept {
                Some(kept) => self.current = kept.refill(frame.clone(), &x, &y),
                none => {
                    *none = Whitened::new(frame.clone(), &x, &y);
                    self.current = none.is_some();
                }
            }
        }
        self.kept.as_ref().filter(|_| self.current)
    }

    /// False when the kept window is not the one before these points.
    fn slide(
        &mut self,
        mut points: impl DoubleEndedIterator<Item = (f64, f64)> + ExactSizeIterator,
    ) -> bool {
        let Some(kept) = &mut self.kept else { return false };
        let keep = points.len();
        let (Some((x, y)), Some((before, _))) = (points.next_back(), points.next_back()) else {
            return false;
        };
        kept.newest_age().to_bits() == before.to_bits()
            && kept.slide(x, y, keep)
            && kept.len() == keep
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::drift::family::Family;
    use crate::drift::structure::Framed;
    use crate::drift::structure::simulate::noise;

    /// 120 points of noise about 0, and a frame of the first 80.
    fn framed() -> (Vec<(f64, f64)>, Frame) {
        let points: Vec<(f64, f64)> =
            noise(3, 120, 0.3).into_iter().enumerate().map(|(i, y)| (i as f64 + 1.0, y)).collect();
        let (x, y): (Vec<f64>, Vec<f64>) = points[..80].iter().copied().unzip();
        let framed = Frame::of_series(&x, &y, Family::Linear, &[0.0; 4], None, None);
        let Framed::Ready(frame) = framed else { panic!("{framed:?}") };
        (points, frame)
    }

    /// Follows the windows `from..to` in turn and holds each against a rebuild.
    fn check(windows: &[(usize, usize)]) {
        let (points, frame) = framed();
        let mut kept = Whitening::default();
        for &(from, to) in windows {
            let got = kept.of(&frame, points[from..to].iter().copied()).unwrap();
            let mut fresh = Whitening::default();
            let rebuilt = fresh.of(&frame, points[from..to].iter().copied()).unwrap();
            assert_eq!(got, rebuilt, "{from}..{to}");
        }
    }

    #[test]
    fn a_kept_window_is_the_rebuilt_one() {
        check(&[(0, 80), (0, 81), (1, 82), (5, 83)]);
    }

    #[test]
    fn a_window_that_skipped_points_is_rebuilt() {
        check(&[(0, 80), (2, 90), (2, 90), (40, 91), (10, 92)]);
    }

    #[test]
    fn another_frame_is_not_served_from_the_old_one() {
        let (points, frame) = framed();
        let mut kept = Whitening::default();
        kept.of(&frame, points[..80].iter().copied()).unwrap();
        let mut other = frame.clone();
        other.noise *= 2.0;
        kept.forget();
        let got = kept.of(&other, points[..81].iter().copied()).unwrap().clone();
        assert_eq!(&got, Whitening::default().of(&other, points[..81].iter().copied()).unwrap());
        assert!(kept.of(&other, points[..10].iter().copied()).is_none());
    }
}
