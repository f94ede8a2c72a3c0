//! One table of the settings while it is read: each key is asked for once, what was never asked for
//! is unknown. So the keys that are read are the keys that are allowed, without a second list.

use super::layers::{Node, Table, Value};
use super::problem::{Fault, Place, Problems, nearest};

/// A value with the place and the full name of its key.
#[derive(Clone, Debug)]
pub struct Located<T> {
    /// What was found.
    pub value: T,
    /// Where.
    pub place: Place,
    /// Under which key, such as `watch[1].unit`.
    pub key: String,
}

/// A table being read.
pub(super) struct Section<'a> {
    table: &'a Table,
    /// The path of the table, such as `watch[1].window`; empty for the root.
    pub path: String,
    /// Where the table begins.
    pub place: Place,
    asked: Vec<&'static str>,
    /// Keys whose problem is already noted.
    settled: Vec<&'static str>,
    pub problems: &'a mut Problems,
}

impl<'a> Section<'a> {
    pub fn root(table: &'a Table, problems: &'a mut Problems) -> Section<'a> {
        Section::new(table, String::new(), Place::File, problems)
    }

    fn new(
        table: &'a Table,
        path: String,
        place: Place,
        problems: &'a mut Problems,
    ) -> Section<'a> {
        Section { table, path, place, asked: Vec::new(), settled: Vec::new(), problems }
    }

    /// The full name of a key of this table.
    pub fn key(&self, name: &str) -> String {
        if self.path.is_empty() { name.to_owned() } else { format!("{}.{name}", self.path) }
    }

    fn ask(&mut self, name: &'static str) -> Option<&'a Node> {
        self.asked.push(name);
        self.table.get(name)
    }

    fn located<T>(&self, name: &str, node: &Node, value: T) -> Option<Located<T>> {
        Some(Located { value, place: node.place.clone(), key: self.key(name) })
    }

    fn wrong_kind<T>(&mut self, name: &str, node: &Node, allowed: &'static str) -> Option<T> {
        let key = self.key(name);
        self.problems.refuse(&node.place, &key, node.value.found(), allowed);
        None
    }

    /// Text under that key, or `None` when absent or when something else was found and noted.
    pub fn text(&mut self, name: &'static str, allowed: &'static str) -> Option<Located<String>> {
        let node = self.ask(name)?;
        match &node.value {
            Value::Text(text) => self.located(name, node, text.clone()),
            _ => self.wrong_kind(name, node, allowed),
        }
    }

    /// A time: text, or TOML's own date and time.
    pub fn time(&mut self, name: &'static str, allowed: &'static str) -> Option<Located<String>> {
        let node = self.ask(name)?;
        match &node.value {
            Value::Text(text) | Value::Time(text) => self.located(name, node, text.clone()),
            _ => self.wrong_kind(name, node, allowed),
        }
    }

    /// A number, whole or not; the environment writes it as text.
    pub fn number(&mut self, name: &'static str, allowed: &'static str) -> Option<Located<f64>> {
        let node = self.ask(name)?;
        let value = match (&node.value, &node.place) {
            #[expect(clippy::cast_precision_loss, reason = "every limit is far below 2^53")]
            (Value::Whole(n), _) => Some(*n as f64),
            (Value::Number(x), _) => Some(*x),
            (Value::Text(text), Place::Variable(_)) => text.trim().parse().ok(),
            _ => None,
        };
        match value.filter(|x: &f64| x.is_finite()) {
            Some(x) => self.located(name, node, x),
            None => self.wrong_kind(name, node, allowed),
        }
    }

    /// A whole number.
    pub fn whole(&mut self, name: &'static str, allowed: &'static str) -> Option<Located<i64>> {
        let node = self.ask(name)?;
        match &node.value {
            Value::Whole(n) => self.located(name, node, *n),
            _ => self.wrong_kind(name, node, allowed),
        }
    }

    /// A list of texts.
    pub fn texts(
        &mut self,
        name: &'static str,
        allowed: &'static str,
    ) -> Option<Located<Vec<Located<String>>>> {
        let node = self.ask(name)?;
        let Value::List(list) = &node.value else {
            return self.wrong_kind(name, node, allowed);
        };
        let mut texts = Vec::new();
        for item in list {
            match &item.value {
                Value::Text(text) => texts.extend(self.located(name, item, text.clone())),
                _ => self.wrong_kind::<()>(name, item, allowed).unwrap_or_default(),
            }
        }
        self.located(name, node, texts)
    }

    /// A table under that key.
    pub fn section(&mut self, name: &'static str, allowed: &'static str) -> Option<Section<'_>> {
        let node = self.ask(name)?;
        let path = self.key(name);
        match &node.value {
            Value::Table(table) => {
                Some(Section::new(table, path, node.place.clone(), self.problems))
            }
            _ => self.wrong_kind(name, node, allowed),
        }
    }

    /// Reads each table of a list of tables; `path[1]` is the first.
    pub fn sections<T>(
        &mut self,
        name: &'static str,
        allowed: &'static str,
        mut read: impl FnMut(Section<'_>) -> T,
    ) -> Vec<T> {
        let Some(node) = self.ask(name) else { return Vec::new() };
        let Value::List(list) = &node.value else {
            return self.wrong_kind(name, node, allowed).unwrap_or_default();
        };
        let mut results = Vec::new();
        for (i, item) in list.iter().enumerate() {
            let path = format!("{}[{}]", self.key(name), i + 1);
            match &item.value {
                Value::Table(table) => {
                    let place = item.place.clone();
                    results.push(read(Section::new(table, path, place, self.problems)));
                }
                _ => self.problems.refuse(&item.place, &path, item.value.found(), allowed),
            }
        }
        results
    }

    /// Whether that key is there, whatever its value.
    pub fn has(&self, name: &str) -> bool {
        self.table.contains_key(name)
    }

    /// Refuses a key that a later version will serve.
    pub fn later(&mut self, name: &'static str, instead: &'static str) {
        if let Some(node) = self.table.get(name) {
            self.settled.push(name);
            let key = self.key(name);
            self.problems.push(&node.place, &key, Fault::NotYet { instead });
        }
    }

    /// Refuses a key whose value must never be shown.
    pub fn never(&mut self, name: &'static str, allowed: &'static str) {
        if let Some(node) = self.table.get(name) {
            self.settled.push(name);
            let key = self.key(name);
            self.problems.refuse(&node.place, &key, "a value that is withheld here", allowed);
        }
    }

    /// Notes every key that nobody asked for.
    pub fn finish(self) {
        let mut known = self.asked.clone();
        known.sort_unstable();
        for (name, node) in self.table {
            if !self.asked.iter().chain(&self.settled).any(|k| k == name) {
                let fault = Fault::Unknown { nearest: nearest(name, &known), known: known.clone() };
                self.problems.push(&node.place, &self.key(name), fault);
            }
        }
    }
}
