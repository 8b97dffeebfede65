//! A small study of one measure on two instruments, for analyses whose numbers can be worked out by hand.

use revisant_tests::site::Site;

use crate::PROGRAMS;

/// The days of the visits.
pub const BASELINE: &str = "2025-03-03";
pub const WEEK_4: &str = "2025-03-31";
pub const WEEK_8: &str = "2025-04-28";

/// The readings `rows` (instrument, then its row of subject, day, trial and value) of up to six subjects at three visits,
/// filed, with a plan of the one analysis `it`.
pub fn study(analysis: &str, replicates: u32, rows: &str) -> Site {
    study_with(analysis, replicates, rows, "")
}

/// The same, with more keys for the instruments' values.
pub fn study_with(analysis: &str, replicates: u32, rows: &str, value: &str) -> Site {
    let plan = format!(
        "[study]\ncode = \"RK-1\"\ntitle = \"Small\"\ntime_zone = \"Europe/London\"\n\n\
         [subject]\npattern = 'RK-\\d'\nnormalise = [\"trim\"]\nanchor = \"enrolment\"\n\n\
         [[measure]]\ncode = \"lift\"\nlabel = \"Lift\"\nunit = \"kg\"\nreplicates = {replicates}\n\n\
         [[visit]]\ncode = \"baseline\"\nday = 0\n\n[[visit]]\ncode = \"week-4\"\nday = 28\n\n\
         [[visit]]\ncode = \"week-8\"\nday = 56\n{}{}\n\
         [[analysis]]\ncode = \"it\"\nmeasure = \"lift\"\n{analysis}\n",
        instrument("watch", value),
        instrument("gate", value)
    );
    let roster = "subject,enrolled,withdrawn\n".to_owned()
        + &(1..=6).map(|at| format!("RK-{at},2025-03-03,\n")).collect::<String>();
    let site = Site::with(PROGRAMS, &plan, &roster);
    for code in ["watch", "gate"] {
        let own: Vec<&str> = rows.lines().filter_map(|row| row.strip_prefix(&format!("{code} "))).collect();
        if !own.is_empty() {
            site.drop_export(format!("exports/{code}/all.csv"), format!("Who,When,Trial,Value\n{}\n", own.join("\n")));
        }
    }
    assert_eq!(site.collect()["readings"]["held"], 0);
    site
}

fn instrument(code: &str, value: &str) -> String {
    format!(
        "\n[[instrument]]\ncode = \"{code}\"\nfolder = \"exports/{code}\"\nrest = \"0s\"\n\
         [instrument.reader]\nformat = \"delimited\"\nheader = {{ row = 1 }}\nsubject = {{ column = \"Who\" }}\n\
         taken_at = {{ column = \"When\", format = \"iso\" }}\nreplicate = {{ column = \"Trial\" }}\n\
         [[instrument.reader.value]]\nmeasure = \"lift\"\ncolumn = \"Value\"\n{value}\n"
    )
}
