//! A curve as a line on the picture: as many places as its bends need, cut at the panel's edge.

use super::canvas::Place;

/// Pieces that a curve is first divided into; the families have no bends that fall between.
const PIECES: u32 = 64;
/// How often a piece is halved at most.
const HALVINGS_MAX: u32 = 14;
/// A piece is straight when its middle lies this close to the chord, pixels.
const STRAIGHT_PX: f64 = 0.2;
/// Lines this far outside a panel need no care, pixels.
const FAR_PX: f64 = 2_000.0;

/// Some curves of one x, in pixels; None where they are not defined.
pub type Curves<'a, const N: usize> = &'a dyn Fn(f64) -> Option<[f64; N]>;
/// x and the curves' heights, x rising, without a gap.
pub type Run<const N: usize> = Vec<(f64, [f64; N])>;
/// x and what the curves are there.
type Sample<const N: usize> = (f64, Option<[f64; N]>);

/// Traces curves over a range.
///
/// # Returns
/// The runs in which all of them are defined.
pub fn trace<const N: usize>(curves: Curves<'_, N>, from: f64, to: f64) -> Vec<Run<N>> {
    let sample = |x: f64| -> Sample<N> { (x, curves(x).map(|ys| ys.map(near))) };
    let mut samples = vec![sample(from)];
    for piece in 1..=PIECES {
        let share = f64::from(piece) / f64::from(PIECES);
        let end = sample(from * (1.0 - share) + to * share);
        let begin = samples[samples.len() - 1];
        halve(&sample, begin, end, HALVINGS_MAX, &mut samples);
    }
    let gaps = samples.split(|(_, ys)| ys.is_none());
    let whole = |run: &[Sample<N>]| run.iter().filter_map(|&(x, ys)| Some((x, ys?))).collect();
    gaps.filter(|run| run.len() > 1).map(whole).collect()
}

fn near(y_px: f64) -> f64 {
    y_px.clamp(-FAR_PX, FAR_PX)
}

/// Adds the samples after `begin` up to `end`.
fn halve<const N: usize>(
    sample: &dyn Fn(f64) -> Sample<N>,
    begin: Sample<N>,
    end: Sample<N>,
    halvings: u32,
    samples: &mut Vec<Sample<N>>,
) {
    let middle = sample(0.5 * begin.0 + 0.5 * end.0);
    let straight = match (begin.1, middle.1, end.1) {
        (Some(a), Some(m), Some(b)) => {
            (0..N).all(|k| (m[k] - 0.5 * (a[k] + b[k])).abs() < STRAIGHT_PX)
        }
        (None, None, None) => true,
        _ => false,
    };
    if straight || halvings == 0 {
        samples.push(end);
        return;
    }
    halve(sample, begin, middle, halvings - 1, samples);
    halve(sample, middle, end, halvings - 1, samples);
}

/// Cuts a line at two heights.
///
/// # Arguments
/// `line` — places, x rising; `top`, `bottom` — pixels, top < bottom.
///
/// # Returns
/// The parts that lie between, in order.
pub fn cut(line: &[Place], top: f64, bottom: f64) -> Vec<Vec<Place>> {
    let (mut parts, mut part): (Vec<Vec<Place>>, Vec<Place>) = (Vec::new(), Vec::new());
    for pair in line.windows(2) {
        let ((x0, y0), (x1, y1)) = (pair[0], pair[1]);
        // The shares of the piece at which it enters and leaves.
        let (mut enter, mut leave) = (0.0_f64, 1.0_f64);
        let rise = y1 - y0;
        if rise == 0.0 {
            if !(top..=bottom).contains(&y0) {
                leave = -1.0;
            }
        } else {
            let (a, b) = ((top - y0) / rise, (bottom - y0) / rise);
            enter = enter.max(a.min(b));
            leave = leave.min(a.max(b));
        }
        if enter > leave {
            continue;
        }
        let at = |share: f64| (x0 + share * (x1 - x0), y0 + share * rise);
        if enter > 0.0 || part.is_empty() {
            parts.push(std::mem::take(&mut part));
            part.push(at(enter));
        }
        part.push(at(leave));
        if leave < 1.0 {
            parts.push(std::mem::take(&mut part));
        }
    }
    parts.push(part);
    parts.retain(|part| part.len() > 1);
    parts
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_bent_curve_is_followed_to_a_fraction_of_a_pixel() {
        let steep = |x: f64| (x > 0.0).then(|| [500.0 * x.powf(0.1)]);
        let runs = trace(&steep, -0.1, 1.0);
        assert_eq!(runs.len(), 1);
        for pair in runs[0].windows(2) {
            let middle = 0.5 * (pair[0].0 + pair[1].0);
            let chord = 0.5 * (pair[0].1[0] + pair[1].1[0]);
            let apart = (steep(middle).unwrap()[0] - chord).abs();
            // Where it leaves the edge of its domain upright, the halvings end first.
            assert!(apart < STRAIGHT_PX || middle < 1e-3, "{apart} at {middle}");
        }
        assert!(trace::<1>(&|_| None, 0.0, 1.0).is_empty());
    }

    #[test]
    fn a_line_is_cut_where_it_leaves_the_panel() {
        let up_and_down = [(0.0, 5.0), (10.0, 25.0), (20.0, 5.0), (30.0, 5.0)];
        assert_eq!(
            cut(&up_and_down, 0.0, 15.0),
            [vec![(0.0, 5.0), (5.0, 15.0)], vec![(15.0, 15.0), (20.0, 5.0), (30.0, 5.0)]]
        );
        assert!(cut(&[(0.0, -9.0), (10.0, -1.0)], 0.0, 15.0).is_empty());
        assert!(cut(&[(0.0, 99.0), (10.0, 99.0)], 0.0, 15.0).is_empty());
        let through = cut(&[(0.0, -10.0), (10.0, 30.0)], 0.0, 20.0);
        assert_eq!(through, [vec![(2.5, 0.0), (7.5, 20.0)]]);
    }
}
