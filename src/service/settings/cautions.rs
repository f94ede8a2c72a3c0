//! What is allowed in the settings and yet will hardly be meant.

use super::Settings;
use super::duration::show_span;
use crate::drift::reach::cap;
use crate::service::intake::Route;
use crate::service::shown::Shown;
use crate::watch::settings::{Statement, WatchSettings};
use crate::watch::time::{ShellTime, Span};

impl Settings {
    /// What should be said although it is allowed; sentences without full stop.
    ///
    /// # Arguments
    /// `now` — by which dates are past or still to come.
    pub fn cautions(&self, now: ShellTime) -> Vec<String> {
        let mut cautions: Vec<String> = self.connection_caution().into_iter().collect();
        for (i, (watch, route)) in self.site.watches.iter().zip(&self.routes).enumerate() {
            let key = format!("watch[{}]", i + 1);
            cautions.extend(calibrated_caution(&key, watch, now));
            cautions.extend(statement_caution(&key, watch, now));
            cautions.extend(captures_caution(&key, route));
            cautions.extend(self.same_name_caution(i));
        }
        cautions
    }

    fn connection_caution(&self) -> Option<String> {
        let host = &self.broker.host;
        let here = host == "localhost"
            || host.parse::<std::net::IpAddr>().is_ok_and(|address| address.is_loopback());
        (!here).then(|| {
            format!(
                "the connection to {host} is not encrypted: readings{} can be read and changed on the way",
                if self.broker.password.is_some() { " and the password" } else { "" }
            )
        })
    }

    /// One for each watch at most: the first watch before it that can give the same names.
    fn same_name_caution(&self, later: usize) -> Option<String> {
        let channel = &self.routes[later].channel;
        let earlier = self.routes[..later].iter().position(|e| e.channel.may_equal(channel))?;
        Some(format!(
            "watch[{}].channel \"{}\" and watch[{}].channel \"{}\" can give the same name: a channel \
             belongs to one watch, and readings for it from the other one are refused; begin one of \
             them with a word of its own",
            earlier + 1,
            Shown(self.routes[earlier].channel.as_str(), 80),
            later + 1,
            Shown(channel.as_str(), 80),
        ))
    }
}

fn calibrated_caution(key: &str, watch: &WatchSettings, now: ShellTime) -> Option<String> {
    let age_zero = watch.calibrated.filter(|age_zero| age_zero.0 > now.0)?;
    Some(format!(
        "{key}.calibrated {age_zero} is still to come: readings up to then are counted and not fitted"
    ))
}

fn statement_caution(key: &str, watch: &WatchSettings, now: ShellTime) -> Option<String> {
    match watch.statement? {
        Statement::NextVisit(day) if day.0 <= now.0 => Some(format!(
            "{key}.next_visit {day} is past: no forecast is made until a new one is set"
        )),
        Statement::LookAhead(ahead) => {
            let share = cap(points_at_most(watch));
            let furthest = Span::from_days(share * watch.window_span.days());
            (ahead > furthest).then(|| {
                format!(
                    "{key}.look_ahead {} is longer than {share} of the window, {}: no window like \
                     this carries a statement that far, so none will ever be made; lengthen the \
                     window, or ask for less",
                    show_span(ahead),
                    show_span(Span(furthest.0 / 1_000_000 * 1_000_000))
                )
            })
        }
        Statement::NextVisit(_) => None,
    }
}

/// The most points that can stand in the window: with bins, no more than the bins it touches.
fn points_at_most(watch: &WatchSettings) -> usize {
    let bins = watch.bin.map_or(i64::MAX, |bin| watch.window_span.0 / bin.0.max(1) + 2);
    watch.window_points.min(usize::try_from(bins).unwrap_or(usize::MAX))
}

fn captures_caution(key: &str, route: &Route) -> Option<String> {
    let unused: Vec<String> =
        route.channel.left_out(&route.pattern).map(|name| format!("{{{name}}}")).collect();
    (!unused.is_empty()).then(|| {
        format!(
            "{key}.channel leaves out {}: topics that differ only there are merged into one channel",
            unused.join(" and ")
        )
    })
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::service::settings::Environment;
    use std::path::Path;

    /// 2026-06-01T00:00:00Z.
    const NOW: ShellTime = ShellTime(1_780_272_000_000_000);

    fn check(watches: &[&str], expected: &[&str]) {
        let mut text = "site.name = \"saltmarsh\"\nbroker.url = \"mqtt://127.0.0.1\"\n".to_owned();
        for watch in watches {
            text += &format!("[[watch]]\nunit = \"bar\"\n{watch}\n");
        }
        let settings = Settings::read(&text, Path::new("a.toml"), &Environment::default());
        let settings = settings.unwrap_or_else(|problems| panic!("{problems}"));
        assert_eq!(settings.cautions(NOW), expected, "{watches:?}");
    }

    fn check_one(line: &str, expected: &[&str]) {
        check(&[&format!("topic = \"plant/{{tag}}\"\n{line}")], expected);
    }

    #[test]
    fn age_zero_still_to_come_is_pointed_out() {
        check_one("calibrated = \"2026-05-31T23:59:59Z\"", &[]);
        check_one(
            "calibrated = \"2027-03-01T00:00:00Z\"",
            &[
                "watch[1].calibrated 2027-03-01T00:00:00Z is still to come: readings up to then are \
               counted and not fitted",
            ],
        );
    }

    #[test]
    fn a_visit_that_is_past_is_pointed_out() {
        check_one("next_visit = \"2026-06-01T00:00:01Z\"", &[]);
        check_one(
            "next_visit = \"2026-05-01T08:00:00Z\"",
            &[
                "watch[1].next_visit 2026-05-01T08:00:00Z is past: no forecast is made until a new one \
               is set",
            ],
        );
    }

    #[test]
    fn a_look_ahead_beyond_what_any_window_carries_is_pointed_out() {
        let never = |ahead: &str, share: &str, furthest: &str| {
            format!(
                "watch[1].look_ahead {ahead} is longer than {share} of the window, {furthest}: no \
                 window like this carries a statement that far, so none will ever be made; lengthen \
                 the window, or ask for less"
            )
        };
        check_one("look_ahead = \"54d\"\nwindow = { span = \"90d\" }", &[]);
        let window = "window = { span = \"90d\" }";
        check_one(&format!("look_ahead = \"55d\"\n{window}"), &[&never("55d", "0.6", "54d")]);
        // Fewer than 120 points: the cap is tighter, whether by their number or by bins.
        for window in ["span = \"90d\", points = 100", "span = \"90d\", bin = \"1d\""] {
            let window = format!("window = {{ {window} }}");
            check_one(&format!("look_ahead = \"18d\"\n{window}"), &[]);
            check_one(&format!("look_ahead = \"20d\"\n{window}"), &[&never("20d", "0.2", "18d")]);
        }
    }

    #[test]
    fn a_capture_that_the_name_leaves_out_is_pointed_out() {
        check(
            &["topic = \"plant/{area}/{line}/{tag}\"\nchannel = \"{tag}\""],
            &["watch[1].channel leaves out {area} and {line}: topics that differ only there are \
               merged into one channel"],
        );
        check(&["topic = \"plant/{area}/{tag}\""], &[]);
    }

    #[test]
    fn watches_that_can_give_the_same_name_are_pointed_out() {
        check(
            &["topic = \"p/{tag}/d\"", "topic = \"q/{tag}/temp\"\nchannel = \"{tag}\""],
            &[
                "watch[1].channel \"{tag}\" and watch[2].channel \"{tag}\" can give the same name: a \
               channel belongs to one watch, and readings for it from the other one are refused; \
               begin one of them with a word of its own",
            ],
        );
        check(
            &["topic = \"p/{tag}/d\"", "topic = \"q/{tag}/temp\"\nchannel = \"temp/{tag}\""],
            &[],
        );
    }
}
