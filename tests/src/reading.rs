//! The readers by themselves: the corpus' exports read row by row, whole, cut and spoilt.
//!
//! Invariant: what is compared is what a reader hands out as good; a fault of the file throws away all rows before it,
//! as the intake does.

use std::collections::BTreeMap;
use std::fs;
use std::path::PathBuf;

use revisant_daemon::intake::read::{self, At, FileFault, LineCounts, Row};
use revisant_schema::plan::{Instrument, Plan, PlanFiles, parse};

use crate::chance::Chance;

/// One export of a study of the corpus.
pub struct Sample {
    /// Study and file, for messages.
    pub name: String,
    /// The instrument's place in its plan.
    pub instrument: usize,
    /// Its bytes.
    pub bytes: Vec<u8>,
}

/// A study's plan with its exports.
pub struct Samples {
    /// The plan.
    pub plan: Plan,
    /// The exports, the smallest first.
    pub exports: Vec<Sample>,
}

impl Samples {
    /// Each instrument with its smallest exports, at most so many.
    pub fn smallest(&self, most: usize) -> Vec<(&Instrument, Vec<&Sample>)> {
        let of = |at: usize| self.exports.iter().filter(|sample| sample.instrument == at).take(most).collect();
        self.plan.instruments.iter().enumerate().map(|(at, instrument)| (instrument, of(at))).collect()
    }
}

/// Every study of the corpus.
pub fn studies() -> Vec<Samples> {
    let folder = crate::corpus::folder("");
    let mut names: Vec<String> = fs::read_dir(folder)
        .expect("the corpus is there")
        .map(|entry| entry.expect("an entry").file_name().to_string_lossy().into_owned())
        .filter(|name| crate::corpus::folder(name).join("study.toml").exists())
        .collect();
    names.sort_unstable();
    names.iter().map(|name| study(name)).collect()
}

/// One study of the corpus.
pub fn study(name: &str) -> Samples {
    let folder = crate::corpus::folder(name);
    let main = fs::read_to_string(folder.join("study.toml")).expect("a plan");
    let (plan, _) = parse(&PlanFiles { main, readers: vec![] }).expect("a sound plan");
    let mut exports = Vec::new();
    let mut folders = vec![folder.clone()];
    while let Some(next) = folders.pop() {
        for entry in fs::read_dir(next).expect("a folder") {
            let path = entry.expect("an entry").path();
            match path.is_dir() {
                true => folders.push(path),
                false => exports.extend(sample(name, &plan, path)),
            }
        }
    }
    exports.sort_by(|one, other| (one.bytes.len(), &one.name).cmp(&(other.bytes.len(), &other.name)));
    Samples { plan, exports }
}

/// An export, if its folder is an instrument's and its name one of an export. Steps keep a study's folders under
/// `drops/N`, so an instrument's folder may stand anywhere in the path.
fn sample(study: &str, plan: &Plan, path: PathBuf) -> Option<Sample> {
    let shown = path.to_string_lossy().into_owned();
    let name = path.file_name()?.to_string_lossy().into_owned();
    let of = |instrument: &Instrument| {
        let folder = format!("/{}/", instrument.folder.display());
        shown.contains(&folder) && instrument.files_glob.is_match(&name)
    };
    let instrument = plan.instruments.iter().position(of)?;
    let bytes = fs::read(&path).expect("an export");
    Some(Sample { name: format!("{study}: {name}"), instrument, bytes })
}

/// The texts of the wanted columns, in the order of their slots, with what the reader found outside the row.
pub type Cells = Vec<String>;

/// What a reader hands out of some bytes: its good rows by place.
pub type Good = BTreeMap<At, Cells>;

/// Reads bytes through, and checks what must hold of any bytes: it ends, every line is counted once, no two rows stand
/// at the same place, and every wanted column has a cell.
pub fn read_through(instrument: &Instrument, bytes: &Vec<u8>) -> Result<Good, FileFault> {
    let wanted = read::wanted(&instrument.reader);
    let mut rows = read::open(&instrument.reader, bytes)?;
    let mut row = Row::default();
    let (mut good, mut places) = (Good::new(), std::collections::BTreeSet::new());
    let mut handed_out = 0;
    while rows.next_row(&mut row)? {
        handed_out += row.lines;
        assert_eq!(rows.lines(), rows.counts().total() + handed_out, "every line is counted once");
        assert!(places.insert(row.at()), "two rows stand at the same place: {:?}", row.at());
        assert!(places.len() <= 1 + 8 * bytes.len().max(1 << 16), "there are more rows than the bytes can hold");
        if row.fault.is_none() {
            let mut cells: Cells = (0..wanted.len()).map(|slot| row.cell(slot).to_owned()).collect();
            cells.extend((0..wanted.len()).map(|slot| rows.unit(slot).unwrap_or("none").to_owned()));
            cells.push(format!(
                "{:?} {}",
                instrument.serial.as_ref().map(|it| rows.preamble(&it.preamble)),
                rows.since_1904()
            ));
            good.insert(row.at(), cells);
        }
    }
    let counts: LineCounts = rows.counts();
    assert_eq!(rows.lines(), counts.total() + handed_out, "every line is counted once");
    Ok(good)
}

/// Spoils bytes as discs, lines and people do: bytes flipped, taken out, doubled, put in, and pieces moved.
pub fn spoil(bytes: &[u8], chance: &mut Chance) -> Vec<u8> {
    const WORDS: [&[u8]; 12] =
        [b"\"", b"\n", b"\r", b"\0", b";", b",", b"{", b"]", b"<", b"&#0;", b"\xEF\xBB\xBF", b"\xFF\xFE"];
    let mut spoilt = bytes.to_vec();
    for _ in 0..=chance.below(4) {
        let length = spoilt.len() as u64;
        let at = |chance: &mut Chance| chance.below(length + 1) as usize;
        let (one, other) = (at(chance), at(chance));
        let (from, to) = (one.min(other), one.max(other).min(one.min(other) + 64));
        match chance.below(6) {
            0 if from < spoilt.len() => spoilt[from] ^= 1 << chance.below(8),
            1 => drop(spoilt.drain(from..to)),
            2 => {
                let piece = spoilt[from..to].to_vec();
                spoilt.splice(to..to, piece).for_each(drop);
            }
            3 => {
                let word = WORDS[chance.below(WORDS.len() as u64) as usize];
                spoilt.splice(from..from, word.iter().copied()).for_each(drop);
            }
            4 => spoilt.truncate(from),
            _ if from < spoilt.len() => spoilt[from] = chance.below(256) as u8,
            _ => {}
        }
    }
    spoilt
}

/// The corpus' instruments of one format.
pub struct ByFormat(Vec<(Samples, usize)>);

/// The corpus' instruments whose exports have this format, as the plan names it.
pub fn of_format(format: &str) -> ByFormat {
    let mut found = Vec::new();
    for study in studies() {
        let fitting = |at: &usize| study.plan.instruments[*at].reader.format.name() == format;
        let places: Vec<usize> = (0..study.plan.instruments.len()).filter(fitting).collect();
        found.extend(places.first().map(|at| (study, *at)));
    }
    assert!(!found.is_empty(), "no study of the corpus has the format {format}");
    ByFormat(found)
}

impl ByFormat {
    /// Reads bytes by the reader that their first byte chooses.
    pub fn try_bytes(&self, bytes: &[u8]) {
        let Some((first, rest)) = bytes.split_first() else { return };
        let (study, at) = &self.0[usize::from(*first) % self.0.len()];
        // What comes of it does not matter; that it ends, counts every line and does not panic does.
        let _ = read_through(&study.plan.instruments[*at], &rest.to_vec());
    }

    /// What a fuzzer begins with: each reader's smallest exports, with the byte that chooses the reader before them.
    pub fn seeds(&self, most: usize) -> Vec<Vec<u8>> {
        let mut seeds = Vec::new();
        for (index, (study, at)) in self.0.iter().enumerate() {
            let own = study.exports.iter().filter(|sample| sample.instrument == *at && !sample.bytes.is_empty());
            seeds.extend(own.take(most).map(|sample| [&[index as u8], sample.bytes.as_slice()].concat()));
        }
        seeds
    }
}
