//! Numbers as instruments write them.
//!
//! Invariant: a text is a number only when the whole of it fits the marks that the plan states; nothing is stripped to
//! make it fit.

/// The number that `text` writes with this decimal mark and thousands mark. Thousands stand in whole groups of three or
/// not at all; a sign and an exponent may stand.
pub fn parse(text: &str, decimal_mark: char, group_mark: Option<char>) -> Option<f64> {
    parse_short(text, decimal_mark).or_else(|| parse_any(text, decimal_mark, group_mark))
}

/// The longest number that is read without being copied to the heap.
const SHORT: usize = 32;

/// The number of digits with at most a sign and a decimal mark, which is what nearly all are; `None` says nothing.
fn parse_short(text: &str, decimal_mark: char) -> Option<f64> {
    let mark = u8::try_from(decimal_mark).ok().filter(u8::is_ascii)?;
    let mut plain = [0; SHORT];
    let plain = plain.get_mut(..text.len())?;
    let (mut marks, mut digits) = (0, 0);
    for (at, (byte, to)) in text.bytes().zip(plain.iter_mut()).enumerate() {
        *to = match byte {
            b'0'..=b'9' => {
                digits += 1;
                byte
            }
            b'+' | b'-' if at == 0 => byte,
            _ if byte == mark => {
                marks += 1;
                b'.'
            }
            _ => return None,
        };
    }
    if marks > 1 || digits == 0 {
        return None;
    }
    std::str::from_utf8(plain).ok()?.parse().ok()
}

fn parse_any(text: &str, decimal_mark: char, group_mark: Option<char>) -> Option<f64> {
    let mut plain = String::with_capacity(text.len());
    let mut rest = text.char_indices().peekable();
    if let Some(&(_, sign @ ('+' | '-'))) = rest.peek() {
        if sign == '-' {
            plain.push('-');
        }
        rest.next();
    }
    let start = rest.peek()?.0;
    let body = &text[start..];
    let (mantissa, exponent) = match body.find(['e', 'E']) {
        Some(at) => (&body[..at], Some(&body[at + 1..])),
        None => (body, None),
    };
    let (whole, fraction) = match mantissa.split_once(decimal_mark) {
        Some((whole, fraction)) => (whole, Some(fraction)),
        None => (mantissa, None),
    };
    let digits = |text: &str| text.bytes().all(|byte| byte.is_ascii_digit());
    push_whole(&mut plain, whole, group_mark)?;
    if let Some(fraction) = fraction {
        if !digits(fraction) || (whole.is_empty() && fraction.is_empty()) {
            return None;
        }
        plain.push('.');
        plain.push_str(fraction);
    } else if whole.is_empty() {
        return None;
    }
    if let Some(exponent) = exponent {
        let unsigned = exponent.strip_prefix(['+', '-']).unwrap_or(exponent);
        if unsigned.is_empty() || !digits(unsigned) {
            return None;
        }
        plain.push('e');
        plain.push_str(exponent);
    }
    plain.parse().ok().filter(|number: &f64| number.is_finite())
}

fn push_whole(plain: &mut String, whole: &str, group_mark: Option<char>) -> Option<()> {
    let digits = |text: &str| text.bytes().all(|byte| byte.is_ascii_digit());
    match group_mark {
        Some(mark) if whole.contains(mark) => {
            let mut groups = whole.split(mark);
            let first = groups.next()?;
            if first.is_empty() || first.len() > 3 || !digits(first) {
                return None;
            }
            plain.push_str(first);
            for group in groups {
                if group.len() != 3 || !digits(group) {
                    return None;
                }
                plain.push_str(group);
            }
            Some(())
        }
        _ if digits(whole) => {
            plain.push_str(whole);
            Some(())
        }
        _ => None,
    }
}

/// A value beyond a limit of detection: its mark, and the text of the limit.
pub fn limit(text: &str) -> Option<(&'static str, &str)> {
    let text = text.trim();
    if let Some(rest) = text.strip_prefix('<') {
        Some(("<", rest.trim()))
    } else {
        text.strip_prefix('>').map(|rest| (">", rest.trim()))
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn only_what_fits_the_stated_marks_is_a_number() {
        for (text, decimal, group, number) in [
            ("12.5", '.', None, Some(12.5)),
            ("-0.50", '.', None, Some(-0.5)),
            ("+3e-2", '.', None, Some(0.03)),
            ("12,5", ',', None, Some(12.5)),
            ("1.234,5", ',', Some('.'), Some(1234.5)),
            ("1234,5", ',', Some('.'), Some(1234.5)),
            ("1.23,5", ',', Some('.'), None),
            (".234", ',', Some('.'), None),
            ("1.234.56", '.', None, None),
            ("12,5", '.', None, None),
            ("12.5", ',', None, None),
            ("34,5 kg", ',', None, None),
            ("NaN", '.', None, None),
            ("inf", '.', None, None),
            ("1e999", '.', None, None),
            ("0x10", '.', None, None),
            ("5-7", '.', None, None),
            ("", '.', None, None),
            ("-", '.', None, None),
            (".", '.', None, None),
            (".5", '.', None, Some(0.5)),
            ("١٢", '.', None, None),
        ] {
            assert_eq!(parse(text, decimal, group), number, "{text:?} with {decimal:?} and {group:?}");
        }
    }

    proptest::proptest! {
        /// The short way says nothing that the long one does not.
        #[test]
        fn both_ways_agree(text in "[-+]?[0-9.,'e٢ ]{0,9}[-+0-9]{0,3}", mark in "[.,'٫]", group in "[.,']") {
            let group = group.chars().next().filter(|group| !mark.contains(*group));
            let mark = mark.chars().next().unwrap_or('.');
            for group in [None, group] {
                let long = parse_any(&text, mark, group);
                proptest::prop_assert_eq!(parse(&text, mark, group), long);
            }
        }
    }

    #[test]
    fn limits_are_told_from_numbers() {
        assert_eq!(limit("< 2.5"), Some(("<", "2.5")));
        assert_eq!(limit(">500"), Some((">", "500")));
        assert_eq!(limit("2.5"), None);
    }
}
