//! The JSON Schema of the plan, so that editors complete it.
//!
//! Invariants: it is made from the same definitions by which a plan is checked, so that the two cannot part. It says
//! less than the check does: what one key says against another is beyond a schema.

use serde_json::{Map, Value, json};

use super::ROOT;
use super::keys::{Bounds, Kind, Table};

/// The JSON Schema (2020-12) of `study.toml`.
pub fn schema() -> Value {
    document(&ROOT, "The plan of a study")
}

/// The JSON Schema (2020-12) of a reader file, such as `readers/dyn-2.toml`.
pub fn reader_schema() -> Value {
    document(&super::reader::READER, "How an instrument's exports are read")
}

fn document(root: &'static Table, title: &str) -> Value {
    let mut tables = Map::new();
    super::each_table(root, &mut |it| {
        tables.entry(name(it)).or_insert_with(|| table(it));
    });
    let mut top = Map::new();
    top.insert("$schema".into(), json!("https://json-schema.org/draft/2020-12/schema"));
    top.insert("title".into(), json!(title));
    if let Value::Object(table) = table(root) {
        top.extend(table);
    }
    top.insert("$defs".into(), Value::Object(tables));
    Value::Object(top)
}

/// A table's name as a word.
fn name(table: &Table) -> String {
    let word = |c: char| if c.is_ascii_alphanumeric() || c == '_' { c } else { ' ' };
    table.name.chars().map(word).collect::<String>().split_whitespace().collect::<Vec<_>>().join("-")
}

fn table(table: &'static Table) -> Value {
    let mut properties = Map::new();
    for key in table.keys {
        let mut property = kind(&key.kind);
        if let Some(property) = property.as_object_mut() {
            let default = if key.default.is_empty() { String::new() } else { format!(" Default: {}.", key.default) };
            property.insert("description".into(), json!(format!("{}.{default}", key.doc)));
            if key.needed && matches!(key.kind, Kind::Tables(_)) {
                property.insert("minItems".into(), json!(1));
            }
        }
        if let Some(older) = key.older {
            let mut again = property.clone();
            if let Some(again) = again.as_object_mut() {
                again.insert("description".into(), json!(format!("An older spelling of {}.", key.name)));
                again.insert("deprecated".into(), json!(true));
            }
            properties.insert(older.into(), again);
        }
        properties.insert(key.name.into(), property);
    }
    let needed: Vec<&str> = table.keys.iter().filter(|key| key.needed).map(|key| key.name).collect();
    let mut schema = Map::new();
    schema.insert("type".into(), json!("object"));
    schema.insert("description".into(), json!(table.doc));
    schema.insert("properties".into(), Value::Object(properties));
    schema.insert("additionalProperties".into(), json!(false));
    if !needed.is_empty() {
        schema.insert("required".into(), json!(needed));
    }
    if !table.one_of.is_empty() {
        let ways: Vec<Value> = table.one_of.iter().map(|key| json!({ "required": [key] })).collect();
        schema.insert("oneOf".into(), json!(ways));
    }
    Value::Object(schema)
}

fn kind(it: &Kind) -> Value {
    match it {
        Kind::Text(form) => match form.pattern() {
            Some(pattern) => json!({ "type": "string", "pattern": pattern }),
            None => json!({ "type": "string" }),
        },
        Kind::Whole(low, high) if *high == i64::MAX => json!({ "type": "integer", "minimum": low }),
        Kind::Whole(low, high) => json!({ "type": "integer", "minimum": low, "maximum": high }),
        Kind::Number(bounds) => number(*bounds),
        Kind::Truth => json!({ "type": "boolean" }),
        Kind::Date => json!({ "type": "string", "format": "date" }),
        Kind::Word(words) => {
            let all: Vec<&str> =
                words.names.iter().copied().chain(words.older.iter().map(|(older, _)| *older)).collect();
            json!({ "enum": all })
        }
        Kind::List(item, least) => json!({ "type": "array", "items": kind(item), "minItems": least }),
        Kind::Pair(item) => json!({ "type": "array", "items": kind(item), "minItems": 2, "maxItems": 2 }),
        Kind::Table(table) => json!({ "$ref": reference(table) }),
        Kind::Tables(table) => json!({ "type": "array", "items": { "$ref": reference(table) } }),
        Kind::Map(form, item) => match form.pattern() {
            Some(pattern) => json!({
                "type": "object",
                "propertyNames": { "pattern": pattern },
                "additionalProperties": kind(item),
            }),
            None => json!({ "type": "object", "additionalProperties": kind(item) }),
        },
        Kind::Either(kinds) => json!({ "anyOf": kinds.iter().map(kind).collect::<Vec<_>>() }),
    }
}

fn reference(table: &Table) -> String {
    format!("#/$defs/{}", name(table))
}

fn number(bounds: Bounds) -> Value {
    let mut schema = Map::new();
    schema.insert("type".into(), json!("number"));
    if bounds.low.is_finite() {
        schema.insert(if bounds.low_in { "minimum" } else { "exclusiveMinimum" }.into(), json!(bounds.low));
    }
    if bounds.high.is_finite() {
        schema.insert(if bounds.high_in { "maximum" } else { "exclusiveMaximum" }.into(), json!(bounds.high));
    }
    Value::Object(schema)
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Every table and key of the definitions is in the schema, and nothing else is.
    #[test]
    fn schema_and_reader_agree_on_every_key() {
        let schema = schema();
        let mut names = vec![];
        super::super::each_table(&ROOT, &mut |table| {
            if names.iter().any(|(known, _)| *known == name(table)) {
                let same = names.iter().any(|(known, at)| *known == name(table) && std::ptr::eq(*at, table));
                assert!(same, "two tables are called {}", table.name);
                return;
            }
            names.push((name(table), table));
            let written = &schema["$defs"][name(table)];
            let mut expected: Vec<&str> = table.keys.iter().map(|key| key.name).collect();
            expected.extend(table.keys.iter().filter_map(|key| key.older));
            expected.sort_unstable();
            let mut found: Vec<&str> = written["properties"].as_object().unwrap().keys().map(String::as_str).collect();
            found.sort_unstable();
            assert_eq!(found, expected, "{}", table.name);
            for name in table.one_of {
                assert!(table.key(name).is_some(), "{} has no key {name}", table.name);
            }
            for key in table.keys {
                assert!(!key.doc.is_empty() && !key.doc.ends_with('.'), "{}.{}", table.name, key.name);
            }
        });
        assert!(names.len() > 20);
    }

    #[test]
    fn every_reference_leads_to_a_table() {
        for schema in [schema(), reader_schema()] {
            let text = schema.to_string();
            for reference in text.split("\"#/$defs/").skip(1).map(|rest| rest.split('"').next().unwrap()) {
                assert!(schema["$defs"][reference].is_object(), "{reference}");
            }
        }
    }
}
