//! Words: comparing what instruments write with what a plan says, and the words by which people name columns.
//!
//! Invariant: a word is evidence and never proof; what is decided by a name alone is said to be unsure.

use unicode_normalization::UnicodeNormalization;

/// A text as it is compared with a code or a label: letters and digits alone, in lower case.
pub fn fold(text: &str) -> String {
    text.nfc().flat_map(char::to_lowercase).filter(|c| c.is_alphanumeric()).collect()
}

/// The words of a label, in lower case; a digit does not end a word, a capital after a small letter does.
pub fn words(text: &str) -> Vec<String> {
    let mut words = vec![String::new()];
    let mut small = false;
    for c in text.nfc() {
        if !c.is_alphanumeric() || (c.is_uppercase() && small) {
            words.push(String::new());
        }
        if c.is_alphanumeric() {
            words.last_mut().into_iter().for_each(|word| word.extend(c.to_lowercase()));
        }
        small = c.is_lowercase();
    }
    words.retain(|word| !word.is_empty());
    words
}

/// A list of words by which people name one kind of column.
#[derive(Debug, Clone, Copy)]
pub struct Kind(&'static [&'static str]);

/// Whose it is.
pub const SUBJECT: Kind = Kind(&[
    "subject",
    "participant",
    "patient",
    "person",
    "id",
    "code",
    "pid",
    "proband",
    "teilnehmer",
    "animal",
    "cage",
    "athlete",
    "rider",
    "walker",
    "who",
    "pot",
    "plant",
    "sujet",
    "sujeto",
    "volunteer",
    "client",
    "mouse",
    "rat",
]);
/// Which visit it is.
pub const VISIT: Kind = Kind(&[
    "visit",
    "visite",
    "visita",
    "session",
    "timepoint",
    "occasion",
    "phase",
    "stage",
    "termin",
    "besuch",
    "week",
    "woche",
    "wave",
    "zeitpunkt",
    "period",
    "followup",
    "v",
    "label",
    "appointment",
    "month",
    "day",
]);
/// Which of several readings of the same it is.
pub const REPLICATE: Kind = Kind(&[
    "trial",
    "try",
    "rep",
    "replicate",
    "repetition",
    "repeat",
    "attempt",
    "versuch",
    "n",
    "no",
    "nr",
    "night",
    "jump",
    "block",
    "pass",
    "essai",
    "wiederholung",
    "durchgang",
    "set",
    "measurement",
    "messung",
    "shot",
]);
/// Who measured.
pub const OPERATOR: Kind = Kind(&[
    "operator",
    "tester",
    "rater",
    "observer",
    "examiner",
    "assessor",
    "technician",
    "prüfer",
    "untersucher",
    "staff",
    "nurse",
    "investigator",
    "initials",
]);
/// What kind of row it is, or whether it is to be used.
pub const TYPE: Kind = Kind(&[
    "type",
    "kind",
    "art",
    "typ",
    "category",
    "status",
    "class",
    "qc",
    "control",
    "mode",
    "purpose",
    "valid",
    "validity",
    "quality",
    "excluded",
    "exclude",
    "reject",
    "rejected",
    "accepted",
    "ok",
    "error",
    concat!("arti", "fact"),
    "artefact",
    "flag",
    "flags",
    "state",
]);
/// Free remarks.
pub const REMARK: Kind = Kind(&[
    "comment",
    "comments",
    "remark",
    "remarks",
    "note",
    "notes",
    "bemerkung",
    "bemerkungen",
    "notiz",
    "kommentar",
    "observation",
    "observations",
    "memo",
]);
/// What says nothing about the reading.
pub const HARMLESS: Kind = Kind(&[
    "device", "serial", "firmware", "version", "software", "room", "raum", "location", "battery", "lane", "station",
    "file", "model", "sn", "channel", "format",
]);
/// A value, whatever it is of.
pub const VALUE: Kind = Kind(&[
    "value",
    "result",
    "wert",
    "messwert",
    "reading",
    "valeur",
    "valor",
    "resultat",
    "ergebnis",
    "measurement",
    "measured",
    "res",
    "val",
]);
/// The unit of a value.
pub const UNIT: Kind = Kind(&["unit", "units", "einheit", "unité", "unidad", "uom"]);
/// Marks a row as no reading of a subject.
pub const NO_READING: Kind = Kind(&[
    "qc",
    "test",
    "control",
    "kontrolle",
    "check",
    "calibration",
    "calibrate",
    "cal",
    "kalibrierung",
    "blank",
    "standard",
    "demo",
    "practice",
    "practise",
    "training",
    "dummy",
    "void",
    "invalid",
    "reference",
    "warmup",
]);
/// Stands where a value is missing.
const MISSING: &[&str] = &[
    "na",
    "n/a",
    "nan",
    "#n/a",
    "null",
    "none",
    "-",
    "--",
    "---",
    "x",
    "void",
    "missing",
    "not done",
    "nd",
    "n.d.",
    "k.a.",
    ".",
    "*",
    "**",
    "***",
    "n.a.",
    "?",
    "not available",
    "not measured",
];

impl Kind {
    /// Whether one of the words of `text`, or all of them as one, is of this kind.
    pub fn names(self, text: &str) -> bool {
        let folded = fold(text);
        self.0.contains(&folded.as_str()) || words(text).iter().any(|word| self.0.contains(&word.as_str()))
    }
}

/// Whether a text is a common way of saying that there is no value.
pub fn says_missing(text: &str) -> bool {
    MISSING.contains(&text.trim().to_lowercase().as_str())
}

/// Whether a text is one of the two answers to a question.
pub fn is_answer(text: &str) -> bool {
    const ANSWERS: &[&str] =
        &["true", "false", "yes", "no", "y", "n", "ja", "nein", "0", "1", "oui", "non", "si", "sí"];
    ANSWERS.contains(&text.trim().to_lowercase().as_str())
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn labels_fall_into_words() {
        assert_eq!(words("Path EO [mm]"), ["path", "eo", "mm"]);
        assert_eq!(words("result/median_s"), ["result", "median", "s"]);
        assert_eq!(words("SubjectId week-4"), ["subject", "id", "week", "4"]);
        assert_eq!(fold("Week-4"), fold("week 4"));
    }

    #[test]
    fn names_are_known_by_any_word() {
        assert!(TYPE.names("Sample type") && REPLICATE.names("Jump no.") && OPERATOR.names("Prüfer"));
        assert!(VISIT.names("Time point") && !VISIT.names("Value"));
        assert!(says_missing(" K.A. ") && !says_missing("12"));
    }
}
