//! One plain sentence for a result, in the trade's reporting style.

use revisant_analysis::anova::Effect;

use super::number::{df, fixed, p_said, percent, plain, share};
use super::text::list;
use crate::dataset::VISIT;

/// What a sentence speaks of.
pub struct Subject<'a> {
    /// The measure's label.
    pub measure: &'a str,
    /// The codes of the effect's factors, those between subjects first.
    pub factors: &'a [&'a str],
    /// Of the interval; the effect counts as shown at 1 less this.
    pub confidence: f64,
}

/// `Grip strength changed over visits, F(2.1, 48.3) = 9.41, p < .001 (Greenhouse–Geisser), partial η² = .29,
/// 95 % CI .05 to .46.`
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
    let interval = effect.partial_eta_sq_ci.map_or(String::new(), |ci| {
        let level = plain(percent(subject.confidence));
        format!(", {level} % CI {} to {}", share(ci.lower, 2), share(ci.upper, 2))
    });
    format!("{}, F({}, {}) {f}, {}{how}{size}{interval}.", finding(subject, p), df(d1), df(d2), p_said(p))
}

/// `Grip strength changed over visits`, or that this was not shown.
pub fn finding(subject: &Subject<'_>, p: f64) -> String {
    let Subject { measure, factors, confidence } = subject;
    let shown = p < 1.0 - confidence;
    match (*factors, shown) {
        ([VISIT], true) => format!("{measure} changed over visits"),
        ([VISIT], false) => format!("No change of {measure} over visits was shown"),
        ([over], true) => format!("{measure} differed by {over}"),
        ([over], false) => format!("No difference of {measure} by {over} was shown"),
        ([other, VISIT] | [VISIT, other], true) => format!("The change of {measure} over visits differed by {other}"),
        ([other, VISIT] | [VISIT, other], false) => {
            format!("No difference by {other} in the change of {measure} over visits was shown")
        }
        ([one, other], true) => format!("The difference of {measure} by {other} depended on {one}"),
        ([one, other], false) => format!("No dependence on {one} of the difference of {measure} by {other} was shown"),
        (more, true) => format!("{measure} showed an interaction of {}", all(more)),
        (more, false) => format!("No interaction of {} in {measure} was shown", all(more)),
    }
}

fn all(factors: &[&str]) -> String {
    list(&factors.iter().map(|factor| (*factor).to_owned()).collect::<Vec<_>>())
}

fn undefined(subject: &Subject<'_>) -> String {
    let over = match subject.factors {
        [VISIT] => "over visits".to_owned(),
        [one] => format!("over {one}"),
        more => format!("of the interaction of {}", all(more)),
    };
    format!("The readings of {} that there are do not allow a test {over}.", subject.measure)
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
        effect(&Subject { measure: "Grip strength", factors: &[VISIT], confidence: 0.95 }, &result.effect.unwrap())
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
