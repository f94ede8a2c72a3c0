//! Topic patterns with captures, channel names made from them, and channel names as topic levels.
//!
//! `plant/{area}/{tag}/deviation` captures two whole levels; the MQTT filter is
//! `plant/+/+/deviation`. A capture is always a whole, non-empty level, since MQTT cannot subscribe to
//! a part of one. Bare wildcards are not allowed: `+` is a capture without a name, so name it (a
//! capture need not be used); `#` would mix topics of different depth in one watch.

use std::fmt::Write as _;

/// The longest topic pattern, bytes.
pub const PATTERN_BYTES_MAX: usize = 1024;
/// The most levels of a topic pattern.
pub const PATTERN_LEVELS_MAX: usize = 32;
/// The longest channel name and channel template, bytes.
pub const CHANNEL_BYTES_MAX: usize = 256;
/// The longest capture name, bytes.
pub const CAPTURE_BYTES_MAX: usize = 32;

/// What is wrong with a topic pattern.
#[derive(Clone, Debug, PartialEq, Eq, thiserror::Error)]
pub enum PatternFault {
    /// No text.
    #[error("it is empty")]
    Empty,
    /// More than [`PATTERN_BYTES_MAX`] bytes or [`PATTERN_LEVELS_MAX`] levels.
    #[error("it is longer than 1024 bytes or 32 levels")]
    TooLong,
    /// `+` or `#`.
    #[error("bare wildcards are not read; name each level, as in {{tag}}")]
    Wildcard,
    /// A brace that is not around a whole level.
    #[error("a capture is a whole level between slashes, as in /{{tag}}/")]
    PartOfLevel,
    /// A capture name that is not a lower-case word.
    #[error("a capture's name is 1 to 32 of a-z, 0-9 and _, a letter first")]
    CaptureName,
    /// The same capture name twice.
    #[error("each capture's name is used once")]
    CaptureTwice,
    /// A first level that begins with `$`.
    #[error("topics that begin with $ belong to the broker")]
    Dollar,
    /// A control character.
    #[error("control characters are not allowed")]
    Control,
}

#[derive(Clone, Debug, PartialEq, Eq)]
enum Level {
    Literal(String),
    Capture,
}

/// A topic with captures, checked.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct TopicPattern {
    text: String,
    levels: Vec<Level>,
    captures: Vec<String>,
}

impl TopicPattern {
    /// Returns the checked pattern.
    pub fn parse(text: &str) -> Result<TopicPattern, PatternFault> {
        if text.is_empty() {
            return Err(PatternFault::Empty);
        }
        if text.len() > PATTERN_BYTES_MAX || text.split('/').count() > PATTERN_LEVELS_MAX {
            return Err(PatternFault::TooLong);
        }
        if text.contains(['+', '#']) {
            return Err(PatternFault::Wildcard);
        }
        if text.contains(char::is_control) {
            return Err(PatternFault::Control);
        }
        if text.starts_with('$') {
            return Err(PatternFault::Dollar);
        }
        let (mut levels, mut captures) = (Vec::new(), Vec::new());
        for level in text.split('/') {
            match level.strip_prefix('{').and_then(|rest| rest.strip_suffix('}')) {
                Some(name) if !name.contains(['{', '}']) => {
                    check_capture_name(name)?;
                    if captures.iter().any(|c| c == name) {
                        return Err(PatternFault::CaptureTwice);
                    }
                    captures.push(name.to_owned());
                    levels.push(Level::Capture);
                }
                _ if level.contains(['{', '}']) => return Err(PatternFault::PartOfLevel),
                _ => levels.push(Level::Literal(level.to_owned())),
            }
        }
        Ok(TopicPattern { text: text.to_owned(), levels, captures })
    }

    /// The pattern as written.
    pub fn as_str(&self) -> &str {
        &self.text
    }

    /// The names of the captures, in the order of the levels.
    pub fn captures(&self) -> &[String] {
        &self.captures
    }

    /// The MQTT topic filter that covers the pattern.
    pub fn filter(&self) -> String {
        let levels: Vec<&str> = self
            .levels
            .iter()
            .map(|level| match level {
                Level::Literal(text) => text.as_str(),
                Level::Capture => "+",
            })
            .collect();
        levels.join("/")
    }

    /// Returns the captured levels if `topic` fits, in the order of [`TopicPattern::captures`].
    ///
    /// An empty level is never captured, and a capture in the first level does not take a topic that
    /// begins with `$`, as in MQTT's own matching (MQTT 5.0, section 4.7.2).
    pub fn fit<'t>(&self, topic: &'t str) -> Option<Vec<&'t str>> {
        let mut captured = Vec::with_capacity(self.captures.len());
        let mut levels = topic.split('/');
        for (i, level) in self.levels.iter().enumerate() {
            let found = levels.next()?;
            match level {
                Level::Literal(text) if text == found => {}
                Level::Capture if !(found.is_empty() || i == 0 && found.starts_with('$')) => {
                    captured.push(found);
                }
                _ => return None,
            }
        }
        levels.next().is_none().then_some(captured)
    }

    /// Whether the filter could take a topic below `root`, such as `asfound/saltmarsh`.
    pub fn reaches_below(&self, root: &str) -> bool {
        let root: Vec<&str> = root.split('/').collect();
        self.levels.len() > root.len()
            && self.levels.iter().zip(&root).all(|(level, root)| match level {
                Level::Literal(text) => text == root,
                Level::Capture => true,
            })
    }
}

fn check_capture_name(name: &str) -> Result<(), PatternFault> {
    let good = name.len() <= CAPTURE_BYTES_MAX
        && name.starts_with(|c: char| c.is_ascii_lowercase())
        && name.chars().all(|c| c.is_ascii_lowercase() || c.is_ascii_digit() || c == '_');
    if good { Ok(()) } else { Err(PatternFault::CaptureName) }
}

/// What is wrong with a channel template.
#[derive(Clone, Debug, PartialEq, Eq, thiserror::Error)]
pub enum TemplateFault {
    /// No text.
    #[error("it is empty")]
    Empty,
    /// More than [`CHANNEL_BYTES_MAX`] bytes.
    #[error("it is longer than 256 bytes")]
    TooLong,
    /// A capture that the topic does not have.
    #[error("the topic has no capture {{{0}}}")]
    UnknownCapture(String),
    /// A brace without its partner.
    #[error("a brace has no partner")]
    Brace,
    /// Two captures with nothing between.
    #[error("two captures need something between them, as in {{area}}.{{tag}}")]
    Adjacent,
    /// A control character.
    #[error("control characters are not allowed")]
    Control,
}

#[derive(Clone, Debug, PartialEq, Eq)]
enum Piece {
    Literal(String),
    /// Index among the pattern's captures.
    Capture(usize),
}

/// How a channel is named from the captures of its topic.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct ChannelTemplate {
    text: String,
    pieces: Vec<Piece>,
}

impl ChannelTemplate {
    /// Returns the checked template.
    ///
    /// # Arguments
    /// `text` — literal text and captures in braces; `pattern` — the topic that has the captures.
    pub fn parse(text: &str, pattern: &TopicPattern) -> Result<ChannelTemplate, TemplateFault> {
        if text.is_empty() {
            return Err(TemplateFault::Empty);
        }
        if text.len() > CHANNEL_BYTES_MAX {
            return Err(TemplateFault::TooLong);
        }
        if text.contains(char::is_control) {
            return Err(TemplateFault::Control);
        }
        let mut pieces = Vec::new();
        let mut rest = text;
        while !rest.is_empty() {
            let end = rest.find(['{', '}']).unwrap_or(rest.len());
            if end > 0 {
                pieces.push(Piece::Literal(rest[..end].to_owned()));
                rest = &rest[end..];
                continue;
            }
            let inside = rest.strip_prefix('{').ok_or(TemplateFault::Brace)?;
            let (name, after) = inside.split_once('}').ok_or(TemplateFault::Brace)?;
            let Some(at) = pattern.captures.iter().position(|c| c == name) else {
                return Err(TemplateFault::UnknownCapture(name.to_owned()));
            };
            if matches!(pieces.last(), Some(Piece::Capture(_))) {
                return Err(TemplateFault::Adjacent);
            }
            pieces.push(Piece::Capture(at));
            rest = after;
        }
        Ok(ChannelTemplate { text: text.to_owned(), pieces })
    }

    /// The template used where none is set: all captures joined with `.`; `None` without captures.
    pub fn default_for(pattern: &TopicPattern) -> Option<ChannelTemplate> {
        let names: Vec<String> = pattern.captures.iter().map(|c| format!("{{{c}}}")).collect();
        ChannelTemplate::parse(&names.join("."), pattern).ok()
    }

    /// The template as written.
    pub fn as_str(&self) -> &str {
        &self.text
    }

    /// Returns the channel's name.
    ///
    /// # Arguments
    /// `captured` — what [`TopicPattern::fit`] returned for the pattern of this template.
    pub fn name(&self, captured: &[&str]) -> String {
        self.pieces
            .iter()
            .map(|piece| match piece {
                Piece::Literal(text) => text.as_str(),
                Piece::Capture(at) => captured[*at],
            })
            .collect()
    }

    /// Whether some topic could have given that channel name.
    ///
    /// A capture takes one or more characters other than `/`, as few as reach the literal that
    /// follows; the literal at the end must end the name. So `{area}.{tag}` fits `press.PT.4107`, with
    /// `press` as the area.
    pub fn fits(&self, name: &str) -> bool {
        self.captured(name).is_some()
    }

    /// What the captures took, by their index in the pattern, where the name fits.
    fn captured<'n>(&self, name: &'n str) -> Option<Vec<(usize, &'n str)>> {
        let mut rest = name;
        let mut open = None;
        let mut captured = Vec::new();
        for (i, piece) in self.pieces.iter().enumerate() {
            let literal = match piece {
                Piece::Capture(at) => {
                    open = Some(*at);
                    continue;
                }
                Piece::Literal(text) => text.as_str(),
            };
            let Some(at) = open.take() else {
                rest = rest.strip_prefix(literal)?;
                continue;
            };
            let end = if i + 1 == self.pieces.len() {
                rest.strip_suffix(literal)?.len()
            } else {
                let first = rest.chars().next().map_or(0, char::len_utf8);
                first + rest[first..].find(literal)?
            };
            captured.push((at, Some(&rest[..end]).filter(|text| may_be_captured(text))?));
            rest = &rest[end + literal.len()..];
        }
        match open {
            Some(at) if may_be_captured(rest) => captured.push((at, rest)),
            Some(_) => return None,
            None if rest.is_empty() => {}
            None => return None,
        }
        Some(captured)
    }

    /// The topic from which a channel of that name comes; None where the name does not fit or does not
    /// have all captures. Where it can be read in several ways, as in [`ChannelTemplate::fits`].
    pub fn topic_of(&self, name: &str, pattern: &TopicPattern) -> Option<String> {
        let captured = self.captured(name)?;
        let mut next = 0..pattern.captures.len();
        let levels: Option<Vec<&str>> = pattern
            .levels
            .iter()
            .map(|level| match level {
                Level::Literal(text) => Some(text.as_str()),
                Level::Capture => {
                    let index = next.next()?;
                    captured.iter().find(|(at, _)| *at == index).map(|(_, text)| *text)
                }
            })
            .collect();
        levels.map(|levels| levels.join("/"))
    }
}

/// One step of a template as an automaton reads names: a character, or a capture.
#[derive(Clone, Copy, PartialEq, Eq)]
enum Step {
    This(char),
    /// One or more characters other than `/`.
    Captured,
}

impl Step {
    fn takes(self, other: Step) -> bool {
        match (self, other) {
            (Step::This(a), Step::This(b)) => a == b,
            (Step::This(c), Step::Captured) | (Step::Captured, Step::This(c)) => c != '/',
            (Step::Captured, Step::Captured) => true,
        }
    }
}

impl ChannelTemplate {
    fn steps(&self) -> Vec<Step> {
        let mut steps = Vec::new();
        for piece in &self.pieces {
            match piece {
                Piece::Literal(text) => steps.extend(text.chars().map(Step::This)),
                Piece::Capture(_) => steps.push(Step::Captured),
            }
        }
        steps
    }

    /// Whether some name fits both templates: both are read in step, character by character, every
    /// way in which a capture may end.
    pub fn may_equal(&self, other: &ChannelTemplate) -> bool {
        let (mine, theirs) = (self.steps(), other.steps());
        let width = theirs.len() + 1;
        let mut reached = vec![false; (mine.len() + 1) * width];
        reached[0] = true;
        for i in 0..mine.len() {
            for j in 0..theirs.len() {
                if !(reached[i * width + j] && mine[i].takes(theirs[j])) {
                    continue;
                }
                // Whoever is at a capture may stay at it; both staying is nothing new.
                reached[(i + 1) * width + j + 1] = true;
                reached[(i + 1) * width + j] |= theirs[j] == Step::Captured;
                reached[i * width + j + 1] |= mine[i] == Step::Captured;
            }
        }
        reached[mine.len() * width + theirs.len()]
    }

    /// The captures of its pattern that the name does not have.
    pub fn left_out<'p>(&self, pattern: &'p TopicPattern) -> impl Iterator<Item = &'p str> {
        let has = |at: usize| self.pieces.contains(&Piece::Capture(at));
        pattern
            .captures
            .iter()
            .enumerate()
            .filter(move |&(at, _)| !has(at))
            .map(|(_, c)| c.as_str())
    }
}

fn may_be_captured(text: &str) -> bool {
    !text.is_empty() && !text.contains('/')
}

/// Returns a channel name as one level of a topic: `/ + # %` and control characters become `%XX`, per
/// byte of UTF-8.
pub fn topic_level(channel: &str) -> String {
    let mut level = String::with_capacity(channel.len());
    for c in channel.chars() {
        if matches!(c, '/' | '+' | '#' | '%') || c.is_control() {
            for byte in c.encode_utf8(&mut [0; 4]).bytes() {
                write!(level, "%{byte:02X}").expect("writing to a String cannot fail");
            }
        } else {
            level.push(c);
        }
    }
    level
}

#[cfg(test)]
mod tests {
    use super::*;

    fn check(pattern: &str, topic: &str, expected: Option<&str>) {
        let pattern = TopicPattern::parse(pattern).unwrap();
        let template = ChannelTemplate::default_for(&pattern).unwrap();
        let name = pattern.fit(topic).map(|captured| template.name(&captured));
        assert_eq!(name.as_deref(), expected, "{topic}");
    }

    fn check_fits(template: &str, name: &str, expected: bool) {
        let pattern = TopicPattern::parse("{area}/{tag}/{part}").unwrap();
        let template = ChannelTemplate::parse(template, &pattern).unwrap();
        assert_eq!(template.fits(name), expected, "{name}");
    }

    fn check_fault(text: &str, expected: PatternFault) {
        assert_eq!(TopicPattern::parse(text), Err(expected), "{text}");
    }

    #[test]
    fn braces_capture_whole_levels() {
        let pattern = "plant/{area}/{tag}/deviation";
        assert_eq!(TopicPattern::parse(pattern).unwrap().filter(), "plant/+/+/deviation");
        check(pattern, "plant/press/PT-4107/deviation", Some("press.PT-4107"));
        check(pattern, "plant/press/PT-4107", None);
        check(pattern, "plant/press/PT-4107/deviation/x", None);
        check(pattern, "plant/press/PT-4107/value", None);
        check(pattern, "plant//PT-4107/deviation", None);
        check("/{tag}", "/PT", Some("PT"));
        check("{a}/{b}", "$SYS/uptime", None);
        check("{a}/{b}", "x/$y", Some("x.$y"));
    }

    #[test]
    fn patterns_that_cannot_be_subscribed_are_refused() {
        check_fault("", PatternFault::Empty);
        check_fault("plant/+/x", PatternFault::Wildcard);
        check_fault("plant/#", PatternFault::Wildcard);
        check_fault("plant/PT-{n}/x", PatternFault::PartOfLevel);
        check_fault("plant/{a}{b}/x", PatternFault::PartOfLevel);
        check_fault("plant/{a", PatternFault::PartOfLevel);
        check_fault("plant/{}", PatternFault::CaptureName);
        check_fault("plant/{Tag}", PatternFault::CaptureName);
        check_fault("{a}/{a}", PatternFault::CaptureTwice);
        check_fault("$share/g/x", PatternFault::Dollar);
        check_fault("plant/\u{0}", PatternFault::Control);
        check_fault(&"a/".repeat(40), PatternFault::TooLong);
    }

    #[test]
    fn templates_use_only_what_the_topic_captures() {
        let pattern = TopicPattern::parse("plant/{area}/{tag}").unwrap();
        for (text, fault) in [
            ("", TemplateFault::Empty),
            ("{aera}", TemplateFault::UnknownCapture("aera".to_owned())),
            ("{area", TemplateFault::Brace),
            ("area}", TemplateFault::Brace),
            ("{area}{tag}", TemplateFault::Adjacent),
            ("a\nb", TemplateFault::Control),
        ] {
            assert_eq!(ChannelTemplate::parse(text, &pattern), Err(fault), "{text}");
        }
        assert_eq!(ChannelTemplate::default_for(&TopicPattern::parse("a/b").unwrap()), None);
    }

    #[test]
    fn names_are_matched_against_templates() {
        check_fits("{area}.{tag}", "press.PT-4107", true);
        check_fits("{area}.{tag}", "press.PT.4107", true);
        check_fits("{area}.{tag}", "press", false);
        check_fits("{area}.{tag}", ".PT", false);
        check_fits("{area}.{tag}", "press.", false);
        check_fits("{area}.{tag}", "press.a/b", false);
        check_fits("{area}/{tag}", "press/PT", true);
        check_fits("{area}/{tag}", "press/PT/x", false);
        check_fits("x.{tag}.dev", "x.PT.dev", true);
        check_fits("x.{tag}.dev", "x.dev.dev", true);
        check_fits("x.{tag}.dev", "x.dev", false);
        check_fits("{area}.{tag}.{part}", "a.b.c.d", true);
        check_fits("{tag}", "µ", true);
        check_fits("{tag}", "", false);
        check_fits("fixed", "fixed", true);
        check_fits("fixed", "fixed1", false);
    }

    #[test]
    fn channel_names_become_one_topic_level() {
        assert_eq!(topic_level("press.PT-4107"), "press.PT-4107");
        assert_eq!(topic_level("a/b+c#d%e\nf\u{85}g°"), "a%2Fb%2Bc%23d%25e%0Af%C2%85g°");
    }

    #[test]
    fn a_filter_over_the_own_topics_is_found() {
        for (pattern, expected) in [
            ("asfound/{site}/{x}", true),
            ("{a}/{b}/{c}/{d}", true),
            ("asfound/saltmarsh/service", true),
            ("asfound/saltmarsh", false),
            ("asfound/other/{x}", false),
            ("plant/{a}/{b}", false),
        ] {
            let pattern = TopicPattern::parse(pattern).unwrap();
            assert_eq!(pattern.reaches_below("asfound/saltmarsh"), expected, "{pattern:?}");
        }
    }

    #[test]
    fn templates_that_can_give_one_name_are_told_from_those_that_cannot() {
        for (one, other, expected) in [
            ("{tag}", "{tag}", true),
            ("{tag}", "{area}.{tag}", true),
            ("{area}.{tag}", "{area}.{tag}.{part}", true),
            ("{area}.{tag}", "{area}/{tag}", false),
            ("press.{tag}", "kiln.{tag}", false),
            ("press.{tag}", "{area}.7", true),
            ("{tag}.pressure", "{tag}.temperature", false),
            ("{tag}.pressure", "{area}.{tag}", true),
            ("x{tag}", "x", false),
            ("fixed", "fixed", true),
            ("fixed", "fixed1", false),
        ] {
            let pattern = TopicPattern::parse("{area}/{tag}/{part}").unwrap();
            let [one, other] = [one, other].map(|t| ChannelTemplate::parse(t, &pattern).unwrap());
            assert_eq!(one.may_equal(&other), expected, "{} {}", one.as_str(), other.as_str());
            assert_eq!(other.may_equal(&one), expected, "{} {}", other.as_str(), one.as_str());
        }
    }
}
