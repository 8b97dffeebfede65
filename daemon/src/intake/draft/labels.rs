//! Labels: columns whose few texts name visits, measures or levels of a condition.
//!
//! Invariant: a text is only mapped to a code when letters and digits of both are the same; every other text is left for
//! a person, or stands for itself and is held.

use super::grid::Grid;
use super::lines::{BLANK, Line, Notes, map, quote, rows, some};
use super::words::{fold, words};

/// A code of the plan and what people call it.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Known {
    /// The code.
    pub code: String,
    /// Its label.
    pub label: String,
}

/// How a column's texts meet codes.
#[derive(Debug, Clone, Default, PartialEq, Eq)]
pub struct Meeting {
    /// Texts that are codes as they stand, and their rows.
    pub same: usize,
    /// Texts that are a code when case and marks do not count, and the code.
    pub alike: Vec<(String, String)>,
    /// Rows of those.
    pub alike_rows: usize,
    /// Texts that are no code, and their rows.
    pub other: Vec<(String, usize)>,
}

impl Meeting {
    /// Holds distinct texts against codes.
    pub fn of(texts: &[(&str, usize)], known: &[Known]) -> Self {
        let mut meeting = Self::default();
        for (text, count) in texts {
            if known.iter().any(|it| it.code == *text) {
                meeting.same += count;
                continue;
            }
            let folded = fold(text);
            let mut fitting =
                known.iter().filter(|it| !folded.is_empty() && (fold(&it.code) == folded || fold(&it.label) == folded));
            match (fitting.next(), fitting.next()) {
                (Some(one), None) => {
                    meeting.alike.push(((*text).to_owned(), one.code.clone()));
                    meeting.alike_rows += count;
                }
                _ => meeting.other.push(((*text).to_owned(), *count)),
            }
        }
        meeting
    }

    /// Rows that meet a code in one way or the other.
    pub fn met(&self) -> usize {
        self.same + self.alike_rows
    }

    /// Rows that do not.
    pub fn unmet(&self) -> usize {
        self.other.iter().map(|(_, count)| count).sum()
    }

    /// The place with its map, and what is to be said of it; `held` says what becomes of texts that are no code.
    pub fn place(&self, source: &str, what: &str, known: &[Known], held: &str) -> (String, Notes) {
        let mut notes = Notes::default();
        let mut pairs = self.alike.clone();
        if !self.alike.is_empty() {
            notes.doubt(format!(
                "{} taken for the {what}s of the same name",
                some(self.alike.iter().map(|it| it.0.as_str()))
            ));
        }
        let unmet = self.unmet();
        if unmet * 5 > self.met() + unmet {
            pairs.extend(self.other.iter().take(40).map(|(text, _)| (text.clone(), BLANK.to_owned())));
            let codes: Vec<&str> = known.iter().map(|it| it.code.as_str()).collect();
            let mut ask =
                format!("for each text the plan's {what} ({}), or take the entry out: {held}", codes.join(", "));
            let likely = suggestions(&self.other, known);
            if !likely.is_empty() {
                ask = format!("{ask}; likely {likely}");
            }
            notes.gap(ask);
        } else if unmet > 0 {
            let texts = some(self.other.iter().map(|it| it.0.as_str()));
            notes.doubt(format!("{texts} ({}): no {what} of the plan, {held}", rows(unmet)));
        }
        let map = if pairs.is_empty() { String::new() } else { format!(", map = {}", map(&pairs)) };
        (format!("{{ {source}{map} }}"), notes)
    }
}

/// Codes that texts may mean: the same number in both, or a shared word.
fn suggestions(texts: &[(String, usize)], known: &[Known]) -> String {
    let numbers =
        |text: &str| -> Vec<String> { words(text).into_iter().filter(|it| it.parse::<u32>().is_ok()).collect() };
    let shares = |text: &str, it: &Known| {
        let (mine, theirs) = (words(text), [words(&it.code), words(&it.label)].concat());
        let worded =
            mine.iter().any(|word| word.chars().count() >= 3 && theirs.iter().any(|other| other.starts_with(word)));
        let initial = mine.concat();
        let begins = !initial.is_empty() && initial.chars().all(char::is_alphabetic) && it.code.starts_with(&initial);
        worded || begins || !numbers(text).is_empty() && numbers(text) == numbers(&it.code)
    };
    let likely = texts.iter().filter_map(|(text, _)| {
        let mut fitting = known.iter().filter(|it| shares(text, it));
        match (fitting.next(), fitting.next()) {
            (Some(one), None) => Some(format!("{} = {}", quote(text), quote(&one.code))),
            _ => None,
        }
    });
    likely.take(6).collect::<Vec<_>>().join(", ")
}

/// Columns whose texts mostly meet codes, by column.
pub fn meeting_columns(
    grid: &Grid,
    free: &dyn Fn(usize) -> bool,
    known: &[Known],
    least_share: f64,
) -> Vec<(usize, Meeting)> {
    let meets = |column: &usize| {
        let texts = grid.distinct(*column);
        let meeting = Meeting::of(&texts, known);
        let all = meeting.met() + meeting.unmet();
        let enough = meeting.met() > 0 && meeting.met() as f64 >= least_share * all as f64;
        (enough && texts.len() <= 60).then_some((*column, meeting))
    };
    (0..grid.columns.len()).filter(|column| free(*column)).filter_map(|column| meets(&column)).collect()
}

/// A line `key = { column = …, map = … }`.
pub fn line(key: &str, grid: &Grid, column: usize, meeting: &Meeting, known: &[Known], held: &str) -> Line {
    let name = grid.columns.get(column).map_or("", String::as_str);
    let (place, notes) = meeting.place(&format!("column = {}", quote(name)), key, known, held);
    Line::with(key, &place, &notes)
}

#[cfg(test)]
mod tests {
    use super::*;

    fn known(codes: &[&str]) -> Vec<Known> {
        codes.iter().map(|code| Known { code: (*code).to_owned(), label: (*code).to_owned() }).collect()
    }

    #[test]
    fn labels_meet_codes_by_letters_and_digits_alone() {
        let visits = known(&["baseline", "week-4", "week-8"]);
        let meeting = Meeting::of(&[("baseline", 5), ("Week 4", 4), ("V3", 1)], &visits);
        assert_eq!((meeting.same, meeting.alike_rows, meeting.unmet()), (5, 4, 1));
        let (place, notes) = meeting.place("column = \"v\"", "visit", &visits, "held");
        assert_eq!(place, "{ column = \"v\", map = { \"Week 4\" = \"week-4\" } }");
        assert!(notes.gaps.is_empty() && notes.doubts.len() == 2);
    }

    #[test]
    fn labels_that_are_no_codes_are_left_for_a_person() {
        let visits = known(&["baseline", "week-4"]);
        let (place, notes) =
            Meeting::of(&[("0", 5), ("4", 4)], &visits).place("column = \"v\"", "visit", &visits, "held");
        assert_eq!(place, "{ column = \"v\", map = { \"0\" = \"FILL IN\", \"4\" = \"FILL IN\" } }");
        assert!(notes.gaps[0].contains("likely \"4\" = \"week-4\""), "{notes:?}");
    }
}
