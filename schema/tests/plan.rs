//! Plans from outside: sound ones, unsound ones named after the mistake, and the JSON Schema held against both.
//!
//! Beside each unsound plan stands what is said of it, as a text. After a change of words, run the tests once with
//! `REVISANT_RENEW=1` and read the difference.

// In tests a panic is how a failure is said.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

use std::collections::BTreeSet;
use std::fs;
use std::path::{Path, PathBuf};

use proptest::prelude::*;
use revisant_schema::plan::{Faults, LoadError, PlanFiles, load, parse, reader_files, reader_schema, schema};
use serde_json::Value;

fn folder(name: &str) -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR")).join("tests/plans").join(name)
}

/// The plans of a folder, by name.
fn plans(name: &str) -> Vec<(PathBuf, PlanFiles)> {
    let mut paths: Vec<PathBuf> = fs::read_dir(folder(name)).unwrap().map(|entry| entry.unwrap().path()).collect();
    paths.retain(|path| path.extension().is_some_and(|it| it == "toml"));
    paths.sort();
    paths.into_iter().map(|path| (path.clone(), files(&path))).collect()
}

fn files(path: &Path) -> PlanFiles {
    let main = fs::read_to_string(path).unwrap();
    let beside = path.parent().unwrap();
    let readers = reader_files(&main)
        .into_iter()
        .filter_map(|name| Some((name.clone(), fs::read_to_string(beside.join(&name)).ok()?)))
        .collect();
    PlanFiles { main, readers }
}

/// Holds a text against the one kept beside the plan.
fn same_as_kept(path: &Path, said: &str) -> Result<(), String> {
    let kept = path.with_extension("txt");
    if std::env::var_os("REVISANT_RENEW").is_some() {
        if said.is_empty() {
            let _ = fs::remove_file(&kept);
        } else {
            fs::write(&kept, said).unwrap();
        }
        return Ok(());
    }
    let expected = fs::read_to_string(&kept).unwrap_or_default();
    if expected == said {
        return Ok(());
    }
    let mut difference = format!("{}:\n", kept.display());
    let (old, new): (Vec<&str>, Vec<&str>) = (expected.lines().collect(), said.lines().collect());
    old.iter().filter(|line| !new.contains(line)).for_each(|line| difference += &format!("- {line}\n"));
    new.iter().filter(|line| !old.contains(line)).for_each(|line| difference += &format!("+ {line}\n"));
    Err(difference)
}

#[test]
fn sound_plans_are_sound() {
    for (path, files) in plans("sound") {
        let (_, warnings) = parse(&files).unwrap_or_else(|faults| panic!("{}\n{faults}", path.display()));
        same_as_kept(&path, &Faults(warnings).to_string()).unwrap();
    }
}

#[test]
fn unsound_plans_say_what_is_wrong() {
    let mut differences = String::new();
    for (path, files) in plans("unsound") {
        let Err(faults) = parse(&files) else { panic!("{} is taken for sound", path.display()) };
        let said = faults.to_string();
        if let Some(line) = said.lines().find(|line| line.chars().count() > 80) {
            panic!("{}: too wide: {line}", path.display());
        }
        if let Err(difference) = same_as_kept(&path, &said) {
            differences += &difference;
        }
    }
    assert!(differences.is_empty(), "{differences}");
}

#[test]
fn ten_faults_are_ten() {
    let faults = parse(&files(&folder("unsound/ten-faults.toml"))).unwrap_err();
    assert_eq!(faults.0.len(), 10, "{faults}");
    assert!(faults.0.is_sorted_by_key(|fault| fault.span));
}

#[test]
fn faults_name_file_line_column_and_key() {
    let faults = parse(&files(&folder("unsound/reader-file-at-fault.toml"))).unwrap_err();
    let fault = &faults.0[0];
    assert_eq!((fault.file.as_str(), fault.line, fault.column), ("readers/plate.toml", 2, 1));
    assert_eq!(fault.key, "instrument[plate].reader.delimeter");
    assert_eq!(fault.nearest.as_deref(), Some("delimiter"));
    let json = serde_json::to_value(&faults).unwrap();
    assert_eq!(json[0]["severity"], "error");
    assert_eq!(json[0]["span"], serde_json::json!([21, 30]));
}

#[test]
fn loading_reads_the_reader_files_it_names() {
    let dir = folder("sound");
    let read = |path: &Path| {
        let name = path.strip_prefix(&dir).unwrap();
        fs::read_to_string(if name == Path::new("study.toml") { dir.join("every-key.toml") } else { path.to_owned() })
    };
    let loaded = load(&dir, &read).unwrap();
    assert_eq!(loaded.files.readers.len(), 1);
    assert_eq!(loaded.plan.instruments.len(), 6);
    // The same texts give the same plan, from wherever they come.
    let (again, _) = parse(&loaded.files).unwrap();
    assert_eq!(format!("{again:?}"), format!("{:?}", loaded.plan));
    let error = load(Path::new("/nowhere"), &|_| Err(std::io::Error::other("gone"))).unwrap_err();
    assert!(matches!(error, LoadError::Unreadable { .. }));
    assert_eq!(error.to_string(), "/nowhere/study.toml cannot be read: gone");
    let no_reader =
        |path: &Path| if path.ends_with("study.toml") { read(path) } else { Err(std::io::Error::other("gone")) };
    let error = load(&dir, &no_reader).unwrap_err().to_string();
    assert!(error.contains("The reader file \"readers/balance.toml\" cannot be read: gone."), "{error}");
}

#[test]
fn hashes() {
    let alone = PlanFiles { main: "abc".into(), readers: vec![] };
    // FIPS 180-4's own example.
    assert_eq!(alone.sha256(), "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad");
    let reader = |name: &str, text: &str| (name.to_owned(), text.to_owned());
    let both = |readers| PlanFiles { main: "abc".into(), readers }.sha256();
    let (a, b) = (reader("a.toml", "x"), reader("b.toml", "y"));
    assert_eq!(both(vec![a.clone(), b.clone()]), both(vec![b, a.clone()]));
    assert_ne!(both(vec![a]), both(vec![reader("a.toml", "z")]));
}

// ---- the JSON Schema ----

/// A document held against a schema, as far as ours goes: the properties met are noted, faults are handed back.
struct Held<'a> {
    defs: &'a Value,
    met: BTreeSet<String>,
}

impl Held<'_> {
    fn hold(&mut self, schema: &Value, it: &Value, at: &str) -> Result<(), String> {
        if let Some(reference) = schema["$ref"].as_str() {
            let name = reference.trim_start_matches("#/$defs/");
            let defs = self.defs;
            return self.hold(&defs[name], it, name);
        }
        if let Some(ways) = schema["anyOf"].as_array() {
            let faults: Vec<String> = ways.iter().filter_map(|way| self.hold(way, it, at).err()).collect();
            return if faults.len() < ways.len() { Ok(()) } else { Err(faults.join("; ")) };
        }
        if let Some(words) = schema["enum"].as_array() {
            return if words.contains(it) { Ok(()) } else { Err(format!("{at}: {it} is none of the words")) };
        }
        match schema["type"].as_str().unwrap() {
            "object" => self.object(schema, it, at),
            "array" => {
                let items = it.as_array().ok_or(format!("{at}: no list"))?;
                let count = items.len() as u64;
                let bounds = schema["minItems"].as_u64().unwrap_or(0)..=schema["maxItems"].as_u64().unwrap_or(u64::MAX);
                if !bounds.contains(&count) {
                    return Err(format!("{at}: {count} items"));
                }
                items.iter().try_for_each(|item| self.hold(&schema["items"], item, at))
            }
            "string" => {
                let text = it.as_str().ok_or(format!("{at}: no text"))?;
                let pattern = schema["pattern"].as_str().unwrap_or("");
                let fits = regex::Regex::new(pattern).unwrap().is_match(text);
                if fits { Ok(()) } else { Err(format!("{at}: {text} does not match {pattern}")) }
            }
            "boolean" => it.as_bool().map(drop).ok_or(format!("{at}: not true or false")),
            "integer" => {
                it.as_i64().map(drop).ok_or(format!("{at}: no whole number")).and_then(|()| within(schema, it, at))
            }
            "number" => it.as_f64().map(drop).ok_or(format!("{at}: no number")).and_then(|()| within(schema, it, at)),
            other => panic!("{other}"),
        }
    }

    fn object(&mut self, schema: &Value, it: &Value, at: &str) -> Result<(), String> {
        let object = it.as_object().ok_or(format!("{at}: no table"))?;
        for (key, value) in object {
            if let Some(pattern) = schema["propertyNames"]["pattern"].as_str()
                && !regex::Regex::new(pattern).unwrap().is_match(key)
            {
                return Err(format!("{at}: the name {key}"));
            }
            let property = &schema["properties"][key];
            match (property.is_object(), &schema["additionalProperties"]) {
                (true, _) => {
                    self.met.insert(format!("{at}.{key}"));
                    self.hold(property, value, &format!("{at}.{key}"))?;
                }
                (false, Value::Object(_)) => self.hold(&schema["additionalProperties"], value, at)?,
                _ => return Err(format!("{at}: no key {key}")),
            }
        }
        for key in schema["required"].as_array().into_iter().flatten() {
            if !object.contains_key(key.as_str().unwrap()) {
                return Err(format!("{at}: {key} is missing"));
            }
        }
        if let Some(ways) = schema["oneOf"].as_array() {
            let there = |way: &&Value| object.contains_key(way["required"][0].as_str().unwrap());
            if ways.iter().filter(there).count() != 1 {
                return Err(format!("{at}: not exactly one of its ways"));
            }
        }
        Ok(())
    }
}

fn within(schema: &Value, it: &Value, at: &str) -> Result<(), String> {
    let x = it.as_f64().unwrap();
    let low = schema["minimum"].as_f64().is_none_or(|low| x >= low);
    let above = schema["exclusiveMinimum"].as_f64().is_none_or(|low| x > low);
    let high = schema["maximum"].as_f64().is_none_or(|high| x <= high);
    let below = schema["exclusiveMaximum"].as_f64().is_none_or(|high| x < high);
    if low && above && high && below { Ok(()) } else { Err(format!("{at}: {x} is out of range")) }
}

/// TOML as JSON: dates become texts, as editors see them.
fn json(text: &str) -> Option<Value> {
    fn value(it: &toml::Value) -> Value {
        match it {
            toml::Value::Datetime(date) => Value::String(date.to_string()),
            toml::Value::Array(items) => Value::Array(items.iter().map(value).collect()),
            toml::Value::Table(table) => {
                Value::Object(table.iter().map(|(key, it)| (key.clone(), value(it))).collect())
            }
            other => serde_json::to_value(other).unwrap(),
        }
    }
    let table: toml::Table = text.parse().ok()?;
    Some(value(&toml::Value::Table(table)))
}

/// Holds a plan and its reader files against the schemas; the properties met.
fn held(files: &PlanFiles) -> Result<BTreeSet<String>, String> {
    let (plan, reader) = (schema(), reader_schema());
    let mut check = Held { defs: &plan["$defs"], met: BTreeSet::new() };
    check.hold(&plan, &json(&files.main).ok_or("no TOML")?, "the-plan")?;
    for (_, text) in &files.readers {
        check.hold(&reader, &json(text).ok_or("no TOML")?, "instrument-reader")?;
    }
    Ok(check.met)
}

#[test]
fn sound_plans_fit_the_schema_and_between_them_have_every_key() {
    let mut met = BTreeSet::new();
    for (path, files) in plans("sound") {
        met.extend(held(&files).unwrap_or_else(|fault| panic!("{}: {fault}", path.display())));
    }
    let schema = schema();
    let mut expected = BTreeSet::new();
    for (table, definition) in schema["$defs"].as_object().unwrap() {
        for key in definition["properties"].as_object().unwrap().keys() {
            expected.insert(format!("{table}.{key}"));
        }
    }
    let absent: Vec<&String> = expected.difference(&met).collect();
    assert!(absent.is_empty(), "no sound plan has {absent:?}");
}

/// Every key of every table, misspelt, is a fault that names the key.
#[test]
fn every_key_misspelt_is_found() {
    let files = files(&folder("sound/every-key.toml"));
    let keys = regex::Regex::new(r"(?m)(^|[{,] *)([a-z_]{4,})( *= )").unwrap();
    for found in keys.captures_iter(&files.main) {
        let key = found.get(2).unwrap();
        let free = ["hand", "eyes", "site", "band", "stretch"];
        if free.contains(&key.as_str()) {
            continue;
        }
        let mut main = files.main.clone();
        main.insert(key.end(), 'x');
        let Err(faults) = parse(&PlanFiles { main, ..files.clone() }) else { panic!("{}x is taken", key.as_str()) };
        let named = faults.0.iter().any(|fault| fault.nearest.as_deref() == Some(key.as_str()));
        assert!(named, "{}x:\n{faults}", key.as_str());
        assert_eq!(faults.0.len(), 1, "{}x gives more than one fault:\n{faults}", key.as_str());
    }
}

// ---- properties ----

fn all_texts() -> Vec<PlanFiles> {
    plans("sound").into_iter().chain(plans("unsound")).map(|(_, files)| files).collect()
}

/// One change of a text: something is cut out, put in, doubled or exchanged.
fn mutate(text: &str, kind: u8, at: usize, length: usize, with: &str) -> String {
    let chars: Vec<char> = text.chars().collect();
    let at = if chars.is_empty() { 0 } else { at % (chars.len() + 1) };
    let end = (at + length % 40).min(chars.len());
    let cut: String = chars[at..end].iter().collect();
    let (before, after): (String, String) = (chars[..at].iter().collect(), chars[end..].iter().collect());
    match kind % 4 {
        0 => format!("{before}{after}"),
        1 => format!("{before}{with}{cut}{after}"),
        2 => format!("{before}{cut}{cut}{after}"),
        _ => format!("{before}{with}{after}"),
    }
}

/// A few characters, or a value that fits some key and none of the others.
fn scrap() -> impl Strategy<Value = String> {
    const VALUES: &[&str] = &[
        "[]",
        "{}",
        "\"\"",
        "0",
        "-1",
        "1e308",
        "inf",
        "nan",
        "true",
        "2026-02-28",
        "07:30:00",
        "[[visit]]",
        "[interim]",
        "[[instrument.reader.value]]",
        "\"arm\"",
        "\"visit\"",
        "after = \"baseline\"",
        "9223372036854775807",
        "[1, 2]",
        "{ column = \"a\" }",
        "[{}]",
        "[[1, 2], [2, 1]]",
        "\n",
        "#",
    ];
    prop_oneof!["[\"'\\[\\]{}=,.#\\n a-z0-9é\\-]{0,6}", prop::sample::select(VALUES).prop_map(str::to_owned)]
}

proptest! {
    #![proptest_config(ProptestConfig { cases: 600, failure_persistence: None, ..ProptestConfig::default() })]

    /// No text makes reading panic, and what is taken for sound fits the schema.
    #[test]
    fn mutated_plans_never_panic(
        which in 0_usize..1000,
        changes in prop::collection::vec((0_u8..4, 0_usize..10_000, 0_usize..40, scrap()), 1..5),
    ) {
        let texts = all_texts();
        let mut files = texts[which % texts.len()].clone();
        for (kind, at, length, with) in &changes {
            match files.readers.first_mut().filter(|_| at % 3 == 0) {
                Some((_, reader)) => *reader = mutate(reader, *kind, *at, *length, with),
                None => files.main = mutate(&files.main, *kind, *at, *length, with),
            }
        }
        match parse(&files) {
            Ok(_) => prop_assert_eq!(held(&files).err(), None, "{}", files.main),
            Err(faults) => {
                let printed = faults.to_string();
                prop_assert!(printed.lines().all(|line| line.chars().count() <= 80));
                prop_assert!(faults.any_error());
            }
        }
    }
}

/// Files from other machines: a byte-order mark, and lines that end in CR LF.
#[test]
fn line_ends_and_byte_order_mark() {
    let files = files(&folder("sound/least.toml"));
    for main in [format!("\u{feff}{}", files.main), files.main.replace('\n', "\r\n")] {
        parse(&PlanFiles { main, readers: vec![] }).unwrap_or_else(|faults| panic!("{faults}"));
    }
    let broken = files.main.replace("unit", "unti").replace('\n', "\r\n");
    let faults = parse(&PlanFiles { main: broken, readers: vec![] }).unwrap_err();
    assert_eq!((faults.0[0].line, faults.0[0].column), (4, 26));
    assert!(!faults.to_string().contains('\r'));
}
