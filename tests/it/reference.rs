//! Reference values through the whole program: plan, export, `collect`, `analyse --json`, each value at its tolerance.
//!
//! The published source of each case stands in its file; expected values were computed in 60-digit arithmetic.

use revisant_tests::reference::{Case, Compared, find};
use serde_json::{Value as Json, json};

use crate::PROGRAMS;

const OVER_VISITS: &str =
    "[[analysis]]\ncode = \"over-visits\"\nmeasure = \"response\"\nmethod = \"repeated-measures\"\n";

/// Key of the case, and where it stands in an effect.
const EFFECT: [(&str, &str); 22] = [
    ("ss", "/ss"),
    ("df", "/df"),
    ("ms", "/ms"),
    ("sse", "/error_ss"),
    ("dfe", "/error_df"),
    ("mse", "/error_ms"),
    ("F", "/f"),
    ("p", "/p"),
    ("pes", "/partial_eta_sq"),
    ("ges", "/generalized_eta_sq"),
    ("eps_lb", "/epsilon/lower_bound"),
    ("eps_gg", "/epsilon/greenhouse_geisser"),
    ("eps_hf_lecoutre", "/epsilon/lecoutre"),
    ("eps_hf_classic", "/epsilon/huynh_feldt"),
    ("p_lb", "/corrected/lower_bound/p"),
    ("p_gg", "/corrected/greenhouse_geisser/p"),
    ("p_hf_lecoutre", "/corrected/lecoutre/p"),
    ("p_hf_classic", "/corrected/huynh_feldt/p"),
    ("mauchly_W", "/mauchly/w"),
    ("mauchly_chi2", "/mauchly/chi2"),
    ("mauchly_df", "/mauchly/df"),
    ("mauchly_p_box", "/mauchly/p"),
];

const CORRECTED: [(&str, &str); 4] =
    [("lb", "lower_bound"), ("gg", "greenhouse_geisser"), ("hf_lecoutre", "lecoutre"), ("hf_classic", "huynh_feldt")];

pub fn at<'j>(json: &'j Json, pointer: &str) -> &'j Json {
    json.pointer(pointer).unwrap_or(&Json::Null)
}

/// Every pair of visits, the later first.
pub fn later_and_earlier(case: &Case) -> Vec<(&str, &str)> {
    let codes: Vec<&str> = case.visits.iter().map(|(code, ..)| code.as_str()).collect();
    (0..codes.len())
        .flat_map(|at| codes[at + 1..].iter().map(|level| (*level, codes[at])).collect::<Vec<_>>())
        .collect()
}

macro_rules! cases {
    ($check:ident: $($name:ident in $folder:literal)*) => {$(
        #[test]
        fn $name() {
            let case = Case::load(concat!($folder, "/", stringify!($name)));
            let compared = $check(&case);
            assert!(compared.values > 20, "only {} values compared", compared.values);
            assert!(compared.differences.is_empty(), "{}", compared.differences.join("\n"));
        }
    )*};
}
pub(crate) use cases;

cases! { decomposition:
    all_equal_4x3 in "repeated_measures"
    ar_12x5 in "repeated_measures"
    k2_sleep in "repeated_measures"
    missing_listwise_14x4 in "repeated_measures"
    n_lt_k_4x6 in "repeated_measures"
    nearsing_10x4 in "repeated_measures"
    offset1e9_8x4 in "repeated_measures"
    orthodont_girls in "repeated_measures"
    rounding_times in "repeated_measures"
    tiny_3x3 in "repeated_measures"
    zero_resid_5x3 in "repeated_measures"
}

cases! { several:
    md12_within_within in "factorial"
    mixed_balanced_3x6x4 in "factorial"
    mixed_two_times in "factorial"
    obk_mixed_treatment in "factorial"
    obk_phase_hour in "factorial"
    obk_two_between in "factorial"
    orthodont_mixed in "factorial"
}

cases! { pairs:
    missing_pairwise_8x4 in "contrasts"
    orthodont_boys_8_14 in "contrasts"
    unequal_0_1_2_4_8_24 in "contrasts"
}

/// Everything that one within factor gives.
fn decomposition(case: &Case) -> Compared<'_> {
    let site = case.collected(PROGRAMS, OVER_VISITS);
    let result = site.json(&["analyse", "over-visits"]);
    let mut compared = Compared::new(case);
    common(&mut compared, case, &result);
    compared.exactly("subjects used", &result["subjects"]["used"], &case.config["n_subjects_used"]);
    let left_out: Vec<&Json> =
        result["subjects"]["left_out"].as_array().into_iter().flatten().map(|it| &it["subject"]).collect();
    compared.exactly("subjects left out", &json!(left_out), &case.config["dropped_subjects"]);
    means(&mut compared, case, &result);
    parts(&mut compared, case, &result);
    effect(&mut compared, &case.factor, "residual", find(&result["effects"], &[("source", "visit")]));
    unlinked(&mut compared, case, &result);
    compared
}

/// What every result says of itself.
fn common(compared: &mut Compared<'_>, case: &Case, result: &Json) {
    for field in ["/program/name", "/program/version", "/as_of/trail", "/as_of/hash", "/as_of/moment", "/plan/version"]
    {
        assert!(!at(result, field).is_null(), "no {field}: {result}");
    }
    compared.exactly("method", &result["method"], &json!("repeated-measures"));
    compared.exactly("measure", &result["measure"], &json!("response"));
    compared.exactly("unit", &result["unit"], &json!("mm"));
    compared.exactly("subjects enrolled", &result["subjects"]["enrolled"], &json!(case.subjects.len()));
}

fn means(compared: &mut Compared<'_>, case: &Case, result: &Json) {
    let cells: Vec<&Json> = case.visits.iter().map(|(code, ..)| find(&result["cells"], &[("visit", code)])).collect();
    let means: Vec<f64> = cells.iter().map(|cell| cell["mean"].as_f64().expect("a mean")).collect();
    compared.key("condition_means", &json!(means));
    // One factor and complete subjects: the cells are of one size.
    compared.key("grand_mean", &json!(means.iter().sum::<f64>() / means.len() as f64));
}

fn parts(compared: &mut Compared<'_>, case: &Case, result: &Json) {
    let part = |source: &str| find(&result["decomposition"], &[("source", source)]);
    for (source, field) in [("total", "ss"), ("total", "df"), ("subject", "ss"), ("subject", "df"), ("subject", "ms")] {
        compared.key(&format!("{field}.{source}"), &part(source)[field]);
    }
    for (key, source, field) in [
        ("ss", "visit", "ss"),
        ("df", "visit", "df"),
        ("ms", "visit", "ms"),
        ("sse", "residual", "ss"),
        ("dfe", "residual", "df"),
        ("mse", "residual", "ms"),
    ] {
        compared.key(&format!("{}.{key}", case.factor), &part(source)[field]);
    }
}

fn effect(compared: &mut Compared<'_>, prefix: &str, error: &str, effect: &Json) {
    let case = compared.case;
    let key = |name: &str| format!("{prefix}.{name}");
    let number = |name: &str| case.value(&key(name)).and_then(Json::as_f64);
    // An F that is infinite or undefined is null; its p may be 0 or null.
    let no_f = case.value(&key("F")).is_some_and(Json::is_string);
    for (name, pointer) in EFFECT {
        compared.key_or_null(&key(name), at(effect, pointer), no_f && name == "p");
    }
    compared.exactly("error", &effect["error"], &json!(error));
    for (name, field) in CORRECTED {
        if let (Some(epsilon), Some(df), Some(error_df)) = (number(&format!("eps_{name}")), number("df"), number("dfe"))
        {
            let corrected = &effect["corrected"][field];
            compared.also(&format!("corrected df, {field}"), &corrected["df"], epsilon.min(1.0) * df, 1e-8);
            compared.also(
                &format!("corrected error df, {field}"),
                &corrected["error_df"],
                epsilon.min(1.0) * error_df,
                1e-8,
            );
        }
    }
    if number("eps_gg").is_some() && case.value(&key("mauchly_W")).is_none() {
        compared.exactly("Mauchly's W", at(effect, "/mauchly/w"), &Json::Null);
        compared.exactly("Mauchly's p", at(effect, "/mauchly/p"), &Json::Null);
    }
}

/// Every effect of several factors, with sums of squares of both types where the case has them.
fn several(case: &Case) -> Compared<'_> {
    let between: Vec<&String> = case.between.iter().map(|(name, _)| name).collect();
    let within: Vec<&str> = ["visit"].into_iter().chain(case.conditions.iter().map(|it| it.0.as_str())).collect();
    let analysis = |sums: &str| {
        format!(
            "[[analysis]]\ncode = \"{sums}\"\nmeasure = \"response\"\nmethod = \"repeated-measures\"\n\
             within = {within:?}\nbetween = {between:?}\nsums = \"{sums}\"\n\n"
        )
    };
    let kinds = ["type-3", "type-2"];
    let site = case.collected(PROGRAMS, &kinds.map(analysis).concat());
    let mut compared = Compared::new(case);
    for sums in kinds {
        let result = site.json(&["analyse", sums]);
        common(&mut compared, case, &result);
        compared.exactly("subjects used", &result["subjects"]["used"], &case.config["n_subjects_used"]);
        let type_2 = sums == "type-2";
        for prefix in case.prefixes().into_iter().filter(|prefix| prefix.ends_with(".type2") == type_2) {
            let (source, error) = source_of(case, &prefix);
            effect(&mut compared, &prefix, &error, find(&result["effects"], &[("source", &source)]));
        }
        let subject = find(&result["decomposition"], &[("source", "subject")]);
        for field in ["ss", "df"] {
            compared.key(&format!("subject_error.{field}"), &subject[field]);
        }
    }
    compared
}

/// What an effect of the case and its error are called: between factors first, each kind in the order of the plan.
fn source_of(case: &Case, prefix: &str) -> (String, String) {
    let name = prefix.split('.').next().unwrap_or_default();
    let has = |factor: &str| name.split(':').any(|part| part == factor);
    let mut within: Vec<&str> = if has(&case.factor) { vec!["visit"] } else { vec![] };
    within.extend(case.conditions.iter().map(|it| it.0.as_str()).filter(|name| has(name)));
    let between = case.between.iter().map(|it| it.0.as_str()).filter(|name| has(name));
    let source: Vec<&str> = between.chain(within.iter().copied()).collect();
    within.push("subject");
    (source.join(":"), within.join(":"))
}

/// What the same readings would have given if nobody had known who was who.
fn unlinked(compared: &mut Compared<'_>, case: &Case, result: &Json) {
    for (name, field) in [("F", "f"), ("df1", "df"), ("df2", "error_df"), ("p", "p")] {
        compared.key(&format!("indep.{name}"), &result["if_unlinked"][field]);
    }
    let number = |key: &str| case.value(key).and_then(Json::as_f64);
    let residual = number(&format!("{}.mse", case.factor)).filter(|mse| *mse > 0.0);
    if let (Some(ss), Some(df), Some(residual)) = (number("indep.ss_within"), number("indep.df2"), residual) {
        compared.also("variance ratio", &result["if_unlinked"]["variance_ratio"], ss / df / residual, 1e-9);
    }
}

/// Every pair of levels, with each of the three adjustments.
fn pairs(case: &Case) -> Compared<'_> {
    let adjustments = [("holm", "p_holm"), ("bonferroni", "p_bonferroni"), ("benjamini-hochberg", "p_BH")];
    let plan: String = adjustments
        .iter()
        .map(|(name, _)| {
            format!(
                "[[analysis]]\ncode = \"pairs-{name}\"\nmeasure = \"response\"\nmethod = \"repeated-measures\"\n\
                 contrasts = [\"pairwise\"]\nmultiplicity = \"{name}\"\nconfidence = 0.95\n\n"
            )
        })
        .collect();
    let site = case.collected(PROGRAMS, &plan);
    let mut compared = Compared::new(case);
    for (name, adjusted) in adjustments {
        let result = site.json(&["analyse", &format!("pairs-{name}")]);
        for (at, (against, ..)) in case.visits.iter().enumerate() {
            for (level, ..) in &case.visits[at + 1..] {
                pair(&mut compared, case, &result, level, against, adjusted);
            }
        }
    }
    compared
}

fn pair(compared: &mut Compared<'_>, case: &Case, result: &Json, level: &str, against: &str, adjusted: &str) {
    let label = |code: &str| case.visits.iter().find(|(it, ..)| it == code).map_or("", |(_, label, _)| label.as_str());
    let key = |name: &str| format!("{}-{}.{name}", label(level), label(against));
    assert!(case.value(&key("n")).is_some(), "the case knows no {}", key("n"));
    let pair = find(&result["contrasts"], &[("kind", "pairwise"), ("level", level), ("against", against)]);
    let flat = case.value(&key("sd_diff")).and_then(Json::as_f64) == Some(0.0);
    for (name, field) in
        [("n", "n"), ("mean_diff", "estimate"), ("t", "t"), ("df", "df"), ("d_z", "dz"), ("d_av_mean_sd", "dav")]
    {
        compared.key(&key(name), &pair[field]);
    }
    compared.key_or_null(&key("p"), &pair["p"], flat);
    compared.key_or_null(&key(adjusted), &pair["p_adjusted"], flat);
    compared.key(&key("ci_lo"), &pair["ci"][0]);
    compared.key(&key("ci_hi"), &pair["ci"][1]);
    if let (Some(se), Some(n)) = (pair["se"].as_f64(), pair["n"].as_f64()) {
        compared.key(&key("sd_diff"), &json!(se * n.sqrt()));
    }
}
