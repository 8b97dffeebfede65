//! Keys: what a table of the plan may hold, and the checking that follows from it.
//!
//! Invariants: each table's keys are defined once, as a [`Table`]; unknown keys, wrong types, missing keys, values out
//! of range and the JSON Schema all come from that definition, and a reader can only ask for a key that is in it.

use super::diagnostics::{Fault, Severity, nearest};
use super::forms::{Form, clip};
use super::written::{Entries, Entry, FileText, Node, Spot, Value};

/// The definition of a table.
#[derive(Debug)]
pub(crate) struct Table {
    /// As written in a header: `[study]`, `[[measure]]`, or in words.
    pub name: &'static str,
    /// What it is.
    pub doc: &'static str,
    /// Its keys.
    pub keys: &'static [Key],
    /// Of these keys exactly one must be there; empty when there is no such rule.
    pub one_of: &'static [&'static str],
}

/// The definition of a key.
#[derive(Debug, Clone, Copy)]
pub(crate) struct Key {
    /// Its name.
    pub name: &'static str,
    /// What it takes.
    pub kind: Kind,
    /// Whether it must be there.
    pub needed: bool,
    /// What holds without it, in words.
    pub default: &'static str,
    /// What it means.
    pub doc: &'static str,
    /// An older spelling, which keeps working.
    pub older: Option<&'static str>,
}

/// An optional key.
pub(crate) const fn key(name: &'static str, kind: Kind, default: &'static str, doc: &'static str) -> Key {
    Key { name, kind, needed: false, default, doc, older: None }
}

/// A key that must be there.
pub(crate) const fn needed(name: &'static str, kind: Kind, doc: &'static str) -> Key {
    Key { name, kind, needed: true, default: "", doc, older: None }
}

/// What a key takes.
#[derive(Debug, Clone, Copy)]
pub(crate) enum Kind {
    /// A text of a form.
    Text(Form),
    /// A whole number, both ends in.
    Whole(i64, i64),
    /// A number.
    Number(Bounds),
    /// `true` or `false`.
    Truth,
    /// A date.
    Date,
    /// One of some words.
    Word(&'static WordNames),
    /// A list with at least so many items.
    List(&'static Kind, usize),
    /// A list of two.
    Pair(&'static Kind),
    /// A table.
    Table(&'static Table),
    /// Several tables of one kind: `[[…]]`.
    Tables(&'static Table),
    /// A table with free keys, which are texts of a form.
    Map(Form, &'static Kind),
    /// One of several, told apart by their types.
    Either(&'static [Kind]),
}

/// The bounds of a number.
#[derive(Debug, Clone, Copy)]
pub(crate) struct Bounds {
    pub low: f64,
    pub low_in: bool,
    pub high: f64,
    pub high_in: bool,
}

impl Bounds {
    /// Any finite number.
    pub const ANY: Self = Self { low: f64::NEG_INFINITY, low_in: false, high: f64::INFINITY, high_in: false };
    /// Above 0.
    pub const POSITIVE: Self = Self { low: 0.0, ..Self::ANY };
    /// Between 0 and 1, both ends out.
    pub const SHARE: Self = Self { low: 0.0, high: 1.0, ..Self::ANY };
    /// From 0, in, to 1, out.
    pub const SHARE_OR_NONE: Self = Self { low_in: true, ..Self::SHARE };
    /// From 0, out, to 1, in.
    pub const SHARE_OR_ALL: Self = Self { high_in: true, ..Self::SHARE };
    /// Between -1 and 1, both ends out.
    pub const CORRELATION: Self = Self { low: -1.0, high: 1.0, ..Self::ANY };

    fn hold(self, x: f64) -> bool {
        (x > self.low || self.low_in && x == self.low) && (x < self.high || self.high_in && x == self.high)
    }

    fn called(self) -> String {
        let low = format!("{} {}", if self.low_in { "at least" } else { "above" }, self.low);
        let high = format!("{} {}", if self.high_in { "at most" } else { "below" }, self.high);
        match (self.low.is_finite(), self.high.is_finite()) {
            (false, false) => "a number".into(),
            (true, false) => format!("a number, {low}"),
            (false, true) => format!("a number, {high}"),
            (true, true) => format!("a number, {low} and {high}"),
        }
    }
}

/// The words that a key takes, without their meanings.
#[derive(Debug)]
pub(crate) struct WordNames {
    pub names: &'static [&'static str],
    /// Older spellings, which keep working: the older word and the word of today.
    pub older: &'static [(&'static str, &'static str)],
}

impl WordNames {
    /// The position of the word, in its spelling of today or an older one.
    pub fn position(&self, word: &str) -> Option<usize> {
        let today = self.older.iter().find(|(older, _)| *older == word).map_or(word, |(_, today)| today);
        self.names.iter().position(|name| *name == today)
    }
}

/// Words and what they mean.
pub(crate) struct Words<T: 'static> {
    pub words: WordNames,
    pub values: &'static [T],
}

impl<T: PartialEq> Words<T> {
    /// The word for a meaning.
    pub fn name(&self, value: &T) -> &'static str {
        let position = self.values.iter().position(|it| it == value);
        position.and_then(|position| self.words.names.get(position)).copied().unwrap_or_default()
    }
}

/// `words!(SUMMARY: Summary { "mean" = Summary::Mean, … })`: words and meanings side by side.
macro_rules! words {
    ($name:ident: $type:ty { $($word:literal = $value:expr),+ $(,)? } $(older { $($old:literal = $today:literal),+ })?) => {
        pub(crate) static $name: $crate::plan::keys::Words<$type> = $crate::plan::keys::Words {
            words: $crate::plan::keys::WordNames {
                names: &[$($word),+],
                older: &[$($(($old, $today)),+)?],
            },
            values: &[$($value),+],
        };
    };
}
pub(crate) use words;

impl Kind {
    /// What people call it.
    pub fn called(&self) -> String {
        match self {
            Self::Text(form) => form.called().into(),
            Self::Whole(low, high) if *high == i64::MAX => format!("a whole number of at least {low}"),
            Self::Whole(low, high) => format!("a whole number from {low} to {high}"),
            Self::Number(bounds) => bounds.called(),
            Self::Truth => "true or false, without quotes".into(),
            Self::Date => "a date without quotes, such as 2026-02-28".into(),
            Self::Word(words) => one_of(words.names),
            Self::List(item, 0 | 1) => format!("a list […] of which each is {}", item.called()),
            Self::List(item, least) => format!("a list […] of at least {least}, of which each is {}", item.called()),
            Self::Pair(item) => format!("a list of two, [from, to], of which each is {}", item.called()),
            Self::Table(table) if table.one_of.is_empty() => {
                format!("a table {{ {} = … }}", table.keys.first().map_or("", |key| key.name))
            }
            Self::Table(table) => {
                let ways: Vec<String> = table.one_of.iter().map(|key| format!("{{ {key} = … }}")).collect();
                format!("a table: {}", ways.join(" or "))
            }
            Self::Tables(table) => format!("tables, each under its own header {}", table.name),
            Self::Map(_, item) => format!("a table {{ name = … }} in which each value is {}", item.called()),
            Self::Either(kinds) => kinds.iter().map(Self::called).collect::<Vec<_>>().join("; or "),
        }
    }

    /// Whether the type fits; the value itself may still not.
    fn takes(&self, value: &Value) -> bool {
        match self {
            Self::Text(_) | Self::Word(_) => matches!(value, Value::Text(_)),
            Self::Whole(..) => matches!(value, Value::Whole(_)),
            Self::Number(_) => matches!(value, Value::Whole(_) | Value::Number(_)),
            Self::Truth => matches!(value, Value::Truth(_)),
            Self::Date => matches!(value, Value::Date(_)),
            Self::List(..) | Self::Pair(_) | Self::Tables(_) => matches!(value, Value::List(_)),
            Self::Table(_) | Self::Map(..) => matches!(value, Value::Table(_)),
            Self::Either(kinds) => kinds.iter().any(|kind| kind.takes(value)),
        }
    }
}

/// `"a", "b" or "c"`.
pub(crate) fn one_of<'a>(names: impl IntoIterator<Item = &'a &'a str>) -> String {
    let mut quoted: Vec<String> = vec![];
    for name in names {
        let name = format!("\"{name}\"");
        if !quoted.contains(&name) {
            quoted.push(name);
        }
    }
    match quoted.split_last() {
        Some((last, [])) => last.clone(),
        Some((last, rest)) => format!("{} or {last}", rest.join(", ")),
        None => "nothing".into(),
    }
}

impl Table {
    /// The key of this name, in its spelling of today.
    pub fn key(&self, name: &str) -> Option<&'static Key> {
        self.keys.iter().find(|key| key.name == name)
    }

    /// The key that is meant: by its name, an older spelling, or by being near.
    fn meant(&self, written: &str) -> Option<&'static Key> {
        let exact = self.keys.iter().find(|key| key.name == written || key.older == Some(written));
        exact.or_else(|| self.key(nearest(written, self.keys.iter().map(|key| key.name))?))
    }
}

// ---- a table as written, seen through its definition ----

/// A table as written, with its definition and its path.
#[derive(Debug, Clone)]
pub(crate) struct Tab<'a> {
    pub def: &'static Table,
    pub entries: &'a Entries,
    pub spot: Spot,
    pub path: String,
}

impl<'a> Tab<'a> {
    pub fn new(def: &'static Table, node: &'a Node, path: String) -> Option<Self> {
        match &node.value {
            Value::Table(entries) => Some(Self { def, entries, spot: node.spot.clone(), path }),
            _ => None,
        }
    }

    /// The entry of a key; one that is misspelt is found too, so that one slip gives one fault.
    pub fn entry(&self, name: &str) -> Option<&'a Entry> {
        debug_assert!(self.def.key(name).is_some(), "{} has no key {name}", self.def.name);
        let meant = |entry: &&Entry| self.def.meant(&entry.key).is_some_and(|key| key.name == name);
        self.entries.get(name).or_else(|| self.entries.0.iter().find(meant))
    }

    pub fn node(&self, name: &str) -> Option<&'a Node> {
        #[cfg(test)]
        tests::ASKED.with_borrow_mut(|asked| asked.insert((self.def.name, name.to_owned())));
        self.entry(name).map(|entry| &entry.node)
    }

    /// Whether the key is written.
    pub fn has(&self, name: &str) -> bool {
        self.entry(name).is_some()
    }

    /// Where a key's value stands; the table itself when it is not there.
    pub fn spot_of(&self, name: &str) -> Spot {
        self.node(name).map_or_else(|| self.spot.clone(), |node| node.spot.clone())
    }

    pub fn path_of(&self, name: &str) -> String {
        join(&self.path, name)
    }

    pub fn text(&self, name: &str) -> Option<&'a str> {
        self.node(name)?.text()
    }

    pub fn whole(&self, name: &str) -> Option<i64> {
        match (self.def.key(name)?.kind, &self.node(name)?.value) {
            (Kind::Whole(low, high), Value::Whole(whole)) => Some(*whole).filter(|it| (low..=high).contains(it)),
            _ => None,
        }
    }

    pub fn number(&self, name: &str) -> Option<f64> {
        let number = self.node(name)?.number()?;
        match self.def.key(name)?.kind {
            Kind::Number(bounds) if !bounds.hold(number) => None,
            _ => Some(number),
        }
    }

    pub fn truth(&self, name: &str) -> Option<bool> {
        match self.node(name)?.value {
            Value::Truth(truth) => Some(truth),
            _ => None,
        }
    }

    pub fn date(&self, name: &str) -> Option<chrono::NaiveDate> {
        match self.node(name)?.value {
            Value::Date(date) => Some(date),
            _ => None,
        }
    }

    /// A text as its form reads it; `None` also when it is not of the form, which has been said already.
    pub fn formed<T, E>(&self, name: &str, parse: impl Fn(&str) -> Result<T, E>) -> Option<T> {
        parse(self.text(name)?).ok()
    }

    pub fn word<T: Copy>(&self, name: &str, words: &Words<T>) -> Option<T> {
        words.values.get(words.words.position(self.text(name)?)?).copied()
    }

    /// The items of a list; none when it is not there.
    pub fn list(&self, name: &str) -> &'a [Node] {
        let Some(node) = self.node(name) else { return &[] };
        match (&node.value, self.def.key(name).map(|key| key.kind)) {
            (Value::List(items), _) => items,
            // `[visit]` for `[[visit]]` is a fault, but no reason to take the visit for absent.
            (Value::Table(_), Some(Kind::Tables(_))) => std::slice::from_ref(node),
            _ => &[],
        }
    }

    /// The texts of a list, with their places.
    pub fn texts(&self, name: &str) -> Vec<(&'a str, &'a Spot)> {
        self.list(name).iter().filter_map(|node| Some((node.text()?, &node.spot))).collect()
    }

    /// A list of two numbers.
    pub fn pair(&self, name: &str) -> Option<(f64, f64)> {
        match self.list(name) {
            [low, high] => Some((low.number()?, high.number()?)),
            _ => None,
        }
    }

    /// A table under a key.
    pub fn table(&self, name: &str, def: &'static Table) -> Option<Tab<'a>> {
        Tab::new(def, self.node(name)?, self.path_of(name))
    }

    /// The tables of a list.
    pub fn tables(&self, name: &str, def: &'static Table) -> Vec<Tab<'a>> {
        let path = self.path_of(name);
        let items = self.list(name).iter().enumerate();
        items.filter_map(|(index, node)| Tab::new(def, node, item_path(&path, index, node))).collect()
    }

    /// The entries of a table with free keys.
    pub fn map(&self, name: &str) -> &'a [Entry] {
        match self.node(name).map(|node| &node.value) {
            Some(Value::Table(entries)) => &entries.0,
            _ => &[],
        }
    }
}

impl Node {
    pub fn text(&self) -> Option<&str> {
        match &self.value {
            Value::Text(text) => Some(text),
            _ => None,
        }
    }

    pub fn number(&self) -> Option<f64> {
        match self.value {
            // Whole numbers of a plan are far below 2^53.
            Value::Whole(whole) => Some(whole as f64),
            Value::Number(number) => Some(number),
            _ => None,
        }
    }
}

pub(crate) fn join(path: &str, key: &str) -> String {
    if path.is_empty() { key.to_owned() } else { format!("{path}.{key}") }
}

/// The path of an item: by its code or name where it has one, else by its position from 1.
fn item_path(path: &str, index: usize, node: &Node) -> String {
    let named = match &node.value {
        Value::Table(entries) => entries.get("code").or_else(|| entries.get("name")).and_then(|it| it.node.text()),
        _ => None,
    };
    match named {
        Some(name) if !name.is_empty() => format!("{path}[{}]", clip(name)),
        _ => format!("{path}[{}]", index + 1),
    }
}

// ---- checking ----

/// The faults found so far.
pub(crate) struct Check<'a> {
    pub sources: &'a [FileText],
    pub faults: Vec<Fault>,
    /// After a fault of TOML's own syntax parts of the file are lost: then what is missing proves nothing.
    pub torn: bool,
}

impl<'a> Check<'a> {
    pub fn new(sources: &'a [FileText]) -> Self {
        Self { sources, faults: vec![], torn: false }
    }

    /// Adds an error.
    pub fn error(&mut self, spot: &Spot, key: &str, wrong: impl Into<String>, right: impl Into<String>) {
        self.add(Severity::Error, spot, key, wrong.into(), right.into(), None);
    }

    /// Adds an error with the name that was probably meant.
    pub fn error_near(
        &mut self,
        spot: &Spot,
        key: &str,
        wrong: impl Into<String>,
        right: impl Into<String>,
        near: Option<String>,
    ) {
        self.add(Severity::Error, spot, key, wrong.into(), right.into(), near);
    }

    /// Adds a warning.
    pub fn warn(&mut self, spot: &Spot, key: &str, wrong: impl Into<String>, right: impl Into<String>) {
        self.add(Severity::Warning, spot, key, wrong.into(), right.into(), None);
    }

    /// Adds an error at a key of a table.
    pub fn at(&mut self, tab: &Tab<'_>, name: &str, wrong: impl Into<String>, right: impl Into<String>) {
        self.error(&tab.spot_of(name), &tab.path_of(name), wrong, right);
    }

    fn add(&mut self, severity: Severity, spot: &Spot, key: &str, wrong: String, right: String, near: Option<String>) {
        let Some(source) = self.sources.get(spot.file) else { return };
        let (line, column, text) = source.place(spot.span.start);
        self.faults.push(Fault {
            file: source.name.clone(),
            line,
            column,
            span: (spot.span.start, spot.span.end),
            key: key.to_owned(),
            wrong,
            right,
            nearest: near,
            severity,
            text: text.to_owned(),
        });
    }

    /// The position of a code among the known ones; an unknown one is a fault.
    pub fn refer(&mut self, spot: &Spot, key: &str, code: &str, what: &str, known: &[&str]) -> Option<usize> {
        let found = known.iter().position(|name| *name == code);
        // Without any, the fault is that there are none; it has been said.
        if found.is_none() && !known.is_empty() {
            let near = nearest(code, known.iter().copied()).map(str::to_owned);
            let of = if what.contains(' ') { "" } else { " of the plan" };
            self.error_near(spot, key, format!("\"{}\" is no {what}{of}.", clip(code)), one_of(known), near);
        }
        found
    }

    /// Says of every code or name that stands before with the same text.
    pub fn unique(&mut self, tabs: &[Tab<'_>], name: &str) {
        for (index, tab) in tabs.iter().enumerate() {
            let Some(text) = tab.text(name) else { continue };
            if tabs[..index].iter().any(|earlier| earlier.text(name) == Some(text)) {
                self.at(tab, name, format!("\"{}\" is taken already.", clip(text)), "another one: each may stand once");
            }
        }
    }

    /// Says of every text of a list that stands in it before.
    pub fn once(&mut self, tab: &Tab<'_>, name: &str) {
        let texts = tab.texts(name);
        for (index, (text, spot)) in texts.iter().enumerate() {
            if texts[..index].iter().any(|(earlier, _)| earlier == text) {
                self.error(spot, &tab.path_of(name), format!("\"{}\" stands twice.", clip(text)), "each once");
            }
        }
    }

    /// Checks a table against its definition.
    pub fn table(&mut self, def: &'static Table, node: &Node, path: &str) {
        let Some(tab) = Tab::new(def, node, path.to_owned()) else { return };
        for entry in &tab.entries.0 {
            let known = def.keys.iter().find(|key| key.name == entry.key || key.older == Some(entry.key.as_str()));
            match known {
                Some(key) => self.known(&tab, key, entry),
                None => self.unknown(&tab, entry),
            }
        }
        if !self.torn {
            self.missing(&tab);
        }
    }

    fn known(&mut self, tab: &Tab<'_>, key: &'static Key, entry: &Entry) {
        if key.name != entry.key {
            let wrong = format!("\"{}\" is an older spelling; it keeps working.", entry.key);
            self.warn(&entry.spot, &join(&tab.path, &entry.key), wrong, format!("{} = …", key.name));
            if tab.entries.get(key.name).is_some() {
                let wrong = format!("\"{}\" stands here too, and means the same.", key.name);
                self.error(&entry.spot, &join(&tab.path, &entry.key), wrong, "one of the two");
            }
        }
        let path = join(&tab.path, key.name);
        if let (Kind::Tables(_), Value::List(items), true) = (&key.kind, &entry.node.value, key.needed)
            && items.is_empty()
        {
            self.error(&entry.node.spot, &path, "The list is empty; at least one is needed.", key.kind.called());
        }
        self.value(&key.kind, &entry.node, &path);
    }

    fn unknown(&mut self, tab: &Tab<'_>, entry: &Entry) {
        let path = join(&tab.path, &entry.key);
        let elsewhere = super::tables_with(&entry.key);
        let near = tab.def.meant(&entry.key).map(|key| key.name);
        let names: Vec<&str> = tab.def.keys.iter().map(|key| key.name).collect();
        let right = match (near, elsewhere.as_slice()) {
            (None, [only]) => format!("here: {}; \"{}\" belongs to {only}", names.join(", "), entry.key),
            (Some(near), _) => format!("{near} = …"),
            (None, _) => format!("one of {}", names.join(", ")),
        };
        let wrong = format!("{} has no key \"{}\".", upper_first(tab.def.name), clip(&entry.key));
        self.error_near(&entry.spot, &path, wrong, right, near.map(str::to_owned));
        // What is misspelt may be wrong besides.
        if let Some(key) = near.and_then(|name| tab.def.key(name)).filter(|key| tab.entries.get(key.name).is_none()) {
            self.value(&key.kind, &entry.node, &path);
        }
    }

    fn missing(&mut self, tab: &Tab<'_>) {
        for key in tab.def.keys.iter().filter(|key| key.needed && !tab.has(key.name)) {
            let name = upper_first(tab.def.name);
            let wrong = format!("{name} lacks the key \"{}\": {}.", key.name, lower_first(key.doc));
            self.error(&tab.spot, &tab.path_of(key.name), wrong, format!("{} = {}", key.name, key.kind.called()));
        }
        if tab.def.one_of.is_empty() {
            return;
        }
        let there: Vec<&&str> = tab.def.one_of.iter().filter(|name| tab.has(name)).collect();
        match there.as_slice() {
            [_] => {}
            [] => {
                let wrong = format!("{} has none of the keys of which it needs one.", upper_first(tab.def.name));
                self.error(&tab.spot, &tab.path, wrong, Kind::Table(tab.def).called());
            }
            [_, second, ..] => {
                let wrong = format!("{} has keys that exclude each other.", upper_first(tab.def.name));
                let right = format!("one of {} alone", there.iter().map(|it| **it).collect::<Vec<_>>().join(", "));
                self.error(&tab.spot_of(second), &tab.path_of(second), wrong, right);
            }
        }
    }

    fn value(&mut self, kind: &Kind, node: &Node, path: &str) {
        if !kind.takes(&node.value) {
            let wrong = format!("Here stands {}.", node.value.called());
            self.error(&node.spot, path, wrong, kind.called());
            if let Kind::Tables(table) = kind {
                self.table(table, node, path);
            }
            return;
        }
        match (kind, &node.value) {
            (Kind::Text(form), Value::Text(text)) => {
                if let Err(misfit) = form.check(text) {
                    self.error_near(&node.spot, path, misfit.wrong, misfit.right, misfit.nearest);
                }
            }
            (Kind::Word(words), Value::Text(text)) => self.word(words, text, node, path),
            (Kind::Whole(low, high), Value::Whole(whole)) if !(low..=high).contains(&whole) => {
                self.error(&node.spot, path, format!("{whole} is out of range."), kind.called());
            }
            (Kind::Number(bounds), _) => {
                if let Some(number) = node.number().filter(|number| !bounds.hold(*number)) {
                    self.error(&node.spot, path, format!("{number} is out of range."), kind.called());
                }
            }
            (Kind::List(item, least), Value::List(items)) => {
                if items.len() < *least {
                    self.error(&node.spot, path, "The list is too short.", kind.called());
                }
                for (index, it) in items.iter().enumerate() {
                    let is_table = matches!(it.value, Value::Table(_));
                    let path = if is_table { item_path(path, index, it) } else { path.to_owned() };
                    self.value(item, it, &path);
                }
            }
            (Kind::Pair(item), Value::List(items)) => {
                if items.len() != 2 {
                    self.error(&node.spot, path, format!("The list has {} items.", items.len()), kind.called());
                }
                items.iter().for_each(|it| self.value(item, it, path));
            }
            (Kind::Table(table), _) => self.table(table, node, path),
            (Kind::Tables(table), Value::List(items)) => self.tables(table, items, path),
            (Kind::Map(form, item), Value::Table(entries)) => {
                for entry in &entries.0 {
                    if let Err(misfit) = form.check(&entry.key) {
                        self.error_near(&entry.spot, path, misfit.wrong, misfit.right, misfit.nearest);
                    }
                    self.value(item, &entry.node, &join(path, &entry.key));
                }
            }
            (Kind::Either(kinds), value) => {
                if let Some(kind) = kinds.iter().find(|kind| kind.takes(value)) {
                    self.value(kind, node, path);
                }
            }
            _ => {}
        }
    }

    fn tables(&mut self, table: &'static Table, items: &[Node], path: &str) {
        for (index, item) in items.iter().enumerate() {
            let path = item_path(path, index, item);
            if matches!(item.value, Value::Table(_)) {
                self.table(table, item, &path);
            } else {
                let wrong = format!("Here stands {}.", item.value.called());
                self.error(&item.spot, &path, wrong, Kind::Table(table).called());
            }
        }
    }

    fn word(&mut self, words: &'static WordNames, text: &str, node: &Node, path: &str) {
        if let Some((older, today)) = words.older.iter().find(|(older, _)| *older == text) {
            let wrong = format!("\"{older}\" is an older spelling; it keeps working.");
            self.warn(&node.spot, path, wrong, format!("\"{today}\""));
        } else if words.position(text).is_none() {
            let near = nearest(text, words.names.iter().copied()).map(str::to_owned);
            let wrong = format!("\"{}\" is not known here.", clip(text));
            self.error_near(&node.spot, path, wrong, one_of(words.names), near);
        }
    }
}

fn upper_first(text: &str) -> String {
    let mut chars = text.chars();
    chars.next().map_or_else(String::new, |first| first.to_uppercase().chain(chars).collect())
}

fn lower_first(text: &str) -> String {
    let mut chars = text.chars();
    chars.next().map_or_else(String::new, |first| first.to_lowercase().chain(chars).collect())
}

#[cfg(test)]
mod tests {
    use std::cell::RefCell;
    use std::collections::BTreeSet;

    use super::super::{PlanFiles, ROOT, each_table, parse, reader_files};

    thread_local! {
        /// The keys whose values have been asked for: the table's name, and the key's.
        pub(super) static ASKED: RefCell<BTreeSet<(&'static str, String)>> = const { RefCell::new(BTreeSet::new()) };
    }

    /// A key that is defined, and so is in the JSON Schema, but that no reader asks for, would be taken and do nothing.
    #[test]
    fn every_key_that_is_defined_is_read() {
        let folder = std::path::Path::new(env!("CARGO_MANIFEST_DIR")).join("tests/plans/sound");
        for name in
            ["every-key.toml", "every-place.toml", "one-group-with-constant-boundary.toml", "equal-correlation.toml"]
        {
            let main = std::fs::read_to_string(folder.join(name)).unwrap();
            let text = |path: String| (path.clone(), std::fs::read_to_string(folder.join(path)).unwrap());
            let readers = reader_files(&main).into_iter().map(text).collect();
            parse(&PlanFiles { main, readers }).unwrap();
        }
        let asked = ASKED.take();
        let mut unread = vec![];
        each_table(&ROOT, &mut |table| {
            let keys = table.keys.iter().filter(|key| !asked.contains(&(table.name, key.name.to_owned())));
            unread.extend(keys.map(|key| format!("{}.{}", table.name, key.name)));
        });
        assert!(unread.is_empty(), "nobody reads {unread:?}");
    }
}
