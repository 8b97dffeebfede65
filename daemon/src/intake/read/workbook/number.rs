//! A number of a cell as text.
//!
//! Invariant: the text is the shortest that gives the same double, so that one number has one text whatever program
//! wrote the workbook.

use std::fmt::Write;

/// Numbers outside are written with an exponent.
const USUAL: std::ops::Range<f64> = 1e-15..1e21;

/// Adds the shortest text of a number as the workbook writes it; `false`, and nothing is added, if it is none.
pub fn add_number(written: &str, text: &mut String) -> bool {
    if is_shortest(written.as_bytes()) {
        text.push_str(written);
        return true;
    }
    let written = written.trim_matches([' ', '\t', '\r', '\n']);
    let numeric = written.bytes().all(|byte| matches!(byte, b'0'..=b'9' | b'+' | b'-' | b'.' | b'e' | b'E'));
    let Some(number) = written.parse::<f64>().ok().filter(|number| numeric && number.is_finite()) else { return false };
    let size = number.abs();
    let outcome = if size == 0.0 {
        text.write_char('0')
    } else if USUAL.contains(&size) {
        write!(text, "{number}")
    } else {
        write!(text, "{number:e}")
    };
    // Writing into a string does not fail.
    outcome.is_ok()
}

/// Whether the text is the shortest of its double for sure: plain digits, no more than 15 that count (any two such
/// texts are different doubles), no needless zeros.
fn is_shortest(written: &[u8]) -> bool {
    let digits = written.strip_prefix(b"-").unwrap_or(written);
    let point = digits.iter().position(|&byte| byte == b'.');
    let (whole, part) = match point {
        Some(at) => (&digits[..at], Some(&digits[at + 1..])),
        None => (digits, None),
    };
    let plain = |digits: &[u8]| !digits.is_empty() && digits.iter().all(u8::is_ascii_digit);
    let part_is_short = part.is_none_or(|part| plain(part) && part.last() != Some(&b'0'));
    let needed = whole == b"0" || whole.first() != Some(&b'0');
    let zero = whole == b"0" && part.is_none();
    digits.len() <= 15 && plain(whole) && part_is_short && needed && !(zero && digits.len() < written.len())
}

#[cfg(test)]
#[allow(clippy::unwrap_used, reason = "tests may")]
mod tests {
    use super::*;
    use proptest::prelude::*;

    fn shortest(written: &str) -> Option<String> {
        let mut text = String::new();
        add_number(written, &mut text).then_some(text)
    }

    #[test]
    fn one_number_has_one_text() {
        for (written, text) in [
            ("1", "1"),
            ("1.0", "1"),
            ("-0", "0"),
            ("0", "0"),
            ("0.0", "0"),
            ("007", "7"),
            ("37.299999999999997", "37.3"),
            ("0.23300000000000001", "0.233"),
            ("45915.670138888898", "45915.6701388889"),
            ("1E3", "1000"),
            (" 37 ", "37"),
            ("+5", "5"),
            (".5", "0.5"),
            ("5.", "5"),
            ("1.5E-7", "0.00000015"),
            ("1e-300", "1e-300"),
            ("1e300", "1e300"),
            ("123456789012345678", "123456789012345680"),
            ("-2.50", "-2.5"),
        ] {
            assert_eq!(shortest(written).as_deref(), Some(text), "{written}");
        }
    }

    #[test]
    fn what_is_no_number_is_left() {
        for written in ["", "-", ".", "1,5", "NaN", "inf", "INF", "1e999", "0x10", "12 kg", "1 2", "--1"] {
            assert_eq!(shortest(written), None, "{written}");
        }
    }

    proptest! {
        #[test]
        fn the_text_gives_the_same_double(number in any::<f64>().prop_filter("finite", |number| number.is_finite())) {
            for written in [format!("{number:e}"), format!("{number}"), format!("{number:.17e}")] {
                let text = shortest(&written).unwrap();
                prop_assert_eq!(text.parse::<f64>().unwrap(), number);
                prop_assert_eq!(shortest(&text), Some(text));
            }
        }

        #[test]
        fn digits_that_are_copied_are_the_shortest(whole in 0_u32..100_000, part in "[0-9]{1,9}") {
            let written = format!("{whole}.{part}");
            let number: f64 = written.parse().unwrap();
            prop_assert_eq!(shortest(&written), Some(format!("{number}")));
        }
    }
}
