//! The house rules that a machine can hold the sources against: which floor may import what, who may
//! read the clock, speak SQL or MQTT, how long files and functions may be, and which words and
//! macros are not for this house. Each rule is a function from text to complaints; the tests at the
//! foot first show it a bad snippet that it must refuse, then the sources.
//!
//! Rust is read by a small scanner that blanks comments and literals, not by a parser: it knows
//! enough to never take a word in a comment for code, and no more.

use std::fs;
use std::path::{Path, PathBuf};

/// Longest file, in lines before its tests, and longest function, in lines with its signature.
const FILE_LINES_MAX: usize = 600;
const FUNCTION_LINES_MAX: usize = 70;

/// What the pure floors must not reach for: the world, the clock, chance, other people's threads.
const IMPURE: [&str; 11] = [
    "tokio",
    "tracing",
    "rumqttc",
    "rusqlite",
    "fastrand",
    "std::fs",
    "std::net",
    "std::env",
    "std::thread",
    "std::process",
    "std::time",
];

/// Each floor with the floors above it, which it must not import.
const FLOORS: [(&str, &[&str]); 3] = [
    ("drift", &["watch", "service", "cli"]),
    ("watch", &["service", "cli"]),
    ("service", &["cli"]),
];

/// Reads of a clock; [`CLOCK`] is the one place for them.
const CLOCK_READS: [&str; 6] = [
    "SystemTime::now",
    "Instant::now",
    "Timestamp::now",
    "Zoned::now",
    "ZonedDateTime::now",
    "UNIX_EPOCH.elapsed",
];
const CLOCK: &str = "src/service/clock.rs";

/// Words that only stand in SQL when in capitals inside a string.
const SQL: [&str; 8] = [
    "SELECT ",
    "INSERT ",
    "DELETE FROM",
    "UPDATE ",
    "CREATE TABLE",
    "ALTER TABLE",
    "PRAGMA ",
    "VACUUM",
];

/// Not for this house, each with what to write in its place.
const WORDS: [(&str, &str); 9] = [
    ("alarm", "alert: an alarm needs a timely response of an operator"),
    ("todo", "the thing itself, or nothing"),
    ("fixme", "the thing itself, or nothing"),
    ("blazing", "a measured figure"),
    ("seamless", "what happens"),
    ("cutting-edge", "what it does"),
    ("world-class", "what it does"),
    ("best-in-class", "what it does"),
    ("/home/", "a path that is there on every machine"),
];

/// Where "alarm" is the trade's own term; taken out before the words are looked for.
const TERMS: [&str; 5] =
    ["alarm-management", "alarm management", "alarm systems", "not an alarm", "an alarm needs"];

/// All that may lie in the top folder, besides dot-files and what `.gitignore` names.
const TOP: [&str; 11] = [
    "Cargo.toml",
    "Cargo.lock",
    "README.md",
    "DEVELOPERS.md",
    "LICENSE",
    "src",
    "config",
    "tests",
    "systemd",
    "demo-data",
    "benches",
];

/// Files of `drift` whose formulas have authors: each names them under `# Source`.
const SOURCED: [&str; 25] = [
    "choose.rs",
    "confidence.rs",
    "forecast.rs",
    "interval.rs",
    "least_squares.rs",
    "projection.rs",
    "reach.rs",
    "refine.rs",
    "residual_tests/breusch_pagan.rs",
    "residual_tests/durbin_watson.rs",
    "residual_tests/ljung_box.rs",
    "residual_tests/reset.rs",
    "residual_tests/runs.rs",
    "robust.rs",
    "robust/refine.rs",
    "robust/scale.rs",
    "sandwich.rs",
    "serial.rs",
    "structure/baseline.rs",
    "structure/bend.rs",
    "structure/dependence.rs",
    "structure/resolution.rs",
    "structure/shift.rs",
    "structure/step.rs",
    "tails.rs",
];

// ---- The scanner ------------------------------------------------------------------------------

/// A Rust source as the rules read it; lines stand where they stood.
struct Source {
    /// Path from the top folder, with `/`.
    path: String,
    /// As written.
    text: String,
    /// Comments blanked, literals kept.
    spoken: String,
    /// Comments and the insides of literals blanked.
    code: String,
    /// Number of lines before the tests at the foot; all of them where there are none.
    lines: usize,
}

impl Source {
    fn new(path: &str, text: &str) -> Source {
        let (spoken, code) = blank(text);
        let all: Vec<&str> = code.lines().collect();
        let tests_at = all.iter().position(|line| line.starts_with("#[cfg(test)]")).filter(|&at| {
            let next = all.get(at + 1).copied().unwrap_or_default();
            next.split_whitespace().any(|word| word == "mod") && next.ends_with('{')
        });
        let test_file = path.starts_with("src/") && path.ends_with("/tests.rs");
        let lines = if test_file { 0 } else { tests_at.unwrap_or(all.len()) };
        Source { path: path.to_owned(), text: text.to_owned(), spoken, code, lines }
    }

    /// The code before the tests, line by line, with line numbers from 1.
    fn code_lines(&self) -> impl Iterator<Item = (usize, &str)> {
        self.code.lines().take(self.lines).enumerate().map(|(i, line)| (i + 1, line))
    }

    /// The code before the tests in one piece.
    fn own_code(&self) -> String {
        self.code_lines().map(|(_, line)| format!("{line}\n")).collect()
    }

    fn is_on(&self, floor: &str) -> bool {
        self.path.starts_with(&format!("src/{floor}/")) || self.path == format!("src/{floor}.rs")
    }

    fn complaint(&self, line: usize, what: impl std::fmt::Display) -> String {
        format!("{}:{line}: {what}", self.path)
    }
}

/// Returns the text twice: without comments, and without comments and insides of literals.
fn blank(text: &str) -> (String, String) {
    let chars: Vec<char> = text.chars().collect();
    let (mut spoken, mut code) = (String::new(), String::new());
    let mut at = 0;
    while at < chars.len() {
        let (length, kind) = token(&chars, at);
        for &c in &chars[at..at + length] {
            let gap = if c == '\n' { '\n' } else { ' ' };
            spoken.push(if kind == Kind::Comment { gap } else { c });
            code.push(if kind == Kind::Code { c } else { gap });
        }
        at += length;
    }
    (spoken, code)
}

#[derive(Clone, Copy, PartialEq, Debug)]
enum Kind {
    Code,
    Comment,
    Literal,
}

/// Returns length and kind of what begins at `at`: a comment, a literal, a word or one character.
fn token(chars: &[char], at: usize) -> (usize, Kind) {
    let c = |i: usize| chars.get(at + i).copied().unwrap_or('\0');
    let to_end = chars.len() - at;
    match c(0) {
        '/' if c(1) == '/' => {
            ((0..to_end).find(|&i| c(i) == '\n').unwrap_or(to_end), Kind::Comment)
        }
        '/' if c(1) == '*' => (block_comment(&chars[at..]), Kind::Comment),
        '"' => (string(&chars[at..]), Kind::Literal),
        // A lifetime has no quote after its first letter; a character has one there or an escape.
        '\'' if c(1) == '\\' => {
            ((3..to_end).find(|&i| c(i) == '\'').map_or(to_end, |i| i + 1), Kind::Literal)
        }
        '\'' if c(2) == '\'' => (3, Kind::Literal),
        first if first.is_alphanumeric() || first == '_' => {
            let word = (0..to_end).find(|&i| !(c(i).is_alphanumeric() || c(i) == '_'));
            let word = word.unwrap_or(to_end);
            let raw = matches!(chars[at..at + word], ['r'] | ['b', 'r'] | ['c', 'r']);
            let hashes = (word..to_end).take_while(|&i| c(i) == '#').count();
            if raw && c(word + hashes) == '"' {
                (raw_string(&chars[at..], word + hashes + 1, hashes), Kind::Literal)
            } else {
                (word, Kind::Code)
            }
        }
        _ => (1, Kind::Code),
    }
}

fn block_comment(chars: &[char]) -> usize {
    let (mut depth, mut at) = (0, 0);
    while at + 1 < chars.len() {
        match (chars[at], chars[at + 1]) {
            ('/', '*') => depth += 1,
            ('*', '/') => depth -= 1,
            _ => {
                at += 1;
                continue;
            }
        }
        at += 2;
        if depth == 0 {
            return at;
        }
    }
    chars.len()
}

fn string(chars: &[char]) -> usize {
    let mut at = 1;
    while at < chars.len() {
        match chars[at] {
            '\\' => at += 2,
            '"' => return at + 1,
            _ => at += 1,
        }
    }
    chars.len()
}

fn raw_string(chars: &[char], from: usize, hashes: usize) -> usize {
    let ends = |i: usize| {
        chars[i] == '"'
            && chars[i + 1..].iter().take(hashes).filter(|&&c| c == '#').count() == hashes
    };
    (from..chars.len()).find(|&i| ends(i)).map_or(chars.len(), |i| i + 1 + hashes)
}

/// Whether `word` stands in `text` as a word or path of its own.
fn has_word(text: &str, word: &str) -> bool {
    let part = |c: char| c.is_alphanumeric() || c == '_';
    text.match_indices(word)
        .any(|(at, _)| !text[..at].ends_with(part) && !text[at + word.len()..].starts_with(part))
}

/// Every path that begins with `root::`, groups taken apart one level: `std::{fs, time::Instant}`
/// gives `std::fs` and `std::time`. With its line number.
fn paths(code: &str, root: &str) -> Vec<(usize, String)> {
    let start = format!("{root}::");
    let mut found = Vec::new();
    for (at, _) in code.match_indices(&start) {
        if code[..at].ends_with(|c: char| c.is_alphanumeric() || c == '_') {
            continue;
        }
        let line = code[..at].matches('\n').count() + 1;
        let rest = &code[at + start.len()..];
        let members = match rest.strip_prefix('{') {
            Some(group) => group_members(group),
            None => vec![rest],
        };
        for member in members {
            let name: String = member
                .trim_start()
                .chars()
                .take_while(|&c| c.is_alphanumeric() || c == '_')
                .collect();
            found.push((line, format!("{root}::{name}")));
        }
    }
    found
}

/// The members of a `{…}` import group at its own level, given what follows the opening brace.
fn group_members(group: &str) -> Vec<&str> {
    let (mut depth, mut from, mut members) = (0, 0, Vec::new());
    for (at, c) in group.char_indices() {
        match c {
            '{' => depth += 1,
            '}' if depth == 0 => {
                members.push(&group[from..at]);
                break;
            }
            '}' => depth -= 1,
            ',' if depth == 0 => {
                members.push(&group[from..at]);
                from = at + 1;
            }
            _ => {}
        }
    }
    members
}

// ---- The rules --------------------------------------------------------------------------------

/// `drift` and `watch` reach for nothing outside: no I/O, runtime, clock, threads, logs; and keep
/// nothing in an order that differs from run to run.
fn pure_floors_reach_for_nothing(source: &Source) -> Vec<String> {
    if !source.is_on("drift") && !source.is_on("watch") {
        return Vec::new();
    }
    let code = source.own_code();
    let mut complaints = Vec::new();
    for (line, path) in paths(&code, "std") {
        if IMPURE.contains(&path.as_str()) {
            complaints.push(source.complaint(line, format_args!("{path} on a pure floor")));
        }
    }
    for (number, line) in source.code_lines() {
        for name in IMPURE.iter().filter(|name| !name.contains("::")).chain(&["HashMap", "HashSet"])
        {
            if has_word(line, name) {
                complaints.push(source.complaint(number, format_args!("{name} on a pure floor")));
            }
        }
    }
    complaints
}

/// A floor names no floor above it, by `crate::` or by climbing with `super::`.
fn imports_go_down(source: &Source) -> Vec<String> {
    let code = source.own_code();
    let mut complaints = Vec::new();
    for (floor, above) in FLOORS.iter().filter(|(floor, _)| source.is_on(floor)) {
        for (line, path) in paths(&code, "crate").into_iter().chain(paths(&code, "super")) {
            let name = path.rsplit(':').next().unwrap_or_default();
            if above.contains(&name) {
                complaints.push(
                    source.complaint(line, format_args!("{floor} names {path}, a floor above it")),
                );
            }
        }
    }
    complaints
}

/// Clock, SQL and MQTT packets each have one place.
fn each_edge_has_one_place(source: &Source) -> Vec<String> {
    let mut complaints = Vec::new();
    let mut one_place = |home: &str, lines: &str, names: &[&str], as_words: bool| {
        if source.path.starts_with(home) {
            return;
        }
        for (i, line) in lines.lines().take(source.lines).enumerate() {
            let named =
                |name: &&&str| if as_words { has_word(line, name) } else { line.contains(**name) };
            if let Some(name) = names.iter().find(named) {
                complaints
                    .push(source.complaint(i + 1, format_args!("{name:?} belongs into {home}")));
            }
        }
    };
    one_place(CLOCK, &source.code, &CLOCK_READS, true);
    one_place("src/service/store", &source.code, &["rusqlite"], true);
    one_place("src/service/broker", &source.code, &["rumqttc"], true);
    let strings = only_literals(source);
    one_place("src/service/store", &strings, &SQL, false);
    complaints
}

/// The source with everything but its string literals blanked.
fn only_literals(source: &Source) -> String {
    let kept = source.spoken.chars().zip(source.code.chars());
    kept.map(|(spoken, code)| if spoken == code && spoken != '\n' { ' ' } else { spoken }).collect()
}

/// Files and functions stay short enough to be read at one go.
fn files_and_functions_are_short(source: &Source) -> Vec<String> {
    let mut complaints = Vec::new();
    if source.lines > FILE_LINES_MAX {
        let what = format!("{} lines before the tests, at most {FILE_LINES_MAX}", source.lines);
        complaints.push(source.complaint(source.lines, what));
    }
    for (line, name, length) in functions(&source.own_code()) {
        if length > FUNCTION_LINES_MAX {
            let what = format!("fn {name} has {length} lines, at most {FUNCTION_LINES_MAX}");
            complaints.push(source.complaint(line, what));
        }
    }
    complaints
}

/// First line, name and length in lines of every function with a body.
fn functions(code: &str) -> Vec<(usize, String, usize)> {
    let mut found = Vec::new();
    for (at, _) in code.match_indices("fn ") {
        let rest = &code[at + 3..];
        let name: String = rest.chars().take_while(|&c| c.is_alphanumeric() || c == '_').collect();
        if name.is_empty() || code[..at].ends_with(|c: char| c.is_alphanumeric() || c == '_') {
            continue;
        }
        if let Some(end) = body_end(rest) {
            let first = code[..at].matches('\n').count() + 1;
            found.push((first, name, rest[..end].matches('\n').count() + 1));
        }
    }
    found
}

/// Where the body ends that begins at the first brace outside of brackets; None: no body.
fn body_end(rest: &str) -> Option<usize> {
    let (mut brackets, mut braces) = (0, 0);
    for (at, c) in rest.char_indices() {
        match c {
            '(' | '[' => brackets += 1,
            ')' | ']' => brackets -= 1,
            ';' if brackets == 0 && braces == 0 => return None,
            '{' => braces += 1,
            '}' => {
                braces -= 1;
                if braces == 0 {
                    return Some(at);
                }
            }
            _ => {}
        }
    }
    None
}

/// Every file says on top what it is for; nothing is left for later, skipped, or left to chance.
fn nothing_is_unfinished(source: &Source) -> Vec<String> {
    let mut complaints = Vec::new();
    if !source.text.starts_with("//!") {
        complaints.push(source.complaint(1, "begins without a //! paragraph"));
    }
    for (i, line) in source.code.lines().enumerate() {
        for left in ["todo!", "unimplemented!", "#[ignore", "dbg!"] {
            if line.contains(left) {
                complaints
                    .push(source.complaint(i + 1, format_args!("{left} is not for this house")));
            }
        }
    }
    for (number, line) in source.code_lines().filter(|_| source.path.starts_with("src/")) {
        if line.contains(".unwrap()") {
            complaints.push(
                source.complaint(number, "unwrap outside of tests: expect(\"the invariant\")"),
            );
        }
    }
    complaints
}

/// In `drift`, who calls learns what each argument means, and formulas keep their authors.
fn mathematics_is_explained(source: &Source) -> Vec<String> {
    if !source.is_on("drift") {
        return Vec::new();
    }
    let mut complaints = Vec::new();
    let code = source.own_code();
    let lines: Vec<&str> = source.text.lines().collect();
    for start in ["pub fn ", "pub const fn "] {
        for (at, _) in code.match_indices(start) {
            let above = code[..at].matches('\n').count();
            let doc = lines[..above].iter().rev().map(|line| line.trim_start());
            let mut doc = doc.take_while(|line| line.starts_with("///") || line.starts_with("#["));
            if takes_arguments(&code[at..]) && !doc.any(|line| line == "/// # Arguments") {
                complaints.push(source.complaint(above + 1, "a pub fn without # Arguments"));
            }
        }
    }
    let sourced = SOURCED.iter().any(|file| source.path == format!("src/drift/{file}"));
    let mut own = lines.iter().take(source.lines);
    if sourced && !own.any(|line| line.trim_start() == "/// # Source") {
        complaints.push(source.complaint(1, "formulas without # Source"));
    }
    complaints
}

/// Whether a function takes anything besides self, given its signature and what follows.
fn takes_arguments(signature: &str) -> bool {
    let (mut angles, mut before, mut from) = (0, ' ', signature.len());
    for (at, c) in signature.char_indices() {
        match c {
            '<' => angles += 1,
            '>' if before != '-' => angles -= 1,
            '(' if angles == 0 => {
                from = at + 1;
                break;
            }
            _ => {}
        }
        before = c;
    }
    let list = signature[from..].trim_start();
    let first = list.split([',', ')']).next().unwrap_or_default().trim();
    if has_word(first, "self") {
        list[first.len()..]
            .trim_start_matches(|c: char| c == ',' || c.is_whitespace())
            .chars()
            .next()
            .is_some_and(|c| c != ')')
    } else {
        !first.is_empty()
    }
}

/// Plain words, the same ones everywhere.
fn words_are_plain(path: &str, text: &str) -> Vec<String> {
    let mut complaints = Vec::new();
    for (i, line) in text.lines().enumerate() {
        let line = TERMS.iter().fold(line.to_lowercase(), |line, term| line.replace(term, ""));
        for (word, instead) in WORDS {
            // "mastodon" holds one of them and is fine; "alarms" is no better than "alarm".
            let there = if word == "todo" { has_word(&line, word) } else { line.contains(word) };
            if there {
                complaints.push(format!("{path}:{}: {word:?}: write {instead}", i + 1));
            }
        }
    }
    complaints
}

/// The top folder holds what a newcomer expects, and no more.
fn top_is_bare(names: &[String], ignored: &str) -> Vec<String> {
    let allowed = |name: &str| {
        let listed = TOP.contains(&name) || name.starts_with('.');
        listed || ignored.lines().any(|line| line.trim_matches('/') == name)
    };
    names
        .iter()
        .filter(|name| !allowed(name))
        .map(|name| format!("{name} in the top folder"))
        .collect()
}

/// What the lock file takes in comes from the one public registry, each with its checksum.
fn dependencies_come_from_one_registry(lock: &str) -> Vec<String> {
    let mut sources: Vec<&str> =
        lock.lines().filter(|line| line.starts_with("source = ")).collect();
    let checksums = lock.lines().filter(|line| line.starts_with("checksum = ")).count();
    let mut complaints = Vec::new();
    if checksums != sources.len() {
        complaints.push(format!("{} packages from outside, {checksums} checksums", sources.len()));
    }
    sources.sort_unstable();
    sources.dedup();
    if sources.len() > 1 || sources.iter().any(|source| !source.starts_with("source = \"registry+"))
    {
        complaints.push(format!("packages come from {sources:?}; one registry is allowed"));
    }
    complaints
}

// ---- The sources ------------------------------------------------------------------------------

fn top() -> &'static Path {
    Path::new(env!("CARGO_MANIFEST_DIR"))
}

fn files_below(folder: &Path, found: &mut Vec<PathBuf>) {
    let mut entries: Vec<PathBuf> = match fs::read_dir(folder) {
        Ok(entries) => entries.map(|entry| entry.expect("a readable folder").path()).collect(),
        Err(_) => return, // a folder that is allowed, not required
    };
    entries.sort();
    for path in entries {
        if path.is_dir() { files_below(&path, found) } else { found.push(path) }
    }
}

/// Files below the given folders that end in `ending`, with their text.
fn texts(folders: &[&str], ending: &str) -> Vec<(String, String)> {
    let mut found = Vec::new();
    for folder in folders {
        files_below(&top().join(folder), &mut found);
    }
    let named = found.iter().filter(|path| path.to_string_lossy().ends_with(ending));
    let read = |path: &PathBuf| {
        let name = path.strip_prefix(top()).expect("below the top").to_string_lossy().into_owned();
        (name, fs::read_to_string(path).expect("UTF-8 text"))
    };
    named.map(read).collect()
}

fn sources(folders: &[&str]) -> Vec<Source> {
    let found = texts(folders, ".rs");
    assert!(!found.is_empty(), "no Rust below {folders:?}");
    found.iter().map(|(path, text)| Source::new(path, text)).collect()
}

/// Runs one rule: it must refuse every bad snippet, pass every good one, and pass all of `sources`.
fn check(
    rule: fn(&Source) -> Vec<String>,
    sources: &[Source],
    bad: &[(&str, &str)],
    good: &[(&str, &str)],
) {
    for (path, text) in bad {
        assert!(!rule(&Source::new(path, text)).is_empty(), "passed, but is bad: {path}: {text}");
    }
    for (path, text) in good {
        assert_eq!(rule(&Source::new(path, text)), Vec::<String>::new(), "good: {path}: {text}");
    }
    let complaints: Vec<String> = sources.iter().flat_map(rule).collect();
    assert!(complaints.is_empty(), "\n{}\n", complaints.join("\n"));
}

#[test]
fn pure_floors_import_nothing_impure() {
    check(
        pure_floors_reach_for_nothing,
        &sources(&["src"]),
        &[
            ("src/drift/a.rs", "use std::fs;"),
            ("src/drift/a.rs", "use std::{fmt, time::Instant};"),
            ("src/watch/a.rs", "use std::{\n    fmt::{self, Display},\n    env,\n};"),
            ("src/watch/a.rs", "fn f() { std::thread::yield_now() }"),
            ("src/watch/a.rs", "use tokio::sync::mpsc;"),
            ("src/watch/a.rs", "tracing::info!(\"x\");"),
            ("src/watch.rs", "use std::collections::HashMap;"),
            ("src/drift/a.rs", "fn f(seen: &HashSet<u8>) {}"),
        ],
        &[
            ("src/service/a.rs", "use std::fs; use tokio::net;"),
            (
                "src/watch/a.rs",
                "use std::{fmt, collections::BTreeMap}; use crate::watch::time::Span;",
            ),
            ("src/watch/a.rs", "/// As tokio and std::fs would.\nconst A: &str = \"HashMap\";"),
            ("src/watch/a.rs", "fn f() {}\n#[cfg(test)]\nmod tests {\n    use std::fs;\n}"),
        ],
    );
}

#[test]
fn floors_import_only_floors_below() {
    check(
        imports_go_down,
        &sources(&["src"]),
        &[
            ("src/drift/a.rs", "use crate::watch::time::Span;"),
            ("src/drift/a.rs", "use super::super::watch::time;"),
            ("src/watch/a.rs", "use crate::{drift::fit, service::store};"),
            ("src/watch/a.rs", "fn f() { crate::cli::run() }"),
            ("src/service/mod.rs", "use crate::{\n    drift::{fit, choose},\n    cli,\n};"),
        ],
        &[
            ("src/cli/a.rs", "use crate::{drift::fit, service::store, watch::time};"),
            ("src/service/a.rs", "use crate::watch::time::Span; use crate::drift::fit;"),
            ("src/watch/a.rs", "use super::time; // not crate::service"),
        ],
    );
}

#[test]
fn clock_sql_and_mqtt_each_have_one_place() {
    check(
        each_edge_has_one_place,
        &sources(&["src"]),
        &[
            ("src/cli/a.rs", "let t = std::time::SystemTime::now();"),
            ("src/service/daemon.rs", "let t = tokio::time::Instant::now();"),
            ("src/cli/a.rs", "let t = jiff::Timestamp::now();"),
            ("src/service/page/a.rs", "let q = \"SELECT name FROM channel\";"),
            ("src/cli/a.rs", "let q = r#\"\n  INSERT INTO x\"#;"),
            ("src/service/page/a.rs", "use rusqlite::Connection;"),
            ("src/cli/demo.rs", "use rumqttc::v5::AsyncClient;"),
        ],
        &[
            ("src/service/clock.rs", "pub fn now() { std::time::SystemTime::now() }"),
            ("src/service/store/a.rs", "use rusqlite::Connection; const Q: &str = \"SELECT 1\";"),
            ("src/service/broker/a.rs", "use rumqttc::v5::AsyncClient;"),
            ("src/cli/a.rs", "// SELECT is SQL\nlet a = SELECT + 1;"),
            ("src/cli/a.rs", "fn f() {}\n#[cfg(test)]\nmod tests {\n    use rumqttc::v5;\n}"),
        ],
    );
}

#[test]
fn files_and_functions_keep_their_length() {
    let long_file = "fn f() {}\n".repeat(FILE_LINES_MAX + 1);
    let full_file = "fn f() {}\n".repeat(FILE_LINES_MAX) + "#[cfg(test)]\nmod tests {\n}\n";
    let long =
        format!("fn long(a: [u8; 2])\n{{\n{}}}\n", "    g();\n".repeat(FUNCTION_LINES_MAX - 2));
    let full = format!("fn full() {{\n{}}}\n", "    g(\"}\");\n".repeat(FUNCTION_LINES_MAX - 2));
    check(
        files_and_functions_are_short,
        &sources(&["src"]),
        &[("src/a.rs", &long_file), ("src/a.rs", &long)],
        &[("src/a.rs", &full_file), ("src/a.rs", &full), ("src/a.rs", "trait T { fn f(&self); }")],
    );
}

#[test]
fn files_say_what_they_are_for_and_leave_nothing_open() {
    check(
        nothing_is_unfinished,
        &sources(&["src", "tests", "demo-data", "benches"]),
        &[
            ("src/a.rs", "fn f() {}"),
            ("src/a.rs", "//! A.\nfn f() { todo!() }"),
            ("src/a.rs", "//! A.\nfn f() { unimplemented!(\"later\") }"),
            ("tests/a.rs", "//! A.\n#[test]\n#[ignore = \"slow\"]\nfn f() {}"),
            ("src/a.rs", "//! A.\nfn f() { g().unwrap(); }"),
        ],
        &[
            ("src/a.rs", "//! A.\n// todo! is a macro\nconst A: &str = \"#[ignore\";"),
            ("src/a.rs", "//! A.\n#[cfg(test)]\nmod tests {\n    fn f() { g().unwrap(); }\n}"),
            ("tests/a.rs", "//! A.\nfn f() { g().unwrap(); }"),
        ],
    );
}

#[test]
fn the_mathematics_names_its_arguments_and_authors() {
    let found = sources(&["src/drift"]);
    for file in SOURCED {
        let there = found.iter().any(|source| source.path == format!("src/drift/{file}"));
        assert!(there, "src/drift/{file} has moved: so must its line in SOURCED");
    }
    let explained = "/// Returns it.\n///\n/// # Arguments\n/// `x` — age, days.\n";
    let before = format!("{explained}pub fn f(x: f64) {{}}\n\npub fn g(x: f64) {{}}");
    let marked = format!("{explained}#[must_use]\npub fn f(x: f64) -> f64 {{ x }}");
    check(
        mathematics_is_explained,
        &found,
        &[
            ("src/drift/a.rs", "/// Returns it.\npub fn f(x: f64) -> f64 { x }"),
            ("src/drift/a.rs", "impl A {\n    pub fn f(&self, x: f64) {}\n}"),
            ("src/drift/a.rs", "pub fn f(\n    &mut self,\n    x: f64,\n) {}"),
            ("src/drift/a.rs", "pub const fn f<F: Fn(u8) -> u8>(f: F) {}"),
            ("src/drift/a.rs", "// # Arguments\npub fn f(x: f64) {}"),
            ("src/drift/a.rs", &before),
            ("src/drift/serial.rs", "fn f() {}"),
            ("src/drift/serial.rs", "fn f() {}\n#[cfg(test)]\nmod tests {\n    /// # Source\n}"),
        ],
        &[
            ("src/drift/a.rs", &marked),
            ("src/drift/a.rs", "pub fn f() {} pub fn g(&self) {} pub fn h(\n    mut self,\n) {}"),
            ("src/drift/a.rs", "fn f(x: f64) {} pub(crate) fn g(x: f64) {}"),
            ("src/drift/a.rs", "#[cfg(test)]\nmod tests {\n    pub fn f(x: f64) {}\n}"),
            ("src/drift/serial.rs", "/// # Source\n/// An author, a year.\nfn f() {}"),
            ("src/watch/a.rs", "pub fn f(x: f64) {}"),
        ],
    );
}

#[test]
fn words_are_plain_everywhere() {
    for bad in
        ["raises an Alarm", "alarms", "// TODO: later", "FIXME", "a blazing fit", "/home/me/x"]
    {
        assert!(!words_are_plain("a", bad).is_empty(), "passed, but is bad: {bad}");
    }
    for good in ["raises an alert", "alarm-management standards", "mastodons", "to do"] {
        assert_eq!(words_are_plain("a", good), Vec::<String>::new(), "good: {good}");
    }
    let folders = ["src", "tests", "config", "demo-data", "systemd", "benches"];
    let mut read = Vec::new();
    for ending in [".rs", ".md", ".toml", ".service", ".conf", ".html", ".css", ".js"] {
        read.extend(texts(&folders, ending));
    }
    for guide in ["README.md", "DEVELOPERS.md"] {
        read.extend(
            fs::read_to_string(top().join(guide)).ok().map(|text| (guide.to_owned(), text)),
        );
    }
    let others = read.iter().filter(|(path, _)| path != "tests/tidy.rs");
    let complaints: Vec<String> =
        others.flat_map(|(path, text)| words_are_plain(path, text)).collect();
    assert!(complaints.is_empty(), "\n{}\n", complaints.join("\n"));
}

#[test]
fn top_folder_holds_what_a_newcomer_expects() {
    let names = |list: &[&str]| list.iter().map(|&name| name.to_owned()).collect::<Vec<_>>();
    assert_eq!(top_is_bare(&names(&["notes.txt", "src"]), "/target\n").len(), 1);
    assert_eq!(top_is_bare(&names(&["target", ".ci", "src", "Cargo.toml"]), "/target\n").len(), 0);

    let found: Vec<String> = fs::read_dir(top())
        .expect("the top folder is readable")
        .map(|entry| entry.expect("a readable entry").file_name().to_string_lossy().into_owned())
        .collect();
    let ignored = fs::read_to_string(top().join(".gitignore")).expect(".gitignore is there");
    assert_eq!(top_is_bare(&found, &ignored), Vec::<String>::new());
}

#[test]
fn the_unit_leaves_room_for_the_programs_own_limits() {
    let unit = fs::read_to_string(top().join("systemd/asfound.service")).expect("the unit file");
    let allowed = unit.lines().find_map(|line| line.strip_prefix("MemoryMax=")).expect("a maximum");
    let (digits, factor) = match allowed.split_at(allowed.len() - 1) {
        (digits, "M") => (digits, 1 << 20),
        (digits, "G") => (digits, 1 << 30),
        _ => panic!("a unit that this test does not know: {allowed}"),
    };
    let allowed: usize = factor * digits.parse::<usize>().expect("a whole number");
    // With windows of 512 points: 35 MB per 1000 channels and states of 25 kB each (measured), whitened
    // windows of 136 bytes a point.
    let channels = asfound::watch::limits::CHANNELS_MAX * (35_000 + 70_000 + 25_000);
    // As many unacknowledged messages as the broker is allowed, each as large as is taken.
    let messages = 4000 * (64 << 10);
    assert!(channels + messages <= allowed, "{channels} + {messages} bytes, {allowed} allowed");
}

#[test]
fn lock_file_names_one_registry_and_every_checksum() {
    let package = |source: &str, checksum: &str| format!("[[package]]\n{source}{checksum}");
    let registry = "source = \"registry+https://a.example/index\"\n";
    let sum = "checksum = \"00\"\n";
    for bad in [
        package(registry, ""),
        package("source = \"git+https://a.example/x?rev=1\"\n", sum),
        package(registry, sum) + &package("source = \"registry+https://b.example/index\"\n", sum),
    ] {
        assert!(!dependencies_come_from_one_registry(&bad).is_empty(), "passed, but is bad: {bad}");
    }
    let good = package(registry, sum) + &package("", "") + &package(registry, sum);
    assert_eq!(dependencies_come_from_one_registry(&good), Vec::<String>::new());

    let lock = fs::read_to_string(top().join("Cargo.lock")).expect("Cargo.lock is committed");
    assert_eq!(dependencies_come_from_one_registry(&lock), Vec::<String>::new());
}

#[test]
fn scanner_tells_code_from_comment_and_literal() {
    for (text, code) in [
        ("a // b\nc", "a     \nc"),
        ("a /* b /* c */ d */ e", "a                   e"),
        (r#"f("a\"b", 'c', '\'') as &'d str"#, r"f(      ,    ,     ) as &'d str"),
        ("r#\"a\"b\"# c", "         c"),
        ("br\"a\\\" c", "       c"),
        ("'a: loop { break 'a }", "'a: loop { break 'a }"),
        ("/* open\nto the end", "       \n          "),
        ("\"open\nto the end", "     \n          "),
    ] {
        assert_eq!(blank(text).1, code, "{text}");
    }
    assert_eq!(blank("a // b\n\"c\"").0, "a     \n\"c\"");
}
