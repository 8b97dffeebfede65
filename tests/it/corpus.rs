//! Twenty-one invented studies whose truth is known: every reading, hold, state and line of completeness is compared.

use revisant_tests::corpus::{ask, lay_out, run, truth};
use revisant_tests::judge::{Answers, judge};
use serde_json::{Value as Json, json};

use crate::PROGRAMS;

macro_rules! studies {
    ($($study:ident)*) => {$(
        #[test]
        fn $study() {
            let verdict = run(PROGRAMS, stringify!($study));
            assert!(verdict.expected > 0, "the truth is empty");
            assert!(
                verdict.differences.is_empty(),
                "{} differences:\n{}",
                verdict.differences.len(),
                verdict.differences.join("\n")
            );
        }
    )*};
}

studies! {
    pellwarth tarrow brackwell wexlow caldrick nightjar lindrow marlecott dovermoss ostrey keldrum rivenfold thornmoss
    oakmarl hendrake fernstow silvermeer mirefield scrapside undermill quillmere
}

/// A judge that cannot fail proves nothing: each of these falsifications of a right answer has to be noticed.
#[test]
fn the_judge_notices_what_is_wrong() {
    let study = "dovermoss";
    let site = lay_out(PROGRAMS, study);
    site.collect();
    let truth = truth(study, "truth.json");
    let right = ask(&site, &truth);
    assert_eq!(judge(&truth, &right).differences, Vec::<String>::new());

    let mut falsified = 0;
    let mut notice = |what: &str, falsify: &dyn Fn(&mut Answers)| {
        let mut wrong = right.clone();
        falsify(&mut wrong);
        assert!(!judge(&truth, &wrong).differences.is_empty(), "not noticed: {what}");
        falsified += 1;
    };
    let others: [(&str, Json); 12] = [
        ("subject", json!("DM-99")),
        ("visit", json!("nowhere")),
        ("measure", json!("nothing")),
        ("condition", json!({ "hand": "third" })),
        ("replicate", json!(77)),
        ("value", json!(1.000_001)),
        ("as_written", json!("1,0")),
        ("limit", json!("<")),
        ("taken_at", json!("2001-01-01T00:00:00Z")),
        ("export", json!("exports/elsewhere.csv")),
        ("where", json!("line 9999")),
        ("state", json!("struck")),
    ];
    for (field, other) in &others {
        notice(field, &|answers| answers.readings[0][*field] = other.clone());
    }
    notice("a value a millionth off", &|answers| {
        let value = answers.readings[0]["value"].as_f64().expect("a value");
        answers.readings[0]["value"] = json!(value * (1.0 + 1e-6));
    });
    notice("a reading lost", &|answers| drop(list(&mut answers.readings).pop()));
    notice("a reading twice", &|answers| {
        let again = answers.readings[0].clone();
        list(&mut answers.readings).push(again);
    });
    notice("a hold lost", &|answers| drop(list(&mut answers.holds).pop()));
    notice("a hold twice", &|answers| {
        let again = answers.holds[0].clone();
        list(&mut answers.holds).push(again);
    });
    notice("another reason", &|answers| answers.holds[0]["reason"] = json!("unreadable-row"));
    notice("another place", &|answers| answers.holds[0]["where"] = json!("line 9999"));
    notice("a hold that is decided", &|answers| answers.holds[0]["state"] = json!("decided"));
    notice("another state of an export", &|answers| answers.status["files"][0]["state"] = json!("repeat"));
    notice("an export not listed", &|answers| answers.status["files"] = json!([]));
    notice("an export too many", &|answers| {
        list(&mut answers.status["files"]).push(json!({ "export": "exports/x.csv", "state": "filed" }));
    });
    notice("another status of a subject", &|answers| {
        answers.completeness["subjects"][0]["status"] = json!("nowhere");
    });
    notice("another state of a visit", &|answers| {
        answers.completeness["subjects"][0]["visits"][0]["state"] = json!("nowhere");
    });
    notice("a subject lost", &|answers| drop(list(&mut answers.completeness["subjects"]).pop()));
    notice("a subject too many", &|answers| {
        list(&mut answers.completeness["subjects"]).push(json!({ "subject": "X", "status": "complete", "visits": [] }));
    });
    assert_eq!(falsified, 27);
}

fn list(json: &mut Json) -> &mut Vec<Json> {
    json.as_array_mut().expect("a list")
}
