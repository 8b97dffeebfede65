//! One plain sentence for a result, in the trade's reporting style.

use revisant_analysis::anova::Effect;

use super::number::{df, fixed, p_said, share};

/// What a sentence speaks of.
pub struct Subject<'a> {
    /// The measure's label.
    pub measure: &'a str,
    /// `visits`, or the condition's code.
    pub over: &'a str,
    /// 1 − the confidence.
    pub alpha: f64,
}

/// `Grip strength changed over visits, F(2.1, 48.3) = 9.41, p < .001 (Greenhouse–Geisser), partial η² = .29.`
///
/// The p value is always that of Greenhouse and Geisser's correction, where there is one: no test of sphericity chooses
/// it.
pub fn effect(subject: &Subject<'_>, effect: &Effect) -> String {
    let corrected = effect.corrected.and_then(|corrected| corrected.greenhouse_geisser);
    let (d1, d2, p) = corrected.map_or((effect.df, effect.error_df, effect.p), |it| (it.df, it.error_df, it.p));
    let Some(p) = p else { return undefined(subject) };
    let f = effect.f.map_or_else(|| "is infinite".to_owned(), |f| format!("= {}", fixed(f, 2)));
    let how = if corrected.is_some() && effect.df > 1.0 { " (Greenhouse–Geisser)" } else { "" };
    let size = effect.partial_eta_sq.map_or(String::new(), |eta| format!(", partial η² = {}", share(eta, 2)));
    format!("{}, F({}, {}) {f}, {}{how}{size}.", finding(subject, p), df(d1), df(d2), p_said(p))
}

fn finding(subject: &Subject<'_>, p: f64) -> String {
    let Subject { measure, over, alpha } = subject;
    let changed = p < *alpha;
    match (*over, changed) {
        ("visits", true) => format!("{measure} changed over visits"),
        ("visits", false) => format!("No change of {measure} over visits was shown"),
        (over, true) => format!("{measure} differed by {over}"),
        (over, false) => format!("No difference of {measure} by {over} was shown"),
    }
}

fn undefined(subject: &Subject<'_>) -> String {
    format!("The readings of {} that there are do not allow a test over {}.", subject.measure, subject.over)
}

#[cfg(test)]
mod tests {
    use super::*;
    use revisant_analysis::Settings;
    use revisant_analysis::anova::repeated_measures;
    use revisant_analysis::design::OneWithin;

    fn said(rows: &[[Option<f64>; 3]]) -> String {
        let design = OneWithin::from_rows(rows).unwrap();
        let result = repeated_measures(&design, &Settings::default());
        effect(&Subject { measure: "Grip strength", over: "visits", alpha: 0.05 }, &result.effect.unwrap())
    }

    #[test]
    fn a_change_is_said_in_one_sentence() {
        let rows = [
            [Some(31.0), Some(33.5), Some(36.0)],
            [Some(28.5), Some(30.0), Some(30.5)],
            [Some(40.0), Some(41.5), Some(45.0)],
            [Some(35.0), Some(36.1), Some(37.5)],
        ];
        let said = said(&rows);
        assert!(said.starts_with("Grip strength changed over visits, F("), "{said}");
        assert!(said.contains("(Greenhouse–Geisser), partial η² = ."), "{said}");
    }

    #[test]
    fn what_is_not_shown_is_not_called_equal() {
        let rows =
            [[Some(1.0), Some(2.0), Some(1.5)], [Some(2.0), Some(1.0), Some(1.6)], [Some(1.5), Some(1.4), Some(1.6)]];
        assert!(said(&rows).starts_with("No change of Grip strength over visits was shown, F("));
    }

    #[test]
    fn nothing_is_said_of_what_is_not_defined() {
        let same = [[Some(1.0); 3]; 3];
        assert_eq!(said(&same), "The readings of Grip strength that there are do not allow a test over visits.");
    }
}
