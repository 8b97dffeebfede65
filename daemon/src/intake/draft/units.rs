//! Units as people write them: in a header, in a row of units, in a column.
//!
//! Invariant: a letter that merely could be a unit is none unless something else speaks for it.

use revisant_schema::plan::units;

/// The UCUM code that a text means as a unit; `None` when it is none.
pub fn unit_code(text: &str) -> Option<String> {
    let bare = text.trim().trim_start_matches(['(', '[']).trim_end_matches([')', ']']).trim();
    let bare = if units::is_ucum(text.trim()) { text.trim() } else { bare };
    let is_number = bare.is_empty() || bare.chars().all(|c| c.is_ascii_digit());
    if is_number {
        return None;
    }
    if units::is_ucum(bare) { Some(bare.to_owned()) } else { units::meant(bare) }
}

/// A label, and the unit that it states.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Labelled {
    /// The label without the unit.
    pub name: String,
    /// The unit's UCUM code.
    pub unit: Option<String>,
    /// It stands in brackets, or is the whole label: it is certainly meant as a unit.
    pub stated: bool,
    /// What stands in brackets and is no unit that is known.
    pub unknown: Option<String>,
}

/// Takes a label apart: `Left (N)`, `Height [cm]`, `Weight lb`, `median_s`, `kg`.
pub fn labelled(label: &str) -> Labelled {
    let last = label.rsplit('/').next().filter(|_| label.starts_with("..") || !label.contains(' '));
    // A path's last step is the label; a unit such as m/s is none.
    let label = if unit_code(label).is_some() { label } else { last.filter(|it| it.len() > 2).unwrap_or(label) };
    let label = label.trim();
    for (open, close) in [('(', ')'), ('[', ']'), ('{', '}')] {
        if let (Some(at), true) = (label.rfind(open), label.ends_with(close)) {
            let inside = label.get(at + 1..label.len() - 1).unwrap_or_default().trim();
            let name = label.get(..at).unwrap_or_default().trim().to_owned();
            let unit = unit_code(inside);
            let unknown = unit.is_none().then(|| inside.to_owned()).filter(|it| !it.is_empty());
            return Labelled { name, stated: unit.is_some(), unit, unknown };
        }
    }
    if let Some(unit) = unit_code(label).filter(|_| label.chars().count() <= 8) {
        return Labelled { name: String::new(), unit: Some(unit), stated: true, unknown: None };
    }
    let cut = label.rfind([' ', '_', ',', '.']).filter(|at| *at > 0);
    let trailing = cut.and_then(|at| Some((label.get(..at)?, unit_code(label.get(at + 1..)?)?)));
    match trailing {
        Some((name, unit)) => Labelled { name: name.trim().to_owned(), unit: Some(unit), stated: false, unknown: None },
        None => Labelled { name: label.to_owned(), unit: None, stated: false, unknown: None },
    }
}

/// Whether these distinct texts are units: some of them where the column is called so, else all.
pub fn are_units(texts: &[(&str, usize)], called: bool) -> bool {
    let fit = texts.iter().filter(|(text, _)| unit_code(text).is_some()).count();
    !texts.is_empty() && texts.len() <= 30 && if called { fit > 0 } else { fit == texts.len() }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn units_are_found_in_labels() {
        for (label, name, unit, stated) in [
            ("Left (N)", "Left", Some("N"), true),
            ("Area EO [mm²]", "Area EO", Some("mm2"), true),
            ("Weight lb", "Weight", Some("[lb_av]"), false),
            ("Glu mg/dL", "Glu", Some("mg/dL"), false),
            ("result/median_s", "median", Some("s"), false),
            ("m/s", "", Some("m/s"), true),
            ("kg", "", Some("kg"), true),
            ("kmh", "", Some("km/h"), true),
            ("Height", "Height", None, false),
        ] {
            let found = labelled(label);
            assert_eq!((found.name.as_str(), found.unit.as_deref(), found.stated), (name, unit, stated), "{label}");
        }
        assert_eq!(labelled("Count (beats)").unknown.as_deref(), Some("beats"));
    }
}
