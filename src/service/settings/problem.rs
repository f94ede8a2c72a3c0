//! What is wrong with settings, each problem with its place, what was found and what is allowed.
//!
//! Problems are collected, not thrown: who repairs a settings file wants the whole list.

use crate::service::shown::{EXCERPT_CHARS_MAX, Shown};
use std::borrow::Cow;
use std::fmt;
use std::path::PathBuf;

/// The most problems that are kept; further ones are counted.
pub const PROBLEMS_MAX: usize = 100;

/// Where a setting stands.
#[derive(Clone, Debug, PartialEq, Eq, PartialOrd, Ord)]
pub enum Place {
    /// Somewhere in the file, or missing from it.
    File,
    /// On that line of the file, counted from 1.
    Line(usize),
    /// In that environment variable.
    Variable(String),
}

/// What is wrong.
#[derive(Clone, Debug, PartialEq, Eq)]
pub enum Fault {
    /// The file is not TOML.
    Syntax {
        /// The parser's words.
        message: String,
    },
    /// A key that must be there is not.
    Missing {
        /// What to write.
        allowed: Cow<'static, str>,
    },
    /// A key that nobody reads.
    Unknown {
        /// The known key it resembles most, if any does.
        nearest: Option<&'static str>,
        /// All keys known in that place.
        known: Vec<&'static str>,
    },
    /// A key of the full set of settings that this version does not serve.
    NotYet {
        /// What to do without it.
        instead: &'static str,
    },
    /// A value that is not allowed.
    Refused {
        /// What was found, ready to show.
        found: String,
        /// What is allowed there.
        allowed: Cow<'static, str>,
    },
}

/// One problem with the settings.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Problem {
    /// Where.
    pub place: Place,
    /// The key with its path, such as `watch[1].window.points` (watches count from 1); may be empty.
    pub key: String,
    /// What.
    pub fault: Fault,
}

impl fmt::Display for Fault {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match self {
            Fault::Syntax { message } => write!(f, "not TOML: {}", Shown(message, 200)),
            Fault::Missing { allowed } => write!(f, "missing; needed: {allowed}"),
            Fault::Unknown { nearest, known } => {
                f.write_str("unknown key")?;
                if let Some(nearest) = nearest {
                    write!(f, ", did you mean `{nearest}`?")?;
                }
                write!(f, "; allowed here: {}", known.join(", "))
            }
            Fault::NotYet { instead } => write!(f, "not in this version yet; {instead}"),
            Fault::Refused { found, allowed } => write!(f, "found {found}; allowed: {allowed}"),
        }
    }
}

/// All problems found in one reading of the settings; never empty when it is an error.
#[derive(Debug)]
pub struct Problems {
    file: PathBuf,
    list: Vec<Problem>,
    left_out: usize,
}

impl Problems {
    /// An empty list for that file.
    pub(super) fn new(file: PathBuf) -> Problems {
        Problems { file, list: Vec::new(), left_out: 0 }
    }

    /// The problems, in the order of the file; those of the environment last.
    pub fn list(&self) -> &[Problem] {
        &self.list
    }

    /// How many there are, those beyond [`PROBLEMS_MAX`] included.
    pub fn count(&self) -> usize {
        self.list.len() + self.left_out
    }

    pub(super) fn push(&mut self, place: &Place, key: &str, fault: Fault) {
        if self.list.len() < PROBLEMS_MAX {
            let key = Shown(key, EXCERPT_CHARS_MAX).to_string();
            self.list.push(Problem { place: place.clone(), key, fault });
        } else {
            self.left_out += 1;
        }
    }

    /// Notes that a value is refused: `found` is ready to show.
    pub(super) fn refuse(
        &mut self,
        place: &Place,
        key: &str,
        found: impl Into<String>,
        allowed: impl Into<Cow<'static, str>>,
    ) {
        let fault = Fault::Refused { found: found.into(), allowed: allowed.into() };
        self.push(place, key, fault);
    }

    /// Notes that a key is missing, unless it or a table around it is there and was found wrong.
    pub(super) fn missing(
        &mut self,
        place: &Place,
        key: &str,
        allowed: impl Into<Cow<'static, str>>,
    ) {
        let around = |p: &Problem| {
            key.strip_prefix(&*p.key).is_some_and(|rest| rest.is_empty() || rest.starts_with('.'))
        };
        if !self.list.iter().any(around) {
            self.push(place, key, Fault::Missing { allowed: allowed.into() });
        }
    }

    /// Puts the problems in the order of the file.
    pub(super) fn sort(&mut self) {
        self.list.sort_by(|a, b| a.place.cmp(&b.place));
    }
}

impl fmt::Display for Problems {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        let file = self.file.display().to_string();
        let file = Shown(&file, 200);
        for (i, problem) in self.list.iter().enumerate() {
            if i > 0 {
                writeln!(f)?;
            }
            match &problem.place {
                Place::File => write!(f, "{file}: ")?,
                Place::Line(line) => write!(f, "{file}:{line}: ")?,
                Place::Variable(name) => write!(f, "environment variable {}: ", Shown(name, 200))?,
            }
            if !problem.key.is_empty() {
                write!(f, "{}: ", problem.key)?;
            }
            write!(f, "{}", problem.fault)?;
        }
        if self.left_out > 0 {
            write!(f, "\nand {} more", self.left_out)?;
        }
        Ok(())
    }
}

impl std::error::Error for Problems {}

/// Why there are no settings.
#[derive(Debug, thiserror::Error)]
pub enum SettingsError {
    /// The file cannot be read.
    #[error("cannot read the settings file {}: {source}", Shown(&.path.display().to_string(), 200))]
    Unreadable {
        /// The file that was asked for.
        path: PathBuf,
        /// What the system says.
        source: std::io::Error,
    },
    /// The file or the environment has problems.
    #[error(transparent)]
    Problems(#[from] Problems),
}

/// Returns the known word that `word` was probably meant to be: at most two slips away, and closer
/// than half the word's length.
///
/// # Source
/// Optimal string alignment distance (insert, delete, replace, swap neighbours): R. W. Lowrance and
/// R. A. Wagner, "An Extension of the String-to-String Correction Problem", 1975.
pub fn nearest<'k>(word: &str, known: &[&'k str]) -> Option<&'k str> {
    let word: Vec<char> = word.chars().take(64).collect();
    known
        .iter()
        .map(|k| (slips(&word, &k.chars().collect::<Vec<_>>()), *k))
        .filter(|(slips, _)| *slips <= 2 && *slips * 2 <= word.len())
        .min_by_key(|(slips, _)| *slips)
        .map(|(_, k)| k)
}

fn slips(a: &[char], b: &[char]) -> usize {
    let width = b.len() + 1;
    let mut d = vec![0; (a.len() + 1) * width];
    for i in 0..=a.len() {
        for j in 0..=b.len() {
            d[i * width + j] = if i == 0 || j == 0 {
                i + j
            } else {
                let replace = usize::from(a[i - 1] != b[j - 1]);
                let mut best = (d[(i - 1) * width + j] + 1)
                    .min(d[i * width + j - 1] + 1)
                    .min(d[(i - 1) * width + j - 1] + replace);
                if i > 1 && j > 1 && a[i - 1] == b[j - 2] && a[i - 2] == b[j - 1] {
                    best = best.min(d[(i - 2) * width + j - 2] + 1);
                }
                best
            };
        }
    }
    d[a.len() * width + b.len()]
}

#[cfg(test)]
mod tests {
    use super::*;

    fn check(word: &str, expected: Option<&str>) {
        let known = ["points", "span", "bin", "refit_every", "look_ahead", "tolerance"];
        assert_eq!(nearest(word, &known), expected, "{word}");
    }

    #[test]
    fn a_slip_finds_the_word_that_was_meant() {
        check("pionts", Some("points"));
        check("point", Some("points"));
        check("bins", Some("bin"));
        check("lookahead", Some("look_ahead"));
        check("refit-every", Some("refit_every"));
        check("tolerence", Some("tolerance"));
    }

    #[test]
    fn an_unlike_word_finds_nothing() {
        check("colour", None);
        check("", None);
        check("s", None);
        check("bo", None);
    }
}
