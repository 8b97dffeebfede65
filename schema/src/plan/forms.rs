//! Forms: the texts of a plan that have an inner grammar of their own, such as durations, sizes and expressions.
//!
//! Invariants: what a form accepts, its `parse` function reads; nothing here looks at other keys.

use std::time::Duration;

use chrono::TimeDelta;
use chrono_tz::Tz;
use globset::{GlobBuilder, GlobMatcher};
use regex::Regex;

use super::diagnostics::nearest;
use super::model::{Encoding, Stamp};
use super::stamp::CompiledStamp;
use super::units;

/// The grammar of one text.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(crate) enum Form {
    /// Any text.
    Any,
    /// Any text but an empty one.
    Filled,
    /// A code: lower-case words with `-`.
    Code,
    /// An IANA zone.
    Zone,
    /// A regular expression.
    Regex,
    /// A regular expression that must match a text from end to end.
    Whole,
    /// A regular expression with exactly one group.
    OneGroup,
    /// A glob.
    Glob,
    /// `2s`, `1h30m`.
    Duration,
    /// `1GiB`.
    Size,
    /// `-00:03:20`.
    ClockShift,
    /// A UCUM code.
    Unit,
    /// `auto` or a WHATWG label.
    Encoding,
    /// One character.
    Mark,
    /// One character that can part cells, `tab` or `auto`.
    Delimiter,
    /// A way of writing stamps.
    Stamp,
    /// Where rows are: `/a/b/*`.
    Rows,
}

/// Why a text is not of its form.
#[derive(Debug, PartialEq, Eq)]
pub(crate) struct Misfit {
    pub wrong: String,
    pub right: String,
    pub nearest: Option<String>,
}

fn misfit<T>(wrong: impl Into<String>, right: impl Into<String>) -> Result<T, Misfit> {
    Err(Misfit { wrong: wrong.into(), right: right.into(), nearest: None })
}

impl Form {
    /// What people call it, with an example.
    pub fn called(self) -> &'static str {
        match self {
            Self::Any | Self::Filled => "a text in quotes",
            Self::Code => "a code in quotes, such as \"week-4\"",
            Self::Zone => "a zone in quotes, such as \"Europe/London\"",
            Self::Regex | Self::Whole => "a regular expression in single quotes",
            Self::OneGroup => "a regular expression with one group, in single quotes",
            Self::Glob => "a glob in quotes, such as \"*.csv\"",
            Self::Duration => "a duration in quotes, such as \"2s\", \"7d\" or \"1h30m\"",
            Self::Size => "a size in quotes, such as \"500MB\" or \"1GiB\"",
            Self::ClockShift => "hours, minutes and seconds in quotes, such as \"00:03:20\" or \"-00:02:00\"",
            Self::Unit => "a UCUM code in quotes, such as \"kg\" or \"mm[Hg]\"",
            Self::Encoding => "\"auto\" or a WHATWG label in quotes, such as \"windows-1252\"",
            Self::Mark => "one character in quotes, such as \",\"",
            Self::Delimiter => "\"auto\", \"tab\" or one character in quotes, such as \";\"",
            Self::Stamp => "\"iso\", \"serial\" or a strftime pattern, such as \"%d/%m/%Y %H:%M\"",
            Self::Rows => "a path in quotes, such as \"/results/*\"",
        }
    }

    /// Whether the text is of this form.
    pub fn check(self, text: &str) -> Result<(), Misfit> {
        match self {
            Self::Any => Ok(()),
            Self::Filled if text.trim().is_empty() => misfit("The text is empty.", "a text"),
            Self::Filled => Ok(()),
            Self::Code => code(text),
            Self::Zone => zone(text).map(drop),
            Self::Regex => regex(text).map(drop),
            Self::Whole => whole(text).map(drop),
            Self::OneGroup => one_group(text).map(drop),
            Self::Glob => glob(text).map(drop),
            Self::Duration => duration(text).map(drop),
            Self::Size => size(text).map(drop),
            Self::ClockShift => clock_shift(text).map(drop),
            Self::Unit => unit(text),
            Self::Encoding => encoding(text).map(drop),
            Self::Mark => mark(text).map(drop),
            Self::Delimiter => delimiter(text).map(drop),
            Self::Stamp => stamp(text).map(drop),
            Self::Rows if text.starts_with('/') => Ok(()),
            Self::Rows => misfit("A path to rows begins with a stroke.", self.called()),
        }
    }

    /// The form as a pattern of JSON Schema, where one says enough.
    pub fn pattern(self) -> Option<&'static str> {
        match self {
            Self::Filled => Some(r"\S"),
            Self::Code => Some("^[a-z0-9]+(-[a-z0-9]+)*$"),
            Self::Duration => Some(r"^([0-9]+w)?([0-9]+d)?([0-9]+h)?([0-9]+m)?([0-9]+s)?$"),
            Self::Size => Some(r"^[0-9]+ ?([kMGT]?B|[KMGT]iB)$"),
            Self::ClockShift => Some(r"^[+-]?[0-9]+:[0-5][0-9]:[0-5][0-9]$"),
            Self::Delimiter => Some(r"^(auto|tab|[\t !#-&(-/:-@\[-`{-~])$"),
            Self::Rows => Some("^/"),
            _ => None,
        }
    }
}

/// A code: lower-case words, digits among them, joined by `-`.
pub(crate) fn code(text: &str) -> Result<(), Misfit> {
    let sound = |text: &str| {
        text.split('-')
            .all(|word| !word.is_empty() && word.chars().all(|c| c.is_ascii_lowercase() || c.is_ascii_digit()))
    };
    if sound(text) {
        return Ok(());
    }
    let words = text.to_lowercase().replace(|c: char| !c.is_ascii_lowercase() && !c.is_ascii_digit(), "-");
    let words: Vec<&str> = words.split('-').filter(|word| !word.is_empty()).collect();
    Err(Misfit {
        wrong: format!("\"{}\" is no code.", clip(text)),
        right: "lower-case letters and digits, words joined by \"-\"".into(),
        nearest: (!words.is_empty()).then(|| clip(&words.join("-"))),
    })
}

/// Enough of a text to recognise it.
pub(crate) fn clip(text: &str) -> String {
    let mut shown: String = text.chars().take(40).collect();
    if shown.len() < text.len() {
        shown.push('…');
    }
    shown
}

/// An IANA zone.
pub(crate) fn zone(text: &str) -> Result<Tz, Misfit> {
    text.parse().map_err(|_| {
        let name = |zone: &Tz| zone.name();
        let last = text.rsplit('/').next().unwrap_or_default().replace(' ', "_");
        let by_city = || {
            let hit = |zone: &&Tz| zone.name().rsplit('/').next().is_some_and(|city| city.eq_ignore_ascii_case(&last));
            chrono_tz::TZ_VARIANTS.iter().find(hit).map(name)
        };
        let near = nearest(text, chrono_tz::TZ_VARIANTS.iter().map(name)).or_else(by_city);
        Misfit {
            wrong: format!("\"{}\" is no zone of the IANA time zone database.", clip(text)),
            right: Form::Zone.called().into(),
            nearest: near.map(str::to_owned),
        }
    })
}

/// A regular expression.
pub(crate) fn regex(text: &str) -> Result<Regex, Misfit> {
    regex::RegexBuilder::new(text).size_limit(1 << 20).build().or_else(|error| {
        let last = error.to_string();
        let reason = last.lines().last().unwrap_or_default().trim_start_matches("error: ").to_owned();
        misfit(format!("This is no regular expression: {reason}."), Form::Regex.called())
    })
}

/// A regular expression that must match a text from end to end.
pub(crate) fn whole(text: &str) -> Result<Regex, Misfit> {
    // Checked by itself first: `)(` would be sound inside the brackets.
    regex(text)?;
    regex(&format!(r"\A(?:{text})\z"))
}

/// A regular expression with exactly one group.
pub(crate) fn one_group(text: &str) -> Result<Regex, Misfit> {
    let expression = regex(text)?;
    match expression.captures_len() - 1 {
        1 => Ok(expression),
        0 => misfit(
            "The expression has no group, so it does not say which part is meant.",
            "round brackets about the part that is meant",
        ),
        many => misfit(
            format!("The expression has {many} groups; which part is meant?"),
            "one group; others can be written (?:…)",
        ),
    }
}

/// A glob: case-sensitive, `*` does not go over `/`.
pub(crate) fn glob(text: &str) -> Result<GlobMatcher, Misfit> {
    if text.is_empty() {
        return misfit("The glob is empty and matches nothing.", Form::Glob.called());
    }
    GlobBuilder::new(text)
        .literal_separator(true)
        .backslash_escape(true)
        .build()
        .map(|glob| glob.compile_matcher())
        .or_else(|error| misfit(format!("This is no glob: {}.", error.kind()), Form::Glob.called()))
}

/// A duration: whole weeks, days, hours, minutes and seconds, the larger first.
pub(crate) fn duration(text: &str) -> Result<Duration, Misfit> {
    const UNITS: [(char, u64); 5] = [('w', 604_800), ('d', 86_400), ('h', 3600), ('m', 60), ('s', 1)];
    let fail = || misfit(format!("\"{}\" is no duration.", clip(text)), Form::Duration.called());
    let (mut total, mut digits, mut least) = (0_u64, String::new(), usize::MAX);
    for c in text.chars() {
        if c.is_ascii_digit() {
            digits.push(c);
            continue;
        }
        let position = UNITS.iter().position(|(unit, _)| *unit == c);
        let (Some(position), Ok(count)) = (position, digits.parse::<u64>()) else { return fail() };
        if least != usize::MAX && position <= least {
            return fail();
        }
        let Some(sum) = count.checked_mul(UNITS[position].1).and_then(|seconds| total.checked_add(seconds)) else {
            return fail();
        };
        (total, least) = (sum, position);
        digits.clear();
    }
    // A hundred years are longer than any study, and far from the ends of what a clock can hold.
    if !digits.is_empty() || least == usize::MAX || total > 100 * 366 * 86_400 {
        return fail();
    }
    Ok(Duration::from_secs(total))
}

/// A number of bytes.
pub(crate) fn size(text: &str) -> Result<u64, Misfit> {
    const UNITS: [(&str, u64); 9] = [
        ("KiB", 1 << 10),
        ("MiB", 1 << 20),
        ("GiB", 1 << 30),
        ("TiB", 1 << 40),
        ("kB", 1000),
        ("MB", 1_000_000),
        ("GB", 1_000_000_000),
        ("TB", 1_000_000_000_000),
        ("B", 1),
    ];
    let split = UNITS.iter().find_map(|(unit, bytes)| Some((text.strip_suffix(unit)?, *bytes)));
    let bytes = split.and_then(|(digits, unit)| {
        let digits = digits.strip_suffix(' ').unwrap_or(digits);
        let digits = Some(digits).filter(|it| it.bytes().all(|byte| byte.is_ascii_digit()))?;
        digits.parse::<u64>().ok()?.checked_mul(unit)
    });
    match bytes {
        Some(bytes) if bytes > 0 => Ok(bytes),
        _ => misfit(format!("\"{}\" is no size.", clip(text)), Form::Size.called()),
    }
}

/// What is added to a clock: hours, minutes and seconds, with a sign.
pub(crate) fn clock_shift(text: &str) -> Result<TimeDelta, Misfit> {
    let (sign, rest) = match text.strip_prefix('-') {
        Some(rest) => (-1, rest),
        None => (1, text.strip_prefix('+').unwrap_or(text)),
    };
    let parts: Vec<&str> = rest.split(':').collect();
    let number = |text: &str, most: i64| {
        let digits = !text.is_empty() && text.bytes().all(|byte| byte.is_ascii_digit());
        text.parse::<i64>().ok().filter(|number| digits && *number <= most)
    };
    let seconds = match parts.as_slice() {
        // A clock that lost its date after a change of battery may be decades behind.
        [hours, minutes, seconds] if minutes.len() == 2 && seconds.len() == 2 => {
            number(hours, 1_000_000).zip(number(minutes, 59)).zip(number(seconds, 59))
        }
        _ => None,
    };
    match seconds {
        Some(((hours, minutes), seconds)) => Ok(TimeDelta::seconds(sign * (hours * 3600 + minutes * 60 + seconds))),
        None => misfit(format!("\"{}\" cannot be added to a clock.", clip(text)), Form::ClockShift.called()),
    }
}

/// A UCUM code.
pub(crate) fn unit(text: &str) -> Result<(), Misfit> {
    if units::is_ucum(text) {
        return Ok(());
    }
    Err(Misfit {
        wrong: format!("\"{}\" is no UCUM code (upper and lower case differ).", clip(text)),
        right: Form::Unit.called().into(),
        nearest: units::meant(text),
    })
}

/// `auto` or a label of the WHATWG encoding standard.
pub(crate) fn encoding(text: &str) -> Result<Encoding, Misfit> {
    if text == "auto" {
        return Ok(Encoding::Auto);
    }
    const LABELS: [&str; 7] = ["auto", "utf-8", "utf-16le", "utf-16be", "windows-1252", "iso-8859-1", "iso-8859-15"];
    let known = encoding_rs::Encoding::for_label_no_replacement(text.as_bytes());
    known.map(Encoding::Label).ok_or_else(|| Misfit {
        wrong: format!("\"{}\" is no label of the WHATWG encoding standard.", clip(text)),
        right: Form::Encoding.called().into(),
        nearest: nearest(text, LABELS).map(str::to_owned),
    })
}

/// One character that is no digit.
pub(crate) fn mark(text: &str) -> Result<char, Misfit> {
    let mut chars = text.chars();
    match (chars.next(), chars.next()) {
        (Some(c), None) if !c.is_alphanumeric() && !c.is_control() && !"+-".contains(c) => Ok(c),
        (Some(_), None) => misfit(format!("\"{text}\" cannot be a mark inside a number."), Form::Mark.called()),
        _ => misfit("This is not one character.", Form::Mark.called()),
    }
}

/// One ASCII character that can part cells (a tab may be written as the word, too), or `None` for `auto`.
pub(crate) fn delimiter(text: &str) -> Result<Option<u8>, Misfit> {
    match text.as_bytes() {
        b"auto" => Ok(None),
        b"tab" => Ok(Some(b'\t')),
        [byte] if *byte == b'\t' || (byte.is_ascii_punctuation() && !b"\"'".contains(byte)) || *byte == b' ' => {
            Ok(Some(*byte))
        }
        _ => {
            let spoken = match text.to_lowercase().as_str() {
                "tab" | "tabulator" | "\\t" => Some("tab"),
                "comma" => Some(","),
                "semicolon" => Some(";"),
                "pipe" => Some("|"),
                _ => None,
            };
            Err(Misfit {
                wrong: format!("\"{}\" cannot part cells.", clip(text)),
                right: Form::Delimiter.called().into(),
                nearest: spoken.map(str::to_owned),
            })
        }
    }
}

/// A way of writing stamps.
pub(crate) fn stamp(text: &str) -> Result<Stamp, Misfit> {
    let stamp = match text {
        "iso" => Stamp::Iso,
        "serial" => Stamp::Serial,
        pattern => Stamp::Pattern(pattern.to_owned()),
    };
    match CompiledStamp::new(&stamp) {
        Ok(_) => Ok(stamp),
        Err(reason) => Err(Misfit {
            wrong: format!("No stamp can be read by this pattern: {reason}."),
            right: Form::Stamp.called().into(),
            nearest: nearest(text, ["iso", "serial"]).map(str::to_owned),
        }),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn durations() {
        for (text, seconds) in
            [("0s", 0), ("2s", 2), ("7d", 604_800), ("1h30m", 5400), ("1w2d", 777_600), ("90m", 5400)]
        {
            assert_eq!(duration(text).map(|it| it.as_secs()), Ok(seconds), "{text}");
        }
        for text in ["", "2", "s", "2 s", "30m1h", "1h1h", "-2s", "1.5h", "99999999999999999999s", "1000000w", "2S"] {
            assert!(duration(text).is_err(), "{text}");
        }
    }

    #[test]
    fn sizes() {
        for (text, bytes) in
            [("1GiB", 1 << 30), ("500MB", 500_000_000), ("10 kB", 10_000), ("7B", 7), ("2TiB", 1 << 41)]
        {
            assert_eq!(size(text), Ok(bytes), "{text}");
        }
        for text in ["", "1", "0B", "GiB", "-1GB", "1.5GB", "1gb", "99999999TiB", "+1MB"] {
            assert!(size(text).is_err(), "{text}");
        }
    }

    #[test]
    fn clock_shifts() {
        for (text, seconds) in
            [("00:03:20", 200), ("-00:02:00", -120), ("+01:00:00", 3600), ("219150:00:00", 788_940_000)]
        {
            assert_eq!(clock_shift(text).map(|it| it.num_seconds()), Ok(seconds), "{text}");
        }
        for text in ["", "3:20", "00:60:00", "00:00:60", "--00:00:01", "00:-1:00", "a:00:00", "99999999999:00:00"] {
            assert!(clock_shift(text).is_err(), "{text}");
        }
    }

    #[test]
    fn delimiters() {
        let pattern = regex(Form::Delimiter.pattern().unwrap()).unwrap();
        let known = [("auto", None), ("tab", Some(b'\t')), ("\t", Some(b'\t')), (",", Some(b',')), (" ", Some(b' '))];
        for (text, byte) in known {
            assert_eq!(delimiter(text), Ok(byte), "{text}");
        }
        for text in ["ab", "TAB", "\\t", "tabtab", "é", "\"", "'", "", "a", "7", "\n"] {
            assert!(delimiter(text).is_err(), "{text}");
            assert!(!pattern.is_match(text), "{text}");
        }
        for byte in 0..0x80 {
            let text = char::from(byte).to_string();
            assert_eq!(pattern.is_match(&text), delimiter(&text).is_ok(), "{text:?}");
        }
        assert!(pattern.is_match("auto") && pattern.is_match("tab"));
    }

    #[test]
    fn other_forms() {
        assert!(code("week-4").is_ok() && code("6mwt").is_ok());
        assert_eq!(code("Week_4").unwrap_err().nearest.as_deref(), Some("week-4"));
        assert!(code("").is_err() && code("a--b").is_err() && code("-a").is_err() && code("ä").is_err());
        assert_eq!(zone("Europe/Londn").unwrap_err().nearest.as_deref(), Some("Europe/London"));
        assert_eq!(zone("berlin").unwrap_err().nearest.as_deref(), Some("Europe/Berlin"));
        assert!(whole("A)(B").is_err());
        assert!(whole("(?x) A # its rest would hide the closing bracket").is_err());
        assert!(whole(r"QM-\d{3}").unwrap().is_match("QM-001"));
        assert!(!whole("a|b").unwrap().is_match("ab"));
        assert!(one_group("^(a)").is_ok() && one_group("a").is_err() && one_group("(a)(b)").is_err());
        assert!(glob("*.csv").unwrap().is_match("a.csv") && !glob("*.csv").unwrap().is_match("a.CSV"));
        assert!(!glob("*.csv").unwrap().is_match("b/a.csv") && glob("[").is_err());
        assert_eq!(delimiter("Tab").unwrap_err().nearest.as_deref(), Some("tab"));
        assert!(mark(",").is_ok() && mark("\u{a0}").is_ok() && mark("1").is_err() && mark("").is_err());
        assert!(encoding("latin1").is_ok() && encoding("ansi").is_err());
        assert_eq!(unit("mmHg").unwrap_err().nearest.as_deref(), Some("mm[Hg]"));
    }
}
