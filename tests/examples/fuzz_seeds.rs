//! Writes what the fuzzers begin with, from the corpus' smallest exports.

use std::fs;
use std::path::Path;

use revisant_tests::corpus::folder;
use revisant_tests::reading::of_format;

/// Exports of each reader.
const MOST: usize = 8;

fn main() -> std::io::Result<()> {
    let root = Path::new(env!("CARGO_MANIFEST_DIR")).join("fuzz/corpus");
    for format in ["delimited", "fixed-width", "workbook", "json", "json-lines", "xml"] {
        write(&root.join(format.replace('-', "_")), &of_format(format).seeds(MOST))?;
    }
    let plan = |study: &str| fs::read(folder(study).join("study.toml"));
    write(&root.join("plan"), &[plan("quillmere")?, plan("lindrow")?, plan("silvermeer")?])
}

fn write(folder: &Path, seeds: &[Vec<u8>]) -> std::io::Result<()> {
    fs::create_dir_all(folder)?;
    for (at, seed) in seeds.iter().enumerate() {
        fs::write(folder.join(format!("seed-{at:02}")), seed)?;
    }
    println!("{}: {} seeds", folder.display(), seeds.len());
    Ok(())
}
