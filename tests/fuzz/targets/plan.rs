//! Any text as a plan.
#![no_main]

use libfuzzer_sys::fuzz_target;
use revisant_schema::plan::{PlanFiles, parse};

fuzz_target!(|text: &str| {
    let files = PlanFiles { main: text.to_owned(), readers: vec![] };
    if let Err(faults) = parse(&files) {
        // A fault has to be tellable, too.
        let _ = faults.to_string();
    }
});
