//! Numbers: which marks the samples' numbers are written with.
//!
//! Invariant: "1.234" and "1,234" may be one or a thousand; which of them is only settled by a text that cannot be read
//! the other way.

use crate::intake::place::number;

/// Whether a text may be a number, whatever the marks are.
pub fn is_like_a_number(text: &str) -> bool {
    let bare = number::limit(text).map_or(text, |(_, rest)| rest);
    ['.', ','].iter().any(|decimal| {
        let groups = [None, Some(if *decimal == '.' { ',' } else { '.' }), Some('\''), Some('\u{a0}'), Some(' ')];
        groups.iter().any(|group| number::parse(bare, *decimal, *group).is_some())
    })
}

/// The marks of numbers.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Marks {
    /// The decimal mark.
    pub decimal: char,
    /// The thousands mark.
    pub group: Option<char>,
}

/// What the texts say of the marks.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Settled {
    /// The likeliest marks.
    pub marks: Marks,
    /// A text that may be read in two ways, when no other settles it.
    pub open: Option<String>,
    /// Texts that do not fit the marks, the first of them, and how many.
    pub against: Option<(String, usize)>,
}

/// What one text says.
enum Says {
    Nothing,
    Decimal(char),
    Both(char, char),
    Grouped(char),
    Either,
}

fn says(text: &str) -> Says {
    let bare = number::limit(text).map_or(text, |(_, rest)| rest).trim_start_matches(['+', '-']);
    let marks: Vec<(usize, char)> = bare.char_indices().filter(|(_, c)| matches!(c, '.' | ',')).collect();
    match marks.as_slice() {
        [] => Says::Nothing,
        [(at, mark)] => {
            let (whole, rest) = (bare.get(..*at).unwrap_or_default(), bare.get(at + 1..).unwrap_or_default());
            let plain = |text: &str| !text.is_empty() && text.bytes().all(|byte| byte.is_ascii_digit());
            let grouped = plain(whole) && whole.len() <= 3 && !whole.starts_with('0') && plain(rest) && rest.len() == 3;
            if grouped { Says::Either } else { Says::Decimal(*mark) }
        }
        [first, .., last] if first.1 == last.1 => Says::Grouped(first.1),
        [first, .., last] => Says::Both(last.1, first.1),
    }
}

/// The marks of these texts, all of which are like numbers.
pub fn settle<'a>(texts: impl Iterator<Item = &'a str>) -> Settled {
    let (mut point, mut comma) = (vec![], vec![]);
    let (mut groups, mut open) = (None, None);
    for text in texts {
        match says(text) {
            Says::Nothing => {}
            Says::Either => open = open.or_else(|| Some(text.to_owned())),
            Says::Decimal('.') => point.push(text),
            Says::Decimal(_) => comma.push(text),
            Says::Both(decimal, group) => {
                groups = groups.or(Some(group));
                if decimal == '.' { point.push(text) } else { comma.push(text) }
            }
            Says::Grouped(group) => {
                groups = groups.or(Some(group));
                if group == ',' { point.push(text) } else { comma.push(text) }
            }
        }
    }
    // While nothing settles it, the mark that is there is looked at as the decimal one.
    let shown = open.as_ref().filter(|_| point.is_empty() && comma.is_empty());
    let is_comma = shown.map_or(comma.len() > point.len(), |text: &String| text.contains(','));
    let decimal = if is_comma { ',' } else { '.' };
    let (fitting, against) = if decimal == '.' { (point.len(), &comma) } else { (comma.len(), &point) };
    Settled {
        marks: Marks { decimal, group: groups.filter(|group| *group != decimal) },
        open: open.filter(|_| fitting == 0 || against.len() * 20 > fitting),
        against: against.first().map(|text| ((*text).to_owned(), against.len())),
    }
}

/// The number of a text under these marks; of one beyond a limit of detection, the limit.
pub fn parse(text: &str, is_number: bool, marks: Marks) -> Option<f64> {
    if is_number {
        return number::parse(text, '.', None);
    }
    let bare = number::limit(text).map_or(text, |(_, rest)| rest);
    number::parse(bare, marks.decimal, marks.group)
}

#[cfg(test)]
mod tests {
    use super::*;

    fn settled(texts: &[&str]) -> Settled {
        settle(texts.iter().copied())
    }

    #[test]
    fn a_thousand_is_told_from_one_only_by_what_else_is_there() {
        assert_eq!(settled(&["1.234", "2.345"]).open.as_deref(), Some("1.234"));
        assert_eq!(settled(&["1,234"]).open.as_deref(), Some("1,234"));
        for decided in [&["1.234", "12.5"], &["1.234", "0.850"], &["1.234", "1.2345"]] {
            assert_eq!(settled(decided).open, None, "{decided:?}");
        }
        assert_eq!(settled(&["1.234,5", "17"]).marks, Marks { decimal: ',', group: Some('.') });
        assert_eq!(settled(&["1,234,567"]).marks, Marks { decimal: '.', group: Some(',') });
        assert_eq!(settled(&["31,8", "7,45"]).marks, Marks { decimal: ',', group: None });
        assert_eq!(settled(&["12", "13"]).open, None);
    }

    #[test]
    fn marks_that_contradict_each_other_leave_a_thousand_open() {
        assert_eq!(settled(&["12.5", "12,5", "1.234"]).open.as_deref(), Some("1.234"));
        assert_eq!(settled(&["12.5", "12,5"]).against.map(|it| it.1), Some(1));
    }

    #[test]
    fn what_is_like_a_number() {
        for text in ["1", "-2.5", "1.234,5", "<0.05", "1'234.5", "3e-2"] {
            assert!(is_like_a_number(text), "{text}");
        }
        for text in ["", "NA", "12 kg", "2025-01-02", "10:30"] {
            assert!(!is_like_a_number(text), "{text}");
        }
    }
}
