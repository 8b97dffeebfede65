//! Numbers for people. Machines get the shortest form that reads back the same.
//!
//! Invariant: what is not there is a dash, never a NaN or an infinity.

/// A value as it was measured: the shortest form.
pub fn plain(value: f64) -> String {
    value.to_string()
}

/// A value or a dash.
pub fn plain_or_dash(value: Option<f64>) -> String {
    value.map_or_else(dash, plain)
}

/// What stands for a value that there is not.
pub fn dash() -> String {
    "–".to_owned()
}

/// With so many decimals, and a real minus sign.
pub fn fixed(value: f64, decimals: usize) -> String {
    let text = format!("{value:.decimals$}");
    match text.strip_prefix('-') {
        Some(zero) if zero.chars().all(|c| c == '0' || c == '.') => zero.to_owned(),
        Some(rest) => format!("−{rest}"),
        None => text,
    }
}

/// With so many decimals, or a dash.
pub fn fixed_or_dash(value: Option<f64>, decimals: usize) -> String {
    value.map_or_else(dash, |value| fixed(value, decimals))
}

/// How many decimals show three digits of a spread, such as a standard deviation.
pub fn decimals_for(spread: f64) -> usize {
    if !(spread.is_finite() && spread > 0.0) {
        return 2;
    }
    // The cast cannot go wrong: the logarithm of a finite number lies between -324 and 309.
    let size = spread.log10().floor() as i32;
    usize::try_from((2 - size).clamp(0, 8)).unwrap_or(2)
}

/// A proportion as a percentage, without what the arithmetic of doubles adds to it.
pub fn percent(share: f64) -> f64 {
    (share * 1e8).round() / 1e6
}

/// Degrees of freedom: whole, or with one decimal.
pub fn df(value: f64) -> String {
    if value == value.round() { fixed(value, 0) } else { fixed(value, 1) }
}

/// A sum of squares or a statistic: four digits, without powers of ten where that can be read.
pub fn statistic(value: f64) -> String {
    let size = value.abs();
    if size != 0.0 && !(1e-4..1e9).contains(&size) {
        format!("{value:.3e}")
    } else {
        fixed(value, decimals_for(size) + 1)
    }
}

/// A statistic or a dash.
pub fn statistic_or_dash(value: Option<f64>) -> String {
    value.map_or_else(dash, statistic)
}

/// A proportion that cannot exceed 1, in the trade's style: `.29`.
pub fn share(value: f64, decimals: usize) -> String {
    let text = fixed(value, decimals);
    match text.strip_prefix('−') {
        Some(rest) => format!("−{}", rest.strip_prefix('0').unwrap_or(rest)),
        None => text.strip_prefix('0').map_or(text.clone(), str::to_owned),
    }
}

/// A p value by itself: `.034`, `< .001`.
pub fn p(value: f64) -> String {
    match value {
        ..0.001 => "< .001".to_owned(),
        0.9995.. => "> .999".to_owned(),
        _ => share(value, 3),
    }
}

/// A p value or a dash.
pub fn p_or_dash(value: Option<f64>) -> String {
    value.map_or_else(dash, p)
}

/// A p value in a sentence: `p = .034`, `p < .001`.
pub fn p_said(value: f64) -> String {
    let text = p(value);
    if text.starts_with(['<', '>']) { format!("p {text}") } else { format!("p = {text}") }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn numbers_in_the_trades_style() {
        assert_eq!(
            (p_said(0.0341), p_said(1e-9), p_said(1.0)),
            ("p = .034".into(), "p < .001".into(), "p > .999".into())
        );
        assert_eq!((share(0.294, 2), share(1.0, 2), share(-0.02, 2)), (".29".into(), "1.00".into(), "−.02".into()));
        assert_eq!((df(2.0), df(48.27)), ("2".into(), "48.3".into()));
        assert_eq!((fixed(-0.001, 2), fixed(-1.25, 1)), ("0.00".into(), "−1.2".into()));
        assert_eq!((decimals_for(6.2), decimals_for(0.0123), decimals_for(4321.0), decimals_for(0.0)), (2, 4, 0, 2));
        assert_eq!(
            (statistic(9.4123), statistic(0.0), statistic(1e-12)),
            ("9.412".into(), "0.000".into(), "1.000e-12".into())
        );
        assert_eq!(plain_or_dash(None), "–");
    }
}
