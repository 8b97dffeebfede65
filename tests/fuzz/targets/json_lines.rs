//! Any bytes as an export of the format `json-lines`: the first byte chooses among the corpus' readers of it.
#![no_main]

use std::sync::LazyLock;

use libfuzzer_sys::fuzz_target;
use revisant_tests::reading::{ByFormat, of_format};

static READERS: LazyLock<ByFormat> = LazyLock::new(|| of_format("json-lines"));

fuzz_target!(|bytes: &[u8]| READERS.try_bytes(bytes));
