//! The crate against reference values; see `tests/reference/README.md`.

#![allow(clippy::unwrap_used, clippy::panic)]

mod support;

use revisant_analysis::anova::{
    Corrected, CorrectedTest, Decomposition, Effect, Factorial, IfUnlinked, RepeatedMeasures, Term, factorial,
    repeated_measures,
};
use revisant_analysis::contrasts::{Contrast, ContrastKind, Family, Multiplicity};
use revisant_analysis::design::FactorId;
use revisant_analysis::distributions::{ChiSquare, FisherF, Normal, StudentT};
use revisant_analysis::{Note, Settings, Sums};
use support::{Case, Several, cases, cases_of_several, folder, lines, settle};

#[test]
fn repeated_measures_of_one_factor() {
    let mut cases = cases("repeated_measures");
    cases.iter_mut().for_each(check_repeated_measures);
    settle(&cases, 330);
}

fn check_repeated_measures(case: &mut Case) {
    let result = repeated_measures(&case.design(), &Settings::default());
    let within = case.doc["columns"]["within"][0].as_str().unwrap().to_owned();
    let (decomposition, effect) = (result.decomposition.unwrap(), result.effect.unwrap());
    check_subjects(case, &result);
    check_cells(case, &result);
    check_decomposition(case, &within, &decomposition);
    check_effect(case, &within, &effect);
    check_unlinked(case, &within, &result.if_unlinked.unwrap());
}

fn check_subjects(case: &Case, result: &RepeatedMeasures) {
    assert_eq!(result.used.len() as u64, case.doc["config"]["n_subjects_used"].as_u64().unwrap(), "{}", case.name);
    assert_eq!(
        result.incomplete.len(),
        case.doc["config"]["dropped_subjects"].as_array().unwrap().len(),
        "{}",
        case.name
    );
    assert_eq!(result.used.len() + result.incomplete.len(), case.rows.len());
}

fn check_cells(case: &mut Case, result: &RepeatedMeasures) {
    let means: Vec<f64> =
        case.doc["expected"]["condition_means"]["v"].as_array().unwrap().iter().map(|v| v.as_f64().unwrap()).collect();
    assert_eq!(means.len(), result.cells.len());
    for (level, (cell, mean)) in result.cells.iter().zip(&means).enumerate() {
        case.close(&format!("mean {level}"), cell.mean, *mean, 1e-13, 0.0);
    }
    let grand = result.cells.iter().map(|cell| cell.mean.unwrap()).sum::<f64>() / means.len() as f64;
    case.check("grand_mean", Some(grand));
}

fn check_decomposition(case: &mut Case, within: &str, parts: &Decomposition) {
    for (key, got) in [
        ("ss.total", parts.total.ss),
        ("df.total", parts.total.df),
        ("ss.subject", parts.subject.ss),
        ("df.subject", parts.subject.df),
        ("ms.subject", parts.subject.ms.unwrap()),
    ] {
        case.check(key, Some(got));
    }
    for (short, got) in [
        ("ss", parts.effect.ss),
        ("df", parts.effect.df),
        ("ms", parts.effect.ms.unwrap()),
        ("sse", parts.residual.ss),
        ("dfe", parts.residual.df),
        ("mse", parts.residual.ms.unwrap()),
    ] {
        case.check(&format!("{within}.{short}"), Some(got));
    }
}

#[test]
fn several_factors() {
    let mut all = cases_of_several("factorial");
    all.iter_mut().for_each(check_several);
    settle(&all.into_iter().map(|it| it.case).collect::<Vec<_>>(), 700);
}

/// Keys without a type hold for both.
fn check_several(several: &mut Several) {
    for (sums, suffix) in [(Sums::Type3, ".type3"), (Sums::Type2, ".type2")] {
        let result = factorial(&several.design, &Settings { sums, ..Settings::default() });
        let used = several.case.doc["config"]["n_subjects_used"].as_u64().unwrap();
        assert_eq!(result.used.len() as u64, used, "{}", several.case.name);
        check_terms(several, &result, suffix);
        several.case.check("subject_error.ss", Some(result.strata[0].error.ss));
        several.case.check("subject_error.df", Some(result.strata[0].error.df));
    }
}

fn check_terms(several: &mut Several, result: &Factorial, suffix: &str) {
    let effects: Vec<(Term, Effect)> = result.effects().map(|it| (it.term, it.effect)).collect();
    let mut met = 0;
    for (term, effect) in effects {
        let name = |factor: FactorId| match factor {
            FactorId::Between(at) => several.between[at].as_str(),
            FactorId::Within(at) => several.within[at].as_str(),
        };
        let names: Vec<&str> = term.factors().map(name).collect();
        let key = names.join(":");
        for key in [key.clone(), format!("{key}{suffix}")] {
            if several.case.has(&format!("{key}.ss")) {
                met += 1;
                match effect.mauchly {
                    Some(_) => check_effect(&mut several.case, &key, &effect),
                    None => check_between(&mut several.case, &key, &effect),
                }
            }
        }
    }
    // obk_two_between has both types of each, the others plain keys or those of one type.
    assert_eq!(met, result.effects().count(), "{}{suffix}", several.case.name);
}

fn check_between(case: &mut Case, key: &str, effect: &Effect) {
    assert!(effect.epsilon.is_none() && effect.corrected.is_none());
    check_test(case, key, effect);
}

fn check_test(case: &mut Case, key: &str, effect: &Effect) {
    for (short, got) in [
        ("ss", Some(effect.ss)),
        ("df", Some(effect.df)),
        ("ms", effect.ms),
        ("sse", Some(effect.error_ss)),
        ("dfe", Some(effect.error_df)),
        ("mse", effect.error_ms),
        ("F", effect.f),
        ("p", effect.p),
        ("pes", effect.partial_eta_sq),
        ("ges", effect.generalized_eta_sq),
    ] {
        case.check(&format!("{key}.{short}"), got);
    }
}

fn check_effect(case: &mut Case, within: &str, effect: &Effect) {
    let (mauchly, epsilon) = (effect.mauchly.unwrap(), effect.epsilon.unwrap());
    check_test(case, within, effect);
    for (short, got) in [
        ("eps_lb", Some(epsilon.lower_bound)),
        ("eps_gg", epsilon.greenhouse_geisser),
        ("eps_hf_lecoutre", epsilon.lecoutre),
        ("eps_hf_classic", epsilon.huynh_feldt),
        ("mauchly_W", mauchly.w),
        ("mauchly_chi2", mauchly.chi2),
        ("mauchly_df", mauchly.df),
        ("mauchly_p_box", mauchly.p),
    ] {
        case.check(&format!("{within}.{short}"), got);
    }
    if !case.has(&format!("{within}.mauchly_W")) {
        assert_eq!(mauchly.w.or(mauchly.chi2).or(mauchly.p), None, "{}: Mauchly's test is not defined here", case.name);
    }
    check_corrected(case, within, effect, &effect.corrected.unwrap());
}

fn check_corrected(case: &mut Case, within: &str, effect: &Effect, corrected: &Corrected) {
    for (short, test) in [
        ("lb", corrected.lower_bound),
        ("gg", corrected.greenhouse_geisser),
        ("hf_lecoutre", corrected.lecoutre),
        ("hf_classic", corrected.huynh_feldt),
    ] {
        case.check(&format!("{within}.p_{short}"), test.and_then(|test| test.p));
        let key = format!("{within}.eps_{short}");
        if case.doc["expected"][&key]["v"].is_f64() {
            let factor = case.value(&key).min(1.0);
            case.close(&format!("df_{short}"), test.map(|t: CorrectedTest| t.df), factor * effect.df, 1e-8, 0.0);
            case.close(&format!("error_df_{short}"), test.map(|t| t.error_df), factor * effect.error_df, 1e-8, 0.0);
        }
    }
}

fn check_unlinked(case: &mut Case, within: &str, unlinked: &IfUnlinked) {
    case.check("indep.F", unlinked.f);
    case.check("indep.df1", Some(unlinked.df));
    case.check("indep.df2", Some(unlinked.error_df));
    case.check("indep.p", unlinked.p);
    let residual = case.value(&format!("{within}.mse"));
    if residual > 0.0 {
        let ratio = case.value("indep.ss_within") / case.value("indep.df2") / residual;
        case.close("variance_ratio", unlinked.variance_ratio, ratio, 1e-9, 0.0);
    } else {
        assert_eq!(unlinked.variance_ratio, None);
    }
}

#[test]
fn degenerate_cases_are_noted() {
    let notes = |name: &str| {
        let case = cases("repeated_measures").into_iter().find(|case| case.name == name).unwrap();
        repeated_measures(&case.design(), &Settings::default()).notes
    };
    assert_eq!(notes("all_equal_4x3"), [Note::NoVariation]);
    assert_eq!(notes("zero_resid_5x3"), [Note::ZeroResidual]);
    assert_eq!(notes("n_lt_k_4x6"), [Note::TooFewSubjectsForMauchly { subjects: 4, levels: 6 }]);
    assert_eq!(notes("nearsing_10x4"), []);
}

/// Certified values at the tolerance that rounding to doubles leaves; the exact answer for the rounded readings at 1e-9
/// for lower and average difficulty, and at what a two-pass algorithm reaches for higher.
#[test]
fn certified_one_way_sets() {
    let mut cases = cases("one_way");
    cases.iter_mut().for_each(check_one_way);
    settle(&cases, 55);
}

fn check_one_way(case: &mut Case) {
    let result = repeated_measures(&case.design(), &Settings::default());
    let (parts, unlinked) = (result.decomposition.unwrap(), result.if_unlinked.unwrap());
    let within = parts.subject.ss + parts.residual.ss;
    for (key, got) in [
        ("ss_between", parts.effect.ss),
        ("ms_between", parts.effect.ms.unwrap()),
        ("df_between", unlinked.df),
        ("ss_within", within),
        ("ms_within", within / unlinked.error_df),
        ("df_within", unlinked.error_df),
        ("F", unlinked.f.unwrap()),
        ("p", unlinked.p.unwrap()),
        ("as_double.F", unlinked.f.unwrap()),
        ("as_double.ss_between", parts.effect.ss),
        ("as_double.ss_within", within),
    ] {
        case.check(key, Some(got));
    }
    // With means in two doubles nothing is lost beyond the rounding of the readings, however large their offset.
    case.close("as_double.F, tight", unlinked.f, case.value("as_double.F"), 1e-13, 0.0);
}

#[test]
fn pairs_and_trends() {
    let mut cases = cases("contrasts");
    cases.iter_mut().for_each(check_contrasts);
    settle(&cases, 350);
}

fn check_contrasts(case: &mut Case) {
    let times: Vec<f64> = case.doc["config"]["times"]
        .as_array()
        .map_or_else(Vec::new, |t| t.iter().map(|t| t.as_f64().unwrap()).collect());
    let design = if times.is_empty() { case.design() } else { case.design().with_positions(times).unwrap() };
    for (multiplicity, key) in [
        (Multiplicity::Holm, "p_holm"),
        (Multiplicity::Bonferroni, "p_bonferroni"),
        (Multiplicity::BenjaminiHochberg, "p_BH"),
    ] {
        let settings = Settings { multiplicity, contrasts: vec![Family::Pairwise], ..Settings::default() };
        let result = repeated_measures(&design, &settings);
        result.contrasts.iter().for_each(|contrast| check_pair(case, contrast, key));
    }
    let settings = Settings { contrasts: vec![Family::Polynomial], ..Settings::default() };
    let result = repeated_measures(&design, &settings);
    result.contrasts.iter().for_each(|contrast| check_trend(case, contrast));
    let effect = result.effect.unwrap();
    case.check("trend.ss_sum_equals_ss_condition", Some(effect.ss));
    case.check("trend.ms_resid", effect.error_ms);
    case.check("trend.df_resid", Some(effect.error_df));
}

fn check_pair(case: &mut Case, contrast: &Contrast, adjusted: &str) {
    let ContrastKind::Pairwise { level, against } = contrast.kind else { panic!("{:?} is no pair", contrast.kind) };
    let pair = format!("{}-{}", case.levels[level], case.levels[against]);
    assert!(case.has(&format!("{pair}.n")), "{pair} is not expected");
    for (short, got) in [
        ("n", Some(contrast.n as f64)),
        ("mean_diff", contrast.estimate),
        ("sd_diff", contrast.se.map(|se| se * (contrast.n as f64).sqrt())),
        ("t", contrast.t),
        ("df", contrast.df),
        ("p", contrast.p),
        ("ci_lo", contrast.ci.map(|ci| ci.lower)),
        ("ci_hi", contrast.ci.map(|ci| ci.upper)),
        ("d_z", contrast.dz),
        ("d_av_mean_sd", contrast.dav),
        (adjusted, contrast.p_adjusted),
    ] {
        case.check(&format!("{pair}.{short}"), got);
    }
}

fn check_trend(case: &mut Case, contrast: &Contrast) {
    let ContrastKind::Polynomial { degree } = contrast.kind else { panic!("{:?} is no trend", contrast.kind) };
    let key = |short: &str| format!("trend.order{degree}.{short}");
    case.check(&key("estimate"), contrast.estimate);
    case.check(&key("t_own_error"), contrast.t);
    case.check(&key("p_own_error"), contrast.p);
    case.check(&key("ss"), contrast.estimate.map(|estimate| estimate * estimate * contrast.n as f64));
    assert_eq!(Some(contrast.n as u64), case.doc["config"]["trend_n_complete"].as_u64());
}

#[test]
fn distribution_tables() {
    for (family, tolerance) in [("F", 1e-10), ("t", 1e-10), ("chi2", 1e-10), ("normal", 1e-12)] {
        let rows = lines(&folder("distributions").join(format!("{family}.csv")));
        assert_eq!(rows.len(), 200, "{family}");
        let found: Vec<_> = rows.iter().map(|row| (row, distribution(family, row))).collect();
        agree(family, &found, tolerance);
    }
}

#[test]
fn far_tails_down_to_1e_minus_300() {
    let rows = lines(&folder("distributions").join("far_tails.csv"));
    assert!(rows.len() > 200);
    for family in ["F", "t", "chi2", "normal"] {
        let own = rows.iter().filter(|row| row[0] == family).map(|row| row[1..].to_vec()).collect::<Vec<_>>();
        let found: Vec<_> = own.iter().map(|row| (row, distribution(family, row))).collect();
        agree(family, &found, 1e-10);
    }
}

fn distribution(family: &str, row: &[String]) -> Option<f64> {
    let number = |i: usize| row[i].parse::<f64>().unwrap();
    let (a, b, x) = (number(1), number(2), number(3));
    let (f, t, chi2) = (FisherF::new(a, b), StudentT::new(a), ChiSquare::new(a));
    match (family, row[0].as_str()) {
        ("F", "cdf") => f.unwrap().cdf(x),
        ("F", "sf") => f.unwrap().sf(x),
        ("F", "quantile") => f.unwrap().quantile(x),
        ("F", "isf") => f.unwrap().upper_quantile(x),
        ("t", "cdf") => t.unwrap().cdf(x),
        ("t", "sf") => t.unwrap().sf(x),
        ("t", "quantile") => t.unwrap().quantile(x),
        ("t", "isf") => t.unwrap().upper_quantile(x),
        ("chi2", "cdf") => chi2.unwrap().cdf(x),
        ("chi2", "sf") => chi2.unwrap().sf(x),
        ("chi2", "quantile") => chi2.unwrap().quantile(x),
        ("chi2", "isf") => chi2.unwrap().upper_quantile(x),
        ("normal", "cdf") => Normal.cdf(x),
        ("normal", "sf") => Normal.sf(x),
        ("normal", "quantile") => Normal.quantile(x),
        ("normal", "isf") => Normal.upper_quantile(x),
        other => panic!("{other:?} is not known"),
    }
}

fn agree(family: &str, found: &[(&Vec<String>, Option<f64>)], tolerance: f64) {
    let error = |row: &Vec<String>, got: Option<f64>| {
        let value: f64 = row[4].parse().unwrap();
        got.map_or(f64::INFINITY, |x| if x == value { 0.0 } else { ((x - value) / value).abs() })
    };
    let (row, got, worst) =
        found.iter().map(|&(row, got)| (row, got, error(row, got))).max_by(|a, b| a.2.total_cmp(&b.2)).unwrap();
    assert!(worst <= tolerance, "{family}: {row:?} gave {got:?}, off by {worst:e}");
    #[allow(clippy::disallowed_macros)] // the test's own account, shown with --nocapture
    {
        println!("{family}: {} values, worst relative error {worst:.1e} at {row:?}", found.len());
    }
}
