//! The sliding window of one channel: readings in, points out.
//!
//! A reading is first held back until nothing older can still arrive within the lateness bound, then
//! joins the open bin; a bin that a later reading has passed becomes one point. Without bins each
//! reading is a point. The order of arrival inside the lateness bound therefore does not matter.

use crate::watch::limits::{HELD_BACK_MAX, REMEMBERED_TIMES_MAX};
use crate::watch::reading::Taken;
use crate::watch::settings::WatchSettings;
use crate::watch::time::EventTime;
use serde::{Deserialize, Serialize};
use std::collections::VecDeque;

/// One point of the window.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize)]
pub struct Point {
    /// The mean time of its readings.
    pub time: EventTime,
    /// The mean deviation of its readings, in the channel's unit.
    pub mean: f64,
    /// How many readings it holds, ≥ 1.
    pub count: u32,
    /// Standard deviation of the readings within it (divisor count − 1); 0 for one reading.
    pub spread: f64,
}

/// The bin that still takes readings: running mean and sum of squares (Welford 1962).
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize)]
struct OpenBin {
    /// Which bin: floor(time / width); with no width, the time itself.
    place: i64,
    start: EventTime,
    /// Mean time past `start`, µs.
    mean_offset_us: f64,
    mean: f64,
    sum_of_squares: f64,
    count: u32,
}

/// The sliding window of one channel.
#[derive(Clone, Debug, Default, PartialEq, Serialize, Deserialize)]
pub struct Window {
    /// Readings waiting for older ones, in order of time.
    held_back: VecDeque<(EventTime, f64)>,
    open: Option<OpenBin>,
    points: VecDeque<Point>,
    /// Times and values let through last, to tell a duplicate from a late reading.
    remembered: VecDeque<(EventTime, f64)>,
    /// The newest reading that has arrived.
    newest: Option<EventTime>,
}

impl Window {
    /// Takes one reading; follow with [`Window::next_point`] until it gives none.
    pub fn take(&mut self, time: EventTime, deviation: f64) -> Taken {
        let same = |&&(t, _): &&(EventTime, f64)| t == time;
        if let Some(&(_, known)) =
            self.held_back.iter().find(same).or_else(|| self.remembered.iter().find(same))
        {
            return if known.to_bits() == deviation.to_bits() {
                Taken::Duplicate
            } else {
                Taken::Contradicts
            };
        }
        if self.remembered.back().is_some_and(|&(let_through, _)| time < let_through) {
            return Taken::Late;
        }
        let place = self.held_back.partition_point(|&(t, _)| t < time);
        self.held_back.insert(place, (time, deviation));
        self.newest = self.newest.max(Some(time));
        Taken::Accepted
    }

    /// Lets through what need not wait any longer, until that completes a point; the point is then
    /// part of the window. None: nothing more to be had from the readings so far.
    pub fn next_point(&mut self, rules: &WatchSettings) -> Option<Point> {
        while self.first_may_pass(rules) {
            let (time, value) = self.held_back.pop_front().expect("first_may_pass saw one");
            if self.remembered.len() == REMEMBERED_TIMES_MAX {
                self.remembered.pop_front();
            }
            self.remembered.push_back((time, value));
            let closed = self.join_bin(rules, time, value);
            if let Some(point) = closed {
                self.points.push_back(point);
                self.trim(rules);
                return Some(point);
            }
        }
        None
    }

    fn first_may_pass(&self, rules: &WatchSettings) -> bool {
        let (Some(&(first, _)), Some(newest)) = (self.held_back.front(), self.newest) else {
            return false;
        };
        first.plus(rules.lateness) <= newest || self.held_back.len() > HELD_BACK_MAX
    }

    /// Adds a reading to the open bin, or closes that bin and opens the next.
    fn join_bin(&mut self, rules: &WatchSettings, time: EventTime, value: f64) -> Option<Point> {
        let Some(width) = rules.bin else {
            return Some(Point { time, mean: value, count: 1, spread: 0.0 });
        };
        let place = time.0.div_euclid(width.0.max(1));
        match &mut self.open {
            Some(bin) if bin.place == place => {
                bin.add(time, value);
                None
            }
            open => open.replace(OpenBin::new(place, time, value)).map(OpenBin::close),
        }
    }

    /// Drops what is too old or too much.
    fn trim(&mut self, rules: &WatchSettings) {
        let Some(newest) = self.points.back().map(|p| p.time) else { return };
        while self.points.len() > rules.window_points
            || self.points.front().is_some_and(|p| p.time.plus(rules.window_span) < newest)
        {
            self.points.pop_front();
        }
    }

    /// Drops the points before `from`: the window begins anew at a break.
    pub fn begin_at(&mut self, from: EventTime) {
        while self.points.front().is_some_and(|p| p.time < from) {
            self.points.pop_front();
        }
    }

    /// Forgets everything up to and including `mark`: a new calibration cycle begins there.
    pub fn begin_cycle(&mut self, mark: EventTime) {
        while self.points.front().is_some_and(|p| p.time <= mark) {
            self.points.pop_front();
        }
        self.held_back.retain(|&(t, _)| t > mark);
        if self.open.is_some_and(|bin| bin.start <= mark) {
            self.open = None;
        }
    }

    /// Forgets all readings: those to come are measured otherwise. Only when the last one came stays.
    pub fn begin_anew(&mut self) {
        *self = Window { newest: self.newest, ..Window::default() };
    }

    /// The points, oldest first.
    pub fn points(&self) -> &VecDeque<Point> {
        &self.points
    }

    /// Time of the newest reading that has arrived, whether or not it is in a point yet.
    pub fn newest_reading(&self) -> Option<EventTime> {
        self.newest
    }

    /// Readings in the points of the window.
    pub fn readings(&self) -> u64 {
        self.points.iter().map(|p| u64::from(p.count)).sum()
    }
}

impl OpenBin {
    fn new(place: i64, start: EventTime, value: f64) -> OpenBin {
        OpenBin { place, start, mean_offset_us: 0.0, mean: value, sum_of_squares: 0.0, count: 1 }
    }

    #[expect(clippy::cast_precision_loss, reason = "an offset within one bin is far below 2^53 µs")]
    fn add(&mut self, time: EventTime, value: f64) {
        self.count = self.count.saturating_add(1);
        let n = f64::from(self.count);
        let step = value - self.mean;
        self.mean += step / n;
        self.sum_of_squares += step * (value - self.mean);
        let offset = time.0.saturating_sub(self.start.0) as f64;
        self.mean_offset_us += (offset - self.mean_offset_us) / n;
    }

    #[expect(clippy::cast_possible_truncation, reason = "an offset within one bin fits i64")]
    fn close(self) -> Point {
        let freedom = f64::from(self.count.max(2) - 1);
        Point {
            time: EventTime(self.start.0.saturating_add(self.mean_offset_us.round() as i64)),
            mean: self.mean,
            count: self.count,
            spread: (self.sum_of_squares / freedom).max(0.0).sqrt(),
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::watch::settings::tests::watch_settings;
    use crate::watch::time::Span;

    const HOUR_US: i64 = 3_600_000_000;

    fn at(hours: i64) -> EventTime {
        EventTime(1_700_000_000_000_000 / HOUR_US * HOUR_US + hours * HOUR_US)
    }

    /// Feeds readings (hours, value) and returns what the window holds, as text.
    fn check(rules: &WatchSettings, readings: &[(i64, f64)]) -> (Vec<Taken>, Vec<(i64, f64, u32)>) {
        let mut window = Window::default();
        let mut taken = Vec::new();
        for &(hours, value) in readings {
            taken.push(window.take(at(hours), value));
            while window.next_point(rules).is_some() {}
        }
        let points = window
            .points()
            .iter()
            .map(|p| ((p.time.0 - at(0).0) / HOUR_US, p.mean, p.count))
            .collect();
        (taken, points)
    }

    #[test]
    fn without_bins_each_reading_is_a_point() {
        let (_, points) = check(&watch_settings(), &[(0, 1.0), (1, 2.0)]);
        assert_eq!(points, [(0, 1.0, 1), (1, 2.0, 1)]);
    }

    #[test]
    fn a_bin_becomes_a_point_when_a_later_reading_passes_it() {
        let rules = WatchSettings { bin: Some(Span(4 * HOUR_US)), ..watch_settings() };
        let base = at(0).0.div_euclid(4 * HOUR_US) * 4 - at(0).0 / HOUR_US;
        let (_, points) =
            check(&rules, &[(base, 1.0), (base + 2, 3.0), (base + 4, 10.0), (base + 8, 20.0)]);
        assert_eq!(points, [(base + 1, 2.0, 2), (base + 4, 10.0, 1)]);
    }

    #[test]
    fn late_reading_is_counted_not_fitted() {
        let (taken, points) = check(&watch_settings(), &[(0, 1.0), (2, 2.0), (1, 9.0)]);
        assert_eq!(taken, [Taken::Accepted, Taken::Accepted, Taken::Late]);
        assert_eq!(points.len(), 2);
    }

    #[test]
    fn order_of_arrival_inside_the_lateness_bound_does_not_matter() {
        let rules = WatchSettings { lateness: Span(3 * HOUR_US), ..watch_settings() };
        let sorted = [(0, 1.0), (1, 2.0), (2, 3.0), (3, 4.0), (4, 5.0), (9, 6.0)];
        let shuffled = [(2, 3.0), (0, 1.0), (1, 2.0), (4, 5.0), (3, 4.0), (9, 6.0)];
        assert_eq!(check(&rules, &sorted).1, check(&rules, &shuffled).1);
    }

    #[test]
    fn a_duplicate_is_told_from_a_contradiction() {
        let (taken, points) = check(&watch_settings(), &[(0, 1.0), (0, 1.0), (0, 2.0)]);
        assert_eq!(taken, [Taken::Accepted, Taken::Duplicate, Taken::Contradicts]);
        assert_eq!(points, [(0, 1.0, 1)]);
    }

    #[test]
    fn window_drops_oldest_when_full_and_when_past_the_span() {
        let rules = WatchSettings { window_points: 2, ..watch_settings() };
        assert_eq!(check(&rules, &[(0, 1.0), (1, 2.0), (2, 3.0)]).1, [(1, 2.0, 1), (2, 3.0, 1)]);
        let rules = WatchSettings { window_span: Span(5 * HOUR_US), ..watch_settings() };
        assert_eq!(check(&rules, &[(0, 1.0), (5, 2.0), (6, 3.0)]).1, [(5, 2.0, 1), (6, 3.0, 1)]);
    }

    #[test]
    fn held_back_readings_are_bounded() {
        let rules = WatchSettings { lateness: Span(i64::MAX / 4), ..watch_settings() };
        let readings: Vec<_> = (0..HELD_BACK_MAX as i64 + 10).map(|i| (i, 0.0)).collect();
        assert_eq!(check(&rules, &readings).1.len(), 10);
    }

    #[test]
    fn a_calibration_mark_empties_the_window_up_to_it() {
        let mut window = Window::default();
        for hours in 0..5 {
            window.take(at(hours), 1.0);
            while window.next_point(&watch_settings()).is_some() {}
        }
        window.begin_cycle(at(2));
        assert_eq!(window.points().len(), 2);
    }
}
