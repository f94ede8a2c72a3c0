//! The two layers of settings, file then environment, as one tree whose every value knows its place.
//!
//! The environment is collected by the `config` crate: `ASFOUND__BROKER__URL` is `broker.url`. The
//! file is read by `toml` itself, because only its own parser keeps the line of each value.

use super::problem::{Fault, Place, Problems};
use crate::service::shown::Shown;
use config::Source as _;
use std::collections::BTreeMap;
use std::path::PathBuf;
use toml::de::{DeTable, DeValue};

/// What each variable that is a setting begins with.
pub const VARIABLE_PREFIX: &str = "ASFOUND__";

/// The largest settings file that is read, bytes.
pub const FILE_BYTES_MAX: u64 = 1 << 20;

/// What the process's environment says about settings.
#[derive(Clone, Debug, Default)]
pub struct Environment {
    /// The variables that begin with [`VARIABLE_PREFIX`].
    pub variables: BTreeMap<String, String>,
    /// Where the service manager puts credentials (`CREDENTIALS_DIRECTORY`), if it does.
    pub credentials_directory: Option<PathBuf>,
}

impl Environment {
    /// Returns the environment of this process. A value that is not UTF-8 keeps a mark in its place,
    /// which is then refused by name.
    pub fn of_process() -> Environment {
        let variables = std::env::vars_os()
            .filter_map(|(name, value)| Some((name.into_string().ok()?, value)))
            .filter(|(name, _)| name.to_uppercase().starts_with(VARIABLE_PREFIX))
            .map(|(name, value)| (name, value.to_string_lossy().into_owned()))
            .collect();
        let credentials_directory = std::env::var_os("CREDENTIALS_DIRECTORY").map(PathBuf::from);
        Environment { variables, credentials_directory }
    }
}

/// A value of the tree.
#[derive(Clone, Debug)]
pub(super) enum Value {
    Text(String),
    Whole(i64),
    Number(f64),
    Truth(bool),
    Time(String),
    List(Vec<Node>),
    Table(Table),
}

pub(super) type Table = BTreeMap<String, Node>;

/// A value and where its key stands.
#[derive(Clone, Debug)]
pub(super) struct Node {
    pub value: Value,
    pub place: Place,
}

impl Value {
    /// What was found, in words and ready to show.
    pub fn found(&self) -> String {
        match self {
            Value::Text(text) => format!("\"{}\"", Shown(text, 80)),
            Value::Whole(n) => format!("the whole number {n}"),
            Value::Number(x) => format!("the number {x}"),
            Value::Truth(b) => format!("the truth value {b}"),
            Value::Time(text) => format!("the time {}", Shown(text, 80)),
            Value::List(list) => format!("a list of {}", list.len()),
            Value::Table(_) => "a table".to_owned(),
        }
    }
}

/// Reads the file's text; problems with its syntax are noted and leave what could be read.
pub(super) fn file_layer(text: &str, problems: &mut Problems) -> Table {
    let (table, errors) = DeTable::parse_recoverable(text);
    let lines = Lines::of(text);
    for error in errors {
        let place = error.span().map_or(Place::File, |span| Place::Line(lines.at(span.start)));
        problems.push(&place, "", Fault::Syntax { message: error.message().to_owned() });
    }
    convert_table(table.get_ref(), &lines)
}

fn convert_table(table: &DeTable<'_>, lines: &Lines) -> Table {
    table
        .iter()
        .map(|(key, value)| {
            let place = Place::Line(lines.at(key.span().start));
            let value = convert(value.get_ref(), lines);
            (key.get_ref().to_string(), Node { value, place })
        })
        .collect()
}

fn convert(value: &DeValue<'_>, lines: &Lines) -> Value {
    match value {
        DeValue::String(text) => Value::Text(text.to_string()),
        DeValue::Integer(n) => i64::from_str_radix(n.as_str(), n.radix())
            .map_or_else(|_| Value::Number(n.as_str().parse().unwrap_or(f64::NAN)), Value::Whole),
        DeValue::Float(x) => Value::Number(x.as_str().parse().unwrap_or(f64::NAN)),
        DeValue::Boolean(b) => Value::Truth(*b),
        DeValue::Datetime(time) => Value::Time(time.to_string()),
        DeValue::Array(list) => Value::List(
            list.iter()
                .map(|item| Node {
                    value: convert(item.get_ref(), lines),
                    place: Place::Line(lines.at(item.span().start)),
                })
                .collect(),
        ),
        DeValue::Table(table) => Value::Table(convert_table(table, lines)),
    }
}

/// Lays the environment's settings over the tree.
pub(super) fn environment_layer(tree: &mut Table, from: &Environment, problems: &mut Problems) {
    let names: BTreeMap<String, &String> =
        from.variables.keys().map(|name| (name.to_lowercase().replace("__", "."), name)).collect();
    let source = from.variables.iter().map(|(k, v)| (k.clone(), v.clone())).collect();
    let layer = config::Environment::with_prefix("ASFOUND").separator("__").source(Some(source));
    let Ok(found) = layer.collect() else {
        // Only text that is not Unicode makes it fail, and the map holds none.
        return;
    };
    // Sorted, so that problems come in the same order each time.
    for (key, value) in found.into_iter().collect::<BTreeMap<_, _>>() {
        let name =
            names.get(&format!("asfound.{key}")).map_or_else(|| key.clone(), |n| (*n).clone());
        let place = Place::Variable(name);
        let text = value.into_string().unwrap_or_default();
        if text.contains('\u{fffd}') {
            problems.refuse(&place, &key, "text that is not UTF-8", "UTF-8 text");
            continue;
        }
        let path: Vec<&str> = key.split('.').collect();
        match path.as_slice() {
            ["watch", ..] => problems.refuse(
                &place,
                &key,
                "a watch in the environment",
                "watches in the settings file only",
            ),
            [section, name] => lay(tree, section, name, text, place),
            _ => problems.refuse(
                &place,
                &key,
                "a name that is not one section and one key",
                "ASFOUND__SECTION__KEY, such as ASFOUND__BROKER__URL",
            ),
        }
    }
}

fn lay(tree: &mut Table, section: &str, name: &str, text: String, place: Place) {
    let node = tree
        .entry(section.to_owned())
        .or_insert_with(|| Node { value: Value::Table(Table::new()), place: place.clone() });
    // A file that has something else than a table there is told so by the reader of the section.
    if let Value::Table(table) = &mut node.value {
        table.insert(name.to_owned(), Node { value: Value::Text(text), place });
    }
}

/// Where each line of a text begins.
struct Lines(Vec<usize>);

impl Lines {
    fn of(text: &str) -> Lines {
        Lines(text.bytes().enumerate().filter(|(_, b)| *b == b'\n').map(|(i, _)| i).collect())
    }

    /// The line, from 1, on which the byte at `offset` stands.
    fn at(&self, offset: usize) -> usize {
        self.0.partition_point(|&end| end < offset) + 1
    }
}
