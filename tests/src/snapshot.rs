//! Snapshots: what a program said, compared with what it said when somebody last looked at it.
//!
//! `REVISANT_RENEW=1 cargo test -p revisant-tests` writes them anew; the difference is then looked at before it is kept.

use std::fs;
use std::path::PathBuf;
use std::sync::LazyLock;

use regex::Regex;

/// What differs from run to run, and the word that stands for it.
static CHANGING: LazyLock<Vec<(Regex, &str)>> = LazyLock::new(|| {
    [
        (r"\b\d{4}-\d\d-\d\dT\d\d:\d\d:\d\d(\.\d+)?(Z|[+-]\d\d:\d\d)", "MOMENT"),
        (r"\b[0-9a-f]{64}\b", "HASH"),
        (r"\b([0-9a-f]{4}-){4}[0-9a-f]{4}\b", "SHORT-HASH"),
        (r#""seconds":\d+(\.\d+)?(e-\d+)?"#, r#""seconds":DURATION"#),
        (r"\bprocess \d+", "process NUMBER"),
        (r"\b\d+(\.\d+)? (ms|s)\b", "DURATION"),
    ]
    .into_iter()
    .map(|(pattern, word)| (Regex::new(pattern).expect("a pattern"), word))
    .collect()
});

/// Text with moments, hashes and durations taken out.
pub fn redact(text: &str) -> String {
    CHANGING.iter().fold(text.to_owned(), |text, (pattern, word)| pattern.replace_all(&text, *word).into_owned())
}

/// Compares a text with the snapshot of this name, or writes it anew when that was asked for.
pub fn check(name: &str, text: &str) {
    let path = PathBuf::from(env!("CARGO_MANIFEST_DIR")).join("snapshots").join(format!("{name}.txt"));
    if std::env::var_os("REVISANT_RENEW").is_some_and(|value| value == "1") {
        fs::create_dir_all(path.parent().expect("a folder")).expect("the folder of snapshots");
        fs::write(&path, text).expect("a snapshot can be written");
        return;
    }
    let kept = fs::read_to_string(&path).unwrap_or_else(|error| {
        panic!("snapshot {name} cannot be read ({error}); REVISANT_RENEW=1 writes it. It would be:\n{text}")
    });
    assert!(kept == text, "snapshot {name} differs.\nkept:\n{kept}\nnow:\n{text}\nREVISANT_RENEW=1 writes it anew");
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn what_changes_is_taken_out() {
        let text = r#"{"at":"2026-03-01T09:30:00.123Z","seconds":0.0123} 0123-4567-89ab-cdef-0123, process 812"#;
        assert_eq!(redact(text), r#"{"at":"MOMENT","seconds":DURATION} SHORT-HASH, process NUMBER"#);
        assert_eq!(redact("on 2026-03-01 within 15 seconds"), "on 2026-03-01 within 15 seconds");
    }
}
