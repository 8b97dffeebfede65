//! Nested documents: where the rows of JSON and XML samples are, and which texts they have.
//!
//! Invariant: a path that is proposed names each text once; a text that stands in a list inside a row, or twice, has no
//! path.

use std::collections::BTreeMap;

use quick_xml::events::{BytesStart, Event};
use revisant_schema::plan::{Encoding, Format, Header};
use serde_json::Value as Json;

use super::grid::Layout;
use super::place::Against;
use super::{Sample, numbers, stamps, text, words};

/// Deeper documents are no exports.
const DEEPEST: usize = 40;
/// Rows looked at to judge a path.
const JUDGED: usize = 100;
/// Texts of one row that are looked at.
const MOST_TEXTS: usize = 200;

/// One node of a document.
#[derive(Debug, Clone, Default)]
struct Node {
    name: String,
    leaf: Option<String>,
    attributes: Vec<(String, String)>,
    children: Vec<Node>,
    is_list: bool,
}

/// The kinds of nested documents.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord)]
pub enum Nested {
    /// One JSON document.
    Json,
    /// A JSON value a line.
    Lines,
    /// One XML document.
    Xml,
}

/// The kind of a sample's text; `None` when it is no nested document.
pub fn kind(text: &str) -> Option<Nested> {
    let text = text.trim_start_matches('\u{feff}').trim();
    if text.starts_with('<') {
        return Some(Nested::Xml);
    }
    if !text.starts_with(['{', '[']) {
        return None;
    }
    if serde_json::from_str::<serde::de::IgnoredAny>(text).is_ok()
        && (text.starts_with('[') || text.lines().count() > 1)
    {
        return Some(Nested::Json);
    }
    let first = text.lines().next().unwrap_or_default();
    let is_lines = serde_json::from_str::<serde::de::IgnoredAny>(first).is_ok() && first.starts_with('{');
    Some(if is_lines { Nested::Lines } else { Nested::Json })
}

/// What the samples have in common.
pub struct Found {
    /// The layout.
    pub layout: Layout,
    /// The columns of each sample.
    pub columns: Vec<Vec<String>>,
    /// Samples that are no such document, and why.
    pub refused: Vec<(usize, String)>,
    /// Other paths that hold subjects and moments as well.
    pub rivals: Vec<String>,
}

/// Finds the rows of samples of one kind.
pub fn nested(samples: &[Sample], which: &[usize], kind: Nested, against: Against<'_>) -> Option<Found> {
    let mut refused = vec![];
    let mut documents = vec![];
    for index in which {
        let Some(sample) = samples.get(*index) else { continue };
        match roots(&sample.bytes, kind) {
            Ok(roots) => documents.push((*index, roots)),
            Err(why) => refused.push((*index, why)),
        }
    }
    let mut paths: BTreeMap<String, Vec<Vec<(String, String)>>> = BTreeMap::new();
    for root in documents.iter().flat_map(|(_, roots)| roots) {
        visit(root, kind, &mut vec![], &mut paths_of(kind, root), &mut paths);
    }
    let mut scored: Vec<(Score, &String)> = paths.iter().map(|(path, rows)| (score(rows, against), path)).collect();
    scored.sort();
    let (best, path) = scored.pop()?;
    let path = path.clone();
    let rivals =
        scored.iter().rev().filter(|(score, _)| score.0 == best.0 && best.0 >= 4).map(|(_, path)| (*path).clone());
    let rivals: Vec<String> = rivals.take(3).collect();
    let mut columns = vec![vec![]; samples.len()];
    for (index, roots) in &documents {
        let mut found: BTreeMap<String, Vec<Vec<(String, String)>>> = BTreeMap::new();
        roots.iter().for_each(|root| visit(root, kind, &mut vec![], &mut paths_of(kind, root), &mut found));
        let rows = found.remove(&path).unwrap_or_default();
        match (rows.is_empty(), columns.get_mut(*index)) {
            (false, Some(place)) => *place = names(&rows),
            _ => refused.push((*index, format!("nothing stands at {path} in it"))),
        }
    }
    let format = match kind {
        Nested::Json => Format::Json { rows: path },
        Nested::Lines => Format::JsonLines { rows: if path == "/" { String::new() } else { path } },
        Nested::Xml => Format::Xml { rows: path },
    };
    let layout = Layout {
        format,
        encoding: Encoding::Auto,
        header: Header::None,
        units_row: false,
        stop_at: None,
        ignored_lines: vec![],
        preamble: vec![],
    };
    Some(Found { layout, columns, refused, rivals })
}

fn paths_of(kind: Nested, root: &Node) -> Vec<String> {
    if kind == Nested::Xml { vec![root.name.clone()] } else { vec![] }
}

/// The texts that rows have, each once, those inside the row before those around it.
fn names(rows: &[Vec<(String, String)>]) -> Vec<String> {
    let mut names: Vec<String> = vec![];
    for (name, _) in rows.iter().flatten() {
        if !names.contains(name) && names.len() < MOST_TEXTS {
            names.push(name.clone());
        }
    }
    names.sort_by_key(|name| name.matches("../").count());
    names
}

type Score = (u32, usize);

/// What speaks for the rows being here: subjects and moments, inside rather than around, and numbers.
fn score(rows: &[Vec<(String, String)>], against: Against<'_>) -> Score {
    let mut texts: BTreeMap<&str, Vec<&str>> = BTreeMap::new();
    for (name, text) in rows.iter().take(JUDGED).flatten() {
        texts.entry(name).or_default().push(text);
    }
    let (mut subject, mut moment, mut number) = (0, 0, 0);
    for (name, texts) in &texts {
        let points = if name.starts_with("..") { 1 } else { 2 };
        let subjects = texts.iter().filter(|text| against.is_subject(text)).count() * 2 >= texts.len();
        if subjects && against.plan.is_some() || against.plan.is_none() && words::SUBJECT.names(name) {
            subject = subject.max(points);
        } else if texts.iter().all(|text| numbers::is_like_a_number(text)) {
            number = number.max(points - 1);
        } else if stamps::find(texts.iter().copied(), false, against.now).is_some() {
            moment = moment.max(points);
        }
    }
    (subject + moment + number, rows.len())
}

/// Walks a document and gathers, for each path at which rows may be, their texts.
fn visit<'n>(
    node: &'n Node,
    kind: Nested,
    above: &mut Vec<&'n Node>,
    path: &mut Vec<String>,
    found: &mut BTreeMap<String, Vec<Vec<(String, String)>>>,
) {
    let is_row = !node.is_list && (!node.children.is_empty() || !node.attributes.is_empty());
    let reached = kind == Nested::Xml || path.is_empty() || path.last().is_some_and(|step| step == "*");
    if is_row && reached && above.len() < DEEPEST {
        let rows = found.entry(format!("/{}", path.join("/"))).or_default();
        if rows.len() < JUDGED * 5 {
            rows.push(texts(node, above));
        }
    }
    above.push(node);
    for child in &node.children {
        path.push(child.name.clone());
        visit(child, kind, above, path, found);
        path.pop();
    }
    above.pop();
}

/// The texts of a row, by their paths.
fn texts(row: &Node, above: &[&Node]) -> Vec<(String, String)> {
    let mut all = vec![];
    inside(row, "", 4, "", &mut all);
    let mut up = String::new();
    let mut below = row.name.as_str();
    for outer in above.iter().rev() {
        // Lists do not count.
        if !outer.is_list {
            up.push_str("../");
            inside(outer, &up, 2, below, &mut all);
        }
        below = outer.name.as_str();
    }
    all
}

/// The texts of a node; those of the child called `but`, in which the row lies, are the row's own.
fn inside(node: &Node, prefix: &str, depth: usize, but: &str, all: &mut Vec<(String, String)>) {
    for (name, text) in &node.attributes {
        all.push((format!("{prefix}@{name}"), text.clone()));
    }
    for child in &node.children {
        let once = node.children.iter().filter(|other| other.name == child.name).count() == 1;
        let nameable = !child.name.is_empty() && !child.name.contains('/') && !child.name.starts_with(['@', '.']);
        if child.name == but || !once || !nameable || child.is_list || all.len() >= MOST_TEXTS {
            continue;
        }
        if let Some(text) = &child.leaf {
            all.push((format!("{prefix}{}", child.name), text.trim().to_owned()));
        }
        if depth > 0 {
            inside(child, &format!("{prefix}{}/", child.name), depth - 1, "", all);
        }
    }
}

// ---- from bytes to nodes ----

fn roots(bytes: &[u8], kind: Nested) -> Result<Vec<Node>, String> {
    let decoded = text::decode(bytes).ok_or("it is no text")?;
    let text = decoded.text.trim_start_matches('\u{feff}');
    match kind {
        Nested::Json => serde_json::from_str::<Json>(text)
            .map(|value| vec![json_node(String::new(), &value)])
            .map_err(|error| format!("it is no JSON as a whole: {error}")),
        Nested::Lines => {
            let lines = text.lines().filter_map(|line| serde_json::from_str::<Json>(line.trim()).ok());
            let nodes: Vec<Node> = lines.map(|value| json_node(String::new(), &value)).collect();
            if nodes.is_empty() { Err("no line of it is JSON".to_owned()) } else { Ok(nodes) }
        }
        Nested::Xml => xml(text).map(|root| vec![root]),
    }
}

fn json_node(name: String, value: &Json) -> Node {
    match value {
        Json::Object(fields) => {
            let children = fields.iter().map(|(name, value)| json_node(name.clone(), value)).collect();
            Node { name, children, ..Node::default() }
        }
        Json::Array(items) => {
            let children = items.iter().map(|item| json_node("*".to_owned(), item)).collect();
            Node { name, children, is_list: true, ..Node::default() }
        }
        Json::Null => Node { name, leaf: Some(String::new()), ..Node::default() },
        Json::String(text) => Node { name, leaf: Some(text.clone()), ..Node::default() },
        other => Node { name, leaf: Some(other.to_string()), ..Node::default() },
    }
}

fn xml(text: &str) -> Result<Node, String> {
    let mut reader = quick_xml::Reader::from_str(text);
    let mut open: Vec<Node> = vec![];
    let mut root = None;
    let fault = |error: &dyn std::fmt::Display| format!("it is no XML as a whole: {error}");
    loop {
        match reader.read_event().map_err(|error| fault(&error))? {
            Event::Start(tag) if open.len() < DEEPEST => open.push(element(&tag)),
            Event::Start(_) => return Err("its elements are nested too deeply".to_owned()),
            Event::Empty(tag) => close(element(&tag), &mut open, &mut root),
            Event::End(_) => {
                if let Some(node) = open.pop() {
                    close(node, &mut open, &mut root);
                }
            }
            Event::Text(piece) => add_text(&mut open, &piece.xml10_content()),
            Event::CData(piece) => add_text(&mut open, &piece),
            Event::Eof => break,
            _ => {}
        }
    }
    if open.is_empty() { root.ok_or_else(|| fault(&"it has no element")) } else { Err(fault(&"it ends too early")) }
}

fn element(tag: &BytesStart<'_>) -> Node {
    let attributes = tag.attributes().flatten().filter(|it| !it.key.as_ref().starts_with("xmlns"));
    let attributes =
        attributes.map(|it| (it.key.local_name().as_ref().to_owned(), it.value.trim().to_owned())).collect();
    Node { name: tag.local_name().as_ref().to_owned(), attributes, ..Node::default() }
}

fn add_text(open: &mut [Node], piece: &str) {
    if let Some(node) = open.last_mut() {
        node.leaf.get_or_insert_default().push_str(piece);
    }
}

/// An element with others inside is no text; an empty one is the empty text.
fn close(mut node: Node, open: &mut [Node], root: &mut Option<Node>) {
    if node.children.is_empty() {
        node.leaf.get_or_insert_default();
    } else {
        node.leaf = None;
    }
    match open.last_mut() {
        Some(parent) => parent.children.push(node),
        None => *root = Some(node),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn sample(text: &str) -> Sample {
        Sample {
            shown: String::new(),
            file_name: String::new(),
            folder: String::new(),
            bytes: text.as_bytes().to_vec(),
        }
    }

    fn found(text: &str, kind: Nested) -> Found {
        let against = Against { plan: None, roster: None, now: "2026-12-01T12:00:00Z".parse().unwrap() };
        nested(&[sample(text)], &[0], kind, against).unwrap()
    }

    #[test]
    fn kinds_are_told() {
        assert_eq!(kind("{\"a\": 1}\n{\"a\": 2}\n"), Some(Nested::Lines));
        assert_eq!(kind("{\"a\":\n 1}\n"), Some(Nested::Json));
        assert_eq!(kind("[{\"a\": 1}]"), Some(Nested::Json));
        assert_eq!(kind("<a/>"), Some(Nested::Xml));
        assert_eq!(kind("a,b\n1,2\n"), None);
    }

    #[test]
    fn rows_are_found_where_subjects_and_moments_are() {
        let text = r#"{"device": "x", "session": {"subject": "A-1", "blocks": [
            {"n": 1, "at": "2025-03-01T10:00", "r": {"ms": 412.5}, "trials": [{"ms": 1}, {"ms": 2}]}]}}"#;
        let found = found(text, Nested::Json);
        let Format::Json { rows } = &found.layout.format else { panic!() };
        assert_eq!(rows, "/session/blocks/*");
        assert_eq!(found.columns[0], ["n", "at", "r/ms", "../subject", "../../device"]);
    }

    #[test]
    fn elements_and_attributes_are_texts() {
        let text = "<scan day='1'><p id='A-1'><at>2025-03-01T10:00</at><h>12</h><x>1</x><x>2</x></p>\
                    <p id='A-2'><at>2025-03-02T10:00</at><h>13</h></p></scan>";
        let found = found(text, Nested::Xml);
        let Format::Xml { rows } = &found.layout.format else { panic!() };
        assert_eq!(rows, "/scan/p");
        assert_eq!(found.columns[0], ["@id", "at", "h", "../@day"]);
    }
}
