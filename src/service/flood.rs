//! Keeps a flood of bad messages out of the log: so many lines a second for each reason, the rest
//! counted.

use std::collections::BTreeMap;

/// Lines for one reason between two pulses (one second).
const LINES_MAX: u32 = 5;

/// What was let through and what was not.
#[derive(Debug, Default)]
pub struct Flood {
    /// Lines since the last pulse, and lines held back since the last one that was let through.
    reasons: BTreeMap<&'static str, (u32, u64)>,
}

impl Flood {
    /// Some: write the line, so many were held back before it. None: hold it back.
    pub fn admit(&mut self, reason: &'static str) -> Option<u64> {
        let (lines, held_back) = self.reasons.entry(reason).or_default();
        if *lines < LINES_MAX {
            *lines += 1;
            return Some(std::mem::take(held_back));
        }
        *held_back += 1;
        None
    }

    /// A second has passed.
    pub fn pulse(&mut self) {
        self.reasons.values_mut().for_each(|(lines, _)| *lines = 0);
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_flood_is_counted_not_written() {
        let mut flood = Flood::default();
        let written = (0..1000).filter(|_| flood.admit("not-json").is_some()).count();
        assert_eq!(written, 5);
        flood.pulse();
        assert_eq!(flood.admit("not-json"), Some(995));
        assert_eq!(flood.admit("empty"), Some(0));
    }
}
