//! Plain text: cleaning and wrapping.
//!
//! Invariant: nothing that an export said can steer a terminal: control characters and marks that turn the direction
//! of writing never get through.

/// The text without anything that steers a terminal; white space of any kind becomes one blank.
pub fn clean(text: &str) -> String {
    text.chars()
        .map(|c| {
            if c.is_whitespace() {
                ' '
            } else if steers(c) {
                '\u{fffd}'
            } else {
                c
            }
        })
        .collect()
}

/// The same, line by line.
pub fn clean_lines(text: &str) -> String {
    text.lines().map(clean).collect::<Vec<_>>().join("\n")
}

fn steers(c: char) -> bool {
    c.is_control()
        || matches!(c, '\u{200b}'..='\u{200f}' | '\u{202a}'..='\u{202e}' | '\u{2060}'..='\u{2069}' | '\u{feff}')
}

/// The text, cleaned, and cut to so many characters.
pub fn clip(text: &str, most: usize) -> String {
    let text = clean(text);
    if text.chars().count() <= most {
        return text;
    }
    let mut short: String = text.chars().take(most.saturating_sub(1)).collect();
    short.push('…');
    short
}

/// Wraps each line of a text at blanks; what goes over is led by `indent`.
pub fn wrap(text: &str, width: usize, indent: &str) -> String {
    let lines: Vec<String> = text.lines().map(|line| wrap_line(line, width, indent)).collect();
    lines.join("\n")
}

fn wrap_line(line: &str, width: usize, indent: &str) -> String {
    let rest = line.trim_start_matches(' ');
    let mut used = line.len() - rest.len();
    let mut wrapped = line.get(..used).unwrap_or_default().to_owned();
    let mut first = true;
    for word in rest.split(' ') {
        let length = word.chars().count();
        if !first && used + 1 + length > width {
            wrapped.push('\n');
            wrapped.push_str(indent);
            wrapped.push_str(word);
            used = indent.chars().count() + length;
            continue;
        }
        if !std::mem::take(&mut first) {
            wrapped.push(' ');
            used += 1;
        }
        wrapped.push_str(word);
        used += length;
    }
    wrapped
}

/// `1 hold`, `2 holds`.
pub fn count(number: u64, one: &str) -> String {
    match number {
        1 => format!("1 {one}"),
        _ => format!("{number} {one}s"),
    }
}

/// `a`, `a and b`, `a, b and c`.
pub fn list(items: &[String]) -> String {
    match items {
        [] => String::new(),
        [one] => one.clone(),
        [most @ .., last] => format!("{} and {last}", most.join(", ")),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn nothing_steers_the_terminal() {
        assert_eq!(clean("a\u{1b}[31mb\tc\u{202e}d\r\n"), "a\u{fffd}[31mb c\u{fffd}d  ");
        assert_eq!(clip("abcdef", 4), "abc…");
    }

    #[test]
    fn lines_fit() {
        let wrapped = wrap("one two three four\nfive", 9, "  ");
        assert_eq!(wrapped, "one two\n  three\n  four\nfive");
        assert_eq!(wrap("", 9, ""), "");
        assert_eq!(wrap("  a: one two", 9, "    "), "  a: one\n    two");
    }

    #[test]
    fn lists_read_well() {
        let items = ["a", "b", "c"].map(str::to_owned);
        assert_eq!(list(&items), "a, b and c");
        assert_eq!(list(&items[..1]), "a");
        assert_eq!(count(1, "hold") + &count(0, "hold"), "1 hold0 holds");
    }
}
